"""What a single cell may hold, and what is said about it otherwise."""

from __future__ import annotations

import datetime as dt
import math

import numpy as np
import pandas as pd
import pytest
from feederhost.errors import Severity
from feederhost.feeder.tables import check_tables

from feeder_sheets import alarms, feeder, lines, sheet


def cell(name, header, value):
    """Read one cell of one sheet; return its value and the findings about it."""
    tables = check_tables(feeder(**{name: sheet(header, [value])}))
    found = [f for f in tables.findings if f.column == header and f.row == 2]
    return tables.sheets[name][header][2], found


@pytest.mark.parametrize(
    ("written", "value"),
    [
        (3, 3.0), (3.5, 3.5), ("3.5", 3.5), (" 3 ", 3.0), ("3.", 3.0), (".5", 0.5), ("+3", 3.0),
        ("1e3", 1000.0), ("1E-3", 0.001), (np.float64(2), 2.0), (np.int64(2), 2.0), ("0", 0.0),
    ],
)  # fmt: skip
def test_numbers(written, value):
    assert cell("loads", "kw", written) == (value, [])


@pytest.mark.parametrize("blank", [None, "", "  ", math.nan, pd.NaT, np.float64("nan")])
def test_blank_cells(blank):
    value, found = cell("loads", "kvar", blank)
    assert math.isnan(value)
    assert found == []
    value, found = cell("loads", "kw", blank)
    assert math.isnan(value)
    assert [(f.severity, f.finding) for f in found] == [
        (Severity.FATAL, "blank, and a value is needed")
    ]
    assert found[0].suggestion == "fill in: peak demand"


@pytest.mark.parametrize(
    ("written", "problem", "suggestion"),
    [
        ("=B2*3", "a formula that was never calculated", "let it calculate"),
        ("#REF!", "the spreadsheet error #REF!", "mend the formula"),
        ("#DIV/0!", "the spreadsheet error #DIV/0!", "mend the formula"),
        ("#N/A", "the spreadsheet error #N/A", "mend the formula"),
        ("n/a", "not available", "leave the cell blank"),
        ("N.A.", "not available", "leave the cell blank"),
        ("abc", "text where a number belongs", "give a number: peak demand"),
        ("1.2 kW", "text where a number belongs", "the unit belongs in the header"),
        ("12%", "text where a number belongs", "the unit belongs in the header"),
        ("1,200", "text where a number belongs", "without commas"),
        ("0,35", "text where a number belongs", "without commas"),
        ("1_000", "text where a number belongs", "unit belongs"),
        ("٣", "text where a number belongs", "give a number"),
        ("nan", "text where a number belongs", "give a number"),
        ("1.2.3", "text where a number belongs", "give a number"),
        ("unlimited", "text where a number belongs", "give a number"),
        (True, "text where a number belongs", "give a number"),
        (dt.datetime(2026, 1, 5), "a date where a number belongs", "format the cell as a number"),
        (dt.date(2026, 1, 5), "a date where a number belongs", "format the cell as a number"),
        (dt.time(9, 30), "a date where a number belongs", "format the cell as a number"),
        (math.inf, "an infinite value", "give a finite number"),
        ("-inf", "an infinite value", "give a finite number"),
        ("Infinity", "an infinite value", "give a finite number"),
        ("∞", "an infinite value", "give a finite number"),
        ("1e999", "a number beyond all bounds", "usual size"),
        (10**400, "a number beyond all bounds", "usual size"),
        (-1, "negative, where that cannot be", "check: peak demand"),
    ],
)
def test_what_is_no_number(written, problem, suggestion):
    value, found = cell("loads", "kw", written)
    assert math.isnan(value)
    assert [(f.severity, f.finding) for f in found] == [(Severity.FATAL, problem)]
    assert suggestion in found[0].suggestion


def test_number_that_overflows_in_its_unit():
    assert alarms(check_tables(feeder(loads=sheet("node, mw", ["B", 1e308]))).findings) == [
        ("fatal", "loads", 2, "mw", "1e+308")
    ]


@pytest.mark.parametrize(
    ("name", "header", "written", "problem", "suggestion"),
    [
        ("source", "kv", 0, "not above 0", "check: nominal voltage"),
        ("source", "kv", -12, "not above 0", "check: nominal voltage"),
        ("cases", "month", 0, "below 1, where that cannot be", "check: month"),
        ("cases", "month", 13, "above 12, where that cannot be", "check: month"),
        ("cases", "hour", 24, "above 23, where that cannot be", "check: hour of the day"),
        ("loads", "power_factor", -0.9, "a negative power factor", "`absorb` or `inject`"),
        ("loads", "power_factor", 0, "not above 0", "check: power factor"),
        ("loads", "power_factor", 95, "above 1, where that cannot be", "95 % is written 0.95"),
        ("loads", "power_factor", 950, "above 1, where that cannot be", "check: power factor"),
        ("lines", "rating_a", "unlimitd", "text where a number belongs", "write unlimited"),
        ("lines", "rating_a", "inf", "an infinite value", "write unlimited"),
    ],
)
def test_bounds(name, header, written, problem, suggestion):
    value, found = cell(name, header, written)
    assert math.isnan(value)
    assert [(f.severity, f.finding) for f in found] == [(Severity.FATAL, problem)]
    assert suggestion in found[0].suggestion


@pytest.mark.parametrize(
    ("name", "header", "written"),
    [("cases", "month", 1), ("cases", "month", 12), ("cases", "hour", 0), ("loads", "kw", 0),
     ("loads", "power_factor", 1), ("loads", "kvar", -5), ("regulators", "range_pct", 50)],
)  # fmt: skip
def test_values_on_the_bounds_pass(name, header, written):
    assert cell(name, header, written) == (written, [])


