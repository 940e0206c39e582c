"""AC points in branch-flow variables, and the limits' gradients there."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from feederhost.flow.limits import Quantity, measure
from feederhost.flow.network import Loading, Network
from feederhost.flow.search import Plants, drawn_power, solve_with
from feederhost.flow.sweep import sweep, tangent
from feederhost.flow.tree import Tree
from feederhost.proof.branchflow import (
    BranchFlow,
    Seek,
    branch_flow,
    limit_gradient,
    loss_current_slope,
)

from small_feeders import (
    SETTINGS,
    bank,
    head_export,
    head_import,
    high,
    loading,
    low,
    network,
    plants,
    rated_receiving,
    rated_sending,
    system,
)

# Charging, a core, a capacitor, constant-current and constant-impedance load; invented.
NET = network(
    [-1, 0, 1, 1, 3, 0], [0.02 + 0.05j, 0.01 + 0.06j, 0.03 + 0.04j, 0.04 + 0.03j, 0.02 + 0.02j],
    sending={1: 0.06j, 2: 0.004 - 0.01j, 4: 0.05j}, receiving={1: 0.06j, 4: 0.05j},
)  # fmt: skip
LOAD = loading(
    6, {1: 0.3 + 0.1j, 2: 0.4 + 0.2j, 4: 0.2 - 0.1j, 5: 0.1}, current={3: 0.2 + 0.1j},
    shunt={2: 0.2j, 4: 0.1 - 0.05j}, source=1.02,
)  # fmt: skip
ROWS = [
    high(4, 1.05), low(4, 0.95), rated_sending(1, 1.5), rated_receiving(1, 1.5),
    rated_sending(2, 1.0), rated_sending(4, 0.4), rated_receiving(4, 0.4), head_import(2.0),
    head_export(0.5), bank(3.0),
]  # fmt: skip
OTHER = 0.7 + 0.4j
SYSTEM = system(NET, LOAD, ROWS, OTHER)
RATING = np.array([0.8, 1.4])
PLANTS = Plants(np.array([4, 2]), np.array([[-1 + 0.3j], [1 + 0.2j]]), np.full(2, 9.0))


def point_and_flow(sys=SYSTEM, own=PLANTS, rating=RATING):
    point = solve_with(sys, own, rating, SETTINGS)
    return point, branch_flow(sys, own, point)


def test_the_branch_flow_equations_hold_at_an_ac_point():
    # Baran & Wu, IEEE Trans. Power Delivery 4(1), 1989, in squared magnitudes; plants, shunts.
    _, f = point_and_flow()
    parent = NET.tree.parent
    below_p, below_q = np.zeros_like(f.P), np.zeros_like(f.Q)
    np.add.at(below_p, parent[1:], f.P[1:])
    np.add.at(below_q, parent[1:], f.Q[1:])
    p, q = f.p.copy(), f.q.copy()
    p[[4, 2], [0, 1]] += [-0.8, 1.4]
    q[[4, 2], [0, 1]] += [0.24, 0.28]
    k = slice(1, None)
    up = f.v[parent[k]]
    assert np.allclose(f.P[k], (f.r * f.ell + p + f.G * f.v + below_p)[k], rtol=0, atol=1e-10)
    assert np.allclose(f.Q[k], (f.x * f.ell + q - f.B * f.v + below_q)[k], rtol=0, atol=1e-10)
    z2 = f.r**2 + f.x**2
    fall = (2 * (f.r * f.P + f.x * f.Q) - z2 * f.ell)[k]
    assert np.allclose(f.v[k], up - fall, rtol=0, atol=1e-12)
    assert np.allclose(f.ell[k] * up, f.P[k] ** 2 + f.Q[k] ** 2, rtol=0, atol=1e-12)
    assert np.array_equal(f.v_pi[k], up)


def test_terminal_shunts_belong_to_the_nodes():
    # Node 1 carries: charging of branch 1 (receiving), the core of branch 2; node 2 its 0.2j;
    # node 3 the charging of branch 4.  y = G + jB.
    f = point_and_flow(replace(SYSTEM, loading=replace(LOAD, current=np.zeros((6, 1, 1)))))[1]
    assert f.G[:, 0] == pytest.approx([0, 0.004, 0, 0, 0.1, 0])
    assert f.B[:, 0] == pytest.approx([0.06, 0.05, 0.2, 0.05, 0.0, 0])


def test_constant_current_enters_as_its_tangent():
    # c |V| about v_a: c sqrt(v_a) / 2 + c v / (2 sqrt(v_a)), touching at v_a.
    bare = loading(2, current={1: 0.4 + 0.2j})
    sys = system(network([-1, 0], [0.05 + 0.05j]), bare, [])
    point, f = point_and_flow(sys, plants([1]), np.zeros(1))
    V = abs(point.V[1, 0, 0])
    assert f.p[1, 0] == pytest.approx(0.4 * V / 2, abs=1e-12)
    assert f.G[1, 0] == pytest.approx(0.4 / (2 * V), abs=1e-12)
    drawn = complex(f.p[1, 0] + f.G[1, 0] * V**2, f.q[1, 0] - f.B[1, 0] * V**2)
    assert drawn == pytest.approx((0.4 + 0.2j) * V, abs=1e-12)
    h = 1e-6
    slope = (0.4 + 0.2j) * (np.sqrt(V**2 + h) - np.sqrt(V**2 - h)) / (2 * h)
    assert complex(f.G[1, 0], -f.B[1, 0]) == pytest.approx(slope, abs=1e-9)


def test_head_power_is_that_of_the_source_node():
    point, f = point_and_flow()
    J = point.J[[1, 5], 0, :].sum(axis=0) + 0.06j * point.V[0, 0]
    assert f.head == pytest.approx(point.V[0, 0] * np.conj(J), abs=1e-12)


def test_more_than_one_phase_is_refused():
    z = np.zeros((2, 2, 2), complex)
    net = Network(Tree(np.array([-1, 0])), z, np.zeros((2, 2)), np.zeros((2, 2)), np.ones((2, 2)))
    none = np.zeros((2, 2, 1))
    sys = system(net, Loading(none, none, none, np.ones((2, 1))), [])
    two = Plants(np.array([1]), np.ones((1, 2)), np.ones(1))
    with pytest.raises(ValueError, match="one phase"):
        branch_flow(sys, two, sweep(net, sys.loading, SETTINGS))


def test_loss_current_slope_is_a_central_difference():
    power = drawn_power(SYSTEM, PLANTS, RATING)
    point = sweep(NET, LOAD, SETTINGS, power)
    change = np.zeros_like(power)
    change[[4, 2], 0, [0, 1]] = PLANTS.draw[:, 0]
    moved = tangent(NET, LOAD, SETTINGS, point, power, change)
    h = 1e-4
    up, down = (point_and_flow(rating=RATING + s)[1].ell[1:] for s in (h, -h))
    assert np.allclose(
        loss_current_slope(point, moved)[1:], (up - down) / (2 * h), rtol=0, atol=1e-7
    )


# --- gradients of limits ---------------------------------------------------------------------


def limit_value(f: BranchFlow, row: int, P, Q, ell, v, head) -> float:
    """Read a limit in branch-flow variables of column 0, h <= bound (>= for the lower ones)."""
    kind, k = SYSTEM.limits.quantity[row], int(SYSTEM.limits.element[row])
    up = int(NET.tree.parent[k])
    if kind == Quantity.VOLTAGE:
        return v[k]
    if kind == Quantity.CURRENT_FROM:
        # |J + y V|^2 with S = V conj(J): ell + |y|^2 v + 2 Re(y S).
        y = f.y_from[k, 0]
        return ell[k] + abs(y) ** 2 * v[up] + 2 * (y * complex(P[k], Q[k])).real
    if kind == Quantity.CURRENT_TO:
        # |J - y V|^2 with what arrives, S - z ell.
        y, z = f.y_to[k, 0], complex(f.r[k, 0], f.x[k, 0])
        return ell[k] + abs(y) ** 2 * v[k] - 2 * (y * (complex(P[k], Q[k]) - z * ell[k])).real
    p_0, q_0 = head.real + P[1] + P[5], head.imag + Q[1] + Q[5]
    if kind == Quantity.HEAD_POWER:
        return p_0
    return (p_0 + OTHER.real) ** 2 + (q_0 + OTHER.imag) ** 2


@pytest.mark.parametrize("row", range(len(ROWS)))
@pytest.mark.parametrize("reduced", [False, True])
def test_limit_gradients_are_central_differences(row: int, reduced: bool):
    point, f = point_and_flow()
    seek = Seek(PLANTS.node[:1], PLANTS.draw[:1, 0], np.array([row]))
    own = branch_flow(SYSTEM, PLANTS.pick(np.array([0])), pick(point))
    gradient = limit_gradient(own, SYSTEM, seek, reduced=reduced)
    here = {"P": f.P[:, 0], "Q": f.Q[:, 0], "ell": f.ell[:, 0], "v": f.v[:, 0]}
    # The charging at the source and what else is fixed there.
    rest = f.head[0] - complex(here["P"][[1, 5]].sum(), here["Q"][[1, 5]].sum())

    def value(name: str, k: int, step: float) -> float:
        there = {n: a.copy() for n, a in here.items()}
        there[name][k] += step
        if reduced and name != "ell":
            up = there["v"][np.maximum(NET.tree.parent, 0)]
            there["ell"] = (there["P"] ** 2 + there["Q"] ** 2) / up
        return limit_value(f, row, there["P"], there["Q"], there["ell"], there["v"], rest)

    # The value itself is what the limits measure at the AC point.
    measured = measure(NET, SYSTEM.limits, point)[row, 0]
    assert value("P", 0, 0.0) == pytest.approx(measured, abs=1e-10)
    sign = 1 if SYSTEM.limits.upper[row] else -1
    h = 1e-5
    for name in here:
        for k in range(6):
            slope = (value(name, k, h) - value(name, k, -h)) / (2 * h)
            if reduced and name == "ell":
                slope = 0.0
            found = getattr(gradient, name)[k, 0]
            assert found == pytest.approx(sign * slope, abs=1e-8), (name, k)


def pick(point):
    return type(point)(point.V[..., :1], point.J[..., :1], point.mismatch[:1])


def test_rows_side_by_side_have_gradients_of_their_own():
    _, f = point_and_flow()
    seek = Seek(PLANTS.node, PLANTS.draw[:, 0], np.array([0, 4]))
    gradient = limit_gradient(f, SYSTEM, seek, reduced=False)
    assert np.flatnonzero(gradient.v[:, 0]).tolist() == [4]
    assert np.flatnonzero(gradient.ell[:, 0]).tolist() == []
    assert np.flatnonzero(gradient.ell[:, 1]).tolist() == [2]
    assert np.flatnonzero(gradient.v[:, 1]).tolist() == [1]
