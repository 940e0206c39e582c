"""Kilo-units to per unit: with :mod:`feeder.perunit` the only door to the core's numbers."""

from __future__ import annotations

import math

from feederhost.settings import Settings


def per_unit(kilo: float, settings: Settings) -> float:
    """Convert kW, kvar or kVA to per unit; blank (NaN) is no limit: infinite."""
    return math.inf if math.isnan(kilo) else kilo / 1e3 / settings.base_mva


def amps_per_unit(amps: float, kv: float, settings: Settings) -> float:
    """Convert A at a base voltage in kV, line to line, to per unit current."""
    return amps * math.sqrt(3) * kv / 1e3 / settings.base_mva
