"""Regulator setpoints, fixed taps and transformer taps as alternatives.

They are not the applicant's to set: each is marked as a proposal to the settings' owner, and
offered only where it carries what is asked, breaks nothing in any base case and leaves the
earlier requests of both directions within their limits.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from feederhost.errors import NoSolutionError
from feederhost.feeder.model import Feeder
from feederhost.flow.taps import Regulator
from feederhost.flow.tree import path
from feederhost.schema import Criterion, Proof
from feederhost.study.queue.offers import (
    Ask,
    Remedy,
    Trial,
    carried,
    joined,
    leaves_others,
    offered,
    passes,
    remedy,
    restudied,
    whole_line,
)

REGULATOR_SETTING = "regulator_setting"
_OWNER = "proposal to the settings' owner"


@dataclass(frozen=True, eq=False)
class Setting:
    """A setting to try; ``step`` counts how far it is from the present one."""

    text: str
    step: int
    feeder: Feeder


def regulator_setting(ask: Ask) -> Remedy | None:
    """Offer the setpoint or tap nearest to the present one at which what is asked fits.

    None where the limit met is no voltage, or no setting stands between the source and it.
    """
    found = settings_to_try(ask)
    if not found:
        return None
    trials = [Trial(s.text, s.feeder, ask.line.sites, restudied(s.feeder)) for s in found]
    whole = ask.site.asked
    refused = ""
    for number, _ in carried(ask, trials, 0.0, math.inf):
        own = remedy(ask, REGULATOR_SETTING, found[number].text)
        try:
            changed = whole_line(ask, trials[number])
        except NoSolutionError:
            continue
        if not leaves_others(ask, changed):
            refused = refused or f"{own.setting} would break a limit elsewhere"
            continue
        if passes(changed, ask, whole):
            return offered(replace(own, note=_OWNER), ask, whole, "", str(Proof.NOT_NEEDED))
    note = joined("no setting within range carries what is asked", refused)
    return remedy(ask, REGULATOR_SETTING, "", note)


def settings_to_try(ask: Ask) -> list[Setting]:
    """List settings on the way to the limit that move its voltage, nearest to the present first."""
    if ask.stop.criterion is Criterion.VOLTAGE_HIGH:
        side = -1
    elif ask.stop.criterion is Criterion.VOLTAGE_LOW:
        side = 1
    else:
        return []
    feeder, on_path = ask.feeder, nodes_between(ask)
    regulators = {r.node: i for i, r in enumerate(feeder.regulators)}
    found: list[Setting] = []
    # From the request outwards: the nearer the setting, the fewer customers it moves.
    for k in reversed(on_path):
        edge = feeder.edges[k]
        if k in regulators:
            found += _regulator_settings(feeder, regulators[k], side)
        elif edge is not None and edge.kind == "transformer":
            taps = {row: cells["tap_pu"] for row, cells in ask.tables.rows("transformers")}
            found += _transformer_taps(feeder, k, taps[edge.row], side)
    return sorted(found, key=lambda s: s.step)


def nodes_between(ask: Ask) -> list[int]:
    """Nodes from the source to the request and to where the limit is met, source first."""
    nodes = set(path(ask.feeder.tree, ask.site.node))
    if ask.stop.posed is not None and ask.stop.limit >= 0:
        limits = ask.stop.posed.system.limits
        met = int(limits.element[ask.stop.limit]) - ask.stop.posed.shift
        nodes |= set(path(ask.feeder.tree, met))
    return sorted(nodes)


def _regulator_settings(feeder: Feeder, number: int, side: int) -> list[Setting]:
    """Setpoints whose band stays within the limits of the node, or fixed taps in range."""
    own, settings = feeder.regulators[number], feeder.settings
    edge = feeder.edges[own.node]
    name = f"regulator {edge.name if edge else ''}"
    found: list[Setting] = []
    step = 1
    while True:
        if own.moves:
            new = own.setpoint + side * step * settings.setpoint_step
            low = float(feeder.v_min[own.node].max()) + own.bandwidth / 2
            high = float(feeder.v_max[own.node].min()) - own.bandwidth / 2
            within = low <= new <= high
            text = f"{name}: setpoint {own.setpoint:.4g} -> {new:.4g} pu"
            changed = replace(own, setpoint=new)
        else:
            new = own.fixed + side * step
            within = abs(new) <= own.steps / 2
            text = f"{name}: tap {own.fixed:+g} -> {new:+g}"
            changed = replace(own, fixed=new)
        if not within:
            return found
        found.append(Setting(text, step, _with_regulator(feeder, number, changed)))
        step += 1


def _with_regulator(feeder: Feeder, number: int, own: Regulator) -> Feeder:
    every = tuple(own if i == number else r for i, r in enumerate(feeder.regulators))
    return replace(feeder, regulators=every)


def _transformer_taps(feeder: Feeder, k: int, tap: float, side: int) -> list[Setting]:
    """Off-circuit taps that move the voltage behind the transformer to one side."""
    settings, edge = feeder.settings, feeder.edges[k]
    assert edge is not None
    forward = edge.from_node == feeder.nodes[int(feeder.tree.parent[k])]
    towards = -side if forward else side  # a larger tap lowers the secondary
    found: list[Setting] = []
    for position in range(-settings.tap_positions, settings.tap_positions + 1):
        new = 1 + position * settings.tap_step_pct / 100
        steps = round(towards * (new - tap) / settings.tap_step_pct * 100)
        if steps <= 0:
            continue
        text = f"transformer {edge.name}: tap_pu {tap:.4g} -> {new:.4g}"
        found.append(Setting(text, steps, _with_tap(feeder, k, tap, new, forward)))
    return found


def _with_tap(feeder: Feeder, k: int, tap: float, new: float, forward: bool) -> Feeder:
    """Return the feeder with one tap moved; seen from the secondary z follows tap squared."""
    ratio = np.array(feeder.ratio)
    ratio[k] = 1 / new if forward else new
    z = np.array(feeder.network.z)
    if not forward:
        z[k] *= (new / tap) ** 2
    return replace(feeder, ratio=ratio, network=replace(feeder.network, z=z))
