"""Regulator ratios: taps found step by step, and the held ratio at the edge of the band."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from feederhost.errors import NoSolutionError
from feederhost.flow.network import (
    Loading,
    Network,
    OperatingPoint,
    refer,
    refer_loading,
)
from feederhost.flow.sweep import sweep
from feederhost.flow.tree import Floats
from feederhost.settings import Settings


@dataclass(frozen=True)
class Regulator:
    """A step voltage regulator in the branch to ``node``.

    ``fixed`` (steps from neutral) is NaN where the tap is found; ``share`` is the regulation
    range as a share (0.1), ``steps`` the number of steps over the whole range.
    """

    node: int
    setpoint: float
    bandwidth: float
    share: float
    steps: float
    fixed: float

    @property
    def moves(self) -> bool:
        """Whether the tap is found rather than given."""
        return bool(np.isnan(self.fixed))

    def ratio(self, tap: float) -> float:
        """Voltage ratio at a tap, ``1 + share * tap / (steps / 2)``."""
        return 1 + self.share * tap / (self.steps / 2)


@dataclass(frozen=True)
class Solved:
    """A base solution: ratios, taps per regulator, referred network and loading, point."""

    ratio: Floats
    taps: tuple[float, ...]
    network: Network
    loading: Loading
    point: OperatingPoint


def solve_at(network: Network, loading: Loading, ratio: Floats, settings: Settings) -> Solved:
    """Solve one column at given ratios (n, phases).

    Raises
    ------
    NoSolutionError
        If there is no operating point; the message holds the number of the weakest node.
    """
    referred = refer(network, ratio)
    there = refer_loading(loading, referred.gain)
    point = sweep(referred, there, settings)
    if not point.solved.all() or point.mismatch.max() > settings.mismatch_tolerance:
        # The first sweep's drop still shows where the feeder is weakest.
        early = sweep(referred, there, replace(settings, sweep_limit=1))
        raise NoSolutionError(str(int(np.abs(early.V - early.V[0]).max(axis=(1, 2)).argmax())))
    return Solved(ratio, (), referred, there, point)


def _voltage_at(solved: Solved, regulator: Regulator) -> float:
    k = regulator.node
    return float((np.abs(solved.point.V[k, :, 0]) * solved.network.gain[k]).mean())


def find_taps(
    network: Network,
    loading: Loading,
    ratio: Floats,
    regulators: tuple[Regulator, ...],
    settings: Settings,
) -> Solved:
    """Find the taps of a base case.

    From neutral, source outwards, one step at a time until the voltage is within half the
    bandwidth of the setpoint; a step that brings the voltage no closer is not taken.
    Passes repeat until no regulator moves, because a downstream tap shifts the flow upstream.
    """
    ratio = np.array(ratio, dtype=float)
    taps = [0.0 if r.moves else r.fixed for r in regulators]
    for regulator, tap in zip(regulators, taps, strict=True):
        ratio[regulator.node] = regulator.ratio(tap)
    solved = solve_at(network, loading, ratio, settings)
    moved = any(r.moves for r in regulators)
    for _ in range(settings.tap_passes):
        if not moved:
            break
        moved = False
        for i, regulator in enumerate(regulators):
            while regulator.moves:
                off = _voltage_at(solved, regulator) - regulator.setpoint
                tap = taps[i] - float(np.sign(off))
                if abs(off) <= regulator.bandwidth / 2 or abs(tap) > regulator.steps / 2:
                    break
                ratio[regulator.node] = regulator.ratio(tap)
                tried = solve_at(network, loading, ratio, settings)
                if abs(_voltage_at(tried, regulator) - regulator.setpoint) >= abs(off):
                    # A step wider than the band: it would hunt.
                    ratio[regulator.node] = regulator.ratio(taps[i])
                    break
                taps[i], solved, moved = tap, tried, True
    return Solved(ratio.copy(), tuple(taps), solved.network, solved.loading, solved.point)


def hold_at_edge(
    network: Network,
    loading: Loading,
    found: Solved,
    regulators: tuple[Regulator, ...],
    side: float,
    settings: Settings,
) -> Solved:
    """Hold each regulator where the base voltage sits at the edge of its band.

    Parameters
    ----------
    side : float
        +1 upper edge (exports), -1 lower edge (imports), times ``regulator_edge``.

    Returns
    -------
    Solved
        Continuous ratios, clamped to the regulation range, upstream regulators first.
    """
    ratio = found.ratio.copy()
    solved = solve_at(network, loading, ratio, settings)
    if side == 0:
        return Solved(ratio, found.taps, solved.network, solved.loading, solved.point)
    for _ in range(settings.tap_passes):
        largest = 0.0
        for regulator in regulators:
            if not regulator.moves:
                continue
            target = regulator.setpoint + side * regulator.bandwidth / 2
            old = float(ratio[regulator.node].mean())
            new = old * target / _voltage_at(solved, regulator)
            new = min(max(new, 1 - regulator.share), 1 + regulator.share)
            largest = max(largest, abs(new - old))
            ratio[regulator.node] = new
            solved = solve_at(network, loading, ratio, settings)
        if largest <= settings.edge_tolerance:
            break
    return Solved(ratio, found.taps, solved.network, solved.loading, solved.point)
