"""Checked tables to per unit: the only door from kW, ohm and A to the core's numbers."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from feederhost.errors import Finding, Severity
from feederhost.feeder.model import (
    EXPORT,
    IMPORT,
    Candidate,
    Case,
    Feeder,
    Generators,
    Technology,
)
from feederhost.feeder.tables import Tables
from feederhost.feeder.topology import Topology, base_kv
from feederhost.flow.network import Network
from feederhost.flow.taps import Regulator
from feederhost.flow.tree import Complexes, Floats, Tree
from feederhost.schema import (
    BUILT_IN_CASES,
    BUILT_IN_TECHNOLOGIES,
    LIMIT_CRITERIA,
    Criterion,
)
from feederhost.settings import Settings

Row = dict[str, Any]
_RATED = {
    "line": Criterion.LINE_RATING,
    "switch": Criterion.LINE_RATING,
    "transformer": Criterion.TRANSFORMER_RATING,
    "regulator": Criterion.REGULATOR_RATING,
}
_NOT_SCALES = ("hours", "hour", "month", "source_voltage_pu", "source_voltage_kv")


def build_feeder(tables: Tables, topology: Topology, name: str) -> Feeder:
    """Convert checked tables with no fatal finding into a feeder.

    Parameters
    ----------
    name : str
        Name used where `source` gives none.
    """
    settings = tables.settings
    source = next(cells for _, cells in tables.rows("source"))
    number = {node: k for k, node in enumerate(topology.nodes)}
    kv = base_kv(tables, topology)
    n = len(topology.nodes)
    branches = _Branches(n)
    _place_branches(branches, tables, topology, kv, source)
    classes = sorted({cells["class"] for _, cells in tables.rows("loads")})
    power, current, shunt = _loads(tables, number, classes, settings)
    fixed = np.zeros((n, 1), dtype=complex)
    for _, cells in tables.rows("capacitors"):
        if cells["state"] == "on":
            fixed[number[cells["node"]], 0] += 1j * _pu(cells["kvar"], settings)
    technologies = _technologies(tables)
    generators = _generators(tables, number, technologies, settings)
    existing = np.zeros(n)
    np.add.at(existing, generators.node, generators.rating)
    v_min, v_max, change = _voltage_limits(tables, number, kv, settings)
    return Feeder(
        name=source["feeder"] or name,
        nodes=topology.nodes,
        edges=topology.edges,
        tree=Tree(np.array(topology.parent)),
        kv=kv,
        distance_km=branches.distance,
        network=branches.network(topology),
        ratio=branches.ratio,
        regulators=tuple(branches.regulators),
        classes=tuple(classes),
        power=power,
        current=current,
        shunt=shunt,
        fixed_shunt=fixed,
        rating=branches.rating,
        rating_criterion=branches.criterion,
        v_min=v_min,
        v_max=v_max,
        change=change,
        z_source=_source_impedance(source, settings),
        bank=_pu(source["transformer_kva"], settings)
        * settings.transformer_loading_pct / 100,
        export_limit=_pu(_lowest(source["export_limit_kw"], settings.export_limit_kw), settings),
        import_limit=_pu(_lowest(source["import_limit_kw"], settings.import_limit_kw), settings),
        technologies=technologies,
        generators=generators,
        cases=_cases(tables, source, settings),
        candidates=_candidates(tables, topology, number, technologies, settings),
        existing=existing,
        settings=settings,
        notes={
            key: source[key]
            for key in ("data_date", "switching_state", "prepared_by")
            if source[key]
        },
    )  # fmt: skip


class _Branches:
    """Branch arrays while they are being filled."""

    def __init__(self, n: int) -> None:
        self.z = np.zeros((n, 1, 1), dtype=complex)
        self.y_from = np.zeros((n, 1), dtype=complex)
        self.y_to = np.zeros((n, 1), dtype=complex)
        self.ratio = np.ones((n, 1))
        self.rating = np.full((n, 1), np.inf)
        self.criterion = np.full(n, -1)
        self.distance = np.zeros(n)
        self.regulators: list[Regulator] = []

    def network(self, topology: Topology) -> Network:
        tree = Tree(np.array(topology.parent))
        return Network(tree, self.z, self.y_from, self.y_to, np.ones_like(self.ratio))


def _place_branches(
    into: _Branches, tables: Tables, topology: Topology, kv: Floats, source: Row
) -> None:
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
    """Total series impedance in ohm and charging susceptance in siemens of a line."""
    length = 0.0 if math.isnan(cells["length_km"]) else cells["length_km"]
    own = library.get(cells["conductor"], {})

    def per_km(key: str) -> float:
        value = cells[key] if not math.isnan(cells[key]) else own.get(key, math.nan)
        return 0.0 if math.isnan(value) else value

    total = {}
    for letter in ("r1", "x1"):
        explicit = cells[f"{letter}_ohm"]
        per_length = per_km(f"{letter}_ohm_per_km") * length
        total[letter] = per_length if math.isnan(explicit) else explicit
    susceptance = per_km("b1_us_per_km") * 1e-6  # microsiemens
    if not susceptance:
        susceptance = 2 * math.pi * hertz * per_km("charging_uf_per_km") * 1e-6  # microfarad
    return complex(total["r1"], total["x1"]), susceptance * length


def _place_line(
    into: _Branches,
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
    into.rating[k] = _amps_pu(rating, kv[k], settings) * settings.line_loading_pct / 100
    if not math.isnan(cells["length_km"]):
        into.distance[k] += cells["length_km"]


def _place_transformer(
    into: _Branches,
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
    into: _Branches, k: int, cells: Row, forward: bool, kv: Floats, settings: Settings
) -> None:
    taps = [cells[key] for key in ("tap_a", "tap_b", "tap_c") if not math.isnan(cells[key])]
    fixed = cells["tap"]
    if math.isnan(fixed) and taps:
        fixed = sum(taps) / len(taps)
    setpoint = cells["setpoint_pu"]
    if math.isnan(setpoint) and not math.isnan(cells["setpoint_kv"]):
        setpoint = cells["setpoint_kv"] / kv[k]
    if not math.isnan(cells["rating_a"]):
        amps = _amps_pu(cells["rating_a"], kv[k], settings)
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


def _pu(kilo: float, settings: Settings) -> float:
    """KW, kvar or kVA to per unit; blank (NaN): no limit."""
    return math.inf if math.isnan(kilo) else kilo / 1e3 / settings.base_mva


def _lowest(a: float, b: float | None) -> float:
    given = [v for v in (a, b) if v is not None and not math.isnan(v)]
    return min(given, default=math.nan)


def _amps_pu(amps: float, kv: float, settings: Settings) -> float:
    return amps * math.sqrt(3) * kv / 1e3 / settings.base_mva


def _source_impedance(source: Row, settings: Settings) -> Complexes | None:
    if math.isnan(source["short_circuit_mva"]):
        return None
    size = settings.base_mva / source["short_circuit_mva"]
    r = size / math.hypot(1, source["x_over_r"])
    return np.array([[complex(r, r * source["x_over_r"])]])


def tangent_of(power_factor: float) -> float:
    """Reactive per active power at a power factor (0 to 1]; blank: unity."""
    return 0.0 if math.isnan(power_factor) else math.tan(math.acos(power_factor))


def _loads(
    tables: Tables, number: dict[str, int], classes: list[str], settings: Settings
) -> tuple[Complexes, Complexes, Complexes]:
    shape = (len(number), 1, len(classes))
    power, current, shunt = (np.zeros(shape, dtype=complex) for _ in range(3))
    for _, cells in tables.rows("loads"):
        kvar = cells["kvar"]
        if math.isnan(kvar):
            kvar = cells["kw"] * tangent_of(cells["power_factor"])
            kvar = -kvar if cells["vars"] == "inject" else kvar
        drawn = complex(cells["kw"], kvar) / 1e3 / settings.base_mva
        at = number[cells["node"]], 0, classes.index(cells["class"])
        power[at] += drawn * cells["zip_p"]
        current[at] += drawn * cells["zip_i"]
        shunt[at] += np.conj(drawn) * cells["zip_z"]
    return power, current, shunt


def _reactive(cells: Row, direction: str, otherwise: float) -> float:
    """Reactive share of a plant: injected per kW exported, drawn per kW imported."""
    if math.isnan(cells.get("power_factor", math.nan)):
        return otherwise
    absorbs = cells["vars"] != "inject"
    size = tangent_of(cells["power_factor"])
    if direction == IMPORT:
        return size if absorbs else -size
    return -size if absorbs else size


def _technologies(tables: Tables) -> tuple[Technology, ...]:
    rows: dict[str, Row] = {str(t["technology"]): dict(t) for t in BUILT_IN_TECHNOLOGIES}
    rows |= {cells["technology"]: cells for _, cells in tables.rows("technologies")}
    return tuple(
        Technology(
            name=name,
            direction=cells["direction"],
            reactive=_reactive(cells, cells["direction"], 0.0),
            scale=str(cells.get("scale", "")),
            coincidence=float(cells.get("coincidence", 1.0)),
        )
        for name, cells in rows.items()
    )


def _generators(
    tables: Tables,
    number: dict[str, int],
    technologies: tuple[Technology, ...],
    settings: Settings,
) -> Generators:
    names = [t.name for t in technologies]
    rows = [cells for _, cells in tables.rows("generators")]
    which = [names.index(cells["technology"]) for cells in rows]
    own = [technologies[i] for i in which]
    return Generators(
        node=np.array([number[cells["node"]] for cells in rows], dtype=np.intp),
        technology=np.array(which, dtype=np.intp),
        rating=np.array([_pu(cells["kw"], settings) for cells in rows], dtype=float),
        reactive=np.array(
            [_reactive(c, t.direction, t.reactive) for c, t in zip(rows, own, strict=True)],
            dtype=float,
        ),
    )


def _cases(tables: Tables, source: Row, settings: Settings) -> tuple[Case, ...]:
    rows: list[Row] = [cells for _, cells in tables.rows("cases")]
    rows = rows or [dict(c) for c in BUILT_IN_CASES]
    held = source["voltage_pu"]
    if not math.isnan(source["voltage_kv"]):
        held = source["voltage_kv"] / source["kv"]
    cases = []
    for cells in rows:
        voltage = cells.get("source_voltage_pu", math.nan)
        if not math.isnan(cells.get("source_voltage_kv", math.nan)):
            voltage = cells["source_voltage_kv"] / source["kv"]
        other = [cells.get(key, math.nan) for key in ("bank_other_kw", "bank_other_kvar")]
        scales = {
            key: float(value)
            for key, value in cells.items()
            if "_scale" in key and key not in _NOT_SCALES and not math.isnan(float(value))
        }
        cases.append(
            Case(
                name=str(cells["case"]),
                scales=scales,
                source_voltage=float(held if math.isnan(voltage) else voltage),
                bank_other=complex(*(0.0 if math.isnan(v) else v for v in other))
                / 1e3 / settings.base_mva,
                basis=str(cells["basis"]),
                hours=float(cells.get("hours", math.nan)),
            )
        )  # fmt: skip
    return tuple(cases)


def _candidates(
    tables: Tables,
    topology: Topology,
    number: dict[str, int],
    technologies: tuple[Technology, ...],
    settings: Settings,
) -> tuple[Candidate, ...]:
    peak = float(tables.sheets["loads"]["kw"].sum())
    cap_kw = settings.search_cap_kw
    if cap_kw is None:
        cap_kw = max(settings.cap_loads * peak, settings.cap_least_kw)
    cap = _pu(cap_kw, settings)
    by_name = {t.name: t for t in technologies}
    both = ("pv", "ev")
    rows = [cells for _, cells in tables.rows("candidates")]
    if not rows:
        return tuple(
            Candidate(k, name, by_name[name].reactive, cap)
            for name in both
            for k in range(1, len(topology.nodes))
        )
    return tuple(
        Candidate(
            node=number[cells["node"]],
            technology=name,
            reactive=_reactive(cells, by_name[name].direction, by_name[name].reactive),
            cap=cap if math.isnan(cells["max_kw"]) else _pu(cells["max_kw"], settings),
        )
        for cells in rows
        for name in ((cells["technology"],) if cells["technology"] else both)
    )


def _voltage_limits(
    tables: Tables, number: dict[str, int], kv: Floats, settings: Settings
) -> tuple[Floats, Floats, Floats]:
    primary = kv > settings.shared_kv

    def level(shared: float, own: float | None) -> Floats:
        return np.where(primary, shared if own is None else own, shared)

    v_min = level(settings.v_min_pu, settings.v_min_primary_pu)
    v_max = level(settings.v_max_pu, settings.v_max_primary_pu)
    for _, cells in tables.rows("nodes"):
        k = number.get(cells["node"])
        if k is None:
            continue
        for limit, name in ((v_min, "v_min"), (v_max, "v_max")):
            if not math.isnan(cells[f"{name}_kv"]):
                limit[k] = cells[f"{name}_kv"] / kv[k]
            if not math.isnan(cells[f"{name}_pu"]):
                limit[k] = cells[f"{name}_pu"]
    share = np.where(primary, settings.voltage_change_mv_pct, settings.voltage_change_lv_pct) / 100
    change = np.where(share > 0, share, np.inf)
    return v_min[:, None], v_max[:, None], change[:, None]


__all__ = ["EXPORT", "IMPORT", "build_feeder", "line_constants", "reversed_regulators"]
