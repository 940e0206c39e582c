"""Small result tables for the tests of writing, and ways into the workbooks they become."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import openpyxl
import pandas as pd
from feederhost.sheets.reading import read_workbook
from feederhost.sheets.writing import write_result


def hosting(**columns: list[object]) -> pd.DataFrame:
    """Return a hosting table of some rows, with further columns or other cells."""
    table = {
        "node": ["N1", "N2", "N3"],
        "technology": ["pv", "pv", "pv"],
        "distance_km": [0.5, 1.25, 2.0],
        "state": ["hosted", "capped", "hosted"],
        "hosting_kw": [412.0, 1000.0, np.nan],
        "hosting_unrounded_kw": [412.0 + 0.1 + 0.2, 1000.0, np.nan],
        "proof": ["proven", "not_needed", "failed"],
    }
    return pd.DataFrame(table | columns)


def result() -> dict[str, pd.DataFrame]:
    return {
        "summary": pd.DataFrame({"key": ["feeder", "caution"], "value": ["Mill", "word " * 60]}),
        "hosting": hosting(),
        "relaxation": pd.DataFrame({"node": ["N1"], "priced_kw": [412.31]}),
        "run": pd.DataFrame({"key": ["seed"], "value": [20]}),
    }


def book_of(tables: dict[str, pd.DataFrame], tmp_path: Path) -> openpyxl.Workbook:
    write_result(tables, tmp_path / "r.xlsx")
    return openpyxl.load_workbook(tmp_path / "r.xlsx")


def column_of(sheet: object, header: str, head: int = 1) -> list[object]:
    cells = next(c for c in sheet.iter_cols() if c[head - 1].value == header)
    return list(cells[head:])


def read_rows(path: Path) -> list[tuple[object, ...]]:
    """Return the rows of sheet ``t``, each behind its row number."""
    table = read_workbook(path).tables["t"]
    return [(row, *cells) for row, cells in zip(table.index, table.to_numpy(), strict=True)]
