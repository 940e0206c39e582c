"""Writing: what goes in comes out again, safely, and whole or not at all."""

from __future__ import annotations

import csv
import os
import tempfile
from collections.abc import Callable
from datetime import date, datetime
from pathlib import Path
from zipfile import ZipFile

import numpy as np
import pandas as pd
import pytest
from feederhost.errors import OutputError
from feederhost.sheets import workbook
from feederhost.sheets.cells import guard, plain, unguard
from feederhost.sheets.reading import read_workbook
from feederhost.sheets.writing import write_result
from hypothesis import example, given, settings
from hypothesis import strategies as st

from result_samples import book_of, column_of, hosting, read_rows, result

BOTH = pytest.mark.parametrize("as_csv", [False, True])


def contents(place: Path) -> dict[str, bytes]:
    """Return every file below a folder, hidden ones too."""
    return {str(f.relative_to(place)): f.read_bytes() for f in place.rglob("*") if f.is_file()}


# --- round trips -----------------------------------------------------------------------------

TEXTS = st.text(max_size=12)
CELLS = st.one_of(
    st.none(),
    TEXTS,
    st.sampled_from(["=1+1", "+x", "-x", "-5", "@a", "'=1", "''@", "'a", "#REF!", "_x000D_", "TRUE",
                     "a\r\nb", "\tx", "1e5", 'say "a", b'] ),
    st.booleans(),
    st.integers(-(10**14), 10**14),
    st.floats(allow_nan=False, allow_infinity=False),
    st.datetimes(datetime(1901, 1, 1)).map(lambda t: t.replace(microsecond=0)),
)  # fmt: skip
TABLES = st.integers(1, 4).flatmap(
    lambda width: st.lists(st.lists(CELLS, min_size=width, max_size=width), max_size=6)
)


def expected(rows: list[list[object]]) -> list[tuple[object, ...]]:
    """Return what a table holds once cells are cleaned, and blanks and comments dropped."""
    cleaned = [(number, *map(plain, row)) for number, row in enumerate(rows, 2)]
    return [
        row
        for row in cleaned
        if any(cell is not None for cell in row[1:])
        and not (isinstance(row[1], str) and row[1].startswith("#") and row[1] != "#REF!")
    ]


@pytest.mark.parametrize(
    ("text", "cell"),
    [(" a\r\nb\rc ", "a\nb\nc"), ("\t\xa0", None), ("a\x00\x0bb\x1f", "ab"),
     ("N\ud800\ufffe1", "N1"), ("a\tb", "a\tb"), ("", None)],
)  # fmt: skip
def test_text_is_trimmed_and_printable(text: str, cell: str | None) -> None:
    assert plain(text) == cell


def frame(rows: list[list[object]]) -> pd.DataFrame:
    width = len(rows[0]) if rows else 1
    return pd.DataFrame(rows, columns=[f"c{i}" for i in range(width)], dtype=object)


@settings(max_examples=80, deadline=None)
@given(TABLES)
@example([[0.1 + 0.2, 5e-324, -1.7976931348623157e308, 2.0]])
@example([["_x005F_", "a\x00\x1fb", "\ud800", "\ufffe"]])
def test_xlsx_round_trip(rows: list[list[object]]) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "r.xlsx"
        write_result({"t": frame(rows)}, path)
        back = read_rows(path)
    assert back == expected(rows)
    kinds = [[type(cell) for cell in row[1:]] for row in back]
    assert kinds == [[type(cell) for cell in row[1:]] for row in expected(rows)]


