"""First violation of each criterion as a rating grows from zero, for many plants at once.

The slack of an upper voltage limit is convex in the rating (losses are convex), that of a lower
one concave, that of a rating neither.  So the search marches: a step is accepted only when no
row changed sign and the tangents at its two ends rule out a dip below zero in between (exact
for convex slacks; a concave slack cannot dip).  Otherwise the step is halved.  A bare bracket
from zero to the cap would step over an excursion.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from feederhost.flow.limits import System, measure, measure_change, slack, slack_change
from feederhost.flow.network import OperatingPoint
from feederhost.flow.sweep import sweep, tangent
from feederhost.flow.tree import Complexes, Floats, Ints
from feederhost.schema import LIMIT_CRITERIA
from feederhost.settings import Settings

# Groups are the criteria, then the watched rows (criterion -1), then "no solution".
GROUPS = len(LIMIT_CRITERIA) + 2
WATCHED, NO_SOLUTION = GROUPS - 2, GROUPS - 1


@dataclass(frozen=True)
class Plants:
    """What is added, one plant per column.

    Attributes
    ----------
    node : (m,) int
    draw : (m, phases) complex
        Change of the power drawn at the node per unit of rating: ``-sigma (1 + jt) * scale``.
    cap : (m,) float
        Largest rating looked at.
    """

    node: Ints
    draw: Complexes
    cap: Floats

    def pick(self, columns: np.ndarray) -> Plants:
        """Return the plants of the given columns."""
        return Plants(self.node[columns], self.draw[columns], self.cap[columns])


@dataclass(frozen=True)
class FirstViolations:
    """Where each criterion is first violated.

    Attributes
    ----------
    rating : (GROUPS, m) float
        Largest rating before the first violation; infinite where there is none up to the cap.
    row : (GROUPS, m) int
        Limit row that is violated there, -1 where there is none.
    """

    rating: Floats
    row: Ints


@dataclass(frozen=True)
class Trial:
    """Slacks and their slopes at one rating per column, with the voltages to start the next."""

    point: OperatingPoint
    slack: Floats
    slope: Floats


def drawn_power(system: System, plants: Plants, rating: Floats) -> Complexes:
    """Power drawn with each plant at ``rating`` (m,), (n, phases, m)."""
    own = system.loading.power
    m = plants.node.size
    power = np.array(np.broadcast_to(own, (*own.shape[:2], m)))
    power[plants.node, :, np.arange(m)] += plants.draw * rating[:, None]
    return power


def solve_with(
    system: System,
    plants: Plants,
    rating: Floats,
    settings: Settings,
    start: Complexes | None = None,
) -> OperatingPoint:
    """AC operating points with each plant at its rating."""
    power = drawn_power(system, plants, rating)
    return sweep(system.network, system.loading, settings, power, start)


def slacks_with(
    system: System, plants: Plants, rating: Floats, settings: Settings
) -> tuple[Floats, OperatingPoint]:
    """Slack of every limit row (rows, m), minus infinity where there is no solution."""
    point = solve_with(system, plants, rating, settings)
    value = slack(system.limits, measure(system.network, system.limits, point))
    value[:, ~point.solved] = -np.inf
    return value, point


def try_ratings(
    system: System,
    plants: Plants,
    rating: Floats,
    settings: Settings,
    start: Complexes | None = None,
) -> Trial:
    """Slacks and slopes with each plant at its rating."""
    power = drawn_power(system, plants, rating)
    point = sweep(system.network, system.loading, settings, power, start)
    change = np.zeros_like(power)
    m = plants.node.size
    change[plants.node, :, np.arange(m)] = plants.draw
    moved = tangent(system.network, system.loading, settings, point, power, change)
    limits = system.limits
    value = slack(limits, measure(system.network, limits, point))
    value[:, ~point.solved] = -np.inf
    slope = slack_change(limits, measure_change(system.network, limits, point, moved))
    return Trial(point, value, slope)


def blocks(columns: int, rows: int, settings: Settings) -> Iterator[np.ndarray]:
    """Cut columns into blocks whose arrays of ``rows`` stay within the memory budget."""
    width = max(1, settings.column_budget // max(rows, 1))
    for first in range(0, columns, width):
        yield np.arange(first, min(first + width, columns))


def first_violations(
    system: System, plants: Plants, settings: Settings, *, first_only: bool = False
) -> FirstViolations:
    """Find, for every plant and criterion, the first violation as the rating grows from zero.

    With ``first_only`` a plant is done once any limit is met: what comes later is left open.
    The system must hold every limit at rating zero: what is broken there must be relaxed first.
    """
    m = plants.node.size
    rating = np.full((GROUPS, m), np.inf)
    row = np.full((GROUPS, m), -1)
    for columns in blocks(m, system.network.tree.size, settings):
        _search_block(system, plants, columns, settings, first_only, rating, row)
    return FirstViolations(rating, row)


def _search_block(
    system: System,
    plants: Plants,
    columns: np.ndarray,
    settings: Settings,
    first_only: bool,
    rating: Floats,
    row: Ints,
) -> None:
    """Search one block of columns; writes into ``rating`` and ``row``."""
    group = np.where(system.limits.criterion >= 0, system.limits.criterion, WATCHED)
    present = np.unique(group)
    cap = plants.cap[columns]
    g = np.zeros(columns.size)
    here = try_ratings(system, plants.pick(columns), g, settings)
    # Rounding aside; a limit that is just met and recedes is not in the way.
    broken = here.slack < -settings.rounding_slack
    broken |= (here.slack < settings.rounding_slack) & (here.slope < 0) & (here.slack <= 0)
    for c in present:
        # A watched quantity may start beyond its bound; a limit may not (its rows are relaxed).
        at_once = broken[group == c].any(axis=0)
        rating[c, columns[at_once]] = 0.0
        own = np.flatnonzero(group == c)
        row[c, columns[at_once]] = own[here.slack[own][:, at_once].argmin(axis=0)]
    lost = ~here.point.solved
    rating[NO_SOLUTION, columns[lost]] = 0.0
    step = np.full(columns.size, np.inf)
    ceiling = np.full(columns.size, np.inf)  # lowest rating known to have no solution
    live = np.flatnonzero(~lost)
    found: list[tuple[np.ndarray, int, Floats, Floats, Complexes]] = []
    while live.size:
        pick, chosen = columns[live], plants.pick(columns[live])
        open_rows = ~np.isfinite(rating[:, pick])[group]
        h = _step(here, open_rows, cap[live], step[live], settings)
        h = np.minimum(h, (ceiling[live] - g[live]) / 2)
        ahead = np.minimum(g[live] + h, cap[live])
        there = try_ratings(system, chosen, ahead, settings, here.point.V)
        width = ahead - g[live]
        solved = there.point.solved
        crossed = (there.slack < -settings.rounding_slack) & open_rows & solved
        dip = open_rows & ~crossed & solved & _may_dip(here, there, width)
        unsure = dip.any(axis=0) & (width > settings.search_tolerance * cap[live])
        step[live] = np.where(unsure, width / 4, width * 2)
        ceiling[live[~solved]] = ahead[~solved]
        sure = np.flatnonzero(~unsure & solved)
        # Where the solution is lost matters to the last digit only if nothing came before it.
        first = np.isinf(rating[:, pick]).all(axis=0)
        close = np.where(first, settings.search_tolerance, settings.search_lost_share)
        known = np.isfinite(ceiling[live])
        gone = np.flatnonzero(known & (ceiling[live] - g[live] <= close * ceiling[live]))
        rating[NO_SOLUTION, pick[gone]] = g[live[gone]]
        for c in present:
            hit = crossed[group == c].any(axis=0)
            at = np.flatnonzero(hit & ~unsure)
            if at.size:
                found.append((pick[at], c, g[live[at]], ahead[at], here.point.V[..., at]))
                rating[c, pick[at]] = g[live[at]]
        g[live[sure]] = ahead[sure]
        here = _merge(here, there, sure)
        done = g[live] >= cap[live]
        if present.size:
            done |= np.isfinite(rating[:, pick])[present].all(axis=0)
        done |= np.isfinite(rating[NO_SOLUTION, pick])
        if first_only:
            done |= np.isfinite(rating[:WATCHED, pick]).any(axis=0)
        keep = np.flatnonzero(~done)
        live, here = live[keep], _take(here, keep)
    _refine(system, plants, group, found, settings, rating, row)


def _step(
    here: Trial, open_rows: np.ndarray, cap: Floats, step: Floats, settings: Settings
) -> Floats:
    """Next step: a little past the nearest tangent zero, within the bounds of Settings."""
    falling = open_rows & (here.slope < 0)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        reach = np.where(falling, -here.slack / here.slope, np.inf).min(axis=0, initial=np.inf)
    reach = np.maximum(settings.search_overshoot * reach, settings.search_first_share * cap)
    return np.minimum(np.minimum(reach, step), settings.search_step_share * cap)


def _may_dip(here: Trial, there: Trial, width: Floats) -> np.ndarray:
    """Rows whose tangents at both ends meet below zero: a dip inside cannot be ruled out."""
    turning = (here.slope < 0) & (there.slope > 0)
    with np.errstate(divide="ignore", invalid="ignore"):
        gap = there.slack - there.slope * width - here.slack
        at = gap / (here.slope - there.slope)
        low = here.slack + here.slope * at
    return turning & (low < 0)


def _merge(here: Trial, there: Trial, columns: np.ndarray) -> Trial:
    """Replace the given columns of ``here`` by those of ``there``."""
    V, J, mismatch = here.point.V.copy(), here.point.J.copy(), here.point.mismatch.copy()
    V[..., columns] = there.point.V[..., columns]
    J[..., columns] = there.point.J[..., columns]
    mismatch[columns] = there.point.mismatch[columns]
    value, slope = here.slack.copy(), here.slope.copy()
    value[:, columns] = there.slack[:, columns]
    slope[:, columns] = there.slope[:, columns]
    return Trial(OperatingPoint(V, J, mismatch), value, slope)


def _take(here: Trial, columns: np.ndarray) -> Trial:
    point = here.point
    return Trial(
        OperatingPoint(point.V[..., columns], point.J[..., columns], point.mismatch[columns]),
        here.slack[:, columns],
        here.slope[:, columns],
    )


def _refine(
    system: System,
    plants: Plants,
    group: Ints,
    found: list[tuple[np.ndarray, int, Floats, Floats, Complexes]],
    settings: Settings,
    rating: Floats,
    row: Ints,
) -> None:
    """Close all brackets by regula falsi (Illinois rule) on each criterion's smallest slack."""
    if not found:
        return
    column = np.concatenate([f[0] for f in found])
    which = np.concatenate([np.full(f[0].size, f[1]) for f in found])
    low = np.concatenate([f[2] for f in found])
    high = np.concatenate([f[3] for f in found])
    start = np.concatenate([f[4] for f in found], axis=-1)
    for cut in blocks(column.size, system.network.tree.size, settings):
        _close(
            system, plants.pick(column[cut]), group, which[cut], low[cut], high[cut],
            start[..., cut], settings, rating, row, column[cut],
        )  # fmt: skip


