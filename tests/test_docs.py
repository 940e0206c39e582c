"""The documents are run: commands, pasted output, figures, options, columns, layout."""

from __future__ import annotations

import fnmatch
import importlib
import os
import re
import shlex
import shutil
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any, NamedTuple

import click
import numpy as np
import openpyxl
import pytest
from feederhost import __version__
from feederhost.cli import main
from feederhost.flow.search import solve_with
from feederhost.schema import INPUT, RESULT, Answer, Criterion, Proof, State
from feederhost.settings import sheet_settings
from feederhost.study.load import load_feeder
from feederhost.study.nodal import host, plants_in
from feederhost.study.options import Options

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
DOCUMENTS = {"README.md": README, "DEVELOPERS.md": DEVELOPERS}
SET_UP = ("scripts/demo", "scripts/test", "scripts/check")
PROGRAM = ".venv/bin/feederhost"


class Shown(NamedTuple):
    """A command of a document, the exit code it promises, and the output shown below it."""

    command: str
    code: int
    output: str


def shown(text: str) -> Iterator[Shown]:
    """Yield the commands of the bash blocks; the output below belongs to the first of a block."""
    for block, output in re.findall(r"```bash\n(.*?)```\n(?:\n```text\n(.*?)```)?", text, re.S):
        lines = [line for line in block.splitlines() if line]
        for line in lines:
            command, _, comment = line.partition("  # ")
            code = re.fullmatch(r"exit code (\d)", comment)
            assert code or not comment
            yield Shown(command, int(code[1]) if code else 0, output if line == lines[0] else "")


def demo_constants() -> dict[str, str]:
    text = (ROOT / "scripts" / "demo").read_text(encoding="utf-8")
    return dict(re.findall(r'^(FEEDER|RESULT) = "(.+)"$', text, re.M))


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a copy of what the commands of the README need."""
    folder = tmp_path_factory.mktemp("readme")
    shutil.copytree(ROOT / "feeders", folder / "feeders")
    (folder / "results").mkdir()
    return folder


def run(words: list[str], place: Path) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "feederhost", *words]
    return subprocess.run(command, cwd=place, capture_output=True, text=True, check=False)


def tidy(text: str) -> list[str]:
    return [line.rstrip() for line in text.strip().splitlines()]


@pytest.fixture(scope="module")
def demo(place: Path) -> list[str]:
    """Return what the demo prints."""
    own = demo_constants()
    words = ["host", own["FEEDER"], "-o", own["RESULT"]]
    done = run(words, place)
    assert (done.returncode, done.stderr) == (0, "")
    return [f"feederhost {' '.join(words)}", "", *tidy(done.stdout)]


@pytest.fixture(scope="module")
def hosting(demo: list[str], place: Path) -> list[dict[str, Any]]:
    """Return the rows of the demo's `hosting` sheet."""
    header, *rows = openpyxl.load_workbook(place / demo_constants()["RESULT"])["hosting"].values
    return [dict(zip(header, row, strict=True)) for row in rows]


# --- commands and their output ---------------------------------------------------------------


def test_the_readme_starts_with_its_two_commands():
    commands = [s.command for s in shown(README)]
    assert commands[:2] == ["scripts/demo", "scripts/test"]
    # What continuous integration runs is the second of them.
    assert re.search(r"^scripts/test\b", (ROOT / ".ci" / "run").read_text(), re.M)


@pytest.mark.parametrize("script", SET_UP)
def test_set_up_scripts_can_be_run_and_explain_themselves(script, tmp_path):
    assert os.access(ROOT / script, os.X_OK)
    command = [sys.executable, str(ROOT / script), "--help"]
    done = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, check=True)
    assert done.stdout.startswith(f"usage: {Path(script).name}")


def test_the_readme_shows_what_the_demo_prints(demo):
    (printed,) = re.findall(r"What the demo prints:\n\n```text\n(.*?)```", README, re.S)
    assert tidy(printed) == demo


