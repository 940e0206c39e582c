"""Prove first violations: recursion for all plants of a system at once, then the solver."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace

import numpy as np

from feederhost.flow.limits import System, measure
from feederhost.flow.network import OperatingPoint
from feederhost.flow.search import Plants, drawn_power
from feederhost.flow.sweep import sweep, tangent
from feederhost.flow.tree import Floats, Ints
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
from feederhost.proof.recovery import recover
from feederhost.proof.solver import CLARABEL, ECOS, default_solver
from feederhost.proof.valuing import Relaxed, solve_row
from feederhost.schema import Proof
from feederhost.settings import Settings


@dataclass(frozen=True)
class Evidence:
    """What the proof of one row rests on.

    Attributes
    ----------
    system, plant, flow, seek, column
        The binding system, the plant, the batch's AC points in branch-flow form, and the
        row's column there.
    rating, limit, value : float, int, float
        Rating at the first violation, the limit row met (-1: the solution is lost), and what
        is measured there.
    certificate : Certificate
        Of the whole batch; ``column`` picks the row.
    relaxed, plain : Relaxed or None
        Conic solutions of the priced and the plain programme, where solved.
    plain_outcome : str
        Why the plain solution is no operating point to publish.
    """

    system: System
    plant: Plants
    flow: BranchFlow
    seek: Seek
    column: int
    rating: float
    limit: int
    value: float
    point: OperatingPoint
    certificate: Certificate
    relaxed: Relaxed | None = None
    plain: Relaxed | None = None
    plain_outcome: str = ""

    def own(self, values: Floats) -> float:
        """Return this row's entry of a per-row array."""
        return float(values[self.column])


@dataclass(frozen=True)
class Verdict:
    """Proof state of a row, the upper bound that goes with it, and the evidence."""

    proof: Proof
    upper: float
    evidence: Evidence


@dataclass
class Prover:
    """Proves first violations; keeps compiled programmes, so that none is rebuilt per row."""

    settings: Settings
    solver: str = ""
    programmes: dict[tuple[object, ...], Programme] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.solver = self.solver or default_solver()

    def programme(self, system: System, *, cuts: bool = False) -> Programme:
        """Return the compiled programme that fits a system."""
        key = structure(system, cuts=cuts)
        if key not in self.programmes:
            self.programmes[key] = compile_programme(system, cuts=cuts)
        return self.programmes[key]

    def certify(
        self, system: System, plants: Plants, rating: Floats, limit: Ints
    ) -> list[Evidence]:
        """Run the recursion for plants (m) of one system at their first violations.

        Parameters
        ----------
        rating : (m,) float
        limit : (m,) int
            Limit row met there; -1 where the solution is lost.
        """
        settings = self.settings
        power = drawn_power(system, plants, rating)
        point = sweep(system.network, system.loading, settings, power)
        change = np.zeros_like(power)
        change[plants.node, :, np.arange(rating.size)] = plants.draw
        moved = tangent(system.network, system.loading, settings, point, power, change)
        value = measure(system.network, system.limits, point)
        seek = Seek(plants.node, plants.draw.sum(axis=1), np.maximum(limit, 0))
        flow = branch_flow(system, plants, point)
        prices = loss_prices(flow, system, seek, rating, settings)
        gradient = limit_gradient(flow, system, seek, reduced=False)
        slope = loss_current_slope(point, moved)
        certificate = certify(flow, seek, gradient, prices, slope, settings)
        return [
            Evidence(
                system, plants.pick(np.array([i])), flow, seek, i, float(rating[i]),
                int(limit[i]), float(value[limit[i], i]) if limit[i] >= 0 else math.nan,
                point, certificate,
            )
            for i in range(rating.size)
        ]  # fmt: skip

    def settle(self, own: Evidence, *, plain: bool = False, bound: bool = True) -> Verdict:
        """Hold the recursion against the conic solver and settle the proof.

        With ``plain`` the plain programme is solved too, for the record; without ``bound`` a
        row that is not proven gets no upper bound (NaN).
        """
        settings, cap = self.settings, float(own.plant.cap[0])
        programme = self.programme(own.system)

        def solve(prices: Floats, cap: float, solver: str = self.solver) -> Relaxed:
            return solve_row(
                programme, own.system, own.flow, own.seek, own.column, prices, own.rating, cap,
                solver, settings,
            )  # fmt: skip

        prices = own.certificate.prices[:, own.column]
        # The programme is convex: a cap that does not bind leaves its optimum where it is, and
        # a near one spares the solver numbers of very different size.
        started = own.rating >= settings.tiny_rating
        near = min(cap, settings.solver_room * own.rating) if started else cap
        relaxed = solve(prices, near) if own.limit >= 0 else None
        if relaxed is not None and not self._agrees(relaxed, own) and self.solver == ECOS:
            # ECOS may call an inexact end clean; the second solver has the last word.
            relaxed = solve(prices, near, CLARABEL)
        solved = replace(own, relaxed=relaxed)
        if plain:
            naive = solve(np.zeros_like(prices), cap)
            judged = recover(own.system, own.plant, naive, own.rating, settings)
            solved = replace(solved, plain=naive, plain_outcome=str(judged.outcome))
        closes = bool(own.certificate.closes[own.column])
        if relaxed is not None and closes and self._agrees(relaxed, own):
            return Verdict(Proof.PROVEN, own.rating, solved)
        if not bound:
            return Verdict(Proof.BRACKETED, math.nan, solved)
        upper = upper_bound(
            self.programme(own.system, cuts=True), own.system, own.flow, own.seek, own.column,
            own.rating, cap, self.solver, settings,
        )  # fmt: skip
        return Verdict(Proof.BRACKETED, upper, solved)

    def _agrees(self, relaxed: Relaxed, own: Evidence) -> bool:
        settings = self.settings
        size = own.rating
        if size < settings.tiny_rating:
            # Nothing fits: agreement is counted in the unit the programme was posed in.
            size = settings.idle_share * float(own.plant.cap[0])
        return bool(abs(relaxed.g - own.rating) <= settings.solver_agreement * size)
