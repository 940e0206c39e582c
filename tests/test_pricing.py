"""Loss prices against sums over paths, finite differences and the formulas of one limit each.

Without margin and floor a price is the exchange rate at which a fictitious squared current
ell_k on branch k would buy rating g: (ds/d ell_k) / (-ds/dg) with s the slack of the limit.
"""

from __future__ import annotations

import numpy as np
import pytest
from feederhost.flow.limits import Quantity, System
from feederhost.flow.search import solve_with
from feederhost.proof.branchflow import BranchFlow, Seek, branch_flow
from feederhost.proof.pricing import loss_prices
from feederhost.settings import Settings

from small_feeders import (
    SETTINGS,
    Row,
    bank,
    head_export,
    head_import,
    high,
    loading,
    low,
    network,
    plant,
    rated_receiving,
    rated_sending,
    system,
)

# Rates as they are: no margin, no floor.
BARE = Settings(price_margin=0.0, price_floor=0.0, price_floor_share=0.0)

PARENT = [-1, 0, 1, 2, 2, 4, 1, 0]
Z = np.array([0.02 + 0.03j, 0.01 + 0.05j, 0.03 + 0.02j, 0.04 + 0.01j, 0.02 + 0.06j, 0.05 + 0.05j,
              0.03 + 0.03j])  # fmt: skip
NET = network(PARENT, Z)
LOAD = {1: 0.1 + 0.05j, 3: 0.2 + 0.1j, 5: 0.15, 6: 0.1 + 0.1j, 7: 0.1}


def priced(
    sys: System, j: int, rating: float, *, sigma: int = 1, t: float = 0.0, settings=BARE
) -> tuple[np.ndarray, BranchFlow]:
    """Prices of every branch for limit row 0, and the AC point they come from."""
    one = plant(j, sigma=sigma, t=t)
    flow = branch_flow(sys, one, solve_with(sys, one, np.array([rating]), SETTINGS))
    seek = Seek(one.node, one.draw.sum(axis=1), np.array([0]))
    return loss_prices(flow, sys, seek, np.array([rating]), settings)[:, 0], flow


def one_limit(row: Row, other: complex = 0j) -> System:
    return system(NET, loading(8, LOAD), [row], other)


def ancestors(k: int) -> set[int]:
    """Branches from the source to node k, k included."""
    return {k, *ancestors(PARENT[k])} if k > 0 else set()


# --- voltage ---------------------------------------------------------------------------------


@pytest.mark.parametrize(("b", "j"), [(5, 5), (5, 4), (3, 5), (1, 6), (6, 5), (2, 3)])
@pytest.mark.parametrize("t", [0.0, -0.3, 0.3])
def test_voltage_high_by_sums_over_paths(b: int, j: int, t: float):
    # rate_k = D_bk / (2 (R_bj + t X_bj)), D_bk = 2 (r_k R + x_k X) + |z_k|^2 [k on the path to
    # b], R, X summed over what the paths to b and to the parent of k share.
    r, x = np.append(0, Z.real), np.append(0, Z.imag)
    worth = sum(r[i] + t * x[i] for i in ancestors(b) & ancestors(j))
    expected = [0.0]
    for k in range(1, 8):
        shared = ancestors(b) & ancestors(PARENT[k])
        D = 2 * (r[k] * sum(r[i] for i in shared) + x[k] * sum(x[i] for i in shared))
        D += (r[k] ** 2 + x[k] ** 2) * (k in ancestors(b))
        expected.append(D / (2 * worth))
    w, _ = priced(one_limit(high(b, 1.05)), j, 1.3, t=t)
    assert w == pytest.approx(expected, rel=1e-12, abs=1e-16)


def test_voltage_high_two_bus():
    # |z|^2 / (2 r): 0.004 / 0.04 and 0.005 / 0.1.
    for r, x, expected in ((0.02, 0.06, 0.1), (0.05, 0.05, 0.05)):
        sys = system(network([-1, 0], [complex(r, x)]), loading(2), [high(1, 1.05)])
        assert priced(sys, 1, 0.5)[0][1] == pytest.approx(expected, rel=1e-12)


