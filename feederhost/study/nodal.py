"""How much fits at each node, one plant at a time, and how far that number can be trusted.

The AC search finds the first violation; the proof (recursion, then conic solver) says whether
any operating point hosts more; the AC check looks at the rounded value in every case.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from feederhost.errors import UsageError
from feederhost.feeder.model import EXPORT, IMPORT, Candidate, Feeder, Technology
from feederhost.flow.search import (
    GROUPS,
    NO_SOLUTION,
    WATCHED,
    Plants,
    blocks,
    first_violations,
    slacks_with,
)
from feederhost.flow.taps import Solved
from feederhost.flow.tree import Floats, Ints
from feederhost.schema import LIMIT_CRITERIA, Criterion, Proof, State
from feederhost.study.cases import BOTH, CaseStudy, base_run, case_scale, plant_draw, study_case
from feederhost.study.options import Options
from feederhost.study.proving import Evidence, Prover


@dataclass(frozen=True)
class Found:
    """Outcome of the AC search for the candidates of one technology in one direction.

    Attributes
    ----------
    rating : (GROUPS, m) float
        First violation of each criterion over all cases, nameplate per unit.
    case, posed, row : (GROUPS, m) int
        Position in the studies, which of the case's systems, its limit row; -1: none.
    """

    rating: Floats
    case: Ints
    posed: Ints
    row: Ints


@dataclass(frozen=True)
class HostingRow:
    """One row of the answer; powers per unit, NaN where there is no number.

    ``study`` and ``posed`` locate the binding system, ``limit`` its row (-1: none); ``slack``
    is the least of all limits and cases at the published value (squared or power per unit).
    """

    candidate: Candidate
    direction: str
    state: State
    proof: Proof
    criterion: Criterion | None
    rating: float = math.nan
    hosting: float = math.nan
    upper: float = math.nan
    by_group: Floats = field(default_factory=lambda: np.full(GROUPS, np.inf))
    study: CaseStudy | None = None
    posed: int = 0
    limit: int = -1
    value: float = math.nan
    mismatch: float = math.nan
    slack: float = math.nan
    evidence: Evidence | None = None
    broken: tuple[str, ...] = ()


@dataclass(frozen=True)
class Hosting:
    """All rows of a run with the studies they rest on."""

    feeder: Feeder
    rows: tuple[HostingRow, ...]
    base: tuple[Solved, ...]
    studies: dict[str, tuple[CaseStudy, ...]]
    solver: str


def narrow(feeder: Feeder, options: Options) -> Feeder:
    """Keep the nodes, technologies and cases asked for.

    Raises
    ------
    UsageError
        If one of them is unknown, or nothing is left.
    """
    for asked, known, what in (
        (options.nodes, set(feeder.nodes), "node"),
        (options.technologies, {t.name for t in feeder.technologies}, "technology"),
        (options.cases, {c.name for c in feeder.cases}, "case"),
    ):
        unknown = [name for name in asked if name not in known]
        if unknown:
            raise UsageError(f"no {what} named {', '.join(unknown)}")
    candidates = list(feeder.candidates)
    if options.technologies:
        present = {c.technology for c in candidates}
        extra = [t for t in options.technologies if t not in present]
        nodes = sorted({c.node for c in candidates})
        caps = {c.node: c.cap for c in candidates}
        for name in extra:
            own = feeder.technology(name)
            candidates += [Candidate(k, name, own.reactive, caps[k]) for k in nodes]
        candidates = [c for c in candidates if c.technology in options.technologies]
    if options.nodes:
        candidates = [c for c in candidates if feeder.nodes[c.node] in options.nodes]
    if not candidates:
        raise UsageError("no candidate is left: see the options and the sheet `candidates`")
    cases = feeder.cases
    if options.cases:
        cases = tuple(c for c in cases if c.name in options.cases)
    return replace(feeder, candidates=tuple(candidates), cases=cases)


def host(feeder: Feeder, options: Options) -> Hosting:
    """Find and prove the hosting of every candidate.

    Raises
    ------
    NoSolutionError
        If a base case has no power flow solution.
    UsageError
        If the options name something the feeder does not have.
    """
    feeder = narrow(feeder, options)
    base = base_solutions(feeder, options)
    studies: dict[str, tuple[CaseStudy, ...]] = {}
    prover = Prover(feeder, options)
    rows: dict[Candidate, HostingRow] = {}
    for name in dict.fromkeys(c.technology for c in feeder.candidates):
        technology = feeder.technology(name)
        candidates = [c for c in feeder.candidates if c.technology == name]
        ways = (EXPORT, IMPORT) if technology.direction == BOTH else (technology.direction,)
        answers = []
        for way in ways:
            if way not in studies:
                studies[way] = tuple(
                    study_case(feeder, i, solved, way) for i, solved in enumerate(base)
                )
            answers.append(_rows(feeder, technology, candidates, way, studies[way], options))
        chosen = [smaller(pair) for pair in zip(*answers, strict=True)]
        rows.update(zip(candidates, prover.prove(chosen), strict=True))
    checked = check_rows(feeder, [rows[c] for c in feeder.candidates], studies, options)
    return Hosting(feeder, tuple(checked), base, studies, prover.solver)


def base_solutions(feeder: Feeder, options: Options) -> tuple[Solved, ...]:
    """Solve every case with nothing added."""
    base = []
    for i, case in enumerate(feeder.cases):
        base.append(base_run(feeder, case))
        options.progress("base cases", i + 1, len(feeder.cases))
    return tuple(base)


def plants_in(
    candidates: Sequence[Candidate], direction: str, scale: float, shift: int, phases: int
) -> Plants:
    """Return the candidates as plants of one case, rating in nameplate per unit."""
    draw = np.array([plant_draw(direction, c.reactive) for c in candidates]) * scale
    return Plants(
        node=np.array([c.node + shift for c in candidates]),
        draw=np.repeat(draw[:, None] / phases, phases, axis=1),
        cap=np.array([c.cap for c in candidates]),
    )


def search(
    feeder: Feeder,
    technology: Technology,
    candidates: Sequence[Candidate],
    direction: str,
    studies: Sequence[CaseStudy],
    options: Options,
) -> Found:
    """Search every case in which the technology runs for each criterion's first violation."""
    m = len(candidates)
    best = Found(np.full((GROUPS, m), np.inf), *(np.full((GROUPS, m), -1) for _ in range(3)))
    for i, study in enumerate(studies):
        scale = case_scale(study.case, technology)
        for p, posed in enumerate(study.posed if scale else ()):
            plants = plants_in(candidates, direction, scale, posed.shift, feeder.network.phases)
            found = first_violations(posed.system, plants, feeder.settings)
            better = found.rating < best.rating
            best = Found(
                np.where(better, found.rating, best.rating),
                np.where(better, i, best.case),
                np.where(better, p, best.posed),
                np.where(better, found.row, best.row),
            )
        options.progress(f"search {technology.name} {direction}", i + 1, len(studies))
    return best


