"""The figures beside a value: limit, what is measured at it, what comes next, what is there.

One line of r = 0.05 pu (5 ohm at 10 kV, base 1 MVA) and no reactance, source at 1 pu, unity
power factor: a current I in it has the source end carry p_0 = I, so it is met at I + r I^2
exported and I - r I^2 drawn; the voltage at the end is then 1 + r I and 1 - r I.  1 pu of current
is 1000 / (sqrt(3) 10) = 57.7350269190 A at 10 kV.
"""

from __future__ import annotations

from typing import Any

import pytest

from engine import Sheets, line_of, report, two_bus

Rows = list[dict[str, Any]]
WIDE = {"v_min_pu": 0.5, "v_max_pu": 1.5}
RATED_A = 23.0940107676  # 0.4 pu at 10 kV
SWITCHED: Rows = [
    {"line": "SW", "from_node": "S", "to_node": "M", "rating_a": RATED_A},
    {"line": "L", "from_node": "M", "to_node": "N", "r1_ohm": 5, "x1_ohm": 0,
     "rating_a": "unlimited"},
]  # fmt: skip
# The same 0.05 pu in a transformer to 0.4 kV; nothing else.
UNIT = {"transformer": "T", "from_node": "S", "to_node": "N", "kv_primary": 10,
        "kv_secondary": 0.4, "x_pct": 0}  # fmt: skip


def feeder(limits: dict[str, float] | None = None, **more: Any) -> dict[str, Rows]:
    return two_bus(5 + 0j, limits=WIDE | (limits or {}), **more)


def with_transformer(limits: dict[str, float] | None = None, **cells: float) -> dict[str, Rows]:
    tables = feeder(limits, transformers=[UNIT | cells])
    # A sheet of lines is required; this one leads elsewhere.
    tables["lines"][0]["to_node"] = "B"
    return tables


def with_regulator() -> dict[str, Rows]:
    tables = feeder(
        regulators=[
            {"regulator": "R", "from_node": "S", "to_node": "M", "tap": 16, "rating_a": RATED_A}
        ]
    )
    tables["lines"][0]["from_node"] = "M"
    return tables


