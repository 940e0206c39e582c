"""The sheets beside `hosting`: base, base_cases, profile, conditions, summary, run, timing.

Feeders of one or two lines at 10 kV, base 1 MVA (100 ohm is 1 pu); figures are closed forms.
"""

from __future__ import annotations

from dataclasses import fields
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from feederhost.schema import RESULT
from feederhost.settings import Settings
from feederhost.sheets.template import write_input
from feederhost.study.options import Options
from feederhost.study.reports import Report, check_report, host_report

from engine import report, two_bus

Rows = list[dict[str, Any]]
HOST_SHEETS = (
    "summary", "hosting", "criteria", "relaxation", "conditions", "audit", "base", "base_cases",
    "profile", "run", "timing",
)  # fmt: skip
LOAD_600: Rows = [{"node": "N", "kw": 600}]
CHAIN: Rows = [
    {"line": "L1", "from_node": "S", "to_node": "A", "length_km": 1, "r1_ohm": 1, "x1_ohm": 0,
     "rating_a": "unlimited"},
    {"line": "L2", "from_node": "A", "to_node": "B", "length_km": 0.5, "r1_ohm": 1, "x1_ohm": 0,
     "rating_a": 500},
]  # fmt: skip


def records(answer: Report, sheet: str) -> Rows:
    return answer.tables[sheet].to_dict("records")


def values(answer: Report, key: str, sheet: str = "summary") -> list[Any]:
    table = answer.tables[sheet]
    return table.loc[table["key"] == key, "value"].tolist()


# --- base ---------------------------------------------------------------------------------------


def test_base_voltages_and_what_is_broken() -> None:
    # 0.05 pu, no reactance, load 0.6: I - 0.05 I^2 = 0.6, I = 0.6191684804; 1 - 0.05 I.
    # 30 A allow 0.5196 pu; the lower limit is 0.98.
    tables = two_bus(5 + 0j, rating_a=30, limits={"v_min_pu": 0.98}, loads=LOAD_600)
    source, end = records(report(tables), "base")
    assert source == {"case": "only", "node": "S", "voltage_pu": 1.0, "angle_deg": 0.0,
                      "violation": ""}  # fmt: skip
    assert (end["case"], end["node"], end["angle_deg"]) == ("only", "N", 0.0)
    assert end["voltage_pu"] == pytest.approx(0.9690415760, rel=1e-9)
    assert end["violation"] == "voltage_low; line_rating L"


def test_base_angle() -> None:
    # r = x = 0.05, load 0.4: v^2 - 0.96 v + 0.0008 = 0, V = 0.9793702 (upper root), and
    # V_0 V sin(angle) = -x p = -0.02.
    _, end = records(report(two_bus(loads=[{"node": "N", "kw": 400}])), "base")
    assert end["voltage_pu"] == pytest.approx(0.9793701762, rel=1e-9)
    assert end["angle_deg"] == pytest.approx(-1.1701349293, rel=1e-8)


def test_base_cases() -> None:
    # As above: loss and head 619.1684804 - 600 and 619.1684804 kW; 35.7477089 of 30 A.
    tables = two_bus(5 + 0j, rating_a=30, limits={"v_min_pu": 0.9}, loads=LOAD_600)
    (case,) = records(report(tables), "base_cases")
    assert case["case"] == "only"
    assert case["loss_kw"] == pytest.approx(19.1684803531, rel=1e-8)
    assert case["head_kw"] == pytest.approx(619.1684803531, rel=1e-9)
    assert (case["loss_kvar"], case["head_kvar"]) == (0.0, 0.0)
    assert case["lowest_pu"] == pytest.approx(0.9690415760, rel=1e-9)
    assert (case["lowest_node"], case["highest_node"], case["highest_pu"]) == ("N", "S", 1.0)
    assert case["worst_loading_pct"] == pytest.approx(119.1590296, rel=1e-8)
    assert (case["worst_element"], case["taps"]) == ("L", "")


def test_base_cases_without_any_rating() -> None:
    (case,) = records(report(two_bus()), "base_cases")
    assert (case["worst_loading_pct"], case["worst_element"]) == (None, "")