def _close(
    system: System,
    plants: Plants,
    group: Ints,
    which: Ints,
    low: Floats,
    high: Floats,
    start: Complexes,
    settings: Settings,
    rating: Floats,
    row: Ints,
    column: Ints,
) -> None:
    own = group[:, None] == which[None, :]

    def smallest(g: Floats, live: np.ndarray) -> tuple[Floats, Ints]:
        point = solve_with(system, plants.pick(live), g, settings, start[..., live])
        value = slack(system.limits, measure(system.network, system.limits, point))
        value = np.where(own[:, live], value, np.inf)
        value[:, ~point.solved] = -np.inf
        at = value.argmin(axis=0)
        return value[at, np.arange(live.size)], at

    low, high = low.copy(), high.copy()
    everything = np.arange(which.size)
    f_low, _ = smallest(low, everything)
    f_high, at_high = smallest(high, everything)
    last = np.zeros(which.size)
    for count in range(settings.search_refinements):
        live = np.flatnonzero(high - low > settings.search_tolerance * high)
        if live.size == 0:
            break
        a, b, fa, fb = low[live], high[live], f_low[live], f_high[live]
        with np.errstate(invalid="ignore", divide="ignore"):
            mid = (a * fb - b * fa) / (fb - fa)
        # Halve where the chord gives nothing (no solution at one end) and every fourth time.
        inside = (mid > a) & (mid < b) & (count % 4 != 3)
        mid = np.where(inside, mid, (a + b) / 2)
        # Step just across the root so that both ends close in.
        nudge = settings.search_tolerance * b / 2
        mid = np.clip(mid + np.where(last[live] > 0, nudge, -nudge), a + nudge / 2, b - nudge / 2)
        value, at = smallest(mid, live)
        good = value >= 0
        f_high[live[good & (last[live] > 0)]] /= 2
        f_low[live[~good & (last[live] < 0)]] /= 2
        low[live[good]], f_low[live[good]] = mid[good], value[good]
        bad = live[~good]
        high[bad], f_high[bad], at_high[bad] = mid[~good], value[~good], at[~good]
        last[live] = np.where(good, 1.0, -1.0)
    rating[which, column] = low
    row[which, column] = at_high
