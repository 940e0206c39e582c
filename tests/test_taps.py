"""Regulators: taps found step by step, held ratios at the band edge, range and fixed taps.

All with 32 steps over 10 %, so that one step is 0.1 / 16 = 0.00625, and a bandwidth of
0.0167 pu, so that half of it is 0.00835.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from feederhost.errors import NoSolutionError
from feederhost.flow.taps import Regulator, find_taps, hold_at_edge, solve_at
from feederhost.settings import Settings

from small_feeders import SETTINGS, judge, loading, network

# A regulator without impedance at the source, then a line: V_1 is the ratio itself.
AT_SOURCE = network([-1, 0, 1], [0.0, 0.02 + 0.04j])
NO_LOAD = loading(3)
NEUTRAL = np.ones((3, 1))


def regulator(
    node: int, setpoint: float, *, bandwidth: float = 0.0167, fixed: float = math.nan
) -> Regulator:
    return Regulator(node, setpoint, bandwidth, 0.1, 32.0, fixed)


def voltage(solved, node: int) -> float:
    return float(abs(solved.point.V[node, 0, 0]) * solved.network.gain[node, 0])


@pytest.mark.parametrize(
    ("setpoint", "tap"),
    [
        (1.0, 0),  # neutral is within the band
        (1.008, 0),  # and still is: 0.008 < 0.00835
        (1.009, 1),  # 1 + 0.00625 >= 1.00065
        (1.03, 4),  # 1.02165 asks for 3.46 steps
        (0.97, -4),  # 0.97835 asks for -3.46 steps
        (1.05, 7),  # 1.04165 asks for 6.66
    ],
)
def test_tap_is_the_first_inside_the_band(setpoint: float, tap: int):
    found = find_taps(AT_SOURCE, NO_LOAD, NEUTRAL, (regulator(1, setpoint),), SETTINGS)
    assert found.taps == (tap,)
    assert voltage(found, 1) == pytest.approx(1 + 0.00625 * tap, abs=1e-12)
    assert voltage(found, 2) == pytest.approx(1 + 0.00625 * tap, abs=1e-12)


def test_tap_behind_a_loaded_line():
    # Constant power: V_1 = 0.970799 whatever the tap (two-bus closed form, z = .02+.04j,
    # s = .8+.3j: b = 0.944, v = (b + sqrt(b^2 - 4 * .002 * .73)) / 2 = 0.942451).  Into the
    # band from below 0.99165: (0.99165 / 0.970799 - 1) / 0.00625 = 3.44, so four steps.
    net = network([-1, 0, 1], [0.02 + 0.04j, 0.0])
    found = find_taps(net, loading(3, {2: 0.8 + 0.3j}), NEUTRAL, (regulator(2, 1.0),), SETTINGS)
    assert found.taps == (4.0,)
    assert voltage(found, 2) == pytest.approx(0.970799 * 1.025, abs=1e-6)


def test_the_end_of_the_range_stops_the_tap():
    for setpoint, tap in ((1.2, 16), (0.8, -16)):
        found = find_taps(AT_SOURCE, NO_LOAD, NEUTRAL, (regulator(1, setpoint),), SETTINGS)
        assert found.taps == (tap,)
        assert voltage(found, 1) == pytest.approx(1 + math.copysign(0.1, tap), abs=1e-12)


def test_a_regulator_that_would_hunt_stops():
    # Step 0.00625, band 1.007 to 1.011: 1.00625 is 0.00275 below the setpoint and 1.0125 is
    # 0.0035 above it: no closer, so the second step is not taken, however many passes there are.
    hunting = (regulator(1, 1.009, bandwidth=0.004),)
    for passes in (1, 2, 3, 50):
        found = find_taps(AT_SOURCE, NO_LOAD, NEUTRAL, hunting, Settings(tap_passes=passes))
        assert found.taps == (1.0,)


def test_a_regulator_that_would_hunt_ends_one_step_from_its_setpoint():
    hunting = (regulator(1, 1.009, bandwidth=0.004),)
    found = find_taps(AT_SOURCE, NO_LOAD, NEUTRAL, hunting, SETTINGS)
    assert abs(voltage(found, 1) - 1.009) < 0.00625


def test_regulators_in_series_from_the_source_outwards():
    # 1.03: four steps (1.025).  Then 1.06 - 0.00835 = 1.05165 asks for 1.026 of 1.025: 4.16,
    # so five steps: 1.025 * 1.03125 = 1.05703.
    net = network([-1, 0, 1, 2], [0.0, 0.02 + 0.04j, 0.0])
    pair = (regulator(1, 1.03), regulator(3, 1.06))
    found = find_taps(net, loading(4), np.ones((4, 1)), pair, SETTINGS)
    assert found.taps == (4.0, 5.0)
    assert voltage(found, 3) == pytest.approx(1.05703125, abs=1e-12)


def test_passes_repeat_because_a_downstream_tap_moves_the_voltage_upstream():
    # A constant-impedance load draws more once the second regulator has raised it: the first
    # must step again.  Band kept in the end by both, seen by the nodal judge.
    net = network([-1, 0, 1, 2, 3], [0.01 + 0.02j, 0.02 + 0.06j, 0.02 + 0.03j, 0.01 + 0.02j])
    load = loading(5, {2: 0.1 + 0.05j}, shunt={4: 0.7 - 0.3j}, source=1.0)
    pair = (regulator(2, 1.01), regulator(4, 1.03))
    found = find_taps(net, load, np.ones((5, 1)), pair, SETTINGS)
    once = find_taps(net, load, np.ones((5, 1)), pair, Settings(tap_passes=1))
    assert once.taps != found.taps
    V = np.abs(judge(net, load, found.ratio)[:, 0])
    assert abs(V[2] - 1.01) <= 0.00835
    assert abs(V[4] - 1.03) <= 0.00835
    assert voltage(found, 4) == pytest.approx(V[4], abs=1e-11)


def test_a_given_tap_is_neither_found_nor_shifted():
    given = (regulator(1, 1.0, fixed=-5.0),)
    found = find_taps(AT_SOURCE, NO_LOAD, NEUTRAL, given, SETTINGS)
    assert found.taps == (-5.0,)
    assert voltage(found, 1) == pytest.approx(1 - 5 * 0.00625, abs=1e-12)
    held = hold_at_edge(AT_SOURCE, NO_LOAD, found, given, 1.0, SETTINGS)
    assert np.array_equal(held.ratio, found.ratio)


def test_steps_and_range_make_the_ratio():
    # 10 % over 32 steps, and 5 % over 10 steps (1 % a step).
    assert regulator(1, 1.0).ratio(16) == pytest.approx(1.1)
    assert regulator(1, 1.0).ratio(-1) == pytest.approx(0.99375)
    assert Regulator(1, 1.0, 0.02, 0.05, 10.0, math.nan).ratio(3) == pytest.approx(1.03)


# --- held at the edge ------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("side", "expected"),
    [(1.0, 1.03835), (-1.0, 1.02165), (0.5, 1.034175), (0.0, 1.025)],
)
def test_held_ratio_puts_the_base_voltage_on_the_band_edge(side: float, expected: float):
    # 1.03 +- 0.00835; side 0 is the tap found (four steps).
    moving = (regulator(1, 1.03),)
    found = find_taps(AT_SOURCE, NO_LOAD, NEUTRAL, moving, SETTINGS)
    held = hold_at_edge(AT_SOURCE, NO_LOAD, found, moving, side, SETTINGS)
    assert held.ratio[1, 0] == pytest.approx(expected, abs=1e-9)
    assert voltage(held, 1) == pytest.approx(expected, abs=1e-9)
    assert held.taps == found.taps
    assert found.ratio[1, 0] == pytest.approx(1.025)


def test_held_ratio_is_clamped_to_the_range():
    for setpoint, side, ratio in ((1.095, 1.0, 1.1), (0.905, -1.0, 0.9), (1.2, -1.0, 1.1)):
        moving = (regulator(1, setpoint),)
        found = find_taps(AT_SOURCE, NO_LOAD, NEUTRAL, moving, SETTINGS)
        held = hold_at_edge(AT_SOURCE, NO_LOAD, found, moving, side, SETTINGS)
        assert held.ratio[1, 0] == pytest.approx(ratio, abs=1e-12)


def test_both_regulators_of_a_loaded_chain_sit_on_their_edges():
    net = network([-1, 0, 1, 2, 3], [0.01 + 0.02j, 0.02 + 0.06j, 0.02 + 0.03j, 0.01 + 0.02j])
    load = loading(5, {2: 0.1 + 0.05j, 3: -0.3}, shunt={4: 0.7 - 0.3j}, current={1: 0.1})
    pair = (regulator(2, 1.01), regulator(4, 1.03))
    found = find_taps(net, load, np.ones((5, 1)), pair, SETTINGS)
    for side in (1.0, -1.0):
        held = hold_at_edge(net, load, found, pair, side, SETTINGS)
        V = np.abs(judge(net, load, held.ratio)[:, 0])
        assert V[2] == pytest.approx(1.01 + side * 0.00835, abs=1e-8)
        assert V[4] == pytest.approx(1.03 + side * 0.00835, abs=1e-8)


# --- no solution -----------------------------------------------------------------------------


def test_a_base_case_without_solution_names_the_weakest_node():
    net = network([-1, 0, 1, 0], [0.05 + 0.05j, 0.1 + 0.1j, 0.01 + 0.01j])
    with pytest.raises(NoSolutionError, match=r"^2$"):
        solve_at(net, loading(4, {2: 9.0}), np.ones((4, 1)), SETTINGS)


def test_a_base_case_with_a_large_mismatch_is_no_solution():
    net = network([-1, 0, 1], [0.05 + 0.05j, 0.1 + 0.1j])
    loose = Settings(sweep_tolerance=1e-2)
    with pytest.raises(NoSolutionError):
        solve_at(net, loading(3, {2: 1.0}), NEUTRAL, loose)
