"""An upper bound where a proof does not close: the plain relaxation, cut by flow ranges.

For ratings between ``low`` and ``high`` every AC point keeps its flows within ranges that follow
from the loads alone, leaf to source.  They give valid cuts (hull and secant, see
:mod:`proof.program`); where the cut relaxation is infeasible, no AC point lives there.
"""

from __future__ import annotations

import numpy as np

from feederhost.flow.limits import Quantity, System
from feederhost.flow.tree import Floats
from feederhost.proof.branchflow import BranchFlow, Seek
from feederhost.proof.program import Programme
from feederhost.proof.solver import Status
from feederhost.proof.valuing import Cuts, solve_row
from feederhost.settings import Settings


def upper_bound(
    programme: Programme,
    system: System,
    flow: BranchFlow,
    seek: Seek,
    column: int,
    rating: float,
    cap: float,
    solver: str,
    settings: Settings,
) -> float:
    """Return a rating that no operating point within the limits exceeds.

    Works down from the cap: an upper slice that is infeasible is cut off; where it is not, the
    relaxation's own optimum there is the bound, or a narrower slice is tried.
    """
    zero = np.zeros(flow.tree.size)
    low, high = (rating + cap) / 2, cap
    for _ in range(settings.bound_rounds):
        if high - low <= settings.solver_agreement * high:
            break
        cuts = flow_ranges(system, flow, seek, column, low, high, settings)
        if cuts is None:
            break
        found = solve_row(
            programme, system, flow, seek, column, zero, rating, high, solver, settings, cuts
        )
        status = found.answer.status
        if status is Status.INFEASIBLE:
            high = low
            low = (rating + high) / 2
        elif status is not Status.CLEAN:
            break  # an inexact answer bounds nothing
        elif found.g < high * (1 - settings.solver_agreement):
            high = max(found.g * (1 + settings.solver_agreement), low)
        else:
            low = (low + high) / 2  # a narrower slice has tighter ranges
    return high


def flow_ranges(
    system: System,
    flow: BranchFlow,
    seek: Seek,
    column: int,
    low: float,
    high: float,
    settings: Settings,
) -> Cuts | None:
    """Return ranges of P, Q, v_pi and ell that hold at every AC point with g in [low, high].

    None where they grow beyond use: on a long feeder without ratings the losses that cannot be
    ruled out add up from leaf to source.
    """
    useless = settings.range_limit * max(high, float(np.abs(flow.P[:, column]).max()))
    tree, limits = flow.tree, system.limits
    n, j, draw = tree.size, int(seek.node[column]), seek.draw[column]
    v = _voltage_range(system, flow, column)
    # No current is larger than what the voltages at both ends can drive through the branch.
    sending = v[np.maximum(tree.parent, 0), 1]
    with np.errstate(divide="ignore"):
        ell_max = (np.sqrt(sending) + np.sqrt(v[:, 1])) ** 2 / (flow.r**2 + flow.x**2)[:, 0]
    for end, shunt in ((Quantity.CURRENT_FROM, flow.y_from), (Quantity.CURRENT_TO, flow.y_to)):
        for i in np.flatnonzero((limits.quantity == end) & (limits.criterion >= 0)):
            k = limits.element[i]
            if not np.any(shunt[k]):
                ell_max[k] = min(ell_max[k], limits.bound[i])
    G, B = flow.G[:, column, None], flow.B[:, column, None]
    P = flow.p[:, column, None] + np.sort(G * v, axis=1)
    Q = flow.q[:, column, None] + np.sort(-B * v, axis=1)
    rating = np.array([low, high])
    P[j] += np.sort(draw.real * rating)
    Q[j] += np.sort(draw.imag * rating)
    ell = np.zeros((n, 2))
    for k in range(n - 1, 0, -1):
        # P[k], Q[k] hold what arrives at node k so far; losses make it what leaves the parent.
        square_p, square_q = _square_range(P[k]), _square_range(Q[k])
        ell[k, 0] = (square_p[0] + square_q[0]) / v[k, 1]
        ell[k, 1] = min((square_p[1] + square_q[1]) / v[k, 0], ell_max[k])
        ell[k, 0] = min(ell[k, 0], ell[k, 1])
        if not ell[k, 1] < useless**2:
            return None
        P[k] += flow.r[k] * ell[k]
        Q[k] += flow.x[k] * ell[k]
        P[tree.parent[k]] += P[k]
        Q[tree.parent[k]] += Q[k]
    return Cuts(low, high, P, Q, v[np.maximum(tree.parent, 0)], ell)


def _voltage_range(system: System, flow: BranchFlow, column: int) -> Floats:
    """Range of v from the limits; without an upper one, a wide one that no feeder reaches."""
    n, limits = flow.tree.size, system.limits
    v = np.tile([_LOWEST_V, _HIGHEST_V], (n, 1))
    for i in np.flatnonzero((limits.quantity == Quantity.VOLTAGE) & (limits.criterion >= 0)):
        k = limits.element[i]
        if limits.upper[i]:
            v[k, 1] = min(v[k, 1], limits.bound[i])
        else:
            v[k, 0] = max(v[k, 0], limits.bound[i])
    v[0] = flow.v[0, column]
    return v


# Squared per unit; only nodes without a voltage limit of their own fall back on these.
_LOWEST_V, _HIGHEST_V = 0.01, 4.0


def _square_range(ends: Floats) -> tuple[float, float]:
    squares = ends**2
    inside = ends[0] <= 0 <= ends[1]
    return (0.0 if inside else float(squares.min())), float(squares.max())
