"""The AC power flow against closed forms and nodal equations, and its tangent."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from feederhost.flow.limits import head_power
from feederhost.flow.network import Loading, Network
from feederhost.flow.sweep import node_shunt, sweep, tangent
from feederhost.settings import Settings
from hypothesis import given, settings
from hypothesis import strategies as st

from small_feeders import SETTINGS, judge, loading, network, nodal_matrix

# Two bus, load s at the end: v^2 - (v_0 - 2 (r p + x q)) v + |z|^2 |s|^2 = 0, upper root
# (Baran & Wu, IEEE Trans. Power Delivery 4(1), 1989, eq. 1 to 3 with one branch).
TWO_BUS = [
    (0.05, 0.05, 0.0, 0.0, 1.0),
    (0.02, 0.06, 0.8, 0.3, 1.0),
    (0.06, 0.02, -1.5, 0.0, 1.03),
    (0.02, 0.06, -4.0509618548, 0.0, 1.0),  # section "search": V = 1.05 there
    (0.01, 0.10, 0.5, -0.9, 0.97),
    (0.00, 0.04, 1.0, 0.5, 1.0),
    (0.04, 0.00, 1.0, 0.5, 1.0),
]


def upper_root(r: float, x: float, p: float, q: float, v_0: float) -> float:
    b = v_0 - 2 * (r * p + x * q)
    return (b + math.sqrt(b * b - 4 * (r * r + x * x) * (p * p + q * q))) / 2


@pytest.mark.parametrize(("r", "x", "p", "q", "V_0"), TWO_BUS)
def test_two_bus_closed_form(r: float, x: float, p: float, q: float, V_0: float):
    point = sweep(
        network([-1, 0], [complex(r, x)]), loading(2, {1: complex(p, q)}, source=V_0), SETTINGS
    )
    v = abs(point.V[1, 0, 0]) ** 2
    assert v == pytest.approx(upper_root(r, x, p, q, V_0**2), abs=1e-12)
    # The last voltage step is below 1e-12, and |s| / |V| times that step is left in power.
    assert point.mismatch[0] <= 1e-12 * abs(complex(p, q)) / abs(point.V[1, 0, 0]) + 1e-15
    # ell = |s|^2 / v, and the head delivers the load and the loss.
    ell = (p * p + q * q) / v
    assert abs(point.J[1, 0, 0]) ** 2 == pytest.approx(ell, abs=1e-11)
    assert head_power(point)[0, 0] == pytest.approx(complex(p, q) + complex(r, x) * ell, abs=1e-11)


def test_constant_current_closed_form():
    # I = conj(c) V/|V|, so V_0 = (|V| + z conj(c)) V/|V|, and with d = z conj(c):
    # |V| = sqrt(V_0^2 - Im(d)^2) - Re(d).
    z, c, V_0 = 0.03 + 0.08j, 0.9 + 0.4j, 1.02
    d = z * c.conjugate()
    expected = math.sqrt(V_0**2 - d.imag**2) - d.real
    point = sweep(network([-1, 0], [z]), loading(2, current={1: c}, source=V_0), SETTINGS)
    assert abs(point.V[1, 0, 0]) == pytest.approx(expected, abs=1e-12)
    assert abs(point.J[1, 0, 0]) == pytest.approx(abs(c), abs=1e-12)


def test_constant_impedance_closed_form():
    # A load p + jq at 1 pu is the admittance p - jq: V = V_0 / (1 + z y).
    z, y, V_0 = 0.03 + 0.08j, 0.9 - 0.4j, 1.02
    point = sweep(network([-1, 0], [z]), loading(2, shunt={1: y}, source=V_0), SETTINGS)
    assert point.V[1, 0, 0] == pytest.approx(V_0 / (1 + z * y), abs=1e-12)
    drawn = point.V[1, 0, 0] * np.conj(point.J[1, 0, 0])
    assert drawn == pytest.approx((0.9 + 0.4j) * abs(point.V[1, 0, 0]) ** 2, abs=1e-12)


def test_zip_mixture_closed_form():
    # With all three parts V_0 = | |V| (1 + z y) + z conj(c) + z conj(s)/|V| |: the root near
    # 1 pu of that one equation, here by bisection.
    z, s, c, y, V_0 = 0.02 + 0.05j, 0.5 + 0.2j, 0.4 + 0.3j, 0.3 - 0.2j, 1.01

    def gap(V: float) -> float:
        return abs(V * (1 + z * y) + z * c.conjugate() + z * s.conjugate() / V) - V_0

    lo, hi = 0.7, 1.1
    assert gap(lo) < 0 < gap(hi)
    for _ in range(60):
        lo, hi = ((lo + hi) / 2, hi) if gap((lo + hi) / 2) < 0 else (lo, (lo + hi) / 2)
    load = loading(2, {1: s}, current={1: c}, shunt={1: y}, source=V_0)
    assert abs(sweep(network([-1, 0], [z]), load, SETTINGS).V[1, 0, 0]) == pytest.approx(
        lo, abs=1e-12
    )


def test_charging_and_shunts_are_the_linear_nodal_solution():
    # No constant power: the nodal equations are linear, Y_11 V = -Y_10 V_0.
    z = np.array([0.03 + 0.06j, 0.05 + 0.04j, 0.02 + 0.08j])
    half, capacitor = np.array([0.04j, 0.02j, 0.03j]), 0.25j
    net = network([-1, 0, 1, 1], z, sending=dict(enumerate(half, 1)),
                  receiving=dict(enumerate(half, 1)))  # fmt: skip
    point = sweep(net, loading(4, shunt={2: capacitor, 3: 0.4 - 0.1j}, source=1.0), SETTINGS)
    y = 1 / z
    Y = np.array([
        [y[0] + y[1] + y[2] + half.sum(), -y[1], -y[2]],
        [-y[1], y[1] + half[1] + capacitor, 0],
        [-y[2], 0, y[2] + half[2] + 0.4 - 0.1j],
    ])  # fmt: skip
    expected = np.linalg.solve(Y, np.array([y[0], 0, 0]))
    assert np.abs(point.V[1:, 0, 0] - expected).max() < 1e-12
    # A charged line without load lifts its far end (Ferranti).
    lone = network([-1, 0], [0.01 + 0.1j], sending={1: 0.05j}, receiving={1: 0.05j})
    far = sweep(lone, loading(2), SETTINGS).V[1, 0, 0]
    assert far == pytest.approx(1 / (1 + (0.01 + 0.1j) * 0.05j), abs=1e-12)
    assert abs(far) > 1


def test_node_shunt_gathers_both_terminals_and_the_load():
    net = network([-1, 0, 1], [0.1, 0.1], sending={1: 1j, 2: 2j}, receiving={1: 4j, 2: 8j})
    total = node_shunt(net, loading(3, shunt={1: 16j}))
    assert total[:, 0, 0].tolist() == [1j, 22j, 8j]


# --- columns ---------------------------------------------------------------------------------

FORK = network(
    [-1, 0, 1, 1, 3], [0.02 + 0.03j, 0.03 + 0.05j, 0.04 + 0.02j, 0.01 + 0.04j],
    sending={2: 0.01j}, receiving={2: 0.01j},
)  # fmt: skip
CASES = (
    loading(5, {2: 0.5 + 0.2j, 4: 0.3}, current={3: 0.1j}, shunt={4: 0.1j}, source=1.0),
    loading(5, {2: -1.0, 4: 0.6 + 0.3j}, current={2: 0.2}, source=1.03),
    loading(5, {2: 30.0}, source=1.0),  # no solution
    loading(5, {4: -0.7 + 0.2j}, shunt={2: 0.3 - 0.1j}, source=0.98),
)


def side_by_side(cases: tuple[Loading, ...]) -> Loading:
    return Loading(*(
        np.concatenate([getattr(c, name) for c in cases], axis=-1)
        for name in ("power", "current", "shunt", "source")
    ))  # fmt: skip


def test_columns_do_not_disturb_one_another():
    together = sweep(FORK, side_by_side(CASES), SETTINGS)
    assert together.solved.tolist() == [True, True, False, True]
    for i, case in enumerate(CASES):
        if together.solved[i]:
            alone = sweep(FORK, case, SETTINGS)
            assert np.array_equal(together.V[..., i], alone.V[..., 0])
            assert np.array_equal(together.J[..., i], alone.J[..., 0])
            assert np.abs(alone.V[:, :, 0] - judge(FORK, case)).max() < 1e-11


def test_a_single_column_of_load_serves_many_columns_of_power():
    power = np.repeat(CASES[0].power, 3, axis=-1) * np.array([1.0, 0.5, 0.0])
    many = sweep(FORK, CASES[0], SETTINGS, power)
    half = replace(CASES[0], power=CASES[0].power * 0.5)
    assert many.V.shape == (5, 1, 3)
    assert np.array_equal(many.V[..., 1], sweep(FORK, half, SETTINGS).V[..., 0])


def test_where_the_sweep_starts_does_not_matter():
    cold = sweep(FORK, CASES[0], SETTINGS)
    start = np.full((5, 1, 1), 0.9 - 0.05j)
    warm = sweep(FORK, CASES[0], SETTINGS, start=start)
    assert np.abs(cold.V - warm.V).max() < 1e-12
    assert np.array_equal(start, np.full((5, 1, 1), 0.9 - 0.05j))


def test_the_mismatch_is_the_residual_of_the_nodal_equations():
    # A loose sweep leaves a mismatch large enough to be compared.
    case = CASES[0]
    point = sweep(FORK, case, Settings(sweep_tolerance=1e-4))
    parent = FORK.tree.parent.tolist()
    Y = nodal_matrix(parent, FORK.z, FORK.y_from, FORK.y_to, FORK.gain)
    V = point.V[:, 0, 0]
    drawn = case.power[:, 0, 0] + case.current[:, 0, 0] * np.abs(V)
    drawn = drawn + np.conj(case.shunt[:, 0, 0]) * np.abs(V) ** 2
    residual = np.abs(V * np.conj(Y @ V) + drawn)[1:]
    assert 1e-8 < residual.max() < 1e-4
    assert point.mismatch[0] == pytest.approx(residual.max(), rel=1e-6)


# --- no solution -----------------------------------------------------------------------------

# With r = x and unity power factor the load has a solution up to
# p = v_0 / (2 (r + |z|)): the discriminant above, zero.
NOSE = 1 / (2 * (0.05 + math.hypot(0.05, 0.05)))


@pytest.mark.parametrize(
    ("share", "solved"),
    [(0.5, True), (0.95, True), (0.999, True), (1.001, False), (1.05, False), (3.0, False),
     (1e6, False)],
)  # fmt: skip
def test_up_to_the_nose_and_not_beyond(share: float, solved: bool):
    point = sweep(network([-1, 0], [0.05 + 0.05j]), loading(2, {1: share * NOSE}), SETTINGS)
    assert point.solved.tolist() == [solved]
    if solved:
        v = upper_root(0.05, 0.05, share * NOSE, 0.0, 1.0)
        assert abs(point.V[1, 0, 0]) ** 2 == pytest.approx(v, abs=1e-10)
    else:
        assert point.mismatch[0] == math.inf


def test_a_sweep_that_is_cut_short_is_no_solution():
    assert sweep(FORK, CASES[0], Settings(sweep_limit=3)).mismatch[0] == math.inf


def test_a_collapsed_voltage_is_no_solution():
    # An admittance of 0.5 behind z = 1 leaves 1 / 1.5 = 0.667 pu.
    net = network([-1, 0], [1.0])
    assert sweep(net, loading(2, shunt={1: 0.5}), Settings(collapse_pu=0.1)).solved[0]
    assert not sweep(net, loading(2, shunt={1: 0.5}), Settings(collapse_pu=0.7)).solved[0]


# --- tangent ---------------------------------------------------------------------------------


def check_tangent(net: Network, load: Loading, change: np.ndarray) -> None:
    power = np.array(load.power)
    point = sweep(net, load, SETTINGS)
    moved = tangent(net, load, SETTINGS, point, power, change)
    h = 1e-4
    up, down = (sweep(net, load, SETTINGS, power + s * change) for s in (h, -h))
    for name in ("V", "J"):
        # The error of a central difference is of the order h^2 = 1e-8.
        difference = (getattr(up, name) - getattr(down, name)) / (2 * h)
        assert np.abs(getattr(moved, name) - difference).max() < 2e-7


@pytest.mark.parametrize("case", [0, 1, 3])
def test_tangent_is_the_central_difference(case: int):
    change = np.zeros((5, 1, 1), complex)
    change[4] = -1 - 0.3j
    check_tangent(FORK, CASES[case], change)


def test_tangent_two_bus_closed_form():
    # dv/dp of the closed form: -r + (-r b - 2 |z|^2 p) / sqrt(b^2 - 4 |z|^2 p^2), b = v_0 - 2 r p.
    r, x, p = 0.02, 0.06, -2.0
    b, z2 = 1 - 2 * r * p, r * r + x * x
    expected = -r + (-r * b - 2 * z2 * p) / math.sqrt(b * b - 4 * z2 * p * p)
    net, load = network([-1, 0], [complex(r, x)]), loading(2, {1: p})
    point = sweep(net, load, SETTINGS)
    change = np.zeros((2, 1, 1), complex)
    change[1] = 1.0
    moved = tangent(net, load, SETTINGS, point, np.array(load.power), change)
    slope = 2 * (np.conj(point.V[1, 0, 0]) * moved.V[1, 0, 0]).real
    assert slope == pytest.approx(expected, abs=1e-9)


def test_no_tangent_without_a_solution_and_none_that_runs_away():
    load = side_by_side(CASES)
    point = sweep(FORK, load, SETTINGS)
    change = np.ones((5, 1, 4), complex)
    moved = tangent(FORK, load, SETTINGS, point, np.array(load.power), change)
    assert np.isfinite(moved.V[..., [0, 1, 3]]).all()
    assert np.isnan(moved.V[..., 2]).all()
    assert np.isnan(moved.J[..., 2]).all()
    strict = Settings(runaway=1e-3)
    assert np.isnan(tangent(FORK, load, strict, point, np.array(load.power), change).V).all()
    short = Settings(sweep_limit=1)
    unsettled = tangent(FORK, load, short, point, np.array(load.power), change)
    assert np.isnan(unsettled.V).all()


# --- three phases ----------------------------------------------------------------------------

TURN = np.exp(-2j * np.pi / 3 * np.arange(3))[:, None]


def three(net: Network, mutual: float = 0.0) -> Network:
    """Three phases: the same self impedance, and a mutual one as a share of it."""
    share = np.eye(3) + mutual * (1 - np.eye(3))
    return Network(
        net.tree, net.z * share, np.repeat(net.y_from, 3, axis=1),
        np.repeat(net.y_to, 3, axis=1), np.ones((net.tree.size, 3)),
    )  # fmt: skip


def test_three_uncoupled_phases_are_three_balanced_copies():
    single = CASES[0]
    load = Loading(
        *(np.repeat(getattr(single, name), 3, axis=1) for name in ("power", "current", "shunt")),
        single.source * TURN,
    )  # fmt: skip
    point, one = sweep(three(FORK), load, SETTINGS), sweep(FORK, single, SETTINGS)
    assert np.abs(point.V - one.V * TURN).max() < 1e-12
    assert np.abs(point.J - one.J * TURN).max() < 1e-12


def test_coupled_unbalanced_phases_are_the_nodal_solution():
    # Not symmetric in its entries' values, so that a transposed product would show.
    net = three(FORK, 0.3)
    z = np.array(net.z)
    z[1:, 0, 1] *= 1.2
    z[1:, 1, 0] *= 0.8
    net = Network(net.tree, z, net.y_from, net.y_to, net.gain)
    power = np.zeros((5, 3, 1), complex)
    power[2, :, 0] = [0.5 + 0.2j, 0.1, 0.3 + 0.3j]
    power[4, 1, 0] = -0.8 + 0.1j
    current = np.zeros_like(power)
    current[3, 2, 0] = 0.2 + 0.1j
    shunt = np.zeros_like(power)
    shunt[4, 0, 0] = 0.15j
    load = Loading(power, current, shunt, 1.02 * TURN)
    point = sweep(net, load, SETTINGS)
    assert np.abs(point.V[..., 0] - judge(net, load)).max() < 1e-11
    change = np.zeros_like(power)
    change[4, 1, 0] = -1.0
    check_tangent(net, load, change)


# --- power balance ---------------------------------------------------------------------------


@st.composite
def loaded_trees(draw: st.DrawFn) -> tuple[Network, Loading]:
    n = draw(st.integers(2, 12))
    number = st.floats(-1.0, 1.0)
    parent = [-1, *(draw(st.integers(0, k - 1)) for k in range(1, n))]
    z = [complex(0.002 + 0.01 * abs(draw(number)), 0.02 * abs(draw(number))) for _ in parent[1:]]
    power, current = ({k: complex(draw(number), draw(number)) * 0.3 for k in range(1, n)}
                      for _ in range(2))  # fmt: skip
    shunt = {k: complex(abs(draw(number)), draw(number)) * 0.1 for k in range(1, n)}
    half = {k: 0.02j * abs(draw(number)) for k in range(1, n)}
    return network(parent, z, sending=half, receiving=half), loading(
        n, power, current=current, shunt=shunt, source=draw(st.floats(0.97, 1.04))
    )


@settings(max_examples=40, deadline=None)
@given(loaded_trees())
def test_source_and_injections_make_up_losses(case: tuple[Network, Loading]):
    net, load = case
    point = sweep(net, load, SETTINGS)
    assert point.solved[0]
    V, J = point.V[:, 0, 0], point.J[:, 0, 0]
    z, up = net.z[1:, 0, 0], V[net.tree.parent[1:]]
    taken = load.power[:, 0, 0] + load.current[:, 0, 0] * np.abs(V)
    taken = taken + np.conj(load.shunt[:, 0, 0] + net.y_to[:, 0]) * np.abs(V) ** 2
    charging = (np.conj(net.y_from[1:, 0]) * np.abs(up) ** 2).sum()
    losses = (z * np.abs(J[1:]) ** 2).sum()
    head = head_power(point)[0, 0]
    assert head == pytest.approx(taken.sum() + charging + losses, abs=1e-10)
    # Ohm's law on every branch, not only the balance of their sum.
    assert np.abs(up - V[1:] - z * J[1:]).max() < 1e-12
