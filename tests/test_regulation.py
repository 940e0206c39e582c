"""Regulator settings and taps as alternatives, against the judge on the changed workbook."""

from __future__ import annotations

from typing import Any

import pytest

from asked import (
    Tables,
    found,
    judged,
    refused,
    request,
)
from engine import two_bus


def regulated(setpoint: float = 1.03, kw: float = 1500, **sheets: Any) -> Tables:
    """S - A = regulator = B - N, the request at N."""
    tables = two_bus(1 + 2j, **request(kw))
    tables["lines"] = [
        {**tables["lines"][0], "line": "L1", "to_node": "A"},
        {**tables["lines"][0], "line": "L2", "from_node": "B", "r1_ohm": 3.0, "x1_ohm": 3.0},
    ]
    tables["regulators"] = [
        {"regulator": "R1", "from_node": "A", "to_node": "B", "setpoint_pu": setpoint,
         "bandwidth_pu": 0.02, "rating_a": "unlimited"}
    ]  # fmt: skip
    return {**tables, **sheets}


def with_setpoint(tables: Tables, setpoint: float) -> Tables:
    return {**tables, "regulators": [{**tables["regulators"][0], "setpoint_pu": setpoint}]}


def test_the_nearest_setpoint_that_carries_it():
    tables = regulated()
    own = found(tables)["regulator_setting"]
    assert own.kw == 1500.0
    assert own.note == "proposal to the settings' owner"
    new = float(own.setting.split("-> ")[1].split()[0])
    assert own.setting == f"regulator R1: setpoint 1.03 -> {new:g} pu"
    assert judged(with_setpoint(tables, new), 1500) >= 0
    assert judged(with_setpoint(tables, new + 0.005), 1500) < 0


def test_a_setpoint_that_breaks_a_base_case_is_not_offered():
    # The load at N holds 0.99 pu only as long as the setpoint stays up.
    heavy = {"loads": [{"node": "N", "kw": 700, "kvar": 0}],
             "nodes": [{"node": "N", "v_min_pu": 0.99}],
             "cases": [{"case": "noon", "pv_scale": 1, "load_scale": 0},
                       {"case": "night", "pv_scale": 0, "load_scale": 1}]}  # fmt: skip
    assert not refused(found(regulated(**{**heavy, "nodes": []}))["regulator_setting"])
    own = found(regulated(**heavy))["regulator_setting"]
    assert refused(own)
    assert "would break a limit elsewhere" in own.note


def test_a_setpoint_that_earlier_chargers_need_is_not_offered():
    tables = regulated()
    tables["requests"].insert(0, {"request": "Q0", "node": "N", "technology": "ev", "kw": 1400})
    # Alone in the queue nobody minds; with 1400 kW charging at N the voltage there would fall low.
    assert found(tables)["regulator_setting"].kw == 1500.0
    assert judged(tables, 1400, technology="ev") >= 0
    own = found(tables, sizes={"Q0": 1400})["regulator_setting"]
    assert refused(own)
    assert "would break a limit elsewhere" in own.note


def test_a_fixed_tap_goes_step_by_step():
    tables = regulated()
    tables["regulators"][0] = {
        "regulator": "R1", "from_node": "A", "to_node": "B", "tap": 6, "rating_a": "unlimited"
    }  # fmt: skip
    own = found(tables)["regulator_setting"]
    new = int(own.setting.split("-> ")[1])
    assert own.setting == f"regulator R1: tap +6 -> {new:+d}"
    moved = [{**tables["regulators"][0], "tap": t} for t in (new, new + 1)]
    assert judged({**tables, "regulators": [moved[0]]}, 1500) >= 0
    assert judged({**tables, "regulators": [moved[1]]}, 1500) < 0


def stepped_down(kw: float = 700, *, flipped: bool = False, **more: Any) -> Tables:
    """S - A = transformer = N, the request on the 400 V side."""
    tables = two_bus(2 + 2j, **request(kw))
    tables["lines"][0]["to_node"] = "A"
    unit = {"transformer": "T1", "from_node": "A", "to_node": "N", "kva": 1000, "z_pct": 6,
            "kv_primary": 10, "kv_secondary": 0.4, "x_over_r": 3, **more}  # fmt: skip
    if flipped:  # fed from its secondary: both sides 10 kV
        unit |= {"from_node": "N", "to_node": "A", "kv_secondary": 10}
    return {**tables, "transformers": [unit]}


@pytest.mark.parametrize(("flipped", "tap"), [(False, 0.975), (True, 1.025)])
def test_a_transformer_tap(flipped: bool, tap: float):
    # 0.975 raises the secondary by 2.5 %; fed from there, 1.025 raises the primary.
    tables = stepped_down(flipped=flipped, tap_pu=tap)
    own = found(tables)["regulator_setting"]
    assert (own.setting, own.kw) == (f"transformer T1: tap_pu {tap:g} -> 1", 700.0)
    moved = [{**tables["transformers"][0], "tap_pu": 1.0}]
    assert judged({**tables, "transformers": moved}, 700) >= 0
    assert judged(tables, 700) < 0


def test_no_setting_helps_a_rating():
    tables = regulated()
    tables["lines"][1]["rating_a"] = 10
    assert "regulator_setting" not in found(tables)


def test_no_setting_carries_it():
    own = found(regulated(kw=6000))["regulator_setting"]
    assert refused(own)
