"""What a row of the answer says: state and proof, one after the other as in the table of states.

The feeders have one line; their figures are closed forms.  Per unit on 1 MVA, source at v_0 = 1,
line r + jx, |z|^2 = r^2 + x^2, rating p at its end, all squared voltages:

    v = v_0 + 2 r p - |z|^2 p^2 / v        (p exported; p < 0 drawn; unity power factor)

so an upper limit w = v_max^2 is met at p = w [r - sqrt(r^2 - |z|^2 (1 - v_0/w))] / |z|^2, and a
lower one at the same with w = v_min^2, where p < 0.  At x = 0 a current I in the line is met at
p = I + r I^2 exported, p = I - r I^2 drawn, because the source end carries p_0 = I.
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner
from feederhost.cli import main
from feederhost.flow.search import FirstViolations, first_violations, slacks_with
from feederhost.proof.valuing import solve_row
from feederhost.schema import RESULT
from feederhost.sheets.reading import read_workbook
from feederhost.sheets.template import write_input
from feederhost.study.nodal import rounded_down
from hypothesis import example, given, settings
from hypothesis import strategies as st

from engine import Sheets, build, line_of, report, swap, two_bus

# r = x = 0.05 pu, limit 1.05 pu: the closed form above, 1.0776699562 pu.
EXPORT_KW = 1077.6699562
# The same line, lower limit 0.95 pu: w = 0.9025, p = -0.9273552489 pu; 0.90 pu: 1.7178409032.
IMPORT_KW, IMPORT_090_KW = 927.3552489, 1717.8409032
# Every cell that holds kW or kVA, and what is measured at the limit (may be in kW).
POWERS = tuple(
    (sheet, column)
    for sheet in ("hosting", "criteria", "relaxation")
    for column in RESULT[sheet].names
    if column.endswith(("_kw", "_kva", "_kvar"))
)


def row(tables: Sheets, technology: str = "pv", node: str = "N", **settings: Any) -> dict[str, Any]:
    """Return one row of the `hosting` sheet."""
    return line_of(report(tables, **settings).tables["hosting"], node, technology)


# --- hosted, proven -----------------------------------------------------------------------------


def test_a_row_that_is_hosted_and_proven() -> None:
    answer = report(two_bus(case={"ev_scale": 0}))
    found = line_of(answer.tables["hosting"], "N", "pv")
    assert (found["state"], found["proof"]) == ("hosted", "proven")
    assert found["hosting_unrounded_kw"] == pytest.approx(EXPORT_KW, rel=1e-9)
    assert found["upper_bound_kw"] == found["hosting_unrounded_kw"]
    assert found["gap_pct"] == 0
    assert (found["hosting_kw"], found["hosting_kva"]) == (1077.0, 1077.0)
    assert (found["criterion"], found["element"], found["case"]) == ("voltage_high", "N", "only")
    assert found["ac_mismatch_pu"] <= 1e-8
    assert abs(found["fictitious_loss_kw"]) <= 1e-4 * EXPORT_KW
    assert answer.exit_code == 0


def test_a_row_of_what_draws() -> None:
    found = row(two_bus(), "ev")
    assert (found["state"], found["proof"]) == ("hosted", "proven")
    assert found["hosting_unrounded_kw"] == pytest.approx(IMPORT_KW, rel=1e-9)
    assert (found["criterion"], found["element"]) == ("voltage_low", "N")
    assert found["reverse_at_head_kw"] is None


def test_columns_that_label_a_row() -> None:
    found = row(two_bus(source={"feeder": "Mill"}, generators=[{"node": "N", "kw": 12}]))
    assert [found[c] for c in ("feeder", "node", "technology", "phases", "kv", "distance_km")] == [
        "Mill", "N", "pv", None, 10.0, 1.0,
    ]  # fmt: skip
    assert found["existing_kw"] == 12.0
    assert "phases_assumed" in found["flags"].split("; ")


def test_hosting_is_the_least_over_cases() -> None:
    # In `half` the plant runs at half its rating: met at twice the rating.
    cases = [{"case": "half", "pv_scale": 0.5}, {"case": "full", "pv_scale": 1.0}]
    found = row(two_bus(cases=cases))
    assert (found["case"], found["hosting_kw"]) == ("full", 1077.0)
    found = row(two_bus(cases=cases[:1]))
    assert found["hosting_unrounded_kw"] == pytest.approx(2 * EXPORT_KW, rel=1e-9)


def test_power_in_a_case_is_rating_times_scale_times_coincidence() -> None:
    kinds = [{"technology": "shared", "direction": "export", "scale": "pv_scale",
              "coincidence": 0.8}]  # fmt: skip
    own = [{"node": "N", "technology": "shared"}]
    tables = two_bus(case={"pv_scale": 0.5}, technologies=kinds, candidates=own)
    found = row(tables, "shared")
    assert found["hosting_unrounded_kw"] == pytest.approx(EXPORT_KW / 0.4, rel=1e-9)


# --- hosted_base_violation ----------------------------------------------------------------------


def test_a_limit_broken_with_nothing_added_is_replaced_by_its_base_value() -> None:
    # Source at 1.04 over a limit of 1.03: w = (1.04 + 0.0005)^2 in the closed form, 10.4075024 kW.
    answer = report(two_bus(source={"voltage_pu": 1.04}, limits={"v_max_pu": 1.03}))
    found = line_of(answer.tables["hosting"], "N", "pv")
    assert (found["state"], found["proof"]) == ("hosted_base_violation", "proven")
    assert found["hosting_unrounded_kw"] == pytest.approx(10.4075024053, rel=1e-7)
    assert found["hosting_kw"] == 10.0
    assert found["limit_value"] == pytest.approx(1.0405, abs=1e-12)
    assert found["value_at_limit"] == pytest.approx(1.0405, abs=1e-9)
    assert "base violation: voltage_high at N in only" in found["flags"].split("; ")
    assert answer.exit_code == 0


def test_a_lower_limit_broken_with_nothing_added() -> None:
    # Source at 0.94 under 0.95: w = 0.9395^2, 9.3925027 kW.
    found = row(two_bus(source={"voltage_pu": 0.94}), "ev")
    assert found["state"] == "hosted_base_violation"
    assert found["hosting_unrounded_kw"] == pytest.approx(9.3925026578, rel=1e-7)
    assert found["limit_value"] == pytest.approx(0.9395, abs=1e-12)


OVERLOADED = two_bus(
    5 + 0j, rating_a=30, limits={"v_min_pu": 0.5, "v_max_pu": 1.5},
    loads=[{"node": "N", "kw": 600}],
)  # fmt: skip


@pytest.mark.parametrize(
    ("technology", "kw"),
    # r = 0.05, load 0.6: I - r I^2 = 0.6 gives I = 0.61916848 pu; 1.005 I = 0.62226432 pu.
    # Drawn, I - r I^2 - 0.6 = 0.0029036784 pu is left; exported, 0.6 + I + r I^2 = 1.2416249671.
    [("ev", 2.9036783862), ("pv", 1241.6249671236)],
)
def test_a_rating_broken_with_nothing_added(technology: str, kw: float) -> None:
    found = row(OVERLOADED, technology)
    assert (found["state"], found["proof"]) == ("hosted_base_violation", "proven")
    assert found["hosting_unrounded_kw"] == pytest.approx(kw, rel=1e-7)
    assert (found["criterion"], found["element"], found["unit"]) == ("line_rating", "L", "A")
    # 1.005 x 0.61916848 pu x 57.7350269 A
    assert found["limit_value"] == pytest.approx(35.926447425, rel=1e-9)
    assert "base violation: line_rating at L in only" in found["flags"].split("; ")


def test_a_head_limit_broken_with_nothing_added() -> None:
    # 500 kW there, r = 0.05: E + r E^2 = 0.5 gives E = 0.48808848 pu exported, over a limit of
    # 0.3; 1.005 E = 0.49052892 pu is met with 0.0025598554 pu more.
    tables = two_bus(
        5 + 0j, limits={"v_max_pu": 1.5, "export_limit_kw": 300},
        generators=[{"node": "N", "kw": 500}],
    )  # fmt: skip
    found = row(tables)
    assert (found["state"], found["criterion"]) == ("hosted_base_violation", "head_export")
    assert found["hosting_unrounded_kw"] == pytest.approx(2.5598553795, rel=1e-7)
    assert found["limit_value"] == pytest.approx(490.5289241, rel=1e-9)


def test_a_limit_broken_in_a_case_where_the_technology_rests_changes_nothing() -> None:
    cases = [{"case": "high", "source_voltage_pu": 1.06, "pv_scale": 0, "ev_scale": 1},
             {"case": "usual", "pv_scale": 1, "ev_scale": 0}]  # fmt: skip
    answer = report(two_bus(cases=cases)).tables["hosting"]
    assert line_of(answer, "N", "pv")["state"] == "hosted"
    assert line_of(answer, "N", "pv")["hosting_kw"] == 1077.0
    assert line_of(answer, "N", "ev")["state"] == "hosted_base_violation"


def test_every_broken_element_is_named_in_the_flags() -> None:
    ends = ["A", "B", "C", "D", "E"]
    lines = [{"line": f"L{n}", "from_node": "S", "to_node": n, "r1_ohm": 5, "x1_ohm": 5,
              "rating_a": "unlimited"} for n in ends]  # fmt: skip
    tables = two_bus(source={"voltage_pu": 1.06}) | {"lines": lines}
    found = row(tables, node="A")
    assert [n for n in ends if f"voltage_high at {n} in only" not in found["flags"]] == []


# --- capped, not analysed -----------------------------------------------------------------------


def test_no_violation_up_to_the_cap() -> None:
    answer = report(two_bus(limits={"search_cap_kw": 500}))
    found = line_of(answer.tables["hosting"], "N", "pv")
    assert (found["state"], found["proof"]) == ("capped", "not_needed")
    assert (found["hosting_kw"], found["hosting_unrounded_kw"]) == (500.0, 500.0)
    assert (found["criterion"], found["element"], found["case"]) == ("search_cap", None, None)
    assert (found["value_at_limit"], found["limit_value"]) == (None, None)
    assert found["ac_mismatch_pu"] <= 1e-8
    assert answer.exit_code == 0


@pytest.mark.parametrize(
    ("load_kw", "cap_kw"), [(0, 100.0), (4, 100.0), (25, 250.0)], ids=["none", "small", "larger"]
)
def test_the_cap_is_ten_times_the_peak_load_and_at_least_100_kw(
    load_kw: float, cap_kw: float
) -> None:
    tables = two_bus(0.05 + 0.05j, loads=[{"node": "N", "kw": load_kw}] if load_kw else [])
    tables["limits"] = [r for r in tables["limits"] if r["limit"] != "search_cap_kw"]
    found = row(tables)
    assert (found["state"], found["hosting_kw"]) == ("capped", cap_kw)


def test_a_capped_row_on_a_feeder_with_a_broken_limit_names_it() -> None:
    # Nothing is hosted less for it: 0.94 pu is under the lower limit, and exports lift it.
    found = row(two_bus(source={"voltage_pu": 0.94}, limits={"search_cap_kw": 500}))
    assert (found["state"], found["proof"], found["hosting_kw"]) == ("capped", "not_needed", 500.0)
    assert "base violation: voltage_low at N in only" in found["flags"].split("; ")


def test_what_never_runs_is_not_analysed() -> None:
    answer = report(two_bus(case={"pv_scale": 0}))
    found = line_of(answer.tables["hosting"], "N", "pv")
    assert (found["state"], found["proof"], found["criterion"]) == (
        "not_analysed", None, "never_runs",
    )  # fmt: skip
    own = [c for s, c in POWERS if s == "hosting" and c != "existing_kw"]
    assert [c for c in own if found[c] is not None] == []
    alone = line_of(answer.tables["criteria"], "N", "pv")
    assert [c for s, c in POWERS if s == "criteria" and alone[c] is not None] == []
    # It does not spoil the answer: ev is proven.
    assert answer.exit_code == 0


# --- bracketed ----------------------------------------------------------------------------------


def _disagreeing(factor: float) -> Callable[..., Any]:
    def off(*given: Any, **more: Any) -> Any:
        relaxed = solve_row(*given, **more)
        return replace(relaxed, g=relaxed.g * factor)

    return off


@pytest.mark.parametrize("factor", [1.001, 0.999, math.nan], ids=["above", "below", "no answer"])
def test_a_solver_that_does_not_agree(monkeypatch: pytest.MonkeyPatch, factor: float) -> None:
    swap(monkeypatch, solve_row, _disagreeing(factor))
    _bracketed(report(two_bus(case={"ev_scale": 0})))


def test_a_solver_that_agrees_within_its_tolerance(monkeypatch: pytest.MonkeyPatch) -> None:
    swap(monkeypatch, solve_row, _disagreeing(1.00009))
    assert row(two_bus())["proof"] == "proven"


@pytest.mark.parametrize(
    "setting",
    [{"recursion_tolerance": -1.0}, {"multiplier_tolerance": -2.0}],
    ids=["residual", "smallest multiplier"],
)
def test_a_recursion_that_does_not_close(setting: dict[str, float]) -> None:
    # No residual is below -1, no cone multiplier above twice the largest.
    _bracketed(report(two_bus(case={"ev_scale": 0}), **setting))


def _bracketed(answer: Any) -> None:
    found = line_of(answer.tables["hosting"], "N", "pv")
    assert (found["state"], found["proof"]) == ("hosted", "bracketed")
    assert found["hosting_kw"] == 1077.0
    assert found["hosting_unrounded_kw"] == pytest.approx(EXPORT_KW, rel=1e-9)
    assert found["upper_bound_kw"] > EXPORT_KW
    gap = 100 * (found["upper_bound_kw"] / found["hosting_unrounded_kw"] - 1)
    assert found["gap_pct"] == pytest.approx(gap)
    assert answer.exit_code == 4


def test_a_base_violation_may_be_bracketed_too(monkeypatch: pytest.MonkeyPatch) -> None:
    swap(monkeypatch, solve_row, _disagreeing(1.001))
    found = row(two_bus(source={"voltage_pu": 1.04}, limits={"v_max_pu": 1.03}))
    assert (found["state"], found["proof"]) == ("hosted_base_violation", "bracketed")


def test_a_row_that_ends_where_the_solution_is_lost() -> None:
    # r = 0.05, x = 0: at most 1/(4 r) = 5 pu can be drawn, at 0.5 pu; the lower limit is 0.3.
    tables = two_bus(5 + 0j, limits={"v_min_pu": 0.3})
    answer = report(tables)
    found = line_of(answer.tables["hosting"], "N", "ev")
    assert (found["state"], found["proof"], found["criterion"]) == (
        "hosted", "bracketed", "ac_check",
    )  # fmt: skip
    assert found["hosting_unrounded_kw"] == pytest.approx(5000, rel=1e-3)
    assert found["hosting_unrounded_kw"] <= 5000
    assert found["upper_bound_kw"] >= 5000 * (1 - 1e-9)


# --- failed -------------------------------------------------------------------------------------

FOUR_NODES = two_bus() | {
    "lines": [
        {"line": f"L{i}", "from_node": a, "to_node": b, "r1_ohm": 5, "x1_ohm": 5,
         "rating_a": "unlimited"}
        for i, (a, b) in enumerate([("S", "N"), ("N", "M"), ("M", "E")])
    ],
    "loads": [{"node": "M", "kw": 50}],
    "generators": [{"node": "N", "kw": 20}],
}  # fmt: skip


def _off(monkeypatch: pytest.MonkeyPatch, factor: float, node: int) -> None:
    """Make the search put every first violation of plants at a node off by a factor."""

    def wrong(system: Any, plants: Any, settings: Any) -> FirstViolations:
        found = first_violations(system, plants, settings)
        return FirstViolations(np.where(plants.node == node, factor, 1) * found.rating, found.row)

    swap(monkeypatch, first_violations, wrong)


def _unsettled(monkeypatch: pytest.MonkeyPatch) -> None:
    """Make the final AC check end with a mismatch of 1e-7 pu."""

    def worse(*given: Any) -> Any:
        slack, point = slacks_with(*given)
        return slack, replace(point, mismatch=point.mismatch + 1e-7)

    swap(monkeypatch, slacks_with, worse)


def _breaks_a_limit(monkeypatch: pytest.MonkeyPatch) -> None:
    _off(monkeypatch, 1.05, 2)


def _far_too_small(monkeypatch: pytest.MonkeyPatch) -> None:
    _off(monkeypatch, 0.5, 2)


def _a_little_too_small(monkeypatch: pytest.MonkeyPatch) -> None:
    # At 1.0001 times the value no limit is broken yet.
    _off(monkeypatch, 0.9998, 2)


@pytest.mark.parametrize("spoil", [_breaks_a_limit, _far_too_small, _a_little_too_small])
def test_a_failed_row_loses_every_kw_and_kva(
    monkeypatch: pytest.MonkeyPatch, spoil: Callable[[pytest.MonkeyPatch], None]
) -> None:
    spoil(monkeypatch)
    answer = report(FOUR_NODES, plain_sample=8)
    assert answer.exit_code == 4
    for technology in ("pv", "ev"):
        _lost(answer, "M", technology)
    for other in ("N", "E"):
        found = line_of(answer.tables["hosting"], other, "pv")
        assert (found["proof"], found["state"]) == ("proven", "hosted")
        assert found["hosting_kw"] > 0
        assert line_of(answer.tables["relaxation"], other, "pv")["plain_kw"] > 0


def test_a_row_whose_check_does_not_converge_fails(monkeypatch: pytest.MonkeyPatch) -> None:
    _unsettled(monkeypatch)
    answer = report(FOUR_NODES)
    _lost(answer, "M", "pv")
    assert line_of(answer.tables["hosting"], "M", "pv")["ac_mismatch_pu"] >= 1e-7
    assert answer.tables["profile"].empty


def test_a_capped_row_fails_as_well(monkeypatch: pytest.MonkeyPatch) -> None:
    _unsettled(monkeypatch)
    answer = report(two_bus(limits={"search_cap_kw": 500}))
    _lost(answer, "N", "pv")


def test_a_failed_row_on_a_feeder_with_a_broken_limit(monkeypatch: pytest.MonkeyPatch) -> None:
    _unsettled(monkeypatch)
    answer = report(two_bus(source={"voltage_pu": 1.04}, limits={"v_max_pu": 1.03}))
    _lost(answer, "N", "pv")


def _lost(answer: Any, node: str, technology: str) -> None:
    found = line_of(answer.tables["hosting"], node, technology)
    assert (found["state"], found["proof"], found["criterion"]) == ("hosted", "failed", "ac_check")
    for sheet, column in POWERS:
        cell = line_of(answer.tables[sheet], node, technology)[column]
        assert cell is None, (sheet, column)
    assert [found[c] for c in ("value_at_limit", "limit_value", "gap_pct")] == [None] * 3
    assert len(POWERS) == 8 + 10 + 3


def test_a_failed_row_in_the_written_workbook(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    write_input(FOUR_NODES, tmp_path / "f.xlsx")
    _breaks_a_limit(monkeypatch)
    done = CliRunner().invoke(
        main, ["host", str(tmp_path / "f.xlsx"), "-o", str(tmp_path / "r.xlsx"), "--json"]
    )
    assert done.exit_code == 4
    (told,) = (
        r for r in json.loads(done.stdout)["hosting"]
        if (r["node"], r["technology"]) == ("M", "pv")
    )  # fmt: skip
    sheets = read_workbook(tmp_path / "r.xlsx").tables
    for sheet, column in POWERS:
        assert line_of(sheets[sheet], "M", "pv")[column] is None, (sheet, column)
        if sheet == "hosting":
            assert told[column] is None


# --- storage, candidates, rounding --------------------------------------------------------------


@pytest.mark.parametrize(
    ("v_min", "direction", "criterion", "kw"),
    [(0.95, "import", "voltage_low", IMPORT_KW), (0.90, "export", "voltage_high", EXPORT_KW)],
)
def test_storage_is_the_smaller_of_its_directions(
    v_min: float, direction: str, criterion: str, kw: float
) -> None:
    own = [{"node": "N", "technology": "storage"}]
    answer = report(two_bus(limits={"v_min_pu": v_min}, candidates=own))
    found = line_of(answer.tables["hosting"], "N", "storage")
    assert (found["criterion"], found["proof"]) == (criterion, "proven")
    assert found["hosting_unrounded_kw"] == pytest.approx(kw, rel=1e-9)
    assert f"binding direction: {direction}" in found["flags"].split("; ")
    alone = line_of(answer.tables["criteria"], "N", "storage")
    assert alone["voltage_high_kw"] == pytest.approx(EXPORT_KW, rel=1e-9)
    other = {0.95: IMPORT_KW, 0.90: IMPORT_090_KW}[v_min]
    assert alone["voltage_low_kw"] == pytest.approx(other, rel=1e-9)


def test_storage_may_bind_in_either_direction_on_one_feeder() -> None:
    # Two such lines side by side: at A no lower limit matters, at B no upper one.
    tables = two_bus(
        nodes=[{"node": "A", "v_min_pu": 0.5}, {"node": "B", "v_max_pu": 1.5}],
        candidates=[{"node": n, "technology": "storage"} for n in "AB"],
    )
    tables["lines"] = [
        {"line": f"L{n}", "from_node": "S", "to_node": n, "r1_ohm": 5, "x1_ohm": 5,
         "rating_a": "unlimited"}
        for n in "AB"
    ]  # fmt: skip
    hosting = report(tables).tables["hosting"]
    a, b = (line_of(hosting, n, "storage") for n in "AB")
    assert (a["criterion"], b["criterion"]) == ("voltage_high", "voltage_low")
    assert (a["proof"], b["proof"]) == ("proven", "proven")
    assert a["hosting_unrounded_kw"] == pytest.approx(EXPORT_KW, rel=1e-9)
    assert b["hosting_unrounded_kw"] == pytest.approx(IMPORT_KW, rel=1e-9)


def test_storage_that_is_there_runs_in_the_direction_under_test() -> None:
    # 200 kW of it: 200 kW less of pv and of ev; nothing in the base case.
    tables = two_bus(generators=[{"node": "N", "kw": 200, "technology": "storage"}])
    answer = report(tables)
    hosting = answer.tables["hosting"]
    assert line_of(hosting, "N", "pv")["hosting_unrounded_kw"] == pytest.approx(EXPORT_KW - 200)
    assert line_of(hosting, "N", "ev")["hosting_unrounded_kw"] == pytest.approx(IMPORT_KW - 200)
    assert answer.tables["base_cases"]["head_kw"].tolist() == [0.0]


def test_reverse_power_of_storage_is_that_of_its_export() -> None:
    # The import binds; exported, the head turns where the load of 100 kW is met.
    tables = two_bus(
        candidates=[{"node": "N", "technology": "storage"}], loads=[{"node": "N", "kw": 100}]
    )
    found = row(tables, "storage")
    assert "binding direction: import" in found["flags"]
    assert found["reverse_at_head_kw"] == pytest.approx(100, rel=1e-8)


def test_max_kw_of_a_candidate_is_its_cap() -> None:
    own = [{"node": "N", "technology": "pv", "max_kw": 300}, {"node": "N", "technology": "ev"}]
    answer = report(two_bus(candidates=own)).tables["hosting"]
    found = line_of(answer, "N", "pv")
    assert (found["state"], found["proof"], found["hosting_kw"]) == ("capped", "not_needed", 300.0)
    assert line_of(answer, "N", "ev")["hosting_kw"] == 927.0


def test_power_factor_of_a_candidate() -> None:
    # Absorbing at 0.9: q = t p, t = -tan(acos 0.9).  v_0 = w - 2 (r + x t) p + |z|^2 (1 + t^2)
    # p^2 / w with w = 1.1025: p = 2.9021254602 pu, over 0.9 in kVA.  Importing, absorbing at 0.95,
    # w = 0.9025: p = 0.7104867333 pu.
    own = [
        {"node": "N", "technology": "pv", "power_factor": 0.9, "vars": "absorb"},
        {"node": "N", "technology": "ev", "power_factor": 0.95},
    ]
    answer = report(two_bus(candidates=own)).tables["hosting"]
    pv, ev = line_of(answer, "N", "pv"), line_of(answer, "N", "ev")
    assert (pv["proof"], ev["proof"]) == ("proven", "proven")
    assert pv["hosting_unrounded_kw"] == pytest.approx(2902.1254602, rel=1e-9)
    assert ev["hosting_unrounded_kw"] == pytest.approx(710.4867333, rel=1e-9)
    # kVA belongs to the published kW: 2902 / 0.9, 710 / 0.95.
    assert pv["hosting_kva"] == pytest.approx(3224.4444444, rel=1e-9)
    assert ev["hosting_kva"] == pytest.approx(747.3684211, rel=1e-9)


def test_a_technology_brings_its_power_factor_where_the_candidate_has_none() -> None:
    kinds = [{"technology": "pv", "direction": "export", "scale": "pv_scale",
              "power_factor": 0.9, "vars": "absorb"}]  # fmt: skip
    found = row(two_bus(technologies=kinds))
    assert found["hosting_unrounded_kw"] == pytest.approx(2902.1254602, rel=1e-9)


@pytest.mark.parametrize(
    ("step", "published"), [(1, 1077.0), (10, 1070.0), (25, 1075.0), (0.1, 1077.6), (5000, 0.0)]
)
def test_the_published_value_is_a_multiple_of_the_step(step: float, published: float) -> None:
    found = row(two_bus(limits={"rounding_kw": step}))
    assert found["hosting_kw"] == published
    assert found["proof"] == "proven"


WHOLE_STEPS = (0.5, 1.0, 5.0, 10.0, 25.0, 100.0)


@settings(max_examples=200, deadline=None)
@given(
    kw=st.floats(0, 1e5, allow_subnormal=False),
    step=st.sampled_from((*WHOLE_STEPS, 0.1, 0.01, 3.7)),
)
@example(kw=1001.5, step=1.0)
@example(kw=0.3, step=0.1)
@example(kw=1007.0, step=1.0)
def test_rounding_goes_down_never_up(kw: float, step: float) -> None:
    feeder = build(two_bus(limits={"rounding_kw": step}))
    shown = feeder.kw(rounded_down(feeder, kw / 1000))
    unrounded = feeder.kw(kw / 1000)
    assert shown <= unrounded
    assert unrounded - shown < step * (1 + 1e-9)
    if step in WHOLE_STEPS:
        assert shown % step == 0
