"""The bound for rows whose proof does not close: valid, and far better than the plain one."""

from __future__ import annotations

import numpy as np
import pytest
from feederhost.flow.limits import System
from feederhost.flow.search import slacks_with
from feederhost.proof import bounds
from feederhost.proof.bounds import flow_ranges, upper_bound
from feederhost.proof.branchflow import branch_flow
from feederhost.proof.program import compile_programme
from feederhost.proof.solver import SOLVERS, Answer, Status
from feederhost.proof.valuing import solve_row

from engine import answer_rows
from published import published_feeder
from small_feeders import (
    SETTINGS,
    Posed,
    band,
    bank,
    first,
    head_export,
    high,
    loading,
    network,
    plant,
    pose,
    rated_receiving,
    rated_sending,
    relax,
    system,
    two_bus,
)

LOOSE = {"v_min_pu": 0.9, "voltage_change_mv_pct": 0, "search_cap_kw": 60000}


def bound(posed: Posed, cap: float, solver: str = "clarabel") -> float:
    programme = compile_programme(posed.system, cuts=True)
    return upper_bound(
        programme, posed.system, posed.flow, posed.seek, 0, posed.rating, cap, solver, SETTINGS
    )


# --- 33 bus ----------------------------------------------------------------------------------


@pytest.mark.parametrize("solver", SOLVERS)
def test_above_the_ac_value_and_far_below_the_plain_one_on_the_33_bus_feeder(solver: str):
    # Data: Baran & Wu, IEEE Trans. Power Delivery 4(2), 1989.  The plain values (V0 = 1, full
    # load, v_min 0.9, no rating, MW) are computed for this project, not published.
    plain_values = {"9": 20.0, "18": 13.63, "33": 19.05}  # node 9: the cap, 44.84 without one
    tables = published_feeder("feeder33", limits=LOOSE)
    rows = answer_rows(tables, [(n, "pv") for n in plain_values])
    cut = compile_programme(rows[0].evidence.system, cuts=True)
    whole = compile_programme(rows[0].evidence.system)
    for row, plain_value in zip(rows, plain_values.values(), strict=True):
        own = row.evidence
        given = (own.system, own.flow, own.seek, own.column)
        plain = solve_row(whole, *given, np.zeros(33), row.rating, 20.0, solver, SETTINGS).g
        upper = upper_bound(cut, *given, row.rating, 20.0, solver, SETTINGS)
        assert plain == pytest.approx(plain_value, rel=1e-3)
        assert row.rating < upper < plain
        assert upper < 1.005 * row.rating


def bound_at_the_end_of_the_33_bus_feeder(cap: float) -> tuple[float, float]:
    (row,) = answer_rows(published_feeder("feeder33", limits=LOOSE), [("18", "pv")])
    own = row.evidence
    programme = compile_programme(own.system, cuts=True)
    given = (own.system, own.flow, own.seek, own.column)
    return row.rating, upper_bound(programme, *given, row.rating, cap, "ecos", SETTINGS)


@pytest.mark.parametrize("cap", [37.15, 60.0])
def test_ranges_that_grow_beyond_use_leave_a_valid_bound(cap: float):
    # The default cap is ten times the peak load, 37.15 MW, eighteen times the hosting.
    rating, upper = bound_at_the_end_of_the_33_bus_feeder(cap)
    assert rating < upper <= cap


def test_the_bound_is_close_at_the_default_cap_too():
    rating, upper = bound_at_the_end_of_the_33_bus_feeder(37.15)
    assert upper < 1.01 * rating


# --- small feeders ---------------------------------------------------------------------------