def _rows(
    feeder: Feeder,
    technology: Technology,
    candidates: Sequence[Candidate],
    direction: str,
    studies: Sequence[CaseStudy],
    options: Options,
) -> list[HostingRow]:
    """Search one direction and state each candidate's first violation, not yet proven."""
    running = [s for s in studies if case_scale(s.case, technology)]
    if not running:
        never = (State.NOT_ANALYSED, Proof.NONE, Criterion.NEVER_RUNS)
        return [HostingRow(c, direction, *never) for c in candidates]
    found = search(feeder, technology, candidates, direction, studies, options)
    broken = tuple(dict.fromkeys(b for s in running for b in broken_limits(feeder, s)))
    limits = np.array([g for g in range(GROUPS) if g != WATCHED])
    rows = []
    for i, candidate in enumerate(candidates):
        first = int(limits[found.rating[limits, i].argmin()])
        rating = float(found.rating[first, i])
        if not math.isfinite(rating):
            rows.append(
                HostingRow(
                    candidate, direction, State.CAPPED, Proof.NOT_NEEDED, Criterion.SEARCH_CAP,
                    rating=candidate.cap, hosting=candidate.cap, by_group=found.rating[:, i],
                    broken=broken,
                )
            )  # fmt: skip
            continue
        criterion = Criterion.AC_CHECK if first == NO_SOLUTION else LIMIT_CRITERIA[first]
        state = State.HOSTED_BASE_VIOLATION if broken else State.HOSTED
        rows.append(
            HostingRow(
                candidate, direction, state, Proof.AC_ONLY, criterion,
                rating=rating, hosting=rounded_down(feeder, rating),
                by_group=found.rating[:, i], study=studies[found.case[first, i]],
                posed=int(found.posed[first, i]), limit=int(found.row[first, i]), broken=broken,
            )
        )  # fmt: skip
    return rows


def smaller(rows: Sequence[HostingRow]) -> HostingRow:
    """Of a storage plant's two directions, return the one that hosts less."""
    best = min(rows, key=lambda r: math.inf if math.isnan(r.rating) else r.rating)
    return replace(best, by_group=np.min([r.by_group for r in rows], axis=0))


