"""A small feeder for the rule screens, sized so that every figure can be worked by hand.

An invented scenario.  Source and lines are pure resistance, so that impedances add as numbers::

    S --L1-- A --L2*-- B --L3*-- C          * automatic device
                       B ==T1== K           T1: 50 kVA, 10/0.24 kV, two loads
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

from feederhost.feeder.model import EXPORT, IMPORT
from feederhost.feeder.tables import Tables
from feederhost.study.cases import study_case
from feederhost.study.nodal import base_solutions
from feederhost.study.options import Options
from feederhost.study.queue.screens import Screen, ScreenData, screen_data, screen_site
from feederhost.study.queue.sites import read_sites
from feederhost.study.queue.stops import Line

import engine

Row = dict[str, Any]


def line(name: str, start: str, end: str, ohm: float, **more: Any) -> Row:
    """Return a line of pure resistance."""
    return {"line": name, "from_node": start, "to_node": end, "r1_ohm": ohm, "x1_ohm": 0,
            "rating_a": "unlimited", **more}  # fmt: skip


def request(name: str, node: str, technology: str, kw: float, **more: Any) -> Row:
    """Return a row of the queue."""
    return {"request": name, "node": node, "technology": technology, "kw": kw,
            "received": "2026-05-04", **more}  # fmt: skip


def small(**changes: Sequence[Row] | None) -> dict[str, list[Row]]:
    """Return the feeder; a sheet given replaces the feeder's own, ``None`` takes it away."""
    tables: dict[str, Sequence[Row] | None] = {
        # 10 kV and 100 MVA: 1 ohm.  1 pu current is 57.735 A.
        "source": [{"node": "S", "kv": 10, "short_circuit_mva": 100, "x_over_r": 0, "wires": "4"}],
        "lines": [
            line("L1", "S", "A", 1),
            line("L2", "A", "B", 2, device="automatic", interrupting_a=4000),
            line("L3", "B", "C", 1, device="automatic", interrupting_a=1700),
        ],
        "transformers": [
            {"transformer": "T1", "from_node": "B", "to_node": "K", "kva": 50, "kv_primary": 10,
             "kv_secondary": 0.24, "r_pct": 2, "x_pct": 0, "connection": "wye_wye"}
        ],
        "loads": [
            {"node": "A", "kw": 400}, {"node": "B", "kw": 200}, {"node": "C", "kw": 200},
            {"node": "K", "kw": 10}, {"node": "K", "kw": 30},
        ],
        "generators": [{"node": "B", "kw": 10}, {"node": "A", "kw": 25, "technology": "ev"}],
        "cases": [
            case("peak", 19, 1.0), case("noon", 12, 0.5, pv_scale=1.0), case("night", 3, 0.25),
        ],
        "requests": [request("Q1", "C", "pv", 30)],
    }  # fmt: skip
    tables.update(changes)
    return {name: list(rows) for name, rows in tables.items() if rows is not None}


def case(name: str, hour: float | None, load: float, **more: Any) -> Row:
    """Return a measured case."""
    return {"case": name, "hour": hour, "load_scale": load, "basis": "measured", **more}


def screen_bench(
    tables: engine.Sheets, known: Mapping[str, Mapping[str, Any]] | None = None, **settings: object
) -> ScreenData:
    """Return what the screens of a feeder read.

    ``known`` sets cells of `technologies`, by name and column, whether the schema has it or not.
    """
    loaded = engine.load(tables)
    feeder = replace(loaded.feeder, settings=replace(loaded.feeder.settings, **settings))
    base = base_solutions(feeder, Options())
    studies = {
        way: tuple(study_case(feeder, i, solved, way) for i, solved in enumerate(base))
        for way in (EXPORT, IMPORT)
    }
    sites, _ = read_sites(loaded.tables, feeder)
    return screen_data(Line(feeder, studies, sites, reach=20.0), _with(loaded.tables, known or {}))


def _with(tables: Tables, known: Mapping[str, Mapping[str, Any]]) -> Tables:
    frame = tables.sheets["technologies"].copy()
    for name, cells in known.items():
        for column, value in cells.items():
            frame[column] = [value if n == name else "" for n in frame["technology"]]
    return replace(tables, sheets={**tables.sheets, "technologies": frame})


def screens(
    data: ScreenData, name: str = "Q1", sizes: Mapping[str, float] | None = None,
    only: Sequence[str] = (), size: float | None = None,
) -> dict[str, Screen]:  # fmt: skip
    """Return the screens of one request by name; sizes of the earlier ones in kW."""
    number = {site.request: i for i, site in enumerate(data.line.sites)}
    at = number[name]
    asked = data.line.sites[at].asked if size is None else size / 1e3
    placed = {number[n]: kw / 1e3 for n, kw in (sizes or {}).items()}
    found = screen_site(data, at, placed, asked, only)
    assert len({s.screen for s in found}) == len(found)
    return {s.screen: s for s in found}


def one(tables: engine.Sheets, screen: str, name: str = "Q1", **sizes: float) -> Screen:
    """Return a single screen of one request."""
    return screens(screen_bench(tables), name, sizes, [screen])[screen]
