"""Rules of loads, plants, technologies, cases, limits, source and nodes."""

from __future__ import annotations

from dataclasses import fields, replace

import pytest
from feederhost.feeder.tables import check_tables
from feederhost.settings import Settings

from feeder_sheets import alarms, feeder, notes, sheet

LOAD = "node, kw, kvar, power_factor, vars, zip_z, zip_i, zip_p"


@pytest.mark.parametrize(
    ("row", "wanted"),
    [
        (["B", 10, 3], []),
        (["B", 10, None, 0.9], []),
        (["B", 10, None, 0.9, "inject"], []),
        (["B", 10, 3, None, None, 0.4, 0.3, 0.3], []),
        (["B", 10, 3, None, None, 0.4, 0.3, 0.309], []),
        (["B", 10, 3, None, None, 1.18, -1.64, 1.46], []),
        (["B", 10, 3, 0.9, "absorb"], [("fatal", "loads", 2, "power_factor", "0.9")]),
        (["B", 10, 3, 0.9], [("fatal", "loads", 2, "power_factor", "0.9")]),
        (["B", 10, 3, None, "inject"], [("warning", "loads", 2, "vars", "inject")]),
        (["B", 10, 3, None, None, 0.4, 0.3, 0.311], [("fatal", "loads", 2, "zip_p", "0.311")]),
        (["B", 10, 3, None, None, 0.4, 0.3], [("fatal", "loads", 2, "zip_p", "")]),
        (["B", 10, 3, None, None, "?", 0.3, 1], [("fatal", "loads", 2, "zip_z", "?")]),
    ],
)
def test_loads(row, wanted):
    assert alarms(check_tables(feeder(loads=sheet(LOAD, row))).findings) == wanted


def test_loads_without_vars_are_unity_and_noted_once():
    table = sheet(LOAD, ["B", 1], ["B", 1, 0], ["B", 1], ["B", 1, "?"])
    found = check_tables(feeder(loads=table)).findings
    assert "loads power_factor: neither kvar nor power factor in 2 of 4 rows: unity" in notes(
        found, "loads"
    )
    found = check_tables(feeder(loads=sheet(LOAD, ["B", 1, 0]))).findings
    assert not any("unity" in note for note in notes(found, "loads"))


PLANT = {
    "generators": "node, technology, kw, power_factor, vars",
    "candidates": "node, technology, max_kw, power_factor, vars",
}
WIND = sheet("technology, direction", ["wind", "export"], ["heat", "import"], ["odd", "?"])
ODD = ("fatal", "technologies", 4, "direction", "?")


@pytest.mark.parametrize("name", list(PLANT))
@pytest.mark.parametrize(
    ("technology", "power_factor", "way", "column", "value"),
    [
        ("pv", None, None, None, ""),
        ("pv", 1, None, None, ""),
        ("pv", 0.95, "absorb", None, ""),
        ("pv", 0.95, None, "vars", ""),
        ("pv", 0.95, "?", "vars", "?"),
        ("storage", 0.95, None, "vars", ""),
        ("wind", 0.95, None, "vars", ""),
        (None, 0.95, None, "vars", ""),
        ("ev", 0.95, None, None, ""),
        ("heat", 0.95, None, None, ""),
        ("odd", 0.95, None, None, ""),
        ("Wind", None, None, "technology", "Wind"),
        ("Wind", 0.95, None, "technology", "Wind"),
        ("=A1", 0.95, None, "technology", "=A1"),
    ],
)
def test_exports_below_unity_say_which_way_their_vars_go(
    name, technology, power_factor, way, column, value
):
    table = sheet(PLANT[name], ["B", technology, 5, power_factor, way])
    found = alarms(check_tables(feeder(technologies=WIND, **{name: table})).findings)
    wanted = [("fatal", name, 2, column, value)] if column else []
    assert [a for a in found if a != ODD] == wanted


