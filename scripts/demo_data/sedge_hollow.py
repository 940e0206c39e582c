"""Sedge Hollow 2: a long overhead rural feeder, where voltage decides.

12.47 kV, eleven miles of trunk in 336, 4/0 and 1/0 ACSR with eight laterals: homes, farms,
irrigation pumps, a school, a dairy and a mill; two capacitors, an in-line voltage regulator
five miles out, a solar garden and smaller plants already there, six requests waiting and one
withdrawn. Four cases: a winter evening, a July noon, an April noon with the least load of the
daytime, and a night of charging.

What to look at: the regulator raises the far half by four steps on the winter evening and
stands at neutral on the April noon. PV is stopped by high voltage nearly everywhere: at the
regulator's own terminal, along the far trunk or at the end of a thin lateral; EV charging by
low voltage at the far end in winter, or by the change of voltage at night; the bank decides
next to the station, the service transformer behind one. The open tie C3-E4 stays open.
"""

from __future__ import annotations

from demo_data import table

SOURCE = table(
    "node kv voltage_pu short_circuit_mva x_over_r transformer_kva frequency_hz wires data_date"
    " switching_state prepared_by feeder",
    ("STN", 12.47, 1.03, 95, 7, 10000, 60, "4", "2026-09-30", "normal, tie C3-E4 open",
     "planning desk, Quillmere L&P", "Sedge Hollow 2"),
)  # fmt: skip

# ACSR: resistance at 50 C and ampacity (75 C conductor, 25 C air, 2 ft/s, sun) rounded from a
# manufacturer's catalogue; reactance at 1 ft spacing from the same, plus 0.0754 ln(4.29 ft /
# 1 ft) ohm/km for an eight-foot crossarm; here per mile.
CONDUCTORS = table(
    "conductor r1_ohm_per_mi x1_ohm_per_mi rating_a",
    ("336 ACSR", 0.299, 0.628, 530),
    ("4/0 ACSR", 0.565, 0.731, 365),
    ("1/0 ACSR", 1.040, 0.789, 240),
    ("2 ACSR", 1.625, 0.853, 185),
)

