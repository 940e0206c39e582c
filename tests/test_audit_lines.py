"""Plausibility of lines and conductors: each slip made once, and its sound neighbour."""

from __future__ import annotations

import pytest
from feederhost.errors import Severity

from feeder_sheets import (
    KM,
    LIBRARY,
    LOW,
    TAPPED,
    TRANSFORMER,
    audited,
    lines,
    places,
    sheet,
)


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


def test_lengths_that_are_not_given_do_not_hide_the_others():
    table = sheet(
        "line, from_node, to_node, length_km, r1_ohm, x1_ohm, rating_a",
        *([f"L{k}", f"N{k}" if k else "S", f"N{k + 1}", 70, 20, 25, 300] for k in range(3)),
        ["L9", "N3", "B", None, 1, 1, 300],
    )
    found = audited(lines=table)
    assert [f.finding for f in found] == ["210 km of line in all: long for one feeder"]
