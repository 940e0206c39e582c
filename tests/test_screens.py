"""Rule screens against figures worked by hand, and every verdict each screen can give."""

from __future__ import annotations

import math
from dataclasses import fields

import pytest
from feederhost.settings import Settings
from feederhost.study.queue.screens import NAMES

from screen_feeder import case, line, one, request, screen_bench, screens, small

QUEUE = [
    request("Q1", "C", "pv", 30), request("Q2", "K", "pv", 15), request("Q3", "A", "storage", 60),
    request("Q4", "C", "pv", 75), request("Q5", "A", "ev", 40),
]  # fmt: skip
AMPS = 1000 / (math.sqrt(3) * 10)  # per MVA at 10 kV: 57.735

# Earlier requests stand at what they ask for; 10 kW of PV is at B already.
# Demand at peak: 200 behind L3, 440 behind L2, 840 in all; at noon half, at night a quarter.
# Fault from the source: 10 kV / sqrt(3) over 2, 4 and 5 ohm at A, B and C.
HAND_FILLED = [
    # request, screen, quantity, threshold, verdict, where
    ("Q1", "peak load", 30, 0.15 * 200, "pass", "behind line L3"),
    ("Q2", "peak load", 10 + 30 + 15, 0.15 * 440, "pass", "behind line L2"),
    ("Q3", "peak load", 10 + 30 + 15 + 60, 0.15 * 840, "pass", "whole feeder"),
    ("Q4", "peak load", 30 + 75, 0.15 * 200, "fail", "behind line L3"),
    ("Q1", "minimum load", 30, 100, "pass", "behind line L3, case noon"),
    ("Q2", "minimum load", 55, 220, "pass", "behind line L2, case noon"),
    ("Q3", "minimum load", 115, 210, "pass", "whole feeder, case night"),
    ("Q4", "minimum load", 105, 100, "fail", "behind line L3, case noon"),
    ("Q1", "fault current", 1.2 * 0.040 * AMPS, 115.470, "pass", "at C"),
    ("Q2", "fault current", 1.2 * 0.055 * AMPS, 144.338, "pass", "at B"),
    ("Q3", "fault current", 1.2 * 0.115 * AMPS, 288.675, "pass", "at A"),
    ("Q4", "fault current", 1.2 * 0.190 * AMPS, 115.470, "pass", "at C"),
    ("Q1", "interrupting duty", 1443.376 + 2.771, 0.875 * 1700, "pass", "line L3"),
    ("Q4", "interrupting duty", 1443.376 + 13.164, 0.875 * 1700, "pass", "line L3"),
    ("Q2", "shared secondary", 15, 20, "pass", "secondary of T1"),
    ("Q2", "centre-tap imbalance", 100 * 15 / 50, 20, "not assessed", "one side of T1"),
]


@pytest.fixture(scope="module")
def filled():
    data = screen_bench(small(requests=QUEUE))
    asked = {r["request"]: r["kw"] for r in QUEUE}
    names = list(asked)
    return {
        name: screens(data, name, {n: asked[n] for n in names[:i]}) for i, name in enumerate(names)
    }


@pytest.mark.parametrize(
    ("name", "screen", "quantity", "threshold", "verdict", "where"), HAND_FILLED
)
def test_the_hand_filled_table(filled, name, screen, quantity, threshold, verdict, where):
    found = filled[name][screen]
    assert found.quantity == pytest.approx(quantity, rel=1e-5)
    assert found.threshold == pytest.approx(threshold, rel=1e-5)
    assert found.verdict == verdict
    assert found.detail.endswith(where)


def test_every_screen_stands_in_its_order(filled):
    # No site here has an agreed export limit.
    wanted = [n for n in NAMES if n != "export control fails"]
    assert list(filled["Q1"]) == wanted
    assert all(s.request == "Q1" and s.source for s in filled["Q1"].values())
    assert filled["Q5"] == {}


