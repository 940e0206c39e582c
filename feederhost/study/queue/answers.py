"""The queue: every request answered in order, with number, reason and proof.

Each request is judged with connected and approved generation and with the earlier requests in
place at the size reserved for them.  Earlier requests of the opposite direction stand at zero:
they never help.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from feederhost.errors import UsageError
from feederhost.feeder.model import EXPORT, IMPORT, Feeder
from feederhost.flow.search import Plants
from feederhost.flow.taps import Solved
from feederhost.schema import Answer, Proof
from feederhost.study.cases import CaseStudy, study_case
from feederhost.study.load import Loaded
from feederhost.study.nodal import base_solutions, rounded_down
from feederhost.study.options import Options
from feederhost.study.proving import Prover
from feederhost.study.queue.remedies import SMALLER_SIZE, Remedy, remedies_of
from feederhost.study.queue.screens import Screen, ScreenData, screen_data, screen_site
from feederhost.study.queue.sites import Site, draw_of, read_sites
from feederhost.study.queue.stops import Line, Stop, first_stop, head_room, least_slack

FITTING, ASKED, NONE = "fitting", "asked", "none"
RESERVES = (FITTING, ASKED, NONE)


@dataclass(frozen=True)
class Answered:
    """One request's answer; powers per unit, NaN where there is no number.

    Attributes
    ----------
    fits : float
        Size that fits without a remedy.
    stop : Stop or None
        What is met first as the request grows.
    value : float
        Quantity measured there.
    reserved : float
        What later requests find in place.
    reach : float
        Size up to which the site could grow at its node.
    """

    site: Site
    answer: Answer
    proof: Proof = Proof.NONE
    fits: float = math.nan
    stop: Stop | None = None
    value: float = math.nan
    reserved: float = 0.0
    reach: float = math.nan
    depends_on: tuple[str, ...] = ()
    provisional_on: tuple[str, ...] = ()
    screens: tuple[Screen, ...] = ()
    remedies: tuple[Remedy, ...] = ()


@dataclass(frozen=True, eq=False)
class Bench:
    """What every request is judged with; ``notes`` name the withdrawn ones."""

    loaded: Loaded
    line: Line
    data: ScreenData
    prover: Prover
    options: Options
    base: tuple[Solved, ...]
    notes: tuple[str, ...]


def set_up(loaded: Loaded, options: Options) -> Bench:
    """Read the queue, solve and pose every case.

    Raises
    ------
    NoSolutionError
        If a base case has no power flow solution.
    UsageError
        If there is no open request.
    """
    feeder = loaded.feeder
    sites, notes = read_sites(loaded.tables, feeder)
    if not sites:
        raise UsageError("the sheet `requests` holds no open request")
    base = base_solutions(feeder, options)
    studies: dict[str, tuple[CaseStudy, ...]] = {
        way: tuple(study_case(feeder, i, solved, way) for i, solved in enumerate(base))
        for way in (EXPORT, IMPORT)
    }
    line = Line(feeder, studies, sites, reach_of_search(feeder))
    prover = Prover(feeder.settings, options.solver)
    return Bench(loaded, line, screen_data(line, loaded.tables), prover, options, base, notes)


def reach_of_search(feeder: Feeder) -> float:
    """Size up to which head room is looked for: the search cap of the feeder."""
    return max((c.cap for c in feeder.candidates), default=0.0)


def answer(bench: Bench, at: int, before: Sequence[Answered]) -> Answered:
    """Answer one request with the earlier ones in place, as the options reserve them."""
    site, line = bench.line.sites[at], bench.line
    reserve = bench.options.reserve
    provisional: tuple[str, ...] = ()
    if reserve == FITTING:
        provisional = tuple(
            a.site.request for a in before
            if a.answer in (Answer.DOES_NOT_FIT, Answer.DATA_FAULT)
        )  # fmt: skip
    if not site.fault and site.phases not in ("", "ABC"):
        # Judged as three-phase it would seem to fit several times better than it does.
        told = f"on phase {site.phases} alone, and this feeder is judged balanced"
        site = replace(site, fault=told)
    if site.fault:
        return Answered(site, Answer.DATA_FAULT, provisional_on=provisional)
    sizes = {i: a.reserved for i, a in enumerate(before) if a.reserved > 0}
    judged = judge(line, bench.prover, at, sizes)
    screens = screen_site(bench.data, at, sizes, site.asked)
    judged = replace(judged, screens=screens, provisional_on=provisional)
    if judged.stop is not None and judged.proof is not Proof.FAILED:
        judged = replace(judged, reach=head_room(line, at, sizes, judged.stop))
    if judged.answer is Answer.FITS and open_screens(screens):
        judged = replace(judged, answer=Answer.FITS_SCREENS_OPEN)
    if bench.options.remedies and judged.stop is not None and _short(judged):
        offered = tuple(
            replace(r, proof=str(judged.proof)) if r.remedy == SMALLER_SIZE else r
            for r in remedies_of(line, bench.loaded.tables, at, sizes, judged.stop)
        )
        judged = replace(judged, remedies=offered)
        if any(_carries(r, site, line.feeder) for r in offered):
            judged = replace(judged, answer=Answer.FITS_WITH_REMEDY)
    if judged.proof is not Proof.FAILED:
        judged = replace(judged, depends_on=_depends_on(bench, at, sizes, judged))
    return replace(judged, reserved=_reserved(judged, reserve))


def settled(own: Answered) -> dict[str, object]:
    """Return what later requests need to know of an answer, as plain data."""
    return {"answer": str(own.answer), "reserved": own.reserved}


def taken_up(site: Site, record: Mapping[str, Any]) -> Answered:
    """Return an earlier run's answer as far as later requests need it."""
    return Answered(site, Answer(record["answer"]), reserved=float(record["reserved"]))


