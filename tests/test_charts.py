"""Charts: the right rows, sorted, from the right cells, and legible without colour."""

from __future__ import annotations

import re
from pathlib import Path
from xml.etree import ElementTree
from zipfile import ZipFile

import numpy as np
import openpyxl
import pandas as pd
import pytest
from feederhost.sheets.cells import Table, plain
from feederhost.sheets.chart_data import Block, chart_blocks, data_rows
from feederhost.sheets.writing import write_result
from openpyxl.utils import range_boundaries

DRAWING = "{http://schemas.openxmlformats.org/drawingml/2006/main}"
CHART = "{http://schemas.openxmlformats.org/drawingml/2006/chart}"


def hosting(rows: list[tuple[object, ...]]) -> pd.DataFrame:
    columns = ["node", "technology", "phases", "distance_km", "state", "hosting_kw", "proof"]
    return pd.DataFrame(rows, columns=columns)


ROWS = [
    ("N3", "pv", None, 3.0, "hosted", 80.0, "proven"),
    ("N1", "pv", None, 1.0, "capped", 900.0, "not_needed"),
    ("N2", "pv", None, 2.0, "hosted", np.nan, "failed"),
    ("N4", "pv", None, 4.0, "hosted", 70.0, "bracketed"),
    ("N5", "pv", None, 2.5, "not_analysed", np.nan, ""),
    ("N1", "ev", None, 1.0, "hosted", 50.0, "ac_only"),
    ("N2", "ev", None, 2.0, "hosted_base_violation", 0.0, "proven"),
]


def profile(**columns: object) -> pd.DataFrame:
    table = {
        "node": ["N2", "N1", "N3"],
        "distance_km": [2.0, 1.0, 3.5],
        "base_pu": [0.98, 0.99, 0.97],
        "hosting_pu": [1.02, 1.01, 1.0497],
        "case": "light",
        "technology": "pv",
        "plant_node": "N3",
        "v_min_pu": 0.95,
        "v_max_pu": 1.05,
    }
    return pd.DataFrame(table | columns)


def blocks_of(**tables: pd.DataFrame) -> tuple[Block, ...]:
    plain_tables = {
        name: Table(
            tuple(table.columns),
            tuple(tuple(plain(v) for v in table[c].tolist()) for c in table.columns),
            len(table),
        )
        for name, table in tables.items()
    }
    return chart_blocks(plain_tables)


def column(block: Block, header: str) -> tuple[object, ...]:
    return block.columns[block.headers.index(header)]


def test_bars_stand_by_distance_and_by_what_is_proven() -> None:
    pv, ev = blocks_of(hosting=hosting(ROWS))
    assert pv.title == "Hosting by node: pv"
    assert pv.headers == ("node", "proven", "capped: at least", "bracketed or ac_only")
    assert pv.columns == (
        ("N1", "N2", "N3", "N4"),
        (None, None, 80.0, None),
        (900.0, None, None, None),
        (None, None, None, 70.0),
    )
    assert pv.subtitle == "1 failed and without a bar"
    assert ev.title == "Hosting by node: ev"
    assert ev.columns == (("N1", "N2"), (None, 0.0), (50.0, None))
    assert ev.subtitle == ""


def test_phases_and_feeders_are_named_where_they_are_needed() -> None:
    table = hosting([("N1", "pv", "A", 1.0, "hosted", 5.0, "proven"),
                     ("N1", "pv", "ABC", 1.0, "hosted", 9.0, "proven")])  # fmt: skip
    assert blocks_of(hosting=table)[0].columns[0] == ("N1 A", "N1 ABC")
    table["feeder"] = ["Mill", "Quay"]
    assert blocks_of(hosting=table)[0].columns[0] == ("Mill N1 A", "Quay N1 ABC")
    table["feeder"] = "Mill"
    assert blocks_of(hosting=table)[0].columns[0] == ("N1 A", "N1 ABC")


def test_of_many_nodes_the_smallest_are_shown_and_that_is_said() -> None:
    count = 10_000
    rows = [(f"N{i}", "pv", None, float(count - i), "hosted", float((i * 7919) % count), "proven")
            for i in range(count)]  # fmt: skip
    rows[0] = ("N0", "pv", None, 1.0, "hosted", np.nan, "failed")
    (block,) = blocks_of(hosting=hosting(rows))
    assert sorted(column(block, "proven")) == [float(v) for v in range(1, 61)]
    assert block.subtitle == "the 60 smallest of 10,000 rows, 1 failed and without a bar"
    numbers = [int(str(name)[1:]) for name in block.columns[0]]
    assert numbers == sorted(numbers, reverse=True)


