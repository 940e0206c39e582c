"""One result out: a styled .xlsx workbook or a folder of csv files, whole or not at all.

The same tables give the same bytes.  In csv, text that a spreadsheet would take for a formula
(starting with ``=``, ``+``, ``@``, or ``-`` without being a negative number) stands behind an
apostrophe, which reading takes off again; in .xlsx it is marked as text.
"""

from __future__ import annotations

import csv
import os
import secrets
import shutil
from collections.abc import Iterable
from pathlib import Path

import pandas as pd

from feederhost.errors import OutputError
from feederhost.schema import RESULT
from feederhost.sheets.atomic import atomic_write
from feederhost.sheets.cells import Cell, Table, as_text, clean, guard, plain
from feederhost.sheets.workbook import write_book

_MOST_ROWS = 1_048_576  # of an .xlsx sheet


def write_result(tables: dict[str, pd.DataFrame], path: Path, *, as_csv: bool = False) -> None:
    """Write result tables, all of them or none.

    Parameters
    ----------
    tables : dict of str to pandas.DataFrame
        By sheet name; the order of ``schema.RESULT`` is kept, further sheets and columns
        follow.  The index is not written.  NaN, NaT and None are blank cells.
    path : Path
        The workbook, or with ``as_csv`` the folder.  Its parent must exist.
    as_csv : bool
        Write one csv file per sheet, without charts, formats or banner.

    Raises
    ------
    OutputError
        The target cannot be written, holds files that are not this function's own, or a sheet
        has more rows than an .xlsx sheet can have.  What was there before is untouched.
    """
    path = Path(path)
    ordered = _in_order(tables)
    if as_csv:
        _write_folder(ordered, path)
        return
    for name, table in ordered.items():
        if table.length + 2 > _MOST_ROWS:
            raise OutputError(
                f"cannot write {path}: sheet '{name}' has {table.length} rows, more than an .xlsx"
                " sheet holds - write csv"
            )
    atomic_write(path, lambda scratch: write_book(ordered, scratch))


def _in_order(tables: dict[str, pd.DataFrame]) -> dict[str, Table]:
    """Return the tables as plain cells: sheets and known columns in the order of the schema."""
    names = [name for name in RESULT if name in tables]
    names += [name for name in tables if name not in RESULT]
    return {name: _plain_table(name, tables[name]) for name in names}


def _plain_table(name: str, table: pd.DataFrame) -> Table:
    headers = [clean(str(column)) or "" for column in table.columns]
    known = RESULT[name].names if name in RESULT else ()
    placed = [header for header in headers if header in known]
    order = list(range(len(headers)))
    # Columns beyond the schema stay where they were put, as long as the known ones are in order.
    if placed != sorted(placed, key=known.index):
        order.sort(key=lambda i: known.index(headers[i]) if headers[i] in known else len(known))
    return Table(
        tuple(headers[i] for i in order),
        tuple(tuple(plain(value) for value in table.iloc[:, i].tolist()) for i in order),
        len(table),
    )


def _write_folder(tables: dict[str, Table], path: Path) -> None:
    target = Path(os.path.realpath(path))
    mark = secrets.token_hex(4)
    scratch, aside = (target.with_name(f".{target.name}.{mark}.{end}") for end in ("tmp", "old"))
    try:
        _refuse_foreign(target, tables)
        scratch.mkdir()
        for name, table in tables.items():
            _write_csv(table, scratch / f"{name}.csv")
        if target.exists():
            shutil.copymode(target, scratch)
            os.rename(target, aside)
        try:
            os.rename(scratch, target)
        except BaseException:
            if aside.exists():
                os.rename(aside, target)
            raise
    except OSError as error:
        raise OutputError(
            f"cannot write {path}: {error.strerror or error} - name another place"
        ) from error
    finally:
        for leftover in (scratch, aside):
            shutil.rmtree(leftover, ignore_errors=True)


def _refuse_foreign(target: Path, tables: Iterable[str]) -> None:
    """Raise where the target holds anything this module would not have written."""
    if not target.exists():
        return
    if not target.is_dir():
        raise OutputError(f"cannot write {target}: a file of that name exists - name a folder")
    ours = {f"{name}.csv" for name in (*RESULT, *tables)}
    for entry in sorted(target.iterdir()):
        if entry.name not in ours or entry.is_symlink() or not entry.is_file():
            raise OutputError(
                f"cannot write {target}: it holds '{entry.name}', which is not a result"
                " - name an empty or a new folder"
            )


def _write_csv(table: Table, path: Path) -> None:
    with path.open("x", encoding="utf-8", newline="") as stream:
        lines = csv.writer(stream, lineterminator="\n")
        lines.writerow([guard(header) for header in table.headers])
        lines.writerows(
            [_csv_text(cell) for cell in row] for row in zip(*table.columns, strict=True)
        )
        stream.flush()
        os.fsync(stream.fileno())


def _csv_text(cell: Cell) -> str:
    if isinstance(cell, str):
        return guard(cell)
    return repr(cell) if isinstance(cell, float) else as_text(cell)
