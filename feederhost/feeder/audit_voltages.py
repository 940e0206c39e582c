"""Plausibility of voltages: line to line or to neutral, volts or kV, per unit or percent."""

from __future__ import annotations

import math
from collections.abc import Sequence

from feederhost.errors import Finding, Severity
from feederhost.feeder.names import fold
from feederhost.feeder.tables import Tables
from feederhost.feeder.topology import Topology

ROOT_3 = math.sqrt(3.0)
# Nominal voltages, line to line (ANSI C84.1 Table 1 and IEC 60038, from memory), whose line to
# neutral value is not a nominal line to line voltage itself.
STANDARD_KV = (
    0.208, 0.4, 0.48, 0.6, 11.0, 12.47, 13.2, 13.8, 20.0, 24.94, 33.0, 34.5,
)  # fmt: skip
# Nameplates round 7.199 to 7.2 and 19.919 to 19.9.
STANDARD_WITHIN = 0.005
# Distribution feeders end below 100 kV; anything above was meant in volts.
KV_MOST = 100.0
# Rated and base voltage: neighbouring classes (12.47 and 13.8 kV) are 11 % apart.
KV_MISMATCH_WARNED, KV_MISMATCH_FATAL = 0.15, 0.30
# How closely a mismatch must meet the square root of three to be called by its name.
ROOT_3_WITHIN = 0.10
# ANSI C84.1 Range B spans 0.867 to 1.058, IEEE 1547 continuous operation 0.88 to 1.10.
PU_BOUNDS = (0.8, 1.2)
# The same band in volts on the 120 V base, above which 100 % and 105 % already stand.
VOLTS_BOUNDS = (108.0, 144.0)
PERCENT_BOUNDS = (80.0, 108.0)
# IEEE C57.12.00 and common practice: 1 % (small pole units) to some 20 % (large banks).
Z_BOUNDS_PCT = (0.2, 25.0)

_KV_COLUMNS = (
    ("source", "kv"), ("source", "voltage_kv"), ("nodes", "kv"), ("transformers", "kv_primary"),
    ("transformers", "kv_secondary"), ("regulators", "setpoint_kv"),
    ("cases", "source_voltage_kv"), ("nodes", "v_min_kv"), ("nodes", "v_max_kv"),
)  # fmt: skip
_PU_COLUMNS = (
    ("source", "voltage_pu"), ("nodes", "v_min_pu"), ("nodes", "v_max_pu"),
    ("regulators", "setpoint_pu"), ("cases", "source_voltage_pu"),
)  # fmt: skip
_PU_LIMITS = ("v_min_pu", "v_max_pu", "v_min_primary_pu", "v_max_primary_pu")
# Percent limits, and the value up to which they look like a share of one.
_PERCENT_LIMITS = {
    "voltage_change_mv_pct": 0.1, "voltage_change_lv_pct": 0.1, "unbalance_pct": 0.1,
    "line_loading_pct": 2.0, "transformer_loading_pct": 2.0,
}  # fmt: skip


def audit_voltages(tables: Tables, topology: Topology, kv: Sequence[float]) -> list[Finding]:
    """Return what is unlikely about voltages; ``kv`` is the base of every node.

    A transformer whose rated voltage is more than 30 % off the base it stands on, and not by
    the square root of three, is fatal: no per-unit value below it would mean anything.
    """
    return [
        *_volts(tables),
        *_line_to_neutral(tables),
        *_per_unit(tables),
        *_transformers(tables, topology, kv),
        *_at_nodes(tables, topology, kv),
        *_impedance_percent(tables),
        *_limits(tables),
        *_bands(tables),
    ]


def _warning(
    tables: Tables, sheet: str, row: int, key: str, problem: str, suggestion: str
) -> Finding:
    return tables.finding(Severity.WARNING, sheet, row, key, problem, suggestion)


def _volts(tables: Tables) -> list[Finding]:
    return [
        _warning(tables, sheet, row, key, f"{cells[key]:g} kV on a feeder", "volts entered as kV?")
        for sheet, key in _KV_COLUMNS
        for row, cells in tables.rows(sheet)
        if cells[key] > KV_MOST
    ]


def _line_to_neutral(tables: Tables) -> list[Finding]:
    findings: list[Finding] = []
    for sheet, key in (("source", "kv"), ("transformers", "kv_secondary")):
        for row, cells in tables.rows(sheet):
            meant = [kv for kv in STANDARD_KV if _near(cells[key] * ROOT_3, kv, STANDARD_WITHIN)]
            # A one-phase winding is given as on its nameplate.
            if meant and len(cells.get("phases", "")) != 1:
                problem = f"{cells[key]:g} kV is {meant[0]:g} kV line to neutral"
                hint = f"voltages are line to line: {meant[0]:g}?"
                findings.append(_warning(tables, sheet, row, key, problem, hint))
    return findings


def _per_unit(tables: Tables) -> list[Finding]:
    return [
        _warning(tables, sheet, row, key, *said)
        for sheet, key in _PU_COLUMNS
        for row, cells in tables.rows(sheet)
        if (said := _pu_problem(cells[key]))
    ]


