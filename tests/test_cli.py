"""The command line: what is answered, written and refused, and the exit codes."""

from __future__ import annotations

import math
import os
from pathlib import Path
from typing import Any

import openpyxl
import pytest
from feederhost.errors import InputError
from feederhost.study import reports

from command_line import (
    FATAL,
    HOPELESS,
    IN_KW,
    NO_VIOLATION,
    UNSOUND,
    default_to,
    in_process,
    rows_of,
    run,
    tables,
    write,
)


@pytest.fixture
def feeder(tmp_path: Path) -> Path:
    return write(tmp_path)


# --- the answer: 0 -----------------------------------------------------------------------------


def test_host_writes_prints_and_answers_zero(feeder, tmp_path):
    done = run("host", feeder, "-o", tmp_path / "r.xlsx")
    assert (done.exit_code, done.stderr) == (0, "")
    lines = done.stdout.splitlines()
    assert lines[0] == "feeder: 3 nodes, 2 cases, data of 2026-01-01"
    assert lines[-1] == f"written: {tmp_path / 'r.xlsx'}"
    assert "proof     proven 4" in lines
    assert "state     hosted 4" in lines
    assert max(map(len, lines[:-1])) <= 79
    rows = rows_of(tmp_path / "r.xlsx", "hosting")
    assert [(r["node"], r["technology"]) for r in rows] == [
        ("A", "pv"), ("B", "pv"), ("A", "ev"), ("B", "ev"),
    ]  # fmt: skip
    assert {r["criterion"] for r in rows} == {"line_rating"}
    (ev,) = (r for r in rows if (r["node"], r["technology"]) == ("A", "ev"))
    assert (ev["element"], ev["limit_value"], ev["unit"], ev["case"]) == ("L1", 60, "A", "peak")
    # 60 A leave a source held at 12.47 kV: sqrt(3) x 12.47 x 60 kVA, of which the load at B takes
    # 200 + j60 and the series impedance of L1 3 x (0.3 + j0.4) x 60^2 / 1000.  What L2 loses at
    # the 10 A of the load is below 0.1 kW.
    square = 60**2 / 1000
    head_kw = math.sqrt(3 * (12.47 * 60) ** 2 - (60 + 3 * 0.4 * square) ** 2)
    fits = head_kw - 200 - 3 * 0.3 * square
    assert fits - 0.1 < ev["hosting_unrounded_kw"] < fits
    assert ev["hosting_kw"] == math.floor(ev["hosting_unrounded_kw"])


def test_check_without_output_writes_nothing(feeder, tmp_path):
    before = sorted(os.listdir(tmp_path))
    done = run("check", feeder)
    assert (done.exit_code, done.stderr) == (0, "")
    assert "peak" in done.stdout
    assert sorted(os.listdir(tmp_path)) == before


def test_check_writes_base_cases_and_conditions(feeder, tmp_path):
    done = run("check", feeder, "-o", tmp_path / "c.xlsx")
    assert done.exit_code == 0
    cases = rows_of(tmp_path / "c.xlsx", "base_cases")
    assert [r["case"] for r in cases] == ["peak", "light"]
    assert {"conditions", "audit", "base", "run"} <= set(
        openpyxl.load_workbook(tmp_path / "c.xlsx", read_only=True).sheetnames
    )


@pytest.mark.parametrize("command", ["host", "check", "screen"])
def test_quiet_prints_nothing(command, feeder, tmp_path):
    done = run(command, feeder, "-q", "-o", tmp_path / "r.xlsx")
    assert (done.exit_code, done.output) == (0, "")
    assert (tmp_path / "r.xlsx").exists()


def test_a_cap_that_is_not_met_is_printed_as_at_least(tmp_path):
    capped = write(tmp_path, tables(limits=[{"limit": "search_cap_kw", "value": 50}]))
    done = run("host", capped, "-o", tmp_path / "r.xlsx")
    assert done.exit_code == 0
    assert ">= 50 at A" in done.stdout
    assert {(r["state"], r["proof"]) for r in rows_of(tmp_path / "r.xlsx", "hosting")} == {
        ("capped", "not_needed")
    }


