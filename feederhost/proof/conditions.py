"""Published conditions under which the relaxation is exact, as numbers with margins.

They are sufficient, not necessary: a row whose own proof closes is proven whether they hold or
not.  Sources: Farivar & Low, IEEE TPWRS 28(3) 2013, Theorem 1 (load over-satisfaction,
objective); Gan, Li, Topcu & Low, IEEE TAC 60(1) 2015, Theorem 1 (conditions C1 and C2; the
matrices are quoted from memory and from public re-codings of the paper).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from feederhost.flow.limits import Quantity, System
from feederhost.flow.tree import Floats, Ints, depths, path_sum, subtree_sum
from feederhost.proof.branchflow import BranchFlow


@dataclass(frozen=True)
class Margins:
    """Margin per column and the node where it is smallest, (m,) each; positive holds."""

    margin: Floats
    node: Ints


def least_resistance(system: System) -> tuple[float, int, bool]:
    """Smallest resistance over branches that have an impedance, where, and whether x >= 0."""
    z = system.network.z[:, 0, 0]
    k = np.flatnonzero(z != 0)
    if k.size == 0:
        return np.inf, 0, True
    at = k[z[k].real.argmin()]
    return float(z[at].real), int(at), bool(np.all(z[k].imag >= 0))


def lossless_reverse_flow(system: System, flow: BranchFlow, injected: Floats) -> tuple:
    """Lossless flows towards the source at the upper bounds of net injection, (n, m) each.

    Parameters
    ----------
    injected : (n, m) complex
        What the plant adds at each node.

    Notes
    -----
    Capacitors count at their highest voltage, B v_max; loads at the case's own level.
    """
    v_max = _voltage_bounds(system)[1][:, None]
    p = injected.real - flow.p - flow.G * flow.v
    q = injected.imag - flow.q + np.where(flow.B > 0, flow.B * v_max, flow.B * flow.v)
    return subtree_sum(flow.tree, p), subtree_sum(flow.tree, q)


def c1_margin(system: System, flow: BranchFlow, injected: Floats) -> Margins:
    """Condition C1 of Gan, Li, Topcu & Low (2015): every product A_s ... A_t-1 u_t > 0.

    With u_i = (r_i, x_i), A_i = I - (2 / v_min_i) u_i (a_i, b_i), a_i and b_i the positive
    parts of the lossless reverse flows.  The margin is the smallest entry of a product over
    that of u_t (1 without reverse flow).
    """
    tree = flow.tree
    n, m = flow.P.shape
    reverse_p, reverse_q = lossless_reverse_flow(system, flow, injected)
    a, b = np.maximum(reverse_p, 0.0), np.maximum(reverse_q, 0.0)
    v_min = np.maximum(_voltage_bounds(system)[0], np.finfo(float).tiny)[:, None]
    r, x = flow.r, flow.x
    w_r, w_x = np.broadcast_to(r, (n, m)).copy(), np.broadcast_to(x, (n, m)).copy()
    margin, node = np.ones(m), np.zeros(m, dtype=np.intp)
    above = tree.parent.copy()
    for _ in range(int(depths(tree).max(initial=0))):
        live = np.flatnonzero(above > 0)
        if live.size == 0:
            break
        s = above[live]
        taken = 2 / v_min[s] * (a[s] * w_r[live] + b[s] * w_x[live])
        w_r[live] -= r[s] * taken
        w_x[live] -= x[s] * taken
        with np.errstate(divide="ignore", invalid="ignore"):
            share_r = np.where(r[live] > 0, w_r[live] / r[live], np.inf)
            share_x = np.where(x[live] > 0, w_x[live] / x[live], np.inf)
        share = np.minimum(share_r, share_x)
        at = share.argmin(axis=0)
        least = share[at, np.arange(m)]
        node = np.where(least < margin, live[at], node)
        margin = np.minimum(margin, least)
        above[live] = tree.parent[s]
    return Margins(margin, node)


def c2_margin(system: System, flow: BranchFlow, injected: Floats) -> Margins:
    """Condition C2 of Gan, Li, Topcu & Low (2015): lossless voltages within the upper limits.

    The margin is ``v_max - v_lossless`` in squared per unit.
    """
    reverse_p, reverse_q = lossless_reverse_flow(system, flow, injected)
    rise = 2 * (flow.r * reverse_p + flow.x * reverse_q)
    rise[0] = 0.0
    lossless = flow.v[0] + path_sum(flow.tree, rise)
    slack = _voltage_bounds(system)[1][:, None] - lossless
    slack[0] = np.inf
    at = slack.argmin(axis=0)
    return Margins(slack[at, np.arange(slack.shape[1])], at)


def _voltage_bounds(system: System) -> tuple[Floats, Floats]:
    """Squared voltage bounds per node; a node without one gets the widest of the others."""
    limits, n = system.limits, system.network.tree.size
    low, high = np.full(n, np.nan), np.full(n, np.nan)
    for i in np.flatnonzero((limits.quantity == Quantity.VOLTAGE) & (limits.criterion >= 0)):
        k, bound = limits.element[i], limits.bound[i]
        if limits.upper[i]:
            high[k] = bound if np.isnan(high[k]) else min(high[k], bound)
        else:
            low[k] = bound if np.isnan(low[k]) else max(low[k], bound)
    low = np.where(np.isnan(low), np.nanmin(low, initial=1.0), low)
    high = np.where(np.isnan(high), np.nanmax(high, initial=1.0), high)
    return low, high
