"""The engine's answer to workbook-form tables, without a file in between.

Tables are what ``judge`` reads too: sheet name to a list of rows.  The last answers are kept.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Mapping, Sequence
from dataclasses import replace
from functools import lru_cache
from pathlib import Path
from typing import Any
from unittest.mock import patch

import numpy as np
import pandas as pd
import pytest
from feederhost.errors import fatal
from feederhost.feeder.audit import audit
from feederhost.feeder.model import Feeder
from feederhost.feeder.perunit import build_feeder
from feederhost.feeder.tables import Tables, check_tables
from feederhost.feeder.topology import root_feeder
from feederhost.schema import LIMIT_CRITERIA
from feederhost.study import reports
from feederhost.study.load import Loaded
from feederhost.study.nodal import Hosting, HostingRow, host
from feederhost.study.options import Options

Sheets = Mapping[str, Sequence[Mapping[str, Any]]]


def raw_sheets(tables: Sheets) -> dict[str, pd.DataFrame]:
    """Return tables as reading a workbook returns them: row 2 is the first below the header."""
    raw = {}
    for name, rows in tables.items():
        frame = pd.DataFrame(list(rows), dtype=object)
        frame = frame.where(frame.notna(), None)
        frame.index = np.arange(2, 2 + len(frame))
        raw[name] = frame
    return raw


def load(tables: Sheets, name: str = "tables", **settings: object) -> Loaded:
    """Return the feeder of tables that have no fatal finding, with all findings.

    ``settings`` replaces fields of its Settings, as if the rows of `limits` had said so.
    """
    checked: Tables = check_tables(raw_sheets(tables))
    checked = replace(checked, settings=replace(checked.settings, **settings))
    topology, rooted = root_feeder(checked)
    findings = [*checked.findings, *rooted]
    if topology is not None:
        findings += audit(checked, topology)
    stopping = [f.line() for f in fatal(findings)]
    assert not stopping, stopping
    return Loaded(build_feeder(checked, topology, name), checked, tuple(findings), {})


def build(tables: Sheets, **settings: object) -> Feeder:
    """Return the feeder of tables."""
    return load(tables, **settings).feeder


def answer(tables: Sheets, options: Options | None = None, **settings: object) -> Hosting:
    """Return the hosting of all candidates; the plain programme only where settings ask."""
    settings = {"plain_sample": 0} | settings
    return _answer(json.dumps([tables, settings], sort_keys=True), options or Options())


@lru_cache(maxsize=16)
def _answer(asked: str, options: Options) -> Hosting:
    tables, settings = json.loads(asked)
    return host(build(tables, **settings), options)


def answer_rows(
    tables: Sheets, rows: Sequence[tuple[str, str]], **settings: object
) -> list[HostingRow]:
    """Return the answers for (node, technology) pairs, in their order."""
    candidates = [{"node": n, "technology": t} for n, t in rows]
    hosting = answer({**tables, "candidates": candidates}, **settings)
    return [row_of(hosting, n, t) for n, t in rows]


def row_of(hosting: Hosting, node: str, technology: str) -> HostingRow:
    """Return the only row of a node and technology."""
    feeder = hosting.feeder
    (row,) = (
        r for r in hosting.rows
        if feeder.nodes[r.candidate.node] == node and r.candidate.technology == technology
    )  # fmt: skip
    return row


def per_criterion(row: HostingRow) -> dict[str, float]:
    """Return the first violation of every criterion that is met up to the cap, in kW."""
    return {
        str(c): 1000 * float(row.by_group[g])  # the power base of the core is 1 MVA
        for g, c in enumerate(LIMIT_CRITERIA)
        if np.isfinite(row.by_group[g])
    }


def report(
    tables: Sheets, options: Options | None = None, *, check: bool = False, **settings: object
) -> reports.Report:
    """Return the whole answer of `host` (or `check`) to tables, without a file in between."""
    loaded = load(tables, **settings)
    with patch.object(reports, "load_feeder", lambda path: loaded):
        answer_of = reports.check_report if check else reports.host_report
        return answer_of(Path("tables"), options or Options())


def line_of(frame: pd.DataFrame, node: str, technology: str) -> dict[str, Any]:
    """Return the only row of a result sheet for a node and technology; blank cells are None."""
    own = frame[(frame["node"] == node) & (frame["technology"] == technology)]
    (line,) = own.to_dict("records")
    return {k: None if v == "" or pd.isna(v) else v for k, v in line.items()}


def swap(monkeypatch: pytest.MonkeyPatch, old: Any, new: Any, room: str = "study") -> None:
    """Put ``new`` where a room of the package has ``old``, in whichever module that is."""
    places = [
        (module, name)
        for path, module in list(sys.modules.items())
        if path.startswith(f"feederhost.{room}.")
        for name, value in vars(module).items()
        if value is old
    ]
    assert places, f"no module of {room} uses {old.__name__}"
    for module, name in places:
        monkeypatch.setattr(module, name, new)


def two_bus(
    z_ohm: complex = 5 + 5j,
    *,
    rating_a: float | str = "unlimited",
    limits: Mapping[str, float] | None = None,
    source: Mapping[str, Any] | None = None,
    case: Mapping[str, Any] | None = None,
    **sheets: list[dict[str, Any]],
) -> dict[str, list[dict[str, Any]]]:
    """Return one line from S to N at 10 kV, so that 100 ohm is 1 pu and 57.735 A is 1 pu.

    One case in which all runs; voltage change off; looked at up to 20 MW.
    """
    loose = {"voltage_change_mv_pct": 0, "voltage_change_lv_pct": 0, "search_cap_kw": 20000}
    every = {"case": "only", "load_scale": 1, "pv_scale": 1, "ev_scale": 1}
    line = {"line": "L", "from_node": "S", "to_node": "N", "length_km": 1.0,
            "r1_ohm": z_ohm.real, "x1_ohm": z_ohm.imag, "rating_a": rating_a}  # fmt: skip
    return {
        "source": [{"node": "S", "kv": 10, "voltage_pu": 1.0, **(source or {})}],
        "lines": [line],
        "cases": [every | dict(case or {})],
        "limits": [{"limit": k, "value": v} for k, v in (loose | dict(limits or {})).items()],
        **sheets,
    }
