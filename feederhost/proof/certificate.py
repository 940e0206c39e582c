"""The proof that needs no solver: a primal-dual pair from a recursion on the tree.

At an AC point every cone is tight, so complementarity leaves one scalar T_k per cone.
Stationarity of the priced programme (see :mod:`proof.program`) is then linear on the tree:

    down:   y^p_k = y^p_pi - 2 r_k y^v_k - 2 T_k P_k - m h_P      (zero at the source; y^q alike)
    up:     y^v_k = sum_children (y^v_c + T_c ell_c) - m h_v + G_k y^p_k - B_k y^q_k
    local:  T_k v_pi = w_k + m h_ell - r_k y^p_k - x_k y^q_k - |z_k|^2 y^v_k
    scale:  sigma (y^p_j + t y^q_j) = 1                            (fixes the one multiplier m)

with h the limit met first.  If every T_k >= 0 and m > 0 the pair is feasible with no gap:
the AC point is the optimum of the priced relaxation (Boyd & Vandenberghe, Convex Optimization,
section 5.5.3).  Shares no code with the programme it proves.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from feederhost.flow.tree import Floats, path_sum, subtree_sum
from feederhost.proof.branchflow import BranchFlow, Gradient, Seek
from feederhost.settings import Settings


@dataclass(frozen=True)
class Multipliers:
    """Multipliers of m rows: y^p, y^q, y^v and cone multipliers T, (n, m) each."""

    p: Floats
    q: Floats
    v: Floats
    T: Floats


@dataclass(frozen=True)
class Certificate:
    """Outcome of the recursion for m rows.

    Attributes
    ----------
    multipliers : Multipliers
    prices : (n, m) float
        Loss prices w in force, raised where a cone multiplier asked for it.
    limit_multiplier : (m,) float
        Multiplier of the limit met first.
    smallest : (m,) float
        Smallest cone multiplier over the largest.
    residual : (m,) float
        Largest stationarity or scale residual.
    objective_margin : (m,) float
        Rise of the priced objective per unit of rating.
    closes : (m,) bool
    """

    multipliers: Multipliers
    prices: Floats
    limit_multiplier: Floats
    smallest: Floats
    residual: Floats
    objective_margin: Floats
    closes: np.ndarray


def certify(
    flow: BranchFlow,
    seek: Seek,
    gradient: Gradient,
    prices: Floats,
    ell_slope: Floats,
    settings: Settings,
) -> Certificate:
    """Run the recursion, raising prices on branches whose cone multiplier is negative.

    Parameters
    ----------
    gradient : Gradient
        Of each row's limit, with ell as a variable of its own.
    prices, ell_slope : (n, m) float
        Loss prices; derivative of ell with the rating at the AC point.
    """
    with np.errstate(all="ignore"):
        return _certify(flow, seek, gradient, prices.copy(), ell_slope, settings)


def _certify(
    flow: BranchFlow,
    seek: Seek,
    gradient: Gradient,
    w: Floats,
    ell_slope: Floats,
    settings: Settings,
) -> Certificate:
    """Certify with prices ``w``, which are raised in place; numbers may run away, and are seen."""
    solved, limit = _scaled(flow, seek, gradient, w, settings)
    for _ in range(settings.price_raises):
        short = solved.T < -_allowed(solved, w, settings)
        rising = (w * ell_slope)[1:].sum(axis=0) < 1
        rows = np.flatnonzero(short.any(axis=0) & (limit > 0) & rising)
        if rows.size == 0:
            break
        lift = np.where(short, -solved.T * flow.v_pi, 0.0)[:, rows]
        w[:, rows] += (1 + settings.price_margin) * lift
        part = _pick_flow(flow, rows)
        again, limit[rows] = _scaled(
            part, _pick_seek(seek, rows), _pick_gradient(gradient, rows), w[:, rows], settings
        )
        for name in ("p", "q", "v", "T"):
            getattr(solved, name)[:, rows] = getattr(again, name)
    residual = _residual(flow, seek, gradient, w, solved, limit)
    largest = solved.T.max(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        smallest = solved.T[1:].min(axis=0) / largest
    margin = 1 - (w * ell_slope)[1:].sum(axis=0)
    closes = (
        (residual <= settings.recursion_tolerance)
        & (smallest >= -settings.multiplier_tolerance)
        & ~(solved.T < -_allowed(solved, w, settings)).any(axis=0)
        & (limit > 0)
        & (margin > 0)
    )
    return Certificate(solved, w, limit, smallest, residual, margin, closes)


def _allowed(y: Multipliers, w: Floats, settings: Settings) -> Floats:
    """How far below zero a cone multiplier may be, (m,): rounding of the largest, or of a price.

    The prices count because one huge multiplier would hide a negative one elsewhere.
    """
    size = np.minimum(y.T.max(axis=0), w.max(axis=0))
    return settings.multiplier_tolerance * size


def multipliers_at(
    flow: BranchFlow,
    gradient: Gradient,
    prices: Floats,
    limit: Floats,
    settings: Settings,
    *,
    cones: bool = True,
) -> Multipliers:
    """Solve the recursion for given multipliers ``limit`` (m,) of the limit.

    Without ``cones`` every T is zero: the sensitivities of the relaxation's linear part.
    """
    shape = flow.P.shape
    y = Multipliers(*(np.zeros(shape) for _ in range(4)))
    z2 = flow.r**2 + flow.x**2
    for _ in range(settings.recursion_limit):
        lost = flow.ell * y.T
        own = lost - limit * gradient.v + flow.G * y.p - flow.B * y.q
        v = subtree_sum(flow.tree, own) - lost
        down_p = 2 * flow.r * v + 2 * y.T * flow.P + limit * gradient.P
        down_q = 2 * flow.x * v + 2 * y.T * flow.Q + limit * gradient.Q
        down_p[0] = down_q[0] = 0.0
        p, q = -path_sum(flow.tree, down_p), -path_sum(flow.tree, down_q)
        T = np.zeros(shape)
        if cones:
            T = (prices + limit * gradient.ell - flow.r * p - flow.x * q - z2 * v) / flow.v_pi
            T[0] = 0.0
        step = np.zeros(shape[1])
        for new, old in ((p, y.p), (q, y.q), (T, y.T)):
            size = np.abs(new).max(axis=0)
            step = np.maximum(step, np.abs(new - old).max(axis=0) / np.where(size > 0, size, 1.0))
        y = Multipliers(p, q, v, T)
        if not np.any((step > settings.recursion_step) & np.isfinite(step)):
            break
    return y


def _scaled(
    flow: BranchFlow, seek: Seek, gradient: Gradient, w: Floats, settings: Settings
) -> tuple[Multipliers, Floats]:
    """Fix the limit's multiplier by the scale condition; everything is affine in it."""
    m = seek.node.size
    columns = np.arange(m)
    at0 = multipliers_at(flow, gradient, w, np.zeros(m), settings)
    at1 = multipliers_at(flow, gradient, w, np.ones(m), settings)
    worth0, worth1 = (_worth(seek, y, columns) for y in (at0, at1))
    with np.errstate(divide="ignore", invalid="ignore"):
        limit = (1 - worth0) / (worth1 - worth0)

    def blend(a: Floats, b: Floats) -> Floats:
        return a + limit * (b - a)

    with np.errstate(invalid="ignore", over="ignore"):
        blended = Multipliers(
            blend(at0.p, at1.p), blend(at0.q, at1.q), blend(at0.v, at1.v), blend(at0.T, at1.T)
        )
    return blended, limit