def test_what_is_listed_never_counts(filled):
    for name, section in (
        ("spot network", "2.2.1.3"), ("transmission limit", "2.2.1.9"),
        ("no construction", "2.2.1.10"),
    ):  # fmt: skip
        found = filled["Q1"][name]
        assert (found.verdict, found.counted) == ("not assessed", False)
        assert section in found.source
        assert found.missing
    assert all(s.counted for n, s in filled["Q1"].items() if n in NAMES[:9])


def test_only_the_screens_asked_for():
    data = screen_bench(small())
    assert list(screens(data, only=["fault current"])) == ["fault current"]
    together = "voltage change of all generation"
    assert list(screens(data, only=[together, "spot network"])) == [together, "spot network"]


def test_a_request_with_a_fault_is_not_screened():
    rows = [request("Q1", "C", "pv", 30), request("Q2", "NOWHERE", "pv", 30)]
    data = screen_bench(small(requests=rows))
    assert screens(data, "Q2") == {}
    assert screens(data, "Q1", {"Q1": 500})["peak load"].quantity == pytest.approx(30)


# --- sections ---------------------------------------------------------------------------------


@pytest.mark.parametrize("screen", ["peak load", "minimum load"])
def test_without_marks_the_whole_feeder_is_shown_and_not_assessed(screen):
    rows = [line("L1", "S", "A", 1), line("L2", "A", "B", 2), line("L3", "B", "C", 1)]
    found = one(small(lines=rows), screen)
    assert (found.verdict, found.missing) == ("not assessed", "automatic device on any line")
    assert found.quantity == pytest.approx(40)
    assert found.threshold == pytest.approx({"peak load": 126, "minimum load": 420}[screen])
    assert "whole feeder" in found.detail


def test_an_automatic_device_on_an_open_tie_is_a_mark():
    tie = line("TIE", "C", "A", 1, device="automatic", state="open")
    rows = [line("L1", "S", "A", 1), line("L2", "A", "B", 2), line("L3", "B", "C", 1), tie]
    found = one(small(lines=rows), "peak load")
    assert (found.verdict, found.quantity) == ("pass", pytest.approx(40))
    assert found.detail.endswith("whole feeder")


def test_without_loads_there_is_no_peak():
    for screen in ("peak load", "minimum load"):
        found = one(small(loads=None), screen)
        assert (found.verdict, found.missing) == ("not assessed", "loads")


def test_a_section_without_load_holds_no_generation():
    loads = [{"node": "A", "kw": 400}]
    for screen in ("peak load", "minimum load"):
        found = one(small(loads=loads), screen)
        assert (found.verdict, found.threshold) == ("fail", 0)


def test_the_peak_is_that_of_the_cases_class_by_class():
    # Homes and works never peak together: 0.9 x 400 + 0.3 x 200 = 420, not 600.
    loads = [{"node": "A", "kw": 400, "class": "homes"}, {"node": "B", "kw": 200, "class": "works"}]
    cases = [
        case("evening", 19, 1.0, **{"load_scale.homes": 0.9, "load_scale.works": 0.3}),
        case("noon", 12, 1.0, **{"load_scale.homes": 0.2, "load_scale.works": 1.0}),
    ]
    rows = [request("Q1", "A", "pv", 30)]
    tables = small(loads=loads, cases=cases, requests=rows)
    assert one(tables, "peak load").threshold == pytest.approx(0.15 * 420)
    assert one(tables, "minimum load").threshold == pytest.approx(0.2 * 400 + 200)


def test_the_load_counts_at_nominal_voltage_whatever_its_kind():
    loads = [{"node": "C", "kw": 200, "kvar": 70, "zip_z": 0.5, "zip_i": 0.3, "zip_p": 0.2}]
    assert one(small(loads=loads), "peak load").threshold == pytest.approx(30)


def test_the_minimum_is_met_only_below_it():
    # Noon: 100 kW behind L3.  The standard says less than the minimum, and at most 15 %.
    for kw, verdict in ((99.9, "pass"), (100, "fail")):
        rows = [request("Q1", "C", "pv", kw)]
        assert one(small(requests=rows), "minimum load").verdict == verdict


