"""Rules across the cells of lines, conductors, transformers and regulators."""

from __future__ import annotations

import pytest
from feederhost.feeder.tables import check_tables

from feeder_sheets import alarms, feeder, lines, notes, sheet

FORMS = (
    "line, from_node, to_node, length_km, conductor, r1_ohm_per_km, x1_ohm_per_km, r1_ohm, "
    "x1_ohm, r0_ohm_per_km, x0_ohm_per_km, r0_ohm, x0_ohm, b1_us_per_km, charging_uf_per_km, "
    "rating_a, state"
)
LIBRARY = sheet(
    "conductor, r1_ohm_per_km, x1_ohm_per_km, rating_a",
    ["rated", 0.3, 0.4, 300],
    ["bare", 0.3, 0.4, None],
    ["spoilt", 0.3, 0.4, "n/a"],
)


def line(**cells):
    """Return the findings about one line in row 2, whose cells are given by key."""
    usual = {"line": "L1", "from_node": "S", "to_node": "A", "rating_a": 300}
    row = [{**usual, **cells}.get(key) for key in FORMS.split(", ")]
    raw = feeder(lines=sheet(FORMS, row), conductors=LIBRARY, loads=None)
    return [f for f in check_tables(raw).findings if f.sheet == "lines" and f.column != "state"]


@pytest.mark.parametrize(
    "cells",
    [
        {"length_km": 1, "conductor": "rated"},
        {"length_km": 1, "conductor": "rated", "rating_a": None},
        {"length_km": 1, "conductor": "bare"},
        {"length_km": 1, "conductor": "spoilt", "rating_a": None},
        {"length_km": 1, "r1_ohm_per_km": 1, "x1_ohm_per_km": 1},
        {"length_km": 1, "r1_ohm": 1, "x1_ohm": 1},
        {"r1_ohm": 1, "x1_ohm": 1},
        {"r1_ohm": 1, "x1_ohm": 1, "r0_ohm": 2, "x0_ohm": 3},
        {"r1_ohm": 1, "x1_ohm": 0},
        {},
        {"rating_a": "unlimited"},
        {"state": "open", "length_km": 1},
        {"state": "open", "r1_ohm": 0, "x1_ohm": 0},
        {"length_km": 1, "conductor": "rated", "b1_us_per_km": 3},
        {"length_km": 0},
        {"length_km": 0, "r1_ohm": 1, "x1_ohm": 1, "b1_us_per_km": 3},
    ],
)
def test_lines_that_say_enough(cells):
    assert line(**cells) == []


