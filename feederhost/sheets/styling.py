"""How a result sheet looks: number formats by unit, marks of rows, widths.

Colours only repeat what a word in the row says.  The fills differ in lightness, so that they
stay apart in grey print and for colour-blind readers; text on them is always dark.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from openpyxl.cell import WriteOnlyCell
from openpyxl.comments import Comment
from openpyxl.styles import Alignment, Border, PatternFill, Side

from feederhost.errors import Severity
from feederhost.schema import Proof, State
from feederhost.sheets.cells import Cell
from feederhost.sheets.guide import INK, ink

if TYPE_CHECKING:
    from openpyxl.worksheet._write_only import WriteOnlyWorksheet

PAGES = ("summary",)  # sheets read as a page of text, not as a table
PAGE_WIDTHS = (34, 110)
GENERAL = "General"
# CIE lightness about 68, 81 and 93.
FAILED, MARKED, LIGHTLY = "E2955A", "B5CCE0", "F8EBC4"
_HEAD = "DCE3E8"
_SCIENTIFIC = "0.0E+00"
_WHOLE, _TENTHS, _EXACT = "#,##0", "#,##0.0", "#,##0.000"
# First match wins: the long endings stand before the short ones.
_FORMATS = (
    ("mismatch_pu", _SCIENTIFIC),
    ("fictitious_loss_kw", _SCIENTIFIC),
    ("multiplier", _SCIENTIFIC),
    ("margin", _SCIENTIFIC),
    ("unrounded_kw", _EXACT),
    ("upper_bound_kw", _EXACT),
    ("_pu", "0.0000"),
    ("_pct", "0.00"),
    ("_deg", "0.00"),
    ("_km", "0.000"),
    ("_a", "#,##0.0"),
)
_UNITS = {"pu": "0.0000", "%": "0.00", "pct": "0.00", "A": "#,##0.0", "kW": "#,##0.0",
          "kVA": "#,##0.0", "kvar": "#,##0.0"}  # fmt: skip
_POWER = ("kw", "kva", "kvar")
_BY_UNIT = ("value_at_limit", "limit_value")
_AT_LEAST = ("hosting_kw", "hosting_kva", "hosting_unrounded_kw")
_WRAPPED = ("value", "flags", "finding", "suggestion", "reference", "taps", "where", "condition")
# Sheets in whose rows the word of one of these columns is marked, as the second entry says.
_WORDS: dict[str, tuple[str, dict[str, str]]] = {
    "hosting": ("state", {State.HOSTED_BASE_VIOLATION: MARKED}),
    "audit": ("severity", {Severity.FATAL: FAILED, Severity.WARNING: LIGHTLY}),
    "conditions": ("holds", {"no": LIGHTLY}),
}
_LEAST_WIDTH, _MOST_WIDTH, _PROSE_WIDTH = 9, 34, 72
_FILTER_ARROW = 4  # characters its button and the indent take from the header
_LINE, _MOST_HEIGHT = 15.0, 405.0  # points: one line of text, and the tallest row there is
_FILLED = 0.9  # share of a line that wrapped words fill
_MARGIN = 3  # characters a cell leaves blank beside its text


@dataclass(frozen=True)
class Look:
    """The style of one cell; ``literal`` marks text that must not be taken for a formula."""

    number_format: str = GENERAL
    fill: str = ""
    bold: bool = False
    wrap: bool = False
    left: bool = False
    literal: bool = False
    head: bool = False


def styled_cell(sheet: WriteOnlyWorksheet, look: Look) -> WriteOnlyCell:
    """Return an empty cell of the given look."""
    cell = WriteOnlyCell(sheet)
    cell.font = ink(color=INK if look.head or not look.fill else "000000", bold=look.bold)
    cell.number_format = look.number_format
    cell.quotePrefix = look.literal
    if look.head:
        cell.border = Border(bottom=Side("thin", color=INK))
        cell.alignment = Alignment(horizontal="left", vertical="center", indent=1)
    elif look.left:
        # The indent keeps text off the numbers, which end at the border of the column before.
        cell.alignment = Alignment("left", vertical="top", wrap_text=look.wrap, indent=1)
    else:
        cell.alignment = Alignment(vertical="top")
    if look.fill or look.head:
        cell.fill = PatternFill("solid", fgColor=look.fill or _HEAD)
    return cell


def note(text: str) -> Comment:
    """Return a header's note in a box large enough to read it whole."""
    return Comment(text, "feederhost", height=24 + 17 * (1 + len(text) // 42), width=300)


def number_format(column: str, cells: Sequence[Cell]) -> str:
    """Return the display format of a column; what the cells hold stays exact.

    A column of power shows tenths unless all its values are whole; published hosting shows as
    many decimals as its values have, because a display must not round it up.
    """
    for ending, shown in _FORMATS:
        if column.endswith(ending):
            return shown
    if column.rpartition("_")[2] not in _POWER:
        return GENERAL
    numbers = [c for c in cells if isinstance(c, float) and not c.is_integer()]
    if not numbers:
        return _WHOLE
    if column == "hosting_kw":
        decimals = max(len(f"{n:f}".rstrip("0").partition(".")[2]) for n in numbers)
        return f"#,##0.{'0' * decimals}" if decimals else _WHOLE
    return _TENTHS


def base_looks(columns: Sequence[str], values: Sequence[Sequence[Cell]]) -> tuple[Look, ...]:
    """Return the look of every column's ordinary cells."""
    return tuple(
        Look(number_format(column, cells), wrap=column in _WRAPPED, left=_has_text(cells))
        for column, cells in zip(columns, values, strict=True)
    )


def _has_text(cells: Sequence[Cell]) -> bool:
    return any(isinstance(cell, str) for cell in cells)


def page_looks(columns: Sequence[str]) -> tuple[Look, ...]:
    """Return the looks of a sheet that is read as a page: bold keys, wrapped values."""
    return tuple(Look(bold=i == 0, wrap=True, left=True) for i in range(len(columns)))


def row_looks(
    sheet: str, columns: Mapping[str, int], row: Sequence[Cell], base: Sequence[Look]
) -> Sequence[Look]:
    """Return the looks of one row: ``base``, changed where a word of the row asks for it."""
    looks = list(base)
    word_column, fills = _WORDS.get(sheet, ("", {}))
    word = str(row[columns[word_column]]) if word_column in columns else ""
    if word in fills:
        place = columns[word_column]
        looks[place] = replace(looks[place], fill=fills[word], bold=fills[word] != LIGHTLY)
    if sheet != "hosting":
        return looks
    if "unit" in columns:
        for name in _BY_UNIT:
            if name in columns:
                shown = _UNITS.get(str(row[columns["unit"]]), GENERAL)
                looks[columns[name]] = replace(looks[columns[name]], number_format=shown)
    if word == State.CAPPED:
        for name in _AT_LEAST:
            if name in columns:
                shown = f'">= "{looks[columns[name]].number_format}'
                looks[columns[name]] = replace(looks[columns[name]], number_format=shown)
    place = columns.get("proof", -1)
    proof = row[place] if place >= 0 else None
    if proof == Proof.FAILED:
        looks = [replace(look, fill=look.fill or FAILED) for look in looks]
        looks[place] = replace(looks[place], bold=True)
    elif proof in (Proof.BRACKETED, Proof.AC_ONLY):
        looks[place] = replace(looks[place], fill=LIGHTLY)
    return looks


def width(column: str, cells: Sequence[Cell], look: Look) -> int:
    """Return a column width, in characters, at which header and cells can be read."""
    longest = max((_shown_length(cell, look.number_format) for cell in cells), default=0)
    most = _PROSE_WIDTH if look.wrap else _MOST_WIDTH
    return max(_LEAST_WIDTH, len(column) + _FILTER_ARROW, min(longest + _MARGIN, most))


def row_height(row: Sequence[Cell], looks: Sequence[Look], widths: Sequence[int]) -> float | None:
    """Return the height, in points, that a row's wrapped text needs; None where one line does.

    Not every spreadsheet measures the rows of a file it opens.
    """
    lines = 1
    for cell, look, wide in zip(row, looks, widths, strict=True):
        if look.wrap and isinstance(cell, str):
            lines = max(lines, sum(_lines(len(part), wide) for part in cell.split("\n")))
    return min(lines * _LINE, _MOST_HEIGHT) if lines > 1 else None


def _lines(length: int, wide: int) -> int:
    return 1 if length <= wide - _MARGIN else math.ceil(length / (wide * _FILLED))


def _shown_length(cell: Cell, shown: str) -> int:
    if isinstance(cell, str):
        return max(map(len, cell.split("\n")))
    if isinstance(cell, float) and shown != GENERAL:
        if "E" in shown:
            return len(shown)
        decimals = len(shown.partition(".")[2])
        return len(f">= {cell:,.{decimals}f}")
    return 0 if cell is None else min(len(str(cell)), 12)
