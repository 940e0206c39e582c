"""A request that does not fit on a small invented feeder, and the alternatives offered to it.

Feeders are of one to four branches at 10 kV: 100 ohm is 1 pu, power in MW.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Any

from feederhost.study.cases import study_case
from feederhost.study.nodal import base_solutions
from feederhost.study.options import Options
from feederhost.study.queue.offers import Remedy
from feederhost.study.queue.remedies import remedies_of
from feederhost.study.queue.sites import read_sites
from feederhost.study.queue.stops import Line, first_stop

from engine import load, two_bus
from judge import worst_slack
from two_bus_forms import bisect, voltage

Tables = dict[str, list[dict[str, Any]]]
ORDER = (
    "smaller_size", "fixed_power_factor", "volt_var", "volt_watt", "schedule",
    "regulator_setting", "larger_conductor", "larger_transformer",
)  # fmt: skip


def request(kw: float = 2500, node: str = "N", technology: str = "pv", **more: Any) -> Tables:
    own = {"request": "Q1", "node": node, "technology": technology, "kw": kw}
    return {"requests": [own | more]}


def line_of(tables: Tables) -> tuple[Line, Any]:
    loaded = load(tables)
    feeder = loaded.feeder
    base = base_solutions(feeder, Options())
    studies = {
        way: tuple(study_case(feeder, i, s, way) for i, s in enumerate(base))
        for way in ("export", "import")
    }
    sites, _ = read_sites(loaded.tables, feeder)
    return Line(feeder, studies, sites, max(c.cap for c in feeder.candidates)), loaded.tables


def found(tables: Tables, name: str = "Q1", sizes: Mapping[str, float] | None = None):
    """Alternatives of a request by name, the others at ``sizes`` in kW."""
    line, checked = line_of(tables)
    numbers = {site.request: i for i, site in enumerate(line.sites)}
    at, held = numbers[name], {numbers[k]: v / 1e3 for k, v in (sizes or {}).items()}
    stop = first_stop(line, at, held)
    assert stop.rating < line.sites[at].asked
    rows = remedies_of(line, checked, at, held, stop)
    names = [r.remedy for r in rows]
    assert names == sorted(names, key=ORDER.index)
    assert len(set(names)) == len(names)
    assert all(r.request == name for r in rows)
    return {r.remedy: r for r in rows}


def refused(own: Remedy) -> bool:
    """Whether a row carries no number, no proof, no cost, and says why."""
    numbers = (own.kw, own.energy_lost_mwh, own.cost_low, own.cost_high)
    return all(math.isnan(v) for v in numbers) and own.proof == "" and bool(own.note)


def judged(tables: Tables, kw: float, node: str = "N", technology: str = "pv") -> float:
    """Least slack by the independent judge with the plant at a size."""
    return min(worst_slack(tables, node, technology, kw).values())


def first_size(r: float, x: float, q: Callable[[float], float], limit: float = 1.05) -> float:
    """Export in kW at which the voltage behind one branch meets a limit, q(p) injected."""
    return 1e3 * bisect(lambda p: limit - voltage(r, x, p, q(p)), 0.0, 5.0)


NO_VARS = first_size(0.03, 0.06, lambda p: 0.0)  # 1973.2 kW


def absorbing(pf: float) -> float:
    return math.tan(math.acos(pf))


def with_power_factor(tables: Tables, pf: float) -> Tables:
    kind = {"technology": "pv_q", "direction": "export", "scale": "pv_scale",
            "power_factor": pf, "vars": "absorb"}  # fmt: skip
    return {**tables, "technologies": [kind]}


LIBRARY = {
    "conductors": [
        {"conductor": "thin", "r1_ohm_per_km": 3.0, "x1_ohm_per_km": 3.0, "rating_a": 200},
        {"conductor": "thick", "r1_ohm_per_km": 1.0, "x1_ohm_per_km": 2.0, "rating_a": 400},
        {"conductor": "thicker", "r1_ohm_per_km": 0.5, "x1_ohm_per_km": 1.8, "rating_a": 600},
    ]
}
SHORT, LONG = 0.4, 1.0


def two_lines(kw: float = 3000, **sheets: Any) -> Tables:
    """S - A - N, both lines of the thin conductor, the second the longer one."""
    tables = two_bus(0j, **request(kw), **LIBRARY)
    tables["lines"] = [
        {"line": "L1", "from_node": "S", "to_node": "A", "conductor": "thin", "length_km": SHORT},
        {"line": "L2", "from_node": "A", "to_node": "N", "conductor": "thin", "length_km": LONG},
    ]
    return {**tables, **sheets}


def rebuilt(tables: Tables, line: str, conductor: str) -> Tables:
    lines = [{**r, "conductor": conductor} if r["line"] == line else r for r in tables["lines"]]
    return {**tables, "lines": lines}


def stop_kw(tables: Tables) -> float:
    line, _ = line_of(tables)
    return 1e3 * first_stop(line, 0, {}).rating
