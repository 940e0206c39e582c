"""Alternatives to a request that does not fit: what one is, and which of many carries most.

Alternatives of one kind are tried case by case, the binding case first; one is dropped as soon
as a case shows that it carries too little, and the one that may still carry most goes on.  So
only the best is looked at in all cases, and the outcome is that of looking at all of them.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cache
from heapq import heapify, heappop, heappush

import numpy as np

from feederhost.errors import NoSolutionError
from feederhost.feeder.model import EXPORT, IMPORT, Feeder
from feederhost.feeder.tables import Tables
from feederhost.flow.limits import Quantity, measure, slack
from feederhost.flow.taps import Solved
from feederhost.schema import LIMIT_CRITERIA, Criterion
from feederhost.study.cases import CaseStudy, base_run, steady_limits, study_case
from feederhost.study.nodal import rounded_down
from feederhost.study.queue.sites import Site, draw_of, reserved_power
from feederhost.study.queue.stops import Line, Stop, first_stop, least_slack, with_queue

# Poses a case, by its number, for a direction.
Studies = Callable[[int, str], CaseStudy]


@dataclass(frozen=True)
class Remedy:
    """One alternative to a request, as the `remedies` sheet shows it.

    ``kw`` is NaN where nothing is offered: ``note`` says why.  ``criterion`` is what stops it
    then, blank where it carries what is asked.
    """

    request: str
    remedy: str
    setting: str
    kw: float = math.nan
    criterion: str = ""
    proof: str = ""
    energy_lost_mwh: float = math.nan
    cost_low: float = math.nan
    cost_high: float = math.nan
    currency: str = ""
    note: str = ""


@dataclass(frozen=True, eq=False)
class Ask:
    """A request that does not fit: the others' sizes, and what it meets first."""

    line: Line
    tables: Tables
    at: int
    sizes: Mapping[int, float]
    stop: Stop

    @property
    def site(self) -> Site:
        """The request."""
        return self.line.sites[self.at]

    @property
    def feeder(self) -> Feeder:
        """The feeder as it is."""
        return self.line.feeder

    @property
    def smaller(self) -> float:
        """Size that fits as it is, rounded down, per unit."""
        return rounded_down(self.feeder, min(self.stop.rating, self.site.asked))

    def least(self) -> float:
        """Size above which an alternative carries more than a smaller size, after rounding."""
        settings = self.feeder.settings
        step = settings.rounding_kw / self.feeder.kw(1.0)
        return min(self.smaller + step * (1 - settings.search_tolerance), self.site.asked)


@dataclass(frozen=True, eq=False)
class Trial:
    """An alternative to try: the feeder and the queue as they would be."""

    setting: str
    feeder: Feeder
    sites: tuple[Site, ...]
    studies: Studies

    def line(self, reach: float, own: Mapping[str, tuple[CaseStudy, ...]]) -> Line:
        """Return the line with the given cases only."""
        return Line(self.feeder, {EXPORT: (), IMPORT: ()} | dict(own), self.sites, reach)


def present(line: Line) -> Studies:
    """Return the cases as they are posed already."""
    return lambda index, way: line.studies[way][index]


def restudied(feeder: Feeder) -> Studies:
    """Solve and pose the cases of a changed feeder, each when it is first asked for."""

    @cache
    def base(index: int) -> Solved:
        return base_run(feeder, feeder.cases[index])

    @cache
    def study(index: int, way: str) -> CaseStudy:
        return study_case(feeder, index, base(index), way)

    return study


def carried(
    ask: Ask, trials: Sequence[Trial], reach: float, least: float
) -> Iterator[tuple[int, Stop]]:
    """Yield trials by falling size carried, ties in the order given.

    Parameters
    ----------
    reach : float
        Size up to which is looked (the asked size at least).
    least : float
        Trials that carry less are dropped.

    Yields
    ------
    number : int
        Of the trial.
    stop : Stop
        What it meets first in all cases; infinite rating: nothing up to the reach.
    """
    steps = _steps(ask)
    stops = [Stop(math.inf)] * len(trials)
    queue = [(-math.inf, i, 0) for i in range(len(trials))]
    heapify(queue)
    while queue:
        bound, i, done = heappop(queue)
        if -bound < least:
            continue
        if done == len(steps):
            yield i, stops[i]
            continue
        found = stop_in_case(ask, trials[i], *steps[done], reach)
        if found.rating < stops[i].rating:
            stops[i] = found
        heappush(queue, (-stops[i].rating, i, done + 1))


def _steps(ask: Ask) -> list[tuple[int, str]]:
    """Cases and directions in which the site runs, the binding one first."""
    steps = [
        (study.index, way)
        for way in ask.site.ways
        for study in ask.line.studies[way]
        if draw_of(ask.site, study.case, way) != 0
    ]
    if ask.stop.study is not None:
        binding = (ask.stop.study.index, ask.stop.way)
        steps.sort(key=lambda step: step != binding)
    return steps


