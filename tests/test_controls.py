"""Volt-var and volt-watt as alternatives, against bisection on closed forms."""

from __future__ import annotations

import math
from typing import Any

import pytest

from asked import (
    NO_VARS,
    first_size,
    found,
    refused,
    request,
)
from engine import two_bus
from two_bus_forms import bisect, volt_var, volt_watt, voltage

# --- volt-var -------------------------------------------------------------------------------------


def test_volt_var_carries_what_is_asked():
    own = found(two_bus(3 + 6j, **request()))["volt_var"]
    assert (own.kw, own.criterion, own.proof) == (2500.0, "", "ac_only")
    assert own.setting == "IEEE 1547-2018 category B default"
    # 2500 * sqrt(1 + 0.44^2) = 2731.3
    assert "2,731.3 kVA" in own.note


def test_volt_var_carries_a_part():
    # At 1.05 pu the curve asks for -0.22 S, and S is the size itself.
    size = first_size(0.03, 0.03, lambda p: -0.22 * p)
    own = found(two_bus(3 + 3j, **request(3000)))["volt_var"]
    assert (own.kw, own.criterion) == (math.floor(size), "voltage_high")
    assert NO_VARS < own.kw < 3000


def test_vars_go_first_behind_a_small_inverter():
    def gap(q: float) -> float:
        return volt_var(voltage(0.03, 0.06, math.sqrt(2.5**2 - q**2), q)) * 2.5 - q

    p = math.sqrt(2.5**2 - bisect(gap, -1.1, 1.1) ** 2)
    own = found(two_bus(3 + 6j, **request(inverter_kva=2500)))["volt_var"]
    assert (own.kw, own.criterion) == (math.floor(1e3 * p), "inverter_kva")
    assert f"leaves {1e3 * p:,.1f} of 2,500 kW" in own.note


def curve(name: str, *points: tuple[float, float]) -> list[dict[str, Any]]:
    return [{"curve": name, "v_pu": v, "q_pu": q} for v, q in points]


def test_a_curve_of_the_workbook_comes_first():
    # From 1.00 to 1.05 down to -0.1: at 1.05 pu a tenth of S.
    size = first_size(0.03, 0.03, lambda p: -0.1 * p)
    tables = two_bus(3 + 3j, **request(3000), curves=curve("house", (1.05, -0.1), (1.0, 0.0)))
    own = found(tables)["volt_var"]
    assert (own.setting, own.kw) == ("curve house", math.floor(size))


def test_of_two_curves_the_one_that_carries_more():
    tables = two_bus(
        3 + 3j, **request(3000),
        curves=[*curve("weak", (1.0, 0.0), (1.05, -0.1)), *curve("strong", (1.0, 0), (1.05, -0.2))],
    )  # fmt: skip
    assert found(tables)["volt_var"].setting == "curve strong"


@pytest.mark.parametrize(
    ("points", "why"),
    [([(1.0, 0.0)], "two points"), ([(1.0, 0.0), (1.05, 0.2)], "rises"),
     ([(1.0, 0.0), (1.0, -0.2)], "two points")],
)  # fmt: skip
def test_a_curve_that_is_none(points: list[tuple[float, float]], why: str):
    own = found(two_bus(3 + 6j, **request(), curves=curve("odd", *points)))["volt_var"]
    assert refused(own)
    assert why in own.note


def test_a_hunting_inverter_is_not_offered():
    # Slope 0.88 / 0.002 times S x = 2.5 * 0.06: a loop gain of 66.
    tables = two_bus(3 + 6j, **request(), curves=curve("steep", (1.039, 0.44), (1.041, -0.44)))
    own = found(tables)["volt_var"]
    assert refused(own)
    assert "hunts" in own.note


def test_the_chargers_of_a_site_are_not_helped_by_its_inverter():
    # PV of 500 kW fits; 2000 kW of charging at the same site do not, and no curve acts there.
    tables = two_bus(3 + 6j, **request(500))
    tables["requests"].append({**tables["requests"][0], "technology": "ev", "kw": 2000})
    rows = found(tables)
    assert rows["smaller_size"].criterion == "voltage_low"
    for name in ("fixed_power_factor", "volt_var", "volt_watt"):
        assert refused(rows[name])
        assert rows[name].criterion in ("", "voltage_low")


def test_an_export_limit_counts_with_a_curve_too():
    # Half of 3000 kW is the most that leaves: q is -0.22 or less of the rated 3000 all the same.
    tables = two_bus(3 + 6j, **request(3000, export_limit_kw=2100))
    own = found(tables)["volt_var"]
    assert own.kw == 3000.0

    def gap(q: float) -> float:
        return volt_var(voltage(0.03, 0.06, 2.1, q)) * 3.0 - q

    assert voltage(0.03, 0.06, 2.1, bisect(gap, -1.32, 1.32)) <= 1.05


STORAGE = {"limits": {"voltage_change_mv_pct": 3}, "case": {"load_scale": 1}}


def test_the_swing_of_storage_with_its_curve_followed():
    # Without a dead band the curve works on both ends: V(out) - V(in) = 0.03.
    def end(p: float, size: float) -> float:
        def gap(q: float) -> float:
            share = 0.44 * min(max((1.0 - voltage(0.03, 0.06, p, q)) / 0.08, -1.0), 1.0)
            return share * size - q

        return voltage(0.03, 0.06, p, bisect(gap, -0.44 * size, 0.44 * size))

    size = 1e3 * bisect(lambda s: 0.03 - end(s, s) + end(-s, s), 0.0, 2.0)
    plain = 1e3 * bisect(
        lambda s: 0.03 - voltage(0.03, 0.06, s, 0) + voltage(0.03, 0.06, -s, 0), 0.0, 2.0
    )
    tables = two_bus(
        3 + 6j, **STORAGE, **request(900, technology="storage"),
        curves=curve("straight", (0.92, 0.44), (1.08, -0.44)),
    )  # fmt: skip
    rows = found(tables)
    assert rows["smaller_size"].kw == math.floor(plain)
    assert rows["volt_var"].criterion == "voltage_change"
    assert rows["volt_var"].kw == math.floor(size)
    assert size > plain + 50


# --- volt-watt ------------------------------------------------------------------------------------


HIGH = {"limits": {"v_max_pu": 1.10}, "source": {"voltage_pu": 1.05}}


def test_only_what_volt_watt_leaves_is_firm():
    def gap(g: float) -> float:
        return volt_watt(voltage(0.05, 0.05, g, 0.0, 1.05)) * 1.5 - g

    kept = bisect(gap, 0.0, 1.5)
    assert voltage(0.05, 0.05, 1.5, 0.0, 1.05) > 1.10 > voltage(0.05, 0.05, kept, 0.0, 1.05)
    own = found(two_bus(5 + 5j, **HIGH, case={"hours": 400}, **request(1500)))["volt_watt"]
    assert own.kw == math.floor(1e3 * kept)
    assert own.criterion == "voltage_high"
    assert f"up to {100 * (1 - kept / 1.5):.1f} % is curtailed (case only)" in own.note
    # 400 h of what is held back, in MWh.
    assert own.energy_lost_mwh == pytest.approx(400 * (1.5 - kept), abs=1e-4)


def test_without_hours_no_energy():
    own = found(two_bus(5 + 5j, **HIGH, **request(1500)))["volt_watt"]
    assert not math.isnan(own.kw)
    assert math.isnan(own.energy_lost_mwh)


def test_volt_watt_starts_above_the_limit():
    own = found(two_bus(3 + 6j, **request()))["volt_watt"]
    assert refused(own)
    assert "1.06 pu" in own.note
