"""The branch-flow second-order-cone programme, as it reads on paper.

    maximise   g - sum_k w_k ell_k
    P_k = r_k ell_k + p_k + d_k g + G_k v_k + sum_children P         d: power drawn per rating
    Q_k = x_k ell_k + q_k + e_k g - B_k v_k + sum_children Q
    v_k = v_pi - 2 (r_k P_k + x_k Q_k) + |z_k|^2 ell_k
    ell_k v_pi >= P_k^2 + Q_k^2                                       (the relaxation)
    v_min <= v <= v_max, terminal currents, head and bank power within their limits

Baran & Wu 1989 (DistFlow); Farivar & Low 2013 (relaxation).  With every w zero it is the plain
programme.  It is compiled once per feeder and re-valued row by row
(:mod:`proof.valuing`, which also says why its variables are deviations from an origin).
"""

from __future__ import annotations

from dataclasses import dataclass

import cvxpy as cp
import numpy as np
import scipy.sparse as sp

from feederhost.flow.limits import Limits, Quantity, System
from feederhost.flow.tree import Tree
from feederhost.proof.solver import SOLVERS


@dataclass(frozen=True)
class Programme:
    """A compiled programme with its parameters; ``key`` tells which systems it fits.

    ``problems`` holds it once per solver, on the same variables and parameters.
    """

    key: tuple[object, ...]
    problems: dict[str, cp.Problem]
    parameters: dict[str, cp.Parameter]
    variables: dict[str, cp.Variable]
    cones: cp.SOC
    rated: dict[Quantity, np.ndarray]


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
    """Write the programme for systems of one structure (see the module's first lines).

    Every symbol stands for its deviation from the origin; ``_0`` marks the origin itself and
    ``res_`` its residuals.
    """
    tree, limits = system.network.tree, system.limits
    N = tree.size - 1
    children, from_source = _incidence(tree)
    par: dict[str, cp.Parameter] = {}

    def given(name: str, size: int | tuple[()] = N, **kind: bool) -> cp.Parameter:
        par[name] = cp.Parameter(size, name=name, **kind)
        return par[name]

    P, Q, ell, v = (cp.Variable(N) for _ in range(4))
    g = cp.Variable()
    v_pi = children.T @ v
    # Powers of children in the unit of their parent.
    scaled = given("ratio")
    balance = [
        P == cp.multiply(given("r"), ell) + cp.multiply(given("d"), g) + cp.multiply(given("G"), v)
        + children @ cp.multiply(scaled, P) + given("res_P"),
        Q == cp.multiply(given("x"), ell) + cp.multiply(given("e"), g) - cp.multiply(given("B"), v)
        + children @ cp.multiply(scaled, Q) + given("res_Q"),
        v == v_pi - 2 * (cp.multiply(given("r_v"), P) + cp.multiply(given("x_v"), Q))
        + cp.multiply(given("z2_v"), ell) + given("res_v"),
    ]  # fmt: skip
    squared_voltage = cp.multiply(given("volt", ()), v_pi) + given("v_pi_0")
    squared_current = ell + given("ell_0")
    flow = [2 * (P + given("P_0")), 2 * (Q + given("Q_0"))]
    cones = cp.SOC(
        squared_current + squared_voltage,
        cp.vstack([*flow, squared_current - squared_voltage]),
        axis=0,
    )
    within = [
        given("v_min") <= cp.multiply(given("v_min_unit"), v),
        cp.multiply(given("v_max_unit"), v) <= given("v_max"),
        -1 <= g,
        g <= given("cap", ()),
    ]
    rated: dict[Quantity, np.ndarray] = {}
    for end, voltage in ((Quantity.CURRENT_FROM, v_pi), (Quantity.CURRENT_TO, v)):
        k = limits.element[limiting(limits) & (limits.quantity == end)] - 1
        rated[end] = k
        if k.size:
            name = end.name.lower()
            within.append(
                cp.multiply(given(f"{name}_ell", k.size), ell[k])
                + cp.multiply(given(f"{name}_v", k.size), voltage[k])
                + cp.multiply(given(f"{name}_P", k.size), P[k])
                + cp.multiply(given(f"{name}_Q", k.size), Q[k])
                <= given(f"{name}_room", k.size)
            )
    head = given("head_unit")
    head_P, head_Q = (from_source @ cp.multiply(head, power) for power in (P, Q))
    kinds = _head_kinds(limits)
    if (Quantity.HEAD_POWER, True) in kinds:
        within.append(head_P <= given("import_room", 1))
    if (Quantity.HEAD_POWER, False) in kinds:
        within.append(-head_P <= given("export_room", 1))
    if (Quantity.BANK_POWER, True) in kinds:
        bank = cp.vstack([head_P + given("bank_P_0", 1), head_Q + given("bank_Q_0", 1)])
        within.append(cp.SOC(given("bank_max", 1), bank, axis=0))
    if cuts:
        within += [
            cp.multiply(given("secant_ell"), ell) + cp.multiply(given("secant_v"), v_pi)
            <= cp.multiply(given("secant_P"), P) + cp.multiply(given("secant_Q"), Q)
            + given("secant_room"),
            cp.multiply(given("hull_v"), v_pi) + cp.multiply(given("hull_ell"), ell)
            <= given("hull_room"),
            ell <= given("ell_room"), given("g_low", ()) <= g,
        ]  # fmt: skip
    objective = cp.Maximize(g - given("w", nonneg=True) @ ell)
    problems = {name: cp.Problem(objective, [*balance, cones, *within]) for name in SOLVERS}
    variables = {"g": g, "P": P, "Q": Q, "ell": ell, "v": v}
    return Programme(structure(system, cuts=cuts), problems, par, variables, cones, rated)


def _incidence(tree: Tree) -> tuple[sp.csr_matrix, sp.csr_matrix]:
    """Matrices over branches: sum over children, and sum over branches at the source."""
    N = tree.size - 1
    parent = tree.parent[1:]
    inner = np.flatnonzero(parent > 0)
    ones = np.ones(inner.size)
    children = sp.csr_matrix((ones, (parent[inner] - 1, inner)), shape=(N, N))
    first = np.flatnonzero(parent == 0)
    row = np.zeros(first.size, dtype=int)
    from_source = sp.csr_matrix((np.ones(first.size), (row, first)), shape=(1, N))
    return children, from_source


def limiting(limits: Limits) -> np.ndarray:
    """Rows that limit (others are only watched)."""
    return limits.criterion >= 0


def _head_kinds(limits: Limits) -> set[tuple[Quantity, bool]]:
    rows = np.flatnonzero(limiting(limits) & (limits.quantity >= Quantity.HEAD_POWER))
    return {(Quantity(int(limits.quantity[i])), bool(limits.upper[i])) for i in rows}
