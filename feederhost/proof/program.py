"""The branch-flow second-order-cone programme, as it reads on paper.

    maximise   g - sum_k w_k ell_k
    P_k = r_k ell_k + p_k + d_k g + G_k v_k + sum_children P         d: power drawn per rating
    Q_k = x_k ell_k + q_k + e_k g - B_k v_k + sum_children Q
    v_k = v_pi - 2 (r_k P_k + x_k Q_k) + |z_k|^2 ell_k
    ell_k v_pi >= P_k^2 + Q_k^2                                       (the relaxation)
    v_min <= v <= v_max, terminal currents, head and bank power within their limits

Baran & Wu 1989 (DistFlow); Farivar & Low 2013 (relaxation).  With every w zero it is the plain
programme.  The programme is compiled once per feeder and re-valued row by row; numbers are
scaled to the plant's own size before they reach the solver.
"""

from __future__ import annotations

from dataclasses import dataclass

import cvxpy as cp
import numpy as np
import scipy.sparse as sp

from feederhost.flow.limits import Limits, Quantity, System
from feederhost.flow.tree import Floats, Tree
from feederhost.proof.branchflow import BranchFlow, Seek
from feederhost.proof.solver import Answer, Status, solve


@dataclass(frozen=True)
class Relaxed:
    """Solution of a relaxation, per unit; every number is NaN where there is none.

    Attributes
    ----------
    g : float
        Rating.
    P, Q, ell, v : (n,) float
        Branch flows; row 0 belongs to the source (v: held voltage, the rest zero).
    cone : (n,) float
        Multipliers of the cones (T).
    loss_gap : float
        Fictitious loss, ``sum r (ell - (P^2 + Q^2) / v_pi)``.
    answer : Answer
    """

    g: float
    P: Floats
    Q: Floats
    ell: Floats
    v: Floats
    cone: Floats
    loss_gap: float
    answer: Answer


@dataclass(frozen=True)
class Cuts:
    """Ranges that hold for ratings in ``[low, high]``: they cut the plain relaxation.

    ``P, Q, v, ell`` are (n, 2) lower and upper ends (``v``: sending-end voltage).
    """

    low: float
    high: float
    P: Floats
    Q: Floats
    v: Floats
    ell: Floats


@dataclass(frozen=True)
class Programme:
    """A compiled programme with its parameters; ``key`` tells which systems it fits."""

    key: tuple[object, ...]
    problem: cp.Problem
    parameters: dict[str, cp.Parameter]
    variables: dict[str, cp.Variable]
    cones: cp.SOC
    branches_rated: dict[Quantity, np.ndarray]


def structure(system: System, *, cuts: bool = False) -> tuple[object, ...]:
    """Return what a compiled programme depends on: the tree and which limits exist."""
    limits = system.limits
    return (
        system.network.tree.parent.tobytes(),
        limits.quantity.tobytes(),
        limits.element.tobytes(),
        limits.upper.tobytes(),
        (limits.criterion >= 0).tobytes(),
        cuts,
    )


