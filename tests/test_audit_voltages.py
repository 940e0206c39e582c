"""Plausibility of voltages: each slip made once, and its sound neighbour."""

from __future__ import annotations

import pytest
from feederhost.errors import Severity

from feeder_sheets import KM, audited, lines, places, sheet, transformers


@pytest.mark.parametrize(
    ("kv", "problem"),
    [
        (12.47, None),
        (69, None),
        (2.4, None),
        (12470, "12470 kV on a feeder"),
        (138, "138 kV on a feeder"),
        (7.2, "7.2 kV is 12.47 kV line to neutral"),
        (7.97, "7.97 kV is 13.8 kV line to neutral"),
        (14.4, "14.4 kV is 24.94 kV line to neutral"),
        (19.9, "19.9 kV is 34.5 kV line to neutral"),
        (11.55, "11.55 kV is 20 kV line to neutral"),
    ],
)
def test_source_kv(kv, problem):
    found = audited(source=sheet("node, kv", ["S", kv]))
    assert [f.finding for f in found] == ([problem] if problem else [])
    assert places(found) == [("warning", "source", 2, "kv", str(kv))] * bool(problem)


# Nominal low voltages over the square root of three: 0.480/1.732 = 0.277, 0.400/1.732 = 0.231.
@pytest.mark.parametrize(
    ("kv", "meant"), [(0.277, 0.48), (0.12, 0.208), (0.23, 0.4), (0.48, None), (0.24, None)]
)
def test_low_voltage_line_to_neutral(kv, meant):
    found = audited(source=sheet("node, kv", ["S", kv]), loads=sheet("node, kw", ["B", 9]),
                    lines=sheet(KM, ["L1", "S", "B", 0.1, 0.3, 0.1, 300]))  # fmt: skip
    hint = [f"voltages are line to line: {meant:g}?"] if meant else []
    assert [f.suggestion for f in found] == hint


@pytest.mark.parametrize(
    ("kv", "problem"),
    [(100, None), (101, "101 kV on a feeder"), (7.243, None)],
)
def test_edges_of_what_a_source_kv_may_be(kv, problem):
    assert [f.finding for f in audited(source=sheet("node, kv", ["S", kv]))] == [problem] * bool(
        problem
    )


# The same list as standard nominal voltages (ANSI C84.1, IEC 60038; from memory), divided by
# 1.732 and rounded as on nameplates.
@pytest.mark.parametrize(
    ("kv", "meant"),
    [(0.12, 0.208), (0.231, 0.4), (0.277, 0.48), (0.347, 0.6), (6.35, 11), (7.2, 12.47),
     (7.62, 13.2), (7.97, 13.8), (11.55, 20), (14.4, 24.94), (19.05, 33), (19.92, 34.5)],
)  # fmt: skip
def test_line_to_neutral_values_of_the_standard_voltages(kv, meant):
    found = audited(transformers=transformers(12.47, kv))
    assert [f.suggestion for f in found] == [f"voltages are line to line: {meant:g}?"]


VOLTS = {
    ("source", "voltage_kv"): sheet("node, kv, voltage_kv", ["S", 12.47, 12470]),
    ("nodes", "kv"): sheet("node, kv", ["A", 12470]),
    ("nodes", "v_min_kv"): sheet("node, v_min_kv", ["A", 12000]),
    ("nodes", "v_max_kv"): sheet("node, v_max_kv", ["A", 13000]),
    ("regulators", "setpoint_kv"): sheet(
        "regulator, from_node, to_node, setpoint_kv, rating_a", ["R", "B", "C", 12600, 300]
    ),
    ("cases", "source_voltage_kv"): sheet("case, source_voltage_kv", ["c", 12470]),
}


@pytest.mark.parametrize(("name", "column"), list(VOLTS))
def test_volts_entered_as_kv(name, column):
    found = audited(**{name: VOLTS[name, column]})
    hints = ["check against the transformers", "volts entered as kV?"]
    assert sorted(f.suggestion for f in found) == hints
    assert {p[:4] for p in places(found)} == {("warning", name, 2, column)}


