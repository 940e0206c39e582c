"""The look of a result workbook: order, formats, marks, paper; and another programme opens it."""

from __future__ import annotations

import shutil
import subprocess
from itertools import pairwise
from pathlib import Path
from zipfile import ZipFile

import numpy as np
import pandas as pd
import pytest
from feederhost.schema import RESULT
from feederhost.sheets.reading import read_workbook
from feederhost.sheets.styling import FAILED, LIGHTLY, MARKED
from feederhost.sheets.writing import write_result

from result_samples import book_of, column_of, hosting, read_rows, result


@pytest.mark.parametrize("as_csv", [False, True])
def test_sheets_and_columns_in_the_order_of_the_schema(tmp_path: Path, as_csv: bool) -> None:
    tables = {
        "own": pd.DataFrame({"a": [1]}),
        "run": result()["run"],
        "hosting": pd.DataFrame({"proof": ["proven"], "extra": ["x"], "node": ["N1"]}),
        "summary": result()["summary"],
    }
    write_result(tables, tmp_path / "r", as_csv=as_csv)
    raw = read_workbook(tmp_path / "r")
    if not as_csv:
        assert list(raw.tables) == ["summary", "hosting", "run", "own"]
    assert set(raw.tables) == {"summary", "hosting", "run", "own"}
    assert list(raw.tables["hosting"].columns) == ["node", "proof", "extra"]


def test_columns_beyond_the_schema_stay_in_place_where_the_others_are_in_order(
    tmp_path: Path,
) -> None:
    columns = ["case", "node", "voltage_a_pu", "voltage_b_pu", "violation"]
    table = pd.DataFrame([["peak", "N1", 1.0, 1.0, None]], columns=columns)
    write_result({"base": table}, tmp_path / "r.xlsx")
    assert list(read_workbook(tmp_path / "r.xlsx").tables["base"].columns) == columns


@pytest.mark.parametrize(
    ("sheet", "column", "values", "shown"),
    [
        ("hosting", "hosting_kw", [412.0, 1000.0], "#,##0"),
        ("hosting", "hosting_kw", [412.5, 1000.0], "#,##0.0"),
        ("hosting", "hosting_kw", [412.25, 1000.0], "#,##0.00"),
        ("hosting", "next_kw", [412.25, 1000.0], "#,##0.0"),
        ("hosting", "existing_kw", [50.0, 0.0], "#,##0"),
        ("hosting", "hosting_kva", [433.68, 1.0], "#,##0.0"),
        ("hosting", "upper_bound_kw", [412.3, 1.0], "#,##0.000"),
        ("hosting", "gap_pct", [0.123, 1.0], "0.00"),
        ("hosting", "ac_mismatch_pu", [1e-13, 0.0], "0.0E+00"),
        ("hosting", "fictitious_loss_kw", [1e-7, 0.0], "0.0E+00"),
        ("hosting", "distance_km", [0.1234, 1.0], "0.000"),
        ("base", "voltage_pu", [1.01234, 1.0], "0.0000"),
        ("base", "angle_deg", [-0.51, 1.0], "0.00"),
        ("base_cases", "loss_kvar", [3.14, 1.0], "#,##0.0"),
    ],
)
def test_number_formats_follow_the_unit(
    tmp_path: Path, sheet: str, column: str, values: list[float], shown: str
) -> None:
    book = book_of({sheet: pd.DataFrame({"node": ["N1", "N2"], column: values})}, tmp_path)
    cells = column_of(book[sheet], column)
    assert [cell.number_format for cell in cells] == [shown, shown]
    assert [cell.value for cell in cells] == values


def test_value_and_limit_are_shown_in_their_unit(tmp_path: Path) -> None:
    table = hosting(value_at_limit=[1.05, 320.0, 99.5], limit_value=[1.05, 320.0, 99.5],
                    unit=["pu", "A", "mile"])  # fmt: skip
    sheet = book_of({"hosting": table}, tmp_path)["hosting"]
    for header in ("value_at_limit", "limit_value"):
        shown = [cell.number_format for cell in column_of(sheet, header)]
        assert shown[:2] == ["0.0000", "#,##0.0"]
        assert shown[2] == "General"


