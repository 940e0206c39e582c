"""The only call of a conic solver; a status the rest of the project can rely on."""

from __future__ import annotations

import importlib.util
import warnings
from collections.abc import Mapping
from dataclasses import dataclass
from enum import StrEnum

import cvxpy as cp

from feederhost.settings import Settings


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
    cp.UNBOUNDED: Status.UNBOUNDED,
}


def default_solver() -> str:
    """ECOS where it can be had (it ships no wheels beyond Python 3.12), else Clarabel."""
    return ECOS if importlib.util.find_spec("ecos") else CLARABEL


def solve(problems: Mapping[str, cp.Problem], solver: str, settings: Settings) -> Answer:
    """Solve with the solver asked for, and again with Clarabel where its answer is not clean.

    Parameters
    ----------
    problems : mapping of str to cvxpy.Problem
        The same programme once per solver: a problem that changes its solver is compiled anew.
    """
    answer = _solve_once(problems[solver], solver, settings)
    if solver == ECOS and answer.status is not Status.CLEAN:
        answer = _solve_once(problems[CLARABEL], CLARABEL, settings)
    return answer


def _solve_once(problem: cp.Problem, solver: str, settings: Settings) -> Answer:
    gap, feasible = settings.solver_gap, settings.solver_feasibility
    options: dict[str, float] = (
        {"abstol": gap, "reltol": gap, "feastol": feasible}
        if solver == ECOS
        else {"tol_gap_abs": gap, "tol_gap_rel": gap, "tol_feas": feasible}
    )
    with warnings.catch_warnings():
        # cvxpy warns where this function reports a status.
        warnings.simplefilter("ignore")
        try:
            problem.solve(solver=solver.upper(), enforce_dpp=True, **options)
        except cp.SolverError:
            return Answer(solver, Status.FAILED, 0)
    status = _KNOWN.get(problem.status, Status.FAILED)
    stats = problem.solver_stats
    return Answer(solver, status, int((stats.num_iters if stats else 0) or 0))
