"""The last look: every published value by AC in every case, and that just above it fails."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from feederhost.feeder.model import Feeder
from feederhost.flow.search import GROUPS, blocks, slacks_with
from feederhost.flow.tree import Floats, Ints
from feederhost.schema import Criterion, Proof, State
from feederhost.settings import Settings
from feederhost.study.cases import BOTH, CaseStudy, case_scale
from feederhost.study.options import Options
from feederhost.study.rows import HostingRow, plants_in


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
    return [_judged(row, least[i], above[i], mismatch[i], settings) for i, row in enumerate(rows)]


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
    # Where the solution itself is lost is located less closely than a limit.
    lost = np.array([rows[i].limit < 0 and rows[i].study is not None for i in which])
    share = np.where(lost, settings.search_lost_share, settings.above_share)
    over = np.array([rows[i].rating for i in which]) * (1 + share)
    over = np.maximum(over, settings.tiny_rating)
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
    row: HostingRow, least: float, above: float, mismatch: float, settings: Settings
) -> HostingRow:
    if row.state is State.NOT_ANALYSED:
        return row
    passes = least >= -settings.rounding_slack and mismatch <= settings.mismatch_tolerance
    passes = passes and (row.state is State.CAPPED or above < 0)
    if passes:
        return replace(row, mismatch=mismatch, slack=least)
    return replace(
        row, state=State.HOSTED, proof=Proof.FAILED, criterion=Criterion.AC_CHECK, rating=math.nan,
        hosting=math.nan, upper=math.nan, by_group=np.full(GROUPS, np.inf), mismatch=mismatch,
    )  # fmt: skip
