"""What a solver calls optimal and nobody may publish: each failure for its own reason.

The values are computed for this project with independent methods, not published; the closed
forms are in ``test_search.py``.  "Plain" is the programme without loss prices.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from feederhost.flow.limits import System
from feederhost.flow.search import slacks_with
from feederhost.proof.recovery import Outcome, Recovery, recover
from feederhost.proof.solver import SOLVERS, Answer, Status
from feederhost.proof.valuing import Relaxed, solve_row
from feederhost.schema import Proof, State
from feederhost.study import proving
from feederhost.study.nodal import host
from feederhost.study.options import Options

from engine import build
from small_feeders import (
    SETTINGS,
    band,
    first,
    high,
    loading,
    low,
    network,
    plant,
    pose,
    rated_sending,
    relax,
    system,
    two_bus,
)

PLAIN: dict[str, tuple[System, int, float, float, Outcome]] = {
    # System, plant node, AC value, plain value, why it is rejected.
    "an extra loss holds the voltage": (
        two_bus(0.05, 0.05, [high(1, 1.05), low(1, 0.9), rated_sending(1, math.sqrt(2))]),
        1, 1.0776699562, 1.125, Outcome.NOT_TIGHT),
    "the low-voltage branch of the AC solution": (
        two_bus(0.05, 0.05, [high(1, 1.05), low(1, 0.9)]),
        1, 1.0776699562, 20.9723300438, Outcome.NOT_RECOVERED),
    "a re-entry into the limits": (
        two_bus(0.02, 0.06, [high(1, 1.05), low(1, 0.9)]),
        1, 4.0509618548, 11.457935, Outcome.NOT_FIRST),
    "an extra loss downstream unloads a rated line": (
        system(network([-1, 0, 1], [0.02 + 0.02j, 0.05 + 0.05j]), loading(3),
               [*band(3, 0.8, 1.2), rated_sending(1, 1.0), rated_sending(2, 3.0)]),
        2, 1.0675470, 1.3526664, Outcome.NOT_TIGHT),
}  # fmt: skip


def plain_and_recovery(name: str, solver: str) -> tuple[Relaxed, Recovery]:
    sys, node, ac_value, _, _ = PLAIN[name]
    one = plant(node, cap=60.0)
    posed = pose(sys, one)
    assert posed.rating == pytest.approx(ac_value, abs=1e-7)
    plain = relax(posed, prices=np.zeros(sys.network.tree.size), solver=solver)
    return plain, recover(sys, one, plain, posed.rating, SETTINGS)


@pytest.mark.parametrize("solver", SOLVERS)
@pytest.mark.parametrize("name", PLAIN)
def test_the_plain_optimum_is_rejected_for_its_own_reason(name: str, solver: str):
    _, _, ac_value, plain_value, outcome = PLAIN[name]
    plain, recovery = plain_and_recovery(name, solver)
    assert plain.answer.status is Status.CLEAN  # the solver is content
    assert plain.g == pytest.approx(plain_value, rel=1e-6)
    assert plain.g > 1.04 * ac_value
    assert recovery.outcome is outcome


def test_the_evidence_of_each_rejection():
    # ell = 2 where the AC point has less: v = 1.1025 = 1 + 2 * .05 p - .005 * 2 at p = 1.125;
    # AC there: V = 1.0520373.
    plain, found = plain_and_recovery("an extra loss holds the voltage", "clarabel")
    assert plain.ell[1] == pytest.approx(2.0, rel=1e-6)
    assert plain.loss_gap == pytest.approx(0.046969, abs=1e-5)
    assert found.voltage_gap == pytest.approx(1.0520373 - 1.05, abs=1e-6)
    # Tight, but the AC flow of that injection sits at 1.412 pu, not at 1.05.
    plain, found = plain_and_recovery("the low-voltage branch of the AC solution", "clarabel")
    assert abs(plain.loss_gap) < 1e-4
    assert found.voltage_gap == pytest.approx(1.41235 - 1.05, abs=1e-4)
    # Tight, AC-feasible at full output, but 4.06 to 6.97 on the way is not.
    name = "a re-entry into the limits"
    plain, found = plain_and_recovery(name, "clarabel")
    assert abs(plain.loss_gap) < 1e-4
    assert found.voltage_gap < 1e-6
    assert abs(found.least_slack) < 1e-6
    assert found.mismatch < 1e-8
    slack, _ = slacks_with(PLAIN[name][0], plant(1), np.array([5.5]), SETTINGS)
    assert slack.min() < -0.008


@pytest.mark.parametrize("name", PLAIN)
def test_the_priced_optimum_is_recovered(name: str):
    sys, node, ac_value, _, _ = PLAIN[name]
    one = plant(node, cap=60.0)
    posed = pose(sys, one)
    priced = relax(posed)
    found = recover(sys, one, priced, posed.rating, SETTINGS)
    assert found.outcome is Outcome.RECOVERED
    assert priced.g == pytest.approx(ac_value, rel=1e-6)
    assert found.voltage_gap < 1e-5
    assert found.least_slack > -1e-5
    assert found.mismatch < 1e-8


def test_no_answer_carries_no_number():
    sys, one = two_bus(0.05, 0.05, [high(1, 1.05)]), plant(1)
    priced = relax(pose(sys, one))
    nothing = replace(priced, g=math.nan, answer=Answer("clarabel", Status.FAILED, 0))
    found = recover(sys, one, nothing, 1.0, SETTINGS)
    assert found.outcome is Outcome.NO_ANSWER
    assert np.isnan([found.loss_gap, found.voltage_gap, found.least_slack, found.mismatch]).all()


def test_an_ac_point_that_breaks_a_limit_is_rejected():
    # Solved with v <= 1.06^2, judged with 1.05^2: tight, recovered, and too high.
    wide, one = two_bus(0.05, 0.05, [high(1, 1.06)]), plant(1)
    priced = relax(pose(wide, one))
    narrow = two_bus(0.05, 0.05, [high(1, 1.05)])
    found = recover(narrow, one, priced, first(wide, one).rating, SETTINGS)
    assert found.outcome is Outcome.VIOLATES
    assert found.least_slack == pytest.approx(1.05**2 - 1.06**2, abs=1e-5)


def test_an_injection_without_ac_solution_is_rejected():
    sys, one = two_bus(0.05, 0.05, [high(1, 1.05)]), plant(1, sigma=-1)
    priced = relax(pose(sys, plant(1)))
    found = recover(sys, one, replace(priced, g=9.0), 10.0, SETTINGS)
    assert found.outcome is Outcome.NOT_RECOVERED
    assert found.mismatch == math.inf


# --- through the study -----------------------------------------------------------------------

# 10 kV and 1 MVA: 100 ohm and 57.735 A are 1 pu.
AMPS = 1000 / (math.sqrt(3) * 10)


def workbook(lines: list[tuple[str, str, float, float, object]], v_max: float, v_min: float):
    return {
        "source": [{"node": "S", "kv": 10, "voltage_pu": 1.0}],
        "lines": [
            {"line": f"{a}-{b}", "from_node": a, "to_node": b, "r1_ohm": 100 * r,
             "x1_ohm": 100 * x, "rating_a": rating}
            for a, b, r, x, rating in lines
        ],
        "cases": [{"case": "only", "load_scale": 1, "pv_scale": 1, "ev_scale": 0}],
        "limits": [
            {"limit": k, "value": v}
            for k, v in {"v_min_pu": v_min, "v_max_pu": v_max, "voltage_change_mv_pct": 0,
                         "search_cap_kw": 30000, "rounding_kw": 0.01}.items()
        ],
    }  # fmt: skip


STUDIED = {
    "an extra loss holds the voltage": workbook(
        [("S", "A", 0.05, 0.05, math.sqrt(2) * AMPS)], 1.05, 0.9),
    "the low-voltage branch of the AC solution": workbook(
        [("S", "A", 0.05, 0.05, "unlimited")], 1.05, 0.9),
    "a re-entry into the limits": workbook([("S", "A", 0.02, 0.06, "unlimited")], 1.05, 0.9),
    "an extra loss downstream unloads a rated line": workbook(
        [("S", "B", 0.02, 0.02, AMPS), ("B", "A", 0.05, 0.05, 3 * AMPS)], 1.2, 0.8),
}  # fmt: skip


@pytest.mark.parametrize("name", STUDIED)
def test_the_study_publishes_none_of_them(name: str):
    _, _, ac_value, plain_value, _ = PLAIN[name]
    feeder = build({**STUDIED[name], "candidates": [{"node": "A", "technology": "pv"}]})
    (row,) = host(feeder, Options(plain=True)).rows
    # The plain optimum was looked at, and what is published is the AC first violation, proven.
    assert row.evidence.plain.g == pytest.approx(plain_value, rel=1e-5)
    assert row.proof is Proof.PROVEN
    assert row.rating == pytest.approx(ac_value, abs=1e-7)
    assert row.hosting == pytest.approx(math.floor(ac_value * 1e5) / 1e5, abs=1e-12)
    assert row.upper == row.rating


@pytest.mark.parametrize("name", STUDIED)
def test_a_solver_that_answers_the_plain_programme_proves_nothing(
    name: str, monkeypatch: pytest.MonkeyPatch
):
    # Inexact on purpose: the prices are lost on the way to the solver.
    def without_prices(*arguments, **options):
        given = list(arguments)
        given[5] = np.zeros_like(given[5])
        return solve_row(*given, **options)

    monkeypatch.setattr(proving, "solve_row", without_prices)
    feeder = build({**STUDIED[name], "candidates": [{"node": "A", "technology": "pv"}]})
    (row,) = host(feeder, Options()).rows
    _, _, ac_value, _, _ = PLAIN[name]
    assert row.proof is Proof.BRACKETED
    assert row.state is State.HOSTED
    assert row.rating == pytest.approx(ac_value, abs=1e-7)
    assert row.upper > row.rating


# --- rows that host nothing, or nothing but what flows there already ---------------------------

NO_EXPORT = workbook([("S", "B", 0.05, 0.05, 300), ("B", "A", 0.05, 0.05, 300)], 1.05, 0.9)
NO_EXPORT["source"][0]["export_limit_kw"] = 0
PV_AT_A = [{"node": "A", "technology": "pv"}]


def test_a_feeder_without_load_that_may_not_export_hosts_nothing():
    (row,) = host(build({**NO_EXPORT, "candidates": PV_AT_A}), Options()).rows
    assert row.criterion == "head_export"
    assert row.hosting == 0.0
    assert row.proof is not Proof.FAILED


def test_a_plant_that_just_meets_the_only_load_is_proven():
    # 100 kW at the node itself, no export allowed: 100 kW of PV, and no current anywhere.
    tables = {**NO_EXPORT, "loads": [{"node": "A", "kw": 100}], "candidates": PV_AT_A}
    (row,) = host(build(tables), Options()).rows
    assert row.criterion == "head_export"
    assert row.rating == pytest.approx(0.1, rel=1e-6)
    assert row.proof is Proof.PROVEN


def test_a_limit_that_may_not_get_worse_at_all_hosts_nothing():
    # 600 kW at the end hold A below 0.95; with no worsening allowed nothing more fits.
    tables = workbook([("S", "B", 0.05, 0.05, 300), ("B", "A", 0.05, 0.05, 300)], 1.05, 0.95)
    tables["loads"] = [{"node": "A", "kw": 600}]
    tables["limits"].append({"limit": "worsen_voltage_pu", "value": 0})
    tables["cases"][0]["ev_scale"] = 1
    tables["candidates"] = [{"node": "A", "technology": "ev"}]
    (row,) = host(build(tables), Options()).rows
    assert row.state is State.HOSTED_BASE_VIOLATION
    assert row.hosting == 0.0
    assert row.proof is not Proof.FAILED