@pytest.mark.parametrize(
    ("technology", "suggestion"),
    [("PV", "did you mean pv?"), ("wnd", "did you mean wind?"), ("hydro", "add it to")],
)
def test_unknown_technology(technology, suggestion):
    table = sheet(PLANT["generators"], ["B", technology, 5])
    found = check_tables(feeder(technologies=WIND, generators=table)).findings
    about = next(f for f in found if f.column == "technology" and f.row == 2)
    assert about.suggestion.startswith(suggestion)


def test_plants_without_power_factor_are_noted_once():
    table = sheet(PLANT["generators"], ["B", "pv", 5], ["B", "pv", 5, 1], ["B", "pv", 5, "?"])
    assert (
        "generators power_factor: no power factor in 1 of 3 rows: that of the technology, "
        "else unity"
    ) in notes(check_tables(feeder(generators=table)).findings, "generators")
    table = sheet(PLANT["generators"], ["B", "pv", 5, 1])
    found = notes(check_tables(feeder(generators=table)).findings, "generators")
    assert not any("unity" in note for note in found)


@pytest.mark.parametrize(
    ("received", "kept", "alarm"),
    [
        ("2026-10-15", "2026-10-15", False),
        ("20261015", "2026-10-15", False),
        ("2026-10-15T09:30", "2026-10-15 09:30:00", False),
        (None, "", False),
        ("15/10/2026", "", True),
        ("soon", "", True),
        (45000, "", True),
    ],
)
def test_dates_received_can_be_put_in_order(received, kept, alarm):
    table = sheet("request, node, technology, kw, received", ["Q", "B", "pv", 5, received])
    tables = check_tables(feeder(requests=table))
    assert tables.sheets["requests"]["received"].tolist() == [kept]
    wanted = [("warning", "requests", 2, "received", str(received))] if alarm else []
    assert alarms(tables.findings) == wanted
    assert tables.faulty_requests == frozenset()


TECHNOLOGY = "technology, direction, power_factor, vars, scale"


@pytest.mark.parametrize(
    ("row", "wanted"),
    [
        (["hp", "import", 0.9], []),
        (["hp", "import", None, None, "ev_scale"], []),
        (["hp", "import", None, None, "EV (scale)"], []),
        (["hp", "import", None, None, "hp_scale"], []),
        (["hp", "import", None, None, "load_scale.homes"], []),
        (["pv", "export", None, None, "pv_scale"], []),
        (["storage", "both"], []),
        (["wind", "export", 0.9, "absorb"], []),
        (["wind", "export", 0.9], [("fatal", "vars", "")]),
        (["wind", "both", 0.9], [("fatal", "vars", "")]),
        (["wind", None, 0.9], [("fatal", "direction", "")]),
        (["hp", "import", None, None, "hq_scale"], [("warning", "scale", "hq_scale")]),
        (["hp", "import", None, None, "hours"], [("warning", "scale", "hours")]),
        (["pv", "export"], [("warning", "scale", "")]),
        (["ev", "import"], [("warning", "scale", "")]),
        (["pv", "export", None, None, "=A1"], [("fatal", "scale", "=A1")]),
        (["PV", "export"], [("warning", "technology", "PV")]),
    ],
)
def test_technologies(row, wanted):
    raw = feeder(
        technologies=sheet(TECHNOLOGY, row),
        cases=sheet("case, hp_scale, load_scale.homes", ["c", 1, 1]),
        loads=sheet("node, kw, kvar, class", ["B", 1, 0, "homes"]),
    )
    found = alarms(check_tables(raw).findings)
    found = [(a[0], *a[3:]) for a in found if a[1:3] == ("technologies", 2)]
    assert found == wanted


def test_scale_without_a_cases_sheet_has_only_the_built_in_columns():
    raw = feeder(technologies=sheet(TECHNOLOGY, ["hp", "import", None, None, "ev_scal"]))
    found = check_tables(raw).findings
    assert alarms(found) == [("warning", "technologies", 2, "scale", "ev_scal")]
    about = next(f for f in found if f.column == "scale" and f.row == 2)
    assert "never runs" in about.finding
    assert about.suggestion == "did you mean ev_scale?"


def test_scale_that_names_no_column_says_what_to_add():
    raw = feeder(technologies=sheet(TECHNOLOGY, ["hp", "import", None, None, "hp_scale"]))
    about = next(f for f in check_tables(raw).findings if f.column == "scale" and f.row == 2)
    assert about.suggestion == "add a column headed hp_scale to `cases`"


