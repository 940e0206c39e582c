"""Mothwick 3: a small feeder as it came out of three people's files, to be checked.

Not one to compute with: nearly every sheet carries faults of the kind that real workbooks
carry - a loop, an island, feet typed as kilometres, line to neutral for line to line, text in
number cells, a formula never calculated, names that differ by case, and more.

What to look at: `feederhost check` names them in one go, each by sheet, row and column with what
to do.  Line L3 is entered against the direction of the tree: odd, legal, and not named.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from demo_data import Rows, table


@dataclass(frozen=True)
class Fault:
    """One planted fault: where the spreadsheet shows it, and what is the matter."""

    sheet: str
    row: int
    column: str
    what: str


# Each fault stands beside its row below, as "column: what is the matter"; collected here.
FAULTS: list[Fault] = []
LEGAL = "legal: "


def _dirty(sheet: str, header: str, *rows: tuple[Any, ...]) -> Rows:
    """Return a table whose last field, "column: what", goes to FAULTS instead of the sheet."""
    for number, row in enumerate(rows, 2):
        if row[-1]:
            column, _, what = row[-1].partition(": ")
            FAULTS.append(Fault(sheet, number, column, what))
    return table(header, *(row[:-1] for row in rows))


SOURCE = table(
    "node kv voltage_pu short_circuit_mva data_date feeder",
    ("M0", 12.47, 1.02, 80, "2026-08-14", "Mothwick 3"),
)

NODES = _dirty(
    "nodes",
    "node x y kv",
    ("M0", 0, 0, 12.47, ""),
    ("N1", 0.9, 0, 7.2, "kv: line to neutral, 12.47 kV line to line is meant"),
    ("N2", 1.6, 0, 12.47, ""),
    ("N3", 2.4, 0, 12.47, ""),
    ("N3", 2.4, 0.1, 12.47, "node: entered twice"),
    ("N4", 2.9, 0.2, 12.47, ""),
)

LINES = _dirty(
    "lines",
    "line from_node to_node length_km conductor rating_a state",
    ("L1", "M0", "N1", 0.9, "1/0 ACSR", None, "closed", ""),
    ("L2", "N1", "N2", 0.7, "1/0 ACSR", None, "closed", ""),
    ("L3", "N3", "N2", 0.8, "1/0 ACSR", None, "closed",
     f"from_node: {LEGAL}reversed, the direction is the tree's"),
    ("L4", "N3", "N4", 2640, "1/0 ACSR", None, "closed", "length_km: 2640 ft typed as km"),
    ("L5", "N4", "N5", "0,6", "1/0 ACSR", None, "closed", "length_km: decimal comma kept as text"),
    ("L6", "N2", "N6", 0.5, "Raven", None, "closed", "conductor: not in `conductors`"),
    ("L6", "N6", "N7", 0.4, "1/0 ACSR", None, "closed", "line: id used twice"),
    ("L8", "N7", "N1", 1.1, "1/0 ACSR", None, "closed", "line: closes a loop N1-N2-N6-N7"),
    ("L9", "N20", "N21", 0.5, "1/0 ACSR", None, "closed", "line: an island, nothing feeds it"),
    ("L10", "N5", "N8", 0.6, "1/0 ACSR", None, "shut", "state: closed or open is meant"),
    ("L11", "N4", None, 0.3, "1/0 ACSR", None, "closed", "to_node: blank, but required"),
    ("L12", "N5", "N9", 0.4, "2 ACSR", None, "closed", ""),
    ("L13", "N3", "N10", 0.3, "1/0 ACSR", "n/a", "closed", "rating_a: text for a number"),
)  # fmt: skip

CONDUCTORS = _dirty(
    "conductors",
    "conductor r1_ohm_per_km x1_ohm_per_km rating_a",
    ("1/0 ACSR", 0.646, 0.490, 240, ""),
    ("2 ACSR", 1.010, 0.530, None, "rating_a: missing, and L12 has none of its own"),
)

TRANSFORMERS = _dirty(
    "transformers",
    "transformer from_node to_node kva kv_primary kv_secondary z_pct x_over_r",
    ("T1", "N2", "N2S", 75, 7.2, 0.48, 2.0, 1.5,
     "kv_primary: line to neutral on a three-phase unit"),
    ("T2", "N5", "N5S", 75, 12.47, 0.48, 2.0, None, "x_over_r: z_pct needs it beside it"),
)  # fmt: skip

REGULATORS = _dirty(
    "regulators",
    "regulator from_node to_node range_pct rating_a",
    ("VR", "N9", "N9R", 10, 100, "setpoint_pu: neither setpoint nor tap"),
)

CAPACITORS = _dirty(
    "capacitors",
    "node kvar stat",
    ("N4", 150, "on", "stat: unknown column, one letter off state"),
)

# The formula and the error value are put in as such (CELLS), not as text.
LOADS = _dirty(
    "loads",
    "node kw kvar power_factor vars zip_z zip_i zip_p",
    ("N1", 40, 12, 0.95, "absorb", None, None, None, "power_factor: kvar and power_factor both"),
    ("N2S", 45, None, 0.97, "absorb", None, None, None, ""),
    ("n3", 30, None, 0.97, "absorb", None, None, None, "node: N3 in another case"),
    ("N40", 25, None, 0.97, "absorb", None, None, None, "node: nothing leads to N40"),
    ("N4", "=B2*2", None, 0.97, "absorb", None, None, None, "kw: a formula never calculated"),
    ("N5", "35 kW", None, 0.97, "absorb", None, None, None, "kw: the unit typed into the cell"),
    ("N6", -20, None, 0.97, "absorb", None, None, None, "kw: negative, PV taken off the demand"),
    ("N7", "#REF!", None, 0.97, "absorb", None, None, None, "kw: a broken reference"),
    ("N5S", 15, None, 0.97, "absorb", 0.5, 0.3, 0.3, "zip_p: the shares sum to 1.1"),
    ("N9R", 20, None, 0.97, "absorb", None, None, None, ""),
)
CELLS = {("loads", "B6"): "=B2*2", ("loads", "B9"): "#REF!"}

GENERATORS = _dirty(
    "generators",
    "node kw technology power_factor vars status",
    ("N4", 50, "pv", 95, "absorb", "connected", "power_factor: percent, 0.95 is meant"),
    ("N6", 30, "pv", -0.98, "absorb", "connected", "power_factor: negative, `vars` says the sign"),
    ("N7", 25, "pv", 0.95, None, "connected", "vars: an export below 1 must say absorb or inject"),
)

# Findings in `requests` are never fatal.
REQUESTS = _dirty(
    "requests",
    "request node technology kw received",
    ("R1", "N4", "pv", 40, "2026-08-01", ""),
    ("R2", "N99", "pv", 60, "2026-08-02", "node: not in the feeder"),
    ("R3", "N2", "wind", 80, "2026-08-03", "technology: neither built in nor in `technologies`"),
)

CASES = _dirty(
    "cases",
    "case hour month load_scale pv_scale ev_scale",
    ("peak", 18, 1, 1, 0, 1, ""),
    ("light", 25, 4, "30%", 1, 0, "hour: 0 to 23 is meant"),
    ("night", 1, 13, 0.4, 0, 1, "month: 1 to 12 is meant"),
)
FAULTS.append(Fault("cases", 3, "load_scale", "percent typed as text"))

LIMITS = _dirty(
    "limits",
    "limit value",
    ("v_max", 1.05, "limit: unknown name, v_max_pu is meant"),
)

TABLES = {
    "source": SOURCE, "nodes": NODES, "lines": LINES, "conductors": CONDUCTORS,
    "transformers": TRANSFORMERS, "regulators": REGULATORS, "capacitors": CAPACITORS,
    "loads": LOADS, "generators": GENERATORS, "requests": REQUESTS, "cases": CASES,
    "limits": LIMITS,
}  # fmt: skip
