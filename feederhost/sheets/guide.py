"""The `guide` sheet: how to fill in a feeder workbook, in words; readers ignore it."""

from __future__ import annotations

from collections.abc import Iterable
from textwrap import wrap
from typing import Any

from openpyxl.styles import Alignment, Border, Font, Side
from openpyxl.worksheet.hyperlink import Hyperlink
from openpyxl.worksheet.properties import PageSetupProperties
from openpyxl.worksheet.worksheet import Worksheet

from feederhost.schema import INPUT
from feederhost.settings import sheet_settings

GUIDE = "guide"
INK = "22303C"
_TEXT_WIDTH = 104

_STEPS = (
    ("1", "One workbook holds one radial feeder. You need `source` and `lines`, and nearly always "
          "`conductors` and `loads`."),
    ("2", "Row 1 of each sheet names the columns: one item per row below it. Empty sheets may be "
          "left or deleted."),
    ("3", "Point at a column name: a note gives its meaning, unit, default and allowed values."),
    ("4", "Bold on dark, with * in the note: required. The others may stay blank (the default "
          "is listed in the audit)."),
    ("5", "A row whose first cell starts with # is a comment. Delete the '# ' to use an example "
          "row, or delete the row."),
    ("6", "Save, then run:  feederhost check FILE.xlsx  - it names every fault by sheet, row and "
          "column, all at once."),
    ("7", "Then run:  feederhost host FILE.xlsx  - how much fits at every node, and what stops "
          "it.  (--help tells the rest.)"),
)  # fmt: skip

_CELLS = (
    ("units", "The unit stands in the column name: length_km, rating_a. For another unit rename "
              "the column (length_ft); the note lists them."),
    ("numbers", "Plain numbers: no unit, no % sign, no 'n/a'. Unknown and optional: leave blank."),
    ("names", "Node names are text: 101 and 101.0 are one node, N-7 and n-7 are two."),
    ("formulas", "Number columns may hold formulas: the value last calculated and saved counts. "
                 "Hidden rows count like others."),
    ("power factor", "0 to 1, never negative; `vars` says absorb or inject. Give kvar or "
                     "power_factor, never both."),
    ("lines", "Conductor and length, or impedances of its own (these win). Direction does not "
              "matter. No impedance: a switch."),
    ("ratings", "Each closed line needs rating_a, in `lines` or `conductors`; the word "
                "'unlimited' is allowed, and reported."),
    ("phases", "ABC, A, BC ... All blank: the feeder is judged balanced - not valid on "
               "single-phase laterals."),
    ("matrices", "`conductors` also takes phase matrices: columns r_aa_ohm_per_km, "
                 "x_ab_ohm_per_km ... b_cc_us_per_km."),
)  # fmt: skip

_STUDY = (
    ("loads", "Peak demand, before any generation is taken off; rows of one node add up."),
    ("cases", "Each case scales loads and plants: 1 = peak or rating, 0 = off. None: peak "
              "(1, pv 0, ev 1) and light (0.3, pv 1, ev 0)."),
    ("classes", "A column load_scale.homes in `cases` replaces load_scale for loads of class "
                "'homes'."),
    ("limits", "`limits` lists every limit at its default as a comment: delete the '# ' and "
               "change the value."),
)  # fmt: skip

_CAUTIONS = (
    ("one at a time", "Hosting is for one plant alone, on top of `generators`. Values of several "
                      "nodes do not add up."),
    ("minimum load", "PV hosting rests on the lowest daytime load. If it is not measured, say so "
                     "in `basis`."),
    ("services", "Transformers and service drops not entered still drop voltage: tighten "
                 "v_min_primary_pu, v_max_primary_pu."),
    ("head", "Without transformer_kva the bank is not checked; without short_circuit_mva the "
             "source counts as stiff."),
)  # fmt: skip


