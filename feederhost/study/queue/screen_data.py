"""What the rule screens read: generation, fault levels, line sections, technologies.

All of it is gathered once per feeder; what stands in the queue is added request by request.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from feederhost.feeder.model import EXPORT, IMPORT, Case, Feeder
from feederhost.feeder.tables import Tables
from feederhost.feeder.units import amps_per_unit
from feederhost.flow.network import refer
from feederhost.flow.shortcircuit import fault_current, infeed
from feederhost.flow.tree import Complexes, Floats, subtree_sum
from feederhost.schema import BUILT_IN_CASES, BUILT_IN_TECHNOLOGIES
from feederhost.settings import Settings
from feederhost.study.cases import case_scale, plant_draw
from feederhost.study.queue.services import Serving, serving
from feederhost.study.queue.sites import Site, ceiling_of, draw_of
from feederhost.study.queue.stops import Line

_BUILT_IN = {str(t["technology"]): t for t in BUILT_IN_TECHNOLOGIES}


@dataclass(frozen=True)
class Kind:
    """A technology: fault current over rated current, hours it runs (None: all)."""

    multiple: float
    window: tuple[float, float] | None


@dataclass(frozen=True)
class Device:
    """A line with a known interrupting capability; ``node`` is its end towards the source."""

    name: str
    node: int
    capability: float


@dataclass(frozen=True, eq=False)
class ScreenData:
    """What the screens read, per unit; n nodes.

    Attributes
    ----------
    kinds : mapping of str to Kind
        By technology.
    generation : (n,) float
        Nameplate rating of generation connected and approved.
    running : (n, technologies) complex
        Power it draws per unit of output of each technology, exporting.
    output : (technologies, studied cases) float
        Output of each technology per unit of rating, coincidence left out.
    draw, ceiling : (sites, studied cases) complex, float
        Power a request draws per unit of its size when it exports, and the size beyond which
        it grows no more.
    infeed : float
        Fault current it adds.
    level : (n,) float or None
        Three-phase fault current from the source; None: source impedance not given.
    serving : Serving
    loads : (n,) float
        Rows of `loads` at and below a node.
    sections : tuple of int
        The source, then every node below a line with an automatic device.
    marked : bool
        Whether any line has an automatic device.
    demand : (sections, cases) float
        Demand at and below the head of each section, at nominal voltage, without losses.
    hours : (cases,) float
        Hour of the day; NaN: not given.
    assumed : (cases,) bool
        Whether a case is no more than an assumption.
    cases : tuple of str
        Names: the cases of the workbook, narrowed or not.
    devices : tuple of Device
    """

    line: Line
    kinds: Mapping[str, Kind]
    generation: Floats
    running: Complexes
    output: Floats
    draw: Complexes
    ceiling: Floats
    infeed: float
    level: Floats | None
    serving: Serving
    loads: Floats
    sections: tuple[int, ...]
    marked: bool
    demand: Floats
    hours: Floats
    assumed: np.ndarray
    cases: tuple[str, ...]
    devices: tuple[Device, ...]

    @property
    def settings(self) -> Settings:
        """Settings of the feeder."""
        return self.line.feeder.settings


def screen_data(line: Line, tables: Tables) -> ScreenData:
    """Gather what the screens of all requests read."""
    feeder = line.feeder
    kinds = _kinds(tables, feeder)
    generation, running, fault = _existing(feeder, kinds)
    lots = np.zeros(feeder.tree.size)
    numbers = {name: k for k, name in enumerate(feeder.nodes)}
    for _, cells in tables.rows("loads"):
        lots[numbers[cells["node"]]] += cells["kw"] > 0
    automatic = {
        row for row, cells in tables.rows("lines") if cells["device"] == "automatic"
    }  # fmt: skip
    sections = (0, *(k for k in range(feeder.tree.size) if _line_row(feeder, k) in automatic))
    cases: list[dict[str, Any]] = [cells for _, cells in tables.rows("cases")]
    cases = cases or [dict(c) for c in BUILT_IN_CASES]
    return ScreenData(
        line=line,
        kinds=kinds,
        generation=generation,
        running=running,
        output=np.array(
            [[case_scale(c, t) / t.coincidence for c in feeder.cases] for t in feeder.technologies]
        ),
        draw=_per_site(line, draw_of),
        ceiling=_per_site(line, ceiling_of),
        infeed=fault,
        level=_fault_level(feeder),
        serving=serving(tables, feeder),
        loads=subtree_sum(feeder.tree, lots),
        sections=sections,
        marked=bool(automatic),
        demand=_demand(feeder, cases)[list(sections)],
        hours=np.array([float(c.get("hour", math.nan)) for c in cases]),
        assumed=np.array([c["basis"] == "assumed" for c in cases]),
        cases=tuple(str(c["case"]) for c in cases),
        devices=_devices(tables, feeder),
    )  # fmt: skip


def _kinds(tables: Tables, feeder: Feeder) -> dict[str, Kind]:
    rows = {cells["technology"]: cells for _, cells in tables.rows("technologies")}
    kinds = {}
    for technology in feeder.technologies:
        own: Mapping[str, Any] = rows.get(technology.name, {})
        built_in: Mapping[str, Any] = _BUILT_IN.get(technology.name, {})
        multiple = float(own.get("fault_current_pu", math.nan))
        if math.isnan(multiple):
            multiple = _multiple(technology.direction, str(own.get("machine", "")), feeder.settings)
        ends = []
        for key, open_end in (("window_from", 0.0), ("window_to", 24.0)):
            given = (float(r.get(key, math.nan)) for r in (own, built_in))
            ends.append((next((v for v in given if not math.isnan(v)), math.nan), open_end))
        window = tuple(e if math.isnan(v) else v for v, e in ends)
        known = not all(math.isnan(v) for v, _ in ends)
        kinds[technology.name] = Kind(multiple, (window[0], window[1]) if known else None)
    return kinds


def _multiple(direction: str, machine: str, settings: Settings) -> float:
    if direction == IMPORT:
        return 0.0
    return settings.screen_rotating_pu if machine == "rotating" else settings.screen_inverter_pu


def _existing(feeder: Feeder, kinds: Mapping[str, Kind]) -> tuple[Floats, Complexes, float]:
    """Nameplate, power drawn per unit of output, and fault infeed of what is there."""
    plants = feeder.generators
    nameplate = np.zeros(feeder.tree.size)
    running = np.zeros((feeder.tree.size, len(feeder.technologies)), dtype=complex)
    multiple = np.zeros(plants.rating.size)
    for i, which in enumerate(plants.technology):
        technology = feeder.technologies[which]
        if technology.direction == IMPORT:
            continue
        rating, reactive = float(plants.rating[i]), float(plants.reactive[i])
        nameplate[plants.node[i]] += rating
        running[plants.node[i], which] += rating * plant_draw(EXPORT, reactive)
        multiple[i] = kinds[technology.name].multiple
    return nameplate, running, infeed(plants.rating * np.hypot(1, plants.reactive), multiple)


def _per_site(line: Line, of: Callable[[Site, Case, str], Any]) -> Any:
    """Ask something of every site, exporting, in every case studied: (sites, cases)."""
    studied = line.feeder.cases
    return np.array(
        [[0.0 if site.fault else of(site, case, EXPORT) for case in studied] for site in line.sites]
    ).reshape(len(line.sites), len(studied))


def _fault_level(feeder: Feeder) -> Floats | None:
    """Fault current from the source; regulators stand at their given tap, else at neutral."""
    if feeder.z_source is None:
        return None
    ratio = np.array(feeder.ratio)
    for regulator in feeder.regulators:
        ratio[regulator.node] = regulator.ratio(0.0 if regulator.moves else regulator.fixed)
    network = refer(feeder.network, ratio)
    level = fault_current(network, feeder.z_source, feeder.settings.screen_prefault_pu)
    return level.max(axis=1)


def _demand(feeder: Feeder, cases: list[dict[str, Any]]) -> Floats:
    """Demand at and below every node, (n, cases), at nominal voltage."""
    drawn = feeder.power + feeder.current + np.conj(feeder.shunt)
    below = subtree_sum(feeder.tree, np.ascontiguousarray(drawn.real.sum(axis=1)))
    scale = np.empty((len(feeder.classes), len(cases)))
    for j, cells in enumerate(cases):
        for i, name in enumerate(feeder.classes):
            own = float(cells.get(f"load_scale.{name}", math.nan))
            scale[i, j] = cells["load_scale"] if math.isnan(own) else own
    return below @ scale


def _line_row(feeder: Feeder, k: int) -> int | None:
    """Row of `lines` of the branch above a node; None: no line."""
    edge = feeder.edges[k]
    return edge.row if edge is not None and edge.sheet == "lines" else None


def _devices(tables: Tables, feeder: Feeder) -> tuple[Device, ...]:
    rows = dict(tables.rows("lines"))
    devices = []
    for k in range(1, feeder.tree.size):
        row = _line_row(feeder, k)
        amps = math.nan if row is None else rows[row]["interrupting_a"]
        if row is not None and not math.isnan(amps):
            capability = amps_per_unit(amps, float(feeder.kv[k]), feeder.settings)
            above = int(feeder.tree.parent[k])
            devices.append(Device(rows[row]["line"], above, capability))
    return tuple(devices)
