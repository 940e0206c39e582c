"""Raw sheets to checked tables: types, headers, defaults, and every fault in one go."""

from __future__ import annotations

import datetime as dt
import math
from itertools import pairwise
from typing import Any

import numpy as np
import pandas as pd
import pytest
from feederhost.errors import Finding, Severity, fatal
from feederhost.feeder.audit import audit
from feederhost.feeder.tables import Tables, check_tables
from feederhost.feeder.topology import root_feeder
from feederhost.schema import INPUT, NUMBER
from feederhost.settings import Settings
from hypothesis import given, settings
from hypothesis import strategies as st

from feeder_sheets import alarms, feeder, lines, notes, sheet


def test_sound_feeder_raises_no_alarm():
    assert alarms(check_tables(feeder()).findings) == []


def test_every_sheet_and_column_of_the_schema_is_there_and_typed():
    tables = check_tables(feeder())
    assert list(tables.sheets) == list(INPUT)
    for name, table in tables.sheets.items():
        assert table.index.name == "row"
        for column in (c for c in INPUT[name].columns if not c.pattern):
            wanted = np.dtype("float64") if column.kind == NUMBER else np.dtype(object)
            assert table[column.key].dtype == wanted, (name, column.key)


def test_row_numbers_are_those_of_the_spreadsheet():
    raw = feeder()
    raw["lines"].index = [3, 7]
    assert check_tables(raw).sheets["lines"].index.tolist() == [3, 7]


@pytest.mark.parametrize("written", ["101", "101.0", " 101 ", 101, 101.0, np.int64(101), "101.00"])
def test_node_names_101_are_the_same_name(written):
    tables = check_tables(feeder(source=sheet("node, kv", [written, 12.47])))
    assert tables.sheets["source"]["node"].tolist() == ["101"]


@pytest.mark.parametrize(
    ("written", "name"),
    [
        ("007", "007"),
        (101.5, "101.5"),
        ("N-7", "N-7"),
        (True, "TRUE"),
        (1e300, "1e+300"),
        (-0.0, "0"),
        ("4/0", "4/0"),
    ],
)
def test_names_are_text(written, name):
    assert check_tables(feeder(nodes=sheet("node", [written]))).sheets["nodes"]["node"][2] == name


def test_numbers_with_more_digits_than_python_prints_are_survived():
    raw = feeder(loads=sheet("node, kw, kvar", ["B", 10**5000, 0]))
    assert [f.column for f in fatal(check_tables(raw).findings)] == ["kw"]


# Factors: 1 ft = 0.3048 m and 1 mile = 1609.344 m (international yard and pound, 1959).
@pytest.mark.parametrize(
    ("header", "key", "written", "value"),
    [
        ("length_km", "length_km", 2, 2.0),
        ("length_m", "length_km", 1500, 1.5),
        ("length_ft", "length_km", 1000, 0.3048),
        ("length_mi", "length_km", "1", 1.609344),
        ("r1_ohm_per_mi", "r1_ohm_per_km", 1.609344, 1.0),
        ("r1_ohm_per_kft", "r1_ohm_per_km", 0.3048, 1.0),
        ("b1_us_per_mi", "b1_us_per_km", 1.609344, 1.0),
        ("Length (km)", "length_km", " 2.5 ", 2.5),
        ("LENGTH [ FT ]", "length_km", 1000, 0.3048),
        ("R1 {ohm per km}", "r1_ohm_per_km", ".5", 0.5),
        ("\ufefflength\nkm ", "length_km", "1e3", 1000.0),
    ],
)
def test_headers_carry_their_unit(header, key, written, value):
    table = check_tables(feeder(lines=sheet(header, [written]))).sheets["lines"]
    assert table[key].tolist() == [pytest.approx(value, rel=1e-15)]


@pytest.mark.parametrize(
    ("sheet_name", "header", "key", "value"),
    [
        ("loads", "mw", "kw", 1500.0),
        ("loads", "mvar", "kvar", 1500.0),
        ("transformers", "mva", "kva", 1500.0),
        ("transformers", "no_load_mw", "no_load_kw", 1500.0),
        ("source", "transformer_mva", "transformer_kva", 1500.0),
        ("cases", "bank_other_mw", "bank_other_kw", 1500.0),
        ("cases", "bank_other_mvar", "bank_other_kvar", 1500.0),
    ],
)
def test_powers_carry_their_unit(sheet_name, header, key, value):
    raw = feeder(**{sheet_name: sheet(header, [1.5])})
    assert check_tables(raw).sheets[sheet_name][key].tolist() == [value]