def test_capped_rows_show_at_least_and_hold_the_number(tmp_path: Path) -> None:
    sheet = book_of({"hosting": hosting()}, tmp_path)["hosting"]
    cells = column_of(sheet, "hosting_kw")
    assert [cell.value for cell in cells] == [412, 1000, None]
    assert [cell.number_format for cell in cells] == ["#,##0", '">= "#,##0', "#,##0"]


def fill_of(cell: object) -> str:
    return cell.fill.fgColor.rgb[-6:] if cell.fill.fill_type else ""


def test_rows_are_marked_by_word_and_fill(tmp_path: Path) -> None:
    table = pd.DataFrame(
        {
            "node": list("ABCDE"),
            "state": ["hosted", "hosted", "hosted", "hosted_base_violation", "hosted"],
            "hosting_kw": [np.nan, 5.0, 5.0, 5.0, 5.0],
            "proof": ["failed", "bracketed", "ac_only", "proven", "proven"],
        }
    )
    sheet = book_of({"hosting": table}, tmp_path)["hosting"]
    fills = [[fill_of(cell) for cell in row] for row in sheet.iter_rows(min_row=2)]
    assert fills == [
        [FAILED] * 4,
        ["", "", "", LIGHTLY],
        ["", "", "", LIGHTLY],
        ["", MARKED, "", ""],
        ["", "", "", ""],
    ]
    assert sheet["C2"].value is None
    assert (sheet["D2"].value, sheet["D2"].font.bold) == ("failed", True)
    assert (sheet["B5"].value, sheet["B5"].font.bold) == ("hosted_base_violation", True)
    assert not sheet["D3"].font.bold


def luminance(colour: str) -> float:
    """Relative luminance of an sRGB colour, WCAG 2.1, definition of 'relative luminance'."""
    parts = [int(colour[i : i + 2], 16) / 255 for i in (0, 2, 4)]
    r, g, b = (p / 12.92 if p <= 0.03928 else ((p + 0.055) / 1.055) ** 2.4 for p in parts)
    return 0.2126 * r + 0.7152 * g + 0.0722 * b


def test_marks_are_told_apart_without_colour(tmp_path: Path) -> None:
    fills = [FAILED, MARKED, LIGHTLY, "FFFFFF"]
    levels = [luminance(fill) for fill in fills]
    # Black on a fill: contrast (L + 0.05) / 0.05 of at least 7, WCAG 2.1 criterion 1.4.6.
    assert min(levels) >= 0.05 * 7 - 0.05
    # Lightness L* of CIE 1976 from luminance; steps of 5 and more are seen side by side
    # (project choice).
    lightness = [116 * level ** (1 / 3) - 16 for level in levels]
    steps = [b - a for a, b in pairwise(lightness)]
    assert min(steps) >= 5


def test_sheets_can_be_scrolled_filtered_and_printed(tmp_path: Path) -> None:
    book = book_of(result(), tmp_path)
    sheet = book["hosting"]
    assert sheet.freeze_panes == "A2"
    assert sheet.auto_filter.ref == "A1:G4"
    assert sheet.print_title_rows == "$1:$1"
    assert sheet.page_setup.orientation == "landscape"
    assert sheet.sheet_properties.pageSetUpPr.fitToPage
    assert (sheet.page_setup.fitToWidth, sheet.page_setup.fitToHeight) == (1, 0)
    assert "&A" in sheet.oddFooter.center.text
    assert "&P" in sheet.oddFooter.center.text
    assert sheet["A1"].comment.text == dict(RESULT["hosting"].columns)["node"]
    assert sheet["A1"].font.bold
    assert book.active.title == "summary"


def test_wide_sheets_keep_the_names_of_the_row_in_sight(tmp_path: Path) -> None:
    table = pd.DataFrame([dict.fromkeys(RESULT["hosting"].names) | {"node": "N1"}])
    sheet = book_of({"hosting": table}, tmp_path)["hosting"]
    assert sheet.freeze_panes == "E2"
    assert sheet.print_title_cols == "$A:$D"
    assert sheet.page_setup.fitToWidth > 1


def test_the_relaxation_carries_its_banner(tmp_path: Path) -> None:
    sheet = book_of(result(), tmp_path)["relaxation"]
    assert (sheet["A1"].value, sheet["A1"].font.bold) == ("solver record: not a capacity", True)
    assert [cell.value for cell in sheet[2]] == ["node", "priced_kw"]
    assert [cell.value for cell in sheet[3]] == ["N1", 412.31]
    assert sheet.freeze_panes == "A3"
    assert sheet.auto_filter.ref == "A2:B3"
    assert sheet["B2"].comment.text == "optimum of the priced programme, kW"
    raw = read_workbook(tmp_path / "r.xlsx")
    assert list(raw.tables["relaxation"].columns) == ["node", "priced_kw"]


