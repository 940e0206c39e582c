"""What the core computes with: the network, what loads it, and an operating point.

Symbols, used in every formula of ``flow`` and ``proof`` (all per unit):

===========  ==============================================================================
``n``        nodes; node 0 is the source; branch k joins ``parent[k]`` to node k
``V, v``     complex node voltage; its squared magnitude
``J, ell``   complex series current of branch k towards node k; its squared magnitude
``P, Q``     power leaving the parent into the series element of branch k
``z, r, x``  series impedance of branch k
``y``        shunt admittance ``G + jB`` (B > 0: a capacitor or line charging)
``p, q``     net LOAD at a node (load minus generation)
``g``        rating sought; ``sigma`` +1 export, -1 import; ``t`` reactive per active power
``w, T``     loss prices; cone multipliers (see ``proof``)
===========  ==============================================================================

Ideal fixed ratios do not occur here: everything behind a ratio is referred to the source side
(V/a, I*a, z/a^2, y*a^2), and ``gain`` keeps the product of ratios so that limits can be
referred and voltages reported (Farivar & Low 2013 leave ratios out; the referral is exact).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from feederhost.flow.tree import Complexes, Floats, Tree, frozen


@dataclass(frozen=True)
class Network:
    """Series impedances and terminal shunts of a tree, referred to the source side.

    Attributes
    ----------
    tree : Tree
    z : (n, phases, phases) complex
        Series impedance; row 0 is zero.
    y_from, y_to : (n, phases) complex
        Shunt at the sending and the receiving terminal of each branch (line charging halves).
    gain : (n, phases) float
        Product of ratios from the source: actual voltage = gain * V.
    """

    tree: Tree
    z: Complexes
    y_from: Complexes
    y_to: Complexes
    gain: Floats

    def __post_init__(self) -> None:
        for name, kind in (("z", complex), ("y_from", complex), ("y_to", complex), ("gain", float)):
            object.__setattr__(self, name, frozen(getattr(self, name), kind))

    @property
    def phases(self) -> int:
        """Number of phases carried (1: balanced)."""
        return int(self.z.shape[1])


@dataclass(frozen=True)
class Loading:
    """What the nodes draw, with trailing columns (cases, or one) that broadcast.

    Attributes
    ----------
    power : (n, phases, m) complex
        Constant power drawn.
    current : (n, phases, m) complex
        Power drawn at 1 pu by the constant-current part, which follows the voltage magnitude.
    shunt : (n, phases, m) complex
        Admittance of capacitors and constant-impedance load.
    source : (phases, m) complex
        Voltage held at node 0.
    """

    power: Complexes
    current: Complexes
    shunt: Complexes
    source: Complexes

    def __post_init__(self) -> None:
        for name in ("power", "current", "shunt", "source"):
            object.__setattr__(self, name, frozen(getattr(self, name), complex))


@dataclass(frozen=True)
class OperatingPoint:
    """Voltages and series currents of m columns.

    Attributes
    ----------
    V, J : (n, phases, m) complex
        Voltages; series currents (``J[0]``: the whole current leaving the source node).
    mismatch : (m,) float
        Largest power mismatch over nodes, infinite where there is no solution.
    """

    V: Complexes
    J: Complexes
    mismatch: Floats

    @property
    def solved(self) -> np.ndarray:
        """(m,) bool: whether the column has a solution."""
        return np.isfinite(self.mismatch)


def refer(network: Network, ratio: Floats) -> Network:
    """Refer a network with ideal ratios at the sending ends to its source side.

    Parameters
    ----------
    network : Network
        Series impedance and receiving shunt as they are behind each ratio, the sending shunt
        as it is before it; its own ``gain`` is ignored.
    ratio : (n, phases) float
        Voltage behind the ratio over voltage before it, 1 where there is none.
    """
    gain = np.array(ratio, dtype=float)
    gain[0] = 1.0
    for k in range(1, network.tree.size):
        gain[k] *= gain[network.tree.parent[k]]
    sending = gain[np.maximum(network.tree.parent, 0)]
    return replace(
        network,
        z=network.z / (gain[:, :, None] * gain[:, None, :]),
        y_from=network.y_from * sending**2,
        y_to=network.y_to * gain**2,
        gain=gain,
    )


def refer_loading(loading: Loading, gain: Floats) -> Loading:
    """Refer loads and shunts to the source side: power stays, current * gain, shunt * gain^2."""
    a = gain[:, :, None]
    return replace(loading, current=loading.current * a, shunt=loading.shunt * a**2)


def behind(network: Network, z_source: Complexes) -> Network:
    """Put one more branch, of impedance ``z_source`` (phases, phases), before the source node."""
    phases = network.phases
    tree = Tree(np.concatenate([[-1], np.maximum(network.tree.parent + 1, 0)]))
    z = np.concatenate([np.zeros((1, phases, phases)), network.z])
    z[1] = z_source
    pad = np.zeros((1, phases))
    return Network(
        tree=tree,
        z=z,
        y_from=np.concatenate([pad, network.y_from]),
        y_to=np.concatenate([pad, network.y_to]),
        gain=np.concatenate([pad + 1.0, network.gain]),
    )


def behind_loading(loading: Loading, emf: Complexes) -> Loading:
    """Shift a loading by the node that :func:`behind` adds, with the EMF held there."""

    def pad(values: Complexes) -> Complexes:
        return np.concatenate([np.zeros((1, *values.shape[1:])), values])

    return Loading(pad(loading.power), pad(loading.current), pad(loading.shunt), emf)