def test_pattern_columns_stand_under_the_folded_header():
    raw = feeder(
        cases=sheet("case, Load scale.Small Homes, Heat pump_scale", ["c", 0.5, 0.25], ["d"]),
        loads=sheet("node, kw, kvar, class", ["B", 1, 0, "small homes"]),
        technologies=sheet("technology, direction, scale", ["hp", "import", "Heat pump scale"]),
    )
    tables = check_tables(raw)
    assert alarms(tables.findings) == []
    cases = tables.sheets["cases"]
    assert cases["load_scale.small_homes"].tolist()[0] == 0.5
    assert math.isnan(cases["load_scale.small_homes"].tolist()[1])
    assert cases["heat_pump_scale"].tolist() == [0.25, 0.0]
    assert tables.sheets["technologies"]["scale"].tolist() == ["heat_pump_scale"]
    assert "cases Heat pump_scale: blank: 0 is taken in 1 of 2 rows" in notes(
        tables.findings, "cases"
    )


def test_defaults_are_filled_and_noted_once_per_column():
    raw = feeder(loads=sheet("node, kw, kvar, zip_p, class", ["B", 1, 0], ["B", 1, 0, 1, "x"]))
    tables = check_tables(raw)
    assert tables.sheets["loads"]["class"].tolist() == ["default", "x"]
    assert tables.sheets["loads"]["zip_p"].tolist() == [1.0, 1.0]
    assert notes(tables.findings, "loads") == [
        "loads class: blank: default is taken in 1 of 2 rows",
        "loads zip_z: no such column: 0 is taken in 2 of 2 rows",
        "loads zip_i: no such column: 0 is taken in 2 of 2 rows",
        "loads zip_p: blank: 1 is taken in 1 of 2 rows",
        "loads connection: no such column: wye is taken in 2 of 2 rows",
    ]
    assert "source frequency_hz: no such column: 60 Hz is taken in 1 of 1 rows" in notes(
        tables.findings, "source"
    )


def test_default_stands_back_where_the_other_form_is_given():
    raw = feeder(source=sheet("node, kv, voltage_kv", ["S", 12.47, 12.6]))
    tables = check_tables(raw)
    assert math.isnan(tables.sheets["source"]["voltage_pu"][2])
    assert not any("voltage_pu" in note for note in notes(tables.findings, "source"))


def test_default_does_not_cover_an_unusable_cell():
    raw = feeder(source=sheet("node, kv, voltage_pu, wires", ["S", 12.47, "x", "five"]))
    source = check_tables(raw).sheets["source"]
    assert math.isnan(source["voltage_pu"][2])
    assert source["wires"][2] == ""


# One header at a time: (sheet, header, severity, part of the finding, suggestion).
@pytest.mark.parametrize(
    ("name", "header", "severity", "problem", "suggestion"),
    [
        ("loads", "colour", "note", "not known", ""),
        ("lines", "colour", "note", "not known", ""),
        ("nodes", "xtra", "note", "not known", ""),
        ("loads", "kvarr", "note", "not known", "did you mean kvar?"),
        ("loads", "calss", "note", "not known", "did you mean class?"),
        ("loads", "Power facto", "note", "not known", "did you mean power_factor?"),
        ("lines", "length_miles", "note", "not known",
         "this quantity is read from length_km, length_m, length_ft, length_mi"),
        ("regulators", "kvar_limit", "warning", "not known", ""),
        ("regulators", "setpont_pu", "warning", "not known", "did you mean setpoint_pu?"),
    ],
)  # fmt: skip
def test_unknown_headers(name, header, severity, problem, suggestion):
    raw = feeder()
    raw.setdefault(name, sheet("regulator, from_node, to_node, node", ["R", "A", "B", "A"]))
    raw[name][header] = None
    found = [f for f in check_tables(raw).findings if f.column == header]
    assert [(f.severity.value, f.row, f.value) for f in found] == [(severity, 1, header)]
    assert problem in found[0].finding
    assert found[0].suggestion == suggestion


def test_column_without_header_is_noted_only_where_it_holds_something():
    empty = check_tables(feeder(loads=sheet("node, kw, kvar, ", ["B", 1, 0])))
    filled = check_tables(feeder(loads=sheet("node, kw, kvar, ", ["B", 1, 0, "see below"])))
    assert not any("header" in note for note in notes(empty.findings, "loads"))
    assert any("without a header" in note for note in notes(filled.findings, "loads"))


@pytest.mark.parametrize(
    ("header", "second"),
    [("kw, mw", "mw"), ("kw, kw", "kw"), ("kw, KW ", "KW "), ("kw, (kw)", "(kw)")],
)
def test_one_quantity_under_two_headers_is_fatal(header, second):
    tables = check_tables(feeder(loads=sheet(f"node, kvar, {header}", ["B", 0, 1, 2])))
    assert alarms(tables.findings) == [("fatal", "loads", 1, second, second)]
    assert tables.sheets["loads"]["kw"].tolist() == [1.0]