@settings(max_examples=80, deadline=None)
@given(TABLES)
def test_csv_round_trip(rows: list[list[object]]) -> None:
    """Text comes back to the letter, floats to the last digit, all as text."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "r"
        write_result({"t": frame(rows)}, path, as_csv=True)
        back = read_rows(path)
    wanted = expected(rows)
    assert len(back) == len(wanted)
    for read, written in zip(back, wanted, strict=True):
        for a, b in zip(read[1:], written[1:], strict=True):
            if isinstance(b, bool):
                assert a == str(b).upper()
            elif isinstance(b, int | float):
                assert type(b)(a) == b
            elif isinstance(b, datetime):
                assert datetime.fromisoformat(a) == b
            else:
                assert a == b


def test_values_of_numpy_and_pandas(tmp_path: Path) -> None:
    table = pd.DataFrame(
        {
            "a": pd.array([1, None], dtype="Int64"),
            "b": pd.array([True, None], dtype="boolean"),
            "c": pd.Series(["x", None], dtype="str"),
            "d": pd.to_datetime(pd.Series(["2026-11-01", None])),
            "e": pd.Categorical(["pv", None]),
            "f": np.array([0.5, np.nan], dtype=np.float32),
            "g": pd.Series([date(2026, 11, 1), pd.NA], dtype=object),
            "h": pd.Series([np.int32(3), np.bool_(False)], dtype=object),
        }
    )
    write_result({"t": table}, tmp_path / "r.xlsx")
    day = datetime(2026, 11, 1)
    assert read_rows(tmp_path / "r.xlsx") == [
        (2, 1, True, "x", day, "pv", 0.5, day, 3),
        (3, None, None, None, None, None, None, None, False),
    ]


@pytest.mark.parametrize(
    ("value", "cell"),
    [(np.inf, "inf"), (-np.inf, "-inf"), (datetime(1850, 1, 1), "1850-01-01T00:00:00"),
     (pd.Timestamp("2026-01-01", tz="UTC"), "2026-01-01T00:00:00+00:00"), (("a", 1), "('a', 1)")],
)  # fmt: skip
@BOTH
def test_what_a_cell_cannot_hold_is_written_as_text(
    tmp_path: Path, value: object, cell: str, as_csv: bool
) -> None:
    table = pd.DataFrame({"a": pd.Series([value], dtype=object)})
    write_result({"t": table}, tmp_path / "r.xlsx", as_csv=as_csv)
    assert read_rows(tmp_path / "r.xlsx") == [(2, cell)]


def test_full_precision_stays_in_the_cell(tmp_path: Path) -> None:
    book = book_of({"hosting": hosting(hosting_unrounded_kw=[0.1 + 0.2, 1.0, None])}, tmp_path)
    cell = column_of(book["hosting"], "hosting_unrounded_kw")[0]
    # The binary64 number next to 0.3: it takes seventeen digits to tell the two apart.
    assert cell.value == 0.3 + 2**-54 != 0.3
    assert cell.number_format == "#,##0.000"


# --- formulas in the data --------------------------------------------------------------------

BAD = ["=1+1", '=HYPERLINK("http://x","y")', "+1", "-1+1", "@SUM(A1)", "\t=1", "\r=1", "  =1"]


@pytest.mark.parametrize("text", BAD)
def test_no_text_becomes_a_formula_in_xlsx(tmp_path: Path, text: str) -> None:
    tables = {"hosting": hosting(node=[text, "N2", "N3"], flags=["#REF!", text, None]),
              "extra": pd.DataFrame({text: [1.0]})}  # fmt: skip
    book = book_of(tables, tmp_path)
    for cell in (book["hosting"]["A2"], book["hosting"]["H3"], book["extra"]["A1"]):
        assert cell.data_type == "s"
        assert cell.value == text.strip()
        assert cell.quotePrefix
    assert book["hosting"]["H2"].data_type == "s"
    with ZipFile(tmp_path / "r.xlsx") as archive:
        sheets = [n for n in archive.namelist() if n.startswith("xl/worksheets/sheet")]
        assert len(sheets) == 4
        assert not any(b"<f>" in archive.read(n) or b"<f " in archive.read(n) for n in sheets)


@pytest.mark.parametrize("text", BAD)
def test_no_text_becomes_a_formula_in_csv(tmp_path: Path, text: str) -> None:
    table = pd.DataFrame({text: [text]})
    write_result({"t": table}, tmp_path / "r", as_csv=True)
    with (tmp_path / "r" / "t.csv").open(newline="") as stream:
        cells = [cell for row in csv.reader(stream) for cell in row]
    assert cells == ["'" + text.strip()] * 2
    assert read_rows(tmp_path / "r") == [(2, text.strip())]


@pytest.mark.parametrize(
    ("text", "guarded"),
    [("-5", "-5"), ("-0.5e-3", "-0.5e-3"), ("-.5", "-.5"), ("-", "'-"), ("-5 kW", "'-5 kW"),
     ("-inf", "'-inf"), ("+5", "'+5"), ("it's", "it's"), ("'a", "'a"), ("'=1", "''=1"), ("", "")],
)  # fmt: skip
def test_guard(text: str, guarded: str) -> None:
    assert guard(text) == guarded
    assert unguard(guarded) == text


def test_negative_numbers_are_left_alone_in_csv(tmp_path: Path) -> None:
    write_result({"t": pd.DataFrame({"a": [-0.25]})}, tmp_path / "r", as_csv=True)
    assert (tmp_path / "r" / "t.csv").read_bytes() == b"a\n-0.25\n"


# --- whole or not at all ---------------------------------------------------------------------


@BOTH
def test_same_tables_same_bytes(tmp_path: Path, as_csv: bool) -> None:
    seen = []
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        write_result(result(), tmp_path / name / "r.xlsx", as_csv=as_csv)
        seen.append(contents(tmp_path / name))
    assert seen[0] == seen[1]
    assert len(seen[0]) == (4 if as_csv else 1)


def test_no_time_of_writing_in_the_workbook(tmp_path: Path) -> None:
    book = book_of(result(), tmp_path)
    assert book.properties.created == book.properties.modified
    assert book.properties.created.year == 2000


def at_fsync(count: int) -> Callable[[pytest.MonkeyPatch], None]:
    def fail(patch: pytest.MonkeyPatch) -> None:
        calls = []

        def fsync(_: int) -> None:
            calls.append(1)
            if len(calls) == count:
                raise OSError(28, "No space left on device")

        patch.setattr(os, "fsync", fsync)

    return fail


def at_row(patch: pytest.MonkeyPatch) -> None:
    """Fail with a sheet half written."""
    real = workbook.row_looks

    def row_looks(name: str, places: dict[str, int], row: list[object], looks: object) -> object:
        if "N2" in row:
            raise OSError(28, "No space left on device")
        return real(name, places, row, looks)

    patch.setattr(workbook, "row_looks", row_looks)


def at_move(name: str, count: int) -> Callable[[pytest.MonkeyPatch], None]:
    def fail(patch: pytest.MonkeyPatch) -> None:
        calls = []
        real = getattr(os, name)

        def move(a: Path, b: Path) -> None:
            calls.append(1)
            if len(calls) == count:
                raise PermissionError(13, "Permission denied")
            real(a, b)

        patch.setattr(os, name, move)

    return fail


@pytest.mark.parametrize(
    ("as_csv", "exists", "fail"),
    [(False, True, at_row), (False, False, at_row),
     (False, True, at_fsync(1)), (False, False, at_fsync(1)),
     (False, True, at_move("replace", 1)), (False, False, at_move("replace", 1)),
     (True, True, at_fsync(1)), (True, True, at_fsync(3)), (True, False, at_fsync(3)),
     (True, True, at_move("rename", 1)), (True, False, at_move("rename", 1)),
     (True, True, at_move("rename", 2))],
)  # fmt: skip
def test_a_failure_leaves_what_was_there(
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    as_csv: bool,
    exists: bool,
    fail: Callable[[pytest.MonkeyPatch], None],
) -> None:
    if exists:
        write_result({"run": result()["run"]}, tmp_path / "r.xlsx", as_csv=as_csv)
    before = contents(tmp_path)
    with monkeypatch.context() as patch:
        fail(patch)
        with pytest.raises(OutputError) as caught:
            write_result(result(), tmp_path / "r.xlsx", as_csv=as_csv)
    assert caught.value.exit_code == 1
    assert "\n" not in str(caught.value)
    assert str(tmp_path / "r.xlsx") in str(caught.value)
    assert contents(tmp_path) == before
    assert [p.name for p in tmp_path.iterdir()] == (["r.xlsx"] if exists else [])
    write_result(result(), tmp_path / "r.xlsx", as_csv=as_csv)
    assert set(read_workbook(tmp_path / "r.xlsx").tables) >= set(result())


def test_a_crash_of_the_program_leaves_the_old_folder(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Not only refusals of the system: an interrupt in mid-write is cleaned up as well."""
    write_result({"run": result()["run"]}, tmp_path / "r", as_csv=True)
    before = contents(tmp_path)

    def interrupt(_: int) -> None:
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", interrupt)
        with pytest.raises(KeyboardInterrupt):
            write_result(result(), tmp_path / "r", as_csv=True)
    assert contents(tmp_path) == before
    assert [p.name for p in tmp_path.iterdir()] == ["r"]


