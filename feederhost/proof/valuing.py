"""Numbers for the programme of one row, and its solution back in per unit.

A plant of 10 kW on a feeder of 10 MW would drown in a solver's tolerance.  So the variables are
deviations from an origin (the AC point), in units of each branch's own power and of the plant's
own effect: an exact change of variables that leaves the optimum where it is.  What the origin
lacks to satisfy an equation enters as its residual, so nothing rests on the origin being a
solution.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from feederhost.flow.limits import Limits, Quantity, System
from feederhost.flow.tree import Floats, path
from feederhost.proof.branchflow import BranchFlow, Seek
from feederhost.proof.program import Programme, limiting
from feederhost.proof.solver import Answer, Status, solve
from feederhost.settings import Settings

Values = dict[str, Floats | float]


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
class Origin:
    """Where one row's deviations start, and their units: x = origin + unit * deviation.

    ``rating``, ``power`` and ``volt`` are the units of g, of P, Q (squared: of ell) and of v;
    the power unit is each branch's own, (n,).
    """

    g: float
    P: Floats
    Q: Floats
    ell: Floats
    v: Floats
    v_pi: Floats
    rating: float
    power: Floats
    volt: float


def solve_row(
    programme: Programme,
    system: System,
    flow: BranchFlow,
    seek: Seek,
    column: int,
    w: Floats,
    rating: float,
    cap: float,
    solver: str,
    settings: Settings,
    cuts: Cuts | None = None,
) -> Relaxed:
    """Value the programme for one row and solve it.

    Parameters
    ----------
    flow, seek, column : BranchFlow, Seek, int
        The row's data; its AC point is the origin of the variables.
    w : (n,) float
        Loss prices; zeros give the plain programme.
    rating, cap : float
        Rating at the origin, which is also its unit; largest rating allowed.
    """
    origin = _origin(flow, seek, column, rating, cap, settings)
    values = _network_values(flow, seek, column, origin)
    values |= _limit_values(programme, system, flow, column, origin, cap)
    values["w"] = (w * origin.power**2 / origin.rating)[1:]
    if cuts is not None:
        values |= _cut_values(cuts, origin)
    for name, parameter in programme.parameters.items():
        parameter.value = np.reshape(values[name], parameter.shape)
    answer = solve(programme.problems, solver, settings)
    return _solution(programme, flow, origin, answer)


def _origin(
    flow: BranchFlow, seek: Seek, column: int, rating: float, cap: float, settings: Settings
) -> Origin:
    P, Q, v = flow.P[:, column], flow.Q[:, column], flow.v[:, column]
    draw = seek.draw[column]
    # A rating of nothing still needs a unit: the share that an idle branch has.
    unit = rating if rating >= settings.tiny_rating else settings.idle_share * cap
    on_path = path(flow.tree, int(seek.node[column]))
    power = np.hypot(P, Q)
    power[on_path] = np.maximum(power[on_path], unit * abs(draw))
    power = np.maximum(power, settings.idle_share * power.max())
    # What the plant does to the squared voltage at its node, losses aside.
    effect = 2 * (flow.r[on_path] * abs(draw.real) + flow.x[on_path] * abs(draw.imag)).sum() * unit
    volt = float(effect) if effect > 0 else 1.0
    own = (P, Q, flow.ell[:, column], v, flow.v_pi[:, column])
    return Origin(rating, *own, rating=unit, power=power, volt=volt)


def _network_values(flow: BranchFlow, seek: Seek, column: int, o: Origin) -> Values:
    """Parameters of the equations and of the cones; powers in units of ``o.power``."""
    parent = flow.tree.parent
    s, j, draw = o.power, int(seek.node[column]), seek.draw[column]
    r, x, G, B = flow.r[:, 0], flow.x[:, 0], flow.G[:, column], flow.B[:, column]
    z2 = r**2 + x**2
    at_plant = np.zeros(flow.tree.size, complex)
    at_plant[j] = draw
    below_P, below_Q = np.zeros_like(r), np.zeros_like(r)
    np.add.at(below_P, parent[1:], o.P[1:])
    np.add.at(below_Q, parent[1:], o.Q[1:])
    res_P = r * o.ell + flow.p[:, column] + at_plant.real * o.g + G * o.v + below_P - o.P
    res_Q = x * o.ell + flow.q[:, column] + at_plant.imag * o.g - B * o.v + below_Q - o.Q
    res_v = o.v_pi - 2 * (r * o.P + x * o.Q) + z2 * o.ell - o.v
    values: Values = {
        "r": r * s, "x": x * s, "d": at_plant.real * o.rating / s,
        "e": at_plant.imag * o.rating / s, "G": G * o.volt / s, "B": B * o.volt / s,
        "r_v": r * s / o.volt, "x_v": x * s / o.volt, "z2_v": z2 * s**2 / o.volt,
        "res_P": res_P / s, "res_Q": res_Q / s, "res_v": res_v / o.volt,
        "ratio": np.where(parent > 0, s / s[np.maximum(parent, 0)], 0.0),
        "v_pi_0": o.v_pi, "ell_0": o.ell / s**2, "P_0": o.P / s, "Q_0": o.Q / s,
    }  # fmt: skip
    return {name: np.asarray(value)[1:] for name, value in values.items()} | {"volt": o.volt}


def _limit_values(
    programme: Programme, system: System, flow: BranchFlow, column: int, o: Origin, cap: float
) -> Values:
    """Parameters of the limits: the room between the origin and each bound."""
    limits, s, whole = system.limits, o.power, float(o.power.max())
    v_min, v_max = voltage_bounds(limits, flow.tree.size)
    values: Values = {
        "cap": (cap - o.g) / o.rating, "head_unit": s[1:] / whole,
    }  # fmt: skip
    for name, room in (("v_min", v_min - o.v), ("v_max", v_max - o.v)):
        far = _far(room[1:] / o.volt)
        values |= {name: room[1:] / o.volt / far, f"{name}_unit": 1 / far}
    for end, below in programme.rated.items():
        k, name = below + 1, end.name.lower()
        rows = limiting(limits) & (limits.quantity == end)
        sending = end is Quantity.CURRENT_FROM
        y = (flow.y_from if sending else flow.y_to)[k, 0]
        sign = 1.0 if sending else -1.0
        voltage = (o.v_pi if sending else o.v)[k]
        own = np.ones(k.size)
        if not sending:
            own += 2 * (y.real * flow.r[k, 0] - y.imag * flow.x[k, 0])
        P, Q, v = sign * 2 * y.real, -sign * 2 * y.imag, np.abs(y) ** 2
        there = own * o.ell[k] + v * voltage + P * o.P[k] + Q * o.Q[k]
        room = (limits.bound[rows] - there) / s[k] ** 2
        far = _far(room)
        values |= {
            f"{name}_ell": own / far, f"{name}_v": v * o.volt / s[k] ** 2 / far,
            f"{name}_P": P / s[k] / far, f"{name}_Q": Q / s[k] / far, f"{name}_room": room / far,
        }  # fmt: skip
    head = complex(flow.head[column])
    for i in np.flatnonzero(limiting(limits) & (limits.quantity >= Quantity.HEAD_POWER)):
        bound = float(limits.bound[i])
        if limits.quantity[i] == Quantity.BANK_POWER:
            total = head + limits.bank_other
            values |= {
                "bank_max": np.sqrt(bound) / whole, "bank_P_0": total.real / whole,
                "bank_Q_0": total.imag / whole,
            }  # fmt: skip
        elif limits.upper[i]:
            values["import_room"] = (bound - head.real) / whole
        else:
            values["export_room"] = (head.real - bound) / whole
    return values


def _far(room: Floats) -> Floats:
    """Divisor that brings a distant bound near 1, so that no number is large."""
    return np.maximum(np.abs(room), 1.0)


def _cut_values(cuts: Cuts, o: Origin) -> Values:
    """Secant and hull cuts over ranges that every AC point with g in [low, high] obeys.

    From ell v_pi = P^2 + Q^2: the product is above its McCormick plane, the squares are below
    their secants.  Hull cut: v_pi + v_lo v_hi / v_pi <= v_lo + v_hi (Li & Vittal 2017).
    """
    s = o.power[1:]
    P, Q, ell, v = cuts.P[1:], cuts.Q[1:], cuts.ell[1:], cuts.v[1:]
    P_0, Q_0, ell_0, v_0 = o.P[1:], o.Q[1:], o.ell[1:], o.v_pi[1:]
    secant_room = (
        P.sum(axis=1) * P_0 + Q.sum(axis=1) * Q_0 + ell[:, 0] * v[:, 0] - P.prod(axis=1)
        - Q.prod(axis=1) - v[:, 0] * ell_0 - ell[:, 0] * v_0
    )  # fmt: skip
    s2 = np.max(P**2, axis=1) + np.max(Q**2, axis=1)
    hull_room = s2 * v.sum(axis=1) - s2 * v_0 - v.prod(axis=1) * ell_0
    return {
        "secant_ell": v[:, 0], "secant_v": ell[:, 0] * o.volt / s**2,
        "secant_P": P.sum(axis=1) / s, "secant_Q": Q.sum(axis=1) / s,
        "secant_room": secant_room / s**2,
        "hull_v": s2 * o.volt / s**2, "hull_ell": v.prod(axis=1), "hull_room": hull_room / s**2,
        "ell_room": (ell[:, 1] - ell_0) / s**2, "g_low": (cuts.low - o.g) / o.rating,
    }  # fmt: skip


def _solution(programme: Programme, flow: BranchFlow, o: Origin, answer: Answer) -> Relaxed:
    n = flow.tree.size
    if answer.status not in (Status.CLEAN, Status.INACCURATE):
        none = np.full(n, np.nan)
        return Relaxed(np.nan, none, none, none, none, none, np.nan, answer)
    var = programme.variables

    def full(name: str, origin: Floats, unit: Floats | float) -> Floats:
        moved = np.concatenate([[0.0], np.asarray(var[name].value)]) * unit
        return np.where(np.arange(n) > 0, origin + moved, moved)

    P, Q = full("P", o.P, o.power), full("Q", o.Q, o.power)
    ell, v = full("ell", o.ell, o.power**2), full("v", o.v, o.volt)
    v[0] = o.v[0]
    v_pi = v[np.maximum(flow.tree.parent, 0)]
    loss_gap = float((flow.r[:, 0] * (ell - (P**2 + Q**2) / v_pi))[1:].sum())
    g = o.g + float(np.ravel(np.asarray(var["g"].value))[0]) * o.rating
    # Stationarity in ell: T_k v_pi is the sum of the cone's dual entries that hold ell.
    first, rest = programme.cones.dual_value
    held = np.ravel(np.asarray(first)) + np.asarray(rest).reshape(-1, n - 1)[-1]
    cone = np.concatenate([[0.0], held / v_pi[1:] * o.rating / o.power[1:] ** 2])
    return Relaxed(g, P, Q, ell, v, cone, loss_gap, answer)


def voltage_bounds(limits: Limits, n: int) -> tuple[Floats, Floats]:
    """Squared voltage bounds per node; where there is none, bounds that never bind."""
    v_min, v_max = np.zeros(n), np.full(n, _NEVER_REACHED)
    for i in np.flatnonzero(limiting(limits) & (limits.quantity == Quantity.VOLTAGE)):
        k = limits.element[i]
        if limits.upper[i]:
            v_max[k] = min(v_max[k], limits.bound[i])
        else:
            v_min[k] = max(v_min[k], limits.bound[i])
    return v_min, v_max


# Squared per unit: the solvers take no infinite numbers.
_NEVER_REACHED = 4.0