@pytest.mark.parametrize(
    "line", [s for s in shown(README) if s.command not in SET_UP], ids=lambda s: s.command
)
def test_every_command_of_the_readme_runs_and_prints_what_is_shown(line, place):
    program, *words = shlex.split(line.command)
    assert program == PROGRAM
    done = run(words, place)
    assert done.returncode == line.code, done.stderr
    if line.output:
        printed = tidy(done.stdout + done.stderr)
        at, skips = 0, False
        for part in "\n".join(tidy(line.output)).split("\n...\n"):
            lines = part.splitlines()
            # Only a line of three dots may stand for lines that are left out.
            places = range(at, len(printed)) if skips else [at]
            found = [i for i in places if printed[i : i + len(lines)] == lines]
            assert found, part
            at, skips = found[0] + len(lines), True
        assert at == len(printed)


def test_the_developers_commands_name_what_is_there():
    commands = [s.command for s in shown(DEVELOPERS)]
    assert commands[:3] == [
        "python3 -m venv .venv",
        '.venv/bin/pip install -e ".[dev]"',
        ".venv/bin/python scripts/check",
    ]
    text = DEVELOPERS + README
    for word in re.findall(r"(?:scripts|tests|feederhost|feeders)/[\w./]*\w", text):
        assert (ROOT / word).exists(), word
    for name in re.findall(r"`([\w/]+\.py)`", text):
        assert list(ROOT.glob(name)) + list((ROOT / "feederhost").rglob(name)), name


def test_the_house_lists_every_room():
    floors = DEVELOPERS.partition("| floor |")[2].partition("Rules with a reason")[0]
    for folder in ("flow", "proof", "feeder", "sheets", "study", "study/queue"):
        (cell,) = re.findall(rf"\| `{folder}/`: (.+?) \|", floors)
        rooms = {f.stem for f in (ROOT / "feederhost" / folder).glob("*.py")} - {"__init__"}
        assert set(re.findall(r"`(\w+)`", cell)) == rooms


def test_what_contributors_are_told_to_change_is_there():
    text = DEVELOPERS.partition("## How to add")[2].partition("\n## ")[0]
    sources = "\n".join(f.read_text(encoding="utf-8") for f in (ROOT / "feederhost").rglob("*.py"))
    names = set(re.findall(r"`(\w+)`", text))
    assert {"limit_gradient", "steady_limits", "Quantity"} <= names
    assert {name for name in names if not re.search(rf"\b{name}\b", sources)} == set()


# --- figures ---------------------------------------------------------------------------------


def test_the_example_rows_are_the_demos(hosting):
    table = README.partition("Four rows of the demo:\n\n")[2].partition("\n\n")[0]
    header, _, *rows = ([c.strip() for c in line.split("|")[1:-1]] for line in table.splitlines())
    assert len(rows) == 4
    for row in rows:
        cells = dict(zip(header, row, strict=True))
        (same,) = (
            h for h in hosting
            if (h["node"], h["technology"]) == (cells["node"], cells["technology"])
        )  # fmt: skip
        told = {k: f"{int(same[k]):,}" if k.endswith("_kw") else str(same[k]) for k in header}
        assert told == cells


def test_what_is_told_of_the_second_row(hosting):
    (row,) = (h for h in hosting if (h["node"], h["technology"]) == ("P16", "pv"))
    (told,) = re.findall(r"Read the second as: (.+?)\. kW are", README, re.S)
    figures = re.findall(r"[\d,]+ kW", told)
    assert figures == [f"{row['hosting_kw']:,.0f} kW", f"{int(row['next_kw']):,} kW"]
    assert row["element"] in told
    assert f"{row['limit_value']:g} {row['unit']}" in told
    assert (row["criterion"], row["next_criterion"], row["case"]) == (
        "voltage_high", "voltage_change", "july_noon",
    )  # fmt: skip


def test_what_the_plain_programme_is_told_to_answer():
    text = README.partition("## Why the plain")[2].partition("\n## ")[0]
    (node,) = re.findall(r"At node (\w+) of", text)
    plain_kw, proven_kw = (float(n.replace(",", "")) for n in re.findall(r"([\d,]+) kW", text)[:2])
    (pu,) = re.findall(r"([\d.]+) pu", text)
    options = Options(nodes=(node,), technologies=("pv",), plain=True)
    answered = host(load_feeder(ROOT / "feeders" / "sedge_hollow.xlsx").feeder, options)
    (row,), feeder = answered.rows, answered.feeder
    assert row.proof is Proof.PROVEN
    assert feeder.kw(row.hosting) == proven_kw
    assert row.evidence.plain.answer.status == "optimal"
    # The plain optimum is flat: solvers agree on four digits of it.
    assert feeder.kw(row.evidence.plain.g) == pytest.approx(plain_kw, rel=1e-3)
    system = row.study.posed[0].system
    plant = plants_in([row.candidate], row.direction, 1.0, 0, 1)
    rating = np.array([plain_kw / feeder.kw(1.0)])
    point = solve_with(system, plant, rating, feeder.settings)
    V = np.abs(point.V[:, 0, 0]) * system.network.gain[:, 0]
    assert f"{V.max():.3f}" == pu


