"""AC power flow on the tree by backward/forward sweep, and its tangent.

The sweep is the fixed point of node currents and voltages (Shirmohammadi et al. 1988; Kersting,
Distribution System Modeling and Analysis, ch. 10), in complex voltages, with any number of
columns side by side.  It shares no code with the relaxation that it judges.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from feederhost.flow.network import Loading, Network, OperatingPoint
from feederhost.flow.tree import Complexes, Floats, path_sum, subtree_sum
from feederhost.settings import Settings


@dataclass(frozen=True)
class Tangent:
    """Derivatives of an operating point along a change of load: (n, phases, m) each."""

    V: Complexes
    J: Complexes


def node_shunt(network: Network, loading: Loading) -> Complexes:
    """Total shunt admittance at each node, (n, phases, m)."""
    shunt = np.array(loading.shunt) + network.y_to[:, :, None]
    np.add.at(shunt, network.tree.parent[1:], network.y_from[1:, :, None])
    return shunt


def _drop(network: Network, J: Complexes) -> Complexes:
    if network.phases == 1:
        return network.z * J
    return np.einsum("kab,kbm->kam", network.z, J)


def _columns(loading: Loading, power: Complexes) -> int:
    return max(a.shape[-1] for a in (power, loading.current, loading.shunt, loading.source))


def _pick(values: Complexes, columns: np.ndarray) -> Complexes:
    return values if values.shape[-1] == 1 else values[..., columns]


def sweep(
    network: Network,
    loading: Loading,
    settings: Settings,
    power: Complexes | None = None,
    start: Complexes | None = None,
) -> OperatingPoint:
    """Solve the AC power flow for every column.

    Parameters
    ----------
    power : (n, phases, m) complex, optional
        Constant power drawn, in place of ``loading.power``.
    start : (n, phases, m) complex, optional
        Voltages to start from; the source voltage everywhere by default.

    Returns
    -------
    OperatingPoint
        Columns without a solution carry an infinite mismatch; that is an answer, not an error.
    """
    S = loading.power if power is None else power
    m = _columns(loading, S)
    shape = (*network.gain.shape, m)
    shunt = node_shunt(network, loading)
    V = np.array(np.broadcast_to(loading.source[None], shape) if start is None else start)
    J = np.zeros(shape, dtype=complex)
    mismatch = np.full(m, np.inf)
    todo = np.arange(m)
    earlier = np.full(m, np.inf)
    for count in range(1, settings.sweep_limit + 1):
        if todo.size == 0:
            break
        s, c, y = _pick(S, todo), _pick(loading.current, todo), _pick(shunt, todo)
        before = V[..., todo]
        drawn = np.conj((s + c * np.abs(before)) / before) + y * before
        flow = subtree_sum(network.tree, drawn)
        after = _pick(loading.source, todo)[None] - path_sum(network.tree, _drop(network, flow))
        step = np.abs(after - before).max(axis=(0, 1))
        lost = ~np.isfinite(step) | (np.abs(after).min(axis=(0, 1)) < settings.collapse_pu)
        if count % settings.sweep_review == 0:
            lost |= _hopeless(step, earlier[todo], settings.sweep_limit - count, settings)
            earlier[todo] = step
        done = (step < settings.sweep_tolerance) & ~lost
        V[..., todo] = after
        J[..., todo] = flow
        if done.any():
            settled = np.flatnonzero(done)
            own = after[..., settled]
            s, c, y = (_pick(a, settled) for a in (s, c, y))
            wanted = np.conj((s + c * np.abs(own)) / own) + y * own
            gap = np.abs(own * np.conj(drawn[..., settled] - wanted))
            mismatch[todo[settled]] = gap.max(axis=(0, 1))
        todo = todo[~(done | lost)]
    return OperatingPoint(V, J, mismatch)


def _hopeless(step: Floats, earlier: Floats, left: int, settings: Settings) -> np.ndarray:
    """Columns that, at the rate of their last sweeps, will not settle in those that are left."""
    with np.errstate(divide="ignore", invalid="ignore"):
        rate = np.log(step / earlier) / settings.sweep_review
        wanted = np.log(settings.sweep_tolerance / step) / rate
    return (earlier < np.inf) & ((rate >= 0) | (wanted > left))


def tangent(
    network: Network,
    loading: Loading,
    settings: Settings,
    point: OperatingPoint,
    power: Complexes,
    change: Complexes,
) -> Tangent:
    """Differentiate an operating point along a change of the power drawn.

    Parameters
    ----------
    power, change : (n, phases, m) complex
        Power drawn at the point, and its derivative.

    Returns
    -------
    Tangent
        Not a number where the point has no solution or its derivative does not settle.
    """
    shunt = node_shunt(network, loading)
    V = point.V
    size = np.abs(V)
    inverse = 1.0 / V
    forced = change * inverse
    # d(|V|/V) = Re(conj(V) dV)/(|V| V) - |V| dV/V^2
    bent = -(power + loading.current * size) * inverse**2
    along = loading.current * inverse / size
    dV, dJ = np.zeros_like(V), np.zeros_like(V)
    todo = np.flatnonzero(point.solved)
    for _ in range(settings.sweep_limit):
        if todo.size == 0:
            break
        moved = dV[..., todo]
        inner = forced[..., todo] + bent[..., todo] * moved
        inner += along[..., todo] * np.real(np.conj(V[..., todo]) * moved)
        flow = subtree_sum(network.tree, np.conj(inner) + _pick(shunt, todo) * moved)
        after = -path_sum(network.tree, _drop(network, flow))
        step = np.abs(after - moved).max(axis=(0, 1))
        scale = np.abs(after).max(axis=(0, 1))
        dV[..., todo], dJ[..., todo] = after, flow
        todo = todo[(step > settings.tangent_tolerance * scale) & (scale < settings.runaway)]
    # A slope that has not settled is not a number, never a guess.
    unsettled = np.concatenate([todo, np.flatnonzero(~point.solved)])
    ran_away = np.flatnonzero(~(np.abs(dV).max(axis=(0, 1)) < settings.runaway))
    for lost in (unsettled, ran_away):
        dV[..., lost] = np.nan
        dJ[..., lost] = np.nan
    return Tangent(dV, dJ)
