"""Branch-flow quantities of AC operating points, and how each limit reads in them.

Balanced feeders: one phase carries the whole network, arrays are (n, m) with m rows of one
system side by side.  Constant-current load enters as its tangent at the AC point.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from feederhost.flow.limits import Quantity, System, head_power, sending_voltage
from feederhost.flow.network import OperatingPoint
from feederhost.flow.search import Plants, drawn_power
from feederhost.flow.sweep import Tangent, node_shunt
from feederhost.flow.tree import Complexes, Floats, Ints, Tree


@dataclass(frozen=True)
class BranchFlow:
    """AC points of one system in branch-flow variables (symbols: :mod:`flow.network`).

    Attributes
    ----------
    tree : Tree
    r, x : (n, 1) float
    y_from, y_to : (n, 1) complex
    P, Q, ell, v, v_pi : (n, m) float
        ``v_pi[k]`` is the squared voltage at the sending end of branch k.
    G, B : (n, m) float
        Node shunts, the tangent of constant-current load included: draws G v - jB v.
    p, q : (n, m) float
        What else the nodes draw, plants excluded.
    head : (m,) complex
        Power leaving the source node, plants included.
    """

    tree: Tree
    r: Floats
    x: Floats
    y_from: Complexes
    y_to: Complexes
    P: Floats
    Q: Floats
    ell: Floats
    v: Floats
    v_pi: Floats
    G: Floats
    B: Floats
    p: Floats
    q: Floats
    head: Complexes


@dataclass(frozen=True)
class Seek:
    """What is sought, per row: node, sign and reactive share of the plant, its limit.

    Attributes
    ----------
    node, limit : (m,) int
        Node of the plant; limit row met first.
    draw : (m,) complex
        Power drawn per unit of rating.
    """

    node: Ints
    draw: Complexes
    limit: Ints


@dataclass(frozen=True)
class Gradient:
    """Partial derivatives (n, m) of a limit written as ``h(P, Q, ell, v) <= 0``."""

    P: Floats
    Q: Floats
    ell: Floats
    v: Floats


def branch_flow(system: System, plants: Plants, point: OperatingPoint) -> BranchFlow:
    """Express AC points in branch-flow variables."""
    network, loading = system.network, system.loading
    if network.phases != 1:
        raise ValueError("the branch-flow form here is for one phase")
    V, J = point.V, point.J
    S = sending_voltage(network, V) * np.conj(J)
    size = np.abs(V)
    current = loading.current
    shunt = node_shunt(network, loading)
    G = shunt.real + current.real / (2 * size)
    B = shunt.imag - current.imag / (2 * size)
    base = drawn_power(system, plants, np.zeros(plants.node.size)) + current * size / 2
    z = network.z[:, 0, :]
    return BranchFlow(
        tree=network.tree,
        r=z.real,
        x=z.imag,
        y_from=network.y_from,
        y_to=network.y_to,
        P=S.real[:, 0],
        Q=S.imag[:, 0],
        ell=np.abs(J[:, 0]) ** 2,
        v=size[:, 0] ** 2,
        v_pi=np.abs(sending_voltage(network, V))[:, 0] ** 2,
        G=G[:, 0],
        B=B[:, 0],
        p=base.real[:, 0],
        q=base.imag[:, 0],
        head=head_power(point).sum(axis=0),
    )


def loss_current_slope(point: OperatingPoint, moved: Tangent) -> Floats:
    """Differentiate ell along a tangent, (n, m)."""
    return 2 * np.real(np.conj(point.J) * moved.J)[:, 0]


def limit_gradient(flow: BranchFlow, system: System, seek: Seek, *, reduced: bool) -> Gradient:
    """Gradient of each row's limit.

    A rating at the sending terminal reads, with y = g + j beta there,

        ell + |y|^2 v_pi + 2 (g P - beta Q) <= L

    and at the receiving terminal, with S - z ell arriving there,

        ell (1 + 2 (g r - beta x)) + |y|^2 v - 2 (g P - beta Q) <= L

    Both are linear.  With ``reduced`` the branch's own ell is replaced by (P^2 + Q^2) / v_pi:
    the sensitivity of the limit itself, as the loss prices need it.
    """
    limits = system.limits
    n, m = flow.P.shape
    columns = np.arange(m)
    grad = Gradient(*(np.zeros((n, m)) for _ in range(4)))
    quantity, k = limits.quantity[seek.limit], limits.element[seek.limit]
    parent = flow.tree.parent
    at = columns[quantity == Quantity.VOLTAGE]
    grad.v[k[at], at] = 1.0
    at = columns[quantity == Quantity.CURRENT_FROM]
    b = k[at]
    y = flow.y_from[b, 0]
    grad.P[b, at], grad.Q[b, at] = 2 * y.real, -2 * y.imag
    grad.ell[b, at] = 1.0
    grad.v[parent[b], at] = np.abs(y) ** 2
    at = columns[quantity == Quantity.CURRENT_TO]
    b = k[at]
    y = flow.y_to[b, 0]
    grad.P[b, at], grad.Q[b, at] = -2 * y.real, 2 * y.imag
    grad.ell[b, at] = 1 + 2 * (y.real * flow.r[b, 0] - y.imag * flow.x[b, 0])
    grad.v[b, at] = np.abs(y) ** 2
    first = np.flatnonzero(parent == 0)
    at = columns[quantity == Quantity.HEAD_POWER]
    grad.P[np.ix_(first, at)] = 1.0
    at = columns[quantity == Quantity.BANK_POWER]
    total = flow.head[at] + limits.bank_other
    grad.P[np.ix_(first, at)] = 2 * total.real
    grad.Q[np.ix_(first, at)] = 2 * total.imag
    sign = np.where(limits.upper[seek.limit], 1.0, -1.0)
    if reduced:
        _eliminate(flow, grad)
    return Gradient(grad.P * sign, grad.Q * sign, grad.ell * sign, grad.v * sign)


def _eliminate(flow: BranchFlow, grad: Gradient) -> None:
    """Replace ell of a branch by (P^2 + Q^2) / v_pi in a gradient, in place."""
    b, at = np.nonzero(grad.ell)
    own, P, Q, v = grad.ell[b, at], flow.P[b, at], flow.Q[b, at], flow.v_pi[b, at]
    grad.P[b, at] += own * 2 * P / v
    grad.Q[b, at] += own * 2 * Q / v
    grad.v[flow.tree.parent[b], at] -= own * (P**2 + Q**2) / v**2
    grad.ell[b, at] = 0.0