# cells; then severity, column, value, part of the finding, part of the suggestion.
@pytest.mark.parametrize(
    ("cells", "severity", "column", "value", "problem", "suggestion"),
    [
        ({"length_km": 1, "conductor": "ratd"}, "fatal", "conductor", "ratd",
         "no such conductor", "did you mean rated?"),
        ({"length_km": 1, "conductor": "x"}, "fatal", "conductor", "x",
         "no such conductor", "add it to `conductors`"),
        ({"length_km": 1, "conductor": "x", "rating_a": None}, "fatal", "conductor", "x",
         "no such conductor", "add it"),
        ({"conductor": "rated"}, "fatal", "length_km", "", "conductor without a length", "total"),
        ({"r1_ohm_per_km": 1, "x1_ohm_per_km": 1}, "fatal", "length_km", "",
         "r1_ohm_per_km without a length", "r1_ohm and x1_ohm"),
        ({"r1_ohm": 1, "x1_ohm": 1, "r0_ohm_per_km": 1, "x0_ohm_per_km": 1}, "fatal", "length_km",
         "", "r0_ohm_per_km without a length", ""),
        ({"r1_ohm": 1, "x1_ohm": 1, "b1_us_per_km": 1}, "fatal", "length_km", "",
         "b1_us_per_km without a length", ""),
        ({"r1_ohm": 1, "x1_ohm": 1, "charging_uf_per_km": 1}, "fatal", "length_km", "",
         "charging_uf_per_km without a length", ""),
        ({"length_km": 1, "r1_ohm_per_km": 1}, "fatal", "x1_ohm_per_km", "",
         "r1_ohm_per_km is given without x1_ohm_per_km", "same form"),
        ({"length_km": 1, "x1_ohm_per_km": 1}, "fatal", "r1_ohm_per_km", "", "without", ""),
        ({"r1_ohm": 1}, "fatal", "x1_ohm", "", "r1_ohm is given without x1_ohm", ""),
        ({"r1_ohm": 0}, "fatal", "x1_ohm", "", "r1_ohm is given without x1_ohm", ""),
        ({"x1_ohm": 1}, "fatal", "r1_ohm", "", "x1_ohm is given without r1_ohm", ""),
        ({"r1_ohm": 1, "x1_ohm": 1, "r0_ohm": 1}, "warning", "x0_ohm", "", "without",
         "else 3 x1 is taken"),
        ({"r1_ohm": 1, "x1_ohm": 1, "x0_ohm": 1}, "warning", "r0_ohm", "", "without",
         "else 2 r1 is taken"),
        ({"length_km": 1, "r1_ohm": 1, "x1_ohm": 1, "x0_ohm_per_km": 1}, "warning",
         "r0_ohm_per_km", "", "without", "else 2 r1 is taken"),
        ({"length_km": 1, "conductor": "rated", "b1_us_per_km": 1, "charging_uf_per_km": 2},
         "fatal", "charging_uf_per_km", "2", "given twice, here and as b1_us_per_km", "keep one"),
        ({"rating_a": None}, "fatal", "rating_a", "", "no current rating", "write unlimited"),
        ({"rating_a": None, "state": "open"}, "fatal", "rating_a", "", "no current rating", ""),
        ({"length_km": 1, "conductor": "bare", "rating_a": None}, "fatal", "rating_a", "",
         "here or in `conductors`", "write unlimited"),
        ({"rating_a": "n/a"}, "fatal", "rating_a", "n/a", "not available", ""),
        ({"length_km": 1}, "warning", "length_km", "1", "taken as a switch", "unless it is a sw"),
        ({"length_km": 0, "conductor": "rated"}, "note", "length_km", "0", "length of zero", ""),
        ({"r1_ohm": 0, "x1_ohm": 0}, "note", "r1_ohm", "0", "an impedance of zero", ""),
        ({"length_km": "x", "conductor": "rated"}, "fatal", "length_km", "x", "text", ""),
        ({"length_km": 1, "r1_ohm": "x", "x1_ohm": 1}, "fatal", "r1_ohm", "x", "text", ""),
        ({"length_km": 1, "r1_ohm": "x"}, "fatal", "r1_ohm", "x", "text", ""),
        ({"length_km": 1, "conductor": "=A1", "rating_a": None}, "fatal", "conductor", "=A1",
         "formula", ""),
    ],
)  # fmt: skip
def test_lines_that_do_not(cells, severity, column, value, problem, suggestion):
    found = line(**cells)
    assert [(f.severity.value, f.row, f.column, f.value) for f in found] == [
        (severity, 2, column, value)
    ]
    assert problem in found[0].finding
    assert suggestion in found[0].suggestion


@pytest.mark.parametrize(
    "pair", [("r1_ohm_per_km", "r1_ohm"), ("x1_ohm_per_km", "x1_ohm"),
             ("r0_ohm_per_km", "r0_ohm"), ("x0_ohm_per_km", "x0_ohm")],
)  # fmt: skip
def test_impedance_per_km_and_in_all_is_given_twice(pair):
    cells = dict.fromkeys(("r1_ohm", "x1_ohm", "r1_ohm_per_km", "x1_ohm_per_km"), 1)
    cells = {key: 1 for key in cells if key[:2] == pair[0][:2]} | dict.fromkeys(pair, 1)
    found = [f for f in line(length_km=1, **cells) if "given twice" in f.finding]
    assert [(f.severity.value, f.column) for f in found] == [("fatal", pair[1])]


