"""Requests as sites: several rows with one id stand behind one inverter and one connection."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from feederhost.feeder.model import EXPORT, IMPORT, Case, Feeder, Technology
from feederhost.feeder.perunit import reactive_share
from feederhost.feeder.tables import Tables
from feederhost.feeder.units import per_unit
from feederhost.flow.tree import Complexes
from feederhost.study.cases import BOTH, case_scale, plant_draw


@dataclass(frozen=True)
class Part:
    """One row of a site: technology, AC rating per unit, reactive share (see Technology)."""

    technology: Technology
    rating: float
    reactive: float
    kw_dc: float


@dataclass(frozen=True)
class Site:
    """One request.

    Attributes
    ----------
    node : int
        Number of the node, -1 where it is unknown.
    export_limit, inverter : float
        Agreed export limit and inverter rating, per unit; inf: none.
    fault : str
        Why it cannot be judged; blank: it can.
    """

    request: str
    order: int
    received: str
    node: int
    node_name: str
    phases: str
    parts: tuple[Part, ...]
    export_limit: float
    inverter: float
    flags: tuple[str, ...]
    fault: str

    @property
    def asked(self) -> float:
        """Sum of AC ratings asked for, per unit."""
        return sum(p.rating for p in self.parts)

    @property
    def technology(self) -> str:
        """Technologies of the site, as one word."""
        return " + ".join(dict.fromkeys(p.technology.name for p in self.parts))

    @property
    def ways(self) -> tuple[str, ...]:
        """Directions in which the site runs."""
        directions = {p.technology.direction for p in self.parts}
        return tuple(way for way in (EXPORT, IMPORT) if directions & {way, BOTH})


def draw_of(site: Site, case: Case, way: str) -> complex:
    """Power drawn in a case per unit of the site's rating, one direction running.

    Parts of the other direction stand at zero: they never help.
    """
    drawn = 0j
    for part in site.parts:
        if part.technology.direction in (way, BOTH):
            share = part.rating / site.asked * case_scale(case, part.technology)
            drawn += share * plant_draw(way, part.reactive)
    return drawn


def ceiling_of(site: Site, case: Case, way: str, *, limited: bool = True) -> float:
    """Rating beyond which the site's power in a case grows no more, per unit.

    The inverter caps the apparent power, an agreed limit (``limited``) the export.
    """
    drawn = draw_of(site, case, way)
    ceiling = math.inf
    if abs(drawn) > 0:
        ceiling = min(ceiling, site.inverter / abs(drawn))
    if limited and way == EXPORT and drawn.real < 0:
        ceiling = min(ceiling, site.export_limit / -drawn.real)
    return ceiling


def reserved_power(
    feeder: Feeder, sizes: Mapping[int, float], sites: tuple[Site, ...], case: Case, way: str
) -> Complexes:
    """Power that sites at their sizes draw in one direction, (n, phases, 1)."""
    phases = feeder.network.phases
    power = np.zeros((feeder.tree.size, phases, 1), dtype=complex)
    for at, size in sizes.items():
        site = sites[at]
        power[site.node] += power_of(site, size, case, way) / phases
    return power


def power_of(site: Site, size: float, case: Case, way: str, *, limited: bool = True) -> complex:
    """Power a site of a size draws in a case."""
    ceiling = ceiling_of(site, case, way, limited=limited)
    return draw_of(site, case, way) * min(size, ceiling)


def read_sites(tables: Tables, feeder: Feeder) -> tuple[tuple[Site, ...], tuple[str, ...]]:
    """Group the rows of `requests` into sites in queue order; withdrawn rows are skipped.

    Returns
    -------
    sites, notes : tuple of Site, tuple of str
        Notes name the withdrawn requests.
    """
    groups: dict[str, list[tuple[int, dict[str, Any]]]] = {}
    notes = []
    for row, cells in tables.rows("requests"):
        name = cells["request"] or f"row {row}"
        if cells["status"] == "withdrawn":
            notes.append(f"{name} (row {row}) is withdrawn and skipped")
            continue
        groups.setdefault(name, []).append((row, cells))
    # Blank dates come last, ties keep the row order.
    ranked = sorted(groups.items(), key=lambda g: (_received(g[1]) == "", _received(g[1])))
    sites = tuple(
        _site(name, order, rows, tables, feeder)
        for order, (name, rows) in enumerate(ranked, start=1)
    )
    return sites, tuple(notes)


def _received(rows: list[tuple[int, dict[str, Any]]]) -> str:
    """Earliest date of a site's rows; blank where none is given."""
    return min((c["received"] for _, c in rows if c["received"]), default="")


