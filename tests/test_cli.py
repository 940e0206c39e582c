"""The command line: exit codes, what is written and printed, and what is refused."""

from __future__ import annotations

import csv
import io
import json
import math
import os
import subprocess
import sys
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import Any

import click
import openpyxl
import pytest
from click.testing import CliRunner, Result
from feederhost import __version__, terminal
from feederhost.cli import main
from feederhost.errors import InputError
from feederhost.feeder import case_rules
from feederhost.schema import INPUT
from feederhost.settings import Settings
from feederhost.sheets.template import write_input
from feederhost.study import reports
from feederhost.terminal import ProgressLine

Tables = dict[str, list[dict[str, Any]]]
HEAVY = ("numpy", "pandas", "cvxpy", "openpyxl", "networkx", "scipy", "ecos")
ONLY_WORKBOOK = {"charts", "chart_data"}


def tables(**changed: list[dict[str, Any]]) -> Tables:
    """Return a feeder of two lines whose rating is met below the cap; an invented scenario."""
    line = {"length_km": 1, "r1_ohm_per_km": 0.3, "x1_ohm_per_km": 0.4, "rating_a": 60}
    sound: Tables = {
        "source": [{"node": "S", "kv": 12.47, "voltage_pu": 1.0, "data_date": "2026-01-01"}],
        "lines": [
            {"line": "L1", "from_node": "S", "to_node": "A"} | line,
            {"line": "L2", "from_node": "A", "to_node": "B"} | line,
        ],
        "loads": [{"node": "B", "kw": 200, "kvar": 60}],
    }
    return sound | changed


UNSOUND = tables(
    lines=[
        {"line": "L1", "from_node": "S", "to_node": "A", "length_km": "one", "r1_ohm_per_km": 0.3,
         "x1_ohm_per_km": 0.4, "rating_a": 60},
    ],
    loads=[{"node": "A", "kw": -5}, {"node": "Q", "kw": 5}],
)  # fmt: skip
FATAL = (
    "lines 2 length_km: text where a number belongs",
    "loads 2 kw: negative, where that cannot be",
    "loads 3 node: no node Q",
)
# 12.47 kV behind 0.6 + j0.8 ohm carries no 200 MW: |V|^2 / (2 (|z| + r)) is 49 MW at the most.
HOPELESS = tables(loads=[{"node": "B", "kw": 200_000}])


@pytest.fixture
def write(tmp_path: Path) -> Callable[..., Path]:
    """Return a function that writes tables as a workbook, `feeder.xlsx` unless named."""

    def put(content: Tables | None = None, name: str = "feeder.xlsx") -> Path:
        write_input(tables() if content is None else content, tmp_path / name)
        return tmp_path / name

    return put


@pytest.fixture
def feeder(write: Callable[..., Path]) -> Path:
    return write()


@pytest.fixture
def unproven(monkeypatch: pytest.MonkeyPatch) -> Callable[..., None]:
    """Return a function that puts other defaults in the place of some settings."""

    def replace(**fields: float) -> None:
        monkeypatch.setattr(case_rules, "Settings", lambda: Settings(**fields))

    return replace


def run(*arguments: object) -> Result:
    return CliRunner().invoke(main, [str(a) for a in arguments])


def in_process(*arguments: object, cwd: Path) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "feederhost", *map(str, arguments)]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, check=False)


def rows_of(path: Path, sheet: str, head: int = 1) -> list[dict[str, Any]]:
    lines = list(openpyxl.load_workbook(path)[sheet].iter_rows(min_row=head, values_only=True))
    return [dict(zip(lines[0], line, strict=True)) for line in lines[1:]]


def strict_json(text: str) -> dict[str, Any]:
    def refuse(word: str) -> None:
        raise AssertionError(f"{word} is no JSON")

    return json.loads(text, parse_constant=refuse)


# --- help and version ------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["", *main.commands])
@pytest.mark.parametrize("flag", ["-h", "--help"])
def test_every_command_has_help(name, flag):
    done = run(*filter(None, (name, flag)))
    assert done.exit_code == 0
    assert done.stdout.startswith("Usage: ")
    command = main.commands[name] if name else main
    summary = (command.help or "").split("\n\n")[0]
    assert summary.split()[:4] == done.stdout.split("\n\n")[1].split()[:4]


