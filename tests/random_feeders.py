"""Random radial feeders in workbook form: invented, physically sensible, and reproducible.

A seed gives a feeder of 5 to 40 nodes.  Each has a theme, the kind of limit that is made
tight; other limits are mostly loose, so that all criteria get their share.  Units, impedance
styles and optional sheets vary, since a reader has to cope with all of them.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.random import Generator

from judge import NoSolution, base_case
from random_branches import Row, Sketch, Tables, add_branches

THEMES = (
    "voltage", "voltage", "line", "transformer", "regulator", "bank", "head", "change", "mixed",
    "mixed",
)  # fmt: skip
TECHNOLOGIES: list[Row] = [
    {"technology": "pv_absorb", "direction": "export", "scale": "pv_scale",
     "power_factor": 0.95, "vars": "absorb"},
    {"technology": "pv_inject", "direction": "export", "scale": "pv_scale",
     "power_factor": 0.97, "vars": "inject"},
    {"technology": "ev_absorb", "direction": "import", "scale": "ev_scale", "power_factor": 0.96},
    {"technology": "ev_inject", "direction": "import", "scale": "ev_scale",
     "power_factor": 0.98, "vars": "inject"},
    {"technology": "pump", "direction": "import", "scale": "pump_scale",
     "power_factor": 0.95, "vars": "absorb", "coincidence": 0.7},
]  # fmt: skip
# How often each is tested.
SHARES = {
    "pv": 0.22, "ev": 0.22, "pv_absorb": 0.13, "pv_inject": 0.11, "ev_absorb": 0.11,
    "ev_inject": 0.09, "pump": 0.06, "storage": 0.06,
}  # fmt: skip
MV = (4.16, 6.6, 11.0, 12.47, 13.8, 20.0, 22.0, 24.9, 33.0, 34.5)
LV = (0.208, 0.4, 0.415, 0.48)


def random_feeder(seed: int) -> Tables:
    """Return the sheets of an invented radial feeder, as lists of rows."""
    rng = np.random.default_rng(seed)
    theme = str(rng.choice(THEMES))
    s = _grow(rng, theme)
    _loads(rng, s)
    add_branches(rng, s, theme)
    _shunts_and_generators(rng, s)
    _cases(rng, s, theme)
    _source_and_limits(rng, s, theme)
    s.rows["technologies"] = [dict(t) for t in TECHNOLOGIES]
    return s.rows


def rows_to_test(seed: int, count: int = 3) -> list[tuple[str, str]]:
    """Return the (node, technology) rows to test on the feeder of a seed."""
    rng = np.random.default_rng([seed, 1])
    tables = random_feeder(seed)
    source = tables["source"][0]["node"]
    nodes = sorted(_ends(tables) - {source})
    # Behind a service transformer its rating nearly always binds: fewer of those.
    weight = np.array([0.3 if n.startswith("V") else 1.0 for n in nodes])
    picked = rng.choice(nodes, size=min(count, len(nodes)), replace=False, p=weight / weight.sum())
    kinds, shares = list(SHARES), list(SHARES.values())
    return [(str(n), str(rng.choice(kinds, p=shares))) for n in picked]


def base_solves(tables: Tables, lowest: float = 0.8, highest: float = 1.15) -> bool:
    """Tell whether every case has a solution, with voltages a feeder may be planned at (pu)."""
    try:
        flows = [base_case(tables, str(c["case"])) for c in tables["cases"]]
    except NoSolution:
        return False
    sizes = [abs(v) for flow in flows for v in flow.voltages.values()]
    return lowest <= min(sizes) and max(sizes) <= highest


def _ends(tables: Tables) -> set[str]:
    return {
        r[end]
        for sheet in ("lines", "transformers", "regulators")
        for r in tables.get(sheet, [])
        for end in ("from_node", "to_node")
    }


def _grow(rng: Generator, theme: str) -> Sketch:
    """Draw the tree: a trunk with laterals, ratios, switches, services at the ends."""
    n = int(rng.integers(5, 41))
    s = Sketch(["S0"], [float(rng.choice(MV))], [-1], ["source"], [0.0])
    if theme == "change":
        s.kv[0] = float(rng.choice(MV[2:]))
    stretch = rng.choice([0.55, 0.75, 0.9])
    ratios = int(rng.choice([0, 1, 2], p=[0.45, 0.4, 0.15])) + 2 * (theme == "regulator")
    while len(s.names) < n:
        k = len(s.names)
        mv = [i for i in range(k) if s.kv[i] > 1]
        parent = mv[-1] if rng.random() < stretch else int(rng.choice(mv))
        draw = rng.random()
        service = 0.35 if theme == "transformer" else 0.12
        if ratios and k > 1 and draw < 0.4 and s.kind[parent] != "regulator":
            ratios -= 1
            inline = theme == "transformer" or (theme != "regulator" and rng.random() < 0.4)
            lower = [v for v in MV if 0.25 * s.kv[parent] < v < 0.8 * s.kv[parent]]
            if inline and lower:
                s.add(f"N{k}", float(rng.choice(lower)), parent, "transformer")
            else:
                s.add(f"N{k}", s.kv[parent], parent, "regulator")
        elif k > 2 and draw < 0.4 + service:
            low = s.add(f"V{k}", float(rng.choice(LV)), parent, "service")
            for _ in range(min(int(rng.integers(0, 3)), n - len(s.names))):
                low = s.add(f"V{len(s.names)}", s.kv[low], low, "lv_line")
        elif draw > 0.94 or (k == 1 and draw > 0.8):
            s.add(f"N{k}", s.kv[parent], parent, "switch")
        else:
            s.add(f"N{k}", s.kv[parent], parent, "line")
    return s


def _loads(rng: Generator, s: Sketch) -> None:
    """Place peak demand: a share of what the first branch could carry, and services."""
    ampacity = rng.uniform(60, 300)
    total = rng.uniform(0.2, 0.9) * math.sqrt(3) * s.kv[0] * ampacity
    n = len(s.names)
    weight = rng.gamma(1.0, 1.0, n) * (rng.random(n) < 0.7)
    weight[0] = 0.0
    if weight.sum() == 0:
        weight[-1] = 1.0
    zip_style, mega = rng.random(), rng.random() < 0.15
    for i in range(1, n):
        kw = total * weight[i] / weight.sum()
        if s.kv[i] < 1:
            kw = rng.uniform(5, 120) * (s.kv[i] / 0.4) if weight[i] else 0.0
        kw = round(kw, 1)
        if kw <= 0:
            continue
        s.kw[i] = kw
        row: Row = {"node": s.names[i], **({"mw": kw / 1000} if mega else {"kw": kw})}
        if rng.random() < 0.5:
            row["kvar"] = round(kw * rng.uniform(0.0, 0.6), 1)
        else:
            row["power_factor"] = round(rng.uniform(0.85, 1.0), 3)
            if rng.random() < 0.1:
                row["vars"] = "inject"
        if zip_style < 0.5 and rng.random() < 0.6:
            z = round(rng.uniform(0, 0.6), 2)
            i_share = round(rng.uniform(0, 0.4), 2)
            row.update(zip_z=z, zip_i=i_share, zip_p=round(1 - z - i_share, 2))
        if rng.random() < 0.4:
            row["class"] = "homes"
        s.put("loads", **row)
    if rng.random() < 0.1:
        kw = round(0.05 * total, 1)
        s.put("loads", node=s.names[0], mw=kw / 1000 if mega else None,
              kw=None if mega else kw, power_factor=0.95)  # fmt: skip


def _shunts_and_generators(rng: Generator, s: Sketch) -> None:
    total = sum(s.kw)
    mv = [i for i in range(1, len(s.names)) if s.kv[i] > 1]
    if rng.random() < 0.5:
        for _ in range(int(rng.integers(1, 3))):
            s.put("capacitors", node=s.names[int(rng.choice(mv))],
                  kvar=round(total * rng.uniform(0.03, 0.15), 0) + 1,
                  state="off" if rng.random() < 0.15 else None)  # fmt: skip
    searched = any("tap" not in r for r in s.rows.get("regulators", []))
    if rng.random() < 0.5:
        for _ in range(int(rng.integers(1, 4))):
            i = int(rng.integers(1, len(s.names)))
            room = 0.12 * total if s.kv[i] > 1 else 0.5 * s.kw[i] + 5
            row: Row = {"node": s.names[i], "kw": round(room * rng.uniform(0.2, 1.0), 1)}
            draw = rng.random()
            if draw < 0.25:
                row.update(technology="pv", power_factor=0.95, vars="absorb")
            elif draw < 0.4:
                row.update(technology="pv", power_factor=0.97, vars="inject", status="approved")
            elif draw < 0.55 and not searched:
                row.update(technology="storage")
            s.put("generators", **row)


def _cases(rng: Generator, s: Sketch, theme: str) -> None:
    """Write one to three cases; together every technology runs somewhere."""
    shapes: list[Row] = [
        {"case": "noon", "load_scale": round(rng.uniform(0.25, 0.6), 2), "pv_scale": 1.0,
         "ev_scale": round(rng.choice([0.0, 0.3]), 2), "pump_scale": 0.5},
        {"case": "evening", "load_scale": 1.0, "pv_scale": round(rng.choice([0.0, 0.2]), 2),
         "ev_scale": 1.0, "pump_scale": 1.0},
        {"case": "winter", "load_scale": round(rng.uniform(0.7, 0.95), 2), "pv_scale": 0.4,
         "ev_scale": 0.8, "pump_scale": 1.0},
    ]  # fmt: skip
    count = int(rng.choice([1, 2, 3], p=[0.2, 0.5, 0.3]))
    if count == 1:
        level = round(rng.uniform(0.3, 1.0), 2)
        shapes = [{"case": "only", "load_scale": level, "pv_scale": 1.0, "ev_scale": 1.0,
                   "pump_scale": 0.8}]  # fmt: skip
    homes = rng.random() < 0.4
    level = rng.random() < 0.3
    other = theme == "bank" and rng.random() < 0.5
    for case in shapes[:count]:
        if homes:
            case["load_scale.homes"] = round(case["load_scale"] * rng.uniform(0.8, 1.0), 2)
        if level:
            case["source_voltage_pu"] = round(rng.uniform(0.99, 1.035), 3)
        if other:
            case["bank_other_kw"] = round(sum(s.kw) * rng.uniform(0.1, 0.5), 0)
            case["bank_other_kvar"] = round(sum(s.kw) * rng.uniform(0.0, 0.2), 0)
        s.put("cases", **case)


def _source_and_limits(rng: Generator, s: Sketch, theme: str) -> None:
    total = sum(s.kw)
    row: Row = {"node": s.names[0], "kv": s.kv[0],
                "voltage_pu": float(rng.choice([1.0, 1.0, 1.01, 1.02, 1.03]))}  # fmt: skip
    if rng.random() < (0.9 if theme == "change" else 0.3):
        row["short_circuit_mva"] = round(total / 1000 * rng.uniform(8, 25) + 5, 1)
        if rng.random() < 0.5:
            row["x_over_r"] = float(rng.choice([3, 6, 15]))
    if theme == "bank" or rng.random() < 0.1:
        row["transformer_kva"] = round(total * rng.uniform(1.3, 2.0) + 50, 0)
    if theme == "head" or rng.random() < 0.1:
        row["export_limit_kw"] = round(total * rng.uniform(0.0, 0.5), 0)
        row["import_limit_kw"] = round(total * rng.uniform(1.15, 1.6) + 20, 0)
    if rng.random() < 0.2:
        row["frequency_hz"] = 50
    s.put("source", **row)
    wide = theme in ("line", "transformer", "regulator", "bank", "head", "change")
    limits: dict[str, float] = {
        "v_max_pu": float(rng.choice([1.05, 1.06, 1.1])) if wide else 1.05,
        "v_min_pu": float(rng.choice([0.9, 0.92])) if wide else float(rng.choice([0.94, 0.95])),
        "voltage_change_mv_pct": 3.0 if theme == "change" else float(rng.choice([0.0, 3.0, 6.0])),
        "voltage_change_lv_pct": 5.0 if theme == "change" else float(rng.choice([0.0, 5.0, 8.0])),
    }
    if rng.random() < 0.2:
        limits["v_min_primary_pu"] = limits["v_min_pu"] + 0.01
        limits["v_max_primary_pu"] = limits["v_max_pu"] - 0.005
    if theme == "head" and rng.random() < 0.3:
        limits["export_limit_kw"] = round(total * 0.2, 0)
    if rng.random() < 0.15:
        limits["regulator_edge"] = 0
    if rng.random() < 0.15:
        limits["line_loading_pct"] = 90
        limits["transformer_loading_pct"] = 120
    s.rows["limits"] = [{"limit": k, "value": v} for k, v in limits.items()]
    if rng.random() < 0.3:
        for i in rng.choice(np.arange(1, len(s.names)), 2, replace=False):
            s.put("nodes", node=s.names[i], v_max_pu=1.045, v_min_pu=0.93)
