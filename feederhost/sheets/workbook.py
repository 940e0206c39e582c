"""A result as an .xlsx workbook: one styled sheet per table, and the charts."""

from __future__ import annotations

import math
import os
from collections.abc import Iterator, Sequence
from contextlib import suppress
from dataclasses import replace
from datetime import date, datetime, time
from pathlib import Path
from typing import TYPE_CHECKING

from openpyxl import Workbook
from openpyxl.cell import WriteOnlyCell
from openpyxl.utils import get_column_letter
from openpyxl.worksheet.page import PageMargins

from feederhost.schema import RESULT
from feederhost.sheets.cells import Cell, Table, encode_escapes, starts_formula
from feederhost.sheets.chart_data import CHART_DATA, Block, chart_blocks, data_rows
from feederhost.sheets.charts import place_charts
from feederhost.sheets.guide import page
from feederhost.sheets.styling import (
    PAGE_WIDTHS,
    PAGES,
    Look,
    base_looks,
    note,
    page_looks,
    row_height,
    row_looks,
    styled_cell,
    width,
)
from feederhost.sheets.template import save_settled

if TYPE_CHECKING:
    from openpyxl.worksheet._write_only import WriteOnlyWorksheet

CHARTS = "charts"
_IDENTITY = ("feeder", "node", "technology", "phases")
_PAGE_WIDTH = 190  # characters a landscape page carries in a size one can read
_MOST_CHARACTERS = 32_767  # of an .xlsx cell
_DATE, _DATE_TIME = "yyyy-mm-dd", "yyyy-mm-dd hh:mm:ss"


def write_book(tables: dict[str, Table], path: Path) -> None:
    """Write the tables and, after ``hosting``, their charts; the file is on the disk on return.

    Parameters
    ----------
    tables : dict of str to Table
        By sheet name, in the order of the sheets.
    path : Path
        The file to write; what stands there is overwritten.

    Raises
    ------
    OSError
        The file cannot be written.
    """
    book = Workbook(write_only=True)
    try:
        _fill(book, tables)
        save_settled(book, path)
    except BaseException:
        # Sheets are streams; one left open complains when it is collected.
        for sheet in book.worksheets:
            with suppress(Exception):
                sheet.close()
        raise
    _settle(path)


def _fill(book: Workbook, tables: dict[str, Table]) -> None:
    blocks = chart_blocks(tables)
    for name, table in tables.items():
        _write_sheet(book.create_sheet(name), name, table)
        if name == "hosting" and blocks:
            place_charts(book.create_sheet(CHARTS), blocks)
    if blocks and "hosting" not in tables:
        place_charts(book.create_sheet(CHARTS), blocks)
    if blocks:
        _write_chart_data(book.create_sheet(CHART_DATA), blocks)


def _write_sheet(sheet: WriteOnlyWorksheet, name: str, table: Table) -> None:
    as_page = name in PAGES
    looks = page_looks(table.headers) if as_page else base_looks(table.headers, table.columns)
    widths = [
        width(header, cells, look)
        for header, cells, look in zip(table.headers, table.columns, looks, strict=True)
    ]
    if as_page:
        widths[: len(PAGE_WIDTHS)] = PAGE_WIDTHS[: len(widths)]
    banner = RESULT[name].banner if name in RESULT else ""
    head = 2 if banner else 1
    for place, wide in enumerate(widths, 1):
        sheet.column_dimensions[get_column_letter(place)].width = wide
    fixed = 0
    while fixed < len(table.headers) and table.headers[fixed] in _IDENTITY:
        fixed += 1
    last = get_column_letter(max(len(table.headers), 1))
    # Reading across many columns needs the names of the row in sight, reading few does not.
    fixed = fixed if sum(widths) > _PAGE_WIDTH else 0
    sheet.freeze_panes = f"{get_column_letter(fixed + 1)}{head + 1}"
    if as_page:
        sheet.sheet_view.showGridLines = False
    elif table.headers:
        sheet.auto_filter.ref = f"A{head}:{last}{head + table.length}"
    page(sheet, max(1, math.ceil(sum(widths) / _PAGE_WIDTH)))
    sheet.page_margins = PageMargins(0.4, 0.4, 0.5, 0.6, 0.3, 0.3)
    sheet.print_title_rows = f"1:{head}"
    if fixed:
        sheet.print_title_cols = f"A:{get_column_letter(fixed)}"

    stock: dict[Look, WriteOnlyCell] = {}
    if banner:
        sheet.append(_filled(sheet, [banner], [Look(bold=True)], stock))
    sheet.append(_head(sheet, name, table.headers))
    places = {header: i for i, header in enumerate(table.headers)}
    for number, row in enumerate(zip(*table.columns, strict=True), head + 1):
        height = row_height(row, looks, widths)
        if height:
            sheet.row_dimensions[number].height = height
        sheet.append(_filled(sheet, row, row_looks(name, places, row, looks), stock))


def _write_chart_data(sheet: WriteOnlyWorksheet, blocks: Sequence[Block]) -> None:
    page(sheet)
    sheet.freeze_panes = "A3"
    for place, header in enumerate((h for b in blocks for h in (*b.headers, "")), 1):
        sheet.column_dimensions[get_column_letter(place)].width = max(12, len(header) + 2)
    stock: dict[Look, WriteOnlyCell] = {}
    for number, row in enumerate(data_rows(blocks), 1):
        sheet.append(_filled(sheet, row, [Look(bold=number <= 2)] * len(row), stock))


def _head(sheet: WriteOnlyWorksheet, name: str, headers: Sequence[str]) -> list[WriteOnlyCell]:
    meanings = dict(RESULT[name].columns) if name in RESULT else {}
    cells = []
    for header in headers:
        look = Look(head=True, bold=True, literal=starts_formula(header))
        cell = styled_cell(sheet, look)
        _put(cell, header)
        if header in meanings:
            cell.comment = note(meanings[header])
        cells.append(cell)
    return cells


def _filled(
    sheet: WriteOnlyWorksheet,
    row: Sequence[Cell],
    looks: Sequence[Look],
    stock: dict[Look, WriteOnlyCell],
) -> Iterator[WriteOnlyCell | None]:
    """Yield the styled cells of one row.

    Styling a cell is slow, so one cell per look is kept and filled anew; a row that is being
    written takes its cells one at a time, so each is out before the next value goes in.
    """
    for value, plain_look in zip(row, looks, strict=True):
        look = plain_look
        if isinstance(value, str) and starts_formula(value):
            look = replace(look, literal=True)
        elif isinstance(value, date):
            look = replace(look, number_format=_DATE_TIME if _has_time(value) else _DATE)
        if value is None and not look.fill:
            yield None
            continue
        if look not in stock:
            stock[look] = styled_cell(sheet, look)
        _put(stock[look], value)
        yield stock[look]


def _put(cell: WriteOnlyCell, value: Cell) -> None:
    if isinstance(value, str):
        cell.value = encode_escapes(value)[:_MOST_CHARACTERS]
        # Whatever it looks like, formula or error word, it is text.
        cell.data_type = "s"
    elif isinstance(value, int | float) and not isinstance(value, bool):
        # As text of the number: openpyxl itself would cut it to 16 digits.
        cell.value = repr(value)
        cell.data_type = "n"
    else:
        cell.value = value


def _has_time(value: date) -> bool:
    return isinstance(value, datetime) and value.time() != time()


def _settle(path: Path) -> None:
    """Have the file on the disk before it takes the place of another."""
    with path.open("rb+") as stream:
        os.fsync(stream.fileno())
