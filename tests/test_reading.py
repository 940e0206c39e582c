"""Reading: the same tables from .xlsx and csv, with the row numbers the spreadsheet shows."""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from datetime import datetime
from pathlib import Path
from zipfile import ZIP_DEFLATED, ZipFile

import openpyxl
import pandas as pd
import pytest
from feederhost.errors import InputError
from feederhost.sheets.reading import read_workbook
from hypothesis import given, settings
from hypothesis import strategies as st


def save(path: Path, sheets: dict[str, list[list[object]]]) -> Path:
    book = openpyxl.Workbook()
    book.remove(book.active)
    for name, rows in sheets.items():
        sheet = book.create_sheet(name)
        for row in rows:
            sheet.append(row)
    book.save(path)
    return path


def edit_sheet(path: Path, change: Callable[[str], str], part: str = "sheet1.xml") -> Path:
    """Change the XML of one part of a workbook, as another programme might have written it."""
    with ZipFile(path) as source:
        parts = {name: source.read(name) for name in source.namelist()}
    name = next(n for n in parts if n.endswith(part))
    before = parts[name].decode()
    after = change(before)
    assert after != before
    parts[name] = after.encode()
    with ZipFile(path, "w", ZIP_DEFLATED) as target:
        for entry, data in parts.items():
            target.writestr(entry, data)
    return path


def records(table: pd.DataFrame) -> list[tuple[object, ...]]:
    return [(row, *cells) for row, cells in zip(table.index, table.to_numpy(), strict=True)]


LINES = [
    [" line ", "from_node", None, "length_km", "Note"],
    ["# L0", "S1", None, 9.9, "an example row"],
    ["L1", " S1 ", None, 0.8, "first\nsecond"],
    [None, None, None, None, "   "],
    ["L2", 101, None, 1, None],
    ["", "#N/A", None, None, None],
]


def test_cells_come_as_written_under_their_row_numbers(tmp_path: Path) -> None:
    raw = read_workbook(save(tmp_path / "Mill Road.xlsx", {" Lines ": LINES}))
    assert raw.name == "Mill Road"
    assert raw.sources == {"lines": " Lines "}
    table = raw.tables["lines"]
    assert list(table.columns) == ["line", "from_node", "length_km", "Note"]
    assert records(table) == [
        (3, "L1", "S1", 0.8, "first\nsecond"),
        (5, "L2", 101, 1, None),
        (6, None, "#N/A", None, None),
    ]
    assert {str(dtype) for dtype in (*table.dtypes, table.columns.dtype)} == {"object"}
    assert type(table.loc[5, "from_node"]) is int


def test_csv_row_numbers_are_physical_lines(tmp_path: Path) -> None:
    # Line 3 to 4 is one record, line 5 is blank, line 6 a comment.
    text = 'line,note\r\nL1,a\r\nL2,"two\r\nlines"\r\n\r\n#L3,x\r\nL4,\r\n'
    (tmp_path / "lines.csv").write_bytes(b"\xef\xbb\xbf" + text.encode())
    raw = read_workbook(tmp_path)
    assert raw.name == tmp_path.name
    assert raw.sources == {"lines": "lines.csv"}
    assert records(raw.tables["lines"]) == [
        (2, "L1", "a"),
        (3, "L2", "two\nlines"),
        (7, "L4", None),
    ]


def test_csv_and_xlsx_read_identically(tmp_path: Path) -> None:
    rows = [
        ["node", "node", "", "kw"],
        ["N1", " x ", "", "45"],
        ["", "", "", ""],
        ["# no", "", "", "1"],
        ["N-7", "Ürzig, west", "over\nhead", "1.5"],
    ]
    folder = tmp_path / "feeder"
    folder.mkdir()
    lines = (",".join(f'"{cell}"' for cell in row) for row in rows)
    (folder / "Loads.csv").write_text("\n".join(lines), encoding="utf-8")
    a = read_workbook(folder)
    b = read_workbook(save(tmp_path / "feeder.xlsx", {"Loads": rows}))
    pd.testing.assert_frame_equal(a.tables["loads"].iloc[[0]], b.tables["loads"].iloc[[0]])
    # The line break inside the last record is no further line before it: rows agree.
    pd.testing.assert_frame_equal(a.tables["loads"], b.tables["loads"])
    assert list(a.tables["loads"].columns) == ["node", "node", "", "kw"]
    assert a.name == b.name == "feeder"
    assert a.digests == b.digests