def test_margin_and_floor():
    # Default: 10 % above the rate, at least 2 % of the resistance.
    sys = system(network([-1, 0], [0.02 + 0.06j]), loading(2), [high(1, 1.05)])
    assert priced(sys, 1, 0.5, settings=Settings())[0][1] == pytest.approx(0.11, rel=1e-12)
    w, _ = priced(one_limit(high(1, 1.05)), 6, 1.0, settings=Settings())
    # Branch 7 leaves the source by itself: no fictitious loss there moves node 1.
    assert w[7] == pytest.approx(0.02 * 0.03, rel=1e-12)
    assert w[0] == 0


@pytest.mark.parametrize("sigma", [1, -1])
def test_voltage_low_costs_the_floor_only(sigma: int):
    # A fictitious loss lowers the voltage further: nothing to be bought.
    w, _ = priced(one_limit(low(5, 0.95)), 5, 0.4, sigma=sigma, settings=Settings())
    assert w[1:] == pytest.approx(0.02 * Z.real, rel=1e-12)


def test_a_switch_and_an_idle_branch_have_the_floor_of_their_own_power():
    # r = 0, and r so small that its floor is less: 1e-6 g / |S_k|^2.  Branch 4 carries
    # nothing: there a thousandth of the largest |S| counts.
    net = network([-1, 0, 1, 2, 2], [0.02 + 0.03j, 0.0, 0.04 + 0.03j, 1e-12])
    sys = system(net, loading(5), [low(3, 0.95)])
    w, flow = priced(sys, 3, 0.2, sigma=-1, settings=Settings())
    S = np.hypot(flow.P, flow.Q)[:, 0]
    assert S[4] == 0
    assert w[2] == pytest.approx(1e-6 * 0.2 / S[2] ** 2, rel=1e-12)
    assert w[4] == pytest.approx(1e-6 * 0.2 / (1e-3 * S[1]) ** 2, rel=1e-12)
    assert w[1] == pytest.approx(0.02 * 0.02, rel=1e-12)


# --- head and bank ---------------------------------------------------------------------------


def test_head_export_costs_the_resistance_itself():
    w, _ = priced(one_limit(head_export(1.0)), 5, 2.0)
    assert w[1:] == pytest.approx(Z.real, rel=1e-12)


def test_head_import_costs_the_floor_only():
    w, _ = priced(one_limit(head_import(1.0)), 5, 0.3, sigma=-1)
    assert w == pytest.approx(np.zeros(8), abs=0)


@pytest.mark.parametrize(("sigma", "t"), [(1, 0.0), (1, -0.3), (-1, 0.2)])
def test_bank_by_its_formula(sigma: int, t: float):
    # sigma (P r_k + Q x_k) / (P + t Q), P + jQ through the bank, never below zero.
    other = 0.4 + 0.3j
    w, flow = priced(one_limit(bank(3.0), other), 5, 2.0, sigma=sigma, t=t)
    total = flow.head[0] + other
    rate = sigma * (total.real * Z.real + total.imag * Z.imag) / (total.real + t * total.imag)
    assert w[1:] == pytest.approx(np.maximum(rate, 0), rel=1e-12)
    assert (w[1:] > 0).any() == (sigma == 1)


# --- ratings ---------------------------------------------------------------------------------


@pytest.mark.parametrize("t", [0.0, -0.3])
def test_rating_to_first_order(t: float):
    # sigma (P_b r_k + Q_b x_k) / (P_b + t Q_b) in the subtree of b, zero elsewhere.  The
    # voltage in ell_b = |S|^2 / v adds terms of the order ell_b |z|^2: up to 0.003 here.
    w, flow = priced(one_limit(rated_sending(2, 2.0)), 5, 2.0, t=t)
    P, Q = flow.P[2, 0], flow.Q[2, 0]
    for k in range(1, 8):
        first_order = (P * Z[k - 1].real + Q * Z[k - 1].imag) / (P + t * Q)
        expected = max(first_order, 0) if 2 in ancestors(k) else 0.0
        assert w[k] == pytest.approx(expected, rel=0, abs=0.004)