def test_no_banner_in_csv(tmp_path: Path) -> None:
    write_result(result(), tmp_path / "r", as_csv=True)
    assert (tmp_path / "r" / "relaxation.csv").read_text() == "node,priced_kw\nN1,412.31\n"


def test_the_summary_is_a_page(tmp_path: Path) -> None:
    sheet = book_of(result(), tmp_path)["summary"]
    assert sheet.column_dimensions["B"].width >= 80
    assert sheet["A3"].font.bold
    assert not sheet["B3"].font.bold
    assert sheet["B3"].alignment.wrap_text
    # 299 characters in a column of 110 take three lines, and a fourth in case of wide letters.
    assert sheet.row_dimensions[3].height in (45, 60)
    assert sheet.row_dimensions[2].height is None
    assert sheet.auto_filter.ref is None
    assert not sheet.sheet_view.showGridLines


def test_long_text_is_cut_only_where_the_format_ends(tmp_path: Path) -> None:
    # 32,767 characters is what an .xlsx cell holds; csv has no end.
    table = pd.DataFrame({"a": ["x" * 40_000]})
    write_result({"t": table}, tmp_path / "r.xlsx")
    write_result({"t": table}, tmp_path / "r", as_csv=True)
    assert len(read_rows(tmp_path / "r.xlsx")[0][1]) == 32_767
    assert len(read_rows(tmp_path / "r")[0][1]) == 40_000


def test_empty_tables_keep_their_headers(tmp_path: Path) -> None:
    tables = {"audit": pd.DataFrame(columns=RESULT["audit"].names), "hosting": hosting().iloc[:0]}
    write_result(tables, tmp_path / "r.xlsx")
    raw = read_workbook(tmp_path / "r.xlsx")
    assert tuple(raw.tables["audit"].columns) == RESULT["audit"].names
    assert list(raw.tables) == ["hosting", "audit"]


@pytest.mark.skipif(shutil.which("soffice") is None, reason="LibreOffice is not installed")
def test_another_spreadsheet_programme_opens_it(tmp_path: Path) -> None:
    """LibreOffice loads, computes and saves the workbook: same cells, and text stays text."""
    profile = pd.DataFrame({"node": ["N1", "N2"], "distance_km": [0.5, 2.0], "base_pu": [1.0, 0.99],
                            "hosting_pu": [1.01, 1.04], "case": "light", "technology": "pv",
                            "plant_node": "N2", "v_min_pu": 0.95, "v_max_pu": 1.05})  # fmt: skip
    tables = result() | {"profile": profile, "hosting": hosting(flags=["=1+1", "#REF!", "-x"])}
    write_result(tables, tmp_path / "r.xlsx")
    user = (tmp_path / "profile").as_uri()
    for kind in ("xlsx", "pdf"):
        subprocess.run(
            ["soffice", f"-env:UserInstallation={user}", "--headless", "--convert-to", kind,
             "--outdir", str(tmp_path / kind), str(tmp_path / "r.xlsx")],
            check=True, capture_output=True,
        )  # fmt: skip
    assert (tmp_path / "pdf" / "r.pdf").read_bytes().startswith(b"%PDF")
    ours = read_workbook(tmp_path / "r.xlsx")
    theirs = read_workbook(tmp_path / "xlsx" / "r.xlsx")
    assert list(ours.tables) == list(theirs.tables)
    assert ours.tables["hosting"]["flags"].tolist() == ["=1+1", "#REF!", "-x"]
    for name, table in ours.tables.items():
        # LibreOffice keeps 15 digits.
        pd.testing.assert_frame_equal(
            theirs.tables[name].map(rounded), table.map(rounded), check_dtype=False
        )
    with ZipFile(tmp_path / "xlsx" / "r.xlsx") as archive:
        charts = [n for n in archive.namelist() if n.startswith("xl/charts/chart")]
    assert len(charts) == 2


def rounded(cell: object) -> object:
    return float(f"{cell:.14g}") if isinstance(cell, int | float) else cell
