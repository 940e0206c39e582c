"""Whole answers to the commands `check` and `host`: result sheets, summary, exit code."""

from __future__ import annotations

import datetime as dt
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

import pandas as pd

from feederhost.errors import Severity
from feederhost.study.base import base_cases_table, base_table
from feederhost.study.exactness import conditions_table
from feederhost.study.load import Loaded, load_feeder
from feederhost.study.nodal import base_solutions, host
from feederhost.study.options import Options
from feederhost.study.results import (
    audit_table,
    counts,
    criteria_table,
    hosting_table,
    profile_table,
    relaxation_table,
    trusted,
)
from feederhost.study.rows import Hosting
from feederhost.study.summary import (
    cautions,
    flags_for_all,
    run_table,
    summary_table,
    technology_lines,
    timing_table,
)

ALL_PROVEN, NOT_ALL_PROVEN = 0, 4


@dataclass(frozen=True, eq=False)
class Report:
    """Result sheets by name, what terminal and machine are told, exit code, letters by name."""

    tables: dict[str, pd.DataFrame]
    overview: dict[str, object]
    exit_code: int
    letters: dict[str, str] = field(default_factory=dict)


class Clock:
    """Wall time per stage, for the `timing` sheet."""

    def __init__(self) -> None:
        self.rows: list[tuple[str, object]] = [
            ("started", dt.datetime.now(dt.UTC).isoformat(timespec="seconds"))
        ]
        self.last = time.perf_counter()

    def lap(self, stage: str) -> None:
        """Note the wall time since the last lap."""
        now = time.perf_counter()
        self.rows.append((f"{stage} s", round(now - self.last, 3)))
        self.last = now


def check_report(path: Path, options: Options) -> Report:
    """Audit a feeder and solve its base cases.

    Raises
    ------
    InputError
        If the input cannot be read or holds fatal findings.
    NoSolutionError
        If a base case has no power flow solution.
    """
    loaded = load_feeder(path)
    feeder = loaded.feeder
    base = base_solutions(feeder, options)
    voltages, _ = base_table(feeder, base)
    tables = {
        "conditions": conditions_table(feeder, base),
        "audit": audit_table(loaded.findings),
        "base": voltages,
        "base_cases": base_cases_table(feeder, base),
        "run": run_table(loaded, None, options),
    }
    overview = feeder_heading(loaded) | {
        "base_cases": tables["base_cases"].to_dict("records"),
        "conditions": tables["conditions"].to_dict("records"),
        "audit": tables["audit"].to_dict("records"),
    }
    return Report(tables, overview, ALL_PROVEN)


def host_report(path: Path, options: Options) -> Report:
    """Find and prove the hosting of every node, and lay out the result sheets.

    Raises
    ------
    InputError, NoSolutionError, UsageError
        As :func:`check_report`, and for options that name something unknown.
    """
    clock = Clock()
    loaded = load_feeder(path)
    clock.lap("read and check")
    hosting = host(loaded.feeder, options)
    clock.lap("search, proof and AC check")
    feeder = hosting.feeder
    binding = {r.study.case.name for r in hosting.rows if r.study is not None}
    voltages, complete = base_table(feeder, hosting.base, binding)
    flags = flags_for_all(loaded, options)
    tables = {
        "summary": summary_table(loaded, hosting, options, complete),
        "hosting": hosting_table(hosting, flags),
        "criteria": criteria_table(hosting),
        "relaxation": relaxation_table(hosting),
        "conditions": conditions_table(feeder, hosting.base, hosting),
        "audit": audit_table(loaded.findings),
        "base": voltages,
        "base_cases": base_cases_table(feeder, hosting.base),
        "profile": profile_table(hosting),
        "run": run_table(loaded, hosting, options),
    }
    clock.lap("tables")
    tables["timing"] = timing_table(clock.rows)
    return Report(tables, _overview(loaded, hosting, tables), _exit_code(hosting))


def _exit_code(hosting: Hosting) -> int:
    return ALL_PROVEN if trusted(hosting) else NOT_ALL_PROVEN


def feeder_heading(loaded: Loaded) -> dict[str, object]:
    """Return what every answer starts with: the feeder, its date, cases, audit, cautions."""
    feeder = loaded.feeder
    number: Callable[[Severity], int] = lambda s: sum(f.severity is s for f in loaded.findings)  # noqa: E731
    return {
        "feeder": feeder.name,
        "data_date": feeder.notes.get("data_date", ""),
        "nodes": len(feeder.nodes),
        "cases": [c.name for c in feeder.cases],
        "warnings": number(Severity.WARNING),
        "notes": number(Severity.NOTE),
        "cautions": cautions(loaded, feeder),
    }


def _overview(
    loaded: Loaded, hosting: Hosting, tables: dict[str, pd.DataFrame]
) -> dict[str, object]:
    return (
        feeder_heading(loaded)
        | {"cases": [c.name for c in hosting.feeder.cases], "solver": hosting.solver}
        | counts(hosting)
        | {
            "technologies": technology_lines(hosting),
            "hosting": tables["hosting"].to_dict("records"),
        }
    )