def test_missing_required_column_is_said_once_for_the_sheet():
    tables = check_tables(feeder(loads=sheet("node, kvar", ["A", 1], ["B", 1])))
    assert alarms(tables.findings) == [("fatal", "loads", 1, "kw", "")]
    assert "kw or mw" in fatal(tables.findings)[0].suggestion


@pytest.mark.parametrize("required", ["source", "lines"])
@pytest.mark.parametrize("state", [None, pd.DataFrame()])
def test_required_sheet_that_is_missing_or_empty(required, state):
    tables = check_tables(feeder(loads=None, **{required: state}))
    assert ("fatal", required, 0, "", "") in alarms(tables.findings)
    assert len(fatal(tables.findings)) == 1


def test_lines_without_rows_still_need_their_columns():
    tables = check_tables(feeder(loads=None, lines=sheet("line, from_node")))
    assert alarms(tables.findings) == [("fatal", "lines", 1, "to_node", "")]


def test_optional_sheets_are_noted_once_with_what_is_assumed():
    found = check_tables(feeder(capacitors=sheet("node"), limits=pd.DataFrame())).findings
    assert alarms(found) == []
    absent = [f for f in found if f.row == 0 and not f.column]
    assert [f.sheet for f in absent] == [
        name for name in INPUT if name not in ("source", "lines", "loads")
    ]
    by_sheet = {f.sheet: f.finding for f in absent}
    assert by_sheet["capacitors"] == "no rows: no capacitors"
    assert "peak (load 1, pv 0, ev 1) and light (load 0.3, pv 1, ev 0)" in by_sheet["cases"]
    assert "basis assumed" in by_sheet["cases"]
    assert by_sheet["limits"] == "no such sheet: the defaults"
    assert all(f.severity is Severity.NOTE for f in absent)


@pytest.mark.parametrize(
    ("name", "severity", "suggestion"),
    [
        ("photos", "note", ""),
        ("load", "warning", "did you mean loads?"),
        ("limit s", "warning", "did you mean limits?"),
    ],
)
def test_unknown_sheets(name, severity, suggestion):
    found = [f for f in check_tables(feeder(**{name: sheet("a", [1])})).findings if f.sheet == name]
    assert [(f.severity.value, f.row, f.suggestion) for f in found] == [(severity, 0, suggestion)]


def test_misnamed_required_sheet_is_suggested():
    found = fatal(check_tables(feeder(lines=None, line=sheet("a", [1]))).findings)
    assert [f.suggestion for f in found] == ["did you mean line?"]


def test_all_findings_come_in_one_go_in_sheet_and_row_order():
    raw = {
        "loads": sheet("node, kw", ["B", "n/a"], ["B", -1], [None, 3]),
        "lines": lines(["L2", "B", "C", "1 km", "=A1", 0.4, 0], ["L4", "B", "C", 1, 2, 2, 9]),
        "source": sheet("node, kv, wires", ["S", None, 5]),
        "limits": sheet("limit, value", ["v_max", 1.1], ["v_min_pu", 1.2]),
        "transformers": sheet("transformer, from_node, to_node, kva", ["T", "C", "D", 0]),
    }
    assert alarms(check_tables(raw).findings) == [
        ("fatal", "source", 2, "kv", ""),
        ("fatal", "source", 2, "wires", "5"),
        ("fatal", "lines", 4, "length_km", "1 km"),
        ("fatal", "lines", 4, "r1_ohm_per_km", "=A1"),
        ("fatal", "lines", 4, "rating_a", "0"),
        ("fatal", "lines", 4, "line", "L2"),
        ("fatal", "transformers", 1, "kv_primary", ""),
        ("fatal", "transformers", 1, "kv_secondary", ""),
        ("fatal", "transformers", 2, "kva", "0"),
        ("fatal", "transformers", 2, "z_pct", ""),
        ("fatal", "loads", 2, "kw", "n/a"),
        ("fatal", "loads", 3, "kw", "-1"),
        ("fatal", "loads", 4, "node", ""),
        ("fatal", "limits", 2, "limit", "v_max"),
        ("fatal", "limits", 3, "value", "1.2"),
    ]


def test_columns_and_values_are_quoted_as_written():
    raw = feeder(loads=sheet("Node, Peak (MW), kW , kvar", ["B", None, " -3.0 ", 1]))
    assert alarms(check_tables(raw).findings) == [("fatal", "loads", 2, "kW ", "-3.0")]


REQUESTS = "request, node, technology, kw, power_factor, phases, status"