def rounded_down(feeder: Feeder, rating: float) -> float:
    """Round a rating down to the step of Settings, never up."""
    kw, step = feeder.kw(rating), feeder.settings.rounding_kw
    if step <= 0:
        return rating
    return math.floor(kw / step) * step / feeder.kw(1.0)


def broken_limits(feeder: Feeder, study: CaseStudy) -> list[str]:
    """Name the limits that are broken with nothing added: criterion, element, case."""
    names = []
    for posed in study.posed:
        limits = posed.system.limits
        for row in np.flatnonzero(posed.broken):
            criterion = LIMIT_CRITERIA[limits.criterion[row]]
            where = element_name(feeder, criterion, int(limits.element[row]) - posed.shift)
            names.append(f"{criterion} at {where} in {study.case.name}")
    return list(dict.fromkeys(names))


def element_name(feeder: Feeder, criterion: Criterion, k: int) -> str:
    """Name the node or branch a limit belongs to."""
    edge = feeder.edges[k]
    rated = (Criterion.LINE_RATING, Criterion.TRANSFORMER_RATING, Criterion.REGULATOR_RATING)
    return edge.name if criterion in rated and edge is not None else feeder.nodes[k]


def check_rows(
    feeder: Feeder,
    rows: Sequence[HostingRow],
    studies: dict[str, tuple[CaseStudy, ...]],
    options: Options,
) -> list[HostingRow]:
    """Check every published value by AC in every case, and that just above it fails.

    A row that does not pass keeps its place and loses every number.
    """
    settings = feeder.settings
    least = np.full(len(rows), np.inf)
    above = np.full(len(rows), np.inf)
    mismatch = np.zeros(len(rows))
    numbered = [i for i, r in enumerate(rows) if r.state is not State.NOT_ANALYSED]
    for way, cases in studies.items():
        own = [i for i in numbered if rows[i].direction == way or _both(feeder, rows[i])]
        for s, study in enumerate(cases):
            by_scale: dict[float, list[int]] = {}
            for i in own:
                technology = feeder.technology(rows[i].candidate.technology)
                by_scale.setdefault(case_scale(study.case, technology), []).append(i)
            for scale, members in by_scale.items():
                for cut in blocks(len(members), feeder.tree.size, settings):
                    which = np.array(members)[cut]
                    _check_block(feeder, rows, which, way, scale, study, least, above, mismatch)
            options.progress(f"AC check {way}", s + 1, len(cases))
    return [
        _judged(row, least[i], above[i], mismatch[i], settings.mismatch_tolerance)
        for i, row in enumerate(rows)
    ]


def _both(feeder: Feeder, row: HostingRow) -> bool:
    return feeder.technology(row.candidate.technology).direction == BOTH


def _check_block(
    feeder: Feeder,
    rows: Sequence[HostingRow],
    which: Ints,
    way: str,
    scale: float,
    study: CaseStudy,
    least: Floats,
    above: Floats,
    mismatch: Floats,
) -> None:
    """Fold one case's slacks at the value, and just above it, into the running worst."""
    settings = feeder.settings
    value = np.array([rows[i].hosting for i in which])
    over = np.array([rows[i].rating for i in which]) * (1 + settings.above_share)
    candidates = [rows[i].candidate for i in which]
    for posed in study.posed:
        plants = plants_in(candidates, way, scale, posed.shift, feeder.network.phases)
        real = (posed.system.limits.criterion >= 0)[:, None]
        slack, point = slacks_with(posed.system, plants, value, settings)
        least[which] = np.minimum(least[which], slack.min(axis=0, initial=np.inf, where=real))
        mismatch[which] = np.maximum(mismatch[which], point.mismatch)
        slack, _ = slacks_with(posed.system, plants, over, settings)
        above[which] = np.minimum(above[which], slack.min(axis=0, initial=np.inf, where=real))


def _judged(
    row: HostingRow, least: float, above: float, mismatch: float, tolerance: float
) -> HostingRow:
    if row.state is State.NOT_ANALYSED:
        return row
    passes = least >= 0 and mismatch <= tolerance
    passes = passes and (row.state is State.CAPPED or above < 0)
    if passes:
        return replace(row, mismatch=mismatch, slack=least)
    state = row.state if row.state is not State.CAPPED else State.HOSTED
    return replace(
        row, state=state, proof=Proof.FAILED, criterion=Criterion.AC_CHECK, rating=math.nan,
        hosting=math.nan, upper=math.nan, by_group=np.full(GROUPS, np.inf), mismatch=mismatch,
    )  # fmt: skip
