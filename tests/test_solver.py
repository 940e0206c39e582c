"""The only call of a conic solver: what its answer is worth, and who is asked again."""

from __future__ import annotations

import importlib.util

import cvxpy as cp
import numpy as np
import pytest
from feederhost.proof.solver import CLARABEL, ECOS, SOLVERS, Status, default_solver, solve
from feederhost.settings import Settings

SETTINGS = Settings()


def cone(bound: float) -> tuple[cp.Variable, dict[str, cp.Problem]]:
    """Return the largest x + y in a disc of radius ``bound``: sqrt(2) bound; none below 0."""
    x = cp.Variable(2)
    room = cp.Parameter(1, value=[bound])
    return x, {
        name: cp.Problem(cp.Maximize(cp.sum(x)), [cp.SOC(room, cp.reshape(x, (2, 1), order="C"))])
        for name in SOLVERS
    }


@pytest.mark.parametrize("solver", SOLVERS)
def test_clean_answer_at_a_known_optimum(solver: str):
    x, problems = cone(3.0)
    answer = solve(problems, solver, SETTINGS)
    assert (answer.solver, answer.status) == (solver, Status.CLEAN)
    assert answer.iterations > 0
    assert x.value.sum() == pytest.approx(3 * np.sqrt(2), abs=1e-6)


@pytest.mark.parametrize("solver", SOLVERS)
def test_infeasible(solver: str):
    _, problems = cone(-1.0)
    answer = solve(problems, solver, SETTINGS)
    # A bound may rest on it, so ECOS's word for it is asked of Clarabel too.
    assert (answer.solver, answer.status) == ("clarabel", Status.INFEASIBLE)


@pytest.mark.parametrize("solver", SOLVERS)
def test_unbounded(solver: str):
    x = cp.Variable(1)
    problems = {name: cp.Problem(cp.Maximize(x[0]), [x >= 0]) for name in SOLVERS}
    assert solve(problems, solver, SETTINGS).status is Status.UNBOUNDED


@pytest.mark.parametrize("solver", SOLVERS)
def test_degenerate_a_single_feasible_point(solver: str):
    # Radius zero: the cone holds nothing but its tip.
    x, problems = cone(0.0)
    assert solve(problems, solver, SETTINGS).status in (Status.CLEAN, Status.INACCURATE)
    assert np.abs(x.value).max() < 1e-4


def fail_with(monkeypatch: pytest.MonkeyPatch, failing: tuple[str, ...]) -> list[str]:
    """Let the named solvers raise; return the list of solvers asked, filled as they are."""
    asked: list[str] = []
    sound = cp.Problem.solve

    def spoilt(self, *arguments, solver: str, **options):
        asked.append(solver.lower())
        if solver.lower() in failing:
            raise cp.SolverError("no luck")
        return sound(self, *arguments, solver=solver, **options)

    monkeypatch.setattr(cp.Problem, "solve", spoilt)
    return asked


def test_where_the_first_solver_fails_the_second_is_asked(monkeypatch: pytest.MonkeyPatch):
    asked = fail_with(monkeypatch, (ECOS,))
    x, problems = cone(2.0)
    answer = solve(problems, ECOS, SETTINGS)
    assert (answer.solver, answer.status) == (CLARABEL, Status.CLEAN)
    assert asked == [ECOS, CLARABEL]
    assert x.value.sum() == pytest.approx(2 * np.sqrt(2), abs=1e-6)


def test_a_failure_is_a_status_not_an_exception(monkeypatch: pytest.MonkeyPatch):
    asked = fail_with(monkeypatch, SOLVERS)
    _, problems = cone(2.0)
    assert solve(problems, ECOS, SETTINGS).status is Status.FAILED
    assert solve(problems, CLARABEL, SETTINGS).status is Status.FAILED
    assert asked == [ECOS, CLARABEL, CLARABEL]


def test_an_inaccurate_answer_is_asked_again(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(cp.Problem, "status", property(lambda self: cp.OPTIMAL_INACCURATE))
    _, problems = cone(2.0)
    answer = solve(problems, ECOS, SETTINGS)
    assert (answer.solver, answer.status) == (CLARABEL, Status.INACCURATE)


@pytest.mark.parametrize("word", [cp.USER_LIMIT, "infeasible_or_unbounded", "new status"])
def test_a_status_that_says_nothing_is_a_failure(word: str, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(cp.Problem, "status", property(lambda self: word))
    _, problems = cone(2.0)
    assert solve(problems, CLARABEL, SETTINGS).status is Status.FAILED


@pytest.mark.parametrize("solver", SOLVERS)
def test_the_tolerances_are_those_of_settings(solver: str):
    counts = []
    for gap in (1e-2, 1e-9):
        x, problems = cone(2.0)
        loose = Settings(solver_gap=gap, solver_feasibility=gap)
        counts.append(solve(problems, solver, loose).iterations)
    assert counts[0] < counts[1]
    assert x.value.sum() == pytest.approx(2 * np.sqrt(2), abs=1e-7)


def test_default_solver(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(importlib.util, "find_spec", lambda name: object())
    assert default_solver() == ECOS
    monkeypatch.setattr(importlib.util, "find_spec", lambda name: None)
    assert default_solver() == CLARABEL
