"""The blank, guided input workbook, and filled input workbooks in the same style."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Mapping, Sequence
from datetime import datetime
from io import BytesIO
from pathlib import Path
from typing import Any
from zipfile import ZIP_DEFLATED, ZipFile, ZipInfo

from openpyxl import Workbook
from openpyxl.cell.cell import Cell
from openpyxl.comments import Comment
from openpyxl.styles import Alignment, Border, PatternFill, Side
from openpyxl.utils import get_column_letter
from openpyxl.worksheet.datavalidation import DataValidation
from openpyxl.worksheet.worksheet import Worksheet
from openpyxl.writer.excel import ExcelWriter

from feederhost.schema import (
    BUILT_IN_CASES,
    BUILT_IN_TECHNOLOGIES,
    INPUT,
    NUMBER,
    PHASES,
    TEXT,
    Column,
    Sheet,
)
from feederhost.settings import sheet_settings
from feederhost.sheets.atomic import atomic_write
from feederhost.sheets.cells import encode_escapes, plain, starts_formula
from feederhost.sheets.guide import GUIDE, INK, ink, page, write_guide, write_notes

_LIGHT, _FADED = "DCE3E8", "5F6B75"
_PHASE_SETS = ("A", "B", "C", "AB", "BC", "CA", "ABC")
_LAST_ROW = 1_048_576
_MATRIX = re.compile(r"[rxb]_[abc]{2}")
_NARROW, _TEXT, _WIDE = 10, 16, 30
_PAGE = 190  # characters a landscape page carries in a size one can read
# Any fixed time: a workbook is known by its cells, not by when it was written.
_STAMP = datetime(2000, 1, 1)


def write_blank(path: Path) -> None:
    """Write the empty input workbook with its guide, notes, drop-downs and example rows.

    Parameters
    ----------
    path : Path
        Where to write; an existing file is replaced.

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    book = Workbook()
    guide = book.worksheets[0]
    guide.title = GUIDE
    limit_names = write_guide(guide)
    for sheet in INPUT.values():
        shown = [c for c in sheet.columns if not c.pattern and not _MATRIX.fullmatch(c.name)]
        left_out = [c for c in sheet.columns if c not in shown]
        page_of_book = book.create_sheet(sheet.name)
        examples = _examples(sheet)
        _write_table(page_of_book, sheet, [c.key for c in shown], examples, limit_names)
        if left_out:
            last = page_of_book.cell(1, len(shown))
            _note(last, f"{_meaning(shown[-1])}\n\n{_more(left_out)}")
        for row in page_of_book.iter_rows(min_row=2):
            for cell in row:
                cell.font = ink(color=_FADED, italic=True)
        if sheet.name == "limits":
            for row_number, setting in enumerate(sheet_settings(), 2):
                meta = setting.metadata
                unit = "" if meta["unit"] == "-" else f"\nUnit: {meta['unit']}"
                _note(page_of_book.cell(row_number, 1),
                      f"{meta['meaning']}{unit}\nSource: {meta['source']}")  # fmt: skip
    atomic_write(path, lambda scratch: save_settled(book, scratch))


