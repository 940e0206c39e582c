"""The engine's answer to workbook-form tables, without a file in between.

Tables are what ``judge`` reads too: sheet name to a list of rows.  Every answer is computed once.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import replace
from functools import cache
from typing import Any

import numpy as np
import pandas as pd
from feederhost.errors import fatal
from feederhost.feeder.audit import audit
from feederhost.feeder.model import Feeder
from feederhost.feeder.perunit import build_feeder
from feederhost.feeder.tables import Tables, check_tables
from feederhost.feeder.topology import root_feeder
from feederhost.schema import LIMIT_CRITERIA
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


def load(tables: Sheets, name: str = "tables") -> Loaded:
    """Return the feeder of tables that have no fatal finding, with all findings."""
    checked: Tables = check_tables(raw_sheets(tables))
    topology, rooted = root_feeder(checked)
    findings = [*checked.findings, *rooted]
    if topology is not None:
        findings += audit(checked, topology)
    stopping = [f.line() for f in fatal(findings)]
    assert not stopping, stopping
    return Loaded(build_feeder(checked, topology, name), checked, tuple(findings), {})


def build(tables: Sheets, **settings: object) -> Feeder:
    """Return the feeder; ``settings`` replaces fields of its Settings afterwards.

    Rows of `limits` belong in the tables: what they turn into is settled while reading.
    """
    feeder = load(tables).feeder
    return replace(feeder, settings=replace(feeder.settings, **settings))


def answer(tables: Sheets, options: Options | None = None, **settings: object) -> Hosting:
    """Return the hosting of all candidates; the plain programme only where settings ask."""
    settings = {"plain_sample": 0} | settings
    return _answer(json.dumps([tables, settings], sort_keys=True), options or Options())


@cache
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