def test_impedance_wins_over_the_conductor_and_that_is_noted_once():
    raw = feeder(
        conductors=LIBRARY.loc[:3],
        lines=lines(
            ["L3", "A", "C", 1, 0.3, 0.4, 300, "rated"],
            ["L4", "A", "D", 1, 0.3, 0.4, 300, "rated"],
            header=", conductor",
        ),
    )
    found = check_tables(raw).findings
    assert alarms(found) == []
    assert (
        "lines conductor: 2 lines give a conductor and an impedance: the impedance is taken "
        "(L3, L4)"
    ) in notes(found, "lines")


def test_conductor_beside_a_total_impedance_needs_no_length():
    found = line(conductor="rated", r1_ohm=1, x1_ohm=1)
    assert [(f.severity.value, f.row, f.column) for f in found] == [("note", 0, "conductor")]


MATRIX = (
    "conductor, r1_ohm_per_km, x1_ohm_per_km, r0_ohm_per_km, x0_ohm_per_km, b1_us_per_km, "
    "charging_uf_per_km, r_aa_ohm_per_km, x_aa_ohm_per_km, r_ab_ohm_per_km, x_ab_ohm_per_km, "
    "r_bb_ohm_per_km, x_bb_ohm_per_km, b_aa_us_per_km, b_ab_us_per_km"
)


def conductor(**cells):
    row = [{"conductor": "W", **cells}.get(key.split("_ohm")[0]) for key in MATRIX.split(", ")]
    found = check_tables(feeder(conductors=sheet(MATRIX, row))).findings
    return [f for f in found if f.sheet == "conductors"]


@pytest.mark.parametrize(
    "cells",
    [
        {"r1": 1, "x1": 1},
        {"r_aa": 1, "x_aa": 1},
        {"r_aa": 0, "x_aa": 1, "b_aa_us_per_km": 0},
        {"r_aa": 1, "x_aa": 1, "r_bb": 1, "x_bb": 1, "r_ab": 0.1, "x_ab": -0.1},
        {"r1": 1, "x1": 1, "r0": 1, "x0": 1},
    ],
)
def test_conductors_that_say_enough(cells):
    assert conductor(**cells) == []


@pytest.mark.parametrize(
    ("cells", "severity", "column", "problem"),
    [
        ({}, "fatal", "r1_ohm_per_km", "without impedance"),
        ({"r1": 1}, "fatal", "x1_ohm_per_km", "is given without"),
        ({"x1": 1}, "fatal", "r1_ohm_per_km", "is given without"),
        ({"r1": 1, "x1": 1, "r0": 1}, "warning", "x0_ohm_per_km", "is given without"),
        ({"r_aa": 1}, "fatal", "x_aa_ohm_per_km", "is given without"),
        ({"r_aa": -1, "x_aa": 1}, "fatal", "r_aa_ohm_per_km", "negative"),
        ({"r_aa": 1, "x_aa": 1, "b_aa_us_per_km": -1}, "fatal", "b_aa_us_per_km", "negative"),
        ({"r_aa": 1, "x_aa": 1, "r_ab": 1, "x_ab": 1}, "fatal", "x_ab_ohm_per_km",
         "a mutual impedance without x_bb_ohm_per_km"),
        ({"r1": 1, "x1": 1, "b1_us_per_km": 1, "charging_uf_per_km": 1}, "fatal",
         "charging_uf_per_km", "given twice"),
        ({"r1": "x", "x1": 1}, "fatal", "r1_ohm_per_km", "text"),
        ({"r1": "x"}, "fatal", "r1_ohm_per_km", "text"),
        ({"r_aa": 1, "x_aa": "?", "r_bb": 1, "x_bb": 1, "r_ab": 1, "x_ab": 1}, "fatal",
         "x_aa_ohm_per_km", "text"),
    ],
)  # fmt: skip
def test_conductors_that_do_not(cells, severity, column, problem):
    found = conductor(**cells)
    assert [(f.severity.value, f.row, f.column) for f in found] == [(severity, 2, column)]
    assert problem in found[0].finding