def _pu_problem(value: float) -> tuple[str, str] | None:
    if not (value < PU_BOUNDS[0] or value > PU_BOUNDS[1]):
        return None
    problem = f"a voltage of {value:g} pu"
    if VOLTS_BOUNDS[0] <= value <= VOLTS_BOUNDS[1]:
        return problem, f"volts on a 120 V base? {value:g} V is {value / 120:.4g} pu"
    if PERCENT_BOUNDS[0] <= value <= PERCENT_BOUNDS[1]:
        return problem, f"percent? {value:g} % is {value / 100:.4g} pu"
    return problem, f"voltages stay between {PU_BOUNDS[0]:g} and {PU_BOUNDS[1]:g} pu"


def _transformers(tables: Tables, topology: Topology, kv: Sequence[float]) -> list[Finding]:
    findings: list[Finding] = []
    rows = dict(tables.rows("transformers"))
    for k, edge in enumerate(topology.edges):
        if edge is None or edge.kind != "transformer":
            continue
        key = "kv_primary" if topology.forward[k] else "kv_secondary"
        cells = rows[edge.row]
        rated, base = cells[key], kv[topology.parent[k]]
        one_phase = len(cells["phases"]) == 1 and _near(rated * ROOT_3, base, KV_MISMATCH_WARNED)
        if one_phase or not abs(rated / base - 1) > KV_MISMATCH_WARNED:
            continue
        problem = f"rated {rated:g} kV on a base of {base:.4g} kV"
        severity, hint = Severity.WARNING, "check the rated voltages"
        if _is_root_3(rated, base):
            hint = "line to neutral given? rated voltages are line to line"
        elif abs(rated / base - 1) > KV_MISMATCH_FATAL:
            severity = Severity.FATAL
        findings.append(tables.finding(severity, "transformers", edge.row, key, problem, hint))
    return findings


def _at_nodes(tables: Tables, topology: Topology, kv: Sequence[float]) -> list[Finding]:
    """Return kV figures of nodes, regulators and source that do not fit the base there."""
    base = dict(zip(topology.nodes, kv, strict=True))
    source = topology.nodes[0]
    columns = (
        ("source", "node", ("voltage_kv",)),
        ("nodes", "node", ("kv", "v_min_kv", "v_max_kv")),
        ("regulators", "to_node", ("setpoint_kv",)),
        ("cases", "", ("source_voltage_kv",)),
    )
    findings: list[Finding] = []
    for sheet, place, keys in columns:
        for row, cells in tables.rows(sheet):
            there = base.get(cells[place] if place else source, math.nan)
            for key in keys:
                if abs(cells[key] / there - 1) > KV_MISMATCH_WARNED:
                    problem = f"{cells[key]:g} kV where the base is {there:.4g} kV"
                    neutral = _is_root_3(cells[key], there)
                    hint = "line to neutral given?" if neutral else "check against the transformers"
                    findings.append(_warning(tables, sheet, row, key, problem, hint))
    return findings


def _impedance_percent(tables: Tables) -> list[Finding]:
    findings: list[Finding] = []
    for row, cells in tables.rows("transformers"):
        whole = cells["z_pct"]
        key = "z_pct" if whole == whole else "r_pct"
        z = whole if whole == whole else math.hypot(cells["r_pct"], cells["x_pct"])
        if z < Z_BOUNDS_PCT[0]:
            problem, hint = f"an impedance of {z:.3g} %", "per unit entered as percent?"
            findings.append(_warning(tables, "transformers", row, key, problem, hint))
        elif z > Z_BOUNDS_PCT[1]:
            problem, hint = f"an impedance of {z:.3g} %", "percent is on the unit's own kVA"
            findings.append(_warning(tables, "transformers", row, key, problem, hint))
    return findings


def _limits(tables: Tables) -> list[Finding]:
    findings: list[Finding] = []
    for row, cells in tables.rows("limits"):
        name, value = fold(cells["limit"]), cells["value"]
        said = _pu_problem(value) if name in _PU_LIMITS else None
        if 0 < value <= _PERCENT_LIMITS.get(name, 0.0):
            said = f"{name} of {value:g} %", "a share of one entered as percent?"
        if said:
            findings.append(_warning(tables, "limits", row, "value", *said))
    return findings


def _bands(tables: Tables) -> list[Finding]:
    """Return the regulators whose band is narrower than one step: no tap can settle in it."""
    findings: list[Finding] = []
    for row, cells in tables.rows("regulators"):
        step = cells["range_pct"] / 100 / (cells["steps"] / 2)
        if cells["bandwidth_pu"] < step:
            problem = f"a band of {cells['bandwidth_pu']:g} pu, and steps of {step:.4g} pu"
            hint = "widen the band beyond one step"
            findings.append(_warning(tables, "regulators", row, "bandwidth_pu", problem, hint))
    return findings


def _near(value: float, wanted: float, within: float) -> bool:
    return abs(value / wanted - 1) <= within


def _is_root_3(value: float, wanted: float) -> bool:
    return any(_near(value * f, wanted, ROOT_3_WITHIN) for f in (ROOT_3, 1 / ROOT_3))
