"""The relaxation as a programme: its optimum, its change of variables, and no answer at all."""

from __future__ import annotations

from dataclasses import replace

import cvxpy as cp
import numpy as np
import pytest
from feederhost.flow.limits import System
from feederhost.proof.program import compile_programme, structure
from feederhost.proof.solver import SOLVERS, Status
from feederhost.proof.valuing import Relaxed, solve_row, voltage_bounds
from feederhost.schema import Proof
from feederhost.study import proving
from feederhost.study.nodal import host
from feederhost.study.options import Options

from engine import answer_rows, build
from published import published_feeder
from small_feeders import (
    SETTINGS,
    Posed,
    band,
    bank,
    head_export,
    high,
    limits,
    loading,
    low,
    network,
    plant,
    pose,
    rated_receiving,
    rated_sending,
    relax,
    system,
    two_bus,
    watched_export,
)

LOOSE = {"v_min_pu": 0.9, "voltage_change_mv_pct": 0, "search_cap_kw": 60000}


# --- 33 bus ----------------------------------------------------------------------------------

NODES = ("3", "6", "9", "12", "18", "19", "22", "25", "30", "33")


@pytest.mark.parametrize("solver", SOLVERS)
def test_priced_optimum_is_the_ac_first_violation_on_the_33_bus_feeder(solver: str):
    # Baran & Wu, IEEE Trans. Power Delivery 4(2), 1989, 1401-1407 (branch and load data).
    tables = published_feeder("feeder33", limits=LOOSE)
    rows = [{"node": n, "technology": "pv"} for n in NODES]
    feeder = build({**tables, "candidates": rows}, plain_sample=0)
    hosting = host(feeder, Options(solver=solver))
    for row in hosting.rows:
        assert row.evidence.relaxed.answer.solver == solver
        assert row.evidence.relaxed.answer.status is Status.CLEAN
        assert row.evidence.relaxed.g == pytest.approx(row.rating, rel=1e-6)
        assert abs(row.evidence.relaxed.loss_gap) < 1e-5 * row.rating


def test_both_solvers_agree_on_every_number():
    rows = answer_rows(published_feeder("feeder33", limits=LOOSE), [(n, "pv") for n in NODES])
    programme = compile_programme(rows[0].evidence.system)
    for row in rows:
        own = row.evidence
        w = own.certificate.prices[:, own.column]
        one, two = (
            solve_row(programme, own.system, own.flow, own.seek, own.column, w, row.rating,
                      2 * row.rating, solver, SETTINGS)
            for solver in SOLVERS
        )  # fmt: skip
        assert one.g == pytest.approx(two.g, rel=1e-6)
        for name, scale in (("P", row.rating), ("Q", row.rating), ("v", 1.0)):
            assert np.abs(getattr(one, name) - getattr(two, name)).max() < 1e-5 * scale, name


def test_compiled_once_and_revalued_for_every_row(monkeypatch: pytest.MonkeyPatch):
    calls = []

    def counted(*arguments, **options):
        calls.append(options)
        return compile_programme(*arguments, **options)

    monkeypatch.setattr(proving, "compile_programme", counted)
    tables = published_feeder("feeder33", limits=LOOSE)
    rows = [{"node": n, "technology": t} for n in NODES for t in ("pv", "ev")]
    tables["cases"] = [
        {"case": "sun", "load_scale": 0.4, "pv_scale": 1, "ev_scale": 0},
        {"case": "night", "load_scale": 0.6, "pv_scale": 0, "ev_scale": 1},
    ]
    hosting = host(build({**tables, "candidates": rows}, plain_sample=0), Options())
    assert [r.proof for r in hosting.rows] == [Proof.PROVEN] * 20
    assert {r.study.case.name for r in hosting.rows} == {"sun", "night"}
    # Export watches where the head turns, import does not: two structures, so two programmes.
    assert len(calls) <= 2
    assert all(not options.get("cuts") for options in calls)


def test_revaluing_needs_no_new_compilation():
    # Disciplined parametrised programming: all data are parameters, so cvxpy compiles once.
    posed = pose(two_bus(0.02, 0.06, [high(1, 1.05), bank(9.0), head_export(9.0)]), plant(1))
    for cuts in (False, True):
        programme = compile_programme(posed.system, cuts=cuts)
        assert set(programme.problems) == set(SOLVERS)
        assert all(p.is_dcp(dpp=True) for p in programme.problems.values())