TRANSFORMER = "transformer, from_node, to_node, kva, kv_primary, kv_secondary, "


@pytest.mark.parametrize(
    ("figures", "column", "problem"),
    [
        ((2, 1.5, None, None), None, ""),
        ((None, None, 1, 1.5), None, ""),
        ((None, None, None, None), "z_pct", "not complete"),
        ((2, None, None, None), "x_over_r", "not complete"),
        ((None, 2, None, None), "z_pct", "not complete"),
        ((None, None, 1, None), "x_pct", "not complete"),
        ((None, None, None, 1), "r_pct", "not complete"),
        ((2, None, 1, None), "x_pct", "not complete"),
        ((2, 1.5, 1, 1.5), "r_pct", "given twice"),
        ((2, 1.5, None, 1.5), "x_pct", "given twice"),
        ((2, None, 1, 1.5), "z_pct", "given twice"),
        (("?", 1.5, None, None), "z_pct", "text"),
    ],
)
def test_transformer_impedance(figures, column, problem):
    table = sheet(
        TRANSFORMER + "z_pct, x_over_r, r_pct, x_pct", ["T", "B", "C", 100, 12.47, 0.48, *figures]
    )
    found = check_tables(feeder(transformers=table)).findings
    wanted = [("fatal", "transformers", 2, column)] if column else []
    assert [a[:4] for a in alarms(found)] == wanted
    about = [f.finding for f in found if f.sheet == "transformers" and f.column == column]
    assert all(problem in text for text in about)


REGULATOR = (
    "regulator, from_node, to_node, setpoint_pu, setpoint_kv, tap, tap_a, tap_b, tap_c, rating_a, "
    "mode, steps"
)


@pytest.mark.parametrize(
    ("cells", "wanted"),
    [
        ({"setpoint_pu": 1.02}, []),
        ({"setpoint_kv": 12.6}, []),
        ({"tap": -16}, []),
        ({"tap_a": 1, "tap_b": 2, "tap_c": 3}, []),
        ({}, [("fatal", "setpoint_pu", "neither a setpoint nor a tap")]),
        ({"setpoint_pu": "?"}, [("fatal", "setpoint_pu", "text")]),
        ({"setpoint_pu": 1.02, "setpoint_kv": 12.6}, [("fatal", "setpoint_kv", "given twice")]),
        ({"tap": 1, "tap_b": 2}, [("fatal", "tap_b", "given twice")]),
        ({"tap": 17}, [("fatal", "tap", "beyond the range of 16 steps")]),
        ({"tap": -17}, [("fatal", "tap", "beyond the range")]),
        ({"tap": 9, "steps": 16}, [("fatal", "tap", "beyond the range of 8 steps")]),
        ({"tap_c": 2.5}, [("warning", "tap_c", "between two steps")]),
        ({"tap": 1, "setpoint_pu": 1}, [("note", "tap", "the tap is taken")]),
        ({"setpoint_pu": 1, "mode": "follow"}, [("warning", "mode", "are held")]),
        ({"setpoint_pu": 1, "rating_a": None}, [("warning", "rating_a", "is not checked")]),
        ({"setpoint_pu": 1, "rating_a": "?"}, [("fatal", "rating_a", "text")]),
    ],
)
def test_regulators(cells, wanted):
    usual = {"regulator": "R", "from_node": "B", "to_node": "C", "rating_a": 200}
    row = [{**usual, **cells}.get(key) for key in REGULATOR.split(", ")]
    tables = check_tables(feeder(regulators=sheet(REGULATOR, row)))
    found = [f for f in tables.findings if f.sheet == "regulators" and f.row == 2]
    assert [(f.severity.value, f.column) for f in found] == [w[:2] for w in wanted]
    assert all(w[2] in f.finding for f, w in zip(found, wanted, strict=True))
    assert tables.sheets["regulators"]["mode"].tolist() == ["hold"]