@pytest.mark.parametrize("written", ["unlimited", "Unlimited", " UNLIMITED "])
def test_unlimited_is_a_legal_rating(written):
    assert cell("lines", "rating_a", written) == (math.inf, [])


@pytest.mark.parametrize(
    ("written", "state"),
    [
        ("closed", "closed"), ("Closed ", "closed"), (1, "closed"), (1.0, "closed"),
        ("1", "closed"), ("1.0", "closed"), (True, "closed"), ("TRUE", "closed"),
        ("N.C.", "closed"), ("NC", "closed"), ("n.c", "closed"), ("N/C", "closed"),
        ("open", "open"), ("OPEN", "open"), (0, "open"), ("0", "open"), (0.0, "open"),
        (False, "open"), ("false", "open"), ("N.O.", "open"), ("NO", "open"), ("n/o", "open"),
    ],
)  # fmt: skip
def test_states_of_lines(written, state):
    assert cell("lines", "state", written) == (state, [])


@pytest.mark.parametrize(
    ("written", "state"),
    [("on", "on"), ("ON", "on"), (1, "on"), ("1", "on"), (True, "on"),
     ("off", "off"), ("Off", "off"), (0, "off"), ("0.0", "off"), (False, "off")],
)  # fmt: skip
def test_states_of_capacitors(written, state):
    assert cell("capacitors", "state", written) == (state, [])


@pytest.mark.parametrize(
    ("name", "header", "written", "suggestion"),
    [
        ("lines", "state", "on", "write closed or open"),
        ("lines", "state", 2, "write closed or open"),
        ("capacitors", "state", "closed", "write on or off"),
        ("lines", "device", 1, "write manual or automatic"),
        ("lines", "device", "none", "write manual or automatic"),
        ("source", "wires", 5, "write 4 or 3"),
        ("technologies", "direction", "generation", "write export or import or both"),
        ("loads", "vars", dt.date(2026, 1, 1), "write absorb or inject"),
    ],
)
def test_words_that_are_no_choice(name, header, written, suggestion):
    value, found = cell(name, header, written)
    assert value == ""
    assert [(f.severity, f.finding, f.suggestion) for f in found] == [
        (Severity.FATAL, "not one of the words read here", suggestion)
    ]


@pytest.mark.parametrize(
    ("written", "wires"), [(4, "4"), (3.0, "3"), ("3", "3"), ("3.0", "3")]
)  # fmt: skip
def test_choices_may_be_numbers(written, wires):
    assert cell("source", "wires", written) == (wires, [])


@pytest.mark.parametrize(
    ("written", "phases"),
    [("ABC", "ABC"), ("cba", "ABC"), ("bc", "BC"), (" a ", "A"), ("CA", "AC"), (None, "")],
)
def test_phases_are_sorted(written, phases):
    assert cell("lines", "phases", written) == (phases, [])


@pytest.mark.parametrize("written", ["ABCN", "AA", "123", 1, "A,B", "L1", "=A", "#REF!"])
def test_what_is_no_set_of_phases(written):
    value, found = cell("lines", "phases", written)
    assert value == ""
    assert [f.severity for f in found] == [Severity.FATAL]


@pytest.mark.parametrize(
    ("written", "text"),
    [
        (dt.datetime(2026, 10, 15), "2026-10-15"),
        (dt.date(2026, 10, 15), "2026-10-15"),
        (pd.Timestamp("2026-10-15"), "2026-10-15"),
        (dt.datetime(2026, 10, 15, 9, 30), "2026-10-15 09:30:00"),
        ("2026-10-15", "2026-10-15"),
        (" winter ", "winter"),
    ],
)
def test_dates_in_text_columns(written, text):
    assert cell("source", "data_date", written) == (text, [])


def test_date_where_a_name_belongs_is_doubted():
    tables = check_tables(
        feeder(
            nodes=sheet("node", [dt.datetime(2026, 4, 3)]),
            lines=lines(
                ["L3", "A", "C", 1, None, None, None, dt.date(2026, 2, 2)], header=", conductor"
            ),
            conductors=sheet(
                "conductor, r1_ohm_per_km, x1_ohm_per_km, rating_a", ["2026-02-02", 1, 1, None]
            ),
        )
    )
    assert alarms(tables.findings) == [
        ("warning", "nodes", 2, "node", "2026-04-03"),
        ("warning", "lines", 4, "conductor", "2026-02-02"),
        ("fatal", "lines", 4, "rating_a", ""),
    ]
    assert tables.sheets["nodes"]["node"].tolist() == ["2026-04-03"]


@pytest.mark.parametrize("written", ["=A1", "#REF!", "n/a"])
def test_names_that_cannot_be_read_are_fatal_and_blank(written):
    tables = check_tables(feeder(loads=sheet("node, kw, kvar", [written, 1, 0])))
    assert alarms(tables.findings) == [("fatal", "loads", 2, "node", written)]
    assert tables.sheets["loads"]["node"].tolist() == [""]


@pytest.mark.parametrize(
    ("name", "table", "column"),
    [
        ("source", sheet("node, kv, prepared_by", ["S", 12.47, "#REF!"]), "prepared_by"),
        ("nodes", sheet("node, x", ["A", "#REF!"]), "x"),
        ("nodes", sheet("node, y", ["A", "#REF!"]), "y"),
        ("nodes", sheet("node, zone", ["A", "#REF!"]), "zone"),
        ("costs", sheet("item, low", ["pole", "#REF!"]), "low"),
    ],
)
def test_bad_cells_that_no_capacity_rests_on_are_warnings(name, table, column):
    tables = check_tables(feeder(**{name: table}))
    assert alarms(tables.findings) == [("warning", name, 2, column, "#REF!")]
    value = tables.sheets[name][column][2]
    assert value == "" or math.isnan(value)
