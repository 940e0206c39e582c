"""Checked tables to per unit: the only door from kW, ohm and A to the core's numbers."""

from __future__ import annotations

import math

import numpy as np

from feederhost.feeder.branches import Row, no_branches, place_branches
from feederhost.feeder.model import (
    IMPORT,
    Candidate,
    Case,
    Feeder,
    Generators,
    Technology,
)
from feederhost.feeder.tables import Tables
from feederhost.feeder.topology import Topology, base_kv
from feederhost.feeder.units import per_unit
from feederhost.flow.tree import Complexes, Floats, Tree
from feederhost.schema import BUILT_IN_CASES, BUILT_IN_TECHNOLOGIES
from feederhost.settings import Settings

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
    branches = no_branches(n)
    place_branches(branches, tables, topology, kv, source)
    classes = sorted({cells["class"] for _, cells in tables.rows("loads")})
    power, current, shunt = _loads(tables, number, classes, settings)
    fixed = np.zeros((n, 1), dtype=complex)
    for _, cells in tables.rows("capacitors"):
        if cells["state"] == "on":
            fixed[number[cells["node"]], 0] += 1j * per_unit(cells["kvar"], settings)
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
        bank=per_unit(source["transformer_kva"], settings)
        * settings.transformer_loading_pct / 100,
        export_limit=_lowest(source["export_limit_kw"], settings.export_limit_kw, settings),
        import_limit=_lowest(source["import_limit_kw"], settings.import_limit_kw, settings),
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


def _lowest(a: float, b: float | None, settings: Settings) -> float:
    """Return the lower of two limits in kW as per unit; infinite where none is given."""
    given = [v for v in (a, b) if v is not None and not math.isnan(v)]
    return per_unit(min(given, default=math.nan), settings)


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


def reactive_share(cells: Row, direction: str, otherwise: float) -> float:
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
            reactive=reactive_share(cells, cells["direction"], 0.0),
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
        rating=np.array([per_unit(cells["kw"], settings) for cells in rows], dtype=float),
        reactive=np.array(
            [reactive_share(c, t.direction, t.reactive) for c, t in zip(rows, own, strict=True)],
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
                / 1e3
                / settings.base_mva,
                bank_known=not all(math.isnan(v) for v in other),
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
    cap = per_unit(cap_kw, settings)
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
            reactive=reactive_share(cells, by_name[name].direction, by_name[name].reactive),
            cap=cap if math.isnan(cells["max_kw"]) else per_unit(cells["max_kw"], settings),
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