@pytest.mark.parametrize(
    ("header", "suggestion"),
    [
        ("hp_scale", "name it under scale in `technologies`"),
        ("lod_scale", "did you mean load_scale?"),
        ("load_scale.hom", "did you mean homs?"),
        ("load_scale.shops", ""),
    ],
)
def test_columns_of_cases_that_nothing_follows(header, suggestion):
    raw = feeder(
        cases=sheet(f"case, {header}", ["c", 1]),
        loads=sheet("node, kw, kvar, class", ["B", 1, 0, "homs"]),
    )
    found = check_tables(raw).findings
    assert alarms(found) == [("warning", "cases", 1, header, "")]
    assert next(f for f in found if f.column == header).suggestion == suggestion


def test_replaced_technology_may_leave_its_column():
    raw = feeder(
        cases=sheet("case, sun_scale, pv_scale", ["c", 1, 0.5]),
        technologies=sheet(TECHNOLOGY, ["pv", "export", None, None, "sun_scale"]),
    )
    assert alarms(check_tables(raw).findings) == []


@pytest.mark.parametrize(("count", "fatal"), [(8784, False), (8785, True)])
def test_cases_are_at_most_the_hours_of_a_leap_year(count, fatal):
    table = sheet("case", *([f"c{k}"] for k in range(count)))
    wanted = [("fatal", "cases", 0, "case", "")] if fatal else []
    assert alarms(check_tables(feeder(cases=table)).findings) == wanted


@pytest.mark.parametrize(
    ("name", "table", "column"),
    [
        ("source", sheet("node, kv, voltage_pu, voltage_kv", ["S", 12, 1, 12]), "voltage_kv"),
        ("nodes", sheet("node, v_min_pu, v_min_kv", ["A", 0.9, 11]), "v_min_kv"),
        ("nodes", sheet("node, v_max_pu, v_max_kv", ["A", 1.1, 14]), "v_max_kv"),
        ("cases", sheet("case, source_voltage_pu, source_voltage_kv", ["c", 1, 12]),
         "source_voltage_kv"),
    ],
)  # fmt: skip
def test_voltages_are_given_in_one_form(name, table, column):
    found = check_tables(feeder(**{name: table})).findings
    assert [a[:4] for a in alarms(found)] == [("fatal", name, 2, column)]
    about = next(f for f in found if f.column == column and f.row == 2)
    assert "given twice" in about.finding


def test_voltages_in_either_form_on_different_rows_pass():
    table = sheet("case, source_voltage_pu, source_voltage_kv", ["c", 1], ["d", None, 12])
    assert alarms(check_tables(feeder(cases=table)).findings) == []


@pytest.mark.parametrize(
    ("table", "wanted"),
    [
        (sheet("node, kv"), [("fatal", "source", 0, "", "")]),
        (
            sheet("node, kv", ["S", 12], ["T", 12], ["U", 12]),
            [("fatal", "source", 3, "node", "T"), ("fatal", "source", 4, "node", "U")],
        ),
    ],
)
def test_source_has_exactly_one_row(table, wanted):
    assert alarms(check_tables(feeder(source=table)).findings) == wanted


@pytest.mark.parametrize("unit", ["pu", "kv"])
@pytest.mark.parametrize(("low", "high", "bad"), [(1, 2, False), (2, 1, True), (1, 1, True)])
def test_limits_of_a_node_are_in_order(unit, low, high, bad):
    table = sheet(f"node, v_min_{unit}, v_max_{unit}", ["A", low, high], ["B", 1])
    wanted = [("fatal", "nodes", 2, f"v_min_{unit}", str(low))] if bad else []
    assert alarms(check_tables(feeder(nodes=table)).findings) == wanted