def test_the_tightest_section_is_shown_though_it_is_not_the_nearest():
    # Behind L3 30/100; behind L2 (30 + 200)/220.
    generators = [{"node": "B", "kw": 200}]
    found = one(small(generators=generators), "minimum load")
    assert (found.verdict, found.quantity, found.threshold) == (
        "fail", pytest.approx(230), pytest.approx(220),
    )  # fmt: skip
    assert "behind line L2" in found.detail


# --- hours ------------------------------------------------------------------------------------

TRACKING = [{"technology": "tracker", "direction": "export", "scale": "pv_scale",
             "window_from": 8, "window_to": 18}]  # fmt: skip
NIGHT = [{"technology": "mill", "direction": "export", "window_from": 22, "window_to": 4}]
HOURLY = [
    case("h3", 3, 0.10), case("h8", 8, 0.20), case("h10", 10, 0.30), case("h16", 16, 0.35),
    case("h18", 18, 0.25), case("h23", 23, 0.15), case("h9", 9, 0.28),
]  # fmt: skip


@pytest.mark.parametrize(
    ("rows", "technologies", "least", "hours"),
    [
        ([request("Q1", "C", "pv", 5)], None, "h10", "hours 10 to 16"),
        ([request("Q1", "C", "tracker", 5)], TRACKING, "h8", "hours 8 to 18"),
        ([request("Q1", "C", "mill", 5)], NIGHT, "h3", "hours 22 to 4"),
        ([request("Q1", "C", "storage", 5)], None, "h3", "least load,"),
        # PV with storage behind one inverter runs at all hours.
        ([request("Q1", "C", "pv", 5), request("Q1", "C", "storage", 5)], None, "h3", "load,"),
        ([request("Q1", "C", "pv", 5), request("Q1", "C", "tracker", 5)], TRACKING, "h8",
         "hours 10 to 16, 8 to 18"),
        # What a site imports is no generation and has no say.
        ([request("Q1", "C", "pv", 5), request("Q1", "C", "ev", 5)], None, "h10", "10 to 16"),
    ],
)  # fmt: skip
def test_the_hours_of_a_technology(rows, technologies, least, hours):
    tables = small(requests=rows, technologies=technologies, cases=HOURLY, generators=None)
    found = one(tables, "minimum load")
    scale = {c["case"]: c["load_scale"] for c in HOURLY}[least]
    assert found.threshold == pytest.approx(200 * scale)
    assert found.detail.endswith(f"case {least}")
    assert hours in found.detail
    assert found.verdict == "pass"


@pytest.mark.parametrize(("hour", "counts"), [(9, 0), (10, 1), (16, 1), (17, 0)])
def test_both_ends_of_the_hours_belong_to_them(hour, counts):
    found = one(small(cases=[case("noon", 12, 0.5), case("edge", hour, 0.2)]), "minimum load")
    assert found.threshold == pytest.approx(40 if counts else 100)


def test_cases_without_hours_are_shown_and_not_assessed():
    cases = [case("peak", None, 1.0), case("low", None, 0.2, pv_scale=1)]
    found = one(small(cases=cases), "minimum load")
    assert (found.verdict, found.missing) == ("not assessed", "hour of the cases")
    assert found.threshold == pytest.approx(168)
    rows = [request("Q1", "C", "storage", 30)]
    assert one(small(cases=cases, requests=rows), "minimum load").verdict == "pass"


def test_a_case_without_hour_may_be_any_hour():
    found = one(small(cases=[*HOURLY, case("any", None, 0.12)]), "minimum load")
    assert found.threshold == pytest.approx(24)


def test_no_case_within_the_hours():
    found = one(small(cases=[case("night", 2, 0.2)]), "minimum load")
    assert found.verdict == "not assessed"
    assert found.missing == "a case within hours 10 to 16"
    assert math.isnan(found.threshold)