def _worth(seek: Seek, y: Multipliers, columns: np.ndarray) -> Floats:
    """Return sigma (y^p_j + t y^q_j), what one more unit of rating is worth."""
    j = seek.node
    return -(seek.draw.real * y.p[j, columns] + seek.draw.imag * y.q[j, columns])


def _residual(
    flow: BranchFlow,
    seek: Seek,
    gradient: Gradient,
    w: Floats,
    y: Multipliers,
    limit: Floats,
) -> Floats:
    """Largest residual of the stationarity equations, each over its own largest term, (m,)."""
    parent = flow.tree.parent[1:]
    P, Q, r, x = flow.P[1:], flow.Q[1:], flow.r[1:], flow.x[1:]
    p, q, v, T = y.p[1:], y.q[1:], y.v[1:], y.T[1:]
    up = np.zeros_like(y.v)
    np.add.at(up, parent, v + T * flow.ell[1:])
    # The recursion's own zero at the source: y^p_0 = y^q_0 = 0.
    equations = (
        (p, -y.p[parent], 2 * r * v, 2 * T * P, limit * gradient.P[1:]),
        (q, -y.q[parent], 2 * x * v, 2 * T * Q, limit * gradient.Q[1:]),
        (v, -up[1:], limit * gradient.v[1:], -flow.G[1:] * p, flow.B[1:] * q),
        (
            w[1:], limit * gradient.ell[1:], -r * p, -x * q, -(r**2 + x**2) * v,
            -T * flow.v_pi[1:],
        ),
    )  # fmt: skip
    worst = np.abs(_worth(seek, y, np.arange(seek.node.size)) - 1)
    for terms in equations:
        size = np.max([np.abs(t).max(axis=0) for t in terms], axis=0)
        gap = np.abs(sum(terms)).max(axis=0)
        with np.errstate(invalid="ignore", divide="ignore"):
            worst = np.maximum(worst, gap / np.where(size > 0, size, 1.0))
    return np.where(np.isfinite(worst), worst, np.inf)


def _pick_flow(flow: BranchFlow, rows: np.ndarray) -> BranchFlow:
    def pick(a: Floats) -> Floats:
        return a if a.shape[1] == 1 else a[:, rows]

    names = ("P", "Q", "ell", "v", "v_pi", "G", "B", "p", "q")
    picked: dict[str, Any] = {s: pick(getattr(flow, s)) for s in names}
    return replace(flow, head=flow.head[rows], **picked)


def _pick_seek(seek: Seek, rows: np.ndarray) -> Seek:
    return Seek(seek.node[rows], seek.draw[rows], seek.limit[rows])


def _pick_gradient(gradient: Gradient, rows: np.ndarray) -> Gradient:
    return Gradient(*(getattr(gradient, s)[:, rows] for s in ("P", "Q", "ell", "v")))
