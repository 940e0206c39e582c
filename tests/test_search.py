"""First violation of each criterion as a rating grows from zero.

Two bus throughout, branch r + jx, source at 1 pu, plant p at unity power factor; w = V^2 of the
limit, ell = |I|^2, P_0 + jQ_0 what leaves the source.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from feederhost.flow.search import (
    NO_SOLUTION,
    WATCHED,
    Plants,
    blocks,
    drawn_power,
    first_violations,
    slacks_with,
)
from feederhost.schema import LIMIT_CRITERIA, Criterion
from feederhost.settings import Settings
from hypothesis import given, settings
from hypothesis import strategies as st

from small_feeders import (
    SETTINGS,
    band,
    bank,
    first,
    head_export,
    head_import,
    high,
    loading,
    low,
    network,
    plant,
    plants,
    rated_receiving,
    rated_sending,
    system,
    two_bus,
    watched_export,
)


def upper_limit(r: float, x: float, w: float) -> float:
    """PV at which v reaches w > 1: w [ r - sqrt(r^2 - |z|^2 (1 - 1/w)) ] / |z|^2."""
    z2 = r * r + x * x
    return w * (r - math.sqrt(r * r - z2 * (1 - 1 / w))) / z2


# --- voltage high ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("r", "x", "cap", "expected"),
    # Lower root of v = V^2, V = 1.05, from v^2 - (1 + 2 r p) v + |z|^2 p^2 = 0; computed for
    # this project, not published.
    [
        (0.05, 0.05, 60.0, 1.0776699562),
        (0.06, 0.02, 60.0, 0.8774443248),
        (0.02, 0.06, 8.0, 4.0509618548),
    ],
)
def test_voltage_high_two_bus(r: float, x: float, cap: float, expected: float):
    found = first(two_bus(r, x, [high(1, 1.05)]), plant(1, cap=cap))
    assert found.criterion == "voltage_high"
    assert found.rating == pytest.approx(expected, rel=1e-8)
    assert expected == pytest.approx(upper_limit(r, x, 1.05**2), abs=1e-9)


def test_an_excursion_is_not_stepped_over_although_the_limits_are_kept_again():
    # v falls back to 1.1025 at 6.9740381452: at 7 to 8 pu every limit is kept again.
    sys, one = two_bus(0.02, 0.06, [high(1, 1.05)]), plant(1, cap=8.0)
    for g, kept in ((4.05, True), (4.06, False), (6.97, False), (6.98, True), (8.0, True)):
        slack, _ = slacks_with(sys, one, np.array([g]), SETTINGS)
        assert (slack[0, 0] >= 0) == kept
    assert first(sys, one).rating == pytest.approx(4.0509618548, rel=1e-8)


@pytest.mark.parametrize("delta", [1e-6, 1e-8, 1e-10])
@pytest.mark.parametrize("cap", [8.0, 11.0, 60.0])
def test_an_excursion_narrower_than_a_step_is_found(delta: float, cap: float):
    # v is largest, w_top = 1 / (1 - r^2 / |z|^2) = 1 / 0.9, at p = w_top r / |z|^2 = 5.5556.
    # With the limit a share delta below, it is broken over 2 w sqrt(0.0036 delta) / |z|^2:
    # for 1e-10 that is 3.3e-4, where the shortest step is 1e-4 and the longest 0.05 of the cap.
    w = (1 - delta) / 0.9
    expected = upper_limit(0.02, 0.06, w)
    found = first(two_bus(0.02, 0.06, [high(1, math.sqrt(w))]), plant(1, cap=cap))
    assert found.criterion == "voltage_high"
    assert found.rating == pytest.approx(expected, rel=1e-6)
    assert found.rating < 5.5556


def test_a_limit_just_above_the_largest_voltage_is_never_met():
    w = (1 + 1e-8) / 0.9
    found = first(two_bus(0.02, 0.06, [high(1, math.sqrt(w))]), plant(1, cap=8.0))
    assert found.criterion == "none"
    assert np.isinf(found.by_group).all()


# --- the other criteria ----------------------------------------------------------------------


def test_voltage_low_two_bus():
    # Import: |z|^2 p^2 + 2 r w p - w (1 - w) = 0, so with w = 0.95^2
    # p = w [ sqrt(r^2 + |z|^2 (1/w - 1)) - r ] / |z|^2.
    r, x, w = 0.02, 0.06, 0.95**2
    z2 = r * r + x * x
    expected = w * (math.sqrt(r * r + z2 * (1 / w - 1)) - r) / z2
    assert expected == pytest.approx(1.9960400629, abs=1e-9)
    found = first(two_bus(r, x, [low(1, 0.95)]), plant(1, sigma=-1))
    assert found.criterion == "voltage_low"
    assert found.rating == pytest.approx(expected, rel=1e-8)


@pytest.mark.parametrize(("sigma", "expected"), [(1, 1.4491131963), (-1, 1.3691131963)])
@pytest.mark.parametrize("end", [rated_sending, rated_receiving])
def test_rating_two_bus(sigma: int, expected: float, end):
    # ell = L = 2: P_0^2 + Q_0^2 = L with Q_0 = x L, and p = sigma r L + sqrt(L - x^2 L^2):
    # 0.04 + sqrt(2 - 0.0144) out, the same root less 0.04 in.
    found = first(two_bus(0.02, 0.06, [end(1, math.sqrt(2))]), plant(1, sigma=sigma))
    assert found.criterion == "line_rating"
    assert found.rating == pytest.approx(expected, rel=1e-8)


def test_rating_of_a_line_that_first_unloads_and_then_turns():
    # 1 pu of load at the node: the current falls to zero at p = 1 and meets L at 1 + 1.4491.
    sys = two_bus(0.02, 0.06, [rated_sending(1, math.sqrt(2))], power=1.0)
    assert first(sys, plant(1)).rating == pytest.approx(2.4491131963, rel=1e-8)


def head_current(x: float, p: float) -> float:
    """Return ell where the active power at the source is p: ell = p^2 + x^2 ell^2."""
    return (1 - math.sqrt(1 - 4 * x * x * p * p)) / (2 * x * x)


def test_head_export_and_import_two_bus():
    # P_0 = -1.5: the plant gives that and the loss r ell; P_0 = +1.5: what is left of it.
    r, x = 0.02, 0.06
    ell = head_current(x, 1.5)
    found = first(two_bus(r, x, [head_export(1.5)]), plant(1))
    assert found.criterion == "head_export"
    assert found.rating == pytest.approx(1.5 + r * ell, rel=1e-8)
    found = first(two_bus(r, x, [head_import(1.5)]), plant(1, sigma=-1))
    assert found.criterion == "head_import"
    assert found.rating == pytest.approx(1.5 - r * ell, rel=1e-8)


def test_bank_two_bus():
    # abs(S_0) = B, so ell = B^2: with B = 1.3 as the rating above with L = 1.69.
    L = 1.69
    expected = 0.02 * L + math.sqrt(L - 0.06**2 * L * L)
    found = first(two_bus(0.02, 0.06, [bank(1.3)]), plant(1))
    assert found.criterion == "bank_rating"
    assert found.rating == pytest.approx(expected, rel=1e-8)


def test_bank_with_other_feeders_on_it():
    # a = 0.6 from the bank to others: (P_0 + a)^2 + Q_0^2 = B^2 and P_0^2 + Q_0^2 = ell give
    # P_0 = (K - ell) / (2 a), K = B^2 - a^2, and with Q_0 = x ell
    # (1/(4 a^2) + x^2) ell^2 - (K/(2 a^2) + 1) ell + K^2/(4 a^2) = 0.
    r, x, a, B = 0.02, 0.06, 0.6, 1.3
    K = B * B - a * a
    c2, c1, c0 = 1 / (4 * a * a) + x * x, -(K / (2 * a * a) + 1), K * K / (4 * a * a)
    root = math.sqrt(c1 * c1 - 4 * c2 * c0)
    net = network([-1, 0], [complex(r, x)])
    sys = system(net, loading(2), [bank(B)], bank_other=a)
    # Export: the larger root, P_0 = -(B + a) or so; import: the smaller one.
    ell = (-c1 + root) / (2 * c2)
    p_0 = (K - ell) / (2 * a)
    assert first(sys, plant(1)).rating == pytest.approx(-p_0 + r * ell, rel=1e-8)
    ell = (-c1 - root) / (2 * c2)
    p_0 = (K - ell) / (2 * a)
    assert first(sys, plant(1, sigma=-1)).rating == pytest.approx(p_0 - r * ell, rel=1e-8)


def test_every_criterion_gets_its_own_first_violation():
    rows = [high(1, 1.05), rated_sending(1, math.sqrt(2)), head_export(1.5)]
    found = first(two_bus(0.02, 0.06, rows), plant(1, cap=8.0))
    assert found.criterion == "line_rating"
    assert found.row == 1
    code = LIMIT_CRITERIA.index
    by = found.by_group
    assert by[code(Criterion.VOLTAGE_HIGH)] == pytest.approx(4.0509618548, rel=1e-8)
    assert by[code(Criterion.LINE_RATING)] == pytest.approx(1.4491131963, rel=1e-8)
    head = 1.5 + 0.02 * head_current(0.06, 1.5)
    assert by[code(Criterion.HEAD_EXPORT)] == pytest.approx(head, rel=1e-8)
    assert np.isinf(by[[code(Criterion.VOLTAGE_LOW), WATCHED, NO_SOLUTION]]).all()


def test_the_reported_row_is_the_one_that_is_violated():
    # Three nodes in line, PV at the end: its own voltage is highest; with a tighter limit in
    # the middle that one counts.
    net = network([-1, 0, 1], [0.02 + 0.02j, 0.03 + 0.03j])
    sys = system(net, loading(3), [high(1, 1.05), high(2, 1.05)])
    assert first(sys, plant(2)).row == 1
    sys = system(net, loading(3), [high(1, 1.01), high(2, 1.05)])
    assert first(sys, plant(2)).row == 0


# --- no solution, cap, watched, broken at once -----------------------------------------------


def test_the_loss_of_the_solution_counts_as_a_violation():
    # Import up to p = 1 / (2 (r + |z|)), where v = 1/2 - r p = 0.293 is far above the limit.
    # The sweep gives up a little before.
    nose = 1 / (2 * (0.05 + math.hypot(0.05, 0.05)))
    found = first(two_bus(0.05, 0.05, [low(1, 0.3)]), plant(1, sigma=-1))
    assert found.criterion == "no_solution"
    assert 0.999 * nose < found.rating < nose
    assert found.row == -1


def test_a_limit_before_the_nose_is_still_exact():
    # With w = 0.7^2: the closed form of voltage_low above.
    r, w = 0.05, 0.7**2
    expected = w * (math.sqrt(r * r + 2 * r * r * (1 / w - 1)) - r) / (2 * r * r)
    found = first(two_bus(r, r, [low(1, 0.7)]), plant(1, sigma=-1))
    assert found.criterion == "voltage_low"
    assert found.rating == pytest.approx(expected, rel=1e-8)


def test_no_solution_with_nothing_added_is_rating_zero():
    found = first(two_bus(0.05, 0.05, [low(1, 0.5)], power=9.0), plant(1, sigma=-1))
    assert found.by_group[NO_SOLUTION] == 0.0
    assert found.rating == 0.0


@pytest.mark.parametrize(("cap", "met"), [(4.0509, False), (4.0511, True)])
def test_nothing_is_found_beyond_the_cap(cap: float, met: bool):
    found = first(two_bus(0.02, 0.06, [high(1, 1.05)]), plant(1, cap=cap))
    assert np.isfinite(found.rating) == met


def test_a_limit_broken_at_zero_hosts_nothing():
    # Of two nodes only the far one is below its limit: that one is named.
    net = network([-1, 0, 1], [0.05 + 0.05j] * 2)
    sys = system(net, loading(3, {2: 0.6}), [high(1, 1.05), low(1, 0.95), low(2, 0.95)])
    found = first(sys, plant(2, sigma=-1))
    assert found.criterion == "voltage_low"
    assert found.rating == 0.0
    assert found.row == 2


def test_watched_rows_are_found_but_limit_nothing():
    # 1 pu of load at the node: the head first exports at 1 pu of PV.
    rows = [watched_export(), high(1, 1.05)]
    found = first(two_bus(0.02, 0.06, rows, power=1.0), plant(1))
    assert found.by_group[WATCHED] == pytest.approx(1.0, rel=1e-8)
    assert found.criterion == "voltage_high"
    assert found.rating == pytest.approx(5.0509618548, rel=1e-8)


def test_a_watched_row_may_start_beyond_its_bound():
    # Generation there already exports: watched from rating zero, and nothing else changes.
    rows = [watched_export(), high(1, 1.05)]
    found = first(two_bus(0.02, 0.06, rows, power=-0.5), plant(1))
    assert found.by_group[WATCHED] == 0.0
    assert found.rating == pytest.approx(3.5509618548, rel=1e-8)


# --- many plants -----------------------------------------------------------------------------

FORK = network(
    [-1, 0, 1, 1, 3, 0], [0.02 + 0.03j, 0.03 + 0.05j, 0.04 + 0.02j, 0.01 + 0.04j, 0.05 + 0.05j]
)
FORK_ROWS = [*band(6, 0.95, 1.05), *(rated_sending(k, 1.2) for k in range(1, 6)), watched_export()]
FORK_SYSTEM = system(FORK, loading(6, {2: 0.2 + 0.1j, 4: 0.2, 5: 0.1}), FORK_ROWS)


def test_blocks_cover_every_column_once():
    cut = list(blocks(7, 3, Settings(column_budget=6)))
    assert [c.tolist() for c in cut] == [[0, 1], [2, 3], [4, 5], [6]]
    assert [c.tolist() for c in blocks(2, 9, Settings(column_budget=1))] == [[0], [1]]
    assert list(blocks(0, 3, SETTINGS)) == []


def test_cutting_into_blocks_changes_no_number():
    many = plants([1, 2, 3, 4, 5], cap=20.0)
    whole = first_violations(FORK_SYSTEM, many, SETTINGS)
    pieces = first_violations(FORK_SYSTEM, many, Settings(column_budget=12))
    assert np.array_equal(whole.rating, pieces.rating)
    assert np.array_equal(whole.row, pieces.row)
    for i in range(5):
        alone = first_violations(FORK_SYSTEM, many.pick(np.array([i])), SETTINGS)
        assert np.array_equal(whole.rating[:, i], alone.rating[:, 0])


def test_looking_for_the_first_violation_only_finds_the_same_one():
    many = plants([1, 2, 3, 4, 5], cap=20.0)
    whole = first_violations(FORK_SYSTEM, many, SETTINGS)
    short = first_violations(FORK_SYSTEM, many, SETTINGS, first_only=True)
    real = [g for g in range(len(whole.rating)) if g != WATCHED]
    at = whole.rating[real].argmin(axis=0)
    assert np.array_equal(short.rating[real].argmin(axis=0), at)
    assert short.rating[real].min(axis=0) == pytest.approx(whole.rating[real].min(axis=0), rel=1e-9)
    # What is met later is left open, or is what the whole search finds.
    met = np.isfinite(short.rating)
    assert np.allclose(short.rating[met], whole.rating[met], rtol=1e-9, atol=0)
    assert met.sum() < np.isfinite(whole.rating).sum()


def test_the_order_of_plants_permutes_the_answers():
    order = np.array([3, 0, 4, 1, 2])
    many = plants([1, 2, 3, 4, 5], t=-0.3, cap=20.0)
    whole = first_violations(FORK_SYSTEM, many, SETTINGS)
    turned = first_violations(FORK_SYSTEM, many.pick(order), SETTINGS)
    assert np.array_equal(whole.rating[:, order], turned.rating)


def test_plants_draw_at_their_own_node():
    pair = Plants(np.array([2, 4]), np.array([[-1.0 + 0j], [1 + 0.5j]]), np.ones(2))
    power = drawn_power(FORK_SYSTEM, pair, np.array([3.0, 2.0]))
    assert power[:, 0, 0].tolist() == [0, 0, 0.2 + 0.1j - 3, 0, 0.2, 0.1]
    assert power[:, 0, 1].tolist() == [0, 0, 0.2 + 0.1j, 0, 0.2 + 2 + 1j, 0.1]


def test_without_solution_every_slack_is_minus_infinity():
    slack, point = slacks_with(FORK_SYSTEM, plant(4, sigma=-1), np.array([50.0]), SETTINGS)
    assert not point.solved[0]
    assert (slack == -np.inf).all()


@st.composite
def cases(draw: st.DrawFn):
    n = draw(st.integers(3, 9))
    unit = st.integers(0, 100).map(lambda share: share / 100)
    parent = [-1, *(draw(st.integers(max(0, k - 3), k - 1)) for k in range(1, n))]
    z = [complex(0.005 + 0.03 * draw(unit), 0.005 + 0.08 * draw(unit)) for _ in parent[1:]]
    load = {k: complex(0.1 * draw(unit), 0.05 * draw(unit)) for k in range(1, n)}
    rows = [*band(n, 0.9, 1.05), *(rated_sending(k, 0.4 + 2 * draw(unit)) for k in range(1, n))]
    sys = system(network(parent, z), loading(n, load), rows)
    one = plant(
        draw(st.integers(1, n - 1)), sigma=draw(st.sampled_from([1, -1])),
        t=draw(st.sampled_from([0.0, -0.33, 0.33])), cap=20.0,
    )  # fmt: skip
    return sys, one


@settings(max_examples=40, deadline=None)
@given(cases())
def test_kept_everywhere_below_and_broken_just_above(case):
    sys, one = case
    kept, _ = slacks_with(sys, one, np.zeros(1), SETTINGS)
    found = first(sys, one)
    if kept.min() < 0:
        assert found.rating == 0.0
        return
    assert 0 < found.rating < 20
    grid = np.linspace(0, found.rating, 200)
    many = one.pick(np.zeros(200, int))
    slack, _ = slacks_with(sys, many, grid, SETTINGS)
    assert slack.min() >= -1e-12
    above, _ = slacks_with(sys, one, np.array([found.rating * (1 + 1e-8)]), SETTINGS)
    assert above.min() < 0
    # Just above, it is the named row that is broken.
    assert found.row == -1 or above[found.row, 0] < 0