def _site(
    name: str, order: int, rows: list[tuple[int, dict[str, Any]]], tables: Tables, feeder: Feeder
) -> Site:
    numbers = {node: k for k, node in enumerate(feeder.nodes)}
    known = {t.name: t for t in feeder.technologies}
    nodes = list(dict.fromkeys(cells["node"] for _, cells in rows))
    fault = _fault(rows, nodes, numbers, known, tables)
    parts: tuple[Part, ...] = ()
    if not fault:
        parts = tuple(_part(cells, known[cells["technology"]], feeder) for _, cells in rows)
    return Site(
        request=name,
        order=order,
        received=_received(rows),
        node=numbers.get(nodes[0], -1),
        node_name=nodes[0],
        phases=_phases(rows),
        parts=parts,
        export_limit=_least(rows, "export_limit_kw", feeder),
        inverter=_least(rows, "inverter_kva", feeder),
        flags=tuple(_flags(name, rows, tables)),
        fault=fault,
    )


def _phases(rows: list[tuple[int, dict[str, Any]]]) -> str:
    """Phases of a site: of the first row that is not on all three, else of the first row."""
    given = [str(cells["phases"]) for _, cells in rows]
    return next((p for p in given if p not in ("", "ABC")), given[0])


def _least(rows: list[tuple[int, dict[str, Any]]], key: str, feeder: Feeder) -> float:
    given = [c[key] for _, c in rows if not math.isnan(c[key])]
    return per_unit(min(given, default=math.nan), feeder.settings)


def _part(cells: dict[str, Any], technology: Technology, feeder: Feeder) -> Part:
    return Part(
        technology=technology,
        rating=per_unit(cells["kw"], feeder.settings),
        reactive=reactive_share(cells, technology.direction, technology.reactive),
        kw_dc=cells["kw_dc"],
    )


def _fault(
    rows: list[tuple[int, dict[str, Any]]],
    nodes: list[str],
    numbers: Mapping[str, int],
    known: Mapping[str, Technology],
    tables: Tables,
) -> str:
    """Say why a site cannot be judged; blank where it can."""
    faulty = sorted({row for row, _ in rows} & tables.faulty_requests)
    if faulty:
        found = [f.line() for f in tables.findings if f.sheet == "requests" and f.row in faulty]
        return "; ".join(found) or f"row {faulty[0]} has a fault"
    if len(nodes) > 1:
        return f"one request at several nodes: {', '.join(n or 'blank' for n in nodes)}"
    if nodes[0] not in numbers:
        return f"no node named {nodes[0] or 'blank'}"
    if numbers[nodes[0]] == 0:
        return "the source node itself is not judged"
    for row, cells in rows:
        if cells["technology"] not in known:
            return f"row {row}: no technology named {cells['technology'] or 'blank'}"
        if math.isnan(cells["kw"]):
            return f"row {row}: no size in kW"
    return ""


def _flags(name: str, rows: list[tuple[int, dict[str, Any]]], tables: Tables) -> list[str]:
    """Return what to know about a site that can be judged all the same."""
    flags = []
    if not all(cells["received"] for _, cells in rows):
        flags.append("no date received: judged last")
    for _, cells in rows:
        if not math.isnan(cells["kw_dc"]) and cells["kw_dc"] <= cells["kw"]:
            flags.append("kw may be the DC rating: kw_dc is not larger")
    for row, cells in tables.rows("generators"):
        same = any(
            cells["node"] == c["node"] and cells["technology"] == c["technology"]
            and cells["kw"] == c["kw"]
            for _, c in rows
        )  # fmt: skip
        if same or (cells["name"] and cells["name"] == name):
            flags.append(f"may stand in generators already (row {row})")
    return list(dict.fromkeys(flags))
