"""Plausibility warnings: each slip is made once, and its neighbour within reason is not."""

from __future__ import annotations

import pytest
from feederhost.errors import Severity
from feederhost.feeder.audit import audit
from feederhost.feeder.tables import check_tables
from feederhost.feeder.topology import root_feeder

from feeder_sheets import feeder, lines, sheet


def audited(**sheets):
    """Return the audit of the small feeder with sheets replaced; its data must be readable."""
    tables = check_tables(feeder(**sheets))
    assert [f for f in tables.findings if f.severity is Severity.FATAL] == []
    topology, findings = root_feeder(tables)
    assert [f for f in findings if f.severity is Severity.FATAL] == []
    return audit(tables, topology)


def places(findings):
    return [(f.severity.value, f.sheet, f.row, f.column, f.value) for f in findings]


def test_sound_feeder_is_left_alone():
    assert audited() == ()


KM = "line, from_node, to_node, length_km, r1_ohm_per_km, x1_ohm_per_km, rating_a"


# r, x in ohm per km of the line S - A at 12.47 kV.  The sound ones are printed values of
# conductors: 795 kcmil and #4 ACSR (manufacturer's sheet), 240 mm2 cable (IEC 60228), the
# 1/0 line of Kersting's example.
@pytest.mark.parametrize(
    ("r", "x", "hint"),
    [
        (0.079, 0.358, None),
        (1.713, 0.559, None),
        (0.125, 0.112, None),
        (0.696, 0.518, None),
        (0.01, 0.05, None),
        (6.0, 0.3, None),
        (0.3, 0.02, None),
        (0.3, 0.65, None),
        (0.05, 0.4, None),
        (0.3, 0.019, "ohm per kft entered as per km?"),
        (0.0031, 0.1, "ohm per kft entered as per km?"),
        (9.0, 0.035, "ohm per mile entered as per km?"),
        (31.6, 0.106, "ohm per mile entered as per kft?"),
        (0.05, 0.401, "check that r and x are not swapped"),
        (0.009, 0.05, "ohm per kft entered as per km?"),
        (0.004, 0.12, "ohm per kft entered as per km?"),
        (6.1, 0.7, "ohm per mile entered as per km?"),
        (6.1, 0.3, "ohm per mile entered as per km?"),
        (0.7, 1.3, "ohm per mile entered as per kft?"),
        (1.0, 3.0, "ohm per mile entered as per kft?"),
        (30.0, 5.0, "check length and unit"),
        (0.3, 0.001, "check length and unit"),
        (0.0, 0.4, "check length and unit"),
        (0.3, 0.0, "check length and unit"),
        (0.04, 0.4, "check that r and x are not swapped"),
        (4.0, 0.03, "check that r and x are not swapped"),
        (0.696, 0.834, "ohm per mile entered as per km?"),
    ],
)
def test_impedance_per_km(r, x, hint):
    found = audited(lines=sheet(KM, ["L1", "S", "B", 1, r, x, 300]))
    assert [f.suggestion for f in found] == ([hint] if hint else [])
    assert all((f.severity, f.sheet, f.row) == (Severity.WARNING, "lines", 2) for f in found)
    assert all("ohm per km" in f.finding for f in found)


@pytest.mark.parametrize(("x", "column"), [(0.834, "x1_ohm"), (3.0, "r1_ohm")])
def test_impedance_in_all_is_judged_per_km(x, column):
    table = sheet(
        "line, from_node, to_node, length_km, r1_ohm, x1_ohm, rating_a",
        ["L1", "S", "A", 2, 1.4, x * 2, 300],
        ["L2", "A", "B", None, 1.4, 99, 300],
        ["L3", "B", "C", 0, 1.4, 99, 300],
    )
    found = audited(lines=table)
    assert places(found) == [("warning", "lines", 2, column, f"{x * 2:g}" if x < 1 else "1.4")]


LIBRARY = "conductor, r1_ohm_per_km, x1_ohm_per_km, rating_a"