def test_digest_is_of_the_content_not_of_the_file_format(tmp_path: Path) -> None:
    folder = tmp_path / "f"
    folder.mkdir()
    (folder / "loads.csv").write_text("node,kw,on\n101,0.1,TRUE\n")
    a = read_workbook(folder)
    b = read_workbook(
        save(tmp_path / "f.xlsx", {"loads": [["node", "kw", "on"], [101, 0.1, True]]})
    )
    assert a.tables["loads"].loc[2].tolist() == ["101", "0.1", "TRUE"]
    assert b.tables["loads"].loc[2].tolist() == [101, 0.1, True]
    # SHA-256 of '[1, ["node", "kw", "on"]]\n[2, ["101", "0.1", "TRUE"]]\n' by sha256sum.
    assert a.digests["loads"] == b.digests["loads"]
    assert a.digests["loads"] == DIGEST


DIGEST = "779b1ec1aa6d0b196df2ace39260b4cc4f3673af72d071549fa673ad47f03d67"


@pytest.mark.parametrize(
    ("change", "same"),
    [("node,kw\n\nN1,4\n", False), ("node,kw\nN1,5\n", False), ("node,kva\nN1,4\n", False),
     ("node , kw\n N1,4 \n#,9\n", True)],
)  # fmt: skip
def test_digest_follows_headers_cells_and_rows(tmp_path: Path, change: str, same: bool) -> None:
    digests = []
    for name, text in (("a", "node,kw\nN1,4\n"), ("b", change)):
        (tmp_path / name).mkdir()
        (tmp_path / name / "loads.csv").write_text(text)
        digests.append(read_workbook(tmp_path / name).digests["loads"])
    assert (digests[0] == digests[1]) is same


def test_unknown_and_empty_sheets_are_kept(tmp_path: Path) -> None:
    raw = read_workbook(save(tmp_path / "f.xlsx", {"lines": LINES, "My Notes": [["x"]], "e": []}))
    assert list(raw.tables) == ["lines", "my notes", "e"]
    assert list(raw.tables["my notes"].columns) == ["x"]
    assert raw.tables["e"].shape == (0, 0)


def test_columns_without_a_header_stay_only_where_they_hold_something(tmp_path: Path) -> None:
    rows = [["a", None, None, "b"], [1, None, 2, 3, None, "stray"], ["#", "only in a comment"]]
    table = read_workbook(save(tmp_path / "f.xlsx", {"t": rows})).tables["t"]
    assert list(table.columns) == ["a", "", "b", ""]
    assert records(table) == [(2, 1, 2, 3, "stray")]


def test_a_broken_formula_in_the_first_cell_is_no_comment(tmp_path: Path) -> None:
    rows = [["node", "kw"], ["#REF!", 1], ["#REF", 2], ["# REF!", 3]]
    table = read_workbook(save(tmp_path / "f.xlsx", {"loads": rows})).tables["loads"]
    assert records(table) == [(2, "#REF!", 1)]


def test_hidden_rows_and_sheets_count(tmp_path: Path) -> None:
    path = save(tmp_path / "f.xlsx", {"lines": [["line"], ["L1"], ["L2"]], "loads": [["node"]]})
    book = openpyxl.load_workbook(path)
    book["lines"].row_dimensions[3].hidden = True
    book["loads"].sheet_state = "hidden"
    book.save(path)
    raw = read_workbook(path)
    assert records(raw.tables["lines"]) == [(2, "L1"), (3, "L2")]
    assert "loads" in raw.tables


def test_dates_booleans_and_times(tmp_path: Path) -> None:
    path = tmp_path / "f.xlsx"
    rows = [["a", "b", "c"], [datetime(2026, 11, 1), True, datetime(2026, 11, 1, 6, 30).time()]]
    table = read_workbook(save(path, {"t": rows})).tables["t"]
    assert records(table) == [(2, datetime(2026, 11, 1), True, "06:30:00")]


def test_a_date_out_of_the_calendar_is_an_error_text(tmp_path: Path) -> None:
    path = save(tmp_path / "f.xlsx", {"t": [["a"], [datetime(2026, 11, 1)]]})
    edit_sheet(path, lambda xml: xml.replace("<v>46327</v>", "<v>99999999</v>"))
    assert records(read_workbook(path).tables["t"]) == [(2, "#VALUE!")]


def test_a_formula_never_calculated_comes_as_its_text(tmp_path: Path) -> None:
    path = save(tmp_path / "f.xlsx", {"plain": [["x"], [1]], "t": [["a", "b"], [2, "=A2*2"]]})
    raw = read_workbook(path)
    assert records(raw.tables["t"]) == [(2, 2, "=A2*2")]
    assert records(raw.tables["plain"]) == [(2, 1)]