CASES: dict[str, tuple[Sheets, str, str, str, float, str, float]] = {
    # The curved ones: closed form in test_rows.py.
    "voltage_high": (two_bus(), "pv", "voltage_high", "N", 1.05, "pu", 1077.6699562),
    "voltage_low": (two_bus(), "ev", "voltage_low", "N", 0.95, "pu", 927.3552489),
    # 1 + r I = 1.03, I = 0.6: 0.6 + 0.05 x 0.36
    "voltage_change up": (
        feeder({"voltage_change_mv_pct": 3}), "pv", "voltage_change", "N", 3.0, "%", 618.0,
    ),
    "voltage_change down": (
        feeder({"voltage_change_mv_pct": 3}), "ev", "voltage_change", "N", 3.0, "%", 582.0,
    ),
    # 20 MVA is 0.05 pu more, resistive: 0.1 I = 0.03, I = 0.3; 0.3 x 1.03
    "voltage_change behind the source": (
        feeder({"voltage_change_mv_pct": 3}, source={"short_circuit_mva": 20, "x_over_r": 0}),
        "pv", "voltage_change", "N", 3.0, "%", 309.0,
    ),
    # 10 % on 2000 kVA is 0.05 pu: 0.05 I = 0.05, I = 1; 1 + 0.05
    "voltage_change at low voltage": (
        with_transformer({"voltage_change_mv_pct": 3, "voltage_change_lv_pct": 5}, kva=2000,
                         r_pct=10),
        "pv", "voltage_change", "N", 5.0, "%", 1050.0,
    ),
    "line_rating exported": (
        feeder(rating_a=RATED_A), "pv", "line_rating", "L", 23.0940107676, "A", 408.0,
    ),
    "line_rating drawn": (
        feeder(rating_a=RATED_A), "ev", "line_rating", "L", 23.0940107676, "A", 392.0,
    ),
    # I = 0.2: 0.2 + 0.05 x 0.04
    "line_rating at 50 % loading": (
        feeder({"line_loading_pct": 50}, rating_a=RATED_A), "pv", "line_rating", "L",
        11.5470053838, "A", 202.0,
    ),
    # A switch has no impedance; its rating counts all the same.
    "line_rating of a switch": (
        feeder() | {"lines": SWITCHED}, "pv", "line_rating", "SW", 23.0940107676, "A", 408.0,
    ),
    # 2 % on 400 kVA is 0.05 pu.  The tap has the primary carry more: 0.4 there, 0.39 below; the
    # voltage behind the ratio is 1/0.975: 0.39/0.975 + 0.05 x 0.39^2.  400 kVA at 10 kV: 23.094 A.
    "transformer_rating": (
        with_transformer(kva=400, r_pct=2, tap_pu=0.975), "pv", "transformer_rating", "T",
        23.0940107676, "A", 407.605,
    ),
    # Tapped the other way the secondary carries more: 0.4 there, voltage 1/1.025 behind the
    # ratio: 0.4/1.025 + 0.05 x 0.16.  400 kVA at 0.4 kV: 577.35 A.
    "transformer_rating at the secondary": (
        with_transformer(kva=400, r_pct=2, tap_pu=1.025), "pv", "transformer_rating", "T",
        577.3502691896, "A", 398.2439024,
    ),
    # 0.48 at the primary at 120 %, 0.468 below: 0.468/0.975 + 0.05 x 0.468^2
    "transformer_rating at 120 % loading": (
        with_transformer({"transformer_loading_pct": 120}, kva=400, r_pct=2, tap_pu=0.975), "pv",
        "transformer_rating", "T", 27.7128129211, "A", 490.9512,
    ),
    # Sixteen steps up are 1.1: 0.4 at the source side, 0.4/1.1 behind; 0.4 + 0.05 (0.4/1.1)^2
    "regulator_rating": (
        with_regulator(), "pv", "regulator_rating", "R", 23.0940107676, "A", 406.6115702,
    ),
    "bank_rating": (
        feeder(source={"transformer_kva": 400}), "pv", "bank_rating", "S", 400.0, "kVA", 408.0,
    ),
    # 100 kW of others are drawn: 0.5 exported; 0.5 + 0.05 x 0.25
    "bank_rating with others": (
        feeder(source={"transformer_kva": 400}, case={"bank_other_kw": 100}), "pv", "bank_rating",
        "S", 400.0, "kVA", 512.5,
    ),
    # 300 kvar of others: sqrt(0.5^2 - 0.3^2) = 0.4
    "bank_rating with reactive others": (
        feeder(source={"transformer_kva": 500}, case={"bank_other_kvar": 300}), "ev",
        "bank_rating", "S", 500.0, "kVA", 392.0,
    ),
    # 0.6 - 0.05 x 0.36
    "bank_rating at 150 % loading": (
        feeder({"transformer_loading_pct": 150}, source={"transformer_kva": 400}), "ev",
        "bank_rating", "S", 600.0, "kVA", 582.0,
    ),
    "head_export": (
        feeder(source={"export_limit_kw": 400}), "pv", "head_export", "S", 400.0, "kW", 408.0,
    ),
    "head_import": (
        feeder(source={"import_limit_kw": 400}), "ev", "head_import", "S", 400.0, "kW", 392.0,
    ),
    "the lower of two head limits": (
        feeder({"export_limit_kw": 400}, source={"export_limit_kw": 500}), "pv", "head_export",
        "S", 400.0, "kW", 408.0,
    ),
}  # fmt: skip


@pytest.mark.parametrize(
    ("tables", "technology", "criterion", "element", "limit", "unit", "kw"),
    CASES.values(),
    ids=CASES,
)
def test_the_limit_met_first(
    tables: Sheets, technology: str, criterion: str, element: str, limit: float, unit: str,
    kw: float,
) -> None:  # fmt: skip
    answer = report(tables)
    found = line_of(answer.tables["hosting"], "N", technology)
    assert (found["criterion"], found["element"], found["unit"]) == (criterion, element, unit)
    assert found["limit_value"] == pytest.approx(limit, rel=1e-9)
    # Measured at the unrounded value, where the limit is just met.
    assert found["value_at_limit"] == pytest.approx(limit, rel=1e-7)
    assert found["hosting_unrounded_kw"] == pytest.approx(kw, rel=1e-7)
    assert (found["state"], found["proof"], found["case"]) == ("hosted", "proven", "only")
    assert found["element_phase"] is None
    alone = line_of(answer.tables["criteria"], "N", technology)
    assert alone[f"{criterion}_kw"] == found["hosting_unrounded_kw"]