@pytest.mark.parametrize(("used", "wanted"), [("W", 1), ("V", 0)])
def test_conductor_is_judged_once_and_where_it_is_used(used, wanted):
    table = lines(header=", conductor")
    table["r1_ohm_per_km"] = table["x1_ohm_per_km"] = None
    table["conductor"] = used
    library = sheet(LIBRARY, ["W", 0.3, 1.3, 300], ["V", 0.3, 0.4, 300], ["U", 0.3, 1.3, 300])
    found = audited(lines=table, conductors=library)
    assert places(found) == [("warning", "conductors", 2, "r1_ohm_per_km", "0.3")] * wanted


def test_conductor_that_serves_both_voltages_is_judged_by_the_higher():
    table = sheet(
        "line, from_node, to_node, length_km, conductor",
        ["L1", "S", "A", 1, "W"],
        ["L2", "B", "C", 0.1, "W"],
    )
    found = audited(
        lines=table,
        transformers=sheet(TRANSFORMER, ["T", "A", "B", 500, 12.47, 0.48, 2, 1]),
        conductors=sheet(LIBRARY, ["W", 0.3, 0.01, 300]),
    )
    assert places(found) == [("warning", "conductors", 2, "r1_ohm_per_km", "0.3")]


def test_phase_matrices_are_left_alone():
    library = sheet("conductor, r_aa_ohm_per_km, x_aa_ohm_per_km, rating_a", ["W", 9, 9, 300])
    table = sheet("line, from_node, to_node, length_km, conductor", ["L1", "S", "B", 1, "W"])
    assert audited(lines=table, conductors=library) == ()


LOW = sheet("node, kv", ["S", 0.48])
TRANSFORMER = "transformer, from_node, to_node, kva, kv_primary, kv_secondary, z_pct, x_over_r"


def test_low_voltage_lines_may_have_any_reactance_and_no_odd_resistance():
    def found(r, x):
        return audited(source=LOW, lines=sheet(KM, ["L1", "S", "B", 0.1, r, x, 300]))

    assert found(0.3, 0.01) == ()
    assert found(0.3, 0) == ()
    assert found(5, 0.05) == ()
    assert [f.suggestion for f in found(5, 0.049)] == ["check that r and x are not swapped"]
    assert [f.suggestion for f in found(6.2, 0.08)] == ["ohm per mile entered as per km?"]


def test_switches_are_not_judged():
    table = sheet("line, from_node, to_node, rating_a", ["L1", "S", "B", 300])
    assert audited(lines=table) == ()


@pytest.mark.parametrize(
    ("length", "hint"),
    [
        (80, None),
        (81, "feet or metres entered as km? (0.0247 km if feet, 0.081 km if metres)"),
        (2640, "feet or metres entered as km? (0.805 km if feet, 2.64 km if metres)"),
    ],
)
def test_lengths(length, hint):
    found = audited(lines=sheet(KM, ["L1", "S", "B", length, 0.3, 0.4, 300]))
    assert [f.suggestion for f in found] == ([hint] if hint else [])
    assert places(found) == [("warning", "lines", 2, "length_km", str(length))] * bool(hint)
    assert all(f.finding == f"a line of {length} km" for f in found)


@pytest.mark.parametrize(("length", "alarm"), [(2.0, False), (2.1, True)])
@pytest.mark.parametrize("kv", [0.48, 1.0])
def test_low_voltage_lines_of_many_km(kv, length, alarm):
    source = sheet("node, kv", ["S", kv])
    found = audited(source=source, lines=sheet(KM, ["L1", "S", "B", length, 0.3, 0.1, 300]))
    assert [f.finding for f in found] == ["a low-voltage line of 2.1 km"] * alarm


@pytest.mark.parametrize(("last", "alarm"), [(40, False), (41, True)])
def test_length_of_the_whole_feeder(last, alarm):
    table = sheet(
        KM,
        *([f"L{k}", f"N{k}" if k else "S", f"N{k + 1}", 80, 0.3, 0.4, 300] for k in range(2)),
        ["L9", "N2", "B", last, 0.3, 0.4, 300],
    )
    found = audited(lines=table)
    assert places(found) == [("warning", "lines", 0, "length_km", "")] * alarm
    assert all(f.finding == "201 km of line in all: long for one feeder" for f in found)


