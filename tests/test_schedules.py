"""A limit by hour and month as an alternative, against sums by hand."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import pytest
from feederhost.study.cases import study_case
from feederhost.study.nodal import base_solutions
from feederhost.study.options import Options
from feederhost.study.queue.offers import Ask, Remedy
from feederhost.study.queue.schedules import schedule
from feederhost.study.queue.sites import read_sites
from feederhost.study.queue.stops import Line, Stop

from asked import (
    Tables,
    found,
    refused,
    request,
)
from engine import load, two_bus
from two_bus_forms import bisect, voltage


def year(scale: Callable[[int, int], dict[str, float]]) -> list[dict[str, Any]]:
    """One case per hour and month, of 30 hours, July 31."""
    return [
        {"case": f"m{m}h{h}", "month": m, "hour": h, "hours": 31 if m == 7 else 30,
         "load_scale": 0, **scale(m, h)}
        for m in range(1, 13) for h in range(24)
    ]  # fmt: skip


def summer(m: int, h: int) -> dict[str, float]:
    """Full output at noon in June and July, July with the load on; half of it from 9 to 15."""
    if h == 12 and m in (6, 7):
        return {"pv_scale": 1.0, "load_scale": 1.0 if m == 7 else 0.0}
    return {"pv_scale": 0.5 if 9 <= h <= 15 else 0.0}


def scheduled(**sheets: Any) -> Tables:
    tables = two_bus(3 + 6j, loads=[{"node": "N", "kw": 200, "kvar": 0}], **request())
    return {**tables, "cases": year(summer), **sheets}


def held_back(tables: Tables) -> Remedy:
    """Return the schedule alone: of 288 cases only those of the site's direction are posed."""
    loaded = load(tables)
    feeder = loaded.feeder
    sites, _ = read_sites(loaded.tables, feeder)
    studies = {
        way: tuple(
            study_case(feeder, i, s, way) for i, s in enumerate(base_solutions(feeder, Options()))
        )
        for way in sites[0].ways
    }
    own = schedule(Ask(Line(feeder, studies, sites, 0.0), loaded.tables, 0, {}, Stop(0.0)))
    assert own is not None
    return own


def test_energy_lost_against_a_hand_sum():
    # June 1973 kW of 2500 for 30 h; July, with 200 kW of load, 2173 kW for 31 h.
    own = held_back(scheduled())
    lost = (30 * (2500 - 1973) + 31 * (2500 - 2173)) / 1e3
    full = (30 + 31) * 2.5 + (12 * 7 * 30 + 7 - 30 - 31) * 1.25
    assert own.energy_lost_mwh == pytest.approx(lost, abs=1e-9)
    assert (own.kw, own.criterion, own.proof) == (2500.0, "", "ac_only")
    assert own.setting == (
        "export limited in 2 of 288 hours of the months, least 1,973 kW in month 6, hour 12"
    )
    assert f"{100 * lost / full:.1f} % of the energy" in own.note
    assert "export kW in month 6: 12 h 1,973; export kW in month 7: 12 h 2,173" in own.note


def test_the_least_of_two_cases_of_one_hour_counts():
    # A second July noon without load: 1973 kW then hold for both, 31 + 10 h.
    cases = [*year(summer), {"case": "calm", "month": 7, "hour": 12, "hours": 10,
                             "pv_scale": 1.0, "load_scale": 0.0}]  # fmt: skip
    own = held_back(scheduled(cases=cases))
    assert own.energy_lost_mwh == pytest.approx((30 + 31 + 10) * (2500 - 1973) / 1e3, abs=1e-9)


def test_a_charging_schedule():
    def evening(m: int, h: int) -> dict[str, float]:
        return {"ev_scale": 1.0 if h == 18 else 0.4}

    size = 1e3 * bisect(lambda p: voltage(0.03, 0.06, -p, 0.0) - 0.95, 0.0, 3.0)
    tables = {**two_bus(3 + 6j, **request(2000, technology="ev")), "cases": year(evening)}
    own = held_back(tables)
    hours = 11 * 30 + 31
    assert own.energy_lost_mwh == pytest.approx(hours * (2000 - math.floor(size)) / 1e3, abs=1e-9)
    assert own.setting.startswith("charging limited in 12 of 288")


@pytest.mark.parametrize(
    ("cases", "why"),
    [
        (year(summer)[:287], "there are 287"),
        ([{**c, "hours": None} if c["case"] == "m6h3" else c for c in year(summer)],
         "1 cases lack"),
        ([{**c, "hour": 4} if c["case"] == "m6h3" else c for c in year(summer)],
         "1 hours of a month have no case"),
    ],
)  # fmt: skip
def test_a_schedule_takes_the_whole_year(cases: list[dict[str, Any]], why: str):
    loaded = load(scheduled(cases=cases))
    sites, _ = read_sites(loaded.tables, loaded.feeder)
    own = schedule(Ask(Line(loaded.feeder, {}, sites, 0.0), loaded.tables, 0, {}, Stop(0.0)))
    assert own is not None
    assert refused(own)
    assert "288 cases" in own.note
    assert why in own.note


def test_few_cases_are_said_to_be_too_few():
    own = found(two_bus(3 + 6j, **request()))["schedule"]
    assert refused(own)
    assert "there are 1" in own.note


def test_nothing_left_is_no_schedule():
    def always(m: int, h: int) -> dict[str, float]:
        return {"pv_scale": 1.0 if h == 12 else 0.0}

    tables = {**two_bus(3 + 6j, limits={"rounding_kw": 2000}, **request()), "cases": year(always)}
    assert refused(held_back(tables))