NET = network(
    [-1, 0, 1, 1, 3, 0], [0.02 + 0.05j, 0.01 + 0.06j, 0.03 + 0.04j, 0.04 + 0.03j, 0.02 + 0.02j],
    sending={1: 0.06j, 2: 0.004 - 0.01j, 4: 0.05j}, receiving={1: 0.06j, 4: 0.05j},
)  # fmt: skip
LOAD = loading(
    6, {1: 0.3 + 0.1j, 2: 0.4 + 0.2j, 4: 0.2 - 0.1j, 5: 0.1}, shunt={2: 0.2j, 4: 0.1 - 0.05j},
    source=1.02,
)  # fmt: skip
SYSTEMS: dict[str, System] = {
    "voltage": system(NET, LOAD, band(6, 0.9, 1.05)),
    "rating": system(NET, LOAD, [*band(6, 0.8, 1.2), rated_sending(3, 1.2), rated_receiving(1, 2)]),
    "head": system(NET, LOAD, [*band(6, 0.8, 1.2), head_export(0.6)]),
    "bank": system(NET, LOAD, [*band(6, 0.8, 1.2), bank(1.6)], 0.2 + 0.1j),
    "switch": system(
        network([-1, 0, 1, 2, 3], [0.03 + 0.05j, 0, 0.02 + 0.05j, 0]),
        loading(5, {2: 0.1, 4: 0.3 + 0.1j}), [*band(5, 0.9, 1.05), rated_sending(2, 2.0)],
    ),
}  # fmt: skip
PLANTS = [(4, 1, 0.0), (4, 1, -0.3), (2, 1, 0.3), (4, -1, 0.2)]


def feasible(sys: System, one, ratings: np.ndarray) -> np.ndarray:
    """Ratings that have an AC point within all limits."""
    slack, point = slacks_with(sys, one.pick(np.zeros(ratings.size, int)), ratings, SETTINGS)
    return ratings[(slack.min(axis=0) >= 0) & point.solved]


@pytest.mark.parametrize("name", SYSTEMS)
@pytest.mark.parametrize(("node", "sigma", "t"), PLANTS)
def test_no_feasible_rating_of_a_dense_grid_exceeds_it(name: str, node: int, sigma: int, t: float):
    sys, one = SYSTEMS[name], plant(node, sigma=sigma, t=t, cap=6.0)
    found = first(sys, one)
    if not np.isfinite(found.rating):
        pytest.skip("nothing is met up to the cap")
    upper = bound(pose(sys, one), 6.0)
    kept = feasible(sys, one, np.linspace(0, 6.0, 3001))
    assert upper >= max(kept.max(), found.rating)
    assert upper <= 6.0


def test_a_feasible_rating_beyond_the_first_violation_is_below_the_bound():
    # r = 0.02, x = 0.06: the limits are kept again from 6.974 on, to the cap.
    posed = pose(two_bus(0.02, 0.06, [high(1, 1.05)]), plant(1, cap=8.0))
    assert posed.rating == pytest.approx(4.0509618548, rel=1e-8)
    assert bound(posed, 8.0) == pytest.approx(8.0, rel=1e-6)
    kept = feasible(posed.system, posed.plant, np.linspace(6.98, 8.0, 20))
    assert kept.size == 20


def test_it_is_better_than_the_plain_relaxation():
    # Three bus: z1 = .02+.02j, z2 = .05+.05j, ell_1 <= 1, ell_2 <= 9, V <= 1.2: AC 1.0675470,
    # plain 1.3526664; computed for this project, not published.
    net = network([-1, 0, 1], [0.02 + 0.02j, 0.05 + 0.05j])
    sys = system(net, loading(3), [*band(3, 0.8, 1.2), rated_sending(1, 1.0), rated_sending(2, 3)])
    posed = pose(sys, plant(2, cap=8.0))
    assert posed.rating == pytest.approx(1.0675470, abs=1e-7)
    assert relax(posed, prices=np.zeros(3)).g == pytest.approx(1.3526664, abs=1e-5)
    assert posed.rating < bound(posed, 8.0) < 1.075


# --- ranges ----------------------------------------------------------------------------------


