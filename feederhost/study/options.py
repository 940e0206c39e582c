"""What a run was asked to do, beyond the workbook itself."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

# Called with a stage, how many of its steps are done, and how many there are.
Progress = Callable[[str, int, int], None]


def silent(stage: str, done: int, total: int) -> None:
    """Report no progress."""


@dataclass(frozen=True)
class Options:
    """Narrowing and solver options of one run; empty tuples mean everything."""

    nodes: tuple[str, ...] = ()
    technologies: tuple[str, ...] = ()
    cases: tuple[str, ...] = ()
    solver: str = ""
    plain: bool = False
    reserve: str = "fitting"
    remedies: bool = True
    resume: bool = False
    progress: Progress = silent
