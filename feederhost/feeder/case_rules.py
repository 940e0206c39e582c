"""Rules of the sheets that say how the feeder is judged: source, nodes, cases, limits."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

from feederhost.errors import Finding, Severity
from feederhost.feeder.columns import Checked, given, said_twice
from feederhost.feeder.headers import HEADER_ROW
from feederhost.feeder.names import did_you_mean, fold, near_index
from feederhost.schema import INPUT, MOST_CASES
from feederhost.settings import Settings, sheet_settings

# Limits that may be zero (off, or none at all); all others must be above it.
_MAY_BE_ZERO = (
    "voltage_change_mv_pct", "voltage_change_lv_pct", "export_limit_kw", "import_limit_kw",
    "worsen_voltage_pu", "worsen_loading_pct", "regulator_edge",
)  # fmt: skip
_CLASS_PREFIX = "load_scale."


def source_rules(reads: Mapping[str, Checked]) -> list[Finding]:
    """Return the findings of `source`: exactly one row."""
    source = reads["source"]
    findings: list[Finding] = []
    rows = list(source.rows())
    if not rows and source.headers:
        problem, hint = "the sheet has no row", "fill in one row: the head of the feeder"
        findings.append(source.finding(Severity.FATAL, 0, "", problem, hint))
    for row, cells in rows:
        findings += said_twice(source, row, cells, "voltage_pu", "voltage_kv")
    for row, _ in rows[1:]:
        problem, hint = "a second head: a feeder has one", "keep one row, one workbook per feeder"
        findings.append(source.finding(Severity.FATAL, row, "node", problem, hint))
    return findings


def node_rules(reads: Mapping[str, Checked]) -> list[Finding]:
    """Return the findings of `nodes`: limits of single nodes, given once and in order."""
    nodes = reads["nodes"]
    findings: list[Finding] = []
    for row, cells in nodes.rows():
        for limit in ("v_min", "v_max"):
            findings += said_twice(nodes, row, cells, f"{limit}_pu", f"{limit}_kv")
        for unit in ("pu", "kv"):
            lower, upper = f"v_min_{unit}", f"v_max_{unit}"
            if cells[lower] >= cells[upper]:
                problem = f"not below {nodes.headers[upper]}"
                hint = "the lower limit must be below the upper"
                findings.append(nodes.finding(Severity.FATAL, row, lower, problem, hint))
    return findings


def case_rules(reads: Mapping[str, Checked]) -> list[Finding]:
    """Return the findings of `cases`: how many, voltages given once, columns of use to nobody."""
    cases = reads["cases"]
    findings: list[Finding] = []
    if len(cases.table) > MOST_CASES:
        problem = f"{len(cases.table)} cases, and at most {MOST_CASES} are read"
        hint = "keep the cases that matter: highest and lowest load and generation"
        findings.append(cases.finding(Severity.FATAL, 0, "case", problem, hint))
    for row, cells in cases.rows():
        findings += said_twice(cases, row, cells, "source_voltage_pu", "source_voltage_kv")
    known = {column.key for column in INPUT["cases"].columns}
    classes = [cells["class"] for _, cells in reads["loads"].rows()]
    followed = {cells["scale"] for _, cells in reads["technologies"].rows()}
    for key in (k for k in cases.table.columns if k not in known and k not in followed):
        if key.startswith(_CLASS_PREFIX):
            word = key.removeprefix(_CLASS_PREFIX)
            if word in classes:
                continue
            problem = "no load has this class: the column has no effect"
            hint = did_you_mean(word, near_index(classes))
        else:
            problem = "no technology follows this column: it has no effect"
            hint = did_you_mean(key, near_index(known), "name it under scale in `technologies`")
        findings.append(cases.finding(Severity.WARNING, HEADER_ROW, key, problem, hint))
    return findings


def read_limits(reads: Mapping[str, Checked]) -> tuple[Settings, list[Finding]]:
    """Return the settings with the rows of `limits` applied, and what is wrong with them."""
    limits = reads["limits"]
    known = {setting.name: setting for setting in sheet_settings()}
    index = near_index(known)
    findings: list[Finding] = []
    values: dict[str, Any] = {}
    rows: dict[str, int] = {}
    for row, cells in limits.rows():
        name, value = fold(cells["limit"]), cells["value"]
        if not name or not given(cells, "value"):
            continue
        if name not in known:
            longer = [limit for limit in known if limit.startswith(name)]
            hint = did_you_mean(name, index, f"limits read here: {', '.join(longer or known)}")
            findings.append(limits.finding(Severity.FATAL, row, "limit", "no such limit", hint))
            continue
        problem = ""
        if value < 0 or (value == 0 and name not in _MAY_BE_ZERO):
            problem = "negative" if value < 0 else "zero"
        elif name == "regulator_edge" and value not in (0, 1):
            problem = "neither 0 nor 1"
        if problem:
            hint = f"{known[name].metadata['meaning']}, in {known[name].metadata['unit']}"
            problem = f"{problem}, where that cannot be"
            findings.append(limits.finding(Severity.FATAL, row, "value", problem, hint))
        elif name not in rows:
            values[name] = float(value)
            rows[name] = row
    settings = replace(Settings(), **values)
    for level in ("", "_primary"):
        lower, upper = f"v_min{level}_pu", f"v_max{level}_pu"
        own = [rows[name] for name in (lower, upper) if name in rows]
        low, high = getattr(settings, lower), getattr(settings, upper)
        low = settings.v_min_pu if low is None else low
        high = settings.v_max_pu if high is None else high
        if own and low >= high:
            problem = f"{lower} {low:g} is not below {upper} {high:g}"
            hint = "the lower limit must be below the upper"
            findings.append(limits.finding(Severity.FATAL, own[-1], "value", problem, hint))
    return settings, findings
