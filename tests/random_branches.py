"""Branches of the random feeders: lines, switches, regulators, transformers, open ties."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.random import Generator

Row = dict[str, Any]
Tables = dict[str, list[Row]]

UNLIMITED = "unlimited"


@dataclass(frozen=True)
class Sketch:
    """The tree while it grows: parents, kV, load below, and the rows made so far."""

    names: list[str]
    kv: list[float]
    parent: list[int]
    kind: list[str]
    kw: list[float]
    rows: Tables = field(default_factory=dict)

    def add(self, name: str, kv: float, parent: int, kind: str) -> int:
        self.names.append(name)
        self.kv.append(kv)
        self.parent.append(parent)
        self.kind.append(kind)
        self.kw.append(0.0)
        return len(self.names) - 1

    def put(self, sheet: str, **row: Any) -> None:
        plain = {k: v.item() if isinstance(v, np.generic) else v for k, v in row.items()}
        self.rows.setdefault(sheet, []).append({k: v for k, v in plain.items() if v is not None})

    def below(self) -> np.ndarray:
        """Return the load at and below every node, kW."""
        total = np.array(self.kw)
        for i in range(len(total) - 1, 0, -1):
            total[self.parent[i]] += total[i]
        return total


def add_branches(rng: Generator, s: Sketch, theme: str) -> None:
    """Give every branch its data; lengths are scaled to a drop chosen for the whole feeder."""
    below = s.below()
    n = len(s.names)
    x_over_r = rng.choice([0.3, 0.7, 1.3, 2.5, 5.0])
    x = rng.uniform(0.08, 0.42, n)
    r = x / (x_over_r * rng.uniform(0.75, 1.33, n))
    km = rng.gamma(2.0, 0.5, n) + 0.03
    drop = np.zeros(n)
    for i in range(1, n):
        # Where little load is, PV may be: a branch counts with 15 % of the peak at least.
        flow = max(below[i], 0.15 * below[0]) / 1000
        own = (r[i] + 0.3 * x[i]) * km[i] * flow / s.kv[i] ** 2
        drop[i] = drop[s.parent[i]] + (own if s.kind[i] == "line" else 0.0)
    target = rng.uniform(0.015, 0.06 if theme in ("voltage", "mixed") else 0.035)
    km *= min(target / max(drop.max(), 1e-6), 20.0)
    km = np.clip(km, 0.01, 15.0)
    tight = {"line": 0.85, "regulator": 0.25, "mixed": 0.4}.get(theme, 0.1)
    style = str(rng.choice(["per_km", "per_mi", "per_kft", "total", "conductor"]))
    for i in range(1, n):
        ends = {"from_node": s.names[s.parent[i]], "to_node": s.names[i]}
        amps = max(below[i], 0.02 * below[0]) / (math.sqrt(3) * s.kv[i])
        rating = round(max(amps * rng.uniform(1.15, 2.6), 4.0), 1)
        if s.kind[i] in ("line", "switch", "lv_line"):
            if rng.random() < 0.3:
                ends = {"from_node": ends["to_node"], "to_node": ends["from_node"]}
            loose = UNLIMITED if rng.random() < 0.5 else round(20 * amps + 50, 1)
            row: Row = {"line": f"L{i}", **ends,
                        "rating_a": rating if rng.random() < tight else loose}  # fmt: skip
            if s.kind[i] == "lv_line":
                z_base = s.kv[i] ** 2 * 1000 / max(below[i], 10.0)
                row["r1_ohm"] = float(f"{z_base * rng.uniform(0.003, 0.02):.5g}")
                row["x1_ohm"] = float(f"{row['r1_ohm'] * rng.uniform(0.3, 1.0):.5g}")
            elif s.kind[i] == "line":
                _impedance(rng, s, row, style, float(r[i]), float(x[i]), float(km[i]), s.kv[i])
            elif rng.random() < 0.5:
                row.update(r1_ohm=0.0, x1_ohm=0.0)
            s.put("lines", **row)
        elif s.kind[i] == "regulator":
            tap = int(rng.integers(-6, 9)) if rng.random() < 0.35 else None
            s.put(
                "regulators", regulator=f"R{i}", **ends, tap=tap,
                setpoint_pu=None if tap is not None else round(rng.uniform(0.995, 1.033), 4),
                bandwidth_pu=None if rng.random() < 0.6 else float(rng.choice([0.0125, 0.025])),
                range_pct=None if rng.random() < 0.8 else 5.0,
                steps=None if rng.random() < 0.8 else 20,
                rating_a=rating if theme == "regulator" or rng.random() < tight else UNLIMITED,
            )  # fmt: skip
        else:
            least = 0.0 if s.kind[i] == "service" else 0.15 * below[0]
            _transformer(rng, s, i, ends, max(float(below[i]), least), theme)
    _ties(rng, s, style)


def _impedance(
    rng: Generator, s: Sketch, row: Row, style: str, r: float, x: float, km: float, kv: float
) -> None:
    """Write a line's impedance in the feeder's style; charging on some."""
    r, x, km = float(f"{r:.4g}"), float(f"{x:.4g}"), float(f"{km:.4g}")
    mile, kft = 1.609344, 0.3048
    cable = rng.random()
    b = 0.0 if cable < 0.5 else rng.uniform(2, 5) if cable < 0.8 else rng.uniform(30, 120)
    # Charging of one branch stays within 3 % of the peak load.
    b = float(f"{min(b, 30 * sum(s.kw) / (km * kv**2)):.3g}")
    if style == "total":
        row.update(r1_ohm=float(f"{r * km:.6g}"), x1_ohm=float(f"{x * km:.6g}"))
        if b:
            row.update(length_m=km * 1000, b1_us_per_km=b)
    elif style == "per_mi":
        row.update(length_mi=km, r1_ohm_per_mi=r * mile, x1_ohm_per_mi=x * mile)
        if b:
            row["b1_us_per_mi"] = b
    elif style == "per_kft":
        row.update(length_ft=round(km / 0.0003048, 1), r1_ohm_per_kft=r * kft,
                   x1_ohm_per_kft=x * kft)  # fmt: skip
        if b:
            row["b1_us_per_km"] = b
    elif style == "conductor":
        library = s.rows.setdefault("conductors", [])
        if len(library) < 4 or rng.random() < 0.2:
            s.put("conductors", conductor=f"C{len(library)}", r1_ohm_per_km=r, x1_ohm_per_km=x,
                  rating_a=UNLIMITED, charging_uf_per_km=round(b / 377, 4) or None)  # fmt: skip
        lent = library[int(rng.integers(len(library)))]
        # The length that keeps the drop the branch was meant to have.
        km *= (r + 0.3 * x) / (lent["r1_ohm_per_km"] + 0.3 * lent["x1_ohm_per_km"])
        row.update(conductor=lent["conductor"], length_km=float(f"{km:.4g}"))
    else:
        row.update(length_km=km, r1_ohm_per_km=r, x1_ohm_per_km=x)
        if b:
            row.update({"charging_uf_per_km": round(b / 377, 4)} if cable > 0.9 else
                       {"b1_us_per_km": b})  # fmt: skip


def _transformer(rng: Generator, s: Sketch, i: int, ends: Row, below: float, theme: str) -> None:
    service = s.kind[i] == "service"
    margin = rng.uniform(1.2, 2.2) if theme in ("transformer", "mixed") else rng.uniform(3, 9)
    sizes = np.array([25, 50, 75, 100, 160, 250, 400, 500, 750, 1000, 1500, 2500, 4000, 6300, 10000,
                      16000, 25000, 40000])  # fmt: skip
    kva = int(sizes[min(int(np.searchsorted(sizes, max(below * margin, 20))), len(sizes) - 1)])
    row: Row = {
        "transformer": f"T{i}", **ends, "kva": kva,
        "kv_primary": s.kv[s.parent[i]], "kv_secondary": s.kv[i],
    }  # fmt: skip
    z = rng.uniform(2, 5) if service else rng.uniform(4, 8)
    x_over_r = rng.uniform(0.8, 3) if service else rng.uniform(4, 14)
    if rng.random() < 0.5:
        row.update(z_pct=round(z, 2), x_over_r=round(x_over_r, 2))
    else:
        row["r_pct"] = round(z / math.hypot(1, x_over_r), 3)
        row["x_pct"] = round(row["r_pct"] * x_over_r, 3)
    if rng.random() < 0.5:
        row["no_load_kw"] = round(kva * rng.uniform(0.001, 0.003), 3)
    if rng.random() < 0.4:
        row["tap_pu"] = float(rng.choice([0.975, 0.9875, 1.0, 1.025]))
    s.put("transformers", **row)


def _ties(rng: Generator, s: Sketch, style: str) -> None:
    """Add open ties between nodes of one kV."""
    for k in range(int(rng.integers(0, 3))):
        a, b = (int(v) for v in rng.choice(len(s.names), 2, replace=False))
        if s.kv[a] == s.kv[b] and s.kv[a] > 1:
            tie: Row = {"line": f"tie{k}", "from_node": s.names[a], "to_node": s.names[b],
                        "rating_a": 200}  # fmt: skip
            _impedance(rng, s, tie, style, 0.2, 0.3, 1.2, s.kv[a])
            s.put("lines", **tie, state=str(rng.choice(["open", "N.O.", "0"])))
    for row in s.rows["lines"]:
        if "state" not in row and rng.random() < 0.1:
            row["state"] = str(rng.choice(["closed", "N.C.", "1"]))