@pytest.mark.parametrize(
    ("count", "each", "alarm"), [(3, 0.03, True), (3, 0.04, False), (2, 0.03, False)]
)
def test_feeder_that_is_too_short(count, each, alarm):
    nodes = ["S", *(f"N{k}" for k in range(1, count)), "B"]
    table = sheet(
        KM, *([f"L{k}", nodes[k], nodes[k + 1], each, 0.3, 0.4, 300] for k in range(count))
    )
    found = audited(lines=table)
    assert [f.suggestion for f in found] == ["km entered as metres or feet?"] * alarm
    assert all("90 m in all" in f.finding for f in found)


def test_short_feeders_of_low_voltage_are_common():
    nodes = ["S", "N1", "N2", "B"]
    rows = ([f"L{k}", nodes[k], nodes[k + 1], 0.02, 0.3, 0.1, 300] for k in range(3))
    assert audited(source=sheet("node, kv", ["S", 1.0]), lines=sheet(KM, *rows)) == ()


TAPPED = "regulator, from_node, to_node, tap, rating_a"


@pytest.mark.parametrize(
    ("rating", "hint"),
    [
        (1, None),
        (5000, None),
        ("unlimited", None),
        (0.3, "kA entered as A?"),
        (5001, "write unlimited where there is no limit"),
    ],
)
def test_ratings(rating, hint):
    wanted = [hint] if hint else []
    table = lines()
    table["rating_a"] = [rating, None]
    table["conductor"] = [None, "W"]
    table.loc[3, ["r1_ohm_per_km", "x1_ohm_per_km"]] = None
    found = audited(
        lines=table,
        conductors=sheet(LIBRARY, ["W", 0.3, 0.4, rating]),
        regulators=sheet(TAPPED, ["R", "B", "C", 1, rating]),
        loads=sheet("node, kw, kvar", ["B", 10, 0]),
    )
    assert [(f.sheet, f.column, f.suggestion) for f in found] == [
        (name, "rating_a", hint) for name in ("lines", "conductors", "regulators") if wanted
    ]


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


def transformers(*kv, kva=500, phases=None, turned=False, z=2):
    ends = ["D", "B"] if turned else ["B", "D"]
    return sheet(TRANSFORMER + ", phases", ["T", *ends, kva, *kv, z, 1.5, phases])


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


@pytest.mark.parametrize("name", ["loads", "generators"])
@pytest.mark.parametrize(("mw", "alarm"), [(20, False), (20.1, True)])
def test_rows_of_many_megawatts(name, mw, alarm):
    table = lines()
    table["rating_a"] = "unlimited"
    more = {} if name == "loads" else {"loads": None}
    found = audited(lines=table, **{**more, name: sheet("node, mw", ["B", mw])})
    assert places(found) == [("warning", name, 2, "mw", "20.1")] * alarm


# Head S - A: sqrt(3) x 12.47 kV x 10 A = 215.99 kVA, five times 1079.9 kVA.
@pytest.mark.parametrize(
    ("kw", "kvar", "alarm"), [(1079, 0, False), (1081, 0, True), (900, 600, True)]
)
@pytest.mark.parametrize("by", ["line", "conductor", "regulator"])
def test_load_beyond_what_the_head_carries(kw, kvar, alarm, by):
    table = lines()
    table["rating_a"] = [10, 300]
    more = {}
    if by == "conductor":
        table["rating_a"] = [None, 300]
        table["conductor"] = ["W", None]
        table.loc[2, ["r1_ohm_per_km", "x1_ohm_per_km"]] = None
        more["conductors"] = sheet(LIBRARY, ["W", 0.3, 0.4, 10])
    if by == "regulator":
        table = lines().loc[3:]
        more["regulators"] = sheet(TAPPED, ["R", "S", "A", 1, 10])
    found = audited(lines=table, loads=sheet("node, kw, kvar", ["B", kw, kvar]), **more)
    assert places(found) == [("warning", "loads", 0, "kw", "")] * alarm
    assert all("behind branches that carry 216 kVA" in f.finding for f in found)