def test_an_assumed_minimum_is_shown_for_the_whole_feeder_and_not_assessed():
    found = one(small(cases=None), "minimum load")
    assert found.verdict == "not assessed"
    assert found.missing == "hour of the cases; a minimum load that is not assumed"
    assert (found.quantity, found.threshold) == (pytest.approx(40), pytest.approx(0.3 * 840))
    # The peak needs no case of its own: `loads` is the peak.
    assert one(small(cases=None), "peak load").verdict == "pass"


@pytest.mark.parametrize(("scale", "verdict"), [(0.4, "not assessed"), (0.6, "pass")])
def test_an_assumed_case_spoils_the_minimum_only_where_it_is_the_least(scale, verdict):
    cases = [case("noon", 12, 0.5), {**case("guess", 13, scale), "basis": "assumed"}]
    found = one(small(cases=cases), "minimum load")
    assert found.verdict == verdict


# --- fault current ----------------------------------------------------------------------------


def test_without_a_source_impedance_no_fault_is_assessed():
    source = [{"node": "S", "kv": 10}]
    share = one(small(source=source), "fault current")
    assert (share.verdict, share.missing) == ("not assessed", "short_circuit_mva of the source")
    assert share.quantity == pytest.approx(1.2 * 0.04 * AMPS)
    assert math.isnan(share.threshold)
    duty = one(small(source=source), "interrupting duty")
    assert (duty.verdict, duty.missing) == ("not assessed", "short_circuit_mva of the source")


# 10 % of 1154.70 A at C is 2 MVA: 1988 kVA beside the 12 of the PV at B.
@pytest.mark.parametrize(
    ("row", "kva", "known"),
    [
        ({"kw": 100}, 120, {}),
        # The rated current is that of the inverter: 100 kW at 0.8 is 125 kVA.
        ({"kw": 100, "power_factor": 0.8, "vars": "absorb"}, 150, {}),
        # An agreed export limit does not hold back a fault.
        ({"kw": 100, "export_limit_kw": 1}, 120, {}),
        ({"kw": 100, "inverter_kva": 90}, 108, {}),
        ({"kw": 100, "inverter_kva": 110}, 132, {}),
        ({"kw": 100}, 210, {"fault_current_pu": 2.1}),
        ({"kw": 100}, 500, {"machine": "rotating", "fault_current_pu": math.nan}),
        ({"kw": 1600}, 1920, {}),
        ({"kw": 1700}, 2040, {}),
        ({"kw": 1988 / 1.2}, 1988, {}),
    ],
)
def test_the_fault_current_of_a_request_goes_by_nameplate(row, kva, known):
    own = [{"technology": "gas", "direction": "export"}]
    tables = small(requests=[request("Q1", "C", "gas", **row)], technologies=own)
    data = screen_bench(tables, {"gas": known} if known else None)
    found = screens(data, only=["fault current"])["fault current"]
    assert found.quantity == pytest.approx((kva + 12) / 1e3 * AMPS)
    assert found.threshold == pytest.approx(115.470, rel=1e-5)
    assert found.verdict == ("pass" if kva <= 1988 else "fail")


def test_plants_that_are_there_count_at_their_power_factor():
    # 60 kW at 0.6 are 100 kVA.
    generators = [{"node": "A", "kw": 60, "power_factor": 0.6, "vars": "absorb"}]
    found = one(small(generators=generators), "fault current")
    assert found.quantity == pytest.approx(1.2 * 0.130 * AMPS)


def test_an_inverter_grows_with_a_site_that_is_given_less():
    # 60 + 60 kW behind 100 kVA.  At 90 kW: 90 kVA; at 110: 100.  Behind 150 kVA at 60 kW: 75.
    pair = [request("Q1", "C", "pv", 60), request("Q1", "C", "storage", 60)]
    for inverter, size, rated in ((100, 90, 90), (100, 110, 100), (150, 60, 75), (150, 120, 150)):
        rows = [{**r, "inverter_kva": inverter} for r in pair]
        data = screen_bench(small(requests=rows, generators=None))
        found = screens(data, only=["fault current", "peak load"], size=size)
        assert found["fault current"].quantity == pytest.approx(1.2 * rated / 1e3 * AMPS)
        assert found["peak load"].quantity == pytest.approx(min(size, inverter))


