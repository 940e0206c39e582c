"""Plausibility of a feeder that can be read: numbers that are possible and yet hardly meant."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from feederhost.errors import Finding, Severity
from feederhost.feeder.audit_lines import audit_lines
from feederhost.feeder.audit_voltages import ROOT_3, audit_voltages
from feederhost.feeder.columns import given
from feederhost.feeder.tables import Tables, in_order
from feederhost.feeder.topology import Topology, base_kv

# Common practice: a feeder carries some 10 MW; no single row of it carries more than this.
LOAD_MOST_KW = 20_000.0
# Total load over what the first branch could carry; diversity explains a factor of two.
HEAD_OVERLOAD_MOST = 5.0
# A feeder above 1 kV that serves less than one house.
FEEDER_LEAST_KW = 1.0
# Peak load over the rating of its transformer: some units see 1.5 for short (IEEE C57.91).
TRANSFORMER_OVERLOAD_MOST = 3.0
# A power factor below 0.32.
KVAR_OVER_KW_MOST = 3.0
# Smallest capacitor cans on medium voltage are 50 kvar (common practice).
CAPACITOR_LEAST_KVAR = 1.0
# Scales are shares of the peak or of the rating; above this they are percent.
SCALE_MOST = 2.0
HOURS_OF_LEAP_YEAR = 8784.0


def audit(tables: Tables, topology: Topology) -> tuple[Finding, ...]:
    """Look for slips of unit, of sign and of scale.

    Parameters
    ----------
    tables : Tables
        Checked tables.
    topology : Topology
        The same feeder, rooted.

    Returns
    -------
    tuple of Finding
        Warnings with the figures that raised them, in sheet and row order.  Fatal is only a
        transformer that does not belong to the voltage it stands on.
    """
    settings = tables.settings
    kv = base_kv(tables, topology).tolist()
    findings = audit_lines(tables, topology, kv, settings)
    findings += audit_voltages(tables, topology, kv)
    demand = _demand(tables, topology)
    findings += _loads(tables)
    findings += _total_load(tables, topology, kv, demand)
    findings += _capacitors(tables, demand, kv[0] > settings.shared_kv)
    findings += _transformer_loading(tables, topology, demand)
    findings += _cases(tables)
    return in_order(findings)


def _demand(tables: Tables, topology: Topology) -> list[float]:
    """Return the peak demand behind every node, itself included, kVA."""
    position = {name: k for k, name in enumerate(topology.nodes)}
    kw, kvar = [0.0] * len(position), [0.0] * len(position)
    for _, cells in tables.rows("loads"):
        k = position.get(cells["node"])
        if k is not None and cells["kw"] == cells["kw"]:
            kw[k] += cells["kw"]
            kvar[k] += _kvar(cells)
    for k in range(len(position) - 1, 0, -1):
        kw[topology.parent[k]] += kw[k]
        kvar[topology.parent[k]] += kvar[k]
    return [math.hypot(p, q) for p, q in zip(kw, kvar, strict=True)]


def _kvar(cells: Mapping[str, Any]) -> float:
    if given(cells, "kvar"):
        return cells["kvar"]
    if not given(cells, "power_factor"):
        return 0.0
    sign = -1.0 if cells["vars"] == "inject" else 1.0
    return sign * cells["kw"] * math.tan(math.acos(cells["power_factor"]))


def _warning(
    tables: Tables, sheet: str, row: int, key: str, problem: str, suggestion: str
) -> Finding:
    return tables.finding(Severity.WARNING, sheet, row, key, problem, suggestion)


def _loads(tables: Tables) -> list[Finding]:
    findings: list[Finding] = []
    for sheet in ("loads", "generators"):
        for row, cells in tables.rows(sheet):
            if cells["kw"] > LOAD_MOST_KW:
                problem, hint = f"{cells['kw']:g} kW in one row", "kW entered as MW, or W as kW?"
                findings.append(_warning(tables, sheet, row, "kw", problem, hint))
    for row, cells in tables.rows("loads"):
        if abs(cells["kvar"]) > KVAR_OVER_KW_MOST * cells["kw"]:
            problem = f"{cells['kvar']:g} kvar beside {cells['kw']:g} kW"
            hint = "check the columns; a capacitor belongs in `capacitors`"
            findings.append(_warning(tables, "loads", row, "kvar", problem, hint))
    return findings


def _total_load(
    tables: Tables, topology: Topology, kv: Sequence[float], demand: Sequence[float]
) -> list[Finding]:
    findings: list[Finding] = []
    total = demand[0]
    able = _head_kva(tables, topology, kv)
    if total > HEAD_OVERLOAD_MOST * able:
        problem = f"{total:.4g} kVA of load behind branches that carry {able:.4g} kVA"
        hint = "check the units of load, source kV and rating"
        findings.append(_warning(tables, "loads", 0, "kw", problem, hint))
    if kv[0] > tables.settings.shared_kv and 0 < total < FEEDER_LEAST_KW:
        problem = f"{total:.3g} kVA of load in all on a feeder of {kv[0]:g} kV"
        findings.append(_warning(tables, "loads", 0, "kw", problem, "MW entered as kW?"))
    return findings


def _head_kva(tables: Tables, topology: Topology, kv: Sequence[float]) -> float:
    """Return what the branches that leave the source can carry, kVA; NaN where not known."""
    ratings = {cells["conductor"]: cells["rating_a"] for _, cells in tables.rows("conductors")}
    rows = {
        (sheet, row): cells
        for sheet in ("lines", "transformers", "regulators")
        for row, cells in tables.rows(sheet)
    }
    able = 0.0
    for k, edge in enumerate(topology.edges):
        if edge is None or topology.parent[k] != 0:
            continue
        cells = rows[edge.sheet, edge.row]
        if edge.kind == "transformer":
            kva = cells["kva"]
        else:
            amperes = cells["rating_a"]
            if amperes != amperes and edge.sheet == "lines":
                amperes = ratings.get(cells["conductor"], math.nan)
            kva = ROOT_3 * kv[0] * amperes
        able += kva
    return able


def _capacitors(tables: Tables, demand: Sequence[float], high: bool) -> list[Finding]:
    findings: list[Finding] = []
    total = demand[0]
    banks = [(row, c["kvar"]) for row, c in tables.rows("capacitors") if c["kvar"] == c["kvar"]]
    for row, kvar in banks:
        if high and 0 < kvar < CAPACITOR_LEAST_KVAR:
            problem = f"a bank of {kvar:g} kvar above 1 kV"
            findings.append(
                _warning(tables, "capacitors", row, "kvar", problem, "Mvar entered as kvar?")
            )
        elif 0 < total < kvar:
            problem = f"a bank of {kvar:g} kvar on a feeder with {total:.4g} kVA of load"
            hint = "kvar entered as Mvar, or var as kvar?"
            findings.append(_warning(tables, "capacitors", row, "kvar", problem, hint))
    installed = sum(kvar for _, kvar in banks)
    if not findings and 0 < total < installed:
        problem = f"{installed:g} kvar in all on a feeder with {total:.4g} kVA of load"
        hint = "check sizes, and which banks are on"
        findings.append(_warning(tables, "capacitors", 0, "kvar", problem, hint))
    return findings


def _transformer_loading(
    tables: Tables, topology: Topology, demand: Sequence[float]
) -> list[Finding]:
    findings: list[Finding] = []
    kva = {row: cells["kva"] for row, cells in tables.rows("transformers")}
    for k, edge in enumerate(topology.edges):
        if edge is None or edge.kind != "transformer":
            continue
        behind = demand[k]
        if behind > TRANSFORMER_OVERLOAD_MOST * kva[edge.row]:
            problem = f"{kva[edge.row]:g} kVA, with {behind:.4g} kVA of peak load behind it"
            hint = "check the unit of the rating, and the loads"
            findings.append(_warning(tables, "transformers", edge.row, "kva", problem, hint))
    return findings


def _cases(tables: Tables) -> list[Finding]:
    findings: list[Finding] = []
    table = tables.sheets["cases"]
    for key in (k for k in table.columns if k.endswith("_scale") or k.startswith("load_scale.")):
        large = table.index[table[key] > SCALE_MOST].tolist()
        if large:
            problem = f"above {SCALE_MOST:g} in {len(large)} of {len(table)} cases"
            hint = "percent? scales are shares of one"
            findings.append(_warning(tables, "cases", large[0], key, problem, hint))
    hours = sum(h for h in table["hours"].tolist() if h == h)
    if hours > HOURS_OF_LEAP_YEAR:
        problem = f"{hours:g} hours in all: more than a year has"
        findings.append(_warning(tables, "cases", 0, "hours", problem, "check the hours"))
    return findings