def test_base_cases_show_the_taps_found_and_hosting_the_held_ratio() -> None:
    # Source at 0.97, set point 1.00 +- 0.01: four steps of 0.00625 give 0.99425 (three: 0.9881875).
    # Exports: held at the upper edge, 1.01 at the regulated node; imports at the lower, 0.99.
    tables = two_bus(
        5 + 0j,
        source={"voltage_pu": 0.97},
        regulators=[{"regulator": "R", "from_node": "S", "to_node": "M", "setpoint_pu": 1.0,
                     "bandwidth_pu": 0.02, "rating_a": "unlimited"}],
    )  # fmt: skip
    tables["lines"][0]["from_node"] = "M"
    answer = report(tables)
    (case,) = records(answer, "base_cases")
    assert case["taps"] == "R +4"
    at_m = next(r for r in records(answer, "base") if r["node"] == "M")
    assert at_m["voltage_pu"] == pytest.approx(0.97 * 1.025, rel=1e-12)
    # From 1.01 to 1.05 behind ratio 1.01/0.97: 0.04 = 0.05 I, I = 0.8, 0.8 x 1.05; from 0.99
    # to 0.95: I = 0.8, 0.8 x 0.95.
    kw = {(r["node"], r["technology"]): r["hosting_unrounded_kw"] for r in
          records(answer, "hosting")}  # fmt: skip
    assert kw["N", "pv"] == pytest.approx(840, rel=1e-7)
    assert kw["N", "ev"] == pytest.approx(760, rel=1e-7)


FIVE: Rows = [
    {"case": "morning", "load_scale": 0.6, "ev_scale": 0.2},
    {"case": "noon", "load_scale": 0.3, "pv_scale": 1.0},
    {"case": "afternoon", "load_scale": 0.5, "pv_scale": 0.5, "source_voltage_pu": 1.01},
    {"case": "evening", "load_scale": 0.8, "ev_scale": 1.0},
    {"case": "feast", "load_scale": 1.0},
]
FIVE_CASES = two_bus(5 + 0j, limits={"v_min_pu": 0.9}, loads=LOAD_600) | {"cases": FIVE}


def test_base_lists_every_case_up_to_its_budget() -> None:
    answer = report(FIVE_CASES, base_cells=10)
    assert answer.tables["base"]["case"].tolist() == [c["case"] for c in FIVE for _ in "SN"]
    assert values(answer, "base") == []


def test_base_beyond_its_budget_lists_binding_cases_and_the_extremes() -> None:
    # Binding: noon for pv, evening for ev; lowest voltage at the feast, highest (at the source)
    # in the afternoon.
    answer = report(FIVE_CASES, base_cells=9)
    listed = answer.tables["base"]["case"].tolist()
    assert list(dict.fromkeys(listed)) == ["noon", "afternoon", "evening", "feast"]
    assert len(listed) == 8
    assert answer.tables["base_cases"]["case"].tolist() == [c["case"] for c in FIVE]
    (said,) = values(answer, "base")
    assert "binding cases" in said


# --- profile ------------------------------------------------------------------------------------


def test_profile_of_the_worst_node_of_each_technology() -> None:
    # 0.01 + 0.01 pu: at B twice the resistance, so B is the worst; the voltage between rises
    # by half.
    answer = report(two_bus() | {"lines": CHAIN})
    table = answer.tables["profile"]
    assert table["node"].tolist() == ["S", "A", "B"] * 2
    assert table["distance_km"].tolist() == [0.0, 1.0, 1.5] * 2
    assert table["technology"].tolist() == ["pv"] * 3 + ["ev"] * 3
    assert set(table["plant_node"]) == {"B"}
    assert set(table["case"]) == {"only"}
    assert table["base_pu"].tolist() == [1.0] * 6
    assert table["hosting_pu"].tolist() == pytest.approx([1, 1.025, 1.05, 1, 0.975, 0.95])
    assert (set(table["v_min_pu"]), set(table["v_max_pu"])) == ({0.95}, {1.05})


# --- conditions ---------------------------------------------------------------------------------

FEEDER_LINES = (
    "radial", "r > 0 and x >= 0", "loads may be over-satisfied", "C1", "C2",
)  # fmt: skip
ROW_LINES = (
    "objective: every loss price", "objective: the priced objective still rises", "C1", "C2",
    "fictitious loss below tolerance", "AC recovery: power mismatch",
    "AC recovery: every limit holds",
)  # fmt: skip