def compile_programme(system: System, *, cuts: bool = False) -> Programme:
    """Write the programme for systems of one structure (see the module's first lines)."""
    tree, limits = system.network.tree, system.limits
    N = tree.size - 1
    children, parents, from_source = _incidence(tree)
    par: dict[str, cp.Parameter] = {}

    def given(name: str, size: int = N, **kind: bool) -> cp.Parameter:
        par[name] = cp.Parameter(size, name=name, **kind)
        return par[name]

    P, Q, v = cp.Variable(N), cp.Variable(N), cp.Variable(N)
    ell, g = cp.Variable(N, nonneg=True), cp.Variable(1, nonneg=True)
    r, x, z2 = given("r"), given("x"), given("z2")
    # The held voltage is a variable so that no two parameters meet in a product (DPP).
    v_0 = cp.Variable(1)
    v_pi = parents @ v + from_source.T @ v_0
    balance = [
        P == cp.multiply(r, ell) + given("p") + given("d") * g
        + cp.multiply(given("G"), v) + children @ P,
        Q == cp.multiply(x, ell) + given("q") + given("e") * g
        - cp.multiply(given("B"), v) + children @ Q,
        v == v_pi - 2 * (cp.multiply(r, P) + cp.multiply(x, Q)) + cp.multiply(z2, ell),
    ]  # fmt: skip
    cones = cp.SOC(ell + v_pi, cp.vstack([2 * P, 2 * Q, ell - v_pi]), axis=0)
    within = [
        v_0 == given("source", 1),
        given("v_min") <= v,
        v <= given("v_max"),
        g <= given("cap", 1),
    ]
    rated: dict[Quantity, np.ndarray] = {}
    for end, sign, voltage in (
        (Quantity.CURRENT_FROM, 1.0, v_pi),
        (Quantity.CURRENT_TO, -1.0, v),
    ):
        k = limits.element[_real(limits) & (limits.quantity == end)] - 1
        rated[end] = k
        if k.size:
            name = end.name.lower()
            within.append(
                cp.multiply(given(f"{name}_ell", k.size), ell[k])
                + cp.multiply(given(f"{name}_y2", k.size), voltage[k])
                + sign * 2 * cp.multiply(given(f"{name}_g", k.size), P[k])
                - sign * 2 * cp.multiply(given(f"{name}_b", k.size), Q[k])
                <= given(f"{name}_max", k.size)
            )
    head_p = from_source @ P + given("head_p", 1)
    head_q = from_source @ Q + given("head_q", 1)
    kinds = _head_kinds(limits)
    if (Quantity.HEAD_POWER, True) in kinds:
        within.append(head_p <= given("import_max", 1))
    if (Quantity.HEAD_POWER, False) in kinds:
        within.append(-head_p <= given("export_max", 1))
    if (Quantity.BANK_POWER, True) in kinds:
        bank = cp.vstack([head_p + given("other_p", 1), head_q + given("other_q", 1)])
        within.append(cp.SOC(given("bank_max", 1), bank, axis=0))
    if cuts:
        within += _cut_constraints(given, g, P, Q, ell, v_pi)
    objective = cp.Maximize(cp.sum(g) - given("w", nonneg=True) @ ell)
    problem = cp.Problem(objective, [*balance, cones, *within])
    variables = {"g": g, "P": P, "Q": Q, "ell": ell, "v": v}
    return Programme(structure(system, cuts=cuts), problem, par, variables, cones, rated)


def solve_row(
    programme: Programme,
    system: System,
    flow: BranchFlow,
    seek: Seek,
    column: int,
    w: Floats,
    cap: float,
    scale: float,
    solver: str,
    cuts: Cuts | None = None,
) -> Relaxed:
    """Value the programme for one row and solve it.

    Parameters
    ----------
    flow, seek, column : BranchFlow, Seek, int
        The row's data; of the AC point only the tangent of constant-current load is used.
    w : (n,) float
        Loss prices; zeros give the plain programme.
    cap, scale : float
        Largest rating allowed; power that is made 1 before the numbers reach the solver.
    """
    _fill(programme, system, flow, seek, column, w, cap, scale)
    if cuts is not None:
        _fill_cuts(programme.parameters, cuts, scale)
    answer = solve(programme.problem, solver)
    return _unscale(programme, flow, column, scale, answer)


def _incidence(tree: Tree) -> tuple[sp.csr_matrix, sp.csr_matrix, sp.csr_matrix]:
    """Matrices over branches: sum over children, voltage of the parent, branches at the source."""
    N = tree.size - 1
    parent = tree.parent[1:]
    inner = np.flatnonzero(parent > 0)
    ones = np.ones(inner.size)
    children = sp.csr_matrix((ones, (parent[inner] - 1, inner)), shape=(N, N))
    at_source = np.flatnonzero(parent == 0)
    from_source = sp.csr_matrix(
        (np.ones(at_source.size), (np.zeros(at_source.size, int), at_source)), shape=(1, N)
    )
    return children, children.T.tocsr(), from_source