@pytest.mark.parametrize(
    ("cell", "value"),
    [
        ('<c r="B2"><f>A2*2</f><v>4</v></c>', 4),
        ('<c r="B2"><f>A2*2</f></c>', "=A2*2"),
        ('<c r="B2"><f>A2*2</f><v></v></c>', "=A2*2"),
        ('<c r="B2"><f ca="1">A2*2</f><v/></c>', "=A2*2"),
        # Calculated, and the result is empty text: blank, nothing to report.
        ('<c r="B2" t="str"><f>IF(A2&gt;0,"","x")</f><v></v></c>', None),
        ('<c r="B2" t="str"><f>"a"</f><v>a</v></c>', "a"),
        ('<c r="B2" t="e"><f>C9</f><v>#REF!</v></c>', "#REF!"),
        ('<c r="B2" t="b"><f>A2&gt;0</f><v>1</v></c>', True),
        ('<c r="B2"><f t="array" ref="B2">SUM(A2)</f></c>', "=SUM(A2)"),
        ('<c r="B2"><f t="dataTable" ref="B2" r1="A2"/></c>', "="),
    ],
)
def test_cached_values_count(tmp_path: Path, cell: str, value: object) -> None:
    path = save(tmp_path / "f.xlsx", {"t": [["a", "b"], [2, 77]]})
    edit_sheet(path, lambda xml: xml.replace('<c r="B2" t="n"><v>77</v></c>', cell))
    table = read_workbook(path).tables["t"]
    assert records(table) == [(2, 2, value)]


def test_shared_formulas_are_told_by_their_own_text(tmp_path: Path) -> None:
    path = save(tmp_path / "f.xlsx", {"t": [["a", "b"], [2, 77], [3, 78]]})

    def change(xml: str) -> str:
        first = '<c r="B2"><f t="shared" ref="B2:B3" si="0">A2*2</f><v>4</v></c>'
        xml = xml.replace('<c r="B2" t="n"><v>77</v></c>', first)
        second = '<c r="B3"><f t="shared" si="0"/></c>'
        return xml.replace('<c r="B3" t="n"><v>78</v></c>', second)

    edit_sheet(path, change)
    assert records(read_workbook(path).tables["t"]) == [(2, 2, 4), (3, 3, "=A3*2")]


def test_a_formula_past_the_last_value_of_its_row(tmp_path: Path) -> None:
    path = save(tmp_path / "f.xlsx", {"t": [["a", "b", "c"], [2, None, "=A2"], [3]]})
    table = read_workbook(path).tables["t"]
    assert records(table) == [(2, 2, None, "=A2"), (3, 3, None, None)]


def test_escaped_characters_of_the_format_are_resolved(tmp_path: Path) -> None:
    # ECMA-376 part 1, 22.9.2.19 (ST_Xstring): _x000D_ is a carriage return, _x005F_ an underscore.
    path = save(tmp_path / "f.xlsx", {"t": [["a", "b"], ["N1_x000D_\n", "N_x005F_x0041_"]]})
    assert records(read_workbook(path).tables["t"]) == [(2, "N1", "N_x0041_")]


def test_a_wrong_claim_about_the_sheets_size_hides_nothing(tmp_path: Path) -> None:
    path = save(tmp_path / "f.xlsx", {"t": [["a", "b"], [1, 2], [3, 4]]})
    edit_sheet(path, lambda xml: xml.replace('<dimension ref="A1:B3"', '<dimension ref="A1:A1"'))
    assert records(read_workbook(path).tables["t"]) == [(2, 1, 2), (3, 3, 4)]


def test_guarded_csv_text_loses_its_apostrophe(tmp_path: Path) -> None:
    (tmp_path / "t.csv").write_text("a,b,c,d,e\n'=A1,'-x,'quoted',-5,''@\n")
    table = read_workbook(tmp_path).tables["t"]
    assert records(table) == [(2, "=A1", "-x", "'quoted'", "-5", "'@")]


def test_a_year_of_hours_is_read_whole(tmp_path: Path) -> None:
    lines = ["case,load_scale,pv_scale", *(f"h{i},{i / 8784},0" for i in range(8784))]
    (tmp_path / "cases.csv").write_text("\n".join(lines))
    table = read_workbook(tmp_path).tables["cases"]
    assert len(table) == 8784
    assert (table.index[0], table.index[-1]) == (2, 8785)
    assert table.loc[8785, "case"] == "h8783"


def test_the_banner_of_a_result_sheet_is_stepped_over(tmp_path: Path) -> None:
    rows = [["solver record: not a capacity"], ["node", "priced_kw"], ["N1", 4.5]]
    raw = read_workbook(save(tmp_path / "f.xlsx", {"relaxation": rows, "lines": rows}))
    assert records(raw.tables["relaxation"]) == [(3, "N1", 4.5)]
    assert list(raw.tables["relaxation"].columns) == ["node", "priced_kw"]
    assert list(raw.tables["lines"].columns) == ["solver record: not a capacity", ""]


def test_hidden_files_and_other_files_in_a_folder_are_no_sheets(tmp_path: Path) -> None:
    for name in ("lines.CSV", ".~lock.lines.csv", "notes.txt"):
        (tmp_path / name).write_text("line\nL1\n")
    assert list(read_workbook(tmp_path).tables) == ["lines"]


