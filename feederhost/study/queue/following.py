"""A request whose inverter follows curves: what it leaves of every limit, case by case."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from feederhost.feeder.model import EXPORT, IMPORT
from feederhost.flow.curves import Curve, Inverter, Settled, settle
from feederhost.flow.limits import measure, slack
from feederhost.flow.tree import Complexes, Floats
from feederhost.schema import LIMIT_CRITERIA, Criterion
from feederhost.study.cases import BOTH, CaseStudy, Posed
from feederhost.study.queue.inverters import exports
from feederhost.study.queue.offers import Ask
from feederhost.study.queue.sites import Part, draw_of, reserved_power
from feederhost.study.queue.stops import with_queue


@dataclass(frozen=True, eq=False)
class Control:
    """The curves followed; None: that mode is off."""

    var: Curve | None = None
    watt: Curve | None = None


@dataclass(frozen=True)
class Run:
    """A case and direction in which the site runs, posed with the queue; None: no solution."""

    study: CaseStudy
    way: str
    posed: tuple[Posed, ...] | None


@dataclass(frozen=True)
class Room:
    """What m sizes leave of the limits in one case, every output looked at.

    Attributes
    ----------
    least : (m,) float
        Least slack; minus infinity without a solution or where the inverter hunts.
    delivered : (m,) float
        Export at full output over what is at hand.
    hunts : (m,) bool
    criterion : tuple of str
        The limit that leaves least.
    """

    least: Floats
    delivered: Floats
    hunts: np.ndarray
    criterion: tuple[str, ...]


def runs_of(ask: Ask) -> list[Run]:
    """Pose the cases and directions in which the site runs, the binding one first."""
    runs = []
    for way in ask.site.ways:
        for study in ask.line.studies[way]:
            if draw_of(ask.site, study.case, way) != 0:
                others = reserved_power(ask.feeder, ask.sizes, ask.line.sites, study.case, way)
                runs.append(Run(study, way, with_queue(ask.feeder, study, others)))
    runs.sort(key=lambda run: run.study is not ask.stop.study)
    return runs


def room_of(ask: Ask, run: Run, control: Control, sizes: Floats) -> Room:
    """Look at sizes (m,) of the request at every output, with the curves followed.

    Outputs are ``Settings.curve_outputs`` shares from zero to full.
    """
    m, outputs = sizes.size, ask.feeder.settings.curve_outputs
    least, delivered = np.full(m, np.inf), np.ones(m)
    hunts, criterion = np.zeros(m, dtype=bool), np.zeros(m, dtype=np.intp)
    if run.posed is None:
        return Room(-least, delivered, hunts, (str(Criterion.AC_CHECK),) * m)
    every = np.repeat(sizes, outputs)
    shares = np.tile(np.linspace(0.0, 1.0, outputs), m)
    lost = np.zeros(m, dtype=bool)
    for posed in run.posed:
        own = _follow(ask, run, posed, ask.site.parts, control, every, shares)
        limits = posed.system.limits
        value = slack(limits, measure(posed.system.network, limits, own.point))
        counts = np.flatnonzero(limits.criterion >= 0)
        value = value[counts].reshape(counts.size, m, outputs).min(axis=2)
        gone = ~own.point.solved | own.hunts
        lost |= gone.reshape(m, outputs).any(axis=1)
        hunts |= own.hunts.reshape(m, outputs).any(axis=1)
        if counts.size:
            row = value.argmin(axis=0)
            worst = value[row, np.arange(m)]
            criterion = np.where(worst < least, limits.criterion[counts[row]], criterion)
            least = np.minimum(least, worst)
        if posed.shift == 0:
            full = at_hand(ask, run, ask.site.parts, sizes)
            power = np.abs(own.power.real.reshape(m, outputs)[:, -1])
            delivered = np.divide(power, full, out=np.ones(m), where=full > 0)
    swing = _swing_room(ask, run, control, sizes)
    change = LIMIT_CRITERIA.index(Criterion.VOLTAGE_CHANGE)
    criterion = np.where(swing < least, change, criterion)
    names = (str(Criterion.AC_CHECK if gone else LIMIT_CRITERIA[c])
             for c, gone in zip(criterion, lost, strict=True))  # fmt: skip
    least = np.where(lost, -np.inf, np.minimum(least, swing))
    return Room(least, delivered, hunts, tuple(names))


def at_hand(ask: Ask, run: Run, parts: tuple[Part, ...], sizes: Floats) -> Floats:
    """Active power that the controlled ones of some parts have in a case, (m,).

    An agreed export limit is kept; the inverter's own rating is left to the curves.
    """
    controlled = replace(ask.site, parts=tuple(p for p in parts if exports(p)))
    if not controlled.parts:
        return np.zeros_like(sizes)
    unit = abs(draw_of(controlled, run.study.case, run.way).real)
    power = sizes * (unit * controlled.asked / ask.site.asked)
    return np.minimum(power, ask.site.export_limit) if run.way == EXPORT else power


def _follow(
    ask: Ask,
    run: Run,
    posed: Posed,
    parts: tuple[Part, ...],
    control: Control,
    sizes: Floats,
    shares: Floats,
) -> Settled:
    """Settle one system with parts of the site at sizes (m,) and shares (m,) of their output."""
    site, case, phases = ask.site, run.study.case, ask.feeder.network.phases
    node, sign = site.node + posed.shift, 1.0 if run.way == EXPORT else -1.0
    network, loading = posed.system.network, posed.system.loading
    power: Complexes = np.repeat(loading.power, sizes.size, axis=2).astype(complex)
    plain = replace(site, parts=tuple(p for p in parts if not exports(p)))
    if plain.parts:
        unit = draw_of(plain, case, run.way) * plain.asked / site.asked
        power[node] += unit * sizes * shares / phases
    controlled = replace(site, parts=tuple(p for p in parts if exports(p)))
    unit = draw_of(controlled, case, run.way) if controlled.parts else 0j
    rated = sizes * (controlled.asked / site.asked)
    known = math.isfinite(site.inverter)
    inverter = Inverter(
        node=node,
        available=sign * at_hand(ask, run, parts, sizes) * shares,
        ratio=unit.imag / unit.real if unit.real else 0.0,
        rated=np.full(sizes.size, site.inverter) if known else rated,
        watts=rated,
        cap=np.full(sizes.size, site.inverter),
        var=control.var,
        watt=control.watt,
    )
    return settle(network, loading, power, inverter, ask.feeder.settings)


def _swing_room(ask: Ask, run: Run, control: Control, sizes: Floats) -> Floats:
    """Least room of the voltage change when storage goes from charge to discharge, (m,).

    Infinite where there is no storage or no such limit; the curves have settled at both ends.
    """
    feeder, m = ask.feeder, sizes.size
    stored = tuple(p for p in ask.site.parts if p.technology.direction == BOTH)
    allowed = feeder.change[:, 0]
    if run.way != EXPORT or not stored or run.posed is None or not np.isfinite(allowed).any():
        return np.full(m, np.inf)
    posed, ends = run.posed[-1], []
    for way in (EXPORT, IMPORT):
        own = _follow(ask, replace(run, way=way), posed, stored, control, sizes, np.ones(m))
        size = np.abs(own.point.V[posed.shift :, 0])
        ends.append(np.where(own.point.solved & ~own.hunts, size, np.nan))
    gain = posed.system.network.gain[posed.shift :]
    first = 0 if posed.shift else 1  # the source node moves behind a source impedance only
    moved = gain[first:] * np.abs(ends[0] - ends[1])[first:]
    room = (allowed[first:, None] - moved).min(axis=0)
    return np.where(np.isnan(room), -np.inf, room)