def test_flags_of_a_bank_that_may_be_shared() -> None:
    shared = "bank may be shared with other feeders"
    hosting = report(feeder(source={"transformer_kva": 400})).tables["hosting"]
    assert shared in line_of(hosting, "N", "pv")["flags"]
    told = feeder(source={"transformer_kva": 400}, case={"bank_other_kw": 0})
    assert shared not in line_of(report(told).tables["hosting"], "N", "pv")["flags"]


def test_a_feeder_that_may_not_export() -> None:
    # Unity power factor: at 200 kW nothing flows at all, and the head is at its limit of zero.
    tables = feeder(
        source={"export_limit_kw": 0}, loads=[{"node": "N", "kw": 200}], case={"ev_scale": 0}
    )
    tables["candidates"] = [{"node": "N", "technology": "pv"}]
    answer = report(tables)
    found = line_of(answer.tables["hosting"], "N", "pv")
    assert (found["criterion"], found["limit_value"]) == ("head_export", 0.0)
    assert found["hosting_unrounded_kw"] == pytest.approx(200, rel=1e-7)
    assert found["value_at_limit"] == pytest.approx(0, abs=1e-4)
    assert (found["proof"], answer.exit_code) == ("proven", 0)


def test_a_feeder_that_may_not_export_and_has_no_load() -> None:
    found = line_of(report(feeder(source={"export_limit_kw": 0})).tables["hosting"], "N", "pv")
    assert (found["state"], found["criterion"]) == ("hosted", "head_export")
    assert (found["hosting_kw"], found["hosting_kva"]) == (0.0, 0.0)
    assert found["hosting_unrounded_kw"] == pytest.approx(0, abs=1e-4)


# --- what comes next ----------------------------------------------------------------------------

# r = x = 0.05: a squared current L is met at L r + sqrt(L^2 r^2 + L (1 - |z|^2 L)), L = 1.44
# (69.282 A) at 1269.8380525 kW, L = 0.16 (23.094 A) at 8 + sqrt(0.159936) = 407.9199960 kW.
SECOND = (1269.8380525, 69.2820323028)
FIRST = (407.9199960, RATED_A)


@pytest.mark.parametrize(
    ("rating", "first", "second", "second_kw"),
    [
        (SECOND[1], "voltage_high", "line_rating", SECOND[0]),
        (FIRST[1], "line_rating", "voltage_high", 1077.6699562),
    ],
)
def test_the_criterion_met_next(rating: float, first: str, second: str, second_kw: float) -> None:
    # A third, later one is not named.
    tables = two_bus(rating_a=rating, source={"export_limit_kw": 5000})
    answer = report(tables)
    found = line_of(answer.tables["hosting"], "N", "pv")
    assert (found["criterion"], found["next_criterion"]) == (first, second)
    assert found["next_kw"] == pytest.approx(second_kw, rel=1e-8)
    alone = line_of(answer.tables["criteria"], "N", "pv")
    assert alone[f"{second}_kw"] == found["next_kw"]
    assert alone["head_export_kw"] > found["next_kw"] > found["hosting_unrounded_kw"]


def test_no_criterion_is_met_next_up_to_the_cap() -> None:
    found = line_of(report(two_bus(limits={"search_cap_kw": 1200})).tables["hosting"], "N", "pv")
    assert (found["criterion"], found["next_criterion"]) == ("voltage_high", None)
    assert found["next_kw"] is None