def judge(line: Line, prover: Prover, at: int, sizes: Mapping[int, float]) -> Answered:
    """Find what fits of one request, prove what stops it, and look again by AC."""
    site, feeder, settings = line.sites[at], line.feeder, line.feeder.settings
    stop = first_stop(line, at, sizes)
    whole = stop.rating >= site.asked
    fits = site.asked if whole else rounded_down(feeder, stop.rating)
    word = Answer.FITS if whole else Answer.FITS_UP_TO
    if not whole and feeder.kw(fits) < settings.rounding_kw:
        word, fits = Answer.DOES_NOT_FIT, 0.0
    answered = Answered(site, word, Proof.NOT_NEEDED, fits, stop, reserved=fits)
    if not whole:
        answered = _proven(line, prover, answered)
    over = max(stop.rating * (1 + settings.above_share), settings.tiny_rating)
    tried = np.array([fits, fits if whole else over])
    slack = least_slack(line, at, tried, [sizes, sizes])
    # A request that finds a limit broken by the queue before it starts fits at nothing.
    holds = slack[0] >= -settings.rounding_slack or fits == 0
    if not holds or (not whole and slack[1] >= 0):
        # No word that promises anything may stand beside a number that AC does not confirm.
        return replace(
            answered, answer=Answer.DOES_NOT_FIT, proof=Proof.FAILED, fits=math.nan, value=math.nan
        )
    return answered


def _proven(line: Line, prover: Prover, answered: Answered) -> Answered:
    """Prove the first stop: recursion and solver on the binding system, queue in place."""
    stop, site = answered.stop, answered.site
    assert stop is not None
    if stop.posed is None or stop.study is None or stop.swing or stop.limit < 0:
        return replace(answered, proof=Proof.AC_ONLY)
    phases = line.feeder.network.phases
    unit = draw_of(site, stop.study.case, stop.way)
    plants = Plants(
        node=np.array([site.node + stop.posed.shift]),
        draw=np.full((1, phases), unit / phases),
        cap=np.array([line.reach_of(site)]),
    )
    rating, limit = np.array([stop.rating]), np.array([stop.limit])
    (own,) = prover.certify(stop.posed.system, plants, rating, limit)
    # No sheet of the queue shows an upper bound.
    verdict = prover.settle(own, bound=False)
    return replace(answered, proof=verdict.proof, value=own.value)


def open_screens(screens: tuple[Screen, ...]) -> tuple[Screen, ...]:
    """Return the screens that count and did not pass, or could not be assessed."""
    return tuple(s for s in screens if s.counted and s.verdict != "pass")


def _short(judged: Answered) -> bool:
    """Whether remedies are looked for; not where the answer itself failed its AC check."""
    return judged.proof is not Proof.FAILED and judged.answer in (
        Answer.FITS_UP_TO,
        Answer.DOES_NOT_FIT,
    )


def _carries(remedy: Remedy, site: Site, feeder: Feeder) -> bool:
    """Whether a remedy other than a smaller size carries what is asked."""
    asked = feeder.kw(site.asked)
    whole = asked * (1 - feeder.settings.search_tolerance)
    return remedy.remedy != SMALLER_SIZE and remedy.kw >= whole


def _reserved(judged: Answered, reserve: str) -> float:
    """Size that later requests find in place."""
    if reserve == NONE or math.isnan(judged.fits):
        return 0.0
    if reserve == ASKED:
        return judged.site.asked
    return judged.fits


def _depends_on(
    bench: Bench, at: int, sizes: Mapping[int, float], judged: Answered
) -> tuple[str, ...]:
    """Name the earlier requests whose removal alone would change word or number.

    All removals stand side by side: the answer stays where the size that fits still holds and,
    short of the asked size, one step more still does not.
    """
    if not sizes:
        return ()
    line, site, feeder = bench.line, judged.site, bench.line.feeder
    removed = [{j: s for j, s in sizes.items() if j != i} for i in sizes]
    fits = np.full(len(removed), judged.fits)
    zero = -feeder.settings.rounding_slack
    changed = (least_slack(line, at, fits, removed) < zero) & (judged.fits > 0)
    if judged.fits < site.asked:
        step = feeder.settings.rounding_kw / feeder.kw(1.0)
        more = np.full(len(removed), min(judged.fits + step, site.asked))
        changed |= least_slack(line, at, more, removed) >= 0
    if judged.answer is Answer.FITS_SCREENS_OPEN and _only_failed(judged.screens):
        failed = tuple(s.screen for s in open_screens(judged.screens))
        for i, others in enumerate(removed):
            again = screen_site(bench.data, at, others, site.asked, failed)
            changed[i] |= not open_screens(again)
    return tuple(line.sites[i].request for i, c in zip(sizes, changed, strict=True) if c)


def _only_failed(screens: tuple[Screen, ...]) -> bool:
    """Whether nothing is open for want of data: only then can a removal close the screens."""
    return all(s.verdict == "fail" for s in open_screens(screens))