def test_mode_that_cannot_be_read_stays_blank():
    table = sheet("regulator, from_node, to_node, tap, rating_a, mode", ["R", "B", "C", 1, 9, "x"])
    tables = check_tables(feeder(regulators=table))
    assert alarms(tables.findings) == [("fatal", "regulators", 2, "mode", "x")]
    assert tables.sheets["regulators"]["mode"].tolist() == [""]


def phased(*phases, loads):
    table = lines(header=", phases")
    table["phases"] = list(phases)
    loaded = sheet("node, kw, kvar, phases", *(["B", 1, 0, phase] for phase in loads))
    return check_tables(feeder(lines=table, loads=loaded)).findings


def test_no_phases_anywhere_is_a_balanced_feeder():
    found = phased(None, None, loads=[None])
    assert alarms(found) == []
    assert not any("phases" in note for note in notes(found, "loads"))


def test_phases_on_no_line_are_of_no_use():
    found = phased(None, None, loads=["A", None, "B"])
    assert alarms(found) == [("warning", "loads", 0, "phases", "")]


def test_blank_phases_on_a_line_are_fatal_where_others_give_them():
    found = phased("ABC", None, loads=["A"])
    assert alarms(found) == [("fatal", "lines", 3, "phases", "")]
    assert not any("phases" in note for note in notes(found, "lines"))
    assert alarms(phased("ABC", "AX", loads=["A"])) == [("fatal", "lines", 3, "phases", "AX")]


def test_blank_phases_elsewhere_are_those_of_the_node_and_noted_once():
    found = phased("ABC", "ABC", loads=["A", None, None])
    assert alarms(found) == []
    assert "loads phases: blank in 2 of 3 rows: the phases of the node" in notes(found, "loads")
    assert not any("phases" in n for n in notes(phased("A", "A", loads=["A"]), "loads"))
    assert not any("phases" in n for n in notes(phased("A", "A", loads=["X"]), "loads"))


@pytest.mark.parametrize(
    ("name", "table", "column", "value"),
    [
        ("nodes", sheet("node", ["101"], [101.0]), "node", "101"),
        ("lines", lines(["L1", "B", "C", 1, 0.3, 0.4, 300]), "line", "L1"),
        ("conductors", sheet(MATRIX, ["W", 1, 1], ["W", 1, 1]), "conductor", "W"),
        ("transformers", sheet(TRANSFORMER + "z_pct, x_over_r",
                               *[["T", "B", "C", 9, 12.47, 0.48, 2, 1]] * 2), "transformer", "T"),
        ("regulators", sheet("regulator, from_node, to_node, tap, rating_a",
                             *[["R", "B", "C", 1, 9]] * 2), "regulator", "R"),
        ("technologies", sheet("technology, direction", *[["hp", "import"]] * 2), "technology",
         "hp"),
        ("cases", sheet("case", ["peak"], ["peak"]), "case", "peak"),
        ("limits", sheet("limit, value", ["rounding_kw", 1], ["Rounding (kW)", 1]), "limit",
         "Rounding (kW)"),
    ],
)  # fmt: skip
def test_ids_stand_once(name, table, column, value):
    found = check_tables(feeder(**{name: table})).findings
    row = int(table.index[-1])
    assert alarms(found) == [("fatal", name, row, column, value)]
    assert any("row 2 has this" in f.finding for f in found)


def test_blank_ids_are_not_doubled():
    found = check_tables(feeder(nodes=sheet("node", [None], [None]))).findings
    assert alarms(found) == [("fatal", "nodes", 2, "node", ""), ("fatal", "nodes", 3, "node", "")]
