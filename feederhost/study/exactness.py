"""The `conditions` sheet: what the theory asks, whether it holds, and where it is closest."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import pandas as pd

from feederhost.feeder.model import Feeder
from feederhost.flow.limits import System
from feederhost.flow.search import Plants
from feederhost.flow.taps import Solved
from feederhost.proof.branchflow import branch_flow
from feederhost.proof.conditions import Margins, c1_margin, c2_margin, least_resistance
from feederhost.schema import RESULT, Proof
from feederhost.study.cases import steady_limits
from feederhost.study.rows import Hosting, HostingRow

_FL = "Farivar & Low 2013, Theorem 1"
_GLTL = "Gan, Li, Topcu & Low 2015, Theorem 1"
_RECOVERY = "AC power flow of the published value"
_SUFFICIENT = "sufficient, not necessary: the proof is per row"


def _line(
    scope: str, condition: str, holds: str, margin: float | None, where: str, reference: str
) -> dict[str, object]:
    margin = None if margin is None or not math.isfinite(margin) else margin
    return {
        "scope": scope, "condition": condition, "holds": holds, "margin": margin,
        "where": where, "reference": reference,
    }  # fmt: skip


def _yes(good: bool) -> str:
    return "yes" if good else "no"


def _branch(feeder: Feeder, k: int) -> str:
    edge = feeder.edges[k] if 0 <= k < len(feeder.edges) else None
    return edge.name if edge is not None else ""


def feeder_conditions(feeder: Feeder, base: Sequence[Solved]) -> list[dict[str, object]]:
    """Conditions of the feeder itself, nothing added."""
    n = len(feeder.nodes)
    rows = [
        _line("feeder", "radial: one source, n - 1 closed branches, no loop, no island", "yes",
              None, f"{n} nodes, {n - 1} branches", _GLTL),
    ]  # fmt: skip
    systems = [
        System(s.network, s.loading, steady_limits(feeder, s, c, ""))
        for c, s in zip(feeder.cases, base, strict=True)
    ]
    least, at, reactances = least_resistance(systems[0])
    rows.append(
        _line("feeder", "r > 0 and x >= 0 on every branch (switches merged)",
              _yes(least > 0 and reactances), least, _branch(feeder, at), _GLTL)
    )  # fmt: skip
    rows.append(
        _line("feeder", "loads may be over-satisfied", "not needed", None,
              "loads are fixed: not met", _FL)
    )  # fmt: skip
    none = Plants(np.zeros(1, dtype=np.intp), np.zeros((1, 1), complex), np.zeros(1))
    found: dict[str, list[tuple[Margins, str]]] = {"C1": [], "C2": []}
    for system, solved, case in zip(systems, base, feeder.cases, strict=True):
        flow = branch_flow(system, none, solved.point)
        zero = np.zeros(flow.P.shape, complex)
        found["C1"].append((c1_margin(system, flow, zero), case.name))
        found["C2"].append((c2_margin(system, flow, zero), case.name))
    for name, text in _TEXT.items():
        margins, case_name = min(found[name], key=lambda m: float(m[0].margin[0]))
        margin, k = float(margins.margin[0]), int(margins.node[0])
        where = f"{feeder.nodes[k]} in {case_name}"
        rows.append(_line("feeder, nothing added", text, _yes(margin > 0), margin, where, _GLTL))
    return rows


_TEXT = {
    "C1": "C1: reverse flow leaves every product A...A u positive",
    "C2": "C2: lossless voltages within the upper limits (squared pu)",
}


def row_conditions(hosting: Hosting) -> list[dict[str, object]]:
    """Conditions that speak of rows: the worst row of each, with its margin."""
    feeder, settings = hosting.feeder, hosting.feeder.settings
    rows = [r for r in hosting.rows if r.evidence is not None and r.proof is not Proof.FAILED]
    lines: list[dict[str, object]] = []
    if not rows:
        return lines

    def worst(values: list[float]) -> tuple[float, HostingRow]:
        at = int(np.argmin(values))
        return values[at], rows[at]

    def add(condition: str, values: list[float], reference: str, least: float = 0.0) -> None:
        margin, row = worst(values)
        label = f"{feeder.nodes[row.candidate.node]} {row.candidate.technology}"
        lines.append(_line("worst row", condition, _yes(margin > least), margin, label, reference))

    own = [r.evidence for r in rows if r.evidence is not None]
    add("objective: every loss price is above its exchange rate (smallest over largest T)",
        [e.own(e.certificate.smallest) for e in own], f"{_FL}; {_GLTL}",
        -settings.multiplier_tolerance)  # fmt: skip
    add("objective: the priced objective still rises (1 - sum w dell/dg)",
        [e.own(e.certificate.objective_margin) for e in own], f"{_FL}; {_GLTL}")  # fmt: skip
    margins = _exactness_margins(rows)
    for name, text in _TEXT.items():
        add(text, margins[name], f"{_GLTL}; {_SUFFICIENT}")
    solved = [(r, e) for r, e in zip(rows, own, strict=True) if e.relaxed is not None]
    if solved:
        rows = [r for r, _ in solved]
        spare = [
            feeder.kw(settings.fictitious_loss_share * r.rating - e.relaxed.loss_gap)
            for r, e in solved if e.relaxed is not None
        ]  # fmt: skip
        add("fictitious loss below tolerance, kW to spare", spare, "cone residual as a loss")
    add(
        "AC recovery: power mismatch below tolerance, pu to spare",
        [settings.mismatch_tolerance - r.mismatch for r in rows],
        _RECOVERY,
    )
    add(
        "AC recovery: every limit holds in every case, least slack",
        [r.slack for r in rows],
        _RECOVERY,
        -settings.mismatch_tolerance,
    )
    return lines


def _exactness_margins(rows: Sequence[HostingRow]) -> dict[str, list[float]]:
    """C1 and C2 margins per row, with the plant at its unrounded rating."""
    out: dict[str, list[float]] = {"C1": [0.0] * len(rows), "C2": [0.0] * len(rows)}
    batches: dict[int, list[int]] = {}
    for i, row in enumerate(rows):
        if row.evidence is not None:
            batches.setdefault(id(row.evidence.flow), []).append(i)
    for members in batches.values():
        first = rows[members[0]].evidence
        assert first is not None
        flow, seek = first.flow, first.seek
        injected = np.zeros(flow.P.shape, complex)
        for i in members:
            own = rows[i].evidence
            assert own is not None
            j = int(seek.node[own.column])
            # What is drawn is not injected: an import counts with a negative sign.
            injected[j, own.column] = -seek.draw[own.column] * rows[i].rating
        c1, c2 = c1_margin(first.system, flow, injected), c2_margin(first.system, flow, injected)
        for i in members:
            column = rows[i].evidence.column  # type: ignore[union-attr]
            out["C1"][i] = float(c1.margin[column])
            out["C2"][i] = float(c2.margin[column])
    return out


def conditions_table(
    feeder: Feeder, base: Sequence[Solved], hosting: Hosting | None = None
) -> pd.DataFrame:
    """Return the `conditions` sheet; without a hosting, of the feeder alone."""
    rows = feeder_conditions(feeder, base)
    if hosting is not None:
        rows += row_conditions(hosting)
    return pd.DataFrame(rows, columns=list(RESULT["conditions"].names), dtype=object)
