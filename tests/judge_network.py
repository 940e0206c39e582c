"""The judge's own power flow: nodal equations of one case, solved by Newton.

The unknowns are all node voltages and, for the source, every switch and every regulator, the
current through it (modified nodal analysis), so a switch or an ideal ratio is an exact
constraint and its current is known without any merging of nodes.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.sparse import coo_matrix, csc_matrix, csr_matrix
from scipy.sparse.linalg import splu

from judge_tables import Feeder, Row, demand, source_voltage

MISMATCH = 1e-11  # power mismatch of a solution, pu on 1 MVA


class NoSolution(Exception):  # noqa: N818 - a verdict of the search, not a fault
    """The base case has no power flow solution."""


@dataclass(frozen=True)
class Circuit:
    """The nodal equations M x + load(V) = rhs of one case, with a plant at one node.

    ``x`` holds the n node voltages, then the currents of the constraints: source (into the
    feeder), then every link (into its to_node).  ``unit`` is what the plant injects per kW of
    rating (pu).
    """

    n: int
    matrix: csr_matrix
    rhs: np.ndarray
    s_i: np.ndarray
    s_p: np.ndarray
    plant: int
    unit: complex
    jacobian: csc_matrix
    constant: np.ndarray
    diagonal: np.ndarray
    tolerance: float


def build(
    feeder: Feeder, ratios: np.ndarray, drawn: np.ndarray, v_source: complex,
    z_source: complex = 0.0, plant: int = 0, unit: complex = 0.0,
) -> Circuit:  # fmt: skip
    """Assemble the equations; with ``z_source`` the held voltage stands behind it."""
    n = len(feeder.nodes)
    m = n + 1 + len(feeder.links)
    entries: list[tuple[int, int, complex]] = []
    for s in feeder.series:
        a = s.y + 1j * s.b_half
        entries += [(s.f, s.f, a / s.tap**2), (s.f, s.t, -s.y / s.tap),
                    (s.t, s.f, -s.y / s.tap), (s.t, s.t, a)]  # fmt: skip
    entries += [(i, i, y) for i, y in enumerate(feeder.shunt + drawn[0].conj()) if y]
    rhs = np.zeros(m, complex)
    root = feeder.root
    # The held voltage: V_root + z I = v_source, I flows into the feeder at the root.
    entries += [(root, n, -1.0), (n, root, 1.0), (n, n, z_source)]
    rhs[n] = v_source
    for k, link in enumerate(feeder.links):
        c, a = n + 1 + k, ratios[k]
        entries += [(link.f, c, a), (link.t, c, -1.0), (c, link.f, -a), (c, link.t, 1.0)]
    row, col, val = (np.array(v) for v in zip(*entries, strict=True))
    matrix = coo_matrix((val.astype(complex), (row, col)), shape=(m, m)).tocsr()
    i = np.arange(n)
    corners = ((i, i), (i, i + m), (i + m, i), (i + m, i + m))
    re, im = val.real, val.imag
    big = coo_matrix(
        (
            np.concatenate([re, -im, im, re, np.zeros(4 * n)]),
            (
                np.concatenate([row, row, row + m, row + m] + [c[0] for c in corners]),
                np.concatenate([col, col + m, col, col + m] + [c[1] for c in corners]),
            ),
        ),
        shape=(2 * m, 2 * m),
    ).tocsc()
    big.sort_indices()
    place = np.repeat(np.arange(2 * m), np.diff(big.indptr)) * (2 * m) + big.indices
    diagonal = np.array([np.searchsorted(place, c[1] * (2 * m) + c[0]) for c in corners])
    # Rounding floor of the residual: the largest admittance times the unit in the last place.
    floor = 64 * np.finfo(float).eps * abs(matrix).sum(axis=1).max()
    return Circuit(n, matrix, rhs, drawn[1], drawn[2], plant, complex(unit), big, big.data.copy(),
                   diagonal, max(MISMATCH, float(floor)))  # fmt: skip


def newton(
    c: Circuit, g: float, x: np.ndarray, most: int = 20
) -> tuple[np.ndarray, np.ndarray] | None:
    """Solve at rating g (kW) from start x: the solution and its derivative dx/dg, or None."""
    n, m = c.n, len(x)
    s_p = c.s_p.copy()
    s_p[c.plant] -= g * c.unit
    lu = None
    for _ in range(most):
        v = x[:n]
        size = abs(v)
        if not np.isfinite(size).all() or size.min() < 1e-3 or size.max() > 1e3:
            return None
        drawn = (s_p / v).conj() + c.s_i.conj() * v / size
        residual = c.matrix @ x - c.rhs
        residual[:n] += drawn
        weight = np.ones(m)
        weight[:n] = size
        done = (abs(residual) * weight).max() <= c.tolerance
        if done and lu is not None:
            break
        alpha = c.s_i.conj() / (2 * size)
        beta = -s_p.conj() / v.conj() ** 2 - c.s_i.conj() * v**2 / (2 * size**3)
        data = c.constant.copy()
        data[c.diagonal[0]] += alpha.real + beta.real
        data[c.diagonal[1]] += beta.imag - alpha.imag
        data[c.diagonal[2]] += beta.imag + alpha.imag
        data[c.diagonal[3]] += alpha.real - beta.real
        c.jacobian.data[:] = data
        try:
            lu = splu(c.jacobian)
        except RuntimeError:  # exactly singular
            return None
        step = lu.solve(-np.concatenate([residual.real, residual.imag]))
        x = x + step[:m] + 1j * step[m:]
    else:
        return None
    slope = np.zeros(m, complex)
    slope[c.plant] = (c.unit / x[c.plant]).conjugate()
    step = lu.solve(np.concatenate([slope.real, slope.imag]))
    return x, step[:m] + 1j * step[m:]


def solve_base(c: Circuit, start: np.ndarray | None = None) -> tuple[np.ndarray, np.ndarray]:
    """Solve at rating 0, from a start or from no load; by growing load where that fails."""
    if start is not None and (found := newton(c, 0.0, start)) is not None:
        return found
    m = len(c.rhs)
    first = newton(replace(c, s_i=0 * c.s_i, s_p=0 * c.s_p), 0.0, np.ones(m, complex))
    if first is None:
        raise NoSolution("no solution even without load")
    x, share, step = first[0], 0.0, 1.0
    while share < 1:
        part = min(1.0, share + step)
        found = newton(replace(c, s_i=part * c.s_i, s_p=part * c.s_p), 0.0, x)
        # A jump this large from a neighbouring load level is the other branch of solutions.
        if found is None or abs(found[0][: c.n] - x[: c.n]).max() > 0.4:
            step /= 2
            if step < 1e-6:
                raise NoSolution("the base case has no solution")
            continue
        x, share, step = found[0], part, step * 1.5
    assert found is not None
    return found


def taps_found(feeder: Feeder, case: Row) -> np.ndarray:
    """Return the tap (steps from neutral) of every link in the base run; switches 0."""
    taps = np.array([float(k.row.get("tap", 0.0)) for k in feeder.links])
    moving = _moving(feeder)
    drawn, v = demand(feeder, case, None), source_voltage(feeder, case)
    x = None
    for _ in range(100 if moving else 0):
        before = taps.copy()
        for k in moving:
            row, last = feeder.links[k].row, 0
            half = float(row.get("steps", 32)) / 2
            while True:
                x, _ = solve_base(build(feeder, ratios_of(feeder, taps), drawn, v), x)
                error = abs(x[feeder.links[k].t]) - _setpoint(feeder, k)
                way = -1 if error > 0 else 1
                inside = abs(error) <= float(row.get("bandwidth_pu", 0.0167)) / 2
                if inside or way == -last or abs(taps[k] + way) > half:
                    break
                taps[k] += way
                last = way
        if (taps == before).all():
            break
    return taps


def held_ratios(feeder: Feeder, case: Row, direction: str) -> np.ndarray:
    """Return the ratio of every link held in hosting: base voltage on the worse band edge."""
    if float(feeder.limits["regulator_edge"]) == 0:
        return ratios_of(feeder, taps_found(feeder, case))
    ratios = ratios_of(feeder, np.array([float(k.row.get("tap", 0.0)) for k in feeder.links]))
    moving = _moving(feeder)
    drawn, v = demand(feeder, case, None), source_voltage(feeder, case)
    sign = 1 if direction == "export" else -1
    x = None
    for _ in range(500 if moving else 0):
        before = ratios.copy()
        for k in moving:
            row = feeder.links[k].row
            edge = _setpoint(feeder, k) + sign * float(row.get("bandwidth_pu", 0.0167)) / 2
            x, _ = solve_base(build(feeder, ratios, drawn, v), x)
            reach = float(row.get("range_pct", 10)) / 100
            ratios[k] = min(max(ratios[k] * edge / abs(x[feeder.links[k].t]), 1 - reach), 1 + reach)
        if abs(ratios - before).max() < 1e-14:
            break
    return ratios


def _moving(feeder: Feeder) -> list[int]:
    """Regulators whose tap is found, from the source outwards."""
    moving = [k for k, a in enumerate(feeder.links) if a.kind == "regulator" and "tap" not in a.row]
    return sorted(moving, key=lambda k: feeder.depth[feeder.links[k].f])


def _setpoint(feeder: Feeder, k: int) -> float:
    row = feeder.links[k].row
    if "setpoint_kv" in row:
        return float(row["setpoint_kv"] / feeder.kv[feeder.links[k].t])
    return float(row["setpoint_pu"])


def ratios_of(feeder: Feeder, taps: np.ndarray) -> np.ndarray:
    """Return the ratio of every link from its tap; 1 for switches."""
    return np.array([
        1 + float(k.row.get("range_pct", 10)) / 100 * tap / (float(k.row.get("steps", 32)) / 2)
        if k.kind == "regulator" else 1.0
        for k, tap in zip(feeder.links, taps, strict=True)
    ])  # fmt: skip
