"""One raw sheet read column by column: a typed table, and what is wrong with its cells."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import pandas as pd

from feederhost.errors import Finding, Severity
from feederhost.feeder.cells import FREE_TEXT, read_cell, written
from feederhost.feeder.headers import Head, match_headers, missing_headers
from feederhost.schema import NUMBER, Column, Sheet

# The default of the first column stands only where the second is blank as well.
_SECOND_FORM = {"voltage_pu": "voltage_kv"}
# Pictures and cost ranges: a bad cell there spoils no capacity, so it is left blank with a warning.
_HARMLESS_COLUMNS = ("x", "y")
_HARMLESS_SHEETS = ("costs",)


@dataclass(frozen=True, eq=False)
class Checked:
    """One sheet after its cells were read.

    Attributes
    ----------
    sheet : Sheet
        What the schema knows of it.
    table : pandas.DataFrame
        Typed columns by key, spreadsheet row numbers as index ``row``.
    headers : mapping of str to str
        The header as written, by key; columns that are not there are missing.
    texts : mapping of str to mapping of int to str
        The cells as written, by key and row.
    faulty : frozenset of (int, str)
        Row and key of every cell that holds something unusable.
    """

    sheet: Sheet
    table: pd.DataFrame
    headers: Mapping[str, str]
    texts: Mapping[str, Mapping[int, str]]
    faulty: frozenset[tuple[int, str]]

    def rows(self) -> Iterator[tuple[int, dict[str, Any]]]:
        """Yield row number and cells by key."""
        return records(self.table)

    def finding(
        self, severity: Severity, row: int, key: str, problem: str, suggestion: str = ""
    ) -> Finding:
        """Return a finding about one cell, headed and quoted as written."""
        value = self.texts.get(key, {}).get(row, "")
        header = self.headers.get(key, key)
        return Finding(severity, self.sheet.name, row, header, value, problem, suggestion)


def records(table: pd.DataFrame) -> Iterator[tuple[int, dict[str, Any]]]:
    """Yield row number and cells by key of a checked table."""
    keys = list(table.columns)
    columns = [table[key].tolist() for key in keys]
    for row, *cells in zip(table.index.tolist(), *columns, strict=True):
        yield row, dict(zip(keys, cells, strict=True))


def given(cells: Mapping[str, Any], *keys: str) -> list[str]:
    """Return those of the number columns whose cell holds a value."""
    return [key for key in keys if cells[key] == cells[key]]


def said_twice(
    checked: Checked, row: int, cells: Mapping[str, Any], first: str, second: str
) -> list[Finding]:
    """Return a fatal finding where a row gives one quantity in two forms."""
    if len(given(cells, first, second)) < 2:
        return []
    problem = f"the same quantity is given twice, here and as {checked.headers.get(first, first)}"
    return [checked.finding(Severity.FATAL, row, second, problem, "keep one of the two")]


def read_sheet(sheet: Sheet, raw: pd.DataFrame) -> tuple[Checked, tuple[Finding, ...]]:
    """Read one raw sheet.

    Parameters
    ----------
    sheet : Sheet
        What the schema knows of the sheet.
    raw : pandas.DataFrame
        Cells as read (str, float, int, bool, date or None), columns headed as written,
        index = spreadsheet row numbers.

    Returns
    -------
    checked : Checked
        With every column of the schema, and the pattern columns that are there.
    findings : tuple of Finding
        Of headers and cells, and one note per column whose default was filled in.
    """
    rows = [int(row) for row in raw.index]
    cells = [raw.iloc[:, position].tolist() for position in range(raw.shape[1])]
    filled = [any(written(cell) for cell in column) for column in cells]
    heads, findings = match_headers(sheet, [str(header) for header in raw.columns], filled)
    found = list(findings)
    if rows or sheet.required:
        found.extend(missing_headers(sheet, heads))
    by_key = {head.key: head for head in heads}
    fields = {c.key: c for c in sheet.columns if not c.pattern}
    fields.update((head.key, head.column) for head in heads)
    values: dict[str, list[Any]] = {}
    faulty: set[tuple[int, str]] = set()
    for key, column in fields.items():
        if key in by_key:
            head = by_key[key]
            values[key], problems, bad = _read_column(sheet, head, rows, cells[head.position])
            found.extend(problems)
            faulty.update((row, key) for row in bad)
        else:
            values[key] = [math.nan if column.kind == NUMBER else ""] * len(rows)
            faulty.update((row, key) for row in rows if column.required)
    for key, column in fields.items():
        found.extend(_fill_default(sheet, key, column, by_key.get(key), values, rows, faulty))
    table = pd.DataFrame(
        {key: _series(values[key], column.kind) for key, column in fields.items()}
    ).set_index(pd.Index(rows, dtype="int64", name="row"))
    texts = {
        head.key: dict(zip(rows, map(written, cells[head.position]), strict=True)) for head in heads
    }
    headers = {head.key: head.written for head in heads}
    return Checked(sheet, table, headers, texts, frozenset(faulty)), tuple(found)


def _read_column(
    sheet: Sheet, head: Head, rows: Sequence[int], cells: Sequence[Any]
) -> tuple[list[Any], list[Finding], list[int]]:
    """Return the values of a column, its findings, and the rows that are unusable."""
    values: list[Any] = []
    findings: list[Finding] = []
    bad: list[int] = []
    harmless = (
        sheet.name in _HARMLESS_SHEETS
        or head.column.name in _HARMLESS_COLUMNS
        or head.column.name in FREE_TEXT
    )
    for row, cell in zip(rows, cells, strict=True):
        reading = read_cell(cell, head.column, head.factor)
        values.append(reading.value)
        if not reading.problem:
            continue
        severity = Severity.WARNING if harmless or reading.caution else Severity.FATAL
        findings.append(
            Finding(
                severity, sheet.name, row, head.written, written(cell),
                reading.problem, reading.suggestion,
            )
        )  # fmt: skip
        if not reading.caution:
            bad.append(row)
    return values, findings, bad


def _fill_default(
    sheet: Sheet,
    key: str,
    column: Column,
    head: Head | None,
    values: Mapping[str, list[Any]],
    rows: Sequence[int],
    faulty: set[tuple[int, str]],
) -> list[Finding]:
    """Fill the blanks of one column in place; return the note that says so, if any were."""
    # A technology whose scale is left blank in a case does not run there, like pv and ev.
    default = 0.0 if column.name == "<other>_scale" else column.default
    if default is None:
        return []
    second = values.get(_SECOND_FORM.get(key, ""), [math.nan] * len(rows))
    count = 0
    for position, row in enumerate(rows):
        blank = values[key][position] == "" or values[key][position] != values[key][position]
        if blank and (row, key) not in faulty and second[position] != second[position]:
            values[key][position] = default
            count += 1
    if not count:
        return []
    unit = "" if column.unit in ("", "-") else f" {column.unit}"
    shown = f"{default:g}{unit}" if isinstance(default, float) else default
    where = "blank" if head else "no such column"
    problem = f"{where}: {shown} is taken in {count} of {len(rows)} rows"
    header = head.written if head else key
    return [Finding(Severity.NOTE, sheet.name, 0, header, "", problem)]


def _series(values: Sequence[Any], kind: str) -> pd.Series[Any]:
    return pd.Series(values, dtype="float64" if kind == NUMBER else object)