def test_a_programme_keeps_nothing_of_the_row_before():
    rows = [high(1, 1.05), rated_sending(1, 9.0)]
    one = pose(two_bus(0.02, 0.06, rows), plant(1, cap=8.0))
    other = pose(two_bus(0.06, 0.02, rows, power=0.3 + 0.1j), plant(1, cap=8.0))
    assert structure(one.system) == structure(other.system)
    programme = compile_programme(one.system)

    def solve(posed: Posed) -> float:
        return solve_row(
            programme, posed.system, posed.flow, posed.seek, 0, posed.certificate.prices[:, 0],
            posed.rating, 8.0, "clarabel", SETTINGS,
        ).g  # fmt: skip

    first, second, again = solve(one), solve(other), solve(one)
    assert first == pytest.approx(4.0509618548, rel=1e-6)
    assert second == pytest.approx(other.rating, rel=1e-6)
    assert again == pytest.approx(first, rel=1e-10)


# --- the change of variables -----------------------------------------------------------------

NET = network(
    [-1, 0, 1, 1, 3, 0], [0.02 + 0.05j, 0.01 + 0.06j, 0.03 + 0.04j, 0.04 + 0.03j, 0.02 + 0.02j],
    sending={1: 0.06j, 2: 0.004 - 0.01j, 4: 0.05j}, receiving={1: 0.06j, 4: 0.05j},
)  # fmt: skip
LOAD = loading(
    6, {1: 0.3 + 0.1j, 2: 0.4 + 0.2j, 4: 0.2 - 0.1j, 5: 0.1}, shunt={2: 0.2j, 4: 0.1 - 0.05j},
    source=1.02,
)  # fmt: skip
SYSTEM = system(NET, LOAD, [*band(6, 0.9, 1.05), rated_sending(3, 2.5), rated_receiving(4, 2.5),
                            bank(4.0), head_export(3.0), watched_export()], 0.2 + 0.1j)  # fmt: skip


def test_the_origin_is_free():
    # The optimum does not depend on where the deviations start: at the answer, far below it, or
    # at no operating point at all (what its flows lack enters the equations as residuals).
    answer = pose(SYSTEM, plant(4, cap=20.0))
    w = answer.certificate.prices[:, 0]
    below = pose(SYSTEM, plant(4, cap=20.0), rating=0.3 * answer.rating, row=0)
    flow = answer.flow
    v = flow.v * 0.97
    v[0] = flow.v[0]
    at_source = np.flatnonzero(NET.tree.parent == 0)
    spoilt = replace(answer, flow=replace(
        flow, P=1.1 * flow.P, ell=0.9 * flow.ell, v=v, v_pi=v[NET.tree.parent],
        head=flow.head + 0.1 * flow.P[at_source].sum(axis=0),
    ))  # fmt: skip
    for posed in (answer, below, spoilt):
        for solver in SOLVERS:
            found = relax(posed, prices=w, solver=solver)
            assert found.g == pytest.approx(answer.rating, rel=1e-5)


def residuals(sys: System, posed: Posed, found: Relaxed) -> dict[str, float]:
    """Largest violation of each constraint of the paper form, per unit."""
    f, parent = posed.flow, sys.network.tree.parent
    r, x, G, B = f.r[:, 0], f.x[:, 0], f.G[:, 0], f.B[:, 0]
    p, q = f.p[:, 0].copy(), f.q[:, 0].copy()
    j, draw = posed.seek.node[0], posed.seek.draw[0]
    p[j] += draw.real * found.g
    q[j] += draw.imag * found.g
    below_p, below_q = np.zeros_like(p), np.zeros_like(q)
    np.add.at(below_p, parent[1:], found.P[1:])
    np.add.at(below_q, parent[1:], found.Q[1:])
    P, Q, ell, v, up = found.P, found.Q, found.ell, found.v, found.v[parent]
    return {
        "P": np.abs(r * ell + p + G * v + below_p - P)[1:].max(),
        "Q": np.abs(x * ell + q - B * v + below_q - Q)[1:].max(),
        "v": np.abs(up - 2 * (r * P + x * Q) + (r * r + x * x) * ell - v)[1:].max(),
        "cone": (P**2 + Q**2 - ell * up)[1:].max(),
        "high": (v - 1.05**2)[1:].max(),
        "low": (0.9**2 - v)[1:].max(),
    }


