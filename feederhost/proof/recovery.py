"""AC recovery: whether a relaxed solution is an operating point that may be published.

A conic solver's "optimal" says nothing about that.  A relaxed solution is accepted only if its
cones are tight (no fictitious loss), the AC power flow of its injections returns its voltages,
every limit holds there, and no smaller rating violates a limit on the way.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from feederhost.flow.limits import System
from feederhost.flow.search import Plants, slacks_with
from feederhost.proof.valuing import Relaxed
from feederhost.settings import Settings


class Outcome(StrEnum):
    """Why a relaxed solution is rejected, or that it is not."""

    RECOVERED = "recovered"
    NO_ANSWER = "no answer from the solver"
    NOT_TIGHT = "not tight: it invents losses"
    NOT_RECOVERED = "its AC operating point is another one"
    VIOLATES = "its AC operating point breaks a limit"
    NOT_FIRST = "a smaller rating breaks a limit"


@dataclass(frozen=True)
class Recovery:
    """Outcome with its evidence (per unit; NaN where not reached)."""

    outcome: Outcome
    loss_gap: float
    voltage_gap: float
    least_slack: float
    mismatch: float


def recover(
    system: System, plant: Plants, relaxed: Relaxed, first: float, settings: Settings
) -> Recovery:
    """Judge a relaxed solution.

    Parameters
    ----------
    plant : Plants
        The one plant the programme was about.
    first : float
        Rating at the first violation, from the AC search.
    """
    if not np.isfinite(relaxed.g):
        return Recovery(Outcome.NO_ANSWER, np.nan, np.nan, np.nan, np.nan)
    rating = np.array([relaxed.g])
    slack, point = slacks_with(system, plant, rating, settings)
    least = float(slack.min(initial=np.inf, where=system.limits.criterion[:, None] >= 0))
    gap = float(np.abs(np.sqrt(np.maximum(relaxed.v, 0)) - np.abs(point.V[:, 0, 0])).max())
    outcome = Outcome.RECOVERED
    if relaxed.loss_gap > settings.fictitious_loss_share * relaxed.g:
        outcome = Outcome.NOT_TIGHT
    elif not point.solved[0] or gap > settings.recovery_tolerance:
        outcome = Outcome.NOT_RECOVERED
    elif least < -settings.recovery_tolerance:
        outcome = Outcome.VIOLATES
    elif relaxed.g > first * (1 + settings.solver_agreement):
        outcome = Outcome.NOT_FIRST
    return Recovery(outcome, relaxed.loss_gap, gap, least, float(point.mismatch[0]))