@pytest.mark.parametrize(
    "table",
    [
        hosting([]),
        hosting([("N1", "pv", None, 1.0, "hosted", np.nan, "failed")]),
        hosting([("N1", "pv", None, 1.0, "not_analysed", np.nan, "")]),
        pd.DataFrame({"node": ["N1"]}),
    ],
)
def test_without_a_number_there_is_no_chart(tmp_path: Path, table: pd.DataFrame) -> None:
    assert blocks_of(hosting=table) == ()
    write_result({"hosting": table}, tmp_path / "r.xlsx")
    assert openpyxl.load_workbook(tmp_path / "r.xlsx").sheetnames == ["hosting"]


def test_profile_is_sorted_and_the_band_is_a_pair_of_lines() -> None:
    (block,) = blocks_of(profile=profile())
    assert block.title == "Voltage against distance: pv at N3, case light"
    assert block.headers == (
        "distance_km", "base", "plant at its hosting", "plant node",
        "distance_km", "v_min_pu", "v_max_pu",
    )  # fmt: skip
    assert block.columns == (
        (1.0, 2.0, 3.5),
        (0.99, 0.98, 0.97),
        (1.01, 1.02, 1.0497),
        (None, None, 1.0497),
        (1.0, 3.5),
        (0.95, 0.95),
        (1.05, 1.05),
    )


def test_limits_that_differ_by_node_are_shown_at_every_node() -> None:
    (block,) = blocks_of(profile=profile(v_max_pu=[1.05, 1.04, 1.05], v_min_pu=np.nan))
    assert block.headers[4:] == ("distance_km", "v_max_pu")
    assert block.columns[4:] == ((1.0, 2.0, 3.5), (1.04, 1.05, 1.05))


def test_a_profile_per_technology_plant_and_case() -> None:
    both = pd.concat([profile(), profile(technology="ev", plant_node="N2", case="peak"),
                      profile(technology="ev", plant_node="N9", hosting_pu=np.nan)])  # fmt: skip
    blocks = blocks_of(profile=both)
    assert [b.title for b in blocks] == [
        "Voltage against distance: pv at N3, case light",
        "Voltage against distance: ev at N2, case peak",
        "Voltage against distance: ev at N9, case light",
    ]
    assert blocks[2].headers == ("distance_km", "base", "distance_km", "v_min_pu", "v_max_pu")


def test_blocks_stand_side_by_side() -> None:
    blocks = blocks_of(hosting=hosting(ROWS), profile=profile())
    rows = list(data_rows(blocks))
    assert {len(row) for row in rows} == {5 + 4 + 8}
    assert rows[0][0] == "Hosting by node: pv"
    assert rows[0][5] == "Hosting by node: ev"
    assert rows[1][5:9] == ["node", "proven", "bracketed or ac_only", None]
    assert rows[2][:4] == ["N1", None, 900.0, None]
    assert rows[4][9:12] == [3.5, 0.97, 1.0497]
    assert len(rows) == 2 + 4


# --- what the spreadsheet gets to draw -------------------------------------------------------


@pytest.fixture
def drawn(tmp_path: Path) -> tuple[openpyxl.Workbook, list[ElementTree.Element]]:
    tables = {"hosting": hosting(ROWS), "profile": profile(), "run": pd.DataFrame({"key": ["a"]})}
    write_result(tables, tmp_path / "r.xlsx")
    with ZipFile(tmp_path / "r.xlsx") as archive:
        names = sorted(n for n in archive.namelist() if n.startswith("xl/charts/chart"))
        charts = [ElementTree.fromstring(archive.read(name)) for name in names]
    return openpyxl.load_workbook(tmp_path / "r.xlsx"), charts


Drawn = tuple[openpyxl.Workbook, list[ElementTree.Element]]


def words(element: ElementTree.Element | None) -> str:
    return " / ".join(t.text or "" for t in element.iter(f"{DRAWING}t"))


def cells_of(book: openpyxl.Workbook, formula: str) -> list[object]:
    match = re.fullmatch(r"'(\w+)'!(.+)", formula)
    left, top, right, bottom = range_boundaries(match[2])
    assert left == right
    return [book[match[1]].cell(row, left).value for row in range(top, bottom + 1)]


def refers(series: ElementTree.Element, part: str) -> str:
    return next(series.find(f"{CHART}{part}").iter(f"{CHART}f")).text


def test_order_of_the_sheets(drawn: Drawn) -> None:
    assert drawn[0].sheetnames == ["hosting", "charts", "profile", "run", "chart_data"]
    assert len(drawn[1]) == 3