def test_a_feeder_with_warnings_still_answers_zero_and_shows_them(tmp_path):
    done = run("check", write(tmp_path, tables(capacitors=[{"node": "B", "kvar": 900}])))
    assert done.exit_code == 0
    assert "warning capacitors 2 kvar: " in done.stdout


def test_equal_runs_differ_in_their_times_only(feeder, tmp_path):
    for name in ("one", "two"):
        assert run("host", feeder, "-q", "--csv", "-o", tmp_path / name).exit_code == 0
    one, two = (
        {f.name: f.read_bytes() for f in (tmp_path / n).iterdir() if f.name != "timing.csv"}
        for n in ("one", "two")
    )
    assert one == two
    assert len(one) >= 10


# --- narrowing ---------------------------------------------------------------------------------


def asked(feeder: Path, out: Path, *options: str) -> list[dict[str, Any]]:
    done = run("host", feeder, "-q", "-o", out, *options)
    assert (done.exit_code, done.output) == (0, "")
    return rows_of(out, "hosting")


@pytest.mark.parametrize(
    ("options", "rows"),
    [
        (["--node", "B"], [("B", "pv"), ("B", "ev")]),
        (["--technology", "ev"], [("A", "ev"), ("B", "ev")]),
        (["--node", "A", "--node", "B", "--technology", "pv"], [("A", "pv"), ("B", "pv")]),
        (["--technology", "storage", "--node", "B"], [("B", "storage")]),
    ],
)
def test_node_and_technology_narrow_the_rows(options, rows, feeder, tmp_path):
    found = asked(feeder, tmp_path / "r.xlsx", *options)
    assert [(r["node"], r["technology"]) for r in found] == rows


def test_a_narrowed_answer_is_that_of_the_whole_feeder(feeder, tmp_path):
    whole = asked(feeder, tmp_path / "all.xlsx")
    (own,) = asked(feeder, tmp_path / "r.xlsx", "--node", "B", "--technology", "pv")
    (same,) = (r for r in whole if (r["node"], r["technology"]) == ("B", "pv"))
    assert own["hosting_kw"] == same["hosting_kw"]
    assert own["hosting_unrounded_kw"] == pytest.approx(same["hosting_unrounded_kw"], rel=1e-9)


def test_case_narrows_the_cases_and_a_technology_may_then_never_run(feeder, tmp_path):
    rows = asked(feeder, tmp_path / "r.xlsx", "--case", "peak", "--node", "B")
    pv, ev = rows
    assert (pv["state"], pv["criterion"], pv["hosting_kw"]) == ("not_analysed", "never_runs", None)
    assert (ev["state"], ev["case"]) == ("hosted", "peak")
    assert [r["case"] for r in rows_of(tmp_path / "r.xlsx", "base_cases")] == ["peak"]


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (["--node", "Z"], "no node named Z"),
        (["--technology", "wind"], "no technology named wind"),
        (["--case", "noon"], "no case named noon"),
        (["--node", "S"], "no candidate is left"),
        (["--solver", "abacus"], "abacus"),
        (["--nodes", "A"], "--nodes"),
    ],
)
def test_a_question_that_is_off_is_a_usage_error(options, said, feeder, tmp_path):
    done = run("host", feeder, "-o", tmp_path / "r.xlsx", *options)
    assert done.exit_code == 2
    assert said in done.stderr
    assert done.stdout == ""
    assert not (tmp_path / "r.xlsx").exists()


def test_host_needs_an_output(feeder):
    done = run("host", feeder)
    assert done.exit_code == 2
    assert "--output" in done.stderr


def test_the_solver_asked_for_is_the_one_on_record(feeder, tmp_path):
    asked(feeder, tmp_path / "r.xlsx", "--solver", "clarabel", "--node", "B")
    on_record = {r["key"]: r["value"] for r in rows_of(tmp_path / "r.xlsx", "run")}
    assert on_record["solver"] == "clarabel"
    solved = rows_of(tmp_path / "r.xlsx", "relaxation", head=2)
    assert {r["solver"] for r in solved} == {"clarabel"}