def stop_in_case(ask: Ask, trial: Trial, index: int, way: str, reach: float) -> Stop:
    """Find what a trial meets first in one case and direction."""
    try:
        study = trial.studies(index, way)
    except NoSolutionError:
        return Stop(0.0, Criterion.AC_CHECK, way)
    return first_stop(trial.line(reach, {way: (study,)}), ask.at, ask.sizes)


def whole_line(ask: Ask, trial: Trial) -> Line:
    """Return the line of a trial with every case in both directions.

    Raises
    ------
    NoSolutionError
        If a case has no power flow solution.
    """
    own = {
        way: tuple(trial.studies(s.index, way) for s in studies)
        for way, studies in ask.line.studies.items()
    }
    return trial.line(ask.line.reach, own)


def passes(line: Line, ask: Ask, size: float) -> bool:
    """Check a size by AC in every case with the queue in place."""
    return bool(least_slack(line, ask.at, np.array([size]), [ask.sizes])[0] >= 0)


def leaves_others(ask: Ask, changed: Line) -> bool:
    """Whether a changed feeder breaks nothing new, in both directions.

    No limit breaks in a base case that held before, none that was broken gets worse than
    Settings allows, and where the queue alone kept the limits it still does.
    """
    for way, studies in changed.studies.items():
        for was, now in zip(ask.line.studies[way], studies, strict=True):
            before, after = _excess(ask.feeder, was, way), _excess(changed.feeder, now, way)
            if not after.keys() <= before.keys():
                return False
            if any(value > _most(ask, key, before[key]) for key, value in after.items()):
                return False
            if _queue_holds(ask, ask.line, was, way) and not _queue_holds(ask, changed, now, way):
                return False
    return True


def _excess(feeder: Feeder, study: CaseStudy, way: str) -> dict[tuple[int, int], float]:
    """Limits broken with nothing added, by criterion and element, and how far off each is.

    Voltages: pu above or below the limit; ratings: share of the rating; head: power.
    """
    limits = steady_limits(feeder, study.held, study.case, way)
    measured = measure(study.held.network, limits, study.held.point)
    room = slack(limits, measured)[:, 0]
    found: dict[tuple[int, int], float] = {}
    for row in np.flatnonzero((room < 0) & (limits.criterion >= 0)):
        k, value, bound = int(limits.element[row]), measured[row, 0], limits.bound[row]
        if limits.quantity[row] == Quantity.VOLTAGE:
            gain = study.held.network.gain[k, limits.phase[row]]
            off = abs(math.sqrt(value) - math.sqrt(bound)) * gain
        elif limits.quantity[row] == Quantity.HEAD_POWER:
            off = abs(value)
        else:
            off = math.sqrt(value / bound) if bound > 0 else math.inf
        key = (int(limits.criterion[row]), k)
        found[key] = max(found.get(key, 0.0), float(off))
    return found


def _most(ask: Ask, key: tuple[int, int], before: float) -> float:
    """Return how far off a broken limit may be after a change."""
    settings = ask.feeder.settings
    voltage = (Criterion.VOLTAGE_HIGH, Criterion.VOLTAGE_LOW)
    if LIMIT_CRITERIA[key[0]] in voltage:
        return before + settings.worsen_voltage_pu
    return before * (1 + settings.worsen_loading_pct / 100)


def _queue_holds(ask: Ask, line: Line, study: CaseStudy, way: str) -> bool:
    """Whether the earlier requests of one direction alone keep the steady limits of a case."""
    if not ask.sizes:
        return True
    drawn = reserved_power(line.feeder, ask.sizes, line.sites, study.case, way)
    posed = with_queue(line.feeder, study, drawn)
    if posed is None:
        return False
    system = posed[0].system
    room = slack(system.limits, measure(system.network, system.limits, posed[0].base))
    return bool((room[system.limits.criterion >= 0] >= 0).all())


def remedy(ask: Ask, name: str, setting: str, note: str = "") -> Remedy:
    """Return an alternative without a number; ``note`` says why there is none."""
    return Remedy(ask.site.request, name, setting, note=note)


def offered(own: Remedy, ask: Ask, size: float, criterion: str, proof: str) -> Remedy:
    """Return an alternative that carries a size, per unit."""
    # Twelve digits: what the way through per unit leaves behind them is no part of the size.
    kw = float(f"{ask.feeder.kw(size):.12g}")
    return replace(own, kw=kw, criterion=criterion, proof=proof)


def written(kw: float) -> str:
    """Write kW as published: no digits that rounding has not left."""
    return f"{kw:,.10g}"


def joined(*notes: str) -> str:
    """Join what there is to say."""
    return "; ".join(note for note in notes if note)
