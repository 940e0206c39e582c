"""The judge's own reading of a feeder: workbook tables to per unit on 1 MVA.

Nothing here comes from the package that is judged.  Node bases run from the source downwards.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

Row = dict[str, Any]
Tables = Mapping[str, Any]

KM = {"km": 1.0, "m": 0.001, "ft": 0.0003048, "mi": 1.609344}
PER_KM = {"per_km": 1.0, "per_mi": 1 / 1.609344, "per_kft": 1 / 0.3048}
BUILT_IN_CASES: tuple[Row, ...] = (
    {"case": "peak", "load_scale": 1.0, "pv_scale": 0.0, "ev_scale": 1.0},
    {"case": "light", "load_scale": 0.3, "pv_scale": 1.0, "ev_scale": 0.0},
)
BUILT_IN_TECHNOLOGIES: dict[str, Row] = {
    "pv": {"direction": "export", "scale": "pv_scale"},
    "ev": {"direction": "import", "scale": "ev_scale"},
    "storage": {"direction": "both"},
}
LIMITS: Row = {
    "v_min_pu": 0.95, "v_max_pu": 1.05, "voltage_change_mv_pct": 3.0, "voltage_change_lv_pct": 5.0,
    "line_loading_pct": 100.0, "transformer_loading_pct": 100.0, "worsen_voltage_pu": 0.0005,
    "worsen_loading_pct": 0.5, "regulator_edge": 1.0,
}  # fmt: skip


def rows(tables: Tables, sheet: str) -> list[Row]:
    """Return the rows of a sheet as dictionaries without blank cells."""
    table = tables.get(sheet)
    if table is None:
        return []
    records = table.to_dict("records") if hasattr(table, "to_dict") else table
    found = [{str(k): v for k, v in r.items() if not _blank(v)} for r in records]
    return [r for r in found if r and not str(next(iter(r.values()))).startswith("#")]


def _blank(value: Any) -> bool:
    if value is None or type(value).__name__ in ("NAType", "NaTType"):
        return True
    return not value.strip() if isinstance(value, str) else bool(value != value)  # NaN


def name(value: Any) -> str:
    """Return a node name as text: 101, 101.0 and ' 101 ' are one node."""
    text = str(value).strip()
    return text[:-2] if text.endswith(".0") and text[:-2].isdigit() else text


def power(row: Row, prefix: str, unit: str) -> float | None:
    """Return a power cell in kW, kvar or kVA, written in kilo or mega units."""
    if f"{prefix}k{unit}" in row:
        return float(row[f"{prefix}k{unit}"])
    return 1000 * float(row[f"{prefix}m{unit}"]) if f"{prefix}m{unit}" in row else None


def reactive(p: float, row: Row, export: bool) -> float:
    """Return the signed reactive power that goes with p, in the direction of p's flow.

    With an export the result is injected, with an import or a load it is drawn.
    """
    factor = float(row.get("power_factor", 1.0))
    if factor == 1.0:
        return 0.0
    if export and "vars" not in row:
        raise ValueError("an export below power factor 1 must say absorb or inject")
    along = row.get("vars", "absorb") == ("inject" if export else "absorb")
    return (1 if along else -1) * p * math.sqrt(1 - factor**2) / factor


@dataclass(frozen=True)
class Series:
    """A line or transformer: admittance on the secondary side of an ideal ratio 1/tap."""

    kind: str
    name: str
    f: int
    t: int
    y: complex
    tap: float
    b_half: float
    rated_f: float
    rated_t: float
    z: complex
    no_load: float = 0.0


@dataclass(frozen=True)
class Link:
    """A switch or regulator: an ideal ratio V_t = ratio V_f without impedance."""

    kind: str
    name: str
    f: int
    t: int
    rated: float
    row: Row = field(default_factory=dict)


@dataclass(frozen=True)
class Feeder:
    """The tables, read: everything in per unit on 1 MVA but nothing scaled to a case yet."""

    nodes: list[str]
    kv: np.ndarray
    depth: np.ndarray
    source: Row
    series: list[Series]
    links: list[Link]
    shunt: np.ndarray
    loads: list[tuple[int, str, complex, tuple[float, float, float]]]
    generators: list[tuple[int, float, Row, Row]]
    technologies: dict[str, Row]
    cases: list[Row]
    limits: Row
    own: dict[str, Row]

    @property
    def root(self) -> int:
        """Index of the source node."""
        return self.nodes.index(name(self.source["node"]))


def read(tables: Tables) -> Feeder:
    """Read workbook tables (lists of rows or data frames, workbook columns) into a Feeder."""
    source = rows(tables, "source")[0]
    limits = {**LIMITS, **{r["limit"]: float(r["value"]) for r in rows(tables, "limits")}}
    library = {r["conductor"]: r for r in rows(tables, "conductors")}
    lines = [r for r in rows(tables, "lines") if _closed(r.get("state", "closed"))]
    branches = [("line", r) for r in lines]
    branches += [("transformer", r) for r in rows(tables, "transformers")]
    branches += [("regulator", r) for r in rows(tables, "regulators")]
    kv, depth = _bases(name(source["node"]), float(source["kv"]), branches)
    nodes = list(kv)
    at = {n: i for i, n in enumerate(nodes)}
    base_kv = np.array([kv[n] for n in nodes])
    amps = 1000 / (math.sqrt(3) * base_kv)
    frequency = float(source.get("frequency_hz", 60))
    series: list[Series] = []
    links: list[Link] = []
    shunt = np.zeros(len(nodes), complex)
    for kind, r in branches:
        f, t = at[name(r["from_node"])], at[name(r["to_node"])]
        if kind == "line":
            z, b, rated = _line(r, library, frequency)
            rated /= amps[f]
            if z == 0:
                links.append(Link("switch", str(r["line"]), f, t, rated, r))
                continue
            z_base = base_kv[f] ** 2
            series.append(Series(kind, str(r["line"]), f, t, z_base / z, 1.0, b * z_base / 2,
                                 rated, rated, z / z_base))  # fmt: skip
        elif kind == "transformer":
            series.append(_transformer(r, f, t, base_kv))
            shunt[f] += series[-1].no_load
        else:
            if depth[nodes[t]] < depth[nodes[f]]:
                raise ValueError(f"regulator {r['regulator']} is fed from its to_node")
            rated = _rating(r.get("rating_a", "unlimited")) / amps[f]
            links.append(Link(kind, str(r["regulator"]), f, t, rated, r))
    for r in rows(tables, "capacitors"):
        if r.get("state", "on") == "on":
            shunt[at[name(r["node"])]] += 1j * (power(r, "", "var") or 0.0) / 1000
    technologies = {**BUILT_IN_TECHNOLOGIES}
    technologies.update({str(r["technology"]): r for r in rows(tables, "technologies")})
    generators = []
    for r in rows(tables, "generators"):
        technology = technologies[str(r.get("technology", "pv"))]
        generators.append((at[name(r["node"])], power(r, "", "w") or 0.0, technology, r))
    return Feeder(
        nodes, base_kv, np.array([depth[n] for n in nodes]), source, series, links, shunt,
        [_load(r, at) for r in rows(tables, "loads")], generators, technologies,
        rows(tables, "cases") or list(BUILT_IN_CASES), limits,
        {name(r["node"]): r for r in rows(tables, "nodes")},
    )  # fmt: skip


def _closed(state: Any) -> bool:
    return str(state).strip().lower() not in ("open", "0", "0.0", "n.o.", "no", "false")


def _rating(value: Any) -> float:
    return math.inf if str(value).strip().lower() == "unlimited" else float(value)


def _bases(
    root: str, kv: float, branches: Iterable[tuple[str, Row]]
) -> tuple[dict[str, float], dict[str, int]]:
    """Walk the closed branches from the source: base kV and depth of every node."""
    near: dict[str, list[tuple[str, float]]] = {root: []}
    count = 0
    for kind, r in branches:
        f, t = name(r["from_node"]), name(r["to_node"])
        k = float(r["kv_secondary"]) / float(r["kv_primary"]) if kind == "transformer" else 1.0
        near.setdefault(f, []).append((t, k))
        near.setdefault(t, []).append((f, 1 / k))
        count += 1
    bases, depth, queue = {root: kv}, {root: 0}, deque([root])
    while queue:
        here = queue.popleft()
        for there, k in near[here]:
            if there not in bases:
                bases[there], depth[there] = bases[here] * k, depth[here] + 1
                queue.append(there)
    if len(bases) != len(near) or count != len(near) - 1:
        raise ValueError("the closed branches are not one tree")
    return bases, depth


def _line(row: Row, library: dict[str, Row], frequency: float) -> tuple[complex, float, float]:
    """Return total impedance (ohm), charging susceptance (S) and rating (A) of a line."""
    r = {**row}
    for family in (("r1_", "x1_"), ("b1_", "charging_"), ("rating_a",)):
        if not any(k.startswith(family) for k in row):  # an explicit value wins
            lent = library.get(row.get("conductor", ""), {})
            r.update({k: v for k, v in lent.items() if k.startswith(family)})
    km = sum(float(r[f"length_{u}"]) * k for u, k in KM.items() if f"length_{u}" in r)

    def total(letter: str) -> float:
        if f"{letter}_ohm" in r:
            return float(r[f"{letter}_ohm"])
        per = [float(r[f"{letter}_ohm_{u}"]) * k
               for u, k in PER_KM.items() if f"{letter}_ohm_{u}" in r]  # fmt: skip
        return per[0] * km if per else 0.0

    b = [float(r[f"b1_us_{u}"]) * k for u, k in PER_KM.items() if f"b1_us_{u}" in r]
    if not b and "charging_uf_per_km" in r:
        b = [2 * math.pi * frequency * float(r["charging_uf_per_km"])]
    return complex(total("r1"), total("x1")), sum(b) * 1e-6 * km, _rating(r["rating_a"])


def _transformer(row: Row, f: int, t: int, kv: np.ndarray) -> Series:
    """Own percent impedance, at its rated secondary voltage, to the base of the to_node."""
    kva = power(row, "", "va")
    assert kva is not None
    kv_f, kv_t = float(row["kv_primary"]), float(row["kv_secondary"])
    if "z_pct" in row:
        ratio = float(row["x_over_r"])
        r_pct = float(row["z_pct"]) / math.hypot(1, ratio)
        x_pct = r_pct * ratio
    else:
        r_pct, x_pct = float(row["r_pct"]), float(row["x_pct"])
    z = complex(r_pct, x_pct) / 100 * (1000 / kva) * (kv_t / kv[t]) ** 2
    rated = [
        kva / (math.sqrt(3) * k) * math.sqrt(3) * kv[i] / 1000 for k, i in ((kv_f, f), (kv_t, t))
    ]
    return Series("transformer", str(row["transformer"]), f, t, 1 / z,
                  float(row.get("tap_pu", 1.0)), 0.0, rated[0], rated[1], z,
                  (power(row, "no_load_", "w") or 0.0) / 1000)  # fmt: skip


def _load(row: Row, at: dict[str, int]) -> tuple[int, str, complex, tuple[float, float, float]]:
    p = power(row, "", "w") or 0.0
    q = power(row, "", "var")
    if q is None:
        q = reactive(p, row, export=False)
    shares = [float(row.get(f"zip_{k}", 0.0)) for k in "zip"]
    if not any(f"zip_{k}" in row for k in "zip"):
        shares = [0.0, 0.0, 1.0]
    elif "zip_p" not in row:
        shares[2] = 1.0
    return at[name(row["node"])], str(row.get("class", "default")), complex(p, q) / 1000, (
        shares[0], shares[1], shares[2],
    )  # fmt: skip


def scale_of(technology: Row, case: Row) -> float:
    """Return the share of its rating at which a technology runs in a case."""
    return float(case.get(str(technology["scale"]), 0.0)) if "scale" in technology else 1.0


def demand(feeder: Feeder, case: Row, direction: str | None) -> np.ndarray:
    """Return drawn power, (3, n): constant impedance, constant current, constant power.

    ``direction`` None is the base run, in which generators that go both ways rest.
    """
    drawn = np.zeros((3, len(feeder.nodes)), complex)
    for node, kind, s, shares in feeder.loads:
        own = f"load_scale.{kind}"
        scale = float(case[own] if own in case else case.get("load_scale", 1.0))
        for k in range(3):
            drawn[k, node] += scale * shares[k] * s
    for node, kw, technology, row in feeder.generators:
        way = technology["direction"]
        way = direction if way == "both" else way
        if way is None:
            continue
        sheet = {k: v for k, v in technology.items() if k in ("power_factor", "vars")}
        p = kw * scale_of(technology, case) / 1000
        q = reactive(p, {**sheet, **row}, export=way == "export")
        drawn[2, node] += (-1 if way == "export" else 1) * complex(p, q)
    return drawn


def source_voltage(feeder: Feeder, case: Row) -> float:
    """Return the voltage held at the source node in a case, pu."""
    for row in (case, feeder.source):
        prefix = "source_voltage" if row is case else "voltage"
        if f"{prefix}_pu" in row:
            return float(row[f"{prefix}_pu"])
        if f"{prefix}_kv" in row:
            return float(row[f"{prefix}_kv"]) / float(feeder.source["kv"])
    return 1.0
