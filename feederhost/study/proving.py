"""Prove each first violation: recursion for all rows of a system at once, then the solver."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np

from feederhost.feeder.model import Feeder
from feederhost.flow.limits import System, measure
from feederhost.flow.network import OperatingPoint
from feederhost.flow.search import Plants, drawn_power
from feederhost.flow.sweep import sweep, tangent
from feederhost.flow.tree import Floats
from feederhost.proof.bounds import upper_bound
from feederhost.proof.branchflow import (
    BranchFlow,
    Seek,
    branch_flow,
    limit_gradient,
    loss_current_slope,
)
from feederhost.proof.certificate import Certificate, certify
from feederhost.proof.pricing import loss_prices
from feederhost.proof.program import Programme, compile_programme, structure
from feederhost.proof.solver import CLARABEL, ECOS, default_solver
from feederhost.proof.valuing import Relaxed, solve_row
from feederhost.schema import Proof, State
from feederhost.study.cases import CaseStudy, case_scale, plant_draw
from feederhost.study.options import Options

if TYPE_CHECKING:
    from feederhost.study.nodal import HostingRow


@dataclass(frozen=True)
class Evidence:
    """What the proof of one row rests on.

    Attributes
    ----------
    system, plant, flow, column
        The binding system, the plant, the AC point in branch-flow form and the row's column.
    certificate : Certificate
        Of the whole batch; ``column`` picks the row.
    relaxed, plain : Relaxed or None
        Conic solutions of the priced and the plain programme, where solved.
    """

    system: System
    plant: Plants
    flow: BranchFlow
    seek: Seek
    column: int
    point: OperatingPoint
    certificate: Certificate
    relaxed: Relaxed | None = None
    plain: Relaxed | None = None

    def own(self, values: Floats) -> float:
        """Return this row's entry of a per-row array."""
        return float(values[self.column])