@pytest.mark.parametrize(
    ("told", "technology", "criteria"),
    [
        (r"high voltage at (\d+) of (\d+) nodes", "pv", ["voltage_high"]),
        (r"low voltage at\s+the far end in winter \((\d+)\)", "ev", ["voltage_low"]),
        (r"change of voltage at night \((\d+)\)", "ev", ["voltage_change"]),
    ],
)
def test_what_is_told_of_sedge_hollow(told, technology, criteria, hosting):
    rows = [h for h in hosting if h["technology"] == technology]
    met = sum(h["criterion"] in criteria for h in rows)
    (figures,) = re.findall(told, README)
    expected = (str(met), str(len(rows))) if isinstance(figures, tuple) else str(met)
    assert figures == expected


def test_where_limits_are_met_in_sedge_hollow(hosting):
    met: dict[tuple[str, str], set[str]] = {}
    for h in hosting:
        met.setdefault((h["technology"], h["criterion"]), set()).add(h["case"])
    assert met["ev", "voltage_low"] == {"winter_evening"}
    assert met["ev", "voltage_change"] == {"night_charging"}
    behind = {h["node"] for h in hosting if h["criterion"] == "transformer_rating"}
    assert behind == {"P12S", "F2S", "P21S"}
    at_bank = {h["node"] for h in hosting if h["criterion"] == "bank_rating"}
    assert at_bank == {"P10", "P11", "P12"}


def test_what_is_told_of_cooper_quay():
    feeder = load_feeder(ROOT / "feeders" / "cooper_quay.xlsx").feeder
    met: dict[tuple[str, str], set[str]] = {}
    for row in host(feeder, Options()).rows:
        key = row.candidate.technology, str(row.criterion)
        met.setdefault(key, set()).add(feeder.nodes[row.candidate.node])
    services = {f"K{i}L" for i in range(1, 11)}
    trunk = {"K0", "K1", "K2", "K3", "K4"}
    assert met == {
        ("pv", "transformer_rating"): services,
        ("pv", "head_export"): trunk | {"K5", "K6", "K7", "K8"},
        ("pv", "line_rating"): {"K9", "K10", "K7P"},
        ("ev", "transformer_rating"): services,
        ("ev", "bank_rating"): trunk,
        ("ev", "line_rating"): {"K5", "K6", "K7", "K8", "K9", "K10", "K7P"},
    }


# --- completeness ----------------------------------------------------------------------------


def options() -> list[str]:
    commands = [main, *main.commands.values()]
    own = [p for c in commands for p in c.params if isinstance(p, click.Option)]
    return sorted({*(o for p in own for o in (*p.opts, *p.secondary_opts)), "-h", "--help"})


@pytest.mark.parametrize("option", options())
def test_every_option_is_in_the_readme(option):
    assert f"`{option}`" in README


@pytest.mark.parametrize("name", main.commands)
def test_every_command_is_shown_in_the_readme(name):
    assert any(s.command.startswith(f"{PROGRAM} {name} ") for s in shown(README))


def section(title: str) -> str:
    _, found, text = README.partition(title)
    assert found, title
    return text


@pytest.mark.parametrize("sheet", INPUT)
def test_every_input_column_is_in_the_readme(sheet):
    text = section(f"<details><summary>{sheet}: ").partition("</details>")[0]
    for column in INPUT[sheet].columns:
        assert f"`{column.key}`" in text, column.key
        assert column.meaning.rsplit(" ", 1)[0] in text
        # Phase matrices stand in one row per family, their other units named beside it.
        if not re.fullmatch("[rxb]_[abc]{2}", column.name):
            assert all(f"`{header}`" in text for header in column.headers)
        assert all(f"`{choice}`" in text for choice in column.choices)