def test_a_csv_result_replaces_an_earlier_one_whole(tmp_path: Path) -> None:
    (tmp_path / "r").mkdir()
    write_result(result(), tmp_path / "r", as_csv=True)
    write_result({"run": result()["run"]}, tmp_path / "r", as_csv=True)
    assert list(contents(tmp_path)) == ["r/run.csv"]


@pytest.mark.parametrize("name", ["lines.csv", "notes.txt", ".hidden", "hosting.xlsx"])
def test_a_folder_with_other_files_is_refused(tmp_path: Path, name: str) -> None:
    (tmp_path / "run.csv").write_text("key,value\n")
    (tmp_path / name).write_text("mine")
    with pytest.raises(OutputError, match=name):
        write_result(result(), tmp_path, as_csv=True)
    assert contents(tmp_path) == {"run.csv": b"key,value\n", name: b"mine"}


def test_a_folder_or_link_under_a_result_name_is_refused(tmp_path: Path) -> None:
    (tmp_path / "a" / "run.csv").mkdir(parents=True)
    (tmp_path / "b").mkdir()
    (tmp_path / "b" / "run.csv").symlink_to(tmp_path / "elsewhere.csv")
    for name in ("a", "b"):
        with pytest.raises(OutputError, match=r"run\.csv"):
            write_result(result(), tmp_path / name, as_csv=True)


def test_targets_that_cannot_be(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("mine")
    (tmp_path / "folder").mkdir()
    for path, as_csv in (
        (tmp_path / "file", True),
        (tmp_path / "folder", False),
        (tmp_path / "none" / "r.xlsx", False),
        (tmp_path / "none" / "r", True),
    ):
        with pytest.raises(OutputError) as caught:
            write_result(result(), path, as_csv=as_csv)
        assert "\n" not in str(caught.value)
    assert contents(tmp_path) == {"file": b"mine"}


def test_more_rows_than_a_sheet_has(tmp_path: Path) -> None:
    # 1,048,576 rows of an .xlsx sheet, one of them the header, one kept for a banner.
    table = pd.DataFrame({"a": np.zeros(1_048_575)})
    with pytest.raises(OutputError, match="1048575 rows"):
        write_result({"base": table}, tmp_path / "r.xlsx")
    assert list(tmp_path.iterdir()) == []
