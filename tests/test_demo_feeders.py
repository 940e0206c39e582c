"""The committed demo workbooks are what the script writes, and show what they promise."""

import importlib
import re
import subprocess
import sys
from pathlib import Path

import openpyxl
import pytest
from feederhost.errors import Finding, Severity
from feederhost.feeder.tables import check_tables
from feederhost.feeder.topology import root_feeder
from feederhost.schema import INPUT
from feederhost.sheets.reading import read_workbook

ROOT = Path(__file__).parents[1]
FEEDERS = ("sedge_hollow", "cooper_quay", "mothwick_raw")


@pytest.fixture(scope="module")
def written(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("feeders")
    command = [sys.executable, str(ROOT / "scripts" / "make_feeders.py"), str(folder)]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    assert done.stdout.split() == [str(folder / f"{name}.xlsx") for name in FEEDERS]
    return folder


@pytest.fixture
def mothwick(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.syspath_prepend(str(ROOT / "scripts"))
    return importlib.import_module("demo_data.mothwick")


def _cells(path: Path) -> dict:
    book = openpyxl.load_workbook(path)
    return {
        (sheet.title, cell.coordinate): (cell.value, cell.data_type, cell.number_format,
                                         cell.comment and cell.comment.text)
        for sheet in book
        for row in sheet.iter_rows()
        for cell in row
    }  # fmt: skip


def _tables(name: str) -> dict[str, list[dict]]:
    book = openpyxl.load_workbook(ROOT / "feeders" / f"{name}.xlsx")
    tables = {}
    for sheet in book:
        header, *rows = sheet.values
        tables[sheet.title] = [dict(zip(header, row, strict=True)) for row in rows]
    return tables


@pytest.mark.parametrize("name", FEEDERS)
def test_committed_workbook_is_what_the_script_writes(written, name):
    committed, fresh = (_cells(f / f"{name}.xlsx") for f in (ROOT / "feeders", written))
    assert committed == fresh


def test_no_workbook_lies_about_that_no_script_writes(written):
    stored = {path.name for path in (ROOT / "feeders").glob("*.xlsx")}
    assert stored == {path.name for path in written.iterdir()}


@pytest.mark.parametrize(
    ("name", "strangers"),
    [("sedge_hollow", []), ("cooper_quay", []), ("mothwick_raw", ["capacitors.stat"])],
)
def test_columns_are_the_schemas(name, strangers):
    unknown = []
    for title, rows in _tables(name).items():
        if title == "guide":
            continue
        known = {header for c in INPUT[title].columns for header in c.headers}
        families = r"load_scale\..+|.+_scale"
        unknown += [
            f"{title}.{header}"
            for header in rows[0]
            if header not in known and not (title == "cases" and re.fullmatch(families, header))
        ]
    assert unknown == strangers


@pytest.mark.parametrize("name", ["sedge_hollow", "cooper_quay"])
def test_sound_feeders_are_radial_and_complete(name):
    tables = _tables(name)
    ends = {}
    for sheet in ("lines", "transformers", "regulators"):
        for row in tables.get(sheet, []):
            if row.get("state", "closed") == "closed":
                ends[next(iter(row.values()))] = (row["from_node"], row["to_node"])
    source = tables["source"][0]["node"]
    reached, edges = {source}, list(ends.values())
    while grown := [e for e in edges if len(reached.intersection(e)) == 1]:
        reached.update(*grown)
    nodes = {node for pair in ends.values() for node in pair}
    assert reached == nodes
    assert len(ends) == len(nodes) - 1
    assert {row["node"] for row in tables["nodes"]} == nodes
    for sheet in ("loads", "generators", "requests", "capacitors"):
        assert {row["node"] for row in tables.get(sheet, [])} <= nodes
    library = {row["conductor"]: row["rating_a"] for row in tables["conductors"]}
    assert all(row["rating_a"] or library[row["conductor"]] for row in tables["lines"])
    classes = {row["class"] for row in tables["loads"]}
    scaled = {h.removeprefix("load_scale.") for h in tables["cases"][0] if "load_scale." in h}
    assert scaled
    assert scaled <= classes
    for row in tables["loads"]:
        assert row["zip_z"] + row["zip_i"] + row["zip_p"] == pytest.approx(1, abs=1e-12)


def _audit(name: str) -> list[Finding]:
    tables = check_tables(read_workbook(ROOT / "feeders" / f"{name}.xlsx").tables)
    found = [*tables.findings, *root_feeder(tables)[1]]
    return [f for f in found if f.severity is not Severity.NOTE]


@pytest.mark.parametrize("name", ["sedge_hollow", "cooper_quay"])
def test_the_audit_has_nothing_against_sound_feeders(name):
    assert _audit(name) == []


def test_the_audit_names_the_faults_of_mothwick_and_no_sound_row(mothwick):
    planted = {(f.sheet, f.row) for f in mothwick.FAULTS if not f.what.startswith(mothwick.LEGAL)}
    named = {(f.sheet, f.row) for f in _audit("mothwick_raw")}
    # A conductor may go without a rating; the line that uses it may not.
    assert named - planted == {("lines", 13)}
    # Base voltages need a feeder that hangs together, a length in feet is a legal length, and
    # an unknown column is a note.
    assert planted - named <= {
        ("nodes", 3), ("transformers", 2), ("lines", 5), ("conductors", 3), ("capacitors", 2),
    }  # fmt: skip


def test_sedge_hollow_has_what_its_note_promises():
    tables = _tables("sedge_hollow")
    assert len(tables["nodes"]) == 46
    (regulator,) = tables["regulators"]
    assert regulator["setpoint_pu"] == 1.025
    assert "tap" not in regulator
    assert [row["line"] for row in tables["lines"] if row["state"] == "open"] == ["TIE"]
    trunk = [r["length_mi"] for r in tables["lines"] if re.fullmatch(r"T\d+", r["line"])]
    # Eleven miles of trunk, 18.0 km.
    assert sum(trunk) == pytest.approx(11.2)
    assert {row["status"] for row in tables["generators"]} == {"connected", "approved"}
    assert [row["case"] for row in tables["cases"]] == [
        "winter_evening",
        "july_noon",
        "april_noon",
        "night_charging",
    ]
    # One site asked for in two rows, one request withdrawn, one without a date.
    assert [row["request"] for row in tables["requests"]].count("Q-104") == 2
    assert [r["request"] for r in tables["requests"] if r["status"] == "withdrawn"] == ["Q-105"]
    assert [r["request"] for r in tables["requests"] if r["received"] is None] == ["Q-107"]


def test_cooper_quay_has_what_its_note_promises():
    tables = _tables("cooper_quay")
    assert len(tables["nodes"]) == 23
    assert len(tables["transformers"]) == 10
    (source,) = tables["source"]
    assert (source["transformer_kva"], source["export_limit_kw"]) == (12000, 3000)
    trunk = [r["length_ft"] for r in tables["lines"] if r["conductor"] == "500 AL 15kV"]
    assert sum(trunk) == 4000
    cables = [row for row in tables["conductors"] if "600V" not in row["conductor"]]
    assert all(row["charging_uf_per_km"] > 0 for row in cables)
    assert all(row["bank_other_kw"] for row in tables["cases"])


def test_mothwick_carries_each_fault_where_it_says(mothwick):
    book = openpyxl.load_workbook(ROOT / "feeders" / "mothwick_raw.xlsx")
    shown = {}
    for fault in mothwick.FAULTS:
        sheet = book[fault.sheet]
        header = [cell.value for cell in sheet[1]]
        assert 2 <= fault.row <= sheet.max_row
        # The regulator has no column for the setpoint: that is its fault.
        if fault.column in header:
            cell = sheet.cell(fault.row, header.index(fault.column) + 1)
            shown[fault.sheet, fault.row, fault.column] = cell.value
    assert len({fault.what for fault in mothwick.FAULTS}) == 34
    assert {fault.sheet for fault in mothwick.FAULTS} == set(book.sheetnames) - {"guide", "source"}
    assert shown["nodes", 3, "kv"] == 7.2
    assert shown["lines", 5, "length_km"] == 2640
    assert shown["lines", 6, "length_km"] == "0,6"
    assert shown["lines", 8, "line"] == book["lines"]["A7"].value == "L6"
    assert shown["lines", 11, "state"] == "shut"
    assert shown["lines", 12, "to_node"] is None
    assert shown["conductors", 3, "rating_a"] is None
    assert shown["transformers", 2, "kv_primary"] == 7.2
    assert shown["loads", 2, "power_factor"] == 0.95
    assert book["loads"]["C2"].value == 12
    assert shown["loads", 4, "node"] == "n3"
    assert shown["loads", 8, "kw"] == -20
    assert shown["generators", 2, "power_factor"] == 95
    assert shown["limits", 2, "limit"] == "v_max"


def test_mothwick_has_a_formula_nobody_calculated_and_a_broken_reference():
    path = ROOT / "feeders" / "mothwick_raw.xlsx"
    asked = openpyxl.load_workbook(path)["loads"]
    cached = openpyxl.load_workbook(path, data_only=True)["loads"]
    assert (asked["B6"].value, asked["B6"].data_type) == ("=B2*2", "f")
    assert cached["B6"].value is None
    assert (cached["B9"].value, cached["B9"].data_type) == ("#REF!", "e")


def test_one_line_is_odd_but_legal(mothwick):
    legal = [f for f in mothwick.FAULTS if f.what.startswith(mothwick.LEGAL)]
    assert [(f.sheet, f.row) for f in legal] == [("lines", 4)]