def line(answer: Report, scope: str, start: str) -> dict[str, Any]:
    (found,) = (
        r for r in records(answer, "conditions")
        if r["scope"].startswith(scope) and r["condition"].startswith(start)
    )  # fmt: skip
    return found


def test_conditions_of_host_speak_of_the_feeder_and_of_its_worst_row() -> None:
    answer = report(two_bus() | {"lines": CHAIN})
    table = answer.tables["conditions"]
    assert [len(FEEDER_LINES), len(ROW_LINES)] == [
        table["scope"].str.startswith("feeder").sum(), (table["scope"] == "worst row").sum(),
    ]  # fmt: skip
    for start in FEEDER_LINES:
        assert line(answer, "feeder", start)["reference"]
    for start in ROW_LINES:
        found = line(answer, "worst row", start)
        assert found["reference"]
        assert found["where"].split(" ")[0] in ("A", "B")
        assert found["holds"] == ("no" if start == "C2" else "yes")


def test_conditions_of_check_have_no_plant() -> None:
    answer = report(two_bus() | {"lines": CHAIN}, check=True)
    table = answer.tables["conditions"]
    assert len(table) == len(FEEDER_LINES)
    assert table["scope"].str.startswith("feeder").all()
    assert sorted(answer.tables) == ["audit", "base", "base_cases", "conditions", "run"]


def test_margins_of_the_published_conditions() -> None:
    # Without reactance the voltage 1.05 is met at I = 0.05/0.01 = 5 at A: 5.25 pu.  C1, path A-B:
    # 1 - 2 r_A a_A / v_min^2 = 1 - 2 x 0.01 x 5.25 / 0.9025.  C2: lossless 1 + 2 x 0.01 x 5.25 at
    # A, against 1.05^2; at B (I = 2.5, 2.625 pu) 1 + 2 x 0.02 x 2.625: the same.
    answer = report(two_bus() | {"lines": CHAIN})
    c1, c2 = line(answer, "worst row", "C1"), line(answer, "worst row", "C2")
    assert (c1["holds"], c1["where"]) == ("yes", "A pv")
    assert c1["margin"] == pytest.approx(0.8836565097, rel=1e-7)
    assert c2["holds"] == "no"
    assert c2["margin"] == pytest.approx(1.05**2 - 1.105, rel=1e-5)
    # Nothing added: no reverse flow, and 1.05^2 - 1.
    c1, c2 = line(answer, "feeder", "C1"), line(answer, "feeder", "C2")
    assert (c1["holds"], c1["margin"]) == ("yes", 1.0)
    assert (c2["holds"], c2["margin"]) == ("yes", pytest.approx(0.1025, rel=1e-9))
    assert line(answer, "feeder", "r > 0")["margin"] == pytest.approx(0.01)


def test_a_line_without_resistance_breaks_the_second_condition() -> None:
    answer = report(two_bus(0 + 5j), check=True)
    found = line(answer, "feeder", "r > 0")
    assert (found["holds"], found["margin"], found["where"]) == ("no", 0.0, "L")


def test_conditions_that_are_not_needed_say_so() -> None:
    found = line(report(two_bus(), check=True), "feeder", "loads may be over-satisfied")
    assert found["holds"] == "not needed"
    assert "not met" in found["where"]


def test_without_any_hosted_row_only_the_feeder_is_spoken_of() -> None:
    answer = report(two_bus(limits={"search_cap_kw": 200}))
    assert set(answer.tables["hosting"]["state"]) == {"capped"}
    assert len(answer.tables["conditions"]) == len(FEEDER_LINES)


# --- summary ------------------------------------------------------------------------------------


def test_summary_lists_unlimited_elements() -> None:
    tables = two_bus() | {"lines": CHAIN}
    assert values(report(tables), "unlimited elements") == ["L1"]
    tables["lines"] = [r | {"rating_a": 500} for r in CHAIN]
    assert values(report(tables), "unlimited elements") == ["none"]