def _real(limits: Limits) -> np.ndarray:
    """Rows that limit (others are only watched)."""
    return limits.criterion >= 0


def _head_kinds(limits: Limits) -> set[tuple[Quantity, bool]]:
    rows = np.flatnonzero(_real(limits) & (limits.quantity >= Quantity.HEAD_POWER))
    return {(Quantity(int(limits.quantity[i])), bool(limits.upper[i])) for i in rows}


def _bounds(limits: Limits, n: int) -> tuple[Floats, Floats]:
    v_min, v_max = np.zeros(n), np.full(n, np.inf)
    for i in np.flatnonzero(limits.quantity == Quantity.VOLTAGE):
        k = limits.element[i]
        if limits.upper[i]:
            v_max[k] = min(v_max[k], limits.bound[i])
        else:
            v_min[k] = max(v_min[k], limits.bound[i])
    return v_min, v_max


# A bound this far out never binds (squared pu); the solvers take no infinite numbers.
_FREE = 100.0


def _fill(
    programme: Programme,
    system: System,
    flow: BranchFlow,
    seek: Seek,
    column: int,
    w: Floats,
    cap: float,
    s: float,
) -> None:
    """Set the parameters, with power in units of ``s`` (so z * s, y / s, ell / s^2)."""
    tree, limits, j = flow.tree, system.limits, int(seek.node[column])
    draw = seek.draw[column]
    at_plant = np.zeros(tree.size)
    at_plant[j] = 1.0
    z2 = flow.r**2 + flow.x**2
    v_min, v_max = _bounds(limits, tree.size)
    own = flow.p[0, column] + flow.G[0, column] * flow.v[0, column]
    own_q = flow.q[0, column] - flow.B[0, column] * flow.v[0, column]
    values: dict[str, Floats | float] = {
        "r": flow.r[1:, 0] * s, "x": flow.x[1:, 0] * s, "z2": z2[1:, 0] * s**2,
        "p": flow.p[1:, column] / s, "q": flow.q[1:, column] / s,
        "G": flow.G[1:, column] / s, "B": flow.B[1:, column] / s,
        "d": at_plant[1:] * draw.real, "e": at_plant[1:] * draw.imag,
        "source": float(flow.v[0, column]), "v_min": v_min[1:],
        "v_max": np.minimum(v_max, _FREE)[1:],
        "cap": cap / s, "w": w[1:] * s, "head_p": own / s, "head_q": own_q / s,
    }  # fmt: skip
    for end, k in programme.branches_rated.items():
        name = end.name.lower()
        rows = _real(limits) & (limits.quantity == end)
        y = (flow.y_from if end is Quantity.CURRENT_FROM else flow.y_to)[k + 1, 0]
        own_ell = np.ones(k.size)
        if end is Quantity.CURRENT_TO:
            own_ell += 2 * (y.real * flow.r[k + 1, 0] - y.imag * flow.x[k + 1, 0])
        values |= {
            f"{name}_ell": own_ell, f"{name}_y2": np.abs(y) ** 2 / s**2, f"{name}_g": y.real / s,
            f"{name}_b": y.imag / s, f"{name}_max": limits.bound[rows] / s**2,
        }  # fmt: skip
    for i in np.flatnonzero(_real(limits) & (limits.quantity >= Quantity.HEAD_POWER)):
        bound = float(limits.bound[i])
        if limits.quantity[i] == Quantity.BANK_POWER:
            values |= {
                "bank_max": np.sqrt(bound) / s, "other_p": limits.bank_other.real / s,
                "other_q": limits.bank_other.imag / s,
            }  # fmt: skip
        elif limits.upper[i]:
            values["import_max"] = bound / s
        else:
            values["export_max"] = -bound / s
    for name, value in values.items():
        if name in programme.parameters:
            programme.parameters[name].value = np.atleast_1d(value)


