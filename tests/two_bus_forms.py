"""Closed forms of two buses and the default curves, as the standards print them."""

from __future__ import annotations

import math
from collections.abc import Callable


def voltage(r: float, x: float, p: float, q: float, source: float = 1.0) -> float:
    """Voltage at the end of one branch that p + jq is injected behind.

    v^2 - (v_0 + 2 (r p + x q)) v + |z|^2 |s|^2 = 0, upper root (Baran & Wu, IEEE Trans. Power
    Delivery 4(1), 1989, eq. 1 to 3 with one branch).
    """
    b = source**2 + 2 * (r * p + x * q)
    v = (b + math.sqrt(b * b - 4 * (r * r + x * x) * (p * p + q * q))) / 2
    return math.sqrt(v)


def bisect(gap: Callable[[float], float], low: float, high: float) -> float:
    """Root of a function that falls from a positive to a negative value."""
    assert gap(low) >= 0 >= gap(high)
    for _ in range(200):
        mid = (low + high) / 2
        low, high = (mid, high) if gap(mid) > 0 else (low, mid)
    return (low + high) / 2


def volt_var(V: float) -> float:
    """IEEE 1547-2018 category B default: 0.92, 0.98, 1.02, 1.08 pu to +44, 0, 0, -44 % of S."""
    if V <= 0.98:
        return 0.44 * min((0.98 - V) / 0.06, 1.0)
    return -0.44 * min(max(V - 1.02, 0.0) / 0.06, 1.0)


def volt_watt(V: float) -> float:
    """IEEE 1547-2018 default: 1.06 pu full power, 1.10 pu a fifth of it."""
    return 1 - 0.8 * min(max(V - 1.06, 0.0) / 0.04, 1.0)