def test_head_of_two_branches_carries_both():
    table = sheet(KM, ["L1", "S", "A", 1, 0.3, 0.4, 10], ["L2", "S", "B", 1, 0.3, 0.4, 10])
    assert audited(lines=table, loads=sheet("node, kw", ["B", 2000])) == ()


def test_head_without_limit_carries_everything():
    table = sheet(KM, ["L1", "S", "A", 1, 0.3, 0.4, 10], ["L2", "S", "B", 1, 0.3, 0.4, "unlimited"])
    assert audited(lines=table, loads=sheet("node, kw", ["B", 9000])) == ()


def test_head_regulator_without_rating_is_taken_as_able():
    table = lines().loc[3:]
    regulators = sheet(TAPPED, ["R", "S", "A", 1, None])
    loads = sheet("node, kw", ["B", 9000])
    assert audited(lines=table, regulators=regulators, loads=loads) == ()


@pytest.mark.parametrize(("kw", "alarm"), [(500, False), (501, True)])
def test_head_transformer_carries_its_rating(kw, alarm):
    found = audited(
        lines=sheet(KM, ["L1", "A", "B", 1, 0.3, 0.1, 10]),
        transformers=sheet(TRANSFORMER, ["T", "S", "A", 100, 12.47, 4.16, 4, 2]),
        loads=sheet("node, kw", ["B", kw]),
    )
    assert [f.sheet for f in found] == ["transformers"] + ["loads"] * alarm


@pytest.mark.parametrize(
    ("kv", "kw", "alarm"),
    [(12.47, 0.9, True), (12.47, 1, False), (1, 0.9, False), (12.47, 0, False)],
)
def test_feeder_that_serves_next_to_nothing(kv, kw, alarm):
    found = audited(source=sheet("node, kv", ["S", kv]), loads=sheet("node, kw", ["B", kw]))
    assert [f.suggestion for f in found] == ["MW entered as kW?"] * alarm


@pytest.mark.parametrize(
    ("row", "alarm"),
    [
        (["B", 10, 30], False),
        (["B", 10, 31], True),
        (["B", 10, -31], True),
        (["B", 0, 1], True),
        (["B", 0, 0], False),
    ],
)
def test_more_vars_than_watts(row, alarm):
    found = audited(loads=sheet("node, kw, kvar", row, ["B", 50, 0]))
    assert places(found) == [("warning", "loads", 2, "kvar", str(row[2]))] * alarm


@pytest.mark.parametrize(
    ("banks", "place"),
    [
        ([300], None),
        ([100, 200], None),
        ([0], None),
        ([1], None),
        ([0.6], (2, "0.6")),
        ([500], None),
        ([50, 501], (3, "501")),
        ([200, 300], None),
        ([300, 300], (0, "")),
    ],
)
def test_capacitors(banks, place):
    """The feeder carries hypot(400, 300) = 500 kVA."""
    found = audited(
        capacitors=sheet("node, kvar", *(["B", kvar] for kvar in banks)),
        loads=sheet("node, kw, kvar", ["B", 400, 300]),
    )
    wanted = [("warning", "capacitors", place[0], "kvar", place[1])] if place else []
    assert places(found) == wanted


def test_small_capacitors_belong_on_low_voltage():
    bank = sheet("node, kvar", ["B", 0.6])
    table = sheet(KM, ["L1", "S", "B", 0.1, 0.3, 0.1, 300])
    assert audited(source=sheet("node, kv", ["S", 1]), lines=table, capacitors=bank) == ()


def test_capacitors_on_a_feeder_without_load_are_left_alone():
    assert audited(loads=None, capacitors=sheet("node, kvar", ["B", 600])) == ()


