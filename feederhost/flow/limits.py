"""Limits as flat rows, what they measure at an operating point, and how that changes.

A limit row compares one measured quantity with one bound: ``slack = bound - measured`` where
the bound is from above, ``measured - bound`` where it is from below.  Voltages and currents
are squared magnitudes, as in the branch-flow model, and referred to the source side.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum

import numpy as np

from feederhost.flow.network import Loading, Network, OperatingPoint
from feederhost.flow.sweep import Tangent
from feederhost.flow.tree import Complexes, Floats, Ints, frozen


class Quantity(IntEnum):
    """What a limit row measures."""

    VOLTAGE = 0  # |V|^2 at the node
    CURRENT_FROM = 1  # squared terminal current at the sending end of the branch
    CURRENT_TO = 2  # squared terminal current at the receiving end
    HEAD_POWER = 3  # active power leaving the source node
    BANK_POWER = 4  # squared apparent power leaving the source node, other feeders included


@dataclass(frozen=True)
class Limits:
    """Limit rows of one system.

    Attributes
    ----------
    criterion : (rows,) int
        Index into ``schema.LIMIT_CRITERIA``; -1 marks a quantity that is watched, not limited.
    quantity, element, phase : (rows,) int
        What is measured (:class:`Quantity`), at which node or branch, on which phase.
    upper : (rows,) bool
        Whether the bound is from above.
    bound : (rows,) float
    bank_other : complex
        Other power through the bank.
    """

    criterion: Ints
    quantity: Ints
    element: Ints
    phase: Ints
    upper: np.ndarray
    bound: Floats
    bank_other: complex = 0j

    def __post_init__(self) -> None:
        for name in ("criterion", "quantity", "element", "phase"):
            object.__setattr__(self, name, frozen(getattr(self, name), np.intp))
        object.__setattr__(self, "upper", frozen(self.upper, bool))
        object.__setattr__(self, "bound", frozen(self.bound, float))

    @property
    def size(self) -> int:
        """Number of rows."""
        return int(self.bound.size)


@dataclass(frozen=True)
class System:
    """One network under one loading with its limits: what a search and a proof are posed on."""

    network: Network
    loading: Loading
    limits: Limits


def head_power(point: OperatingPoint) -> Complexes:
    """Power leaving the source node, (phases, m)."""
    return point.V[0] * np.conj(point.J[0])


def sending_voltage(network: Network, V: Complexes) -> Complexes:
    """Voltage at the sending end of each branch, (n, phases, m); row 0 is the source's own."""
    return V[np.maximum(network.tree.parent, 0)]


def _rows(limits: Limits, quantity: Quantity) -> tuple[np.ndarray, Ints, Ints]:
    rows = np.flatnonzero(limits.quantity == quantity)
    return rows, limits.element[rows], limits.phase[rows]


def _terminal_current(
    network: Network, quantity: Quantity, V: Complexes, J: Complexes, k: Ints, f: Ints
) -> Complexes:
    if quantity is Quantity.CURRENT_FROM:
        return J[k, f] + network.y_from[k, f, None] * V[network.tree.parent[k], f]
    return J[k, f] - network.y_to[k, f, None] * V[k, f]


def measure(network: Network, limits: Limits, point: OperatingPoint) -> Floats:
    """Measure every limit row, (rows, m)."""
    V, J = point.V, point.J
    out = np.empty((limits.size, V.shape[-1]))
    rows, k, f = _rows(limits, Quantity.VOLTAGE)
    out[rows] = np.abs(V[k, f]) ** 2
    for quantity in (Quantity.CURRENT_FROM, Quantity.CURRENT_TO):
        rows, k, f = _rows(limits, quantity)
        out[rows] = np.abs(_terminal_current(network, quantity, V, J, k, f)) ** 2
    head = head_power(point).sum(axis=0)
    out[limits.quantity == Quantity.HEAD_POWER] = head.real
    out[limits.quantity == Quantity.BANK_POWER] = np.abs(head + limits.bank_other) ** 2
    return out


def measure_change(
    network: Network, limits: Limits, point: OperatingPoint, change: Tangent
) -> Floats:
    """Differentiate :func:`measure` along a tangent, (rows, m)."""
    V, J, dV, dJ = point.V, point.J, change.V, change.J
    out = np.empty((limits.size, V.shape[-1]))
    rows, k, f = _rows(limits, Quantity.VOLTAGE)
    out[rows] = 2 * np.real(np.conj(V[k, f]) * dV[k, f])
    for quantity in (Quantity.CURRENT_FROM, Quantity.CURRENT_TO):
        rows, k, f = _rows(limits, quantity)
        own = _terminal_current(network, quantity, V, J, k, f)
        moved = _terminal_current(network, quantity, dV, dJ, k, f)
        out[rows] = 2 * np.real(np.conj(own) * moved)
    head = head_power(point).sum(axis=0)
    moved_head = (V[0] * np.conj(dJ[0])).sum(axis=0)
    out[limits.quantity == Quantity.HEAD_POWER] = moved_head.real
    out[limits.quantity == Quantity.BANK_POWER] = 2 * np.real(
        np.conj(head + limits.bank_other) * moved_head
    )
    return out


def slack(limits: Limits, measured: Floats) -> Floats:
    """Distance of measured values (rows, m) to their bounds; negative: violated."""
    sign = np.where(limits.upper, 1.0, -1.0)[:, None]
    return sign * (limits.bound[:, None] - measured)


def slack_change(limits: Limits, measured_change: Floats) -> Floats:
    """Differentiate :func:`slack`, (rows, m)."""
    return np.where(limits.upper, -1.0, 1.0)[:, None] * measured_change
