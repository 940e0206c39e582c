"""Plausibility of lines and conductors: impedance per km, lengths, ratings, with the likely slip.

The bounds are wide: they are meant to catch a wrong unit, not an unusual line.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from feederhost.errors import Finding, Severity
from feederhost.feeder.columns import given
from feederhost.feeder.tables import Tables
from feederhost.feeder.topology import Edge, Topology
from feederhost.settings import Settings

# IEC 60228 class 2: 630 mm2 aluminium 0.0469 ohm/km, 16 mm2 1.91 ohm/km (d.c., 20 degC); a
# bundle of the former and a thin copper wire still fit between the bounds.
R_BOUNDS = (0.01, 6.0)
# Handbook values of single-circuit overhead lines and of cables in trefoil (Kersting,
# Distribution System Modeling and Analysis, chapter 4; 60 Hz): 0.08 to 0.56 ohm/km.
X_BOUNDS = (0.02, 1.2)
# 795 kcmil ACSR reaches 4.2, 16 mm2 low-voltage cable 0.04 (same tables).
X_OVER_R_BOUNDS = (0.01, 8.0)
# Overhead lines stay below 0.6 ohm/km, and above 0.57 ohm/mi stand most of them per mile.
X_OVERHEAD_MOST = 0.65
# What a number reads as, over what it should read, where a unit was mixed up.
UNIT_SLIPS = (
    (1.609344, "ohm per mile entered as per km?"),
    (1.609344 / 0.3048, "ohm per mile entered as per kft?"),
    (0.3048, "ohm per kft entered as per km?"),
)
# Common practice: medium-voltage feeders run for some tens of km, with some hundreds in all.
LENGTH_MOST_KM = 80.0
FEEDER_MOST_KM = 200.0
# Common practice: low voltage does not carry further than this.
LENGTH_MOST_LV_KM = 2.0
# A feeder of several medium-voltage lines that would fit on a football field.
FEEDER_LEAST_KM, FEEDER_LEAST_LINES = 0.1, 3
# Normal ratings of distribution conductors run from some 50 A to some 1,000 A (catalogues).
RATING_BOUNDS_A = (1.0, 5000.0)
FT_PER_KM, M_PER_KM = 1 / 0.3048e-3, 1e3


def audit_lines(
    tables: Tables, topology: Topology, kv: Sequence[float], settings: Settings
) -> list[Finding]:
    """Return what is unlikely about lines and conductors; ``kv`` is the base of every node."""
    lines = dict(tables.rows("lines"))
    drawn = [(k, e) for k, e in enumerate(topology.edges) if e is not None and e.kind == "line"]
    findings = _lengths(tables, lines, drawn, kv, settings)
    high: dict[str, bool] = {}
    for k, edge in drawn:
        cells = lines[edge.row]
        above = kv[k] > settings.shared_kv
        impedance = _per_km(cells)
        if impedance is not None:
            findings += _impedance(tables, "lines", edge.row, impedance, above)
        else:
            high[cells["conductor"]] = high.get(cells["conductor"], False) or above
    for row, cells in tables.rows("conductors"):
        impedance = _per_km({**cells, "r1_ohm": math.nan, "x1_ohm": math.nan})
        if impedance is not None:
            above = high.get(cells["conductor"], False)
            findings += _impedance(tables, "conductors", row, impedance, above)
    for sheet in ("lines", "conductors", "regulators"):
        for row, cells in tables.rows(sheet):
            findings += _rating(tables, sheet, row, cells["rating_a"])
    return findings


def _per_km(cells: Mapping[str, Any]) -> tuple[str, float, float] | None:
    """Return the key of the resistance given, and r1 and x1 in ohm per km, where known."""
    if len(given(cells, "r1_ohm_per_km", "x1_ohm_per_km")) == 2:
        return "r1_ohm_per_km", cells["r1_ohm_per_km"], cells["x1_ohm_per_km"]
    if len(given(cells, "r1_ohm", "x1_ohm")) == 2 and cells["length_km"] > 0:
        length = cells["length_km"]
        return "r1_ohm", cells["r1_ohm"] / length, cells["x1_ohm"] / length
    return None


def _impedance(
    tables: Tables, sheet: str, row: int, impedance: tuple[str, float, float], high: bool
) -> list[Finding]:
    """Return a warning where no conductor has such an impedance; ``high``: above 1 kV."""
    key, r, x = impedance
    r_fits = R_BOUNDS[0] <= r <= R_BOUNDS[1]
    x_fits = not high or X_BOUNDS[0] <= x <= X_BOUNDS[1]
    ratio_fits = r == 0 or x == 0 or X_OVER_R_BOUNDS[0] <= x / r <= X_OVER_R_BOUNDS[1]
    if not (r_fits and x_fits):
        slip = next((text for factor, text in UNIT_SLIPS if _plausible(r / factor, x / factor)), "")
        problem = f"r {r:.4g} and x {x:.4g} ohm per km: no conductor is like that"
        return [
            tables.finding(
                Severity.WARNING, sheet, row, key, problem, slip or "check length and unit"
            )
        ]
    if not ratio_fits:
        problem = f"x over r is {x / r:.3g} (r {r:.4g}, x {x:.4g} ohm per km)"
        hint = "check that r and x are not swapped"
        return [tables.finding(Severity.WARNING, sheet, row, key, problem, hint)]
    if high and x > X_OVERHEAD_MOST:
        problem = f"x {x:.4g} ohm per km: overhead lines stay below {X_OVERHEAD_MOST:g}"
        hint = UNIT_SLIPS[0][1]
        return [
            tables.finding(Severity.WARNING, sheet, row, key.replace("r1", "x1"), problem, hint)
        ]
    return []


def _plausible(r: float, x: float) -> bool:
    return R_BOUNDS[0] <= r <= R_BOUNDS[1] and X_BOUNDS[0] <= x <= X_OVERHEAD_MOST


def _lengths(
    tables: Tables,
    lines: Mapping[int, Mapping[str, Any]],
    drawn: Sequence[tuple[int, Edge]],
    kv: Sequence[float],
    settings: Settings,
) -> list[Finding]:
    findings: list[Finding] = []
    lengths = [(k, e.row, lines[e.row]["length_km"]) for k, e in drawn]
    lengths = [(k, row, length) for k, row, length in lengths if length == length]
    for k, row, length in lengths:
        low = kv[k] <= settings.shared_kv
        if length > (LENGTH_MOST_LV_KM if low else LENGTH_MOST_KM):
            what = "a low-voltage line" if low else "a line"
            problem = f"{what} of {length:.4g} km"
            hint = (
                f"feet or metres entered as km? ({length / FT_PER_KM:.3g} km if feet, "
                f"{length / M_PER_KM:.3g} km if metres)"
            )
            findings.append(
                tables.finding(Severity.WARNING, "lines", row, "length_km", problem, hint)
            )
    total = sum(length for _, _, length in lengths)
    high = [length for k, _, length in lengths if kv[k] > settings.shared_kv]
    if total > FEEDER_MOST_KM and not findings:
        problem = f"{total:.4g} km of line in all: long for one feeder"
        hint = "check the unit of the lengths"
        findings.append(tables.finding(Severity.WARNING, "lines", 0, "length_km", problem, hint))
    if len(high) >= FEEDER_LEAST_LINES and total < FEEDER_LEAST_KM:
        problem = f"{len(high)} lines above 1 kV with {total * M_PER_KM:.3g} m in all"
        hint = "km entered as metres or feet?"
        findings.append(tables.finding(Severity.WARNING, "lines", 0, "length_km", problem, hint))
    return findings


def _rating(tables: Tables, sheet: str, row: int, rating: float) -> list[Finding]:
    if rating < RATING_BOUNDS_A[0]:
        problem, hint = f"a rating of {rating:g} A", "kA entered as A?"
    elif RATING_BOUNDS_A[1] < rating < math.inf:
        problem, hint = f"a rating of {rating:g} A", "write unlimited where there is no limit"
    else:
        return []
    return [tables.finding(Severity.WARNING, sheet, row, "rating_a", problem, hint)]
