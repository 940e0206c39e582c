"""The plan of the house, held against the imports: nothing walks back, every library at home.

Imports are read from the source, so those in functions and under ``TYPE_CHECKING`` count too.
"""

from __future__ import annotations

import ast
import io
import sys
import tokenize
from collections.abc import Iterator
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "feederhost"
NAME = PACKAGE.name
# Rooms of one floor never import each other; a room is a folder or a module beside the package.
FLOORS = (
    {"__init__", "errors", "settings", "schema"},
    {"flow"},
    {"proof"},
    {"feeder", "sheets"},
    {"study"},
    {"cli", "terminal", "__main__"},
)
# The ground floor and the top are rooms whose modules belong together.
OPEN_FLOORS = (0, 5)
HOMES = {
    "cvxpy": {"proof.program", "proof.solver"},
    "ecos": {"proof.solver"},
    "clarabel": {"proof.solver"},
    "networkx": {"feeder.topology"},
    "openpyxl": {"sheets"},
    "pandas": {"feeder", "sheets", "study"},
    "click": {"cli", "terminal", "__main__"},
    "scipy": {"flow", "proof"},
    "numpy": {"flow", "proof", "feeder", "sheets", "study"},
}
# What judges the programme shares no code with it.
JUDGES = ("flow.sweep", "proof.certificate")
JUDGED = ("proof.program", "proof.solver")
# Rooms that compute: a number this small in their code is a tolerance, however it is written.
COMPUTING = ("flow", "proof", "study")
SMALL = 0.01
MOST_LINES = 400

SOURCES = {
    ".".join(path.relative_to(PACKAGE).with_suffix("").parts): path
    for path in sorted(PACKAGE.rglob("*.py"))
}
MODULES = {m: path.read_text(encoding="utf-8") for m, path in SOURCES.items()}
every_module = pytest.mark.parametrize("module", MODULES)


def imports(module: str, source: str) -> Iterator[str]:
    """Yield every module that a source imports, relative imports written out."""
    here = [NAME, *module.split(".")]
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                base = ".".join([*here[: len(here) - node.level], *filter(None, [base])])
            yield base
            # `from feederhost import flow` names a module as if it were a value.
            yield from (f"{base}.{alias.name}" for alias in node.names)
        elif (
            isinstance(node, ast.Call)
            and getattr(node.func, "attr", getattr(node.func, "id", ""))
            in ("import_module", "__import__")
        ):  # fmt: skip
            yield ast.literal_eval(node.args[0])


def own(module: str, source: str) -> set[str]:
    """Return the modules of this package that a source imports (``__init__`` as the package)."""
    found = set()
    for name in imports(module, source):
        inner = name.removeprefix(f"{NAME}.")
        if name == NAME:
            found.add("__init__")
        elif name.startswith(f"{NAME}."):
            package = f"{inner}.__init__"
            found |= {m for m in (inner, package) if m in MODULES}
    return found


def floor_of(module: str) -> int:
    """Return the floor of a module."""
    (floor,) = (i for i, rooms in enumerate(FLOORS) if room_of(module) in rooms)
    return floor


def room_of(module: str) -> str:
    """Return the room of a module."""
    return module.split(".")[0]


def trespasses(module: str, source: str) -> list[str]:
    """Return imports from a floor above, or from another room of the same floor."""
    mine = floor_of(module)
    shut = {room for room in FLOORS[mine] if room != room_of(module) and mine not in OPEN_FLOORS}
    return [
        other
        for other in sorted(own(module, source))
        if floor_of(other) > mine or room_of(other) in shut
    ]


def strays(module: str, source: str) -> list[str]:
    """Return libraries that a source imports away from their home, and unknown ones."""
    found = {name.split(".")[0] for name in imports(module, source)} - {NAME}
    libraries = found - set(sys.stdlib_module_names)
    return sorted(
        library for library in libraries
        if not {module, room_of(module)} & HOMES.get(library, set())
    )  # fmt: skip


def naked_tolerances(module: str, source: str) -> list[str]:
    """Return the numbers written like ``1e-9``, and where numbers are computed all small ones.

    Factors between units are no tolerances; their lines say so.
    """
    found = []
    for token in tokenize.generate_tokens(io.StringIO(source).readline):
        if token.type != tokenize.NUMBER or any(word in token.line for word in UNIT_WORDS):
            continue
        text = token.string.lower()
        small = room_of(module) in COMPUTING and "j" not in text and 0 < _value(text) < SMALL
        if "e-" in text or small:
            found.append(f"{token.string} in line {token.start[0]}")
    return found