def test_summary_counts_states_and_proofs() -> None:
    own = [{"node": "A", "technology": "pv"}, {"node": "B", "technology": "pv"},
           {"node": "B", "technology": "ev", "max_kw": 50}]  # fmt: skip
    tables = two_bus(candidates=own, limits={"rounding_kw": 10}) | {"lines": CHAIN}
    answer = report(tables)
    assert values(answer, "state hosted") == [2]
    assert values(answer, "state capped") == [1]
    assert values(answer, "proof proven") == [2]
    assert values(answer, "proof not_needed") == [1]
    # 2.625 and 5.25 MW, as above, just reached; the median of two is their mean.
    (sentence,) = values(answer, "hosting pv")
    assert "smallest 2,620 kW at B" in sentence
    assert "largest 5,240 kW at A" in sentence
    assert "median 3,930 kW" in sentence
    assert "voltage_high 2" in sentence


def test_summary_names_dates_cases_limits_and_what_is_not_covered() -> None:
    tables = two_bus(source={"feeder": "Mill", "data_date": "2026-11-01",
                             "switching_state": "normal", "transformer_kva": 5000,
                             "export_limit_kw": 700}, limits={"v_max_pu": 1.04})  # fmt: skip
    answer = report(tables)
    assert values(answer, "feeder") == ["Mill"]
    assert values(answer, "data_date") == ["2026-11-01"]
    assert values(answer, "switching_state") == ["normal"]
    assert values(answer, "case") == ["only (basis estimated)"]
    assert values(answer, "limit v_max_pu") == ["1.04 pu"]
    assert values(answer, "limit head export") == ["700 kW"]
    assert values(answer, "limit bank rating") == ["5000 kVA"]
    assert any("protection" in text for text in values(answer, "not covered"))
    assert any("data date: 2026-11-01" in text for text in values(answer, "caution"))


@pytest.mark.parametrize("options", [Options(), Options(cases=("only",))], ids=["all", "one case"])
def test_the_first_caution_is_that_the_feeder_was_judged_balanced(options: Options) -> None:
    cautions = values(report(two_bus(), options), "caution")
    assert cautions[0].startswith("not valid on single-phase laterals")


# --- run, timing --------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def path(tmp_path_factory: pytest.TempPathFactory) -> Path:
    place = tmp_path_factory.mktemp("run") / "mill.xlsx"
    write_input(two_bus(loads=LOAD_600), place)
    return place


def test_run_carries_every_setting_and_the_digest_of_every_sheet(path: Path) -> None:
    answer = host_report(path, Options())
    run = {r["key"]: r["value"] for r in records(answer, "run")}
    shown = {k.removeprefix("setting ") for k in run if k.startswith("setting ")}
    assert shown == {f.name for f in fields(Settings)}
    assert run["setting v_max_pu"] == 1.05
    assert run["setting search_cap_kw"] == 20000
    assert run["setting export_limit_kw"] == "none"
    assert run["setting recursion_tolerance"] == 1e-8
    digests = {k.removeprefix("sha256 "): v for k, v in run.items() if k.startswith("sha256 ")}
    assert sorted(digests) == ["cases", "limits", "lines", "loads", "source"]
    assert {len(v) for v in digests.values()} == {64}
    assert run["solver"] in ("ecos", "clarabel")
    for library in ("feederhost", "python", "numpy", "cvxpy"):
        assert run[library][0].isdigit()


def test_a_setting_of_the_workbook_is_the_one_on_record() -> None:
    answer = report(two_bus(limits={"v_max_pu": 1.04, "export_limit_kw": 900}))
    assert values(answer, "setting v_max_pu", "run") == [1.04]
    assert values(answer, "setting export_limit_kw", "run") == [900]


def test_times_stand_on_the_sheet_timing_and_nowhere_else(path: Path) -> None:
    first, second = (host_report(path, Options()).tables for _ in range(2))
    assert tuple(first) == HOST_SHEETS
    assert "started" in first["timing"]["key"].tolist()
    for sheet in set(first) - {"timing"}:
        pd.testing.assert_frame_equal(first[sheet], second[sheet])


def test_run_of_a_check(path: Path) -> None:
    answer = check_report(path, Options())
    run = {r["key"] for r in records(answer, "run")}
    assert {f"setting {f.name}" for f in fields(Settings)} <= run
    assert "timing" not in answer.tables


def test_every_sheet_has_the_columns_of_the_schema(path: Path) -> None:
    for name, table in host_report(path, Options()).tables.items():
        assert tuple(table.columns) == RESULT[name].names