# Switches have no impedance: one electrical node, two names.
LINES = table(
    "line from_node to_node length_mi conductor rating_a state device interrupting_a",
    ("BRK", "STN", "P10", None, None, 600, "closed", "automatic", 12500),
    ("T1", "P10", "P11", 0.8, "336 ACSR", None, "closed", None, None),
    ("T2", "P11", "P12", 0.9, "336 ACSR", None, "closed", None, None),
    ("T3", "P12", "P13", 0.7, "336 ACSR", None, "closed", None, None),
    ("T4", "P13", "P14", 1.0, "336 ACSR", None, "closed", None, None),
    ("T5", "P14", "P15", 0.8, "336 ACSR", None, "closed", None, None),
    ("T6", "P15", "P16", 0.9, "336 ACSR", None, "closed", None, None),
    ("T7", "P16R", "P17", 0.8, "4/0 ACSR", None, "closed", None, None),
    ("T8", "P17", "P18", 0.9, "4/0 ACSR", None, "closed", None, None),
    ("REC", "P18", "P18D", None, None, 400, "closed", "automatic", 8000),
    ("T9", "P18D", "P19", 0.8, "4/0 ACSR", None, "closed", None, None),
    ("T10", "P19", "P20", 1.0, "4/0 ACSR", None, "closed", None, None),
    ("T11", "P20", "P21", 0.9, "1/0 ACSR", None, "closed", None, None),
    ("T12", "P21", "P22", 0.8, "1/0 ACSR", None, "closed", None, None),
    ("T13", "P22", "P23", 0.9, "1/0 ACSR", None, "closed", None, None),
    ("LA1", "P11", "A1", 0.6, "2 ACSR", None, "closed", None, None),
    ("LA2", "A1", "A2", 0.7, "2 ACSR", None, "closed", None, None),
    ("LA3", "A2", "A3", 0.5, "2 ACSR", None, "closed", None, None),
    ("LB1", "P13", "B1", 0.7, "1/0 ACSR", None, "closed", "manual", None),
    ("LB2", "B1", "B2", 0.6, "1/0 ACSR", None, "closed", None, None),
    ("LB3", "B2", "B3", 0.8, "2 ACSR", None, "closed", None, None),
    ("LB4", "B3", "B4", 0.5, "2 ACSR", None, "closed", None, None),
    ("LB5", "B2", "B5", 0.6, "2 ACSR", None, "closed", None, None),
    ("LC1", "P14", "C1", 0.9, "1/0 ACSR", None, "closed", "manual", None),
    ("LC2", "C1", "C2", 0.8, "1/0 ACSR", None, "closed", None, None),
    ("LC3", "C2", "C3", 0.7, "1/0 ACSR", None, "closed", None, None),
    ("LD1", "P15", "D1", 0.5, "2 ACSR", None, "closed", None, None),
    ("LD2", "D1", "D2", 0.6, "2 ACSR", None, "closed", None, None),
    ("LE1", "P17", "E1", 0.8, "1/0 ACSR", None, "closed", "manual", None),
    ("LE2", "E1", "E2", 0.9, "1/0 ACSR", None, "closed", None, None),
    ("LE3", "E2", "E3", 0.7, "2 ACSR", None, "closed", None, None),
    ("LE4", "E3", "E4", 0.6, "2 ACSR", None, "closed", None, None),
    ("LE5", "E2", "E5", 0.5, "2 ACSR", None, "closed", None, None),
    ("LF1", "P19", "F1", 0.7, "2 ACSR", None, "closed", None, None),
    ("LF2", "F1", "F2", 0.8, "2 ACSR", None, "closed", None, None),
    ("LF3", "F2", "F3", 0.6, "2 ACSR", None, "closed", None, None),
    ("LG1", "P20", "G1", 0.9, "1/0 ACSR", None, "closed", "manual", None),
    ("LG2", "G1", "G2", 0.8, "2 ACSR", None, "closed", None, None),
    ("LG3", "G2", "G3", 0.7, "2 ACSR", None, "closed", None, None),
    ("LH1", "P22", "H1", 0.6, "2 ACSR", None, "closed", None, None),
    ("LH2", "H1", "H2", 0.7, "2 ACSR", None, "closed", None, None),
    ("TIE", "C3", "E4", 1.1, "1/0 ACSR", None, "open", "manual", None),
)

# Pad-mounted three-phase units; impedance and X/R by common practice, no-load loss near 0.25 %.
# The school is close to the station: its tap takes 2.5 % off.
TRANSFORMERS = table(
    "transformer from_node to_node kva kv_primary kv_secondary z_pct x_over_r no_load_kw tap_pu",
    ("T-SCHOOL", "P12", "P12S", 225, 12.47, 0.48, 2.6, 2.0, 0.55, 1.025),
    ("T-DAIRY", "F2", "F2S", 300, 12.47, 0.48, 3.0, 2.5, 0.70, 1.0),
    ("T-MILL", "P21", "P21S", 225, 12.47, 0.48, 2.6, 2.0, 0.55, 1.0),
)

REGULATORS = table(
    "regulator from_node to_node setpoint_pu bandwidth_pu range_pct steps rating_a mode connection",
    ("VR-16", "P16", "P16R", 1.025, 0.0167, 10, 32, 219, "hold", "wye"),
)

CAPACITORS = table("node kvar state", ("B1", 300, "on"), ("P19", 300, "on"))

