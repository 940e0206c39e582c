"""The rows of an answer, and how a candidate becomes a plant of one case."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from feederhost.feeder.model import Candidate, Feeder
from feederhost.flow.search import GROUPS, Plants
from feederhost.flow.taps import Solved
from feederhost.flow.tree import Floats
from feederhost.schema import LIMIT_CRITERIA, Criterion, Proof, State
from feederhost.study.cases import CaseStudy, plant_draw
from feederhost.study.proving import Evidence


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
