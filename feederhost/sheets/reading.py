"""One feeder in: an .xlsx workbook or a folder of csv files becomes raw tables.

Nothing is judged here but whether the file can be read.  Cells come as they are written, with
the row numbers the spreadsheet shows; what they mean is found out by the caller.
"""

from __future__ import annotations

import csv
import hashlib
import json
import warnings
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO
from zipfile import BadZipFile, ZipFile, is_zipfile

import pandas as pd
from openpyxl import load_workbook

from feederhost.errors import InputError
from feederhost.schema import RESULT
from feederhost.sheets.cells import Cell, as_text, clean, decode_escapes, plain, unguard
from feederhost.sheets.package import StrictFormatError, uncalculated_formulas

# A first cell with one of these is a broken formula, not a comment.
ERROR_WORDS = frozenset(
    {"#REF!", "#N/A", "#NAME?", "#VALUE!", "#DIV/0!", "#NUM!", "#NULL!", "#SPILL!", "#CALC!",
     "#FIELD!", "#BLOCKED!", "#CONNECT!", "#UNKNOWN!", "#BUSY!", "#GETTING_DATA", "#EXTERNAL!"}
)  # fmt: skip
# Encrypted workbooks and the old .xls format are both stored in this container.
_COMPOUND_FILE = bytes.fromhex("d0cf11e0a1b11ae1")

Record = tuple[int, list[Cell]]
# Where a sheet was found, its title, its records.
NamedSheet = tuple[str, str, list[Record]]


@dataclass(frozen=True)
class RawWorkbook:
    """The tables of one feeder as written.

    Attributes
    ----------
    name : str
        Stem of the workbook, or name of the folder.
    tables : dict of str to pandas.DataFrame
        Per folded sheet name: dtype object, headers as written (doubles kept, "" where a
        column with content has none), index = row numbers of the spreadsheet.
    digests : dict of str to str
        SHA-256 per sheet over headers, cells and row numbers.
    sources : dict of str to str
        Per folded sheet name: the sheet's title or the file's name as written.
    """

    name: str
    tables: dict[str, pd.DataFrame]
    digests: dict[str, str]
    sources: dict[str, str]


def read_workbook(path: Path) -> RawWorkbook:
    """Read every sheet of a feeder.

    Formulas are not evaluated, links not followed, macros not run: the cached values count.  A
    formula that was never calculated comes as its own text, starting with ``=``.

    Parameters
    ----------
    path : Path
        An ``.xlsx`` file, or a folder with one ``.csv`` file (UTF-8, commas) per sheet.

    Returns
    -------
    RawWorkbook
        Wholly blank rows, comment rows (first cell starts with ``#``) and blank columns are
        left out.

    Raises
    ------
    InputError
        Missing, unreadable, encrypted, damaged, of another format, or without a sheet.
    """
    path = Path(path)
    folder = path.is_dir()
    sheets = _csv_sheets(path) if folder else _xlsx_sheets(path)
    tables: dict[str, pd.DataFrame] = {}
    digests: dict[str, str] = {}
    sources: dict[str, str] = {}
    for source, title, records in sheets:
        folded = title.strip().lower()
        if folded in sources:
            raise InputError(
                f"{path}: '{sources[folded]}' and '{source}' are both sheet '{folded}'"
                " - keep one of them"
            )
        tables[folded] = _table(folded, records)
        digests[folded] = _digest(tables[folded])
        sources[folded] = source
    return RawWorkbook(path.resolve().name if folder else path.stem, tables, digests, sources)


def _table(name: str, records: Iterable[Record]) -> pd.DataFrame:
    rows = iter(records)
    _, header = next(rows, (1, []))
    banner = RESULT[name].banner if name in RESULT else ""
    if banner and header[:1] == [banner]:
        _, header = next(rows, (2, []))
    kept = [(number, cells) for number, cells in rows if _is_data(cells)]
    width = max((len(cells) for _, cells in kept), default=0)
    headers = [as_text(cell) for cell in header]
    headers += [""] * (width - len(headers))
    grid = [cells + [None] * (len(headers) - len(cells)) for _, cells in kept]
    shown = [i for i, text in enumerate(headers) if text or any(row[i] is not None for row in grid)]
    return pd.DataFrame(
        [[row[i] for i in shown] for row in grid],
        index=pd.Index([number for number, _ in kept], dtype=int),
        columns=pd.Index([headers[i] for i in shown], dtype=object),
        dtype=object,
    )