@dataclass
class Prover:
    """Proves rows; keeps the compiled programmes, so that none is rebuilt per row."""

    feeder: Feeder
    options: Options
    programmes: dict[tuple[object, ...], Programme] = field(default_factory=dict)

    @property
    def solver(self) -> str:
        """Name of the conic solver in use."""
        return self.options.solver or default_solver()

    def programme(self, system: System, *, cuts: bool = False) -> Programme:
        """Return the compiled programme that fits a system."""
        key = structure(system, cuts=cuts)
        if key not in self.programmes:
            self.programmes[key] = compile_programme(system, cuts=cuts)
        return self.programmes[key]

    def prove(self, rows: Sequence[HostingRow]) -> list[HostingRow]:
        """Return the rows with proof, upper bound and evidence."""
        batches: dict[tuple[int, int], list[int]] = {}
        for i, row in enumerate(rows):
            if row.study is not None:
                batches.setdefault((row.study.index, row.posed), []).append(i)
        proven = list(rows)
        hosted = sum(len(b) for b in batches.values())
        sample = self._plain_sample([i for b in batches.values() for i in b])
        done = 0
        for members in batches.values():
            certified = self._recursion([rows[i] for i in members])
            for i, row in zip(members, certified, strict=True):
                proven[i] = self._solved(row, i in sample)
                done += 1
                self.options.progress("proof", done, hosted)
        return proven

    def _plain_sample(self, members: list[int]) -> set[int]:
        size = self.feeder.settings.plain_sample
        if self.options.plain or len(members) <= size:
            return set(members)
        drawn = np.random.default_rng(self.feeder.settings.seed)
        return set(drawn.choice(np.array(members), size, replace=False).tolist())

    def _recursion(self, rows: Sequence[HostingRow]) -> list[HostingRow]:
        """Certify rows that share one system."""
        study, settings = rows[0].study, self.feeder.settings
        assert study is not None
        posed = study.posed[rows[0].posed]
        system = posed.system
        rating = np.array([r.rating for r in rows])
        plants = self._plants(rows, study, posed.shift)
        power = drawn_power(system, plants, rating)
        point = sweep(system.network, system.loading, settings, power)
        change = np.zeros_like(power)
        change[plants.node, :, np.arange(rating.size)] = plants.draw
        moved = tangent(system.network, system.loading, settings, point, power, change)
        value = measure(system.network, system.limits, point)
        # A row that ends where the solution is lost has no limit to price: limit -1.
        limit = np.array([max(r.limit, 0) for r in rows])
        seek = Seek(plants.node, plants.draw.sum(axis=1), limit)
        flow = branch_flow(system, plants, point)
        prices = loss_prices(flow, system, seek, rating, settings)
        gradient = limit_gradient(flow, system, seek, reduced=False)
        slope = loss_current_slope(point, moved)
        certificate = certify(flow, seek, gradient, prices, slope, settings)
        return [
            replace(
                row,
                value=float(value[row.limit, i]) if row.limit >= 0 else math.nan,
                evidence=Evidence(
                    system, plants.pick(np.array([i])), flow, seek, i, point, certificate
                ),
            )
            for i, row in enumerate(rows)
        ]

    def _plants(self, rows: Sequence[HostingRow], study: CaseStudy, shift: int) -> Plants:
        technology = self.feeder.technology(rows[0].candidate.technology)
        scale = case_scale(study.case, technology)
        draw = np.array([plant_draw(r.direction, r.candidate.reactive) for r in rows]) * scale
        phases = self.feeder.network.phases
        return Plants(
            node=np.array([r.candidate.node + shift for r in rows]),
            draw=np.repeat(draw[:, None] / phases, phases, axis=1),
            cap=np.array([r.candidate.cap for r in rows]),
        )

    def _solved(self, row: HostingRow, with_plain: bool) -> HostingRow:
        """Hold the recursion against the conic solver and settle the proof."""
        settings = self.feeder.settings
        assert row.evidence is not None
        own: Evidence = row.evidence
        programme = self.programme(own.system)

        def solve(prices: Floats, cap: float, solver: str = self.solver) -> Relaxed:
            return solve_row(
                programme, own.system, own.flow, own.seek, own.column, prices,
                row.rating, cap, solver, settings,
            )  # fmt: skip

        prices = own.certificate.prices[:, own.column]
        # The programme is convex: a cap that does not bind leaves its optimum where it is, and
        # a near one spares the solver numbers of very different size.
        near = min(row.candidate.cap, settings.solver_room * row.rating)
        relaxed = solve(prices, near) if row.limit >= 0 else None
        if relaxed is not None and not self._agrees(relaxed, row) and self.solver == ECOS:
            # ECOS may call an inexact end clean; the second solver has the last word.
            relaxed = solve(prices, near, CLARABEL)
        plain = solve(np.zeros_like(prices), row.candidate.cap) if with_plain else None
        own = replace(own, relaxed=relaxed, plain=plain)
        if (
            relaxed is not None
            and self._agrees(relaxed, row)
            and bool(own.certificate.closes[own.column])
        ):
            return replace(row, evidence=own, proof=Proof.PROVEN, upper=row.rating)
        upper = upper_bound(
            self.programme(own.system, cuts=True), own.system, own.flow, own.seek, own.column,
            row.rating, row.candidate.cap, self.solver, settings,
        )  # fmt: skip
        return replace(row, evidence=own, proof=Proof.BRACKETED, upper=upper)

    def _agrees(self, relaxed: Relaxed, row: HostingRow) -> bool:
        tolerance = self.feeder.settings.solver_agreement * row.rating
        return bool(abs(relaxed.g - row.rating) <= tolerance)


def hosted(row: HostingRow) -> bool:
    """Whether the row carries a first violation with evidence."""
    return row.state in (State.HOSTED, State.HOSTED_BASE_VIOLATION) and row.evidence is not None
