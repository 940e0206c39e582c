"""The input sheets, and what stands in for those a workbook leaves out."""

from __future__ import annotations

from feederhost.schema.columns import (
    CHOICE,
    IMPEDANCE,
    KVA,
    KVAR,
    KW,
    LENGTH,
    PHASES,
    SUSCEPTANCE,
    TEXT,
    UNLIMITED,
    Column,
    Sheet,
)

STATES_OF_LINE = ("closed", "open")
DEVICES = ("manual", "automatic")
CONNECTIONS = ("wye_wye", "delta_wye", "delta_delta")
PHASE_PAIRS = ("aa", "ab", "ac", "bb", "bc", "cc")
BASES = ("measured", "estimated", "assumed")
VARS = ("absorb", "inject")
DIRECTIONS = ("export", "import", "both")


def _text(name: str, meaning: str, required: bool = False, example: str | None = None) -> Column:
    return Column(name, meaning, TEXT, required=required, example=example)


def _pick(name: str, meaning: str, choices: tuple[str, ...], default: str | None = None) -> Column:
    return Column(name, meaning, CHOICE, choices=choices, default=default)


_PHASES = Column("phases", "phases present, in any order; no row has any: balanced", PHASES)
_POWER_FACTOR = Column(
    "power_factor", "power factor, 0 to 1; give `vars` beside it", unit="-", above=0, highest=1
)
_VARS = _pick("vars", "absorb or inject reactive power (exports must say it below 1)", VARS)


def _line_constants() -> tuple[Column, ...]:
    return (
        Column("r1", "positive-sequence resistance", units=IMPEDANCE, lowest=0, example=0.646),
        Column("x1", "positive-sequence reactance", units=IMPEDANCE, lowest=0, example=0.49),
        Column("r0", "zero-sequence resistance", units=IMPEDANCE, lowest=0),
        Column("x0", "zero-sequence reactance", units=IMPEDANCE, lowest=0),
        Column("b1", "positive-sequence charging susceptance", units=SUSCEPTANCE, lowest=0),
        Column(
            "charging_uf_per_km", "charging capacitance, in place of b1", unit="uF/km", lowest=0
        ),
    )


def _phase_matrices() -> tuple[Column, ...]:
    families = (("r", "resistance", IMPEDANCE), ("x", "reactance", IMPEDANCE),
                ("b", "charging susceptance", SUSCEPTANCE))  # fmt: skip
    return tuple(
        Column(f"{letter}_{pair}", f"phase matrix: {what} {pair}", units=units)
        for letter, what, units in families
        for pair in PHASE_PAIRS
    )


_RATING = Column(
    "rating_a", "normal current rating; the word `unlimited` is legal",
    unit="A", above=0, words=(UNLIMITED,), example=240,
)  # fmt: skip