@pytest.mark.parametrize(
    ("kv", "severity", "hint"),
    [
        ((12.47, 0.48), None, ""),
        ((13.2, 0.48), None, ""),
        ((14.3, 0.48), None, ""),
        ((10.7, 0.48), None, ""),
        ((14.5, 0.48), "warning", "check the rated voltages"),
        ((10.5, 0.48), "warning", "check the rated voltages"),
        ((16.1, 0.48), "warning", "check the rated voltages"),
        ((7.2, 0.48), "warning", "line to neutral given? rated voltages are line to line"),
        ((7.62, 0.48), "warning", "line to neutral given? rated voltages are line to line"),
        ((21.6, 0.48), "warning", "line to neutral given? rated voltages are line to line"),
        ((16.3, 0.48), "fatal", "check the rated voltages"),
        ((8.07, 0.48), "fatal", "check the rated voltages"),
        ((4.16, 0.48), "fatal", "check the rated voltages"),
        ((34.5, 0.48), "fatal", "check the rated voltages"),
    ],
)
def test_transformer_stands_on_its_base(kv, severity, hint):
    found = audited(transformers=transformers(*kv))
    wanted = [(severity, "transformers", 2, "kv_primary", f"{kv[0]:g}")] if severity else []
    assert places(found) == wanted
    assert all(f.suggestion == hint for f in found)
    assert all("kV on a base of 12.47 kV" in f.finding for f in found)


def test_step_up_transformer_is_judged_at_its_secondary():
    assert audited(transformers=transformers(34.5, 12.47, turned=True)) == ()
    found = audited(transformers=transformers(12.47, 0.48, turned=True))
    assert places(found) == [("fatal", "transformers", 2, "kv_secondary", "0.48")]


def with_phases(phases):
    table = lines(header=", phases")
    table["phases"] = "ABC"
    return {"lines": table, "transformers": transformers(7.2, 0.277, phases=phases)}


def test_one_phase_windings_are_given_as_on_the_nameplate():
    assert audited(**with_phases("A")) == ()
    assert [(f.column, f.value) for f in audited(**with_phases("ABC"))] == [
        ("kv_secondary", "0.277"),
        ("kv_primary", "7.2"),
    ]
    wrong = transformers(4.16, 0.24, phases="A")
    found = audited(lines=with_phases("A")["lines"], transformers=wrong)
    assert places(found) == [("fatal", "transformers", 2, "kv_primary", "4.16")]


def test_secondary_in_volts():
    found = audited(transformers=transformers(12.47, 480))
    assert places(found) == [("warning", "transformers", 2, "kv_secondary", "480")]
    assert [f.suggestion for f in found] == ["volts entered as kV?"]


@pytest.mark.parametrize(
    ("name", "table", "column", "hint"),
    [
        ("nodes", sheet("node, kv", ["B", 12.0], ["D", 0.5]), None, ""),
        ("nodes", sheet("node, kv", ["B", 10.5]), "kv", "check against the transformers"),
        ("nodes", sheet("node, kv", ["D", 12.47]), "kv", "check against the transformers"),
        ("nodes", sheet("node, v_min_kv", ["B", 7.0]), "v_min_kv", "line to neutral given?"),
        ("nodes", sheet("node, v_max_kv", ["B", 7.5]), "v_max_kv", "line to neutral given?"),
        ("source", sheet("node, kv, voltage_kv", ["S", 12.47, 7.3]), "voltage_kv",
         "line to neutral given?"),
        ("cases", sheet("case, source_voltage_kv", ["c", 7.3]), "source_voltage_kv",
         "line to neutral given?"),
        ("regulators", sheet("regulator, from_node, to_node, setpoint_kv, rating_a",
                             ["R", "B", "C", 7.3, 300]), "setpoint_kv", "line to neutral given?"),
        ("regulators", sheet("regulator, from_node, to_node, setpoint_kv, rating_a",
                             ["R", "B", "C", 12.6, 300]), None, ""),
    ],
)  # fmt: skip
def test_kv_at_a_node_fits_the_tree(name, table, column, hint):
    found = audited(transformers=transformers(12.47, 0.48), **{name: table})
    assert [(f.severity, f.sheet, f.column) for f in found] == (
        [(Severity.WARNING, name, column)] if column else []
    )
    assert all(f.suggestion == hint for f in found)


def test_nodes_line_to_neutral_is_called_by_its_name():
    found = audited(nodes=sheet("node, kv", ["B", 7.2]))
    assert [f.suggestion for f in found] == ["line to neutral given?"]


PER_UNIT = {
    ("source", "voltage_pu"): "node, kv, voltage_pu",
    ("nodes", "v_min_pu"): "node, kv, v_min_pu",
    ("nodes", "v_max_pu"): "node, kv, v_max_pu",
    ("cases", "source_voltage_pu"): "case, hours, source_voltage_pu",
    ("limits", "value"): "limit, value",
}


