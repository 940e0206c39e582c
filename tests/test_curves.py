"""Volt-var and volt-watt operating points against bisection on the two-bus closed form."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from feederhost.flow.curves import (
    CATEGORY_B,
    VOLT_WATT,
    VOLT_WATT_STORAGE,
    Curve,
    Inverter,
    Settled,
    settle,
)
from feederhost.flow.network import Network
from feederhost.settings import Settings

from small_feeders import SETTINGS, loading, network
from two_bus_forms import bisect, volt_var, volt_watt, voltage


def one(
    p: float | list[float],
    *,
    rated: float | None = None,
    cap: float = math.inf,
    ratio: float = 0.0,
    var: Curve | None = None,
    watt: Curve | None = None,
) -> Inverter:
    """Inverters at node 1, rated at their active power where nothing else is said."""
    p = np.atleast_1d(np.asarray(p, dtype=float))
    own = np.full_like(p, np.abs(p).max() if rated is None else rated)
    return Inverter(1, p, ratio, own, own, np.full_like(p, cap), var, watt)


def run(
    z: complex, inverter: Inverter, *, source: float = 1.0, settings: Settings = SETTINGS,
    net: Network | None = None,
) -> Settled:  # fmt: skip
    m = inverter.available.size
    return settle(
        net or network([-1, 0], [z]), loading(2, source=source), np.zeros((2, 1, m), complex),
        inverter, settings,
    )  # fmt: skip


# --- curves ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("V", "share"),
    [(0.80, 0.44), (0.92, 0.44), (0.95, 0.22), (0.98, 0), (1.0, 0), (1.02, 0),
     # A node held at 1.05 pu absorbs 0.44 * 0.03 / 0.06 of S.
     (1.05, -0.22), (1.08, -0.44), (1.20, -0.44)],
)  # fmt: skip
def test_category_b_default(V: float, share: float):
    assert CATEGORY_B.at(np.array([V]))[0] == pytest.approx(share, abs=1e-12)


@pytest.mark.parametrize(("V", "share"), [(1.0, 1), (1.06, 1), (1.08, 0.6), (1.1, 0.2), (1.2, 0.2)])
def test_volt_watt_default(V: float, share: float):
    assert VOLT_WATT.at(np.array([V]))[0] == pytest.approx(share, abs=1e-12)


def test_storage_goes_down_to_nothing():
    assert VOLT_WATT_STORAGE.at(np.array([1.0, 1.08, 1.1])) == pytest.approx([1, 0.5, 0], abs=1e-12)


@pytest.mark.parametrize(
    ("V", "share"),
    [([1.0], [0.0]), ([1.0, 1.0], [0.1, 0.0]), ([1.1, 1.0], [0.1, 0.0]), ([1.0, 1.1], [0.1])],
)
def test_a_curve_needs_two_points_that_rise(V: list[float], share: list[float]):
    with pytest.raises(ValueError, match="curve"):
        Curve("odd", np.array(V), np.array(share))


# --- operating points ------------------------------------------------------------------------

POINTS = [
    (0.03, 0.06, 1.5, 1.02),  # on the absorbing slope
    (0.06, 0.06, 0.3, 1.00),  # in the dead band
    (0.02, 0.10, 2.0, 1.05),
    (0.10, 0.02, 0.9, 1.06),  # beyond the last point
    (0.04, 0.08, 0.5, 0.93),  # injecting
    (0.05, 0.25, 0.8, 1.03),  # loop gain 7.3 * 0.8 * 0.25 = 1.5
]


@pytest.mark.parametrize(("r", "x", "p", "source"), POINTS)
def test_volt_var_against_bisection(r: float, x: float, p: float, source: float):
    def gap(q: float) -> float:
        return volt_var(voltage(r, x, p, q, source)) * p - q

    q = bisect(gap, -0.44 * p, 0.44 * p)
    found = run(complex(r, x), one(p, var=CATEGORY_B), source=source)
    assert not found.hunts[0]
    assert found.power[0] == pytest.approx(complex(p, q), abs=1e-8)
    V = abs(found.point.V[1, 0, 0])
    assert pytest.approx(voltage(r, x, p, q, source), abs=1e-8) == V
    assert found.point.mismatch[0] <= SETTINGS.mismatch_tolerance


@pytest.mark.parametrize(
    ("r", "x", "p", "source"),
    [(0.03, 0.06, 3.0, 1.02), (0.08, 0.05, 1.0, 1.03), (0.05, 0.05, 0.4, 1.0),
     (0.2, 0.1, 2.0, 1.09)],
)  # fmt: skip
def test_volt_watt_against_bisection(r: float, x: float, p: float, source: float):
    def gap(g: float) -> float:
        return volt_watt(voltage(r, x, g, 0.0, source)) * p - g

    g = bisect(gap, 0.0, 1.0001 * p)
    found = run(complex(r, x), one(p, watt=VOLT_WATT), source=source)
    assert found.power[0] == pytest.approx(g, abs=1e-8)
    assert not found.hunts[0]


def test_a_curtailed_plant_keeps_its_power_factor():
    # q = t p follows what is left of p.
    r, x, p, t = 0.08, 0.05, 1.0, -0.3

    def gap(g: float) -> float:
        return volt_watt(voltage(r, x, g, t * g, 1.05)) * p - g

    g = bisect(gap, 0.0, p)
    assert g < 0.95
    found = run(complex(r, x), one(p, ratio=t, watt=VOLT_WATT), source=1.05)
    assert found.power[0] == pytest.approx(complex(g, t * g), abs=1e-8)


def test_vars_go_first():
    # Beyond 1.08 pu q = -0.44 S, which leaves p = sqrt(1 - 0.44^2) S = 0.897998 S.
    found = run(0.01 + 0.01j, one(1.0, cap=1.0, var=CATEGORY_B), source=1.12)
    assert found.power[0] == pytest.approx(complex(0.8979977, -0.44), abs=1e-7)


def test_a_fixed_power_factor_stays_within_the_inverter():
    # 0.9 pf, 1 kVA: p = 0.9 of 1 asked.
    found = run(0.01 + 0.01j, one(1.0, cap=1.0, ratio=-math.tan(math.acos(0.9))))
    assert found.power[0] == pytest.approx(complex(0.9, -math.sqrt(1 - 0.81)), abs=1e-9)


def test_reactive_power_falls_off_at_low_output():
    # Full reactive power from 20 % of rated output, in proportion below: 5 % gives 0.11 S.
    shares = [0.0, 0.05, 0.1, 0.2, 0.5]
    found = run(0.001j, one(shares, rated=1.0, var=CATEGORY_B), source=1.10)
    assert -found.power.imag == pytest.approx([0, 0.11, 0.22, 0.44, 0.44], abs=1e-9)


def test_storage_that_charges_at_low_voltage_injects():
    r, x, p = 0.05, 0.08, -0.8

    def gap(q: float) -> float:
        return volt_var(voltage(r, x, p, q, 0.99)) * 0.8 - q

    q = bisect(gap, -0.36, 0.36)
    assert q > 0.05
    found = run(complex(r, x), one(p, var=CATEGORY_B), source=0.99)
    assert found.power[0] == pytest.approx(complex(p, q), abs=1e-8)


def test_the_curve_sees_the_voltage_behind_ratios():
    # gain 1.02: the node stands at 1.02 * V as referred; z is referred already.
    plain = network([-1, 0], [0.03 + 0.06j])
    raised = replace(plain, gain=np.array([[1.0], [1.02]]))

    def gap(q: float) -> float:
        return volt_var(1.02 * voltage(0.03, 0.06, 1.0, q)) - q

    q = bisect(gap, -0.44, 0.44)
    found = run(0j, one(1.0, var=CATEGORY_B), net=raised)
    assert found.power[0].imag == pytest.approx(q, abs=1e-8)


def test_columns_stand_alone():
    p = [0.0, 0.4, 1.3, 2.5]
    together = run(0.03 + 0.06j, one(p, rated=2.5, var=CATEGORY_B), source=1.02)
    for i, own in enumerate(p):
        alone = run(0.03 + 0.06j, one(own, rated=2.5, var=CATEGORY_B), source=1.02)
        assert together.power[i] == pytest.approx(alone.power[0], abs=1e-8)
        assert together.point.V[..., i] == pytest.approx(alone.point.V[..., 0], abs=1e-8)


def test_other_loads_are_in_place():
    net = network([-1, 0], [0.03 + 0.06j])
    own = one(1.5, var=CATEGORY_B)
    power = np.zeros((2, 1, 1), complex)
    power[1] = 0.5 + 0.2j
    found = settle(net, loading(2, source=1.02), power, own, SETTINGS)

    def gap(q: float) -> float:
        return volt_var(voltage(0.03, 0.06, 1.0, q - 0.2, 1.02)) * 1.5 - q

    assert found.power[0].imag == pytest.approx(bisect(gap, -0.66, 0.66), abs=1e-8)


# --- hunting and lost solutions --------------------------------------------------------------


def steep(width: float) -> Curve:
    return Curve("steep", np.array([1.03 - width / 2, 1.03 + width / 2]), np.array([0.44, -0.44]))


@pytest.mark.parametrize(("width", "hunts"), [(0.04, False), (0.002, True)])
def test_hunting_follows_the_loop_gain(width: float, hunts: bool):
    # With r p small V moves by about x a unit of q: G = 0.88 / width * x = 2.2 and 44; a gap
    # shrinks by |1 - d (1 + G)| a round, d = 0.5: 0.6 and 21.5.
    found = run(0.01 + 0.1j, one(1.0, var=steep(width)), source=1.03)
    assert bool(found.hunts[0]) is hunts
    assert found.point.solved[0]
    if not hunts:
        V = abs(found.point.V[1, 0, 0])
        assert found.power[0].imag == pytest.approx(0.44 * (1.03 - V) / (width / 2), abs=1e-7)


def test_less_damping_hunts_where_more_does_not():
    own = one(1.0, var=steep(0.01))  # G = 8.8: d = 0.15 gives 0.47, d = 0.5 gives 3.9
    gentle = replace(SETTINGS, curve_damping=0.15)
    assert run(0.01 + 0.1j, own, source=1.03).hunts[0]
    assert not run(0.01 + 0.1j, own, source=1.03, settings=gentle).hunts[0]


def test_without_a_solution_nothing_hunts():
    # |z| |s| = 0.5 * 6 is beyond what one branch carries at any voltage.
    found = run(0.5j, one([6.0, 0.1], rated=0.1), source=1.0)
    assert found.point.solved.tolist() == [False, True]
    assert found.hunts.tolist() == [False, False]
