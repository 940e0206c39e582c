"""The charts of a result workbook, drawn by the spreadsheet from the sheet ``chart_data``.

Bars differ in lightness and hatching, points in shape, lines in their dashes: nothing depends
on colour.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

from openpyxl.chart import BarChart, Reference, ScatterChart, Series
from openpyxl.chart.data_source import AxDataSource, StrRef
from openpyxl.chart.marker import Marker
from openpyxl.chart.series import SeriesLabel
from openpyxl.chart.shapes import GraphicalProperties
from openpyxl.chart.text import RichText, Text
from openpyxl.chart.title import Title
from openpyxl.drawing.fill import ColorChoice, PatternFillProperties
from openpyxl.drawing.line import LineProperties
from openpyxl.drawing.text import (
    CharacterProperties,
    Paragraph,
    ParagraphProperties,
    RegularTextRun,
    RichTextProperties,
)
from openpyxl.utils import get_column_letter
from openpyxl.worksheet.pagebreak import Break

from feederhost.sheets.chart_data import (
    BASE,
    CAPPED,
    CHART_DATA,
    FIRST_ROW,
    HOSTING,
    LOWER,
    PLANT,
    PROVEN,
    RESERVED,
    ROOM,
    UNPROVEN,
    UPPER,
    Block,
)
from feederhost.sheets.guide import INK, page

if TYPE_CHECKING:
    from openpyxl.chart._chart import ChartBase
    from openpyxl.worksheet._write_only import WriteOnlyWorksheet

_DARK, _MIDDLE, _PALE, _GRID = "2B4C6F", "8FA9BF", "D9E2EA", "D5D9DC"
_SIGNAL = "C8641E"
_WIDTH, _HEIGHT = 30.0, 10.5  # cm: two charts on a landscape page
_ROWS = 21  # rows of the sheet one chart takes
_PER_PAGE = 2
_TITLE, _SMALL, _AXIS = 1300, 1000, 900  # hundredths of a point
_MANY_POINTS = 300  # above this, points are drawn smaller
_PU_STEP = 0.01  # the voltage axis starts and ends on a multiple of this
# Fill, and hatching over it.
_BARS = {
    PROVEN: (_DARK, ""), CAPPED: (_PALE, ""), UNPROVEN: (_DARK, "wdUpDiag"),
    RESERVED: (_DARK, ""), ROOM: (_PALE, ""),
}  # fmt: skip
# Marker, its size, fill, outline.
_POINTS = {
    BASE: ("circle", 6, _MIDDLE, _DARK),
    HOSTING: ("diamond", 7, _DARK, _DARK),
    PLANT: ("triangle", 14, _SIGNAL, "000000"),
}
_DASHES = {LOWER: "sysDot", UPPER: "dash"}


def place_charts(sheet: WriteOnlyWorksheet, blocks: Sequence[Block]) -> None:
    """Put one chart per block on a sheet, one below the other.

    Parameters
    ----------
    sheet : WriteOnlyWorksheet
        An empty sheet of a workbook that gets the blocks, side by side, on ``chart_data``.
    blocks : sequence of Block
        In the order of ``chart_data``.
    """
    page(sheet)
    sheet.sheet_view.showGridLines = False
    first = 1
    for number, block in enumerate(blocks):
        draw = _profile_chart if block.is_profile else _hosting_chart
        chart = draw(block, first)
        chart.width, chart.height = _WIDTH, _HEIGHT
        sheet.add_chart(chart, f"A{1 + number * _ROWS}")
        if number % _PER_PAGE == _PER_PAGE - 1 and number < len(blocks) - 1:
            sheet.row_breaks.append(Break((number + 1) * _ROWS))
        first += len(block.headers) + 1


def _hosting_chart(block: Block, first: int) -> BarChart:
    chart = BarChart()
    chart.type, chart.grouping, chart.overlap, chart.gapWidth = "col", "stacked", 100, 40
    _dress(chart, block, block.axis, block.measure)
    chart.y_axis.number_format, chart.y_axis.scaling.min = "#,##0", 0
    chart.x_axis.tickLblSkip, chart.x_axis.noMultiLvlLbl = 1, True
    upright = len(block.columns[0]) > 12 or max(len(str(n)) for n in block.columns[0]) > 8
    chart.x_axis.txPr = _label_text(upright)
    names = AxDataSource(strRef=StrRef(f=_cells(first, len(block.columns[0]))))
    for place, header in enumerate(block.headers[1:], 1):
        series = Series(_reference(first + place, len(block.columns[place])))
        series.tx = _series_name(first + place)
        series.cat = names
        fill, hatch = _BARS[header]
        properties = GraphicalProperties(solidFill=fill, ln=LineProperties(solidFill=_DARK, w=9525))
        if hatch:
            properties = GraphicalProperties(ln=LineProperties(solidFill=_DARK, w=9525))
            properties.pattFill = PatternFillProperties(
                prst=hatch, fgClr=ColorChoice(srgbClr=fill), bgClr=ColorChoice(srgbClr="FFFFFF")
            )
        series.graphicalProperties = properties
        series.invertIfNegative = False
        chart.series.append(series)
    return chart


def _profile_chart(block: Block, first: int) -> ScatterChart:
    chart = ScatterChart()
    chart.style, chart.scatterStyle = 13, "lineMarker"
    _dress(chart, block, "distance from the source, km", "voltage, pu")
    chart.x_axis.number_format, chart.x_axis.scaling.min = "0.0", 0
    chart.x_axis.majorGridlines = None
    chart.y_axis.number_format = "0.00"
    voltages = [
        float(cell)
        for header, cells in zip(block.headers, block.columns, strict=True)
        if header != "distance_km"
        for cell in cells
        if isinstance(cell, int | float)
    ]
    chart.y_axis.scaling.min = round(math.floor(min(voltages) / _PU_STEP - 0.5) * _PU_STEP, 2)
    chart.y_axis.scaling.max = round(math.ceil(max(voltages) / _PU_STEP + 0.5) * _PU_STEP, 2)
    many = len(block.columns[0]) > _MANY_POINTS
    distance = first
    for place, (header, cells) in enumerate(zip(block.headers, block.columns, strict=True)):
        if header == "distance_km":
            distance = first + place
            continue
        series = Series(_reference(first + place, len(cells)), _reference(distance, len(cells)))
        series.tx = _series_name(first + place)
        series.smooth = False
        if header in _DASHES and len(cells) == 2:
            series.marker = Marker(symbol="none")
            line = LineProperties(solidFill="000000", prstDash=_DASHES[header], w=19050)
            series.graphicalProperties = GraphicalProperties(ln=line)
        else:
            symbol, size, fill, outline = _POINTS.get(header, ("dash", 5, "000000", "000000"))
            size = max(3, size // 2) if many and header != PLANT else size
            series.marker = Marker(symbol=symbol, size=size)
            edge = LineProperties(solidFill=outline, w=12700)
            series.marker.graphicalProperties = GraphicalProperties(solidFill=fill, ln=edge)
            series.graphicalProperties = GraphicalProperties(ln=LineProperties(noFill=True))
        chart.series.append(series)
    return chart


def _dress(chart: ChartBase, block: Block, x_title: str, y_title: str) -> None:
    """Give a chart its title, its axes with their titles, and its legend."""
    chart.title = _title([(block.title, _TITLE, True), (block.subtitle, _SMALL, False)])
    chart.x_axis.title = _title([(x_title, _SMALL, False)])
    chart.y_axis.title = _title([(y_title, _SMALL, False)])
    chart.legend.position = "b"
    chart.legend.overlay = False
    for axis in (chart.x_axis, chart.y_axis):
        # openpyxl leaves this open, which hides the axis in some spreadsheets.
        axis.delete = False
        axis.tickLblPos = "low"
        axis.majorTickMark = "out"
        axis.txPr = _label_text(False)
        axis.graphicalProperties = GraphicalProperties(ln=LineProperties(solidFill=INK, w=9525))
    pale = GraphicalProperties(ln=LineProperties(solidFill=_GRID, w=6350))
    chart.y_axis.majorGridlines.spPr = pale


def _title(lines: Sequence[tuple[str, int, bool]]) -> Title:
    paragraphs = []
    for text, size, bold in lines:
        if text:
            style = CharacterProperties(sz=size, b=bold, solidFill=INK)
            run = RegularTextRun(rPr=style, t=text)
            paragraphs.append(Paragraph(pPr=ParagraphProperties(defRPr=style), r=[run]))
    return Title(tx=Text(rich=RichText(p=paragraphs)), overlay=False)


def _label_text(upright: bool) -> RichText:
    turn = RichTextProperties(rot=-5400000 if upright else 0, vert="horz")
    style = CharacterProperties(sz=_AXIS, solidFill=INK)
    return RichText(
        bodyPr=turn, p=[Paragraph(pPr=ParagraphProperties(defRPr=style), endParaRPr=style)]
    )


def _series_name(column: int) -> SeriesLabel:
    place = f"'{CHART_DATA}'!${get_column_letter(column)}${FIRST_ROW - 1}"
    return SeriesLabel(strRef=StrRef(f=place))


def _reference(column: int, length: int) -> Reference:
    return Reference(range_string=_cells(column, length))


def _cells(column: int, length: int) -> str:
    letter = get_column_letter(column)
    return f"'{CHART_DATA}'!${letter}${FIRST_ROW}:${letter}${FIRST_ROW + length - 1}"
