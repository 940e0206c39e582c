"""Raw tables in, checked tables out: every fault in one go, with where and what to do."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import pandas as pd

from feederhost.errors import Finding, Severity
from feederhost.feeder.branch_rules import (
    conductor_rules,
    line_rules,
    phase_rules,
    regulator_rules,
    transformer_rules,
)
from feederhost.feeder.case_rules import case_rules, node_rules, read_limits, source_rules
from feederhost.feeder.columns import Checked, read_sheet, records
from feederhost.feeder.names import did_you_mean, fold, near_index
from feederhost.feeder.plant_rules import iso_date, load_rules, plant_rules, technology_rules
from feederhost.schema import GUIDE, INPUT
from feederhost.settings import Settings

_IDS = {
    "nodes": "node", "lines": "line", "conductors": "conductor", "transformers": "transformer",
    "regulators": "regulator", "technologies": "technology", "cases": "case", "limits": "limit",
}  # fmt: skip
_ASSUMED = {
    "nodes": "no coordinates, and the same voltage limits at every node",
    "conductors": "every line gives its own impedance and rating",
    "transformers": "one voltage level",
    "regulators": "no regulators",
    "capacitors": "no capacitors",
    "loads": "no load anywhere",
    "generators": "no generation connected or approved",
    "requests": "an empty queue",
    "technologies": "the built-in ones: pv, ev and storage",
    "candidates": "every node but the source, for pv and ev",
    "cases": "peak (load 1, pv 0, ev 1) and light (load 0.3, pv 1, ev 0), basis assumed",
    "limits": "the defaults",
    "costs": "remedies without prices",
    "curves": "no volt-var curves",
}


@dataclass(frozen=True, eq=False)
class Tables:
    """A feeder's sheets as checked tables, and everything noticed on the way.

    Attributes
    ----------
    sheets : mapping of str to pandas.DataFrame
        Every input sheet of the schema with all its columns by key, row numbers as index
        ``row``: float (NaN: blank; inf: unlimited) or str (``""``: blank).  ``scale`` of
        `technologies`, ``class`` of `loads` and the pattern columns of `cases` are folded like
        headers, so that they meet.
    findings : tuple of Finding
        In sheet and row order.
    settings : Settings
        The defaults with the rows of `limits` applied.
    faulty_requests : frozenset of int
        Rows of `requests` with a finding that would be fatal anywhere else.
    checked : mapping of str to Checked
        The same tables with headers and cells as written, for findings made later on.
    """

    sheets: Mapping[str, pd.DataFrame]
    findings: tuple[Finding, ...]
    settings: Settings
    faulty_requests: frozenset[int] = frozenset()
    checked: Mapping[str, Checked] = field(default_factory=dict)

    def rows(self, sheet: str) -> Iterator[tuple[int, dict[str, Any]]]:
        """Yield row number and cells by key of one sheet."""
        return records(self.sheets[sheet])

    def finding(
        self, severity: Severity, sheet: str, row: int, key: str, problem: str, suggestion: str = ""
    ) -> Finding:
        """Return a finding about one cell, headed and quoted as written where that is known.

        About a request nothing is fatal: it stops that row, not the feeder.
        """
        if sheet in self.checked:
            made = self.checked[sheet].finding(severity, row, key, problem, suggestion)
        else:
            made = Finding(severity, sheet, row, key, "", problem, suggestion)
        return never_fatal_in_requests(made)


def check_tables(raw: Mapping[str, pd.DataFrame]) -> Tables:
    """Check raw tables.

    Parameters
    ----------
    raw : mapping of str to pandas.DataFrame
        Sheets by lower-case name: columns headed as written, index = spreadsheet row numbers,
        cells as read (str, float, int, bool, date or None).

    Returns
    -------
    Tables
        Never raises on bad data: unusable cells are blank there, and are findings.
    """
    found = _sheet_findings(raw)
    reads: dict[str, Checked] = {}
    for name, sheet in INPUT.items():
        reads[name], findings = read_sheet(sheet, raw.get(name, pd.DataFrame()))
        # What is asked of a sheet that is not there is said once, for the sheet.
        found.extend(findings if name in raw and raw[name].shape[1] else ())
    _respell(reads["technologies"], "scale", fold)
    _respell(reads["loads"], "class", fold)
    settings, findings_of_limits = read_limits(reads)
    found.extend(findings_of_limits)
    rules: tuple[Callable[[Mapping[str, Checked]], list[Finding]], ...] = (
        source_rules, node_rules, line_rules, conductor_rules, transformer_rules,
        regulator_rules, phase_rules, plant_rules, technology_rules, case_rules, _duplicates,
    )  # fmt: skip
    for rule in rules:
        found.extend(rule(reads))
    found.extend(load_rules(reads, settings))
    _respell(reads["regulators"], "mode", lambda mode: mode and "hold")
    _respell(reads["requests"], "received", iso_date)
    faulty = _faulty_requests(found, reads["requests"])
    return Tables(
        {name: checked.table for name, checked in reads.items()},
        in_order(map(never_fatal_in_requests, found)),
        settings,
        faulty,
        reads,
    )


def never_fatal_in_requests(finding: Finding) -> Finding:
    """Return a finding as it is, a fatal one about a request as a warning: it stops that row."""
    if finding.sheet == "requests" and finding.severity is Severity.FATAL:
        return replace(finding, severity=Severity.WARNING)
    return finding


def _sheet_findings(raw: Mapping[str, pd.DataFrame]) -> list[Finding]:
    """Return what there is to say about sheets that are missing, empty or unknown."""
    found: list[Finding] = []
    unknown = [name for name in raw if name not in INPUT and name != GUIDE]
    index = near_index(INPUT)
    for name in unknown:
        hint = did_you_mean(fold(name), index)
        severity = Severity.WARNING if hint else Severity.NOTE
        problem = "this sheet is not known and is not read"
        found.append(Finding(severity, name, 0, "", "", problem, hint))
    index = near_index(unknown)
    for name, sheet in INPUT.items():
        there = name in raw and raw[name].shape[1] > 0
        if sheet.required and not there:
            columns = ", ".join(c.key for c in sheet.columns if c.required)
            hint = did_you_mean(name, index, f"add it, with at least {columns}")
            problem = "this sheet is needed and is not there"
            found.append(Finding(Severity.FATAL, name, 0, "", "", problem, hint))
        elif not sheet.required and not (there and len(raw[name])):
            state = "no rows" if there else "no such sheet"
            problem = f"{state}: {_ASSUMED[name]}"
            found.append(Finding(Severity.NOTE, name, 0, "", "", problem))
    return found


def _duplicates(reads: Mapping[str, Checked]) -> list[Finding]:
    """Return a fatal finding for every id that stands in an earlier row already."""
    found: list[Finding] = []
    for name, key in _IDS.items():
        first: dict[str, int] = {}
        for row, cells in reads[name].rows():
            word = fold(cells[key]) if name == "limits" else cells[key]
            if not word:
                continue
            if word in first:
                problem = f"row {first[word]} has this {key} already"
                hint = "keep one of the rows, or give it another name"
                found.append(reads[name].finding(Severity.FATAL, row, key, problem, hint))
            first.setdefault(word, row)
    return found


def _respell(checked: Checked, key: str, spell: Callable[[str], str]) -> None:
    """Bring the cells of a text column into the spelling the rest of the package knows."""
    checked.table[key] = pd.Series(
        [spell(text) for text in checked.table[key].tolist()], checked.table.index, dtype=object
    )


def _faulty_requests(found: list[Finding], requests: Checked) -> frozenset[int]:
    faults = [f for f in found if f.sheet == "requests" and f.severity is Severity.FATAL]
    every_row = frozenset(requests.table.index.tolist())
    rows = frozenset(f.row for f in faults)
    # A fault of the header or the whole sheet is a fault of every request.
    return every_row if rows - every_row else rows


def in_order(findings: Iterable[Finding]) -> tuple[Finding, ...]:
    """Return findings in the order of the sheets and their rows."""
    place = {name: number for number, name in enumerate(INPUT)}
    return tuple(sorted(findings, key=lambda f: (place.get(f.sheet, len(place)), f.row)))