def test_what_imports_adds_no_generation():
    rows = [
        request("Q0", "C", "ev", 500), request("Q1", "C", "pv", 20), request("Q1", "C", "ev", 60),
    ]  # fmt: skip
    data = screen_bench(small(requests=rows))
    found = screens(data, "Q1", {"Q0": 500})
    assert found["peak load"].quantity == pytest.approx(20)
    assert found["fault current"].quantity == pytest.approx(1.2 * 0.03 * AMPS)


def test_the_primary_point_lies_above_low_voltage():
    # K is at 0.24 kV, fed from B: the current there counts, and stays in amperes at 10 kV.
    rows = [request("Q1", "K", "pv", 30)]
    found = one(small(requests=rows), "fault current")
    assert found.threshold == pytest.approx(144.338, rel=1e-5)
    assert found.detail.endswith("at B")


def test_regulators_stand_at_their_given_tap_or_at_neutral():
    # Fixed at +16 of 16 steps of 10 %: all before it is seen through 1.1: 4 x 1.21 + 1 ohm.
    rows = small()["lines"][:2]
    rows += [line("L3", "R", "C", 1)]
    regulator = {"regulator": "VR", "from_node": "B", "to_node": "R", "rating_a": 100}
    for more, ohm in (({"tap": 16}, 4 * 1.21 + 1), ({"setpoint_pu": 1.03}, 5.0)):
        found = one(small(lines=rows, regulators=[{**regulator, **more}]), "fault current")
        assert found.threshold == pytest.approx(0.1 * 10e3 / math.sqrt(3) / ohm, rel=1e-6)


def _breakers(l2: float | None, l3: float | None) -> list[dict[str, object]]:
    return [
        line("L1", "S", "A", 1),
        line("L2", "A", "B", 2, device="automatic", interrupting_a=l2),
        line("L3", "B", "C", 1, device="automatic", interrupting_a=l3),
    ]


def test_without_interrupting_capability_the_duty_is_not_assessed():
    found = one(small(lines=_breakers(None, None)), "interrupting duty")
    assert (found.verdict, found.missing) == ("not assessed", "interrupting_a of any line")


@pytest.mark.parametrize(
    ("l2", "l3", "kw", "verdict", "already"),
    [
        # The source gives 1443.376 A at B; 87.5 % of 1655 A are 1448.125: 82.25 kVA of room.
        (None, 1655, 58, "pass", False),
        (None, 1655, 59, "fail", False),
        (None, 1600, 1, "fail", True),
        # A request at C raises the duty of every device of the circuit, L2's is worse.
        (3200, 1700, 1, "fail", True),
    ],
)
def test_the_duty_of_the_worst_device(l2, l3, kw, verdict, already):
    rows = [request("Q1", "C", "pv", kw)]
    found = one(small(lines=_breakers(l2, l3), requests=rows), "interrupting duty")
    assert found.verdict == verdict
    assert found.detail.endswith("above it without this request") == already
    assert ("line L2" in found.detail) == (l2 is not None)


# --- service ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("wires", "connection", "node", "phases", "verdict"),
    [
        ("4", "wye_wye", "K", None, "pass"),
        ("4", "wye_wye", "K", "ABC", "pass"),
        ("4", "wye_wye", "K", "A", "pass"),
        ("4", "wye_wye", "K", "AB", "fail"),
        ("4", "delta_wye", "K", None, "fail"),
        ("4", "delta_delta", "K", "A", "fail"),
        ("4", None, "K", None, "not assessed"),
        ("4", None, "C", None, "not assessed"),
        ("4", None, "C", "A", "pass"),
        ("4", None, "C", "BC", "fail"),
        ("3", "wye_wye", "K", None, "pass"),
        ("3", None, "K", "AB", "pass"),
        ("3", "wye_wye", "K", "A", "fail"),
        ("3", "delta_wye", "K", "A", "pass"),
        ("3", None, "K", "A", "not assessed"),
        ("3", None, "C", None, "pass"),
        ("3", None, "C", "C", "fail"),
        (None, "wye_wye", "K", None, "not assessed"),
    ],
)
def test_the_line_type(wires, connection, node, phases, verdict):
    tables = small(requests=[request("Q1", node, "pv", 15, phases=phases)])
    tables["source"][0]["wires"] = wires
    tables["transformers"][0]["connection"] = connection
    found = one(tables, "line type")
    assert found.verdict == verdict
    wanted = ""
    if verdict == "not assessed":
        own = "the site's own transformer and its connection"
        wanted = "connection of transformer T1" if node == "K" else own
        wanted = wanted if wires else "wires of the primary line"
    assert found.missing == wanted
    assert "2.2.1.6" in found.source


