"""A small feeder as raw sheets, to be spoilt one cell at a time; an invented scenario."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import pandas as pd
from feederhost.errors import Finding, Severity, fatal
from feederhost.feeder.audit import audit
from feederhost.feeder.tables import check_tables
from feederhost.feeder.topology import root_feeder

KM = "line, from_node, to_node, length_km, r1_ohm_per_km, x1_ohm_per_km, rating_a"
LIBRARY = "conductor, r1_ohm_per_km, x1_ohm_per_km, rating_a"
TAPPED = "regulator, from_node, to_node, tap, rating_a"
TRANSFORMER = "transformer, from_node, to_node, kva, kv_primary, kv_secondary, z_pct, x_over_r"


def sheet(header: str, *rows: Iterable[Any]) -> pd.DataFrame:
    """Return a raw sheet: headers separated by ``", "``, rows filled up with blanks."""
    headers = header.split(", ")
    cells = [[*row, *[None] * (len(headers) - len(list(row)))] for row in rows]
    index = range(2, 2 + len(cells))
    return pd.DataFrame(cells, columns=headers, index=index, dtype=object)


def feeder(**sheets: pd.DataFrame | None) -> dict[str, pd.DataFrame]:
    """Return a sound feeder S - A - B with a load at B; ``None`` takes a sheet away."""
    raw: dict[str, pd.DataFrame | None] = {
        "source": sheet("node, kv", ["S", 12.47]),
        "lines": lines(),
        "loads": sheet("node, kw, kvar", ["B", 100, 30]),
    }
    raw.update(sheets)
    return {name: table for name, table in raw.items() if table is not None}


def lines(*more: Iterable[Any], header: str = "") -> pd.DataFrame:
    """Return the two lines of the feeder and more; ``header`` puts columns behind the usual."""
    usual = "line, from_node, to_node, length_km, r1_ohm_per_km, x1_ohm_per_km, rating_a"
    return sheet(
        usual + header,
        ["L1", "S", "A", 1.0, 0.3, 0.4, 300],
        ["L2", "A", "B", 2.0, 0.3, 0.4, 300],
        *more,
    )


def alarms(findings: Iterable[Finding]) -> list[tuple[str, str, int, str, str]]:
    """Return place and value of everything but notes."""
    return places(f for f in findings if f.severity is not Severity.NOTE)


def notes(findings: Iterable[Finding], of: str) -> list[str]:
    """Return the notes about one sheet as lines."""
    return [f.line() for f in findings if f.severity is Severity.NOTE and f.sheet == of]


LOW = sheet("node, kv", ["S", 0.48])


def transformers(
    *kv: float, kva: float = 500, phases: str | None = None, turned: bool = False, z: float = 2
) -> pd.DataFrame:
    """Return one transformer between B and D; ``turned``: its row runs towards the source."""
    ends = ["D", "B"] if turned else ["B", "D"]
    return sheet(TRANSFORMER + ", phases", ["T", *ends, kva, *kv, z, 1.5, phases])


def audited(**sheets: pd.DataFrame | None) -> tuple[Finding, ...]:
    """Return the audit of the small feeder with sheets replaced; its data must be readable."""
    tables = check_tables(feeder(**sheets))
    assert fatal(tables.findings) == ()
    topology, findings = root_feeder(tables)
    assert topology is not None
    assert fatal(findings) == ()
    return audit(tables, topology)


def places(findings: Iterable[Finding]) -> list[tuple[str, str, int, str, str]]:
    """Return severity, place and value of every finding."""
    return [(f.severity.value, f.sheet, f.row, f.column, f.value) for f in findings]