@pytest.mark.parametrize(
    "option",
    [p for c in (main, *main.commands.values()) for p in c.params if isinstance(p, click.Option)],
    ids=lambda option: option.name,
)
def test_every_option_has_help(option):
    assert option.help
    assert option.help.endswith(".")


def test_the_same_option_means_the_same_everywhere():
    told: dict[str, set[str]] = {}
    for command in main.commands.values():
        for option in command.params:
            if isinstance(option, click.Option) and option.name != "output":
                told.setdefault("/".join(option.opts), set()).add(str(option.help))
    assert {name for name, texts in told.items() if len(texts) > 1} == set()


@pytest.mark.parametrize("name", ["", *main.commands])
def test_help_imports_nothing_heavy(name, tmp_path):
    code = (
        "import sys\n"
        "from feederhost.cli import main\n"
        f"main({[*filter(None, [name]), '--help']!r}, standalone_mode=False)\n"
        f"print('loaded', sorted(set({HEAVY!r}) & set(sys.modules)))\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True, check=True
    )
    assert done.stdout.splitlines()[-1] == "loaded []"


def test_version_of_the_module(tmp_path):
    done = in_process("--version", cwd=tmp_path)
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout == f"feederhost, version {__version__}\n"


def test_no_command_shows_the_help_and_is_a_usage_error(tmp_path):
    done = in_process(cwd=tmp_path)
    assert done.returncode == 2
    assert "Commands:" in done.stdout + done.stderr


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


@pytest.mark.parametrize("command", ["host", "check"])
def test_quiet_prints_nothing(command, feeder, tmp_path):
    done = run(command, feeder, "-q", "-o", tmp_path / "r.xlsx")
    assert (done.exit_code, done.output) == (0, "")
    assert (tmp_path / "r.xlsx").exists()


def test_a_cap_that_is_not_met_is_printed_as_at_least(write, tmp_path):
    capped = write(tables(limits=[{"limit": "search_cap_kw", "value": 50}]))
    done = run("host", capped, "-o", tmp_path / "r.xlsx")
    assert done.exit_code == 0
    assert ">= 50 at A" in done.stdout
    assert {(r["state"], r["proof"]) for r in rows_of(tmp_path / "r.xlsx", "hosting")} == {
        ("capped", "not_needed")
    }


def test_a_feeder_with_warnings_still_answers_zero_and_shows_them(write):
    done = run("check", write(tables(capacitors=[{"node": "B", "kvar": 900}])))
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


def test_plain_solves_the_plain_programme_for_every_row(feeder, tmp_path, unproven):
    unproven(plain_sample=0)
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
def test_a_row_without_proof_answers_four_and_is_written(setting, feeder, tmp_path, unproven):
    unproven(**{setting: 0.0})
    done = run("host", feeder, "-o", tmp_path / "r.xlsx", "--node", "B", "--technology", "pv")
    assert done.exit_code == 4
    assert "proof     bracketed 1" in done.stdout.splitlines()
    (row,) = rows_of(tmp_path / "r.xlsx", "hosting")
    assert (row["state"], row["proof"]) == ("hosted", "bracketed")
    assert row["upper_bound_kw"] >= row["hosting_unrounded_kw"] >= row["hosting_kw"] > 0


# Below the value nothing is violated yet: a check that looks for the violation there must fail.
NO_VIOLATION = {"above_share": -0.5}
IN_KW = ("hosting_kw", "hosting_kva", "hosting_unrounded_kw", "upper_bound_kw", "next_kw",
         "existing_kw", "reverse_at_head_kw", "fictitious_loss_kw")  # fmt: skip


def test_a_row_that_fails_its_check_carries_no_number(feeder, tmp_path, unproven):
    unproven(**NO_VIOLATION)
    done = run("host", feeder, "-q", "--plain", "-o", tmp_path / "r.xlsx")
    assert done.exit_code == 4
    for row in rows_of(tmp_path / "r.xlsx", "hosting"):
        assert (row["state"], row["proof"], row["criterion"]) == ("hosted", "failed", "ac_check")
        assert {row[name] for name in IN_KW} == {None}
    for sheet, head in (("criteria", 1), ("relaxation", 2)):
        for row in rows_of(tmp_path / "r.xlsx", sheet, head):
            assert {value for name, value in row.items() if name.endswith("_kw")} == {None}