def test_plain_solves_the_plain_programme_for_every_row(feeder, tmp_path, monkeypatch):
    default_to(monkeypatch, plain_sample=0)
    asked(feeder, tmp_path / "none.xlsx", "--node", "B")
    asked(feeder, tmp_path / "all.xlsx", "--node", "B", "--plain")
    without, with_plain = (
        [r["plain_kw"] for r in rows_of(tmp_path / name, "relaxation", head=2)]
        for name in ("none.xlsx", "all.xlsx")
    )
    assert without == [None, None]
    assert all(value > 0 for value in with_plain)


# --- nothing that is not trusted: 4 --------------------------------------------------------------


@pytest.mark.parametrize("setting", ["solver_agreement", "recursion_tolerance"])
def test_a_row_without_proof_answers_four_and_is_written(setting, feeder, tmp_path, monkeypatch):
    default_to(monkeypatch, **{setting: 0.0})
    done = run("host", feeder, "-o", tmp_path / "r.xlsx", "--node", "B", "--technology", "pv")
    assert done.exit_code == 4
    assert "proof     bracketed 1" in done.stdout.splitlines()
    (row,) = rows_of(tmp_path / "r.xlsx", "hosting")
    assert (row["state"], row["proof"]) == ("hosted", "bracketed")
    assert row["upper_bound_kw"] >= row["hosting_unrounded_kw"] >= row["hosting_kw"] > 0


def test_a_row_that_fails_its_check_carries_no_number(feeder, tmp_path, monkeypatch):
    default_to(monkeypatch, **NO_VIOLATION)
    done = run("host", feeder, "-q", "--plain", "-o", tmp_path / "r.xlsx")
    assert done.exit_code == 4
    for row in rows_of(tmp_path / "r.xlsx", "hosting"):
        assert (row["state"], row["proof"], row["criterion"]) == ("hosted", "failed", "ac_check")
        assert {row[name] for name in IN_KW} == {None}
    for sheet, head in (("criteria", 1), ("relaxation", 2)):
        for row in rows_of(tmp_path / "r.xlsx", sheet, head):
            assert {value for name, value in row.items() if name.endswith("_kw")} == {None}


# --- nothing to compute with: 3 ------------------------------------------------------------------


def finding_lines(stderr: str) -> list[str]:
    *findings, last = stderr.splitlines()
    assert last.startswith("feederhost: feeder.xlsx: 3 fatal findings")
    return findings


@pytest.mark.parametrize("quiet", [[], ["--quiet"], ["--json"]])
@pytest.mark.parametrize("command", ["host", "check", "screen"])
def test_fatal_findings_stand_one_a_line_on_standard_error(command, quiet, tmp_path):
    done = run(command, write(tmp_path, UNSOUND), "-o", tmp_path / "r.xlsx", *quiet)
    assert (done.exit_code, done.stdout) == (3, "")
    for line, said in zip(finding_lines(done.stderr), FATAL, strict=True):
        assert line.startswith(said)
        assert " - " in line


@pytest.mark.parametrize("command", ["host", "check", "screen"])
def test_with_fatal_findings_their_audit_is_all_that_is_written(command, tmp_path):
    spoilt = write(tmp_path, UNSOUND)
    run(command, spoilt, "-q", "-o", tmp_path / "r.xlsx")
    assert openpyxl.load_workbook(tmp_path / "r.xlsx").sheetnames == ["audit"]
    rows = rows_of(tmp_path / "r.xlsx", "audit")
    fatal = [r for r in rows if r["severity"] == "fatal"]
    assert rows[: len(fatal)] == fatal
    shown = [f"{r['sheet']} {r['row']} {r['column']}: {r['finding']}" for r in fatal]
    for line, said in zip(shown, FATAL, strict=True):
        assert line.startswith(said)
    run(command, spoilt, "-q", "--csv", "-o", tmp_path / "folder")
    assert os.listdir(tmp_path / "folder") == ["audit.csv"]


@pytest.mark.parametrize("command", ["host", "check", "screen"])
def test_a_base_case_without_solution_leaves_nothing_behind(command, tmp_path):
    done = run(command, write(tmp_path, HOPELESS), "-o", tmp_path / "r.xlsx")
    assert (done.exit_code, done.stdout) == (3, "")
    (line,) = done.stderr.splitlines()
    assert line.startswith("feederhost: case peak: no power flow solution with nothing added")
    assert not (tmp_path / "r.xlsx").exists()


