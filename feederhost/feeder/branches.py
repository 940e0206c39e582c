"""Branches to per unit: lines, switches, transformers and regulators in tree order."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from feederhost.errors import Finding, Severity
from feederhost.feeder.tables import Tables
from feederhost.feeder.topology import Topology
from feederhost.feeder.units import amps_per_unit
from feederhost.flow.network import Network
from feederhost.flow.taps import Regulator
from feederhost.flow.tree import Complexes, Floats, Ints, Tree
from feederhost.schema import LIMIT_CRITERIA, Criterion
from feederhost.settings import Settings

Row = dict[str, Any]
_RATED = {
    "line": Criterion.LINE_RATING,
    "switch": Criterion.LINE_RATING,
    "transformer": Criterion.TRANSFORMER_RATING,
    "regulator": Criterion.REGULATOR_RATING,
}


@dataclass(frozen=True)
class Branches:
    """Branch arrays of n nodes, filled row by row (see :class:`feeder.model.Feeder`)."""

    z: Complexes
    y_from: Complexes
    y_to: Complexes
    ratio: Floats
    rating: Floats
    criterion: Ints
    distance: Floats
    regulators: list[Regulator] = field(default_factory=list)

    def network(self, topology: Topology) -> Network:
        """Return the network as behind each ratio (not referred)."""
        tree = Tree(np.array(topology.parent))
        return Network(tree, self.z, self.y_from, self.y_to, np.ones_like(self.ratio))


def no_branches(n: int) -> Branches:
    """Return arrays without impedance, shunt, ratio or rating."""
    return Branches(
        z=np.zeros((n, 1, 1), dtype=complex),
        y_from=np.zeros((n, 1), dtype=complex),
        y_to=np.zeros((n, 1), dtype=complex),
        ratio=np.ones((n, 1)),
        rating=np.full((n, 1), np.inf),
        criterion=np.full(n, -1),
        distance=np.zeros(n),
    )


def place_branches(
    into: Branches, tables: Tables, topology: Topology, kv: Floats, source: Row
) -> None:
    """Fill the arrays with every branch of the tree, source outwards."""
    rows = {sheet: dict(tables.rows(sheet)) for sheet in ("lines", "transformers", "regulators")}
    library = {cells["conductor"]: cells for _, cells in tables.rows("conductors")}
    settings = tables.settings
    for k, edge in enumerate(topology.edges):
        if edge is None:
            continue
        cells, parent = rows[edge.sheet][edge.row], topology.parent[k]
        into.criterion[k] = LIMIT_CRITERIA.index(_RATED[edge.kind])
        into.distance[k] = into.distance[parent]
        if edge.kind == "transformer":
            _place_transformer(into, k, cells, topology.forward[k], kv, parent, settings)
        elif edge.kind == "regulator":
            _place_regulator(into, k, cells, topology.forward[k], kv, settings)
        else:
            _place_line(into, k, cells, library, kv, source["frequency_hz"], settings)


def line_constants(cells: Row, library: dict[str, Row], hertz: float) -> tuple[complex, float]:
    """Total series impedance in ohm and charging susceptance in siemens of a line.

    A conductor that gives phase matrices instead of r1, x1, b1 counts with its positive
    sequence, the mean of the self terms less the mean of the mutual ones (Kersting,
    Distribution System Modeling and Analysis, section 4.1, transposed line).
    """
    length = 0.0 if math.isnan(cells["length_km"]) else cells["length_km"]
    own = library.get(cells["conductor"], {})

    def per_km(key: str, letter: str, unit: str) -> float:
        for value in (cells[key], own.get(key, math.nan), _positive_sequence(own, letter, unit)):
            if not math.isnan(value):
                return float(value)
        return 0.0

    total = {}
    for letter in ("r", "x"):
        explicit = cells[f"{letter}1_ohm"]
        per_length = per_km(f"{letter}1_ohm_per_km", letter, "ohm_per_km") * length
        total[letter] = per_length if math.isnan(explicit) else explicit
    susceptance = per_km("b1_us_per_km", "b", "us_per_km") / 1e6  # microsiemens
    if not susceptance:
        farad = per_km("charging_uf_per_km", "", "") / 1e6  # microfarad
        susceptance = 2 * math.pi * hertz * farad
    return complex(total["r"], total["x"]), susceptance * length


def _positive_sequence(own: Row, letter: str, unit: str) -> float:
    """Positive sequence of a phase matrix, NaN where the three self terms are not all given."""

    def terms(pairs: tuple[str, ...]) -> list[float]:
        return [own.get(f"{letter}_{pair}_{unit}", math.nan) for pair in pairs]

    mutual = [0.0 if math.isnan(v) else v for v in terms(("ab", "ac", "bc"))]
    return sum(terms(("aa", "bb", "cc"))) / 3 - sum(mutual) / 3


def _place_line(
    into: Branches,
    k: int,
    cells: Row,
    library: dict[str, Row],
    kv: Floats,
    hertz: float,
    settings: Settings,
) -> None:
    z, b = line_constants(cells, library, hertz)
    base = kv[k] ** 2 / settings.base_mva
    into.z[k] = z / base
    into.y_from[k] = into.y_to[k] = 0.5j * b * base
    rating = cells["rating_a"]
    if math.isnan(rating):
        rating = library.get(cells["conductor"], {}).get("rating_a", math.inf)
    into.rating[k] = amps_per_unit(rating, kv[k], settings) * settings.line_loading_pct / 100
    if not math.isnan(cells["length_km"]):
        into.distance[k] += cells["length_km"]


def _place_transformer(
    into: Branches,
    k: int,
    cells: Row,
    forward: bool,
    kv: Floats,
    parent: int,
    settings: Settings,
) -> None:
    """Place a transformer: ideal ratio at the primary, impedance at the secondary.

    Seen from the secondary (``forward`` False, a step-up) the same unit has the inverse ratio
    and its impedance before it: z behind the ratio becomes z * tap^2.
    """
    tap, share = cells["tap_pu"], cells["kva"] / 1e3 / settings.base_mva
    z_pct = cells["z_pct"]
    if math.isnan(z_pct):
        r, x = cells["r_pct"], cells["x_pct"]
    else:
        r = z_pct / math.hypot(1, cells["x_over_r"])
        x = r * cells["x_over_r"]
    primary, secondary = (parent, k) if forward else (k, parent)
    off = cells["kv_secondary"] / kv[secondary]  # rated over base, alike on both sides
    z = complex(r, x) / 100 / share * off**2
    into.z[k] = z if forward else z * tap**2
    into.ratio[k] = 1 / tap if forward else tap
    core = cells["no_load_kw"] / 1e3 / settings.base_mva
    core *= (kv[primary] / cells["kv_primary"]) ** 2
    (into.y_from if forward else into.y_to)[k] = core
    into.rating[k] = share / off * settings.transformer_loading_pct / 100


def _place_regulator(
    into: Branches, k: int, cells: Row, forward: bool, kv: Floats, settings: Settings
) -> None:
    taps = [cells[key] for key in ("tap_a", "tap_b", "tap_c") if not math.isnan(cells[key])]
    fixed = cells["tap"]
    if math.isnan(fixed) and taps:
        fixed = sum(taps) / len(taps)
    setpoint = cells["setpoint_pu"]
    if math.isnan(setpoint) and not math.isnan(cells["setpoint_kv"]):
        setpoint = cells["setpoint_kv"] / kv[k]
    if not math.isnan(cells["rating_a"]):
        amps = amps_per_unit(cells["rating_a"], kv[k], settings)
        into.rating[k] = amps * settings.transformer_loading_pct / 100
    share = cells["range_pct"] / 100
    if not forward:
        # Only a fixed tap gets here (see reversed_regulators): the inverse ratio.
        into.ratio[k] = 1 / (1 + share * fixed / (cells["steps"] / 2))
        return
    into.regulators.append(
        Regulator(k, setpoint, cells["bandwidth_pu"], share, cells["steps"], fixed)
    )


def reversed_regulators(tables: Tables, topology: Topology) -> tuple[Finding, ...]:
    """Find regulators that would have to hold a voltage on the source side."""
    found = []
    for edge, forward in zip(topology.edges, topology.forward, strict=True):
        if edge is None or edge.kind != "regulator" or forward:
            continue
        cells = dict(tables.rows("regulators"))[edge.row]
        given = [cells[key] for key in ("tap", "tap_a", "tap_b", "tap_c")]
        if all(math.isnan(value) for value in given):
            problem = "the regulated side faces the source"
            hint = "swap from_node and to_node, or give its fixed tap"
            found.append(
                tables.finding(Severity.FATAL, "regulators", edge.row, "to_node", problem, hint)
            )
    return tuple(found)