@pytest.mark.parametrize(("name", "column"), list(PER_UNIT))
@pytest.mark.parametrize(
    ("value", "hint"),
    [
        (0.8, None),
        (1.2, None),
        (0.7, "voltages stay between 0.8 and 1.2 pu"),
        (1.3, "voltages stay between 0.8 and 1.2 pu"),
        (12.47, "voltages stay between 0.8 and 1.2 pu"),
        (102, "percent? 102 % is 1.02 pu"),
        (95, "percent? 95 % is 0.95 pu"),
        (79, "voltages stay between 0.8 and 1.2 pu"),
        (80, "percent? 80 % is 0.8 pu"),
        (107, "percent? 107 % is 1.07 pu"),
        (108, "volts on a 120 V base? 108 V is 0.9 pu"),
        (144, "volts on a 120 V base? 144 V is 1.2 pu"),
        (145, "voltages stay between 0.8 and 1.2 pu"),
        (122, "volts on a 120 V base? 122 V is 1.017 pu"),
        (114, "volts on a 120 V base? 114 V is 0.95 pu"),
    ],
)
def test_voltages_in_percent_or_volts(name, column, value, hint):
    row = {"source": ["S", 12.47], "nodes": ["A", 12.47], "cases": ["c", 1]}.get(name)
    row = row or ["v_max_pu" if value > 1 else "v_min_pu"]
    found = audited(**{name: sheet(PER_UNIT[name, column], [*row, value])})
    assert [f.suggestion for f in found] == ([hint] if hint else [])
    assert all((f.sheet, f.row, f.column) == (name, 2, column) for f in found)


def test_setpoint_in_volts():
    header = "regulator, from_node, to_node, setpoint_pu, rating_a"
    found = audited(regulators=sheet(header, ["R", "B", "C", 122, 300]))
    assert places(found) == [("warning", "regulators", 2, "setpoint_pu", "122")]


@pytest.mark.parametrize(
    ("name", "value", "alarm"),
    [
        ("voltage_change_mv_pct", 0.03, True),
        ("voltage_change_mv_pct", 0, False),
        ("voltage_change_mv_pct", 0.1, True),
        ("voltage_change_mv_pct", 0.11, False),
        ("voltage_change_lv_pct", 0.05, True),
        ("voltage_change_lv_pct", 0.11, False),
        ("unbalance_pct", 0.02, True),
        ("unbalance_pct", 0.11, False),
        ("line_loading_pct", 1, True),
        ("line_loading_pct", 2.1, False),
        ("transformer_loading_pct", 1.2, True),
        ("transformer_loading_pct", 2.1, False),
        ("line_loading_pct", 80, False),
        ("worsen_loading_pct", 0.05, False),
        ("V min primary pu", 95, True),
        ("v_max_primary_pu", 105, True),
    ],
)
def test_limits_in_the_wrong_measure(name, value, alarm):
    rows = [[name, value]]
    if value == 95:
        rows.append(["v_max_primary_pu", 105])
    found = audited(limits=sheet("limit, value", *rows))
    assert [f.row for f in found] == list(range(2, 2 + len(rows))) * alarm
    assert all((f.severity, f.column) == (Severity.WARNING, "value") for f in found)


@pytest.mark.parametrize(
    ("z", "hint"),
    [
        (0.2, None),
        (25, None),
        (0.0575, "per unit entered as percent?"),
        (26, "percent is on the unit's own kVA"),
    ],
)
def test_impedance_of_transformers(z, hint):
    found = audited(transformers=transformers(12.47, 0.48, z=z))
    assert [f.suggestion for f in found] == ([hint] if hint else [])
    assert places(found) == [("warning", "transformers", 2, "z_pct", f"{z:g}")] * bool(hint)


# hypot(0.03, 0.04) = 0.05; hypot(3, 4) = 5; hypot(30, 40) = 50.
@pytest.mark.parametrize(
    ("r", "x", "problem"),
    [(3, 4, None), (0.03, 0.04, "an impedance of 0.05 %"), (30, 40, "an impedance of 50 %")],
)
def test_impedance_of_transformers_in_two_parts(r, x, problem):
    header = "transformer, from_node, to_node, kva, kv_primary, kv_secondary, r_pct, x_pct"
    found = audited(transformers=sheet(header, ["T", "B", "D", 500, 12.47, 0.48, r, x]))
    assert [(f.column, f.finding) for f in found] == ([("r_pct", problem)] if problem else [])


# 10 % in 16 steps is 0.00625 a step (the step regulator of Kersting, example 7.5).
@pytest.mark.parametrize(("band", "alarm"), [(None, False), (0.00625, False), (0.006, True)])
def test_band_narrower_than_a_step(band, alarm):
    header = "regulator, from_node, to_node, setpoint_pu, rating_a, bandwidth_pu"
    found = audited(regulators=sheet(header, ["R", "B", "C", 1.02, 300, band]))
    assert places(found) == [("warning", "regulators", 2, "bandwidth_pu", "0.006")] * alarm
