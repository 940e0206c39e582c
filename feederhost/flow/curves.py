"""Inverters that follow the voltage: volt-var and volt-watt curves in the AC loop.

An operating point with curves is a fixed point of voltages and powers: the power flow gives the
voltage at the inverter, the curve gives the power wanted there.  Powers move towards what is
wanted by a share of the gap (``Settings.curve_damping``, d); with a loop gain G, the slope of
the curve times the change of voltage per power, a gap shrinks by abs(1 - d (1 + G)) a round.
Where that is no shrinking within ``Settings.curve_rounds`` the inverter is said to hunt.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from feederhost.flow.network import Loading, Network, OperatingPoint
from feederhost.flow.sweep import sweep
from feederhost.flow.tree import Complexes, Floats, frozen
from feederhost.settings import Settings


@dataclass(frozen=True, eq=False)
class Curve:
    """A share of the rating over the voltage in pu: straight between points, level beyond.

    Raises
    ------
    ValueError
        If there are fewer than two points, or voltages do not rise from point to point.
    """

    name: str
    voltage: Floats
    share: Floats

    def __post_init__(self) -> None:
        for field in ("voltage", "share"):
            object.__setattr__(self, field, frozen(getattr(self, field), float))
        if self.voltage.size < 2 or self.voltage.size != self.share.size:
            raise ValueError("a curve takes two points at least")
        if np.any(np.diff(self.voltage) <= 0):
            raise ValueError("the voltages of a curve must rise from point to point")

    def at(self, voltage: Floats) -> Floats:
        """Return the share at voltages in pu."""
        return np.interp(voltage, self.voltage, self.share)


# IEEE 1547-2018, voltage-reactive power mode, category B default: Q over rated apparent power,
# injecting positive (read in the conformance tables of IEEE 1547.1-2020, Table 25, second hand).
CATEGORY_B = Curve(
    "IEEE 1547-2018 category B default",
    np.array([0.92, 0.98, 1.02, 1.08]),
    np.array([0.44, 0.0, 0.0, -0.44]),
)
# IEEE 1547-2018, voltage-active power mode, default of categories A and B: P over rated power
# (IEEE 1547.1-2020, Table 31, second hand); storage goes down to zero.
VOLT_WATT = Curve(
    "IEEE 1547-2018 volt-watt default", np.array([1.06, 1.10]), np.array([1.0, 0.2])
)  # fmt: skip
VOLT_WATT_STORAGE = Curve(
    "IEEE 1547-2018 volt-watt default, storage", np.array([1.06, 1.10]), np.array([1.0, 0.0])
)


@dataclass(frozen=True, eq=False)
class Inverter:
    """What m inverters at one node want, one per column; powers per unit, injecting positive.

    Attributes
    ----------
    available : (m,) float
        Active power at hand; negative: charging.
    ratio : float
        Reactive per active power while no volt-var curve is followed.
    rated : (m,) float
        Apparent power that the volt-var curve is a share of.
    watts : (m,) float
        Active power that the volt-watt curve is a share of.
    cap : (m,) float
        Apparent power it can carry; reactive power goes first.
    var, watt : Curve or None
    """

    node: int
    available: Floats
    ratio: float
    rated: Floats
    watts: Floats
    cap: Floats
    var: Curve | None = None
    watt: Curve | None = None

    def wanted(self, voltage: Floats, columns: np.ndarray, full_output: float) -> Complexes:
        """Power p + jq that the curves ask for at voltages (columns,) in pu.

        Below ``full_output`` of the rated output reactive power falls off in proportion.
        """
        p, cap = self.available[columns], self.cap[columns]
        if self.watt is not None:
            p = np.minimum(p, self.watts[columns] * self.watt.at(voltage))
        if self.var is None:
            most = cap / np.hypot(1.0, self.ratio)
            p = np.clip(p, -most, most)
            return p * complex(1, self.ratio)
        rated = self.rated[columns]
        output = np.abs(self.available[columns])
        full = full_output * rated
        low = np.divide(np.minimum(output, full), full, out=np.zeros_like(full), where=full > 0)
        widest = np.abs(self.var.share).max() * low
        q = rated * np.clip(self.var.at(voltage), -widest, widest)
        q = np.clip(q, -cap, cap)
        most = np.sqrt(cap**2 - q**2, where=np.isfinite(cap), out=np.full_like(cap, np.inf))
        return np.clip(p, -most, most) + 1j * q


@dataclass(frozen=True)
class Settled:
    """Operating points with curves followed.

    Attributes
    ----------
    point : OperatingPoint
    power : (m,) complex
        What the inverter injects, p + jq.
    hunts : (m,) bool
        Whether there is a power flow solution every round, but no end to the rounds.
    """

    point: OperatingPoint
    power: Complexes
    hunts: np.ndarray


def settle(
    network: Network,
    loading: Loading,
    power: Complexes,
    inverter: Inverter,
    settings: Settings,
) -> Settled:
    """Find the operating point of every column with the inverter on its curves.

    Parameters
    ----------
    power : (n, phases, m) complex
        Constant power drawn by everything but the inverter.
    """
    m, phases, k = inverter.available.size, network.phases, inverter.node
    gain = network.gain[k].mean()
    shape = (*network.gain.shape, m)
    V = np.array(np.broadcast_to(loading.source[None], shape), dtype=complex)
    J = np.zeros(shape, dtype=complex)
    mismatch = np.full(m, np.inf)
    # Every column starts with the active power it has and no reactive power.
    own = inverter.available.astype(complex)
    todo = np.arange(m)
    loose = settings
    for _ in range(settings.curve_rounds):
        if todo.size == 0:
            break
        drawn = power[..., todo].copy()
        drawn[k] -= own[todo] / phases
        point = sweep(network, loading, loose, drawn, V[..., todo])
        V[..., todo], J[..., todo] = point.V, point.J
        mismatch[todo] = point.mismatch
        voltage = gain * np.abs(point.V[k]).mean(axis=0)
        gap = inverter.wanted(voltage, todo, settings.var_full_output) - own[todo]
        moves = point.solved & (np.abs(gap) > settings.curve_tolerance)
        todo, gap = todo[moves], gap[moves]
        own[todo] += settings.curve_damping * gap
        # Voltages need only be as good as the smallest gap that they are to tell from none.
        finest = settings.curve_sweep_share * np.abs(gap).min(initial=np.inf)
        loose = replace(settings, sweep_tolerance=max(settings.sweep_tolerance, float(finest)))
    hunts = np.zeros(m, dtype=bool)
    hunts[todo] = True
    return Settled(OperatingPoint(V, J, mismatch), own, hunts)