def test_titles_and_axes(drawn: Drawn) -> None:
    expected = [
        ("Hosting by node: pv / 1 failed and without a bar",
         {"node (phases), by distance from the source", "hosting, kW"}),
        ("Hosting by node: ev", {"node (phases), by distance from the source", "hosting, kW"}),
        ("Voltage against distance: pv at N3, case light",
         {"distance from the source, km", "voltage, pu"}),
    ]  # fmt: skip
    for chart, (title, axis_titles) in zip(drawn[1], expected, strict=True):
        assert words(chart.find(f"{CHART}chart/{CHART}title")) == title
        area = chart.find(f"{CHART}chart/{CHART}plotArea")
        axes = [e for e in area if e.tag.endswith(("catAx", "valAx"))]
        assert len(axes) == 2
        assert {words(axis.find(f"{CHART}title")) for axis in axes} == axis_titles
        assert [axis.find(f"{CHART}delete").get("val") for axis in axes] == ["0", "0"]


def test_bars_refer_to_their_cells(drawn: Drawn) -> None:
    book, charts = drawn
    seen = {}
    for series in charts[0].iter(f"{CHART}ser"):
        (name,) = cells_of(book, refers(series, "tx"))
        assert cells_of(book, refers(series, "cat")) == ["N1", "N2", "N3", "N4"]
        seen[name] = cells_of(book, refers(series, "val"))
    assert seen == {
        "proven": [None, None, 80, None],
        "capped: at least": [900, None, None, None],
        "bracketed or ac_only": [None, None, None, 70],
    }


def test_points_and_lines_refer_to_their_cells(drawn: Drawn) -> None:
    book, charts = drawn
    seen = {}
    for series in charts[2].iter(f"{CHART}ser"):
        (name,) = cells_of(book, refers(series, "tx"))
        parts = (cells_of(book, refers(series, part)) for part in ("xVal", "yVal"))
        seen[name] = dict(zip(*parts, strict=True))
    assert seen == {
        "base": {1: 0.99, 2: 0.98, 3.5: 0.97},
        "plant at its hosting": {1: 1.01, 2: 1.02, 3.5: 1.0497},
        "plant node": {1: None, 2: None, 3.5: 1.0497},
        "v_min_pu": {1: 0.95, 3.5: 0.95},
        "v_max_pu": {1: 1.05, 3.5: 1.05},
    }


def test_series_differ_in_more_than_colour(drawn: Drawn) -> None:
    _, charts = drawn
    bars = list(charts[0].iter(f"{CHART}ser"))
    hatched = [next(s.iter(f"{DRAWING}pattFill"), None) is not None for s in bars]
    assert hatched == [False, False, True]
    solid = [
        s.find(f"{CHART}spPr/{DRAWING}solidFill/{DRAWING}srgbClr").get("val") for s in bars[:2]
    ]
    # Sum of the three channels: the fill of proven bars is less than half as light.
    dark, pale = (sum(bytes.fromhex(colour)) for colour in solid)
    assert dark < pale / 2
    lines = list(charts[2].iter(f"{CHART}ser"))
    symbols = [s.find(f"{CHART}marker/{CHART}symbol").get("val") for s in lines]
    assert symbols == ["circle", "diamond", "triangle", "none", "none"]
    path = f"{CHART}spPr/{DRAWING}ln/{DRAWING}prstDash"
    dashes = [s.find(path).get("val") for s in lines[3:]]
    assert dashes == ["sysDot", "dash"]


def test_the_voltage_axis_holds_every_point_and_both_limits(drawn: Drawn) -> None:
    scaling = [s for s in drawn[1][2].iter(f"{CHART}scaling") if s.find(f"{CHART}max") is not None]
    (axis,) = scaling
    # Half a hundredth beyond the limits 0.95 and 1.05, outwards to a full hundredth.
    assert float(axis.find(f"{CHART}min").get("val")) == pytest.approx(0.94)
    assert float(axis.find(f"{CHART}max").get("val")) == pytest.approx(1.06)


def test_no_charts_in_csv(tmp_path: Path) -> None:
    tables = {"hosting": hosting(ROWS), "profile": profile()}
    write_result(tables, tmp_path / "r", as_csv=True)
    assert sorted(f.name for f in (tmp_path / "r").iterdir()) == ["hosting.csv", "profile.csv"]


def test_names_that_look_like_formulas_stay_names(tmp_path: Path) -> None:
    table = hosting([("=1+1", "pv", None, 1.0, "hosted", 5.0, "proven")])
    write_result({"hosting": table}, tmp_path / "r.xlsx")
    cell = openpyxl.load_workbook(tmp_path / "r.xlsx")["chart_data"]["A3"]
    assert (cell.value, cell.data_type) == ("=1+1", "s")