@pytest.mark.parametrize(
    ("connection", "verdict"),
    [("delta_wye", "pass"), ("wye_wye", "fail"), ("delta_delta", "fail"), (None, "not assessed")],
)
def test_a_transformer_in_line_says_how_many_wires_follow(connection, verdict):
    # Three wires at the source; a single phase to neutral asks for four.
    source = [{"node": "S", "kv": 10, "wires": "3"}]
    step = {"transformer": "T0", "from_node": "S", "to_node": "A", "kva": 5000, "kv_primary": 10,
            "kv_secondary": 4, "z_pct": 5, "x_over_r": 8, "connection": connection}  # fmt: skip
    tables = small(source=source, requests=[request("Q1", "C", "pv", 5, phases="A")])
    tables["lines"] = tables["lines"][1:]
    tables["transformers"] = [step, {**tables["transformers"][0], "kv_primary": 4}]
    assert one(tables, "line type").verdict == verdict


def _single_phase(loads: int, kw: float, **more: object) -> dict[str, list[dict[str, object]]]:
    """Return the feeder with phases, T1 a single-phase unit of 7.2/0.24 kV on phase A."""
    tables = small(requests=[request("Q1", "K", "pv", kw, **more)])
    for row in tables["lines"]:
        row["phases"] = "ABC"
    tables["transformers"][0].update(phases="A", kv_primary=7.2)
    tables["loads"] = [r for r in tables["loads"] if r["node"] != "K"]
    tables["loads"] += [{"node": "K", "kw": 10, "phases": "A"}] * loads
    return tables


@pytest.mark.parametrize(
    ("tables", "verdict", "missing"),
    [
        (_single_phase(2, 20), "pass", ""),
        (_single_phase(2, 20.1), "fail", ""),
        (_single_phase(1, 20.1), "not assessed", "how many customers share the secondary"),
        # Without phases: up to 20 kW it passes whatever they are.
        (small(requests=[request("Q1", "K", "pv", 20)]), "pass", ""),
        (small(requests=[request("Q1", "K", "pv", 21)]), "not assessed", "phases"),
        (small(requests=[request("Q1", "K", "pv", 21, phases="ABC")]), "pass", ""),
        (small(), "not assessed", "phases; the transformer that serves it"),
        (small(requests=[request("Q1", "C", "pv", 30, phases="ABC")]), "pass", ""),
        (small(requests=[request("Q1", "C", "pv", 30, phases="B")]), "not assessed",
         "the transformer that serves it"),
    ],
)  # fmt: skip
def test_a_shared_secondary(tables, verdict, missing):
    found = one(tables, "shared secondary")
    assert (found.verdict, found.missing) == (verdict, missing)


def test_a_shared_secondary_counts_what_is_there_and_before():
    tables = _single_phase(2, 9)
    tables["requests"].insert(0, request("Q0", "K", "pv", 8))
    tables["generators"] = [{"node": "K", "kw": 4, "phases": "A"}, {"node": "B", "kw": 90}]
    data = screen_bench(tables)
    for earlier, total, verdict in ((8, 21, "fail"), (7, 20, "pass"), (0, 13, "pass")):
        found = screens(data, "Q1", {"Q0": earlier}, ["shared secondary"])["shared secondary"]
        assert (found.quantity, found.verdict) == (pytest.approx(total), verdict)


