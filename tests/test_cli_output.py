"""The command line: help, json, csv, progress and the blank workbook."""

from __future__ import annotations

import csv
import io
import math
import subprocess
import sys
from collections.abc import Iterable
from pathlib import Path

import click
import openpyxl
import pytest
from feederhost import __version__, terminal
from feederhost.cli import main
from feederhost.schema import INPUT
from feederhost.terminal import ProgressLine

from command_line import (
    IN_KW,
    NO_VIOLATION,
    default_to,
    in_process,
    rows_of,
    run,
    strict_json,
    write,
)

HEAVY = ("numpy", "pandas", "cvxpy", "openpyxl", "networkx", "scipy", "ecos")
ONLY_WORKBOOK = {"charts", "chart_data"}


@pytest.fixture
def feeder(tmp_path: Path) -> Path:
    return write(tmp_path)


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


@pytest.mark.parametrize("command", ["host", "check", "screen"])
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


def test_json_of_failed_rows_holds_null(feeder, tmp_path, monkeypatch):
    default_to(monkeypatch, **NO_VIOLATION)
    done = run("host", feeder, "--json", "-o", tmp_path / "r.xlsx")
    told = strict_json(done.stdout)
    assert done.exit_code == told["exit_code"] == 4
    assert told["proof"] == {"failed": 4}
    assert {row[name] for row in told["hosting"] for name in IN_KW} == {None}
    assert all("smallest_kw" not in line for line in told["technologies"])


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