@pytest.mark.parametrize("name", SYSTEMS)
@pytest.mark.parametrize(("node", "sigma", "t"), PLANTS)
def test_ranges_contain_every_ac_point_of_the_interval(name: str, node: int, sigma: int, t: float):
    sys, one = SYSTEMS[name], plant(node, sigma=sigma, t=t, cap=6.0)
    posed = pose(sys, one, rating=0.2, row=0)
    rng = np.random.default_rng(3)
    seen = 0
    for _ in range(8):
        low, high_end = np.sort(rng.uniform(0, 2.5, 2))
        ranges = flow_ranges(sys, posed.flow, posed.seek, 0, low, high_end, SETTINGS)
        for g in feasible(sys, one, rng.uniform(low, high_end, 30)):
            _, point = slacks_with(sys, one, np.array([g]), SETTINGS)
            flow = branch_flow(sys, one, point)
            for what, where in (("P", "P"), ("Q", "Q"), ("ell", "ell"), ("v_pi", "v")):
                value = getattr(flow, what)[1:, 0]
                ends = getattr(ranges, where)[1:]
                assert (ends[:, 0] - 1e-9 <= value).all(), what
                assert (value <= ends[:, 1] + 1e-9).all(), what
            seen += 1
    assert seen > 0


def test_ranges_by_hand_two_bus():
    # Load 0.1, PV 1 to 2, V 0.9 to 1.1: what arrives is -1.9 to -0.9, so ell from
    # 0.81/1.21 to 3.61/0.81, and P = arriving + r ell at both ends.
    sys = two_bus(0.02, 0.06, band(2, 0.9, 1.1), power=0.1)
    posed = pose(sys, plant(1), rating=1.0, row=0)
    ranges = flow_ranges(sys, posed.flow, posed.seek, 0, 1.0, 2.0, SETTINGS)
    assert ranges.ell[1] == pytest.approx([0.81 / 1.21, 3.61 / 0.81], rel=1e-12)
    assert ranges.P[1] == pytest.approx([-1.9 + 0.02 * 0.81 / 1.21, -0.9 + 0.02 * 3.61 / 0.81])
    assert ranges.Q[1] == pytest.approx([0.06 * 0.81 / 1.21, 0.06 * 3.61 / 0.81])
    assert ranges.v[1] == pytest.approx([1.0, 1.0])
    # Where the arriving power may be zero, so may ell.
    around = flow_ranges(sys, posed.flow, posed.seek, 0, 0.0, 1.0, SETTINGS)
    assert around.ell[1, 0] == 0.0


@pytest.mark.parametrize("end", [rated_sending, rated_receiving])
def test_a_rating_narrows_the_range_of_its_current(end):
    sys = two_bus(0.02, 0.06, [*band(2, 0.9, 1.1), end(1, 1.2)], power=0.1)
    posed = pose(sys, plant(1), rating=1.0, row=0)
    ranges = flow_ranges(sys, posed.flow, posed.seek, 0, 1.0, 2.0, SETTINGS)
    # Without a shunt both terminals carry the one series current.
    assert ranges.ell[1, 1] == pytest.approx(1.44)


# --- what a solver's word is worth -------------------------------------------------------------


def answering(monkeypatch: pytest.MonkeyPatch, status: Status, g: float) -> None:
    """Let the cut relaxation answer with a status and a rating."""
    sound = bounds.solve_row

    def spoilt(*arguments, **options):
        found = sound(*arguments, **options)
        return type(found)(g, found.P, found.Q, found.ell, found.v, found.cone, found.loss_gap,
                           Answer("clarabel", status, 1))  # fmt: skip

    monkeypatch.setattr(bounds, "solve_row", spoilt)


def test_a_failing_solver_leaves_the_cap(monkeypatch: pytest.MonkeyPatch):
    posed = pose(two_bus(0.02, 0.06, [high(1, 1.05)]), plant(1, cap=6.0))
    answering(monkeypatch, Status.FAILED, float("nan"))
    assert bound(posed, 6.0) == 6.0


def test_an_inaccurate_answer_is_no_bound(monkeypatch: pytest.MonkeyPatch):
    # Its objective may be short of the optimum by any amount.
    posed = pose(two_bus(0.02, 0.06, [high(1, 1.05)]), plant(1, cap=6.0))
    answering(monkeypatch, Status.INACCURATE, 5.5)
    assert bound(posed, 6.0) == 6.0
