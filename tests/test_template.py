"""The blank template must explain itself, and filled workbooks keep its style."""

import math
from pathlib import Path

import openpyxl
import pytest
from feederhost.errors import OutputError, Severity, fatal
from feederhost.feeder.tables import check_tables
from feederhost.feeder.topology import root_feeder
from feederhost.schema import CHOICE, INPUT, NUMBER
from feederhost.settings import sheet_settings
from feederhost.sheets.atomic import atomic_write
from feederhost.sheets.reading import read_workbook
from feederhost.sheets.template import write_blank, write_input
from openpyxl.workbook import Workbook


@pytest.fixture(scope="module")
def blank_path(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("blank") / "feeder.xlsx"
    write_blank(path)
    return path


@pytest.fixture(scope="module")
def blank(blank_path: Path) -> Workbook:
    return openpyxl.load_workbook(blank_path)


def _rules(sheet) -> dict:
    """Return the validations of a sheet by the letter of their column."""
    found = {}
    for rule in sheet.data_validations.dataValidation:
        (area,) = rule.sqref.ranges
        assert (area.min_row, area.min_col) == (2, area.max_col)
        found[sheet.cell(1, area.min_col).value] = rule
    return found


def test_sheets_stand_in_schema_order_behind_the_guide(blank):
    assert blank.sheetnames == ["guide", *INPUT]
    assert blank.active.title == "guide"


@pytest.mark.parametrize("name", INPUT)
def test_headers_are_the_exact_column_names(blank, name):
    headers = [cell.value for cell in blank[name][1]]
    # Families and phase matrices are told in a note, they would hide the rest.
    expected = [
        c.key
        for c in INPUT[name].columns
        if not c.pattern and not c.meaning.startswith("phase matrix")
    ]
    assert headers == expected


def test_headers_of_lines_in_words(blank):
    assert [cell.value for cell in blank["lines"][1]] == [
        "line", "from_node", "to_node", "length_km", "conductor",
        "r1_ohm_per_km", "x1_ohm_per_km", "r0_ohm_per_km", "x0_ohm_per_km",
        "b1_us_per_km", "charging_uf_per_km", "r1_ohm", "x1_ohm", "r0_ohm", "x0_ohm",
        "rating_a", "phases", "state", "device", "interrupting_a",
    ]  # fmt: skip


@pytest.mark.parametrize("name", INPUT)
def test_every_header_has_a_note_and_required_ones_stand_out(blank, name):
    for cell in blank[name][1]:
        column = INPUT[name].column(cell.value)
        assert column.meaning.replace("`", "'") in cell.comment.text
        # Marked by weight and by a word, not by colour alone.
        assert cell.font.b is column.required
        assert cell.comment.text.startswith("* REQUIRED: ") is column.required
        assert ("Optional: " in cell.comment.text) is not column.required
        if column.default is not None:
            assert f"blank means {column.default}" in cell.comment.text
        for choice in column.choices:
            assert choice in cell.comment.text


def test_a_note_tells_unit_bounds_and_other_units(blank):
    notes = {cell.value: cell.comment.text for cell in blank["lines"][1]}
    assert "Unit: km" in notes["length_km"]
    assert "Or name the column: length_m, length_ft, length_mi" in notes["length_km"]
    assert "Unit: ohm per km" in notes["r1_ohm_per_km"]
    assert "r1_ohm_per_mi, r1_ohm_per_kft" in notes["r1_ohm_per_km"]
    assert "a number above 0 or the word unlimited" in notes["rating_a"]
    factor = {cell.value: cell.comment.text for cell in blank["loads"][1]}["power_factor"]
    assert "Allowed: a number above 0 and at most 1" in factor


def test_families_of_columns_are_told_in_the_last_note(blank):
    cases = blank["cases"][1][-1].comment.text
    assert "load_scale.<class>: replaces load_scale for that class" in cases
    assert "<other>_scale: scale of another technology" in cases
    conductors = blank["conductors"][1][-1].comment.text
    assert "r_aa_ohm_per_km, r_ab_ohm_per_km ... b_cc_us_per_km" in conductors


@pytest.mark.parametrize("name", INPUT)
def test_choices_drop_down_and_bounded_numbers_are_checked_but_nothing_is_forbidden(blank, name):
    rules = _rules(blank[name])
    for cell in blank[name][1]:
        column = INPUT[name].column(cell.value)
        bounded = (column.lowest, column.above, column.highest) != (None, None, None)
        if column.kind == CHOICE:
            assert rules[cell.value].type == "list"
            assert rules[cell.value].formula1 == f'"{",".join(column.choices)}"'
        if column.kind == NUMBER and bounded:
            assert rules[cell.value].type == "custom"
    for header, rule in rules.items():
        assert rule.errorStyle == "warning"
        # Phases and technologies have more words than the list: it only suggests.
        assert rule.showErrorMessage is (header not in ("phases", "technology"))
        assert rule.allow_blank


def test_the_check_of_a_number_says_its_bounds(blank):
    loads = _rules(blank["loads"])
    assert loads["power_factor"].formula1 == "AND(ISNUMBER(D2),D2>0,D2<=1)"
    assert loads["kw"].formula1 == "AND(ISNUMBER(B2),B2>=0)"
    lines = _rules(blank["lines"])
    assert lines["rating_a"].formula1 == 'OR(AND(ISNUMBER(P2),P2>0),P2="unlimited")'
    assert lines["rating_a"].error == "Expected a number above 0 or the word unlimited."


def test_limit_names_drop_down_from_the_guide(blank):
    name, _, area = _rules(blank["limits"])["limit"].formula1.partition("!")
    assert name == "guide"
    offered = [row[0].value for row in blank["guide"][area.replace("$", "")]]
    assert offered == [setting.name for setting in sheet_settings()]
    assert offered[:2] == ["v_min_pu", "v_max_pu"]


def test_limits_are_listed_as_comments_at_their_defaults(blank):
    rows = list(blank["limits"].iter_rows(min_row=2, values_only=True))
    assert [name for name, _ in rows] == [f"# {s.name}" for s in sheet_settings()]
    for (_, value), setting in zip(rows, sheet_settings(), strict=True):
        # A limit without a default shows an example, so that the row is whole once uncommented.
        assert value == setting.default if setting.default is not None else value > 0
    assert ("# v_min_pu", 0.95) in rows
    assert ("# v_min_primary_pu", 0.975) in rows
    for cell in blank["limits"]["A"][1:]:
        assert "Source: " in cell.comment.text


@pytest.mark.parametrize("name", INPUT)
def test_example_rows_are_comments_and_fill_what_is_required(blank, name):
    rows = list(blank[name].iter_rows(min_row=2, values_only=True))
    headers = [cell.value for cell in blank[name][1]]
    assert rows
    for row in rows:
        assert row[0].startswith("# ")
        if name != "limits":
            cells = dict(zip(headers, row, strict=True))
            assert all(cells[c.key] is not None for c in INPUT[name].columns if c.required)


def test_example_lines_show_both_ways_to_give_one(blank):
    headers = [cell.value for cell in blank["lines"][1]]
    by_conductor, by_figures = (
        dict(zip(headers, row, strict=True))
        for row in blank["lines"].iter_rows(min_row=2, values_only=True)
    )
    assert by_conductor["line"] == "# L1"
    assert by_conductor["conductor"]
    assert by_conductor["r1_ohm_per_km"] is None
    assert by_figures["conductor"] is None
    assert by_figures["r1_ohm_per_km"]
    assert by_figures["rating_a"]


def test_the_examples_without_their_marks_make_a_sound_feeder(blank_path, tmp_path):
    book = openpyxl.load_workbook(blank_path)
    for name in INPUT:
        for row in book[name].iter_rows(min_row=2):
            # A limit without a default has no value to stand uncommented.
            if name != "limits" or row[1].value is not None:
                row[0].value = row[0].value.removeprefix("# ")
    book.save(tmp_path / "examples.xlsx")
    tables = check_tables(read_workbook(tmp_path / "examples.xlsx").tables)
    topology, more = root_feeder(tables)
    assert topology is not None
    assert [f for f in (*tables.findings, *more) if f.severity is not Severity.NOTE] == []


def test_a_template_not_filled_in_says_what_is_missing(blank_path):
    tables = check_tables(read_workbook(blank_path).tables)
    assert {f.sheet for f in fatal(tables.findings)} == {"source"}


@pytest.mark.parametrize("name", INPUT)
def test_pages_are_set_up(blank, name):
    sheet = blank[name]
    assert sheet.freeze_panes == "B2"
    assert sheet.print_title_rows == "$1:$1"
    assert sheet.page_setup.orientation == "landscape"
    for cell in sheet[1]:
        assert sheet.column_dimensions[cell.column_letter].width > len(cell.value)


def test_names_typed_into_text_columns_stay_text(blank):
    # A spreadsheet would make a date of a node called 3-4.
    assert blank["lines"].column_dimensions["B"].number_format == "@"
    assert blank["lines"].column_dimensions["D"].number_format == "General"


def test_the_guide_is_short_and_names_what_a_newcomer_needs(blank):
    rows = [row[:2] for row in blank["guide"].iter_rows(values_only=True) if row[1]]
    told = [
        (topic, text) for topic, text in rows if topic not in {s.name for s in sheet_settings()}
    ]
    assert 25 <= len(told) <= 40
    assert max(len(text) for _, text in told) <= 130
    text = " ".join(f"{topic} {text}" for topic, text in told)
    needed = "'source' and 'lines'|#|length_km|load_scale|feederhost check|feederhost host"
    for word in f"{needed}|minimum load|do not add up|r_aa_ohm_per_km".split("|"):
        assert word in text
    assert {topic for topic, _ in rows} >= set(INPUT)
    targets = [c.hyperlink.location for c in blank["guide"]["A"] if c.hyperlink]
    assert targets == [f"'{name}'!A1" for name in INPUT]


def test_same_call_same_bytes(blank_path, tmp_path):
    write_blank(tmp_path / "again.xlsx")
    assert (tmp_path / "again.xlsx").read_bytes() == blank_path.read_bytes()


def test_no_time_of_writing_in_the_file(blank):
    assert blank.properties.modified.year == blank.properties.created.year == 2000


def test_filled_workbook_keeps_given_sheets_and_columns_in_schema_order(tmp_path):
    path = tmp_path / "filled.xlsx"
    write_input(
        {
            "remarks": [{"text": "a sheet of one's own"}],
            "lines": [
                {"colour": "red", "length_mi": 0.5, "to_node": "N1", "from_node": "S1",
                 "line": "L1"},
                {"line": "L2", "rating_a": "unlimited"},
            ],
            "source": [{"node": "S1", "kv": 12.47}],
            "cases": [{"case": "peak", "basis": "measured", "load_scale.homes": 1,
                       "heat_pump_scale": 0.5, "hour": 18}],
            "costs": [],
        },
        path,
    )  # fmt: skip
    book = openpyxl.load_workbook(path)
    assert book.sheetnames == ["source", "lines", "cases", "costs", "remarks"]
    assert list(book["lines"].values) == [
        ("line", "from_node", "to_node", "length_mi", "rating_a", "colour"),
        ("L1", "S1", "N1", 0.5, None, "red"),
        ("L2", None, None, None, "unlimited", None),
    ]
    assert [c.value for c in book["cases"][1]] == [
        "case", "hour", "load_scale.homes", "heat_pump_scale", "basis",
    ]  # fmt: skip
    assert [c.value for c in book["costs"][1]] == ["item"]
    assert "Or name the column: length_m" in book["lines"]["D1"].comment.text
    assert book["lines"]["F1"].comment is None
    assert "that class" in book["cases"]["C1"].comment.text
    assert "another technology" in book["cases"]["D1"].comment.text
    assert book["lines"]["A1"].font.b
    assert not book["lines"]["E1"].font.b
    assert _rules(book["cases"])["basis"].formula1 == '"measured,estimated,assumed"'


@pytest.mark.parametrize("text", ["=1+1", "+A1", "-N7", "@home", "=cmd|' /C calc'!A0"])
def test_text_is_never_a_formula(tmp_path, text):
    path = tmp_path / "filled.xlsx"
    write_input({"source": [{"node": text, "kv": 12.47, text: 1}]}, path)
    sheet = openpyxl.load_workbook(path)["source"]
    for cell in (sheet["A2"], sheet["C1"]):
        assert cell.value == text
        assert cell.data_type == "s"
        assert cell.quotePrefix


def test_values_without_a_cell_form(tmp_path):
    path = tmp_path / "filled.xlsx"
    rows = [{"node": "N\x001", "kw": math.nan, "kvar": math.inf, "class": None}]
    write_input({"loads": rows}, path)
    assert list(openpyxl.load_workbook(path)["loads"].values)[1] == ("N1", None, "inf", None)


def test_notes_become_a_guide_sheet(tmp_path):
    path = tmp_path / "filled.xlsx"
    notes = "Sedge Hollow 2\n\nFirst line,\nsame paragraph.\n\n=not a formula"
    write_input({"source": [{"node": "S1", "kv": 12.47}]}, path, notes)
    book = openpyxl.load_workbook(path)
    assert book.sheetnames == ["guide", "source"]
    cells = [cell for cell in book["guide"]["A"] if cell.value]
    assert [c.value for c in cells[:3]] == [
        "Sedge Hollow 2",
        "First line, same paragraph.",
        "=not a formula",
    ]
    assert {c.data_type for c in cells} == {"s"}


def test_filled_workbook_same_tables_same_bytes(tmp_path):
    tables = {"source": [{"node": "S1", "kv": 12.47}], "loads": [{"node": "N1", "kw": 3}]}
    for name in ("a.xlsx", "b.xlsx"):
        write_input(tables, tmp_path / name)
    assert (tmp_path / "a.xlsx").read_bytes() == (tmp_path / "b.xlsx").read_bytes()


@pytest.mark.parametrize("place", ["missing/feeder.xlsx", "folder"])
def test_where_nothing_can_be_written_it_says_so(tmp_path, place):
    (tmp_path / "folder").mkdir()
    with pytest.raises(OutputError, match="cannot write"):
        write_blank(tmp_path / place)
    assert [p.name for p in tmp_path.iterdir()] == ["folder"]


def test_a_failure_half_way_leaves_the_old_file_and_no_litter(tmp_path):
    path = tmp_path / "feeder.xlsx"
    path.write_text("old")

    def full_disk(scratch: Path) -> None:
        scratch.write_text("half")
        raise OSError(28, "No space left on device")

    def broken(scratch: Path) -> None:
        scratch.write_text("half")
        raise ValueError

    with pytest.raises(OutputError, match="No space left on device"):
        atomic_write(path, full_disk)
    with pytest.raises(ValueError):
        atomic_write(path, broken)
    assert path.read_text() == "old"
    assert list(tmp_path.iterdir()) == [path]


def test_a_write_protected_file_is_left_alone(tmp_path, monkeypatch):
    path = tmp_path / "feeder.xlsx"
    path.write_text("old")
    # The super-user may write anything: what the system would answer others is put in.
    monkeypatch.setattr("feederhost.sheets.atomic.os.access", lambda *_: False)
    with pytest.raises(OutputError, match="write-protected"):
        write_blank(path)
    assert path.read_text() == "old"


def test_the_new_file_takes_the_place_and_the_mode_of_the_old(tmp_path):
    path, link = tmp_path / "feeder.xlsx", tmp_path / "link.xlsx"
    path.write_text("old")
    path.chmod(0o640)
    link.symlink_to(path)
    atomic_write(link, lambda scratch: scratch.write_text("new") and None)
    assert path.read_text() == "new"
    assert path.stat().st_mode & 0o777 == 0o640
    assert link.is_symlink()