@pytest.mark.parametrize("sheet", RESULT)
def test_every_result_column_is_in_the_readme(sheet):
    text = section("### Result").partition(f"<details><summary>{sheet}: ")[2]
    text = text.partition("</details>")[0]
    for name, meaning in RESULT[sheet].columns:
        assert f"| `{name}` | {meaning} |" in text


def test_every_sheet_limit_state_proof_and_exit_code_is_explained():
    reading = section("## Reading the result").partition("\n## What")[0]
    for name in (*RESULT, *State, *(p for p in Proof if p), *Answer):
        assert f"`{name}`" in reading, name
    filling = section("## Filling in the workbook").partition("\n## ")[0]
    for setting in sheet_settings():
        assert f"| `{setting.name}` |" in filling
    exits = section("| exit code | meaning |").partition("\n\n")[0]
    assert re.findall(r"^\| (\d) \|", exits, re.M) == ["0", "1", "2", "3", "4"]


def test_every_criterion_that_can_stop_a_row_is_told():
    assert {str(c) for c in Criterion if f"{c}" not in README} == set()


def test_the_generated_tables_are_the_present_ones(monkeypatch):
    monkeypatch.syspath_prepend(str(ROOT / "scripts"))
    script = importlib.import_module("column_reference")
    assert script.renewed(README) == README
    assert all(table in README for table in script.generated().values())


def test_the_version_has_its_changes():
    assert f"### {__version__}" in section("## Changes")
    assert f'version = "{__version__}"' in (ROOT / "pyproject.toml").read_text(encoding="utf-8")


# --- layout and words ------------------------------------------------------------------------

TOP_LEVEL = {"README.md", "DEVELOPERS.md", "pyproject.toml", "feederhost", "feeders", "tests",
             "scripts"}  # fmt: skip


def ignored() -> list[str]:
    lines = (ROOT / ".gitignore").read_text(encoding="utf-8").split()
    return [line.rstrip("/") for line in lines]


def test_the_top_level_is_fixed():
    entries = {
        f.name for f in ROOT.iterdir() if not any(fnmatch.fnmatch(f.name, p) for p in ignored())
    }
    assert {e for e in entries if not e.startswith(".")} == TOP_LEVEL


def stored_texts() -> list[Path]:
    folders = ("feederhost", "scripts", "tests", ".ci")
    files = [f for folder in folders for f in (ROOT / folder).rglob("*") if f.is_file()]
    files += [ROOT / name for name in ("README.md", "DEVELOPERS.md", "pyproject.toml")]
    hidden = {"__pycache__", ".mypy_cache", ".ruff_cache", ".pytest_cache", ".hypothesis"}
    return sorted(f for f in files if not hidden & set(f.relative_to(ROOT).parts))


# In pieces, so that this file does not carry the words it looks for.
PATHS = r"(?<![\w.])/(?:" + "|".join(("root", "work", "home", "Users", "tmp", "mnt")) + r")/"
HOSTS = "|".join(("py" + r"pi\.", "files.python" + "hosted", "index" + "-url"))


@pytest.mark.parametrize("words", [PATHS, HOSTS], ids=["machine", "registry"])
def test_no_file_names_a_machine_or_a_registry(words):
    texts = {f: f.read_bytes().decode("utf-8", errors="replace") for f in stored_texts()}
    assert len(texts) > 50
    assert [f for f, text in texts.items() if re.search(words, text)] == []


@pytest.mark.parametrize("document", DOCUMENTS)
def test_documents_speak_of_the_feeder_and_not_of_their_making(document):
    words = set(re.findall(r"[a-z]+", DOCUMENTS[document].lower()))
    assert not words & {"session", "sessions", "agent", "agents", "helper", "helpers", "prompt"}
    assert not re.search(r"\bissue \d", DOCUMENTS[document])


@pytest.mark.parametrize("document", DOCUMENTS)
def test_lines_fit_a_page_but_for_tables_and_code(document):
    outside = re.sub(r"```.*?```", "", DOCUMENTS[document], flags=re.S)
    long = [
        line for line in outside.splitlines()
        if len(line) > 100 and not line.startswith(("|", "<details>"))
    ]  # fmt: skip
    assert long == []
