"""Answers to tables: the sheets of the result workbook, units back at the door."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterable

import numpy as np
import pandas as pd

from feederhost.errors import Finding
from feederhost.feeder.model import Feeder
from feederhost.flow.limits import Quantity
from feederhost.flow.search import WATCHED
from feederhost.schema import BASES, LIMIT_CRITERIA, RESULT, Criterion, Proof, State
from feederhost.study.cases import BOTH, Posed, case_scale
from feederhost.study.rows import Hosting, HostingRow, element_name

_HOSTED = (State.HOSTED, State.HOSTED_BASE_VIOLATION)


def result_frame(sheet: str, rows: Iterable[dict[str, object]]) -> pd.DataFrame:
    """Lay rows out as a result sheet: its columns in order, None where a row has nothing."""
    names = RESULT[sheet].names
    cells = [[row.get(name) for name in names] for row in rows]
    return pd.DataFrame(cells, columns=list(names), dtype=object)


def in_kw(feeder: Feeder, value: float) -> float | None:
    """Per unit to kW; blank where there is no number."""
    return feeder.kw(value) if math.isfinite(value) else None


def audit_table(findings: Iterable[Finding]) -> pd.DataFrame:
    """Return the `audit` sheet, the weightiest findings first."""
    order = ("fatal", "warning", "note")
    ranked = sorted(findings, key=lambda f: order.index(f.severity))
    return result_frame(
        "audit",
        (
            {
                "severity": str(f.severity), "sheet": f.sheet, "row": f.row or None,
                "column": f.column, "value": f.value, "finding": f.finding,
                "suggestion": f.suggestion,
            }
            for f in ranked
        ),
    )  # fmt: skip


def hosting_table(hosting: Hosting, flags: str = "") -> pd.DataFrame:
    """Return the `hosting` sheet; a row that failed its AC check carries no number."""
    return result_frame("hosting", (_hosting_row(hosting, row, flags) for row in hosting.rows))


def _hosting_row(hosting: Hosting, row: HostingRow, flags: str) -> dict[str, object]:
    feeder, k = hosting.feeder, row.candidate.node
    out: dict[str, object] = {
        "feeder": feeder.name, "node": feeder.nodes[k], "technology": row.candidate.technology,
        "phases": row.candidate.phases, "kv": float(feeder.kv[k]),
        "distance_km": float(feeder.distance_km[k]), "state": str(row.state),
        "proof": str(row.proof), "criterion": str(row.criterion or ""),
        "flags": "; ".join(f for f in (flags, *_row_flags(hosting, row)) if f),
        "input_grade": _grade(hosting, row),
        "existing_kw": in_kw(feeder, float(feeder.existing[k])),
    }  # fmt: skip
    if row.state is State.NOT_ANALYSED:
        return out
    out["ac_mismatch_pu"] = row.mismatch if math.isfinite(row.mismatch) else None
    if row.proof is Proof.FAILED:
        out["existing_kw"] = None
        return out
    size = math.hypot(1, row.candidate.reactive)
    out |= {
        "hosting_kw": in_kw(feeder, row.hosting), "hosting_kva": in_kw(feeder, row.hosting * size),
        "hosting_unrounded_kw": in_kw(feeder, row.rating),
        "upper_bound_kw": in_kw(feeder, row.upper),
        "reverse_at_head_kw": _reverse(feeder, row),
    }  # fmt: skip
    if math.isfinite(row.upper) and row.rating > 0:
        out["gap_pct"] = 100 * (row.upper / row.rating - 1)
    second = _next(row)
    if second is not None:
        out["next_criterion"] = str(LIMIT_CRITERIA[second])
        out["next_kw"] = in_kw(feeder, float(row.by_group[second]))
    if row.evidence is not None and row.evidence.relaxed is not None:
        out["fictitious_loss_kw"] = in_kw(feeder, row.evidence.relaxed.loss_gap)
    if row.study is not None:
        out["case"] = row.study.case.name
        if row.limit >= 0 and row.criterion is not None:
            posed = row.study.posed[row.posed]
            out |= at_limit(feeder, row.criterion, posed, row.limit, row.value)
    return out


def _next(row: HostingRow) -> int | None:
    """Criterion met second (None where nothing else is met up to the cap)."""
    rated = np.array(row.by_group[: len(LIMIT_CRITERIA)])
    if row.criterion in LIMIT_CRITERIA:
        rated[LIMIT_CRITERIA.index(row.criterion)] = np.inf
    second = int(rated.argmin())
    return second if np.isfinite(rated[second]) else None


def _reverse(feeder: Feeder, row: HostingRow) -> float | None:
    """Rating at which the head first exports; only an export can bring it about."""
    return in_kw(feeder, float(row.by_group[WATCHED]))


def at_limit(
    feeder: Feeder, criterion: Criterion, posed: Posed, row: int, value: float
) -> dict[str, object]:
    """Element, measured value and limit of a limit row in the units of the trade."""
    limits, network = posed.system.limits, posed.system.network
    element, phase = int(limits.element[row]), int(limits.phase[row])
    k = element - posed.shift
    bound, quantity = float(limits.bound[row]), limits.quantity[row]
    gain = float(network.gain[element, phase])
    if quantity == Quantity.VOLTAGE:
        shown, limit, unit = math.sqrt(value) * gain, math.sqrt(bound) * gain, "pu"
        if criterion is Criterion.VOLTAGE_CHANGE:
            base = float(np.abs(posed.base.V[element, phase, 0])) * gain
            shown, limit, unit = 100 * abs(shown - base), 100 * abs(limit - base), "%"
    elif quantity in (Quantity.CURRENT_FROM, Quantity.CURRENT_TO):
        side = k if quantity == Quantity.CURRENT_TO else int(feeder.tree.parent[k])
        gain = float(network.gain[side + posed.shift, phase])
        shown = feeder.amps(math.sqrt(value) / gain, side)
        limit, unit = feeder.amps(math.sqrt(bound) / gain, side), "A"
    elif quantity == Quantity.BANK_POWER:
        shown, limit, unit = feeder.kw(math.sqrt(value)), feeder.kw(math.sqrt(bound)), "kVA"
    else:
        sign = 1 if limits.upper[row] else -1
        shown, limit, unit = sign * feeder.kw(value), sign * feeder.kw(bound), "kW"
    return {
        "element": element_name(feeder, criterion, k), "value_at_limit": shown,
        "limit_value": limit, "unit": unit,
    }  # fmt: skip


def _row_flags(hosting: Hosting, row: HostingRow) -> list[str]:
    feeder = hosting.feeder
    flags = []
    if row.broken:
        most = feeder.settings.flag_elements
        more = len(row.broken) - most
        rest = f" and {more} more (sheet base)" if more > 0 else ""
        flags.append("base violation: " + ", ".join(row.broken[:most]) + rest)
    bank = row.criterion is Criterion.BANK_RATING
    if bank and row.study is not None and not row.study.case.bank_known:
        flags.append("bank may be shared with other feeders")
    if row.criterion is Criterion.AC_CHECK and row.proof is not Proof.FAILED:
        flags.append("power flow solution is lost before any limit is met")
    both = feeder.technology(row.candidate.technology).direction == BOTH
    if both and row.state is not State.NOT_ANALYSED:
        flags.append(f"binding direction: {row.direction}")
    return flags


def _grade(hosting: Hosting, row: HostingRow) -> str:
    """Worst basis of the cases in which the technology runs."""
    technology = hosting.feeder.technology(row.candidate.technology)
    used = [c.basis for c in hosting.feeder.cases if case_scale(c, technology)]
    return max(used, key=BASES.index, default="")


def criteria_table(hosting: Hosting) -> pd.DataFrame:
    """Return the `criteria` sheet: each criterion as if it stood alone."""
    feeder = hosting.feeder
    rows = []
    for row in hosting.rows:
        out: dict[str, object] = _label(feeder, row)
        for g, criterion in enumerate(LIMIT_CRITERIA):
            out[f"{criterion}_kw"] = in_kw(feeder, float(row.by_group[g]))
        rows.append(out)
    return result_frame("criteria", rows)


def _label(feeder: Feeder, row: HostingRow) -> dict[str, object]:
    own = row.candidate
    return {
        "node": feeder.nodes[own.node], "technology": own.technology, "phases": own.phases
    }  # fmt: skip


def relaxation_table(hosting: Hosting) -> pd.DataFrame:
    """Return the `relaxation` sheet: the solver's record, which is no capacity."""
    feeder = hosting.feeder
    rows = []
    for row in hosting.rows:
        out: dict[str, object] = _label(feeder, row)
        own = row.evidence
        if own is not None and row.study is not None:
            certificate = own.certificate
            out["case"] = row.study.case.name
            out["smallest_multiplier"] = _finite(own.own(certificate.smallest))
            out["objective_margin"] = _finite(own.own(certificate.objective_margin))
            if own.relaxed is not None:
                out |= {
                    "solver": own.relaxed.answer.solver, "status": str(own.relaxed.answer.status),
                    "iterations": own.relaxed.answer.iterations,
                }  # fmt: skip
                if row.proof is not Proof.FAILED:
                    out["priced_kw"] = in_kw(feeder, own.relaxed.g)
            if own.plain is not None and row.proof is not Proof.FAILED:
                out["plain_kw"] = in_kw(feeder, own.plain.g)
                out["plain_fictitious_loss_kw"] = in_kw(feeder, own.plain.loss_gap)
                out["plain_outcome"] = own.plain_outcome
        rows.append(out)
    return result_frame("relaxation", rows)


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def profile_table(hosting: Hosting) -> pd.DataFrame:
    """Return the `profile` sheet: voltages with the smallest hosting of each technology."""
    feeder = hosting.feeder
    rows: list[dict[str, object]] = []
    for name in dict.fromkeys(r.candidate.technology for r in hosting.rows):
        own = [
            r for r in hosting.rows
            if r.candidate.technology == name and r.evidence is not None
            and r.proof is not Proof.FAILED
        ]  # fmt: skip
        if own:
            worst = min(own, key=lambda r: r.rating)
            rows += _profile_rows(feeder, worst)
    return result_frame("profile", rows)