@pytest.mark.parametrize("content", [None, b"no workbook"], ids=["missing", "not a workbook"])
@pytest.mark.parametrize("command", ["host", "check", "screen"])
def test_an_input_that_cannot_be_read(command, content, tmp_path):
    if content is not None:
        (tmp_path / "feeder.xlsx").write_bytes(content)
    done = run(command, tmp_path / "feeder.xlsx", "-o", tmp_path / "r.xlsx")
    assert (done.exit_code, done.stdout) == (3, "")
    assert len(done.stderr.splitlines()) == 1
    assert not (tmp_path / "r.xlsx").exists()


# --- nowhere to write: 1 -------------------------------------------------------------------------


@pytest.mark.parametrize("spelt", ["feeder.xlsx", "./feeder.xlsx", "sub/../feeder.xlsx"])
def test_the_output_may_not_be_the_input(spelt, feeder, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "sub").mkdir()
    before = feeder.read_bytes()
    done = run("host", "feeder.xlsx", "-o", spelt)
    assert (done.exit_code, done.stdout) == (1, "")
    assert "is the input itself" in done.stderr
    assert feeder.read_bytes() == before


def test_the_output_may_not_be_a_link_to_the_input(feeder, tmp_path):
    (tmp_path / "link.xlsx").symlink_to(feeder)
    done = run("check", feeder, "-o", tmp_path / "link.xlsx")
    assert done.exit_code == 1
    assert "is the input itself" in done.stderr


def test_a_csv_folder_may_not_be_its_own_output(tmp_path):
    folder = tmp_path / "feeder"
    folder.mkdir()
    (folder / "source.csv").write_text("node,kv\nS,12.47\n")
    done = run("check", folder, "--csv", "-o", folder)
    assert done.exit_code == 1
    assert os.listdir(folder) == ["source.csv"]


@pytest.mark.parametrize("command", ["host", "check"])
@pytest.mark.parametrize("place", ["absent/r.xlsx", "taken"])
def test_an_output_that_cannot_be_written(command, place, feeder, tmp_path):
    (tmp_path / "taken").mkdir()
    done = run(command, feeder, "-o", tmp_path / place)
    assert (done.exit_code, done.stdout) == (1, "")
    (line,) = done.stderr.splitlines()
    assert line.startswith(f"feederhost: cannot write {tmp_path / place}: ")
    assert sorted(os.listdir(tmp_path)) == ["feeder.xlsx", "taken"]


def test_a_folder_with_other_files_is_not_written_into(feeder, tmp_path):
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "letter.txt").write_text("dear all")
    done = run("check", feeder, "--csv", "-o", tmp_path / "mine")
    assert done.exit_code == 1
    assert os.listdir(tmp_path / "mine") == ["letter.txt"]


# --- errors and tracebacks -----------------------------------------------------------------------


def test_no_traceback_without_debug_and_one_with_it(tmp_path):
    write(tmp_path, UNSOUND)
    plain = in_process("check", "feeder.xlsx", cwd=tmp_path)
    assert plain.returncode == 3
    assert "Traceback" not in plain.stderr
    debug = in_process("check", "feeder.xlsx", "--debug", cwd=tmp_path)
    assert debug.returncode != 0
    assert "Traceback (most recent call last):" in debug.stderr
    assert "InputError: feeder.xlsx: 3 fatal findings" in debug.stderr


def test_a_fault_of_the_program_is_called_one(feeder, monkeypatch):
    def fault(*_: object) -> None:
        raise RuntimeError("first line\nsecond line")

    monkeypatch.setattr(reports, "check_report", fault)
    done = run("check", feeder)
    assert (done.exit_code, done.stdout) == (1, "")
    assert done.stderr.splitlines() == [
        "this is a fault of the program, not of the feeder:",
        "feederhost: first line second line",
    ]
    told = run("check", feeder, "--debug")
    assert told.exit_code == 1
    assert "RuntimeError: first line" in told.stderr


def test_debug_shows_the_traceback_and_keeps_the_exit_code(tmp_path):
    told = run("check", write(tmp_path, UNSOUND), "--debug")
    assert told.exit_code == InputError.exit_code == 3
    assert "Traceback" in told.stderr