def _cut_constraints(given, g, P, Q, ell, v_pi) -> list[cp.Constraint]:  # type: ignore[no-untyped-def]
    """Secant and hull cuts over ranges that every AC point with g in [low, high] obeys.

    From ell v_pi = P^2 + Q^2: the product is above its McCormick plane, the squares are below
    their secants.  Hull cut: v_pi + v_lo v_hi / v_pi <= v_lo + v_hi (Li & Vittal 2017).
    """
    secant = (
        cp.multiply(given("cut_v_lo"), ell) + cp.multiply(given("cut_ell_lo"), v_pi)
        <= cp.multiply(given("cut_P"), P) + cp.multiply(given("cut_Q"), Q) + given("cut_free")
    )  # fmt: skip
    hull = (
        cp.multiply(given("cut_s2"), v_pi) + cp.multiply(given("cut_vv"), ell)
        <= given("cut_s2v")
    )  # fmt: skip
    return [secant, hull, ell <= given("cut_ell_hi"), given("cut_g_lo", 1) <= g]


def _fill_cuts(parameters: dict[str, cp.Parameter], cuts: Cuts, s: float) -> None:
    P, Q, ell, v = cuts.P[1:] / s, cuts.Q[1:] / s, cuts.ell[1:] / s**2, cuts.v[1:]
    s2 = np.max(P**2, axis=1) + np.max(Q**2, axis=1)
    # The hull cut is divided by the largest squared power so that its numbers stay near 1.
    size = np.maximum(s2, np.finfo(float).tiny)
    values = {
        "cut_v_lo": v[:, 0], "cut_ell_lo": ell[:, 0], "cut_ell_hi": ell[:, 1],
        "cut_P": P.sum(axis=1), "cut_Q": Q.sum(axis=1),
        "cut_free": ell[:, 0] * v[:, 0] - P.prod(axis=1) - Q.prod(axis=1),
        "cut_s2": s2 / size, "cut_vv": v.prod(axis=1) / size, "cut_s2v": v.sum(axis=1) * s2 / size,
        "cut_g_lo": np.atleast_1d(cuts.low / s),
    }  # fmt: skip
    for name, value in values.items():
        parameters[name].value = value


def _unscale(
    programme: Programme, flow: BranchFlow, column: int, s: float, answer: Answer
) -> Relaxed:
    n = flow.tree.size
    if answer.status not in (Status.CLEAN, Status.INACCURATE):
        none = np.full(n, np.nan)
        return Relaxed(np.nan, none, none, none, none, none, np.nan, answer)
    var = programme.variables

    def full(name: str, factor: float, first: float = 0.0) -> Floats:
        return np.concatenate([[first], np.asarray(var[name].value) * factor])

    P, Q, ell = full("P", s), full("Q", s), full("ell", s**2)
    v = full("v", 1.0, float(flow.v[0, column]))
    v_pi = v[np.maximum(flow.tree.parent, 0)]
    loss_gap = float((flow.r[:, 0] * (ell - (P**2 + Q**2) / v_pi))[1:].sum())
    # The cone's dual (a, b): its T follows from the ell - v_pi and ell + v_pi entries.
    a, b = programme.cones.dual_value
    a, b = np.ravel(np.asarray(a)), np.asarray(b).reshape(-1, n - 1)
    # min -g in units of s: T_scaled = (a + b_last) / v_pi scaled; see the stationarity of ell.
    cone = np.concatenate([[0.0], (a + b[-1]) / v_pi[1:] / s])
    return Relaxed(
        float(np.ravel(np.asarray(var["g"].value))[0]) * s, P, Q, ell, v, cone, loss_gap, answer
    )
