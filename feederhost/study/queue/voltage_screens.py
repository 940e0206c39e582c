"""Screens solved by AC power flow: voltage changes on loss, and a failed export control.

Taps are frozen.  Where the source impedance is given, the EMF behind it is held at what gave
the source its voltage before the change, so that the source node moves too.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from feederhost.feeder.model import EXPORT, IMPORT
from feederhost.flow.network import behind_loading
from feederhost.flow.sweep import sweep
from feederhost.flow.tree import Complexes, Floats
from feederhost.study.cases import BOTH, CaseStudy
from feederhost.study.queue.screening import SOURCES, Screen, Trial, at_most
from feederhost.study.queue.sites import power_of
from feederhost.study.queue.stops import least_slack

ALONE, TOGETHER = CHANGES = ("voltage change", "voltage change of all generation")
EXPORT_CONTROL = "export control fails"
_LIMIT = SOURCES["voltage_change_mv_pct"]


@dataclass(frozen=True)
class Change:
    """Largest voltage change found: share of what is allowed, in percent of nominal, where.

    ``share`` is infinite where a case has no solution.
    """

    share: float = -math.inf
    percent: float = math.nan
    allowed: float = math.nan
    node: int = 0
    case: str = ""


def voltage_changes(trial: Trial) -> tuple[Screen, Screen]:
    """Voltage change when the request is lost, and when all generation is lost with it.

    The request alone: around the voltages with the queue in place, as in the power flow, and
    for storage also its swing from full charge to full discharge.  All generation: existing,
    earlier and this, from all of it running to none.
    """
    rule = f"common practice, at the limits of {_LIMIT}"
    if not np.isfinite(trial.feeder.change).any():
        off = ("voltage_change limits: switched off in `limits`",)
        return (
            trial.screen(ALONE, _LIMIT, unit="%", missing=off, counted=False),
            trial.screen(TOGETHER, rule, unit="%", missing=off, counted=False),
        )
    alone, together = _largest(trial)
    return _screen(trial, ALONE, _LIMIT, alone), _screen(trial, TOGETHER, rule, together)


def export_control(trial: Trial) -> Screen:
    """Power flow at nameplate: every limit has to hold with the agreed export limit not kept."""
    room = least_slack(
        trial.data.line, trial.at, np.array([trial.size]), [trial.sizes], limited=False
    )  # fmt: skip
    agreed = trial.feeder.kw(trial.site.export_limit)
    return trial.screen(
        EXPORT_CONTROL, "project choice: one failure of a control is looked at",
        quantity=trial.feeder.kw(trial.own), unit="kW", holds=bool(room[0] >= 0),
        detail=f"all power flow limits at nameplate, {agreed:,.6g} kW agreed",
    )  # fmt: skip


def _screen(trial: Trial, name: str, source: str, found: Change) -> Screen:
    if found.share == -math.inf:
        return trial.screen(name, source, unit="%", missing=("a case in which it exports",))
    if found.share == math.inf:
        return trial.screen(
            name, source, unit="%", holds=False,
            detail=f"no power flow solution in case {found.case}",
        )  # fmt: skip
    return trial.screen(
        name, source, quantity=found.percent, threshold=found.allowed, unit="%",
        holds=at_most(found.share, 1.0, trial.settings),
        detail=f"at {trial.feeder.nodes[found.node]}, case {found.case}",
    )  # fmt: skip


def _largest(trial: Trial) -> tuple[Change, Change]:
    """Return the largest change of the request alone and of all generation over the cases.

    Cases go by falling output.  One is left out where its loss of power, at a slope steeper by
    the spread of Settings than any seen, could not reach what is found already.
    """
    spread, studies = trial.settings.screen_slope_spread, trial.data.line.studies[EXPORT]
    drawn = _drawn(trial)
    own = np.abs(drawn[-1])
    there = np.abs(trial.data.running).sum(axis=0) @ trial.data.output
    lost = np.stack([own, np.abs(drawn).sum(axis=0) + there])
    best = [Change(), Change()]
    slope = np.zeros(2)
    for i in np.argsort(-own, kind="stable"):
        shares = np.array([change.share for change in best])
        if own[i] == 0 or (shares == math.inf).any():
            break
        if (lost[:, i] * slope * spread <= shares).all():
            continue
        found = _changes(trial, studies[i], drawn[:, i], trial.data.output[:, i])
        best = [
            max(pair, key=lambda change: change.share) for pair in zip(best, found, strict=True)
        ]
        slope = np.maximum(slope, [f.share / p for f, p in zip(found, lost[:, i], strict=True)])
    return best[0], best[1]


def _drawn(trial: Trial) -> Complexes:
    """Power drawn by the earlier requests and, last, by this one, exporting, (sites, cases)."""
    data = trial.data
    rows = [*trial.sizes, trial.at]
    size = np.array([*trial.sizes.values(), trial.size])
    drawn: Complexes = data.draw[rows] * np.minimum(size[:, None], data.ceiling[rows])
    return drawn


def _changes(
    trial: Trial, study: CaseStudy, drawn: Complexes, output: Floats
) -> tuple[Change, Change]:
    """Solve one case before and after each loss; what requests draw (sites,), output of what is."""
    feeder, settings, case = trial.feeder, trial.settings, study.case
    network, loading = study.posed[0].system.network, study.held.loading
    without = np.array(loading.power)
    nodes = [trial.data.line.sites[i].node for i in trial.sizes]
    np.add.at(without, nodes, drawn[:-1, None, None] / network.phases)
    whole = _with(trial, without, drawn[-1])
    power = np.concatenate([without, whole], axis=2)
    before = sweep(network, loading, settings, power, np.repeat(study.held.point.V, 2, axis=2))
    # What follows each change: the request comes, everything goes, storage turns round.
    there = (trial.data.running @ output)[:, None, None] / network.phases
    after = [whole, loading.power - there, *_swing(trial, study, without)]
    held = [0, 1, *[0] * (len(after) - 2)]
    power, start, shift = np.concatenate(after, axis=2), before.V[..., held], 0
    if len(study.posed) > 1:
        assert feeder.z_source is not None
        shift, network = 1, study.posed[1].system.network
        emf = before.V[0] + feeder.z_source @ before.J[0]
        loading = behind_loading(loading, emf[:, held])
        power = np.concatenate([np.zeros((1, *power.shape[1:])), power])
        start = np.concatenate([loading.source[None], start])
    point = sweep(network, loading, settings, power, start)
    if not (before.solved.all() and point.solved.all()):
        lost = Change(math.inf, case=case.name)
        return lost, lost
    size, first = np.abs(point.V[shift:]), np.abs(before.V)
    moved = [size[..., 0] - first[..., 0], size[..., 1] - first[..., 1]]
    alone = _worst(trial, study, moved[0])
    if len(after) > 2:
        swung = _worst(trial, study, size[..., 2] - size[..., 3])
        alone = max(alone, swung, key=lambda change: change.share)
    return alone, _worst(trial, study, moved[1])


def _with(trial: Trial, power: Complexes, drawn: complex) -> Complexes:
    """Add what is drawn at the node of the request."""
    added = power.copy()
    added[trial.site.node] += drawn / trial.feeder.network.phases
    return added


def _swing(trial: Trial, study: CaseStudy, without: Complexes) -> list[Complexes]:
    """Power drawn at full discharge and at full charge of the site's storage; none: nothing."""
    parts = tuple(p for p in trial.site.parts if p.technology.direction == BOTH)
    if not parts:
        return []
    stored = replace(trial.site, parts=parts)
    size = trial.size * stored.asked / trial.site.asked
    return [
        _with(trial, without, power_of(stored, size, study.case, way)) for way in (EXPORT, IMPORT)
    ]


def _worst(trial: Trial, study: CaseStudy, moved: Floats) -> Change:
    """Find the node whose change (n, phases), referred, takes most of what it may."""
    moved = np.abs(moved) * study.held.network.gain
    share = moved / trial.feeder.change
    node = int(share.max(axis=1).argmax())
    phase = int(share[node].argmax())
    allowed = float(trial.feeder.change[node, phase])
    return Change(
        float(share[node, phase]), 100 * float(moved[node, phase]), 100 * allowed, node,
        study.case.name,
    )  # fmt: skip
