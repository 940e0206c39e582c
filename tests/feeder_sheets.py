"""A small feeder as raw sheets, to be spoilt one cell at a time; an invented scenario."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import pandas as pd
from feederhost.errors import Finding, Severity


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
    return [
        (f.severity.value, f.sheet, f.row, f.column, f.value)
        for f in findings
        if f.severity is not Severity.NOTE
    ]


def notes(findings: Iterable[Finding], of: str) -> list[str]:
    """Return the notes about one sheet as lines."""
    return [f.line() for f in findings if f.severity is Severity.NOTE and f.sheet == of]
