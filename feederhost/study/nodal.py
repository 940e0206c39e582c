"""How much fits at each node, one plant at a time, and how far that number can be trusted.

The AC search finds the first violation; the proof (recursion, then conic solver) says whether
any operating point hosts more; the AC check looks at the rounded value in every case.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from feederhost.errors import UsageError
from feederhost.feeder.model import EXPORT, IMPORT, Candidate, Feeder, Technology
from feederhost.flow.search import GROUPS, NO_SOLUTION, WATCHED, first_violations
from feederhost.flow.taps import Solved
from feederhost.flow.tree import Floats, Ints
from feederhost.schema import LIMIT_CRITERIA, Criterion, Proof, State
from feederhost.study.cases import BOTH, CaseStudy, base_run, case_scale, study_case
from feederhost.study.checking import check_rows
from feederhost.study.options import Options
from feederhost.study.proving import Evidence, Prover
from feederhost.study.rows import Hosting, HostingRow, broken_limits, plants_in


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
    prover = Prover(feeder.settings, options.solver)
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
        rows.update(zip(candidates, prove_rows(feeder, prover, chosen, options), strict=True))
    checked = check_rows(feeder, [rows[c] for c in feeder.candidates], studies, options)
    return Hosting(feeder, tuple(checked), base, studies, prover.solver)


def base_solutions(feeder: Feeder, options: Options) -> tuple[Solved, ...]:
    """Solve every case with nothing added."""
    base = []
    for i, case in enumerate(feeder.cases):
        base.append(base_run(feeder, case))
        options.progress("base cases", i + 1, len(feeder.cases))
    return tuple(base)


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


def prove_rows(
    feeder: Feeder, prover: Prover, rows: Sequence[HostingRow], options: Options
) -> list[HostingRow]:
    """Return the rows with proof, upper bound and evidence, system by system."""
    batches: dict[tuple[int, int], list[int]] = {}
    for i, row in enumerate(rows):
        if row.study is not None:
            batches.setdefault((id(row.study), row.posed), []).append(i)
    plain = _plain_sample([i for b in batches.values() for i in b], feeder, options)
    proven = list(rows)
    total = sum(len(b) for b in batches.values())
    done = 0
    for members in batches.values():
        for i, own in zip(
            members, _evidence(feeder, prover, [rows[i] for i in members]), strict=True
        ):
            verdict = prover.settle(own, plain=i in plain)
            proven[i] = replace(
                rows[i], proof=verdict.proof, upper=verdict.upper, value=own.value,
                evidence=verdict.evidence,
            )  # fmt: skip
            done += 1
            options.progress("proof", done, total)
    return proven


def _evidence(feeder: Feeder, prover: Prover, rows: Sequence[HostingRow]) -> list[Evidence]:
    """Certify rows that share one system."""
    study = rows[0].study
    assert study is not None
    posed = study.posed[rows[0].posed]
    technology = feeder.technology(rows[0].candidate.technology)
    plants = plants_in(
        [r.candidate for r in rows], rows[0].direction, case_scale(study.case, technology),
        posed.shift, feeder.network.phases,
    )  # fmt: skip
    rating = np.array([r.rating for r in rows])
    limit = np.array([r.limit for r in rows])
    return prover.certify(posed.system, plants, rating, limit)


def _plain_sample(members: list[int], feeder: Feeder, options: Options) -> set[int]:
    """Rows for which the plain programme is solved too: a seeded sample, or all."""
    size = feeder.settings.plain_sample
    if options.plain or len(members) <= size:
        return set(members)
    drawn = np.random.default_rng(feeder.settings.seed)
    return set(drawn.choice(np.array(members), size, replace=False).tolist())


def rounded_down(feeder: Feeder, rating: float) -> float:
    """Round a rating down to the step of Settings, never up."""
    kw, step = feeder.kw(rating), feeder.settings.rounding_kw
    if step <= 0:
        return rating
    return math.floor(kw / step) * step / feeder.kw(1.0)