# Peak demand per node, shared out by transformer kVA; mixes of constant impedance, current
# and power by common practice.
_HOMES, _FARM, _SHOP, _PUMP = (
    ("homes", 0.4, 0.3, 0.3), ("farm", 0.3, 0.2, 0.5), ("shop", 0.4, 0.0, 0.6), ("pump", 0, 0, 1)
)  # fmt: skip
LOADS = table(
    "node kw kvar power_factor vars class zip_z zip_i zip_p",
    ("P10", 90, None, 0.97, "absorb", *_HOMES),
    ("P11", 110, None, 0.97, "absorb", *_HOMES),
    ("P12S", 160, None, 0.95, "absorb", *_SHOP),
    ("P13", 100, None, 0.97, "absorb", *_HOMES),
    ("P14", 75, None, 0.97, "absorb", *_HOMES),
    ("P15", 60, None, 0.97, "absorb", *_HOMES),
    ("P16", 80, None, 0.97, "absorb", *_HOMES),
    ("P17", 120, None, 0.97, "absorb", *_HOMES),
    ("P18", 90, None, 0.97, "absorb", *_HOMES),
    ("P20", 140, None, 0.97, "absorb", *_HOMES),
    ("P21S", 140, 75, None, None, *_SHOP),
    ("P22", 70, None, 0.97, "absorb", *_HOMES),
    ("P23", 90, None, 0.97, "absorb", *_HOMES),
    ("A1", 80, None, 0.97, "absorb", *_HOMES),
    ("A2", 75, None, 0.97, "absorb", *_HOMES),
    ("A3", 60, None, 0.97, "absorb", *_HOMES),
    ("B1", 120, None, 0.97, "absorb", *_HOMES),
    ("B2", 100, None, 0.97, "absorb", *_HOMES),
    ("B3", 80, None, 0.92, "absorb", *_FARM),
    ("B4", 105, None, 0.92, "absorb", *_FARM),
    ("B5", 70, None, 0.97, "absorb", *_HOMES),
    ("C1", 60, None, 0.97, "absorb", *_HOMES),
    ("C2", 270, 165, None, None, *_PUMP),
    ("C3", 330, 200, None, None, *_PUMP),
    ("D1", 70, None, 0.97, "absorb", *_HOMES),
    ("D2", 50, None, 0.97, "absorb", *_HOMES),
    ("E1", 120, None, 0.97, "absorb", *_HOMES),
    ("E2", 110, None, 0.97, "absorb", *_HOMES),
    ("E2", 60, None, 0.92, "absorb", *_FARM),
    ("E3", 90, None, 0.92, "absorb", *_FARM),
    ("E4", 80, None, 0.92, "absorb", *_FARM),
    ("E5", 70, None, 0.97, "absorb", *_HOMES),
    ("F1", 100, None, 0.97, "absorb", *_HOMES),
    ("F2S", 210, 100, None, None, *_FARM),
    ("F3", 80, None, 0.97, "absorb", *_HOMES),
    ("G1", 110, None, 0.97, "absorb", *_HOMES),
    ("G2", 120, None, 0.92, "absorb", *_FARM),
    ("G3", 90, None, 0.97, "absorb", *_HOMES),
    ("H1", 80, None, 0.97, "absorb", *_HOMES),
    ("H2", 70, None, 0.97, "absorb", *_HOMES),
)

GENERATORS = table(
    "node kw technology power_factor vars status name",
    ("C2", 450, "pv", None, None, "connected", "Sedge Hollow solar garden"),
    ("P12S", 80, "pv", None, None, "connected", "school roof"),
    ("F2S", 100, "pv", None, None, "connected", "dairy barn"),
    ("A2", 35, "pv", None, None, "connected", "roofs on Alder Lane"),
    ("E3", 150, "pv", 0.98, "absorb", "approved", "Ember farm"),
)

REQUESTS = table(
    "request node technology kw received power_factor vars export_limit_kw inverter_kva kw_dc"
    " status",
    ("Q-101", "B2", "pv", 250, "2026-06-03", None, None, None, 250, 320, "open"),
    ("Q-102", "G3", "pv", 400, "2026-06-19", None, None, None, 400, 520, "open"),
    ("Q-103", "P13", "ev", 300, "2026-07-02", 0.98, "absorb", None, None, None, "open"),
    ("Q-104", "E3", "pv", 200, "2026-07-14", 0.95, "absorb", 150, 220, 260, "open"),
    ("Q-104", "E3", "storage", 100, "2026-07-14", None, None, 150, 100, None, "open"),
    ("Q-105", "P23", "pv", 120, "2026-07-30", None, None, None, 120, 150, "withdrawn"),
    ("Q-106", "H2", "ev", 150, "2026-08-11", 0.98, "absorb", None, None, None, "open"),
    ("Q-107", "P12S", "heat_pump", 60, None, None, None, None, None, None, "open"),
)

TECHNOLOGIES = table(
    "technology direction power_factor vars scale coincidence fault_current_pu",
    ("heat_pump", "import", 0.95, "absorb", "heat_pump_scale", 0.8, 0),
)