def write_input(
    tables: Mapping[str, Sequence[Mapping[str, Any]]], path: Path, notes: str = ""
) -> None:
    """Write a filled input workbook in the style of the template.

    Parameters
    ----------
    tables, notes
        See `input_book`.
    path : Path
        Where to write; an existing file is replaced.

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    book = input_book(tables, notes)
    atomic_write(path, lambda scratch: save_settled(book, scratch))


def input_book(tables: Mapping[str, Sequence[Mapping[str, Any]]], notes: str = "") -> Workbook:
    """Return a filled input workbook in the style of the template.

    Parameters
    ----------
    tables : mapping of sheet name to rows
        A row maps headers, with any unit suffix the schema knows, to cells.  Only these sheets
        and columns are written, in the order of the schema; unknown ones follow.  Blank: a
        missing key, None or NaN.  Text stays text, also where it starts with ``=``.
    notes : str
        Text of a first sheet ``guide``: its title, and below it paragraphs.  Blank: no such sheet.
    """
    book = Workbook()
    guide = book.worksheets[0]
    guide.title = GUIDE
    known = [name for name in INPUT if name in tables]
    for name in [*known, *(name for name in tables if name not in INPUT)]:
        sheet = INPUT.get(name, Sheet(name, "", ()))
        rows = tables[name]
        _write_table(book.create_sheet(name), sheet, _headers(sheet, rows), rows)
    if notes:
        write_notes(guide, notes)
    elif tables:
        book.remove(guide)
    return book


def save_settled(book: Workbook, path: Path) -> None:
    """Save a workbook so that the same cells give the same bytes: no time of writing in it."""
    book.properties.creator = "feederhost"
    book.properties.created = book.properties.modified = _STAMP
    raw = BytesIO()
    # Not book.save(): it would put the time of writing into the properties.
    ExcelWriter(book, ZipFile(raw, "w")).save()
    with ZipFile(raw) as source, ZipFile(path, "w") as target:
        for name in source.namelist():
            entry = ZipInfo(name, _STAMP.timetuple()[:6])
            entry.compress_type = ZIP_DEFLATED
            target.writestr(entry, source.read(name))


# Limits that are off, or follow another one, until a value is given.
_LIMIT_EXAMPLES = {
    "v_min_primary_pu": 0.975, "v_max_primary_pu": 1.05, "export_limit_kw": 5000,
    "import_limit_kw": 10000, "search_cap_kw": 20000,
}  # fmt: skip


def _examples(sheet: Sheet) -> list[dict[str, Any]]:
    """Return the example rows of a sheet, each made a comment by its first cell."""
    example = {c.key: c.example for c in sheet.columns if c.example is not None}
    rows: list[dict[str, Any]] = [example]
    if sheet.name == "limits":
        rows = [
            {"limit": f.name, "value": _LIMIT_EXAMPLES.get(f.name, f.default)}
            for f in sheet_settings()
        ]
    elif sheet.name == "cases":
        rows = [dict(case) for case in BUILT_IN_CASES]
    elif sheet.name == "technologies":
        rows = [*(dict(technology) for technology in BUILT_IN_TECHNOLOGIES), example]
    elif sheet.name == "lines":
        # The two ways to give a line: by its conductor, and by figures of its own.
        own = {"r1_ohm_per_km", "x1_ohm_per_km", "rating_a"}
        rows = [
            {key: value for key, value in example.items() if key not in own},
            {key: value for key, value in example.items() if key != "conductor"}
            | {"line": "L2", "from_node": "N1", "to_node": "N3"},
        ]
    first = sheet.columns[0].key
    return [row | {first: f"# {row[first]}"} for row in rows]


def _headers(sheet: Sheet, rows: Iterable[Mapping[str, Any]]) -> list[str]:
    """Return the headers of the rows in schema order, unknown ones last, as they appear."""
    places = {c: place for place, c in enumerate(sheet.columns)}
    given = list(dict.fromkeys(key for row in rows for key in row))
    if not given:
        return [c.key for c in sheet.columns if c.required]
    unknown = len(places)
    found = {key: _column(sheet, key) for key in given}
    return sorted(given, key=lambda key: places.get(c, unknown) if (c := found[key]) else unknown)


def _column(sheet: Sheet, header: str) -> Column | None:
    """Return the schema's column for a header, that of a family where no other fits."""
    for column in sheet.columns:
        if not column.pattern and header in column.headers:
            return column
    for column in sheet.columns:
        # `load_scale.<class>`: whatever stands in angle brackets is the reader's own word.
        before, _, rest = column.name.partition("<")
        after = rest.partition(">")[2]
        if column.pattern and re.fullmatch(f"{re.escape(before)}.+{re.escape(after)}", header):
            return column
    return None


def _write_table(
    page_of_book: Worksheet,
    sheet: Sheet,
    headers: Sequence[str],
    rows: Sequence[Mapping[str, Any]],
    limit_names: str = "",
) -> None:
    """Write headers with their notes, checks and widths, and the rows below."""
    width = 0
    for place, header in enumerate(headers, 1):
        column = _column(sheet, header)
        letter = get_column_letter(place)
        is_text = column is None or column.kind == TEXT
        if is_text:
            # Else a spreadsheet turns a node called 3-4 into a date while it is typed.
            page_of_book.column_dimensions[letter].number_format = "@"
        is_number = column is not None and column.kind == NUMBER
        side = Alignment(horizontal="right" if is_number else "left", vertical="center", indent=1)
        page_of_book.column_dimensions[letter].alignment = side
        for row_number, row in enumerate(rows, 2):
            _put(page_of_book.cell(row_number, place), row.get(header), is_text)
            page_of_book.cell(row_number, place).alignment = side
        _head(page_of_book.cell(1, place), header, column)
        page_of_book.cell(1, place).alignment = side
        longest = max((len(str(row.get(header, ""))) for row in rows), default=0)
        least = _TEXT if place == 1 and is_text else _NARROW
        chars = max(least, len(header) + 4, min(longest + 2, _WIDE))
        page_of_book.column_dimensions[letter].width = chars
        width += chars
        rule = _rule(column, letter, limit_names) if column else None
        if rule:
            page_of_book.add_data_validation(rule)
    page_of_book.row_dimensions[1].height = 24
    page_of_book.freeze_panes = "B2"
    page_of_book.print_title_rows = "1:1"
    page(page_of_book, math.ceil(width / _PAGE))
    if sheet.required:
        page_of_book.sheet_properties.tabColor = INK


