"""Rules across the cells of one row: loads, generation, requests, technologies, candidates."""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping
from typing import Any

from feederhost.errors import Finding, Severity
from feederhost.feeder.cells import written
from feederhost.feeder.columns import Checked, given
from feederhost.feeder.names import did_you_mean, near_index
from feederhost.schema import BUILT_IN_TECHNOLOGIES
from feederhost.settings import Settings

_BUILT_IN = {str(t["technology"]): t for t in BUILT_IN_TECHNOLOGIES}
_PLANTS = ("generators", "requests", "candidates")


def directions(reads: Mapping[str, Checked]) -> dict[str, str]:
    """Return the direction of every technology: built in, then as the workbook says.

    A direction that cannot be read is ``""``.
    """
    known = {name: str(technology["direction"]) for name, technology in _BUILT_IN.items()}
    rows = (cells for _, cells in reads["technologies"].rows())
    known.update((cells["technology"], cells["direction"]) for cells in rows)
    return known


def load_rules(reads: Mapping[str, Checked], settings: Settings) -> list[Finding]:
    """Return the findings of `loads`: one way of giving vars, shares that sum to one."""
    loads = reads["loads"]
    findings: list[Finding] = []
    shares = ("zip_z", "zip_i", "zip_p")
    silent = 0
    for row, cells in loads.rows():
        reactive = given(cells, "kvar", "power_factor")
        if len(reactive) == 2:
            problem = f"both {loads.headers['kvar']} and {loads.headers['power_factor']} are given"
            findings.append(
                loads.finding(Severity.FATAL, row, "power_factor", problem, "keep one of the two")
            )
        if reactive == ["kvar"] and cells["vars"]:
            problem = "the kvar carry their own sign: this cell is not used"
            findings.append(loads.finding(Severity.WARNING, row, "vars", problem, "empty it"))
        silent += not reactive and not _faulty(loads, row, "kvar", "power_factor")
        total = sum(cells[key] for key in shares)
        if abs(total - 1) > settings.zip_tolerance:
            problem = f"zip_z, zip_i and zip_p sum to {total:g}, not to 1"
            hint = "a blank zip_p counts as 1: give all three shares"
            findings.append(loads.finding(Severity.FATAL, row, "zip_p", problem, hint))
    if silent:
        problem = f"neither kvar nor power factor in {silent} of {len(loads.table)} rows: unity"
        findings.append(loads.finding(Severity.NOTE, 0, "power_factor", problem))
    return findings


def plant_rules(reads: Mapping[str, Checked]) -> list[Finding]:
    """Return the findings of `generators`, `requests`, `candidates`: technology and vars."""
    known = directions(reads)
    index = near_index(known)
    findings: list[Finding] = []
    for name in _PLANTS:
        checked = reads[name]
        silent = 0
        for row, cells in checked.rows():
            technology = cells["technology"]
            # A candidate without technology stands for pv and ev, and pv exports.
            direction = known.get(technology or "pv", "")
            if technology and technology not in known:
                hint = did_you_mean(technology, index, "add it to `technologies`")
                problem = "no such technology"
                findings.append(checked.finding(Severity.FATAL, row, "technology", problem, hint))
            if not _faulty(checked, row, "technology"):
                findings += _vars_missing(checked, row, cells, direction)
            silent += not given(cells, "power_factor") and not _faulty(checked, row, "power_factor")
        if silent:
            problem = (
                f"no power factor in {silent} of {len(checked.table)} rows: that of the "
                "technology, else unity"
            )
            findings.append(checked.finding(Severity.NOTE, 0, "power_factor", problem))
    findings += _received_rules(reads["requests"])
    return findings


def technology_rules(reads: Mapping[str, Checked]) -> list[Finding]:
    """Return the findings of `technologies`: vars, the column they follow, replaced ones."""
    checked = reads["technologies"]
    scales = {key for key in reads["cases"].table.columns if "_scale" in key}
    index = near_index(scales)
    built_in = near_index(_BUILT_IN)
    findings: list[Finding] = []
    for row, cells in checked.rows():
        findings += _vars_missing(checked, row, cells, cells["direction"])
        name, scale = cells["technology"], cells["scale"]
        if scale and scale not in scales:
            problem = "`cases` has no such column: this technology never runs"
            hint = did_you_mean(scale, index, f"add a column headed {scale} to `cases`")
            findings.append(checked.finding(Severity.WARNING, row, "scale", problem, hint))
        usual = _BUILT_IN.get(name, {}).get("scale")
        if usual and not scale and not _faulty(checked, row, "scale"):
            problem = f"blank: this {name} runs at its full rating in every case"
            findings.append(
                checked.finding(
                    Severity.WARNING, row, "scale", problem, f"write {usual} unless that is meant"
                )
            )
        namesake = [n for n in _BUILT_IN if n != name and n.casefold() == name.casefold()]
        if namesake:
            problem = f"differs from the built-in {namesake[0]} only by case: two technologies"
            hint = did_you_mean(name, built_in)
            findings.append(checked.finding(Severity.WARNING, row, "technology", problem, hint))
    return findings


def _vars_missing(
    checked: Checked, row: int, cells: Mapping[str, Any], direction: str
) -> list[Finding]:
    """Return a fatal finding where an export below unity does not say which way its vars go."""
    if direction not in ("export", "both") or not cells["power_factor"] < 1:
        return []
    if cells["vars"] or _faulty(checked, row, "vars"):
        return []
    problem = "an export with a power factor below 1 that does not say which way its vars go"
    return [checked.finding(Severity.FATAL, row, "vars", problem, "write absorb or inject")]


def _received_rules(requests: Checked) -> list[Finding]:
    """Return a warning per date that cannot be put in order."""
    findings = []
    for row, cells in requests.rows():
        if cells["received"] and not iso_date(cells["received"]):
            problem = "not a date as year-month-day: taken as blank, last in the queue"
            hint = "write it as 2026-10-15"
            findings.append(requests.finding(Severity.WARNING, row, "received", problem, hint))
    return findings


def iso_date(text: str) -> str:
    """Return an ISO date, with or without a time of day, in one spelling; ``""`` if it is none."""
    try:
        return written(dt.datetime.fromisoformat(text))
    except ValueError:
        return ""


def _faulty(checked: Checked, row: int, *keys: str) -> bool:
    return any((row, key) in checked.faulty for key in keys)