# 100 kVA, three times 300 kVA; the load sits one line below the transformer.
@pytest.mark.parametrize(
    ("loads", "alarm"),
    [
        ([["E", 300, 0, None, None]], False),
        ([["E", 301, 0, None, None]], True),
        ([["E", 200, 0, None, None], ["D", 101, 0, None, None]], True),
        ([["E", 200, 250, None, None]], True),
        ([["E", 280, None, 0.9, None]], True),  # 280/0.9 = 311 kVA
        ([["E", 269, None, 0.9, None]], False),  # 269/0.9 = 299 kVA
        ([["E", 269, None, 0.9, "inject"]], False),
        ([["E", 250, None, 0.9, None], ["D", 0, 130, None, None]], True),
        ([["E", 280, None, 0.9, "inject"], ["D", 0, 130, None, None]], False),
        ([["E", 280, None, None, None], ["B", 900, 0, None, None]], False),
    ],
)
@pytest.mark.parametrize("turned", [False, True])
def test_load_behind_a_transformer(loads, alarm, turned):
    kv = (0.48, 12.47) if turned else (12.47, 0.48)
    found = audited(
        lines=lines(["L3", "D", "E", 0.1, 0.3, 0.1, 300]),
        transformers=transformers(*kv, kva=100, turned=turned),
        loads=sheet("node, kw, kvar, power_factor, vars", *loads),
    )
    found = [f for f in found if f.sheet == "transformers"]
    assert places(found) == [("warning", "transformers", 2, "kva", "100")] * alarm


CASES = "case, hours, load_scale, pv_scale, hp_scale, load_scale.homes"


@pytest.mark.parametrize(
    ("column", "value", "alarm"),
    [
        ("load_scale", 2, False),
        ("load_scale", 2.1, True),
        ("load_scale", 85, True),
        ("pv_scale", 100, True),
        ("hp_scale", 30, True),
        ("load_scale.homes", 40, True),
    ],
)
def test_scales_in_percent(column, value, alarm):
    table = sheet(CASES, ["a", 1], ["b", 1], ["c", 1])
    table.loc[[3, 4], column] = value
    found = audited(cases=table)
    assert places(found) == [("warning", "cases", 3, column, str(value))] * alarm
    assert all("2 of 3 cases" in f.finding for f in found)


@pytest.mark.parametrize(("hours", "alarm"), [(8000, False), (8001, True)])
def test_hours_beyond_a_year(hours, alarm):
    found = audited(cases=sheet(CASES, ["a", 784], ["b", hours], ["c", None]))
    assert places(found) == [("warning", "cases", 0, "hours", "")] * alarm


def test_figures_that_cannot_be_read_are_passed_over():
    """The audit runs on feeders with fatal findings too, so that all comes in one go."""
    raw = feeder(
        loads=sheet("node, kw, kvar", ["X", 5, 0], ["B", "?", 9], ["B", 500, 0]),
        capacitors=sheet("node, kvar", ["B", "?"], ["B", 300], ["B", 300]),
        lines=lines(["L3", "B", "C", "?", 0.3, 0.4, 300], ["L4", "C", "D", 99, 0.3, 0.4, 300]),
    )
    tables = check_tables(raw)
    topology, _ = root_feeder(tables)
    found = audit(tables, topology)
    assert places(found) == [
        ("warning", "lines", 5, "length_km", "99"),
        ("warning", "capacitors", 0, "kvar", ""),
    ]
    assert found[1].finding == "600 kvar in all on a feeder with 500 kVA of load"


def test_lengths_that_are_not_given_do_not_hide_the_others():
    table = sheet(
        "line, from_node, to_node, length_km, r1_ohm, x1_ohm, rating_a",
        *([f"L{k}", f"N{k}" if k else "S", f"N{k + 1}", 70, 20, 25, 300] for k in range(3)),
        ["L9", "N3", "B", None, 1, 1, 300],
    )
    found = audited(lines=table)
    assert [f.finding for f in found] == ["210 km of line in all: long for one feeder"]


def test_findings_come_in_sheet_and_row_order():
    found = audited(
        source=sheet("node, kv, voltage_pu", ["S", 12.47, 122]),
        lines=lines(["L3", "B", "C", 99, 0.3, 0.4, 0.3]),
        loads=sheet("node, kw, kvar", ["B", 40000, 0], ["B", 1, 9]),
    )
    assert [(f.sheet, f.row) for f in found] == [
        ("source", 2), ("lines", 4), ("lines", 4), ("loads", 0), ("loads", 2), ("loads", 3),
    ]  # fmt: skip