def _value(number: str) -> float:
    return float(ast.literal_eval(number))


UNIT_WORDS = ("# microsiemens", "# microfarad", '"km": 1.0, "m": 1e-3', "FT_PER_KM")


def reachable(module: str) -> set[str]:
    """Return all modules that a module imports, directly or through others."""
    seen: set[str] = set()
    todo = [module]
    while todo:
        new = own(m := todo.pop(), MODULES[m]) - seen
        seen |= new
        todo += new
    return seen


def test_every_module_has_its_floor() -> None:
    assert len(MODULES) > 40
    rooms = [room for floor in FLOORS for room in floor]
    assert sorted({room_of(m) for m in MODULES}) == sorted(rooms)


@every_module
def test_nothing_walks_back(module: str) -> None:
    assert trespasses(module, MODULES[module]) == []


@every_module
def test_libraries_stay_at_home(module: str) -> None:
    assert strays(module, MODULES[module]) == []


@every_module
def test_modules_are_short(module: str) -> None:
    assert len(MODULES[module].splitlines()) <= MOST_LINES


@every_module
def test_tolerances_are_settings(module: str) -> None:
    if module != "settings":
        assert naked_tolerances(module, MODULES[module]) == []


@pytest.mark.parametrize("judge", JUDGES)
def test_the_judge_does_not_import_the_judged(judge: str) -> None:
    assert reachable(judge).isdisjoint(JUDGED)


def test_reading_and_writing_do_not_know_feeders() -> None:
    # They speak of sheets and cells; what those mean is the business of the rooms beside them.
    for module in (m for m in MODULES if room_of(m) == "sheets"):
        assert {floor_of(m) for m in reachable(module)} <= {0, floor_of(module)}


# The checks above can fail: each is put to a source that breaks its rule.


@pytest.mark.parametrize(
    ("module", "source", "found"),
    [
        ("flow.sweep", "from feederhost.proof.program import Programme", ["proof.program"]),
        ("flow.sweep", "from ..proof import program", ["proof.__init__", "proof.program"]),
        ("flow.sweep", "def f():\n    import feederhost.study.nodal", ["study.nodal"]),
        ("proof.bounds", "if TYPE_CHECKING:\n    from feederhost.study.nodal import X",
         ["study.nodal"]),
        ("feeder.model", "from feederhost.sheets.reading import Y", ["sheets.reading"]),
        ("sheets.reading", "import feederhost.feeder.model as m", ["feeder.model"]),
        ("errors", "from feederhost import cli", ["cli"]),
        ("settings", "importlib.import_module('feederhost.flow.tree')", ["flow.tree"]),
        ("feeder.model", "from feederhost.flow.tree import Tree", []),
        ("feeder.model", "from feederhost.feeder.names import fold", []),
    ],
)  # fmt: skip
def test_a_step_back_is_seen(module: str, source: str, found: list[str]) -> None:
    assert trespasses(module, source) == found


@pytest.mark.parametrize(
    ("module", "source", "found"),
    [
        ("proof.bounds", "import cvxpy as cp", ["cvxpy"]),
        ("proof.program", "import cvxpy as cp", []),
        ("feeder.tables", "from networkx import Graph", ["networkx"]),
        ("study.results", "from openpyxl.styles import Font", ["openpyxl"]),
        ("flow.sweep", "import pandas", ["pandas"]),
        ("proof.pricing", "from pandas import DataFrame", ["pandas"]),
        ("study.nodal", "import click", ["click"]),
        ("study.nodal", "from scipy.optimize import brentq", ["scipy"]),
        ("flow.search", "import scipy.sparse as sp", []),
        ("terminal", "import click, json", []),
        ("study.nodal", "import rich", ["rich"]),
    ],
)
def test_a_stray_library_is_seen(module: str, source: str, found: list[str]) -> None:
    assert strays(module, source) == found


def test_a_naked_tolerance_is_seen() -> None:
    source = (
        "a = 1e-6\nb = 'about 1e-6'  # or 1e-9\nc = 2E-12\nd = y * 1e-6  # microsiemens\n"
        "e = 0.0001\nf = 0.5 + 0.1 + 0x10 + 0\n"
    )
    assert naked_tolerances("feeder.model", source) == ["1e-6 in line 1", "2E-12 in line 3"]
    assert naked_tolerances("flow.sweep", source) == [
        "1e-6 in line 1", "2E-12 in line 3", "0.0001 in line 5"
    ]  # fmt: skip
