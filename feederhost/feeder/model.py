"""A feeder ready to study: arrays per unit, and the names that belong to the numbers."""

from __future__ import annotations

from dataclasses import dataclass

from feederhost.feeder.topology import Edge
from feederhost.flow.network import Network
from feederhost.flow.taps import Regulator
from feederhost.flow.tree import Complexes, Floats, Ints, Tree
from feederhost.settings import Settings

EXPORT, IMPORT = "export", "import"


@dataclass(frozen=True)
class Technology:
    """What can be connected, and how it runs.

    ``reactive`` is the reactive power INJECTED per kW exported, and per kW imported the
    reactive power drawn; ``scale`` names a column of `cases` (blank: always 1).
    """

    name: str
    direction: str
    reactive: float
    scale: str
    coincidence: float


@dataclass(frozen=True)
class Case:
    """One load and generation level; ``scales`` holds every scale column by name.

    ``bank_known`` tells whether the other power through the bank is given.
    """

    name: str
    scales: dict[str, float]
    source_voltage: float
    bank_other: complex
    bank_known: bool
    basis: str
    hours: float


@dataclass(frozen=True)
class Candidate:
    """A node, technology and reactive share to find the hosting of; ``cap`` in per unit."""

    node: int
    technology: str
    reactive: float
    cap: float
    phases: str = ""


@dataclass(frozen=True)
class Generators:
    """Plants already there: node, technology number, rating and reactive share (see Technology)."""

    node: Ints
    technology: Ints
    rating: Floats
    reactive: Floats


@dataclass(frozen=True)
class Feeder:
    """Everything a study needs; per unit on ``settings.base_mva`` unless named otherwise.

    Attributes
    ----------
    nodes, edges : tuple
        Names and rows of node k and of the branch above it; ``edges[0]`` is None.
    kv, distance_km : (n,) float
        Base voltage line to line; length of line from the source.
    network : Network
        As behind each ratio (not referred).
    ratio : (n, phases) float
        Fixed ratios of transformers, 1 elsewhere.
    classes : tuple of str
        Load classes, the order of the last axis of the three load arrays.
    power, current, shunt : (n, phases, classes) complex
        Peak load: constant power, current, impedance parts.
    fixed_shunt : (n, phases) complex
        Capacitors.
    rating : (n, phases) float
        Rated current of the branch above each node, loading percent applied; inf: unlimited.
    rating_criterion : (n,) int
        Criterion (index into LIMIT_CRITERIA) that the rating belongs to.
    v_min, v_max, change : (n, phases) float
        Voltage limits; allowed voltage change (inf: off).
    z_source : (phases, phases) complex or None
        Source impedance for the voltage-change check.
    bank, export_limit, import_limit : float
        Head limits; inf where there is none.
    existing : (n,) float
        Rating of generation connected and approved.
    """

    name: str
    nodes: tuple[str, ...]
    edges: tuple[Edge | None, ...]
    tree: Tree
    kv: Floats
    distance_km: Floats
    network: Network
    ratio: Floats
    regulators: tuple[Regulator, ...]
    classes: tuple[str, ...]
    power: Complexes
    current: Complexes
    shunt: Complexes
    fixed_shunt: Complexes
    rating: Floats
    rating_criterion: Ints
    v_min: Floats
    v_max: Floats
    change: Floats
    z_source: Complexes | None
    bank: float
    export_limit: float
    import_limit: float
    technologies: tuple[Technology, ...]
    generators: Generators
    cases: tuple[Case, ...]
    candidates: tuple[Candidate, ...]
    existing: Floats
    settings: Settings
    notes: dict[str, str]

    def technology(self, name: str) -> Technology:
        """Return a technology by name."""
        return next(t for t in self.technologies if t.name == name)

    def kw(self, per_unit: float) -> float:
        """Per unit to kW, kvar or kVA, without the dust of the conversion."""
        return float(f"{per_unit * self.settings.base_mva * 1e3:.{self.settings.digits}g}")

    def amps(self, per_unit: float, node: int) -> float:
        """Per unit current at a node's base voltage to A."""
        return per_unit * self.settings.base_mva * 1e3 / (3**0.5 * float(self.kv[node]))