INPUT: dict[str, Sheet] = {
    s.name: s
    for s in (
        Sheet(
            "source",
            "the head of the feeder, one row",
            (
                _text("node", "node where the feeder starts", True, "S1"),
                Column("kv", "nominal voltage, line to line", unit="kV", required=True, above=0,
                       example=12.47),
                Column("voltage_pu", "voltage held at the node in steady state", unit="pu",
                       default=1.0, above=0, example=1.02),
                Column("voltage_kv", "the same in kV, line to line", unit="kV", above=0),
                Column("short_circuit_mva", "three-phase short-circuit power at the node",
                       unit="MVA", above=0, example=120),
                Column("x_over_r", "reactance over resistance of the source", unit="-",
                       default=10.0, lowest=0),
                Column("transformer", "rating of the bank that feeds the node", units=KVA, above=0),
                Column("export_limit", "most the head may export", units=KW, lowest=0),
                Column("import_limit", "most the head may import", units=KW, lowest=0),
                Column("frequency_hz", "system frequency", unit="Hz", default=60.0, above=0),
                Column("wires", "4 (with neutral) or 3", CHOICE, choices=("4", "3"), default="4"),
                _text("data_date", "date the data stand for", example="2026-11-01"),
                _text("switching_state", "switching state shown", example="normal"),
                _text("prepared_by", "who prepared the workbook"),
                _text("feeder", "name of the feeder; blank: the file's name"),
            ),
            required=True,
        ),
        Sheet(
            "nodes",
            "coordinates and limits of single nodes (own limits win)",
            (
                _text("node", "node name", True, "N1"),
                Column("x", "coordinate, for pictures"),
                Column("y", "coordinate, for pictures"),
                Column("kv", "nominal voltage, to check against", unit="kV", above=0),
                Column("v_min_pu", "lowest voltage of this node", unit="pu", above=0),
                Column("v_max_pu", "highest voltage of this node", unit="pu", above=0),
                Column("v_min_kv", "the same in kV", unit="kV", above=0),
                Column("v_max_kv", "the same in kV", unit="kV", above=0),
                _text("zone", "free text"),
            ),
        ),
        Sheet(
            "lines",
            "lines and switches; direction is the tree's, not the row's",
            (
                _text("line", "line id", True, "L1"),
                _text("from_node", "one end", True, "S1"),
                _text("to_node", "other end", True, "N1"),
                Column("length", "length", units=LENGTH, lowest=0, example=0.8),
                _text("conductor", "name in `conductors` (needs a length)", example="ACSR 1/0"),
                *_line_constants(),
                Column("r1_ohm", "total positive-sequence resistance", unit="ohm", lowest=0),
                Column("x1_ohm", "total positive-sequence reactance", unit="ohm", lowest=0),
                Column("r0_ohm", "total zero-sequence resistance", unit="ohm", lowest=0),
                Column("x0_ohm", "total zero-sequence reactance", unit="ohm", lowest=0),
                _RATING,
                _PHASES,
                _pick("state", "closed or open (also 0/1, N.O./N.C.)", STATES_OF_LINE, "closed"),
                _pick("device", "switching device on the line", DEVICES),
                Column("interrupting_a", "interrupting capability", unit="A", above=0),
            ),
            required=True,
        ),
        Sheet(
            "conductors",
            "library of conductors, used by `lines`",
            (
                _text("conductor", "conductor name", True, "ACSR 1/0"),
                *_line_constants(),
                _RATING,
                *_phase_matrices(),
            ),
        ),
        Sheet(
            "transformers",
            "in-line and service transformers",
            (
                _text("transformer", "transformer id", True, "T1"),
                _text("from_node", "primary node", True, "N1"),
                _text("to_node", "secondary node", True, "N1s"),
                Column("", "rated power", units=KVA, required=True, above=0, example=100),
                Column("kv_primary", "rated primary voltage", unit="kV", required=True, above=0,
                       example=12.47),
                Column("kv_secondary", "rated secondary voltage", unit="kV", required=True, above=0,
                       example=0.48),
                Column("z_pct", "impedance on its own kVA (with x_over_r)", unit="%", above=0,
                       example=2.1),
                Column("x_over_r", "reactance over resistance", unit="-", lowest=0, example=1.5),
                Column("r_pct", "resistance on its own kVA (with x_pct)", unit="%", above=0),
                Column("x_pct", "reactance on its own kVA", unit="%", lowest=0),
                Column("no_load", "no-load loss at rated voltage", units=KW, default=0.0, lowest=0),
                Column("tap_pu", "tapped primary over rated primary voltage; 0.975 raises",
                       unit="pu", default=1.0, above=0),
                _PHASES,
                _pick("connection", "winding connection", CONNECTIONS, "wye_wye"),
            ),
        ),
        Sheet(
            "regulators",
            "step voltage regulators",
            (
                _text("regulator", "regulator id", True, "R1"),
                _text("from_node", "source side", True, "N1"),
                _text("to_node", "regulated side", True, "N2"),
                Column("setpoint_pu", "voltage held", unit="pu", above=0, example=1.02),
                Column("setpoint_kv", "the same in kV, line to line", unit="kV", above=0),
                Column("bandwidth_pu", "total width of the band", unit="pu", default=0.0167,
                       lowest=0),
                Column("range_pct", "regulation range, up and down", unit="%", default=10.0,
                       above=0, highest=50),
                Column("steps", "steps over the whole range", unit="-", default=32.0, above=0),
                Column("tap", "fixed tap, steps from neutral", unit="-"),
                Column("tap_a", "fixed tap of phase a", unit="-"),
                Column("tap_b", "fixed tap of phase b", unit="-"),
                Column("tap_c", "fixed tap of phase c", unit="-"),
                _RATING,
                _pick("mode", "hold: taps found in the base run, then held", ("hold", "follow"),
                      "hold"),
                _PHASES,
                _pick("connection", "connection of the bank", ("wye", "open_delta"), "wye"),
            ),
        ),
        Sheet(
            "capacitors",
            "shunt capacitors",
            (
                _text("node", "node name", True, "N1"),
                Column("", "reactive power at nominal voltage", units=KVAR, required=True,
                       lowest=0, example=300),
                _pick("state", "on or off", ("on", "off"), "on"),
                _PHASES,
            ),
        ),
        Sheet(
            "loads",
            "peak demand per node, gross of generation; rows add up",
            (
                _text("node", "node name", True, "N1"),
                Column("", "peak demand", units=KW, required=True, lowest=0, example=45),
                Column("", "reactive demand, or give power_factor", units=KVAR, example=15),
                _POWER_FACTOR,
                _VARS,
                Column("class", "load class, for `load_scale.<class>`", TEXT, default="default",
                       example="homes"),
                Column("zip_z", "share of constant impedance", unit="-", default=0.0),
                Column("zip_i", "share of constant current", unit="-", default=0.0),
                Column("zip_p", "share of constant power", unit="-", default=1.0),
                _PHASES,
                _pick("connection", "load connection", ("wye", "delta"), "wye"),
            ),
        ),
        Sheet(
            "generators",
            "generation and storage already there",
            (
                _text("node", "node name", True, "N1"),
                Column("", "AC rating", units=KW, required=True, lowest=0, example=50),
                Column("technology", "name in `technologies` or built in", TEXT, default="pv",
                       example="pv"),
                _POWER_FACTOR,
                _VARS,
                _pick("status", "connected or approved", ("connected", "approved"), "connected"),
                _text("name", "free text"),
                _PHASES,
            ),
        ),
        Sheet(
            "requests",
            "the queue of connection requests",
            (
                _text("request", "request id; several rows with one id are one site", True, "Q1"),
                _text("node", "node name", True, "N1"),
                Column("technology", "name in `technologies` or built in", TEXT, required=True,
                       example="pv"),
                Column("", "AC rating asked", units=KW, required=True, above=0, example=150),
                _text("received", "date received", example="2026-10-15"),
                _POWER_FACTOR,
                _VARS,
                _PHASES,
                Column("export_limit", "agreed export limit of the site", units=KW, lowest=0),
                Column("inverter", "inverter rating of the site", units=KVA, above=0),
                Column("kw_dc", "DC rating, for information", unit="kW", above=0),
                _pick("status", "open or withdrawn", ("open", "withdrawn"), "open"),
            ),
        ),
        Sheet(
            "technologies",
            "what can be connected, and how it runs in the cases",
            (
                _text("technology", "name", True, "heat_pump"),
                Column("direction", "which way power flows", CHOICE, required=True,
                       choices=DIRECTIONS, example="import"),
                _POWER_FACTOR,
                _VARS,
                Column("scale", "column of `cases` it follows; blank: 1", TEXT, example="ev_scale"),
                Column("coincidence", "share of the rating seen at once", unit="-", default=1.0,
                       above=0),
                Column("window_from", "first hour it runs", unit="h", lowest=0, highest=23),
                Column("window_to", "last hour it runs", unit="h", lowest=0, highest=24),
                Column("fault_current_pu", "fault current over rated current", unit="pu", lowest=0),
                _pick("machine", "kind of plant, for its fault current where that is blank",
                      ("inverter", "rotating"), "inverter"),
            ),
        ),
        Sheet(
            "candidates",
            "where to look; absent: every node but the source, pv and ev",
            (
                _text("node", "node name", True, "N1"),
                Column("technology", "name; blank: pv and ev", TEXT),
                _PHASES,
                Column("max", "largest rating looked at here", units=KW, above=0),
                _POWER_FACTOR,
                _VARS,
            ),
        ),
        Sheet(
            "cases",
            "load and generation levels to test; absent: peak and light",
            (
                _text("case", "case name", True, "light"),
                Column("hours", "hours of the year it stands for", unit="h", lowest=0),
                Column("hour", "hour of the day", unit="h", lowest=0, highest=23),
                Column("month", "month", unit="-", lowest=1, highest=12),
                Column("load_scale", "demand over peak demand", unit="-", default=1.0, lowest=0,
                       example=0.3),
                Column("pv_scale", "PV output over rating", unit="-", default=0.0, lowest=0,
                       example=1),
                Column("ev_scale", "charging over rating", unit="-", default=0.0, lowest=0,
                       example=0),
                Column("source_voltage_pu", "voltage held at the source in this case; blank: "
                       "`source`", unit="pu", above=0),
                Column("source_voltage_kv", "the same in kV", unit="kV", above=0),
                Column("load_scale.<class>", "replaces load_scale for that class", unit="-",
                       lowest=0, pattern=True),
                Column("<other>_scale", "scale of another technology", unit="-", lowest=0,
                       pattern=True),
                Column("bank_other", "other power through the bank", units=KW),
                Column("bank_other", "other reactive power through the bank", units=KVAR),
                _pick("basis", "how the case is known", BASES, "estimated"),
            ),
        ),
        Sheet(
            "limits",
            "limits and study settings that differ from the defaults",
            (
                _text("limit", "name of the limit", True, "v_max_pu"),
                Column("value", "its value", required=True, example=1.05),
            ),
        ),
        Sheet(
            "costs",
            "cost ranges of remedies (used by the queue)",
            (
                _text("item", "what is bought", True, "reconductor, 1/0 to 336"),
                _text("unit", "unit of the cost", example="km"),
                Column("low", "low end", lowest=0, example=40000),
                Column("high", "high end", lowest=0, example=90000),
                Column("year", "price year", example=2026),
                _text("currency", "currency", example="USD"),
            ),
        ),
        Sheet(
            "curves",
            "volt-var curves (used by the queue)",
            (
                _text("curve", "curve name", True, "default"),
                Column("v_pu", "voltage", unit="pu", required=True, above=0, example=1.02),
                Column("q_pu", "reactive power over rating, injecting positive", unit="pu",
                       required=True, example=0),
            ),
        ),
    )
}  # fmt: skip

# The cases used where the workbook has none (basis: assumed).
BUILT_IN_CASES = (
    {"case": "peak", "load_scale": 1.0, "pv_scale": 0.0, "ev_scale": 1.0, "basis": "assumed"},
    {"case": "light", "load_scale": 0.3, "pv_scale": 1.0, "ev_scale": 0.0, "basis": "assumed"},
)
# The technologies every workbook knows; a row of `technologies` with the same name replaces one.
BUILT_IN_TECHNOLOGIES = (
    {"technology": "pv", "direction": "export", "scale": "pv_scale", "coincidence": 1.0,
     "window_from": 10.0, "window_to": 16.0, "fault_current_pu": 1.2},
    {"technology": "ev", "direction": "import", "scale": "ev_scale", "coincidence": 1.0,
     "fault_current_pu": 0.0},
    {"technology": "storage", "direction": "both", "coincidence": 1.0, "fault_current_pu": 1.2},
)  # fmt: skip
MOST_CASES = 8784
# The template's sheet for people: reading passes over it.
GUIDE = "guide"