def linear_part(
    sys: System, flow: BranchFlow, j: int, draw: complex, g: float, ell: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Solve the relaxation's three linear equations for P, Q, v with g and ell given."""
    n = len(flow.P)
    parent = sys.network.tree.parent
    r, x = flow.r[:, 0], flow.x[:, 0]
    G, B = flow.G[:, 0], flow.B[:, 0]
    A, b = np.zeros((3 * n, 3 * n)), np.zeros(3 * n)
    p, q = flow.p[:, 0].copy(), flow.q[:, 0].copy()
    p[j] += draw.real * g
    q[j] += draw.imag * g
    for k in range(n):
        iP, iQ, iv = k, n + k, 2 * n + k
        A[iP, iP] = A[iQ, iQ] = A[iv, iv] = 1
        if k == 0:
            b[iv] = flow.v[0, 0]
            continue
        for c in np.flatnonzero(parent == k):
            A[iP, c] = A[iQ, n + c] = -1
        A[iP, iv], A[iQ, iv] = -G[k], B[k]
        b[iP], b[iQ] = r[k] * ell[k] + p[k], x[k] * ell[k] + q[k]
        A[iv, 2 * n + parent[k]] -= 1
        A[iv, iP], A[iv, iQ] = 2 * r[k], 2 * x[k]
        b[iv] = (r[k] ** 2 + x[k] ** 2) * ell[k]
    P, Q, v = np.linalg.solve(A, b).reshape(3, n)
    return P, Q, v


SHUNTED = network(
    PARENT, Z, sending={2: 0.05j, 5: 0.004 - 0.01j}, receiving={2: 0.05j, 3: 0.03j}
)  # fmt: skip
SHUNTED_LOAD = loading(8, LOAD, current={4: 0.1}, shunt={3: 0.1j, 6: 0.1 - 0.05j}, source=1.01)


@pytest.mark.parametrize(
    "row",
    [high(5, 1.05), rated_sending(2, 2.0), rated_receiving(2, 2.0), rated_sending(5, 2.0),
     head_export(1.0), bank(3.0), high(6, 1.05)],
)  # fmt: skip
@pytest.mark.parametrize("t", [0.0, -0.3, 0.3])
def test_rates_are_those_of_the_linear_part(row: Row, t: float):
    # Perturb one ell_k or g in the linear equations, with shunts; read the limit's slack.
    sys = system(SHUNTED, SHUNTED_LOAD, [row], 0.2 + 0.1j)
    w, flow = priced(sys, 5, 1.8, t=t)
    _, quantity, b, upper, _ = row
    draw, ell = -complex(1, t), flow.ell[:, 0]

    def slack(g: float, ell: np.ndarray) -> float:
        P, Q, v = linear_part(sys, flow, 5, draw, g, ell)
        S = complex(P[b], Q[b])
        up = v[PARENT[b]]
        if quantity == Quantity.VOLTAGE:
            measured = v[b]
        elif quantity == Quantity.CURRENT_FROM:
            # Terminal current with the branch's own ell taken as |S|^2 / v_pi.
            measured = abs(S + np.conj(flow.y_from[b, 0]) * up) ** 2 / up
        elif quantity == Quantity.CURRENT_TO:
            own = abs(S) ** 2 / up
            y = flow.y_to[b, 0]
            measured = own + abs(y) ** 2 * v[b] - 2 * (y * (S - Z[b - 1] * own)).real
        else:
            rest = flow.head[0] - complex(flow.P[[1, 7], 0].sum(), flow.Q[[1, 7], 0].sum())
            head = rest + complex(P[[1, 7]].sum(), Q[[1, 7]].sum())
            measured = head.real if quantity == Quantity.HEAD_POWER else abs(head + 0.2 + 0.1j) ** 2
        return -measured if upper else measured

    h = 1e-6
    per_g = (slack(1.8 + h, ell) - slack(1.8 - h, ell)) / (2 * h)
    expected = [0.0]
    for k in range(1, 8):
        step = h * (np.arange(8) == k)
        gained = (slack(1.8, ell + step) - slack(1.8, ell - step)) / (2 * h)
        expected.append(max(gained / -per_g, 0.0) if gained > 1e-9 else 0.0)
    assert per_g < 0
    assert w == pytest.approx(expected, rel=1e-6, abs=1e-9)


def test_where_loss_buys_nothing_the_price_is_the_floor_whatever_g_does():
    # A lower limit under export: more g raises the slack, so the ratio is of the other sign.
    w, _ = priced(one_limit(low(3, 0.9)), 5, 1.0)
    assert w == pytest.approx(np.zeros(8), abs=0)