@pytest.mark.parametrize(
    ("tables", "quantity", "verdict", "missing"),
    [
        # All of it on one side of 50 kVA is the worst it can be.
        (_single_phase(2, 10), 20, "pass", ""),
        (_single_phase(2, 11), 22, "not assessed", "which side of the 240 V service it feeds"),
        (small(requests=[request("Q1", "K", "pv", 10)]), 20, "pass", ""),
        (small(requests=[request("Q1", "K", "pv", 11)]), 22, "not assessed",
         "phases; which side of the 240 V service it feeds"),
        (small(requests=[request("Q1", "K", "pv", 40, phases="ABC")]), math.nan, "pass", ""),
        (small(), math.nan, "not assessed", "phases; the transformer that serves it"),
    ],
)  # fmt: skip
def test_the_imbalance_of_a_centre_tap(tables, quantity, verdict, missing):
    found = one(tables, "centre-tap imbalance")
    assert found.quantity == pytest.approx(quantity, nan_ok=True)
    assert (found.verdict, found.missing) == (verdict, missing)


def test_a_service_of_another_voltage_has_no_centre_tap():
    tables = small(requests=[request("Q1", "K", "pv", 40)])
    tables["transformers"][0]["kv_secondary"] = 0.48
    found = one(tables, "centre-tap imbalance")
    assert (found.verdict, found.detail) == ("pass", "0.48 kV service")


# --- thresholds of the `limits` sheet ---------------------------------------------------------

# Each is set so that a request of 30 kW at C, or 10 kW at K, no longer passes.
EDITED = [
    ("screen_peak_pct", 5, "peak load", "fail"),
    ("screen_minimum_pct", 20, "minimum load", "fail"),
    ("screen_fault_pct", 0.2, "fault current", "fail"),
    ("screen_inverter_pu", 60, "fault current", "fail"),
    ("screen_prefault_pu", 0.01, "fault current", "fail"),
    ("screen_interrupting_pct", 80, "interrupting duty", "fail"),
    ("screen_secondary_kw", 9, "shared secondary", "not assessed"),
    ("screen_imbalance_pct", 10, "centre-tap imbalance", "not assessed"),
    ("screen_centre_tap_kv", 0.1, "centre-tap imbalance", "pass"),
    ("screen_rotating_pu", 600, "fault current", "fail"),
]


@pytest.mark.parametrize(("limit", "value", "screen", "verdict"), EDITED)
def test_a_threshold_of_the_limits_sheet_counts(limit, value, screen, verdict):
    node, kw = ("K", 10) if screen in ("shared secondary", "centre-tap imbalance") else ("C", 30)
    if limit == "screen_centre_tap_kv":
        kw = 40
    rows, own = [request("Q1", node, "gas", kw)], [{"technology": "gas", "direction": "export"}]
    machine = {"machine": "rotating"} if limit == "screen_rotating_pu" else {"machine": ""}
    verdicts = []
    for limits in ([], [{"limit": limit, "value": value}]):
        tables = small(requests=rows, technologies=own, limits=limits)
        verdicts.append(
            screens(screen_bench(tables, {"gas": machine}), only=[screen])[screen].verdict
        )
    before = "not assessed" if limit == "screen_centre_tap_kv" else "pass"
    assert verdicts == [before, verdict]


def test_every_threshold_is_a_row_of_the_limits_sheet_with_its_source():
    known = {f.name: f.metadata for f in fields(Settings) if f.name.startswith("screen_")}
    sheet = {name for name, metadata in known.items() if metadata["sheet"]}
    assert sheet == {limit for limit, *_ in EDITED}
    for name, section in (
        ("screen_peak_pct", "2.2.1.2"), ("screen_minimum_pct", "2.4.4.1"),
        ("screen_fault_pct", "2.2.1.4"), ("screen_interrupting_pct", "2.2.1.5"),
        ("screen_secondary_kw", "2.2.1.7"), ("screen_imbalance_pct", "2.2.1.8"),
    ):  # fmt: skip
        assert section in known[name]["source"]
