"""Plausibility of loads, ratings and cases: each slip made once, and its sound neighbour."""

from __future__ import annotations

import pytest
from feederhost.feeder.audit import audit
from feederhost.feeder.tables import check_tables
from feederhost.feeder.topology import root_feeder

from feeder_sheets import (
    KM,
    LIBRARY,
    TAPPED,
    TRANSFORMER,
    audited,
    feeder,
    lines,
    places,
    sheet,
    transformers,
)


def test_sound_feeder_is_left_alone():
    assert audited() == ()


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


def test_findings_come_in_sheet_and_row_order():
    found = audited(
        source=sheet("node, kv, voltage_pu", ["S", 12.47, 122]),
        lines=lines(["L3", "B", "C", 99, 0.3, 0.4, 0.3]),
        loads=sheet("node, kw, kvar", ["B", 40000, 0], ["B", 1, 9]),
    )
    assert [(f.sheet, f.row) for f in found] == [
        ("source", 2), ("lines", 4), ("lines", 4), ("loads", 0), ("loads", 2), ("loads", 3),
    ]  # fmt: skip
