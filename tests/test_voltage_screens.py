"""Voltage changes and failed export controls against closed forms of a two-node feeder.

Injecting p (per unit, unity power factor) behind a pure resistance r from a held 1 pu gives
v^2 - v - r p = 0, so v = 1/2 + sqrt(1/4 + r p); drawing it, v = 1/2 + sqrt(1/4 - r p).
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from feederhost.study.queue import voltage_screens
from feederhost.study.queue.stops import first_stop
from feederhost.study.queue.voltage_screens import CHANGES

from screen_feeder import case, line, request, screen_bench, screens, small

ALONE, TOGETHER = CHANGES
R, R_SOURCE, P = 0.05, 0.02, 0.5  # 5 ohm at 10 kV, 50 MVA, 500 kW
RULES = {"voltage_change_mv_pct": 3, "search_cap_kw": 20000}


def raised(r: float, p: float) -> float:
    """Return the voltage behind r with p injected (drawn: p below zero)."""
    return 0.5 + math.sqrt(0.25 + r * p)


def two_nodes(rows, *, source=False, cases=None, limits=None, **sheets):
    """Return one line of 5 ohm without load; every technology runs in the only case."""
    head = {"node": "S", "kv": 10}
    if source:
        head |= {"short_circuit_mva": 50, "x_over_r": 0}
    every = [case("only", 12, 1.0, pv_scale=1.0, ev_scale=1.0)]
    return small(
        source=[head], lines=[line("L", "S", "N", 5)], transformers=None, loads=None,
        generators=sheets.pop("generators", None), cases=cases or every, requests=rows,
        limits=[{"limit": k, "value": v} for k, v in (RULES | (limits or {})).items()], **sheets,
    )  # fmt: skip


def changes(tables, name="Q1", sizes=None, **settings):
    data = screen_bench(tables, **settings)
    found = screens(data, name, sizes, CHANGES)
    return found[ALONE], found[TOGETHER]


def test_a_request_alone_on_a_stiff_source():
    alone, together = changes(two_nodes([request("Q1", "N", "pv", 500)]))
    wanted = 100 * (raised(R, P) - 1)
    assert alone.quantity == pytest.approx(wanted, rel=1e-9)
    assert together.quantity == pytest.approx(wanted, rel=1e-9)
    assert (alone.threshold, alone.unit, alone.verdict) == (pytest.approx(3), "%", "pass")
    assert alone.detail == "at N, case only"
    assert "7.2.2" in alone.source


def test_a_request_alone_behind_the_source_impedance():
    # Nothing runs before it: the EMF is 1.  All lost: the EMF is what held the source at 1.
    alone, together = changes(two_nodes([request("Q1", "N", "pv", 500)], source=True))
    assert alone.quantity == pytest.approx(100 * (raised(R + R_SOURCE, P) - 1), rel=1e-9)
    v = raised(R, P)
    emf = 1 - R_SOURCE * P / v
    assert together.quantity == pytest.approx(100 * (v - emf), rel=1e-9)


def test_it_is_the_change_the_power_flow_stops_at():
    data = screen_bench(two_nodes([request("Q1", "N", "pv", 500)], source=True))
    rating = first_stop(data.line, 0, {}).rating
    for share, verdict in ((1, "pass"), (1.001, "fail")):
        found = screens(data, size=1e3 * rating * share, only=[ALONE])[ALONE]
        assert found.quantity == pytest.approx(3.0, rel=2e-3)
        assert found.verdict == verdict


def test_all_generation_is_what_is_there_before_and_asked():
    # 200 kW there, 100 before, 200 asked: together as 500 at once, alone the last 200 of them.
    rows = [request("Q0", "N", "pv", 100), request("Q1", "N", "pv", 200)]
    tables = two_nodes(rows, generators=[{"node": "N", "kw": 200}])
    alone, together = changes(tables, sizes={"Q0": 100})
    assert together.quantity == pytest.approx(100 * (raised(R, P) - 1), rel=1e-9)
    assert alone.quantity == pytest.approx(100 * (raised(R, 0.5) - raised(R, 0.3)), rel=1e-9)
    # What only imports is not generation, and does not stand against it.
    tables["generators"].append({"node": "N", "kw": 50, "technology": "ev"})
    tables["requests"].append(request("Q2", "N", "ev", 400, received="2026-01-01"))
    again = changes(tables, sizes={"Q0": 100, "Q2": 400})[1]
    v = raised(R, 0.45)
    assert again.quantity == pytest.approx(100 * (v - raised(R, -0.05)), rel=1e-9)


def test_coincidence_belongs_to_what_is_asked_for():
    # 100 kW are there and run whole; of 800 kW asked half is seen at once.
    own = [{"technology": "half", "direction": "export", "coincidence": 0.5}]
    rows, there = (
        [request("Q1", "N", "half", 800)],
        [{"node": "N", "kw": 100, "technology": "half"}],
    )
    alone, together = changes(two_nodes(rows, generators=there, technologies=own))
    assert together.quantity == pytest.approx(100 * (raised(R, P) - 1), rel=1e-9)
    assert alone.quantity == pytest.approx(100 * (raised(R, P) - raised(R, 0.1)), rel=1e-9)


def test_a_request_is_not_its_own_forerunner():
    tables = two_nodes([request("Q1", "N", "pv", 500)])
    assert changes(tables, sizes={"Q1": 300}) == changes(tables)


def test_each_verdict_of_both_changes():
    tables = two_nodes(
        [request("Q1", "N", "pv", 300)], generators=[{"node": "N", "kw": 400}],
        limits={"v_max_pu": 1.2},
    )  # fmt: skip
    alone, together = changes(tables)
    assert (alone.verdict, together.verdict) == ("pass", "fail")
    tables["requests"][0]["kw"] = 700
    assert changes(tables)[0].verdict == "fail"
    off = two_nodes([request("Q1", "N", "pv", 300)], limits={})
    off["limits"] = [{"limit": f"voltage_change_{k}_pct", "value": 0} for k in ("mv", "lv")]
    for found in changes(off):
        assert (found.verdict, found.counted) == ("not assessed", False)
        assert "switched off" in found.missing
    night = two_nodes([request("Q1", "N", "pv", 300)], cases=[case("night", 2, 1.0)])
    for found in changes(night):
        assert (found.verdict, found.missing) == ("not assessed", "a case in which it exports")
        assert found.counted


def test_limits_of_low_voltage_nodes_are_their_own():
    tables = small(requests=[request("Q1", "K", "pv", 45)])
    alone, _ = changes(tables)
    # T1: 2 % on 50 kVA is 0.4 pu on 1 MVA; the line to B and the source add 0.04.
    assert alone.quantity == pytest.approx(100 * 0.44 * 0.045, rel=0.05)
    assert (alone.threshold, alone.detail) == (pytest.approx(5), "at K, case noon")


def test_no_solution_fails():
    tables = two_nodes([request("Q1", "N", "storage", 6000)])
    # Drawing 6 MW through 0.05 pu: 1/4 < r p, no root.
    alone, together = changes(tables)
    for found in (alone, together):
        assert (found.verdict, found.detail) == ("fail", "no power flow solution in case only")
        assert math.isnan(found.quantity)


def test_storage_swings_from_charge_to_discharge():
    alone, together = changes(two_nodes([request("Q1", "N", "storage", 500)]))
    assert alone.quantity == pytest.approx(100 * (raised(R, P) - raised(R, -P)), rel=1e-9)
    assert alone.verdict == "fail"
    assert together.quantity == pytest.approx(100 * (raised(R, P) - 1), rel=1e-9)
    # Beside PV only the storage swings; both are lost together.
    rows = [request("Q1", "N", "pv", 300), request("Q1", "N", "storage", 100)]
    alone, together = changes(two_nodes(rows))
    assert alone.quantity == pytest.approx(100 * (raised(R, 0.4) - 1), rel=1e-9)


def test_an_agreed_export_limit_holds_in_steady_state():
    limited = request("Q1", "N", "pv", 900, export_limit_kw=500)
    alone, _ = changes(two_nodes([limited]))
    assert alone.quantity == pytest.approx(100 * (raised(R, P) - 1), rel=1e-9)


def test_taps_stand_still():
    # The regulator is held for exports at 1.03 + half of 0.02, whatever the voltage does.
    rows = [line("L", "S", "N", 5)]
    regulator = {"regulator": "VR", "from_node": "N", "to_node": "M", "setpoint_pu": 1.03,
                 "bandwidth_pu": 0.02, "rating_a": 100}  # fmt: skip
    tables = two_nodes([request("Q1", "M", "pv", 500)], regulators=[regulator])
    tables["lines"] = rows
    alone, _ = changes(tables)
    assert alone.quantity == pytest.approx(1.04 * 100 * (raised(R, P) - 1), rel=1e-9)
    assert "at M" in alone.detail


@pytest.mark.parametrize(("name", "most"), [("Q1", 12), ("Q2", 24)])
def test_cases_left_out_change_nothing(name, most, monkeypatch):
    rng = np.random.default_rng(20)
    cases = [
        case(f"h{h}", h, float(rng.uniform(0.2, 1)), pv_scale=max(0.0, math.sin((h - 6) / 4)))
        for h in range(24)
    ]
    rows = [
        request("Q0", "B", "pv", 200, inverter_kva=150), request("Q1", "C", "pv", 250),
        request("Q2", "C", "storage", 250),
    ]  # fmt: skip
    solved = []
    solve = voltage_screens._changes
    monkeypatch.setattr(
        voltage_screens, "_changes", lambda trial, study, *a: (
            solved.append(study.case.name), solve(trial, study, *a))[1],
    )  # fmt: skip
    counts, found = [], []
    for spread in (1.5, 1e9):
        solved.clear()
        data = screen_bench(small(cases=cases, requests=rows), screen_slope_spread=spread)
        found.append(screens(data, name, {"Q0": 200}, CHANGES))
        counts.append(len(solved))
    assert found[0] == found[1]
    # PV runs in 12 of the 24 hours, and storage alike in all of them.
    assert counts[1] == most
    assert (counts[0] < most) == (name == "Q1")


@pytest.mark.parametrize(("limit", "value"), [("voltage_change_mv_pct", 1), ("v_max_pu", 1.2)])
def test_the_limit_of_the_limits_sheet_counts(limit, value):
    alone, _ = changes(two_nodes([request("Q1", "N", "pv", 500)], limits={limit: value}))
    assert alone.verdict == ("fail" if value == 1 else "pass")


# --- export control ---------------------------------------------------------------------------

# 1.05 pu behind 0.05 pu: 1.05 x 0.05 / 0.05 = 1.05 MW; the change is switched off.
FREE = {"voltage_change_mv_pct": 0, "voltage_change_lv_pct": 0}


@pytest.mark.parametrize(
    ("kw", "before", "verdict"), [(1049, 0, "pass"), (1051, 0, "fail"), (1049, 2, "fail")]
)
def test_a_failed_export_control_is_looked_at_once(kw, before, verdict):
    rows = [
        request("Q0", "N", "pv", 10), request("Q1", "N", "pv", kw, export_limit_kw=100),
    ]  # fmt: skip
    data = screen_bench(two_nodes(rows, limits=FREE))
    found = screens(data, "Q1", {"Q0": before})["export control fails"]
    assert (found.verdict, found.quantity) == (verdict, pytest.approx(kw))
    assert "100 kW agreed" in found.detail
    assert "export control fails" not in screens(data, "Q0")
