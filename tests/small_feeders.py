"""Small networks with their limits, the way from a search to a proof, and a nodal judge.

The nodal judge solves Y V + load(V) = 0 by Newton with the ideal ratios written out: no tree,
no sweep and no referral, so that it shares nothing with the engine it judges.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from feederhost.flow.limits import Limits, Quantity, System
from feederhost.flow.network import Loading, Network, OperatingPoint
from feederhost.flow.search import WATCHED, Plants, drawn_power, first_violations
from feederhost.flow.sweep import sweep, tangent
from feederhost.flow.tree import Tree
from feederhost.proof.branchflow import (
    BranchFlow,
    Gradient,
    Seek,
    branch_flow,
    limit_gradient,
    loss_current_slope,
)
from feederhost.proof.certificate import Certificate, certify
from feederhost.proof.pricing import loss_prices
from feederhost.proof.program import compile_programme
from feederhost.proof.valuing import Relaxed, solve_row
from feederhost.schema import LIMIT_CRITERIA, Criterion
from feederhost.settings import Settings

SETTINGS = Settings()
Row = tuple[int, Quantity, int, bool, float]


# --- networks -------------------------------------------------------------------------------


def network(
    parent: Sequence[int],
    z: Sequence[complex],
    *,
    sending: Mapping[int, complex] | None = None,
    receiving: Mapping[int, complex] | None = None,
) -> Network:
    """One-phase network; ``z`` from branch 1 on; terminal shunts by branch."""
    n = len(parent)
    series = np.zeros((n, 1, 1), complex)
    series[1:, 0, 0] = z
    return Network(
        Tree(np.array(parent)), series, _spread(n, sending), _spread(n, receiving), np.ones((n, 1))
    )


def loading(
    n: int,
    power: Mapping[int, complex] | None = None,
    *,
    current: Mapping[int, complex] | None = None,
    shunt: Mapping[int, complex] | None = None,
    source: complex = 1.0,
) -> Loading:
    """One-phase loading of one column, by node."""
    return Loading(
        _spread(n, power)[..., None],
        _spread(n, current)[..., None],
        _spread(n, shunt)[..., None],
        np.full((1, 1), source, complex),
    )


def _spread(n: int, values: Mapping[int, complex] | None) -> np.ndarray:
    out = np.zeros((n, 1), complex)
    for k, value in (values or {}).items():
        out[k, 0] += value
    return out


# --- limits (plain per unit in, squared where the engine squares) ----------------------------


def _code(criterion: Criterion) -> int:
    return LIMIT_CRITERIA.index(criterion)


def high(k: int, v: float, criterion: Criterion = Criterion.VOLTAGE_HIGH) -> Row:
    return _code(criterion), Quantity.VOLTAGE, k, True, v**2


def low(k: int, v: float, criterion: Criterion = Criterion.VOLTAGE_LOW) -> Row:
    return _code(criterion), Quantity.VOLTAGE, k, False, v**2


def rated_sending(k: int, amps: float) -> Row:
    return _code(Criterion.LINE_RATING), Quantity.CURRENT_FROM, k, True, amps**2


def rated_receiving(k: int, amps: float) -> Row:
    return _code(Criterion.LINE_RATING), Quantity.CURRENT_TO, k, True, amps**2


def head_export(p: float) -> Row:
    return _code(Criterion.HEAD_EXPORT), Quantity.HEAD_POWER, 0, False, -p


def head_import(p: float) -> Row:
    return _code(Criterion.HEAD_IMPORT), Quantity.HEAD_POWER, 0, True, p


def bank(s: float) -> Row:
    return _code(Criterion.BANK_RATING), Quantity.BANK_POWER, 0, True, s**2


def watched_export() -> Row:
    return -1, Quantity.HEAD_POWER, 0, False, 0.0


def band(n: int, v_min: float, v_max: float) -> list[Row]:
    """Voltage limits at every node but the source."""
    return [high(k, v_max) for k in range(1, n)] + [low(k, v_min) for k in range(1, n)]


def limits(rows: Sequence[Row], bank_other: complex = 0j) -> Limits:
    criterion, quantity, element, upper, bound = (
        (np.array(c) for c in zip(*rows, strict=True)) if rows else (np.zeros(0),) * 5
    )
    return Limits(criterion, quantity, element, np.zeros(len(rows)), upper, bound, bank_other)


def system(net: Network, load: Loading, rows: Sequence[Row], bank_other: complex = 0j) -> System:
    return System(net, load, limits(rows, bank_other))


def two_bus(r: float, x: float, rows: Sequence[Row], power: complex = 0j) -> System:
    return system(network([-1, 0], [complex(r, x)]), loading(2, {1: power}), rows)


# --- plants, searches, proofs ----------------------------------------------------------------


def plant(node: int, *, sigma: int = 1, t: float = 0.0, cap: float = 60.0) -> Plants:
    """One plant: sigma +1 exports, -1 imports; t reactive per active."""
    return plants([node], sigma=sigma, t=t, cap=cap)


def plants(nodes: Sequence[int], *, sigma: int = 1, t: float = 0.0, cap: float = 60.0) -> Plants:
    m = len(nodes)
    draw = np.full((m, 1), -sigma * complex(1, t))
    return Plants(np.array(nodes), draw, np.full(m, cap))


@dataclass(frozen=True)
class First:
    """First violation of one plant."""

    rating: float
    criterion: str
    row: int
    by_group: np.ndarray


def first(sys: System, one: Plants, settings: Settings = SETTINGS) -> First:
    """Return the first violation over all criteria."""
    found = first_violations(sys, one, settings)
    rating = found.rating[:, 0].copy()
    rating[WATCHED] = np.inf
    at = int(rating.argmin())
    names = [*map(str, LIMIT_CRITERIA), "watched", "no_solution"]
    criterion = names[at] if np.isfinite(rating[at]) else "none"
    return First(float(rating[at]), criterion, int(found.row[at, 0]), found.rating[:, 0])


@dataclass(frozen=True)
class Posed:
    """One row of a proof with everything it is made from."""

    system: System
    plant: Plants
    rating: float
    row: int
    point: OperatingPoint
    flow: BranchFlow
    seek: Seek
    prices: np.ndarray
    gradient: Gradient
    ell_slope: np.ndarray
    certificate: Certificate


def pose(
    sys: System, one: Plants, settings: Settings = SETTINGS, *, rating: float | None = None,
    row: int | None = None, prices: np.ndarray | None = None,
) -> Posed:  # fmt: skip
    """Search, then run the recursion; rating, row and prices may be forced."""
    if rating is None or row is None:
        found = first(sys, one, settings)
        rating, row = found.rating, found.row
    power = drawn_power(sys, one, np.array([rating]))
    point = sweep(sys.network, sys.loading, settings, power)
    change = np.zeros_like(power)
    change[one.node[0], :, 0] = one.draw[0]
    moved = tangent(sys.network, sys.loading, settings, point, power, change)
    flow = branch_flow(sys, one, point)
    seek = Seek(one.node, one.draw.sum(axis=1), np.array([row]))
    w = loss_prices(flow, sys, seek, np.array([rating]), settings) if prices is None else prices
    gradient = limit_gradient(flow, sys, seek, reduced=False)
    slope = loss_current_slope(point, moved)
    certificate = certify(flow, seek, gradient, w, slope, settings)
    return Posed(
        sys, one, rating, row, point, flow, seek, w, gradient, slope, certificate
    )  # fmt: skip


def relax(
    posed: Posed, *, prices: np.ndarray | None = None, solver: str = "clarabel",
    cap: float | None = None,
) -> Relaxed:  # fmt: skip
    """Solve the programme of a posed row; prices default to those of its certificate."""
    w = posed.certificate.prices[:, 0] if prices is None else prices
    return solve_row(
        compile_programme(posed.system), posed.system, posed.flow, posed.seek, 0, w,
        posed.rating, float(posed.plant.cap[0]) if cap is None else cap, solver, SETTINGS,
    )  # fmt: skip


def at_origin(sys: System, one: Plants, rating: float, settings: Settings = SETTINGS) -> Posed:
    """Pose a programme around an AC point of our choosing, for row 0 of the limits."""
    return pose(sys, one, settings, rating=rating, row=0)


# --- the nodal judge -------------------------------------------------------------------------


def nodal_matrix(
    parent: Sequence[int], z: np.ndarray, y_from: np.ndarray, y_to: np.ndarray, ratio: np.ndarray
) -> np.ndarray:
    """Admittance matrix (n f, n f) with an ideal ratio at each sending end.

    ``z`` (n, f, f), the others (n, f); behind the ratio the voltage is ratio * V_parent, and
    the current before it is ratio * the current behind (an ideal ratio conserves power).  The
    sending shunt stands at the parent node, before the ratio; z and the other shunt behind it.
    """
    n, f = ratio.shape
    Y = np.zeros((n, f, n, f), complex)
    for k in range(1, n):
        a, b = parent[k], k
        y, A = np.linalg.inv(z[k]), np.diag(ratio[k])
        Y[a, :, a] += A @ y @ A + np.diag(y_from[k])
        Y[a, :, b] -= A @ y
        Y[b, :, a] -= y @ A
        Y[b, :, b] += y + np.diag(y_to[k])
    return Y.reshape(n * f, n * f)


def nodal_voltages(
    Y: np.ndarray, power: np.ndarray, current: np.ndarray, shunt: np.ndarray, source: np.ndarray
) -> np.ndarray:
    """Newton on the nodal equations; node loads (n, f), held source voltage (f,)."""
    n, f = power.shape
    s, c = power.ravel()[f:], current.ravel()[f:]
    Z = (Y + np.diag(shunt.ravel()))[f:]
    V = np.tile(source, n).astype(complex)
    m = (n - 1) * f
    for _ in range(60):
        U = V[f:]
        size = np.abs(U)
        gap = Z @ V + np.conj(s / U) + np.conj(c) * U / size
        if np.abs(gap).max() < 1e-13:
            break
        own = Z[:, f:] + np.diag(np.conj(c) / (2 * size))
        other = np.diag(-np.conj(s) / np.conj(U) ** 2 - np.conj(c) * U**2 / (2 * size**3))
        J = np.block([
            [(own + other).real, (other - own).imag],
            [(own + other).imag, (own - other).real],
        ])  # fmt: skip
        step = np.linalg.solve(J, -np.concatenate([gap.real, gap.imag]))
        V[f:] += step[:m] + 1j * step[m:]
    else:
        raise AssertionError("the nodal judge found no solution")
    return V.reshape(n, f)


def judge(net: Network, load: Loading, ratio: np.ndarray | None = None) -> np.ndarray:
    """Voltages (n, phases) of one column by the nodal judge."""
    ratio = np.ones((net.tree.size, net.phases)) if ratio is None else ratio
    Y = nodal_matrix(net.tree.parent.tolist(), net.z, net.y_from, net.y_to, ratio)
    return nodal_voltages(
        Y, load.power[..., 0], load.current[..., 0], load.shunt[..., 0], load.source[:, 0]
    )
