"""Loss prices: what a fictitious loss would buy, taken from the limit met first.

"Maximise the rating" does not meet the objective condition of the exactness theorems (Farivar
& Low 2013, Theorem 1; Gan, Li, Topcu & Low 2015, Theorem 1): where an upper voltage limit or a
rating binds under reverse flow, the relaxation invents losses that act as free regulation.  The
exchange rate at which a fictitious ell_k buys rating is

    rate_k = (ds/d ell_k) / (-ds/dg),       s the slack of the limit met first,

and a price just above it removes the profit and nothing else:

    w_k = max( (1 + eps) max(0, rate_k), floor * r_k, share * g / |S_k|^2 )

The floors keep the current of a branch from floating where its loss buys nothing: the first by
its resistance, the second (switches, idle branches) by a millionth of the rating.

Both sensitivities come from one sweep of the multiplier recursion with all cones left out.  For
voltage_high at node b it reproduces D_bk / (2 sigma (R_bj + t X_bj)).
"""

from __future__ import annotations

import numpy as np

from feederhost.flow.limits import System
from feederhost.flow.tree import Floats
from feederhost.proof.branchflow import BranchFlow, Seek, limit_gradient
from feederhost.proof.certificate import multipliers_at
from feederhost.settings import Settings


def loss_prices(
    flow: BranchFlow, system: System, seek: Seek, rating: Floats, settings: Settings
) -> Floats:
    """Return loss prices w, (n, m), in rating per unit of squared current.

    Parameters
    ----------
    rating : (m,) float
        Rating at the AC point.
    """
    m = seek.node.size
    columns = np.arange(m)
    gradient = limit_gradient(flow, system, seek, reduced=True)
    none = np.zeros_like(flow.P)
    y = multipliers_at(flow, gradient, none, np.ones(m), settings, cones=False)
    gained = flow.r * y.p + flow.x * y.q + (flow.r**2 + flow.x**2) * y.v
    spent = -(seek.draw.real * y.p[seek.node, columns] + seek.draw.imag * y.q[seek.node, columns])
    with np.errstate(divide="ignore", invalid="ignore"):
        rate = np.where(gained > 0, gained / spent, 0.0)
    rate = np.where(np.isfinite(rate), rate, 0.0)
    power = flow.P**2 + flow.Q**2
    largest = np.maximum(power.max(axis=0), np.abs(seek.draw * rating) ** 2)
    power = np.maximum(power, settings.idle_share**2 * largest)
    w = np.maximum((1 + settings.price_margin) * rate, settings.price_floor * flow.r)
    # Without any power, at a rating of nothing, there is no current to keep from floating.
    share = np.divide(settings.price_floor_share * rating, power, where=power > 0, out=0 * power)
    w = np.maximum(w, share)
    w[0] = 0.0
    return w