def test_a_criterion_alone_may_be_met_after_the_hosting() -> None:
    # Of low voltage there is no end of exports; line and voltage as above.
    alone = line_of(report(two_bus(rating_a=SECOND[1])).tables["criteria"], "N", "pv")
    met = {k: v for k, v in alone.items() if k.endswith("_kw") and v is not None}
    assert sorted(met) == ["line_rating_kw", "voltage_high_kw"]
    assert met["line_rating_kw"] == pytest.approx(SECOND[0], rel=1e-8)


# --- what is there ------------------------------------------------------------------------------

LOADED = feeder(loads=[{"node": "N", "kw": 200}])


def reverse(tables: Sheets, technology: str = "pv") -> float | None:
    return line_of(report(tables).tables["hosting"], "N", technology)["reverse_at_head_kw"]


def test_the_head_turns_where_the_load_is_met() -> None:
    # At no flow there is no loss: 200 kW, with 50 kW there 150 kW.
    assert reverse(LOADED) == pytest.approx(200, rel=1e-8)
    assert reverse(LOADED, "ev") is None
    there = LOADED | {"generators": [{"node": "N", "kw": 50}]}
    assert reverse(there) == pytest.approx(150, rel=1e-8)


def test_the_head_turns_in_any_case() -> None:
    # 0.4 x 200 kW met by 0.8 of the rating: 100 kW, though hosting is decided elsewhere.
    cases = [{"case": "full", "pv_scale": 1.0}, {"case": "low", "load_scale": 0.4, "pv_scale": 0.8},
             {"case": "night", "load_scale": 0.1}]  # fmt: skip
    assert reverse(LOADED | {"cases": cases}) == pytest.approx(100, rel=1e-8)


def test_a_head_that_exports_already_turns_at_nothing() -> None:
    assert reverse(LOADED | {"generators": [{"node": "N", "kw": 300}]}) == 0.0


def test_a_capped_row_says_where_the_head_turns_and_blank_where_it_does_not() -> None:
    limits = [{"limit": "search_cap_kw", "value": 300}, {"limit": "voltage_change_mv_pct",
                                                         "value": 0}]  # fmt: skip
    assert reverse(LOADED | {"limits": limits}) == pytest.approx(200, rel=1e-8)
    limits[0] = {"limit": "search_cap_kw", "value": 150}
    assert reverse(LOADED | {"limits": limits}) is None


def test_existing_kw_is_what_is_connected_and_approved_at_the_node() -> None:
    there = [{"node": "N", "kw": 12}, {"node": "N", "kw": 8, "status": "approved"}]
    tables = feeder(generators=there) | {"lines": SWITCHED}
    hosting = report(tables).tables["hosting"]
    assert line_of(hosting, "N", "pv")["existing_kw"] == 20.0
    assert line_of(hosting, "N", "ev")["existing_kw"] == 20.0
    assert line_of(hosting, "M", "pv")["existing_kw"] == 0.0


def test_input_grade_is_the_worst_basis_of_the_cases_that_count() -> None:
    cases = [
        {"case": "noon", "pv_scale": 1, "basis": "measured"},
        {"case": "evening", "ev_scale": 1, "pv_scale": 0.1},
        {"case": "winter", "ev_scale": 0.5, "basis": "measured"},
        {"case": "worst", "load_scale": 1, "basis": "assumed"},
    ]
    own = [{"node": "N", "technology": t} for t in ("pv", "ev", "storage")]
    hosting = report(LOADED | {"cases": cases, "candidates": own}).tables["hosting"]
    assert line_of(hosting, "N", "ev")["input_grade"] == "estimated"
    assert line_of(hosting, "N", "storage")["input_grade"] == "assumed"
    cases[1]["pv_scale"] = 0
    hosting = report(LOADED | {"cases": cases, "candidates": own}).tables["hosting"]
    assert line_of(hosting, "N", "pv")["input_grade"] == "measured"


def test_input_grade_without_cases_is_assumed() -> None:
    tables = {k: v for k, v in LOADED.items() if k not in ("cases", "limits")}
    hosting = report(tables).tables["hosting"]
    assert set(hosting["input_grade"]) == {"assumed"}
    # Charging at peak; sun at 30 % load.
    assert line_of(hosting, "N", "ev")["case"] == "peak"
    assert line_of(hosting, "N", "pv")["case"] == "light"
