"""The only call of a conic solver; a status the rest of the project can rely on."""

from __future__ import annotations

import importlib.util
import warnings
from dataclasses import dataclass
from enum import StrEnum

import cvxpy as cp


class Status(StrEnum):
    """What the solver's answer is worth; only CLEAN carries a value to compare."""

    CLEAN = "optimal"
    INACCURATE = "optimal_inaccurate"
    INFEASIBLE = "infeasible"
    UNBOUNDED = "unbounded"
    FAILED = "failed"


@dataclass(frozen=True)
class Answer:
    """Who answered, how, after how many iterations."""

    solver: str
    status: Status
    iterations: int


ECOS, CLARABEL = "ecos", "clarabel"
SOLVERS = (ECOS, CLARABEL)
_KNOWN = {
    cp.OPTIMAL: Status.CLEAN,
    cp.OPTIMAL_INACCURATE: Status.INACCURATE,
    cp.INFEASIBLE: Status.INFEASIBLE,
    cp.INFEASIBLE_INACCURATE: Status.INFEASIBLE,
    cp.UNBOUNDED: Status.UNBOUNDED,
    cp.UNBOUNDED_INACCURATE: Status.UNBOUNDED,
}


def default_solver() -> str:
    """ECOS where it can be had (it ships no wheels beyond Python 3.12), else Clarabel."""
    return ECOS if importlib.util.find_spec("ecos") else CLARABEL


def solve(problem: cp.Problem, solver: str) -> Answer:
    """Solve with the solver asked for, and again with Clarabel where its answer is not clean."""
    answer = _solve_once(problem, solver)
    if solver == ECOS and answer.status not in (Status.CLEAN, Status.INFEASIBLE):
        answer = _solve_once(problem, CLARABEL)
    return answer


def _solve_once(problem: cp.Problem, solver: str) -> Answer:
    with warnings.catch_warnings():
        # cvxpy warns where this function reports a status.
        warnings.simplefilter("ignore")
        try:
            problem.solve(solver=solver.upper(), enforce_dpp=True)
        except cp.SolverError:
            return Answer(solver, Status.FAILED, 0)
    status = _KNOWN.get(problem.status, Status.FAILED)
    stats = problem.solver_stats
    return Answer(solver, status, int((stats.num_iters if stats else 0) or 0))