def _is_data(cells: list[Cell]) -> bool:
    first = cells[0] if cells else None
    if isinstance(first, str) and first.startswith("#") and first not in ERROR_WORDS:
        return False
    return any(cell is not None for cell in cells)


def _digest(table: pd.DataFrame) -> str:
    digest = hashlib.sha256()
    lines = [(1, list(table.columns)), *zip(table.index, table.to_numpy().tolist(), strict=True)]
    for number, cells in lines:
        text = json.dumps([int(number), [as_text(cell) for cell in cells]], ensure_ascii=True)
        digest.update(text.encode("ascii") + b"\n")
    return digest.hexdigest()


def _xlsx_sheets(path: Path) -> Iterable[NamedSheet]:
    try:
        with path.open("rb") as stream:
            start = stream.read(len(_COMPOUND_FILE))
            if start == _COMPOUND_FILE:
                raise InputError(
                    f"{path}: encrypted, or in the old .xls format"
                    " - save it as .xlsx without a password"
                )
            if not is_zipfile(stream):
                raise InputError(f"{path}: not an .xlsx workbook (or a damaged one){_hint(path)}")
            with warnings.catch_warnings():
                # openpyxl warns of decoration it drops; nothing of that is data.
                warnings.simplefilter("ignore")
                return _load(stream)
    except FileNotFoundError:
        raise InputError(f"{path}: no such file or folder") from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror or error}") from error
    except InputError:
        raise
    except StrictFormatError as error:
        raise InputError(
            f"{path}: written as 'strict' Open XML - save it as a plain Excel workbook (.xlsx)"
        ) from error
    except BadZipFile as error:
        raise InputError(f"{path}: damaged workbook - restore it or save it anew") from error
    except Exception as error:
        # A damaged package breaks the parser in any of a dozen ways; to the reader of the
        # message they are all the same.
        raise InputError(
            f"{path}: not an .xlsx workbook, or damaged ({type(error).__name__})"
            " - open it in a spreadsheet programme and save it anew"
        ) from error


def _hint(path: Path) -> str:
    return " - give the folder that holds the csv files" if path.suffix.lower() == ".csv" else ""


def _load(stream: BinaryIO) -> list[NamedSheet]:
    with ZipFile(stream) as archive:
        formulas = uncalculated_formulas(archive)
    book = load_workbook(stream, read_only=True, data_only=True, keep_links=False)
    try:
        sheets = []
        for sheet in book.worksheets:
            # The size a file claims for its sheet may be wrong; the rows themselves are not.
            sheet.reset_dimensions()
            records = [
                (number, [_typed(value) for value in values])
                for number, values in enumerate(sheet.iter_rows(values_only=True), 1)
            ]
            _put(records, formulas.get(sheet.title, {}))
            sheets.append((sheet.title, sheet.title, records))
        return sheets
    finally:
        book.close()


def _typed(value: object) -> Cell:
    return clean(decode_escapes(value)) if isinstance(value, str) else plain(value)


def _put(records: list[Record], formulas: dict[tuple[int, int], str]) -> None:
    for (row, column), text in formulas.items():
        cells = records[row - 1][1]
        cells += [None] * (column - len(cells))
        cells[column - 1] = text


def _csv_sheets(path: Path) -> Iterable[NamedSheet]:
    try:
        # Names starting with a dot are leftovers of the system, not sheets.
        files = sorted(
            file
            for file in path.iterdir()
            if file.suffix.lower() == ".csv" and not file.name.startswith(".") and file.is_file()
        )
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror or error}") from error
    if not files:
        raise InputError(f"{path}: the folder holds no .csv file")
    for file in files:
        yield file.name, file.stem, _csv_records(file)


def _csv_records(file: Path) -> list[Record]:
    records: list[Record] = []
    try:
        with file.open(encoding="utf-8-sig", newline="") as stream:
            lines = csv.reader(stream, strict=True)
            start = 1
            for fields in lines:
                cells = [clean(field) for field in fields]
                records.append((start, [unguard(text) if text else None for text in cells]))
                start = lines.line_num + 1
    except UnicodeDecodeError as error:
        raise InputError(f"{file}: not UTF-8 - save it as 'CSV UTF-8'") from error
    except csv.Error as error:
        raise InputError(f"{file}: line {start}: not a csv record: {error}") from error
    except OSError as error:
        raise InputError(f"{file}: cannot be read: {error.strerror or error}") from error
    header = [cell for cell in records[0][1] if cell] if records else []
    if len(header) == 1 and any(mark in str(header[0]) for mark in ";\t"):
        raise InputError(f"{file}: not separated by commas - save it as 'CSV UTF-8' with commas")
    return records
