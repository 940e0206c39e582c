"""Three-phase fault levels on the tree: source and path impedance, seen at each node.

A bolted three-phase fault at node k draws ``I_k = E / Z_k`` with the voltage before the fault E
at the place of the fault and the impedance seen there, ``Z_k = (z_S + sum z_j) * a_k^2``: source
impedance and the branches j on the path, referred to the source side, brought back through the
product of ratios ``a_k``.  Loads and shunts are left out and no machine feeds back: the usual
per-unit hand calculation (IEC 60909-0, equivalent voltage source at the fault; from memory).
"""

from __future__ import annotations

import numpy as np

from feederhost.flow.network import Network
from feederhost.flow.tree import Complexes, Floats, path_sum


def fault_impedance(network: Network, z_source: Complexes) -> Complexes:
    """Impedance between the source's EMF and each node, as seen at the node.

    Parameters
    ----------
    network : Network
        Referred to the source side (see :func:`flow.network.refer`).
    z_source : (phases, phases) complex
        Impedance before the source node.

    Returns
    -------
    (n, phases, phases) complex
        Per unit at each node's own base voltage.
    """
    z = np.array(network.z)
    # Row 0 has no branch above it; every path starts there, so the source impedance counts once.
    z[0] = z_source
    a = network.gain
    seen: Complexes = path_sum(network.tree, z)
    return seen * (a[:, :, None] * a[:, None, :])


def fault_current(network: Network, z_source: Complexes, voltage: float = 1.0) -> Floats:
    """Return the current of a bolted three-phase fault at each node, fed by the source alone.

    Parameters
    ----------
    voltage : float
        Voltage before the fault at the place of the fault, per unit of nominal.

    Returns
    -------
    (n, phases) float
        Magnitudes, per unit at each node's own base voltage; on one phase (balanced)
        ``voltage / |Z_k|``.

    Raises
    ------
    numpy.linalg.LinAlgError
        If the source impedance is zero: the current is without bound.
    """
    phases = network.phases
    balanced = voltage * np.exp(-2j * np.pi / 3 * np.arange(phases))
    held = np.broadcast_to(balanced[:, None], (network.tree.size, phases, 1))
    drawn = np.linalg.solve(fault_impedance(network, z_source), held)
    return np.abs(drawn[..., 0])


def infeed(rated: Floats, multiple: Floats) -> float:
    """Fault current that plants add, each a multiple of its rated current, summed as numbers.

    Common practice in screening: no impedance lies between a plant and the fault, and the
    angles of all currents agree, so that the sum is never below the phasor sum.

    Parameters
    ----------
    rated : (m,) float
        Rated apparent power, which at nominal voltage is the rated current, per unit.
    multiple : (m,) float
        Fault current over rated current.
    """
    return float(np.dot(rated, multiple))
