"""Feeders for the tests of the command line, and ways to run it and to read what it writes."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import openpyxl
import pytest
from click.testing import CliRunner, Result
from feederhost.cli import main
from feederhost.feeder import case_rules
from feederhost.settings import Settings
from feederhost.sheets.template import write_input

Tables = dict[str, list[dict[str, Any]]]


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
        "requests": [
            {"request": "Q1", "node": "B", "technology": "pv", "kw": 900, "received": "2026-01-02"},
            {"request": "Q2", "node": "A", "technology": "pv", "kw": 900, "received": "2026-01-03"},
        ],
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


def write(folder: Path, content: Tables | None = None) -> Path:
    """Write tables, those of the sound feeder by default, as `feeder.xlsx`."""
    path = folder / "feeder.xlsx"
    write_input(tables() if content is None else content, path)
    return path


def default_to(monkeypatch: pytest.MonkeyPatch, **fields: float) -> None:
    """Put other defaults in the place of some settings."""
    monkeypatch.setattr(case_rules, "Settings", lambda: Settings(**fields))


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


# Below the value nothing is violated yet: a check that looks for the violation there must fail.
NO_VIOLATION = {"above_share": -0.5}
IN_KW = ("hosting_kw", "hosting_kva", "hosting_unrounded_kw", "upper_bound_kw", "next_kw",
         "existing_kw", "reverse_at_head_kw", "fictitious_loss_kw")  # fmt: skip