@pytest.mark.parametrize("solver", SOLVERS)
@pytest.mark.parametrize("priced", [True, False])
def test_the_solution_satisfies_the_programme_on_paper(solver: str, priced: bool):
    posed = pose(SYSTEM, plant(4, cap=20.0))
    found = relax(posed, solver=solver, prices=None if priced else np.zeros(6))
    assert found.v[0] == pytest.approx(1.02**2, abs=1e-12)
    assert found.P[0] == found.Q[0] == found.ell[0] == 0
    assert max(residuals(SYSTEM, posed, found).values()) < 1e-5
    if not priced:
        # It invents losses, and that is what it gains by.
        assert found.g > 1.2 * posed.rating
        assert found.loss_gap > 0.1


def test_the_cap_binds_where_no_limit_does():
    posed = pose(two_bus(0.02, 0.06, [high(1, 1.05)]), plant(1, cap=8.0))
    assert relax(posed, cap=2.5).g == pytest.approx(2.5, rel=1e-6)


# --- no answer -------------------------------------------------------------------------------


def assert_no_numbers(found: Relaxed) -> None:
    assert np.isnan(found.g)
    assert np.isnan(found.loss_gap)
    for name in ("P", "Q", "ell", "v", "cone"):
        assert np.isnan(getattr(found, name)).all(), name


@pytest.mark.parametrize("solver", SOLVERS)
def test_infeasible_is_nan_and_a_status(solver: str):
    # 1.2 pu at the node would take some 3 pu of PV; the cap is 0.1.
    posed = pose(two_bus(0.05, 0.05, [low(1, 1.2)]), plant(1), rating=0.1, row=0)
    found = relax(posed, cap=0.1, solver=solver, prices=np.zeros(2))
    assert found.answer.status is Status.INFEASIBLE
    assert_no_numbers(found)


@pytest.mark.parametrize("solver", SOLVERS)
def test_solver_failure_is_nan_and_a_status(solver: str, monkeypatch: pytest.MonkeyPatch):
    posed = pose(two_bus(0.05, 0.05, [high(1, 1.05)]), plant(1))

    def fail(self, *arguments, **options):
        raise cp.SolverError("no luck")

    monkeypatch.setattr(cp.Problem, "solve", fail)
    found = relax(posed, solver=solver)
    assert found.answer.status is Status.FAILED
    assert_no_numbers(found)


# --- structure -------------------------------------------------------------------------------


def test_structure_tells_which_systems_share_a_programme():
    base = two_bus(0.02, 0.06, [high(1, 1.05), watched_export()])
    key = structure(base)
    assert structure(two_bus(0.5, 0.1, [high(1, 1.2), watched_export()], power=1.0)) == key
    others = (
        two_bus(0.02, 0.06, [low(1, 1.05), watched_export()]),
        two_bus(0.02, 0.06, [high(1, 1.05)]),
        two_bus(0.02, 0.06, [high(1, 1.05), head_export(0.0)]),
        two_bus(0.02, 0.06, [high(0, 1.05), watched_export()]),
        system(network([-1, 0, 0], [0.1, 0.1]), loading(3), [high(1, 1.05), watched_export()]),
    )
    assert all(structure(other) != key for other in others)
    assert structure(base, cuts=True) != key


def test_voltage_bounds_take_the_tightest_and_skip_what_is_only_watched():
    rows = [high(1, 1.05), high(1, 1.03), low(1, 0.9), low(1, 0.95), (-1, 0, 2, True, 0.5)]
    v_min, v_max = voltage_bounds(limits(rows), 3)
    assert v_min == pytest.approx([0, 0.9025, 0])
    assert v_max[1] == pytest.approx(1.0609)
    assert v_max[2] > 1.3**2  # a bound that never binds