def test_limits_replace_the_defaults():
    table = sheet(
        "limit, value",
        ["v_max_pu", 1.06], ["V min (primary pu)", "0.97"], ["rounding_kw", 5],
        ["export_limit_kw", 0], ["voltage_change_lv_pct", 0], ["regulator_edge", 0],
    )  # fmt: skip
    tables = check_tables(feeder(limits=table))
    assert alarms(tables.findings) == []
    wanted = replace(
        Settings(), v_max_pu=1.06, v_min_primary_pu=0.97, rounding_kw=5.0, export_limit_kw=0.0,
        voltage_change_lv_pct=0.0, regulator_edge=0.0,
    )  # fmt: skip
    assert tables.settings == wanted


def test_without_limits_the_defaults_stand():
    assert check_tables(feeder()).settings == Settings()


ZERO_IS_LEGAL = {
    "voltage_change_mv_pct", "voltage_change_lv_pct", "export_limit_kw", "import_limit_kw",
    "worsen_voltage_pu", "worsen_loading_pct", "regulator_edge",
}  # fmt: skip
LIMITS = [f.name for f in fields(Settings) if f.metadata["sheet"]]


@pytest.mark.parametrize("name", LIMITS)
@pytest.mark.parametrize("value", [-1, 0])
def test_limits_out_of_range(name, value):
    tables = check_tables(feeder(limits=sheet("limit, value", [name, value])))
    legal = value == 0 and name in ZERO_IS_LEGAL
    wanted = [] if legal else [("fatal", "limits", 2, "value", str(value))]
    assert alarms(tables.findings) == wanted
    if not legal:
        about = next(f for f in tables.findings if f.column == "value")
        assert about.finding == f"{'negative' if value else 'zero'}, where that cannot be"
        assert tables.settings == Settings()


@pytest.mark.parametrize(
    ("rows", "wanted"),
    [
        ([["regulator_edge", 0.5]], [("fatal", "limits", 2, "value", "0.5")]),
        ([["v_min_pu", 1.05]], [("fatal", "limits", 2, "value", "1.05")]),
        ([["v_max_pu", 0.9]], [("fatal", "limits", 2, "value", "0.9")]),
        ([["v_min_pu", 0.9], ["v_max_pu", 0.8]], [("fatal", "limits", 3, "value", "0.8")]),
        ([["v_min_primary_pu", 1.06]], [("fatal", "limits", 2, "value", "1.06")]),
        ([["v_max_primary_pu", 0.95]], [("fatal", "limits", 2, "value", "0.95")]),
        ([["v_min_primary_pu", 1.06], ["v_max_primary_pu", 1.07]], []),
        ([["v_max_pu", "?"]], [("fatal", "limits", 2, "value", "?")]),
        ([["v_max_pu", None]], [("fatal", "limits", 2, "value", "")]),
        ([["v_max", 1.05]], [("fatal", "limits", 2, "limit", "v_max")]),
        ([[None, 1.05]], [("fatal", "limits", 2, "limit", "")]),
    ],
)
def test_limits_that_do_not_fit(rows, wanted):
    tables = check_tables(feeder(limits=sheet("limit, value", *rows)))
    assert alarms(tables.findings) == wanted


def test_limit_that_cannot_be_read_leaves_the_default():
    table = sheet("limit, value", ["v_max_pu", "?"], ["v_min_pu", None])
    assert check_tables(feeder(limits=table)).settings == Settings()


@pytest.mark.parametrize(
    ("name", "suggestion"),
    [
        ("v_mx_pu", "did you mean v_max_pu?"),
        ("v_max", "limits read here: v_max_pu, v_max_primary_pu"),
        ("vmax", "limits read here: v_min_pu, v_max_pu, v_min_primary_pu, "),
    ],
)
def test_unknown_limits_get_a_suggestion(name, suggestion):
    found = check_tables(feeder(limits=sheet("limit, value", [name, 1]))).findings
    about = next(f for f in found if f.value == name)
    assert about.suggestion.startswith(suggestion)


def test_of_a_doubled_limit_the_first_counts():
    table = sheet("limit, value", ["v_max_pu", 1.06], ["v_max_pu", 1.07])
    tables = check_tables(feeder(limits=table))
    assert tables.settings.v_max_pu == 1.06
    assert alarms(tables.findings) == [("fatal", "limits", 3, "limit", "v_max_pu")]