# --- what cannot be read ---------------------------------------------------------------------


def refusal(path: Path) -> str:
    with pytest.raises(InputError) as caught:
        read_workbook(path)
    assert caught.value.exit_code == 3
    message = str(caught.value)
    assert "\n" not in message
    assert str(path) in message
    return message


def test_missing_file(tmp_path: Path) -> None:
    assert "no such file" in refusal(tmp_path / "none.xlsx")


def test_empty_folder(tmp_path: Path) -> None:
    assert "no .csv file" in refusal(tmp_path)


@pytest.mark.parametrize(
    ("name", "content", "word"),
    [
        ("f.xlsx", b"", "not an .xlsx"),
        ("f.xlsx", b"line,from_node\nL1,S1\n", "not an .xlsx"),
        ("lines.csv", b"line,from_node\nL1,S1\n", "give the folder"),
        ("f.xlsx", bytes.fromhex("d0cf11e0a1b11ae1") + bytes(600), "password"),
    ],
)
def test_other_formats(tmp_path: Path, name: str, content: bytes, word: str) -> None:
    (tmp_path / name).write_bytes(content)
    assert word in refusal(tmp_path / name)


def test_a_zip_that_is_no_workbook(tmp_path: Path) -> None:
    with ZipFile(tmp_path / "f.xlsx", "w") as archive:
        archive.writestr("mimetype", "application/vnd.oasis.opendocument.spreadsheet")
    assert "not an .xlsx" in refusal(tmp_path / "f.xlsx")


def test_a_workbook_cut_short(tmp_path: Path) -> None:
    path = save(tmp_path / "f.xlsx", {"lines": LINES})
    path.write_bytes(path.read_bytes()[:2000])
    assert "damaged" in refusal(path)


def test_strict_flavour_is_named(tmp_path: Path) -> None:
    path = save(tmp_path / "f.xlsx", {"lines": LINES})
    usual = "http://schemas.openxmlformats.org/spreadsheetml/2006/main"
    strict = "http://purl.oclc.org/ooxml/spreadsheetml/main"
    edit_sheet(path, lambda xml: xml.replace(usual, strict), "xl/workbook.xml")
    assert "strict" in refusal(path)


def test_two_sheets_of_one_name(tmp_path: Path) -> None:
    path = save(tmp_path / "f.xlsx", {"lines": LINES, "Lines ": LINES})
    message = refusal(path)
    assert "'lines'" in message
    assert "'Lines '" in message


def test_no_permission(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = save(tmp_path / "f.xlsx", {"lines": LINES})

    def refuse(*_: object, **__: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "open", refuse)
    assert "Permission denied" in refusal(path)


@pytest.mark.parametrize(
    ("content", "word"),
    [
        ("node\nÜrzig\n".encode("cp1252"), "UTF-8"),
        (b'node,kw\nN1,"4\n', "line 2"),
        (b'node,kw\nN1,4\nN2,"4"5\n', "line 3"),
        (b"node;kw\nN1;4\n", "commas"),
        (b"node\tkw\nN1\t4\n", "commas"),
    ],
)
def test_damaged_csv(tmp_path: Path, content: bytes, word: str) -> None:
    (tmp_path / "loads.csv").write_bytes(content)
    with pytest.raises(InputError) as caught:
        read_workbook(tmp_path)
    assert word in str(caught.value)
    assert "loads.csv" in str(caught.value)
    assert "\n" not in str(caught.value)


@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_a_damaged_workbook_is_read_or_refused(data: st.DataObject) -> None:
    """Whatever is overwritten in the package or in its sheet, no other exception gets out."""
    with tempfile.TemporaryDirectory() as folder:
        path = save(Path(folder) / "f.xlsx", {"lines": [["a", "b"], ["L1", 2], ["L2", "=A1"]]})
        harm = data.draw(st.binary(min_size=1, max_size=12))
        if data.draw(st.booleans()):
            whole = bytearray(path.read_bytes())
            at = data.draw(st.integers(0, len(whole) - 1))
            whole[at : at + len(harm)] = harm
            path.write_bytes(bytes(whole))
        else:
            with ZipFile(path) as archive:
                parts = {name: archive.read(name) for name in archive.namelist()}
            name = data.draw(st.sampled_from(sorted(parts)))
            at = data.draw(st.integers(0, len(parts[name]) - 1))
            parts[name] = parts[name][:at] + harm + parts[name][at + len(harm) :]
            with ZipFile(path, "w") as archive:
                for part, content in parts.items():
                    archive.writestr(part, content)
        try:
            raw = read_workbook(path)
        except InputError as refused:
            message = str(refused)
        else:
            assert set(raw.tables) == set(raw.digests) == set(raw.sources)
            message = ""
        assert "\n" not in message