def _profile_rows(feeder: Feeder, row: HostingRow) -> list[dict[str, object]]:
    assert row.study is not None
    assert row.evidence is not None
    posed = row.study.posed[row.posed]
    gain = row.study.held.network.gain[:, 0]
    base = np.abs(row.study.held.point.V[:, 0, 0]) * gain
    V = row.evidence.point.V[posed.shift :, 0, row.evidence.column]
    with_plant = np.abs(V) * gain
    return [
        {
            "node": feeder.nodes[k], "distance_km": float(feeder.distance_km[k]),
            "base_pu": float(base[k]), "hosting_pu": float(with_plant[k]),
            "case": row.study.case.name, "technology": row.candidate.technology,
            "plant_node": feeder.nodes[row.candidate.node],
            "v_min_pu": float(feeder.v_min[k, 0]), "v_max_pu": float(feeder.v_max[k, 0]),
        }
        for k in range(len(feeder.nodes))
    ]  # fmt: skip


def counts(hosting: Hosting) -> dict[str, dict[str, int]]:
    """Count rows per state and per proof."""
    return {
        "state": dict(Counter(str(r.state) for r in hosting.rows)),
        "proof": dict(Counter(str(r.proof) or "blank" for r in hosting.rows)),
    }


def trusted(hosting: Hosting) -> bool:
    """Whether every row that was analysed is proven, or capped without need of proof."""
    fine = (Proof.PROVEN, Proof.NOT_NEEDED)
    return all(r.proof in fine for r in hosting.rows if r.state is not State.NOT_ANALYSED)