def ink(size: int = 11, bold: bool = False, color: str = INK, **more: Any) -> Font:
    """Return a font with its family named: without a name spreadsheets fall back to serifs."""
    return Font(name="Calibri", size=size, bold=bold, color=color, **more)


def page(sheet: Worksheet, pages_wide: int = 1) -> None:
    """Set up printing: landscape, so many pages wide, sheet name and page number below."""
    sheet.page_setup.orientation = "landscape"
    sheet.sheet_properties.pageSetUpPr = PageSetupProperties(fitToPage=True)
    sheet.page_setup.fitToWidth = pages_wide
    sheet.page_setup.fitToHeight = 0
    sheet.oddFooter.center.text = "&A   &P / &N"


def write_guide(sheet: Worksheet) -> str:
    """Write the guide of the blank template; return the cell range of the limit names."""
    _frame(sheet, "How to fill in this feeder workbook")
    row = _section(sheet, 3, "Start here", _STEPS)
    row = _section(sheet, row, "Filling in cells", _CELLS)
    row = _section(sheet, row, "Cases and limits", _STUDY)
    row = _section(sheet, row, "Cautions", _CAUTIONS)
    first_sheet = row + 1
    row = _section(sheet, row, "The sheets (click to go there)", [
        (s.name, f"{'* required: ' if s.required else ''}{s.meaning}") for s in INPUT.values()
    ])  # fmt: skip
    for number, name in enumerate(INPUT, first_sheet):
        cell = sheet.cell(number, 1)
        cell.hyperlink = Hyperlink(ref=cell.coordinate, location=f"'{name}'!A1")
        cell.font = ink(bold=True, underline="single")
    limits = sheet_settings()
    _section(sheet, row, "Limits and their defaults", [
        (f.name, f"{_default(f.default, f.metadata['unit'])} - {f.metadata['meaning']}")
        for f in limits
    ])  # fmt: skip
    return f"{GUIDE}!$A${row + 1}:$A${row + len(limits)}"


def write_notes(sheet: Worksheet, notes: str) -> None:
    """Write the notes of a filled workbook, a paragraph per blank-line-separated block."""
    title, _, text = notes.strip().partition("\n")
    _frame(sheet, title.rstrip("."))
    row = 3
    for paragraph in text.strip().split("\n\n"):
        for line in wrap(" ".join(paragraph.split()), _TEXT_WIDTH):
            sheet.cell(row, 1, line).data_type = "s"
            sheet.cell(row, 1).font = ink()
            row += 1
        row += 1
    sheet.cell(row, 1, "Point at a column name on any sheet to read its meaning and unit.")
    sheet.cell(row, 1).font = ink(italic=True)


def _default(value: Any, unit: str) -> str:
    if value is None:
        return "blank"
    return f"{value:g} {unit}".removesuffix(" -")


def _frame(sheet: Worksheet, title: str) -> None:
    page(sheet)
    sheet.sheet_view.showGridLines = False
    sheet.column_dimensions["A"].width = 24
    sheet.column_dimensions["B"].width = _TEXT_WIDTH
    sheet.cell(1, 1, title).data_type = "s"
    sheet.cell(1, 1).font = ink(16, bold=True)


def _section(sheet: Worksheet, row: int, title: str, lines: Iterable[tuple[str, str]]) -> int:
    """Write a titled block from ``row`` on; return the row where the next may start."""
    for column in (1, 2):
        sheet.cell(row, column).border = Border(bottom=Side("thin", color=INK))
    sheet.cell(row, 1, title).font = ink(12, bold=True)
    for topic, text in lines:
        row += 1
        sheet.cell(row, 1, topic).font = ink(bold=True)
        sheet.cell(row, 1).alignment = Alignment(horizontal="left", vertical="top")
        sheet.cell(row, 2, text.replace("`", "'")).font = ink()
        sheet.cell(row, 2).alignment = Alignment(wrap_text=True, vertical="top")
    return row + 2