def _head(cell: Cell, header: str, column: Column | None) -> None:
    required = column is not None and column.required
    _put(cell, header, True)
    cell.font = ink(bold=required, color="FFFFFF" if required else INK)
    cell.fill = PatternFill("solid", fgColor=INK if required else _LIGHT)
    cell.border = Border(bottom=Side("medium" if required else "thin", color=INK))
    if column:
        _note(cell, _meaning(column))


def _put(cell: Cell, value: Any, is_text: bool) -> None:
    """Write one value; text is never taken for a formula, blanks stay blank."""
    value = plain(value)
    if value is None:
        return
    if isinstance(value, str):
        cell.value = encode_escapes(value)
        cell.data_type = "s"
        cell.quotePrefix = starts_formula(value)
    else:
        cell.value = value
    if is_text and not cell.is_date:
        cell.number_format = "@"


def _note(cell: Cell, text: str) -> None:
    """Attach a note in a box large enough to read it whole."""
    lines = sum(1 + len(line) // 46 for line in text.split("\n"))
    cell.comment = Comment(text.replace("`", "'"), "feederhost", height=14 + 17 * lines, width=320)


def _meaning(column: Column) -> str:
    """Return the note of a column: meaning, unit, what is allowed, what a blank means."""
    unit = (column.units[0] if column.units else column.unit).replace("_", " ")
    allowed = column.choices or (_PHASE_SETS if column.kind == PHASES else ())
    others = [h for h in column.headers if h != column.key]
    blank = "may stay blank" if column.default is None else f"blank means {column.default}"
    return "\n".join(
        line
        for line in (
            f"* REQUIRED: {column.meaning}" if column.required else column.meaning,
            f"Unit: {unit}" if unit not in ("", "-") else "",
            f"Allowed: {', '.join(allowed)}" if allowed else "",
            f"Allowed: {_bounds(column)}" if column.kind == NUMBER else "",
            f"Built in: {', '.join(_built_in())}" if column.name == "technology" else "",
            f"Optional: {blank}" if not column.required else "",
            f"Or name the column: {', '.join(others)}" if others else "",
        )
        if line
    )


def _more(columns: Sequence[Column]) -> str:
    """Return the note on columns one may add: families by name, phase matrices in one line."""
    lines = ["You may add these columns:"]
    lines += [f"{c.name}: {c.meaning}" for c in columns if c.pattern]
    matrices = [c.key for c in columns if not c.pattern]
    if matrices:
        lines.append(f"{matrices[0]}, {matrices[1]} ... {matrices[-1]}: phase matrices, "
                     "in place of the sequence values")  # fmt: skip
    return "\n".join(lines)


def _bounds(column: Column) -> str:
    parts = [
        f"{word} {bound:g}"
        for word, bound in (("at least", column.lowest), ("above", column.above),
                            ("at most", column.highest))
        if bound is not None
    ]  # fmt: skip
    number = f"a number {' and '.join(parts)}".strip() if parts else "a number"
    return " or ".join([number, *(f"the word {word}" for word in column.words)])


def _built_in() -> list[str]:
    return [str(technology["technology"]) for technology in BUILT_IN_TECHNOLOGIES]


def _rule(column: Column, letter: str, limit_names: str) -> DataValidation | None:
    """Return the drop-down or number check of a column: it warns, it never forbids.

    Warnings only: the reader knows more spellings (0/1, N.O., BCA) than a list can show.
    """
    choices: Sequence[str] = column.choices
    strict = True
    if column.kind == PHASES:
        choices, strict = _PHASE_SETS, False
    elif column.name == "technology" and column.kind == TEXT:
        choices, strict = _built_in(), False
    if column.name == "limit" and limit_names:
        rule = DataValidation("list", limit_names, errorStyle="warning")
        rule.error = "No such limit: see the sheet `guide`."
    elif choices:
        rule = DataValidation("list", f'"{",".join(choices)}"', errorStyle="warning")
        rule.error = f"Expected one of: {', '.join(choices)}."
    elif column.kind == NUMBER and (test := _test(column, f"{letter}2")):
        rule = DataValidation("custom", test, errorStyle="warning")
        rule.error = f"Expected {_bounds(column)}."
    else:
        return None
    rule.showErrorMessage = strict
    rule.errorTitle = "Please check"
    rule.allow_blank = True
    rule.add(f"{letter}2:{letter}{_LAST_ROW}")
    return rule


def _test(column: Column, cell: str) -> str:
    """Return the formula of the bounds of a number, blank where it has none."""
    bounds = ((">=", column.lowest), (">", column.above), ("<=", column.highest))
    parts = [f"{cell}{sign}{bound:g}" for sign, bound in bounds if bound is not None]
    if not parts:
        return ""
    number = f"AND(ISNUMBER({cell}),{','.join(parts)})"
    if not column.words:
        return number
    words = [f'{cell}="{word}"' for word in column.words]
    return f"OR({number},{','.join(words)})"
