"""A larger conductor or transformer as an alternative: the one that buys most.

Sizes are the workbook's own: a line takes the conductor with the next larger rating and less
resistance, a transformer the next kva of the sheet with the same voltages.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from feederhost.errors import NoSolutionError
from feederhost.feeder.branches import Branches, line_constants, no_branches, place_branches
from feederhost.feeder.model import Feeder
from feederhost.feeder.tables import Tables
from feederhost.feeder.topology import Topology
from feederhost.flow.tree import Floats
from feederhost.schema import Criterion, Proof
from feederhost.study.nodal import rounded_down
from feederhost.study.queue.costs import Work, priced
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
from feederhost.study.queue.regulation import nodes_between
from feederhost.study.queue.screen_data import ScreenData, screen_data
from feederhost.study.queue.screening import trial
from feederhost.study.queue.stops import Line

CONDUCTOR, TRANSFORMER = "larger_conductor", "larger_transformer"
_VOLTAGE = (Criterion.VOLTAGE_HIGH, Criterion.VOLTAGE_LOW, Criterion.VOLTAGE_CHANGE)
_RATED = {Criterion.LINE_RATING: CONDUCTOR, Criterion.TRANSFORMER_RATING: TRANSFORMER}
Row = dict[str, Any]


@dataclass(frozen=True, eq=False)
class Upgrade:
    """One branch with its next larger size; ``row`` is what its row would say."""

    node: int
    remedy: str
    setting: str
    row: Row
    work: Work


def upgrade(ask: Ask) -> Remedy | None:
    """Offer the larger conductor or transformer that buys most; None where none can help.

    Limits at the head and of a regulator are no matter of lines and transformers.
    """
    criterion = ask.stop.criterion
    if criterion not in (*_VOLTAGE, *_RATED, Criterion.AC_CHECK):
        return None
    kind = _RATED.get(criterion, CONDUCTOR) if criterion is not None else CONDUCTOR
    found = upgrades_of(ask)
    if not found:
        return remedy(ask, kind, "", "the workbook's library has no larger size for what stops it")
    feeders = upgraded(ask, found)
    over = duties_over(ask, feeders)
    barred = [f"{u.setting} would put {what}" for u, what in zip(found, over, strict=True) if what]
    if _devices_known(ask) and ask.feeder.z_source is None:
        barred.append("fault duty is not checked: short_circuit_mva is blank")
    kept = [i for i, what in enumerate(over) if not what]
    trials = [
        Trial(found[i].setting, feeders[i], ask.line.sites, restudied(feeders[i])) for i in kept
    ]
    for number, stop in carried(ask, trials, ask.line.reach, ask.least()):
        own = found[kept[number]]
        answer = _answer(ask, trials[number], own, stop.rating, str(stop.criterion or ""), barred)
        if answer is not None:
            return priced(answer, ask.tables, own.work)
    note = joined("no single larger size carries more than the smaller size", *barred)
    return remedy(ask, kind, "", note)


def _answer(
    ask: Ask, trial: Trial, own: Upgrade, rating: float, criterion: str, barred: list[str]
) -> Remedy | None:
    """Check the best upgrade by AC in every case; None where it does not pass."""
    size, proof = ask.site.asked, Proof.NOT_NEEDED
    if rating < size:
        size, proof = rounded_down(ask.feeder, rating), Proof.AC_ONLY
    else:
        criterion = ""
    if size <= ask.smaller:
        return None
    try:
        changed = whole_line(ask, trial)
    except NoSolutionError:
        return None
    if not leaves_others(ask, changed) or not passes(changed, ask, size):
        return None
    note = joined(*barred)
    return offered(remedy(ask, own.remedy, own.setting, note), ask, size, criterion, str(proof))


def duties_over(ask: Ask, feeders: list[Feeder]) -> list[str]:
    """Say which device each changed feeder puts beyond its duty and how far; blank: none.

    A device that sees no more than before is not the alternative's matter.  The levels are those
    of the interrupting-duty screen: source and path, all generation by nameplate added.
    """
    if not _devices_known(ask) or ask.feeder.z_source is None:
        return [""] * len(feeders)
    data = screen_data(ask.line, ask.tables)
    infeed = trial(data, ask.at, ask.sizes, ask.site.asked).infeed
    share = ask.feeder.settings.screen_interrupting_pct / 100
    return [
        _duty_over(data, screen_data(Line(own, {}, (), 0.0), ask.tables).level, infeed, share)
        for own in feeders
    ]


def _devices_known(ask: Ask) -> bool:
    lines = ask.tables.sheets["lines"]
    return bool(lines["interrupting_a"].notna().any())


def _duty_over(data: ScreenData, level: Floats | None, infeed: float, share: float) -> str:
    assert level is not None and data.level is not None  # noqa: PT018
    for device in data.devices:
        duty = (float(level[device.node]) + infeed) / device.capability
        if level[device.node] > data.level[device.node] and duty > share:
            return f"{device.name} at {100 * duty:.0f} % of its interrupting capability"
    return ""


def upgrades_of(ask: Ask) -> list[Upgrade]:
    """Next larger sizes that may lift the limit, source outwards.

    A rating: the element itself; a voltage: every element on the way to it.
    """
    tables, feeder = ask.tables, ask.feeder
    nodes = nodes_between(ask)
    stop = ask.stop
    if stop.criterion in _RATED and stop.posed is not None and stop.limit >= 0:
        nodes = [int(stop.posed.system.limits.element[stop.limit]) - stop.posed.shift]
    lines, library = dict(tables.rows("lines")), conductors(tables)
    units = dict(tables.rows("transformers"))
    hertz = next(cells["frequency_hz"] for _, cells in tables.rows("source"))
    found = []
    for k in nodes:
        edge = feeder.edges[k]
        own = None
        if edge is not None and edge.kind == "line":
            own = _larger_line(k, lines[edge.row], library, hertz)
        elif edge is not None and edge.kind == "transformer":
            own = _larger_unit(k, units[edge.row], list(units.values()))
        if own is not None:
            found.append(own)
    return found


def conductors(tables: Tables) -> dict[str, Row]:
    """Return the library of conductors by name."""
    return {cells["conductor"]: cells for _, cells in tables.rows("conductors")}


def _larger_line(k: int, cells: Row, library: Mapping[str, Row], hertz: float) -> Upgrade | None:
    length = cells["length_km"]
    if math.isnan(length) or length <= 0:
        return None
    known = dict(library)
    impedance, _ = line_constants(cells, known, hertz)
    rating = cells["rating_a"]
    if math.isnan(rating):
        rating = known.get(cells["conductor"], {}).get("rating_a", math.inf)
    # The line as built of each conductor: length and name stay, its own constants go.
    blank = {key: math.nan for key in cells if key.endswith(("_ohm", "_per_km", "rating_a"))}
    choices = []
    for name, own in known.items():
        row = {**cells, **blank, "conductor": name}
        z, _ = line_constants(row, known, hertz)
        larger = own["rating_a"] > rating or (math.isinf(rating) and math.isfinite(own["rating_a"]))
        if larger and math.isfinite(own["rating_a"]) and 0 < z.real < impedance.real:
            choices.append((own["rating_a"], -z.real, name, row))
    if not choices:
        return None
    # Beside a line without a rating the next size is that with the next smaller resistance.
    by_rating = not math.isinf(rating)
    _, _, name, row = min(choices, key=lambda c: (c[0], c[1]) if by_rating else (c[1], c[0]))
    old = cells["conductor"] or "as built"
    setting = f"line {cells['line']}: {old} -> {name}"
    return Upgrade(k, CONDUCTOR, setting, row, Work(old, name, length_km=length))


def _larger_unit(k: int, cells: Row, sheet: list[Row]) -> Upgrade | None:
    same = [
        own for own in sheet
        if own["kva"] > cells["kva"]
        and all(own[key] == cells[key] for key in ("kv_primary", "kv_secondary"))
    ]  # fmt: skip
    if not same:
        return None
    larger = min(same, key=lambda own: own["kva"])
    copied = {key: larger[key] for key in ("kva", "z_pct", "x_over_r", "r_pct", "x_pct")}
    row = {**cells, **copied, "no_load_kw": larger["no_load_kw"]}
    old, new = (f"{own['kva']:g} kVA" for own in (cells, larger))
    setting = f"transformer {cells['transformer']}: {old} -> {new}"
    return Upgrade(k, TRANSFORMER, setting, row, Work(old, new, kva=larger["kva"]))


def upgraded(ask: Ask, found: list[Upgrade]) -> list[Feeder]:
    """Return the feeder with each upgrade alone, per unit by the way every branch is placed."""
    feeder, tables = ask.feeder, ask.tables
    sheets = {name: tables.sheets[name] for name in tables.sheets}
    placed_rows = [(feeder.edges[u.node], u.row) for u in found]
    for name in ("lines", "transformers"):
        own = {e.row: row for e, row in placed_rows if e is not None and e.sheet == name}
        sheets[name] = _with_rows(sheets[name], own)
    changed = replace(tables, sheets=sheets)
    nodes = {u.node for u in found}
    parent = feeder.tree.parent
    topology = Topology(
        nodes=feeder.nodes,
        parent=tuple(parent.tolist()),
        edges=tuple(edge if k in nodes else None for k, edge in enumerate(feeder.edges)),
        forward=tuple(
            edge is None or edge.from_node == feeder.nodes[int(parent[k])]
            for k, edge in enumerate(feeder.edges)
        ),
    )
    placed = no_branches(len(feeder.nodes))
    source = next(cells for _, cells in tables.rows("source"))
    place_branches(placed, changed, topology, feeder.kv, source)
    return [_with_branch(feeder, placed, u.node) for u in found]


def _with_rows(table: pd.DataFrame, rows: Mapping[int, Row]) -> pd.DataFrame:
    """Return a checked table with some rows replaced."""
    changed = table.copy()
    for number, row in rows.items():
        for key, value in row.items():
            changed.at[number, key] = value
    return changed


def _with_branch(feeder: Feeder, placed: Branches, k: int) -> Feeder:
    """Return the feeder with the branch above one node replaced."""

    def put(old: np.ndarray, new: np.ndarray) -> np.ndarray:
        changed = np.array(old)
        changed[k] = new[k]
        return changed

    network = feeder.network
    return replace(
        feeder,
        network=replace(
            network,
            z=put(network.z, placed.z),
            y_from=put(network.y_from, placed.y_from),
            y_to=put(network.y_to, placed.y_to),
        ),
        ratio=put(feeder.ratio, placed.ratio),
        rating=put(feeder.rating, placed.rating),
    )