def test_json_of_failed_rows_holds_null(feeder, tmp_path, unproven):
    unproven(**NO_VIOLATION)
    done = run("host", feeder, "--json", "-o", tmp_path / "r.xlsx")
    told = strict_json(done.stdout)
    assert done.exit_code == told["exit_code"] == 4
    assert told["proof"] == {"failed": 4}
    assert {row[name] for row in told["hosting"] for name in IN_KW} == {None}
    assert all("smallest_kw" not in line for line in told["technologies"])


# --- nothing to compute with: 3 ------------------------------------------------------------------


def finding_lines(stderr: str) -> list[str]:
    *findings, last = stderr.splitlines()
    assert last.startswith("feederhost: feeder.xlsx: 3 fatal findings")
    return findings


@pytest.mark.parametrize("quiet", [[], ["--quiet"], ["--json"]])
@pytest.mark.parametrize("command", ["host", "check"])
def test_fatal_findings_stand_one_a_line_on_standard_error(command, quiet, write, tmp_path):
    done = run(command, write(UNSOUND), "-o", tmp_path / "r.xlsx", *quiet)
    assert (done.exit_code, done.stdout) == (3, "")
    for line, said in zip(finding_lines(done.stderr), FATAL, strict=True):
        assert line.startswith(said)
        assert " - " in line


@pytest.mark.parametrize("command", ["host", "check"])
def test_with_fatal_findings_their_audit_is_all_that_is_written(command, write, tmp_path):
    spoilt = write(UNSOUND)
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


@pytest.mark.parametrize("command", ["host", "check"])
def test_a_base_case_without_solution_leaves_nothing_behind(command, write, tmp_path):
    done = run(command, write(HOPELESS), "-o", tmp_path / "r.xlsx")
    assert (done.exit_code, done.stdout) == (3, "")
    (line,) = done.stderr.splitlines()
    assert line.startswith("feederhost: case peak: no power flow solution with nothing added")
    assert not (tmp_path / "r.xlsx").exists()


@pytest.mark.parametrize("content", [None, b"no workbook"], ids=["missing", "not a workbook"])
@pytest.mark.parametrize("command", ["host", "check"])
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


def test_no_traceback_without_debug_and_one_with_it(write, tmp_path):
    write(UNSOUND)
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
    assert isinstance(run("check", feeder, "--debug").exception, RuntimeError)


def test_debug_raises_the_error_itself(write):
    assert isinstance(run("check", write(UNSOUND), "--debug").exception, InputError)


# --- json and csv --------------------------------------------------------------------------------


def test_json_is_strict_and_all_there_is_on_standard_output(feeder, tmp_path):
    done = run("host", feeder, "--json", "-o", tmp_path / "r.xlsx")
    told = strict_json(done.stdout)
    assert (done.exit_code, done.stderr, told["exit_code"]) == (0, "", 0)
    assert told["cases"] == ["peak", "light"]
    written = rows_of(tmp_path / "r.xlsx", "hosting")
    assert [list(row) for row in told["hosting"]] == [list(row) for row in written]
    for row, same in zip(told["hosting"], written, strict=True):
        # JSON keeps the empty text that a sheet shows as a blank cell.
        assert {k: v if v != "" else None for k, v in row.items()} == pytest.approx(same)
    assert any(row["element_phase"] is None for row in told["hosting"])


def test_json_of_a_check_carries_cases_conditions_and_audit(feeder):
    told = strict_json(run("check", feeder, "--json").stdout)
    assert [case["case"] for case in told["base_cases"]] == ["peak", "light"]
    assert {c["holds"] for c in told["conditions"]} <= {"yes", "no", "not needed"}
    assert {f["severity"] for f in told["audit"]} == {"note"}


def test_json_of_a_row_that_was_not_analysed_holds_null(feeder, tmp_path):
    done = run("host", feeder, "--json", "--case", "light", "-o", tmp_path / "r.xlsx")
    evs = [r for r in strict_json(done.stdout)["hosting"] if r["technology"] == "ev"]
    assert [(r["state"], r["hosting_kw"]) for r in evs] == [("not_analysed", None)] * 2


def as_number(cell: object) -> object:
    try:
        return float(cell)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        return cell


def in_common(rows: Iterable[Iterable[object]]) -> list[list[object]]:
    return [[as_number(cell) if cell is not None else "" for cell in row] for row in rows]