# Hours are of one year; the station's feeder meter gives the measured rows.
CASES = table(
    "case hours hour month load_scale pv_scale ev_scale source_voltage_pu load_scale.pump"
    " load_scale.farm heat_pump_scale bank_other_kw bank_other_kvar basis",
    ("winter_evening", 160, 18, 1, 1.0, 0.0, 0.7, 1.03, 0.0, 0.9, 1.0, 2900, 700, "measured"),
    ("july_noon", 700, 12, 7, 0.42, 0.95, 0.2, 1.025, 0.9, 0.5, 0.0, 2300, 900, "measured"),
    ("april_noon", 260, 13, 4, 0.24, 1.0, 0.2, 1.02, 0.0, 0.3, 0.1, 900, 150, "measured"),
    ("night_charging", 1400, 1, 11, 0.45, 0.0, 1.0, 1.02, 0.0, 0.35, 0.6, 1200, 300, "estimated"),
)

# 0.975 on the primary leaves 2.5 % for the transformers and service drops that are not entered.
LIMITS = table(
    "limit value",
    ("v_min_pu", 0.95),
    ("v_max_pu", 1.05),
    ("v_min_primary_pu", 0.975),
    ("voltage_change_mv_pct", 3),
    ("line_loading_pct", 100),
    ("rounding_kw", 5),
)

# Miles east and north of the station, for pictures.
NODES = table(
    "node x y zone",
    ("STN", 0.0, 0.0, "near"), ("P10", 0.1, 0.0, "near"), ("P11", 0.9, 0.1, "near"),
    ("P12", 1.8, 0.2, "near"), ("P12S", 1.8, 0.0, "near"), ("P13", 2.5, 0.2, "near"),
    ("P14", 3.5, 0.3, "near"), ("P15", 4.3, 0.3, "near"), ("P16", 5.2, 0.2, "near"),
    ("P16R", 5.3, 0.2, "far"), ("P17", 6.1, 0.1, "far"), ("P18", 7.0, 0.0, "far"),
    ("P18D", 7.1, 0.0, "far"), ("P19", 7.9, 0.0, "far"), ("P20", 8.9, 0.1, "far"),
    ("P21", 9.8, 0.2, "far"), ("P21S", 9.8, 0.4, "far"), ("P22", 10.6, 0.2, "far"),
    ("P23", 11.5, 0.3, "far"), ("A1", 0.9, 0.7, "near"), ("A2", 1.0, 1.4, "near"),
    ("A3", 1.3, 1.8, "near"), ("B1", 2.5, -0.5, "near"), ("B2", 2.6, -1.1, "near"),
    ("B3", 2.9, -1.8, "near"), ("B4", 3.3, -2.1, "near"), ("B5", 2.1, -1.4, "near"),
    ("C1", 3.5, 1.2, "near"), ("C2", 3.7, 2.0, "near"), ("C3", 4.2, 2.5, "near"),
    ("D1", 4.3, -0.2, "near"), ("D2", 4.5, -0.8, "near"), ("E1", 6.1, 0.9, "far"),
    ("E2", 5.9, 1.8, "far"), ("E3", 5.6, 2.4, "far"), ("E4", 5.1, 2.7, "far"),
    ("E5", 6.4, 2.0, "far"), ("F1", 7.9, -0.7, "far"), ("F2", 8.1, -1.5, "far"),
    ("F2S", 8.3, -1.6, "far"), ("F3", 7.8, -2.0, "far"), ("G1", 8.9, 1.0, "far"),
    ("G2", 9.1, 1.8, "far"), ("G3", 9.4, 2.4, "far"), ("H1", 10.6, -0.4, "far"),
    ("H2", 10.8, -1.1, "far"),
)  # fmt: skip

TABLES = {
    "source": SOURCE, "nodes": NODES, "lines": LINES, "conductors": CONDUCTORS,
    "transformers": TRANSFORMERS, "regulators": REGULATORS, "capacitors": CAPACITORS,
    "loads": LOADS, "generators": GENERATORS, "requests": REQUESTS,
    "technologies": TECHNOLOGIES, "cases": CASES, "limits": LIMITS,
}  # fmt: skip