@pytest.mark.parametrize(
    ("row", "column", "value"),
    [
        (["Q1", "B", "pv", "n/a"], "kw", "n/a"),
        (["Q1", "B", "pv", 0], "kw", "0"),
        (["Q1", "B", "pv"], "kw", ""),
        (["Q1", "B", "wind", 1], "technology", "wind"),
        (["Q1", "B", "pv", 1, 0.9], "vars", ""),
        (["Q1", "B", "pv", 1, 1, "AD"], "phases", "AD"),
        (["Q1", "B", "pv", 1, 1, None, "maybe"], "status", "maybe"),
        ([None, "B", "pv", 1], "request", ""),
    ],
)
def test_requests_are_never_fatal(row, column, value):
    raw = feeder(requests=sheet(REQUESTS, ["Q0", "B", "pv", 1], row))
    tables = check_tables(raw)
    assert alarms(tables.findings) == [("warning", "requests", 3, column, value)]
    assert tables.faulty_requests == {3}


def test_faulty_header_of_requests_spoils_every_request():
    raw = feeder(requests=sheet("request, node, technology", ["Q1", "B", "pv"], ["Q2", "B", "pv"]))
    tables = check_tables(raw)
    assert alarms(tables.findings) == [("warning", "requests", 1, "kw", "")]
    assert tables.faulty_requests == {2, 3}


def test_what_a_missing_column_would_have_said_is_not_guessed():
    table = sheet("request, node, kw, power_factor", ["Q1", "B", 5, 0.9])
    tables = check_tables(feeder(requests=table))
    assert alarms(tables.findings) == [("warning", "requests", 1, "technology", "")]


def test_several_rows_with_one_request_id_are_one_site():
    raw = feeder(requests=sheet(REQUESTS, ["Q1", "B", "pv", 1], ["Q1", "B", "ev", 1]))
    tables = check_tables(raw)
    assert alarms(tables.findings) == []
    assert tables.faulty_requests == frozenset()


def test_tables_made_by_hand_give_findings_too():
    tables = Tables(check_tables(feeder()).sheets, (), Settings())
    made = tables.finding(Severity.FATAL, "requests", 2, "kw", "bad")
    assert made == Finding(Severity.WARNING, "requests", 2, "kw", "", "bad")


JUNK: st.SearchStrategy[Any] = st.one_of(
    st.none(), st.text(max_size=6), st.integers(), st.floats(), st.booleans(), st.datetimes(),
    st.dates(), st.just(pd.NaT), st.integers().map(lambda n: 10 ** (abs(n) % 400)),
    st.sampled_from(
        ["S", "A", "B", "pv", "=A1", "#REF!", "n/a", "unlimited", "ABC", "c", "closed", "open",
         "T", "v_max_pu", "0", "1", "1e308", "5e-324", 1e308, 5e-324, "inf", "-1", 12.47, "1_000"]
    ),
)  # fmt: skip
HEADERS = {
    name: [h for c in s.columns for h in c.headers] + ["junk", "", "x_scale", "load_scale.c"]
    for name, s in INPUT.items()
}


@st.composite
def junk_feeders(draw: st.DrawFn) -> dict[str, pd.DataFrame]:
    raw = {}
    for name in draw(st.sets(st.sampled_from(sorted(INPUT)))) | {"source", "lines"}:
        headers = draw(st.lists(st.sampled_from(HEADERS[name]), max_size=6))
        needed = [c.key for c in INPUT[name].columns if c.required]
        headers += needed if draw(st.booleans()) else []
        rows = draw(
            st.lists(
                st.lists(JUNK, min_size=len(headers), max_size=len(headers)), min_size=1, max_size=3
            )
        )
        index = range(2, 2 + len(rows))
        raw[name] = pd.DataFrame(rows, columns=headers, index=index, dtype=object)
    return raw


@settings(max_examples=150, deadline=None)
@given(junk_feeders())
def test_junk_cells_never_raise_but_are_found(raw):
    tables = check_tables(raw)
    for name, table in tables.sheets.items():
        for column in INPUT[name].columns:
            if not column.pattern and column.kind == NUMBER and not column.words:
                assert not np.isinf(table[column.key]).any()
    topology, findings = root_feeder(tables)
    if topology is not None:
        assert all(p < k for k, p in enumerate(topology.parent))
        findings += audit(tables, topology)
    findings += tables.findings
    assert not any(f.severity is Severity.FATAL for f in findings if f.sheet == "requests")
    order = [list(INPUT).index(f.sheet) for f in tables.findings]
    assert all(a <= b for a, b in pairwise(order))


@settings(max_examples=100, deadline=None)
@given(st.one_of(st.text(), st.dates(), st.booleans(), st.just(dt.time(9))))
def test_whatever_is_not_a_number_is_found_in_a_number_column(cell):
    tables = check_tables(feeder(loads=sheet("node, kw, kvar", ["B", cell, 0])))
    value = tables.sheets["loads"]["kw"][2]
    assert math.isnan(value) == bool(fatal(tables.findings))
    if not math.isnan(value):
        assert value == float(cell)