@pytest.mark.parametrize("command", ["host", "check"])
def test_the_csv_folder_holds_what_the_workbook_holds(command, feeder, tmp_path):
    assert run(command, feeder, "-q", "-o", tmp_path / "r.xlsx").exit_code == 0
    assert run(command, feeder, "-q", "--csv", "-o", tmp_path / "r").exit_code == 0
    book = openpyxl.load_workbook(tmp_path / "r.xlsx")
    names = set(book.sheetnames) - ONLY_WORKBOOK
    assert {f.name for f in (tmp_path / "r").iterdir()} == {f"{name}.csv" for name in names}
    for name in names - {"timing"}:
        first = 2 if name == "relaxation" else 1
        shown = in_common(book[name].iter_rows(min_row=first, values_only=True))
        with (tmp_path / "r" / f"{name}.csv").open(encoding="utf-8", newline="") as stream:
            assert in_common(csv.reader(stream)) == shown, name


# --- progress ------------------------------------------------------------------------------------


class Screen(io.StringIO):
    def isatty(self) -> bool:
        return True


def test_progress_is_silent_where_standard_error_is_no_terminal(feeder, tmp_path, monkeypatch):
    monkeypatch.setattr(terminal, "_PATIENCE", -1.0)
    done = run("host", feeder, "-o", tmp_path / "r.xlsx")
    assert (done.exit_code, done.stderr) == (0, "")


@pytest.mark.parametrize(("quiet", "shown"), [(False, True), (True, False)])
def test_progress_on_a_terminal_unless_quiet(quiet, shown, monkeypatch):
    monkeypatch.setattr(terminal, "_PATIENCE", -1.0)
    monkeypatch.setattr(sys, "stderr", screen := Screen())
    with ProgressLine(quiet) as progress:
        for stage in ("proof", "AC check"):
            for done in range(4):
                progress(stage, done, 3)
    said = screen.getvalue()
    assert ("proof" in said and "AC check" in said and "100%" in said) is shown
    assert shown or said == ""


def test_a_short_stage_shows_no_progress(monkeypatch):
    monkeypatch.setattr(terminal, "_PATIENCE", math.inf)
    monkeypatch.setattr(sys, "stderr", screen := Screen())
    with ProgressLine(False) as progress:
        progress("proof", 1, 3)
    assert screen.getvalue() == ""


# --- blank ---------------------------------------------------------------------------------------


def test_blank_writes_and_never_overwrites(tmp_path):
    path = tmp_path / "new.xlsx"
    done = run("blank", path)
    assert (done.exit_code, done.stderr) == (0, "")
    assert str(path) in done.stdout
    before = path.read_bytes()
    again = run("blank", path)
    assert (again.exit_code, again.stdout) == (1, "")
    assert "is there already" in again.stderr
    assert path.read_bytes() == before


def test_blank_says_where_it_cannot_write(tmp_path):
    done = run("blank", tmp_path / "absent" / "new.xlsx")
    assert done.exit_code == 1
    assert len(done.stderr.splitlines()) == 1


def test_a_blank_workbook_lacks_its_rows_and_nothing_else(tmp_path):
    run("blank", tmp_path / "new.xlsx")
    done = run("check", tmp_path / "new.xlsx")
    assert (done.exit_code, done.stdout) == (3, "")
    *findings, last = done.stderr.splitlines()
    assert findings
    assert all(": the sheet has no row" in line for line in findings)
    assert {line.split(":")[0] for line in findings} <= {"source", "lines"}
    assert "fatal finding" in last


def test_the_examples_of_a_blank_workbook_make_a_feeder(tmp_path):
    run("blank", tmp_path / "new.xlsx")
    book = openpyxl.load_workbook(tmp_path / "new.xlsx")
    for name, sheet in INPUT.items():
        needed = {c.key for c in sheet.columns if c.required}
        header, *rows = book[name].iter_rows()
        for row in rows:
            filled = {
                h.value for h, cell in zip(header, row, strict=True) if cell.value is not None
            }
            # A limit that has no default has no example value either.
            if needed <= filled:
                row[0].value = str(row[0].value).removeprefix("# ")
    book.save(tmp_path / "new.xlsx")
    done = run("check", tmp_path / "new.xlsx")
    assert (done.exit_code, done.stderr) == (0, "")
    assert "5 nodes, 2 cases" in done.stdout
