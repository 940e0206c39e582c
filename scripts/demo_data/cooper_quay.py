"""Cooper Quay 5: a short urban cable feeder, where ratings decide.

12.47 kV underground, four thousand feet of 500 kcmil aluminium and two spurs in smaller
cable, ten pad-mounted transformers to 480 V with offices, flats and shops behind them; line
charging, a bank shared with other feeders, and a head that may export 3 MW at most. Four
cases: a winter evening, a summer working day at noon, a Sunday noon in May, and a night of
charging.

What to look at: voltages are comfortable throughout, so no answer is a voltage. At 480 V the
transformer decides, at K7P the service cable. On the cables PV is stopped by the export limit
of the head, on the old spur to K10 by the cable; EV charging by the bank, and beyond the
thicker cables by the thinner ones. Charging of the cables is in the model. The tie K6-K10 is
open.
"""

from __future__ import annotations

from demo_data import table

SOURCE = table(
    "node kv voltage_pu short_circuit_mva x_over_r transformer_kva export_limit_kw frequency_hz"
    " wires data_date switching_state prepared_by feeder",
    ("QUAY", 12.47, 1.02, 180, 12, 12000, 3000, 60, "4", "2026-09-30", "normal, tie K6-K10 open",
     "planning desk, Quillmere L&P", "Cooper Quay 5"),
)  # fmt: skip

# Stranded aluminium, 15 kV class, three single cores touching, 90 C.  From geometry:
#   r = 1.02 x 0.02826 ohm mm2/m / area, x 1.282 from 20 to 90 C, + 1 to 3 % for skin effect;
#   x = 0.0754 ln(outer diameter / GMR) ohm/km at 60 Hz;
#   c = 0.1279 / ln(insulation diameter / screen diameter) uF/km, XLPE of permittivity 2.3.
# Ratings in a duct bank: common practice.  K-OLD: a paper cable kept in service, derated.
# The 480 V row: two 500 kcmil per phase, NEC table 310.16 at 75 C and chapter 9 table 8.
CONDUCTORS = table(
    "conductor r1_ohm_per_kft x1_ohm_per_kft charging_uf_per_km rating_a",
    ("500 AL 15kV", 0.0457, 0.0368, 0.36, 390),
    ("4/0 AL 15kV", 0.1064, 0.0415, 0.26, 245),
    ("1/0 AL 15kV", 0.2128, 0.0461, 0.20, 165),
    ("K-OLD", 0.2300, 0.0440, 0.31, 95),
    ("2x500 AL 600V", 0.0212, 0.0190, None, 620),
)

LINES = table(
    "line from_node to_node length_ft conductor rating_a state device interrupting_a",
    ("BRK", "QUAY", "K0", None, None, 800, "closed", "automatic", 16000),
    ("C1", "K0", "K1", 1400, "500 AL 15kV", None, "closed", None, None),
    ("C2", "K1", "K2", 900, "500 AL 15kV", None, "closed", "manual", None),
    ("C3", "K2", "K3", 1100, "500 AL 15kV", None, "closed", "manual", None),
    ("C4", "K3", "K4", 600, "500 AL 15kV", None, "closed", None, None),
    ("C5", "K4", "K5", 900, "4/0 AL 15kV", None, "closed", "manual", None),
    ("C6", "K5", "K6", 800, "1/0 AL 15kV", None, "closed", None, None),
    ("S1", "K2", "K7", 1200, "1/0 AL 15kV", None, "closed", "manual", None),
    ("S2", "K7", "K8", 900, "1/0 AL 15kV", None, "closed", None, None),
    ("S3", "K4", "K9", 1000, "K-OLD", None, "closed", "manual", None),
    ("S4", "K9", "K10", 700, "K-OLD", None, "closed", None, None),
    ("D1", "K7L", "K7P", 180, "2x500 AL 600V", None, "closed", "manual", None),
    ("TIE", "K6", "K10", 950, "1/0 AL 15kV", None, "open", "manual", None),
)

# Pad-mounted units; impedance and X/R by common practice, no-load loss near 0.2 %.
TRANSFORMERS = table(
    "transformer from_node to_node kva kv_primary kv_secondary z_pct x_over_r no_load_kw",
    ("TK1", "K1", "K1L", 500, 12.47, 0.48, 4.3, 4.0, 1.0),
    ("TK2", "K2", "K2L", 300, 12.47, 0.48, 3.4, 3.0, 0.7),
    ("TK3", "K3", "K3L", 750, 12.47, 0.48, 5.75, 5.0, 1.4),
    ("TK4", "K4", "K4L", 500, 12.47, 0.48, 4.3, 4.0, 1.0),
    ("TK5", "K5", "K5L", 300, 12.47, 0.48, 3.4, 3.0, 0.7),
    ("TK6", "K6", "K6L", 225, 12.47, 0.48, 2.8, 2.5, 0.55),
    ("TK7", "K7", "K7L", 750, 12.47, 0.48, 5.75, 5.0, 1.4),
    ("TK8", "K8", "K8L", 300, 12.47, 0.48, 3.4, 3.0, 0.7),
    ("TK9", "K9", "K9L", 500, 12.47, 0.48, 4.3, 4.0, 1.0),
    ("TK10", "K10", "K10L", 225, 12.47, 0.48, 2.8, 2.5, 0.55),
)

_OFFICE, _FLATS, _SHOPS = (
    ("office", 0.4, 0.0, 0.6),
    ("flats", 0.4, 0.3, 0.3),
    ("shops", 0.4, 0, 0.6),
)
LOADS = table(
    "node kw power_factor vars class zip_z zip_i zip_p",
    ("K1L", 310, 0.95, "absorb", *_OFFICE),
    ("K2L", 190, 0.97, "absorb", *_FLATS),
    ("K3L", 480, 0.95, "absorb", *_OFFICE),
    ("K4L", 210, 0.97, "absorb", *_FLATS),
    ("K4L", 120, 0.96, "absorb", *_SHOPS),
    ("K5L", 185, 0.97, "absorb", *_FLATS),
    ("K6L", 140, 0.97, "absorb", *_FLATS),
    ("K7L", 260, 0.95, "absorb", *_OFFICE),
    ("K7P", 40, 0.97, "absorb", *_SHOPS),
    ("K8L", 175, 0.97, "absorb", *_FLATS),
    ("K9L", 290, 0.96, "absorb", *_SHOPS),
    ("K10L", 130, 0.97, "absorb", *_FLATS),
)

GENERATORS = table(
    "node kw technology power_factor vars status name",
    ("K3L", 180, "pv", None, None, "connected", "ferry terminal roof"),
    ("K5L", 60, "pv", None, None, "connected", "housing association"),
    ("K7L", 150, "pv", 0.98, "absorb", "approved", "cooperage offices"),
    ("K9L", 90, "storage", None, None, "connected", "market hall battery"),
)

REQUESTS = table(
    "request node technology kw received power_factor vars inverter_kva kw_dc status",
    ("U-21", "K1L", "pv", 200, "2026-05-11", None, None, 200, 250, "open"),
    ("U-22", "K7P", "ev", 360, "2026-06-02", 0.98, "absorb", None, None, "open"),
    ("U-23", "K10L", "pv", 240, "2026-06-23", None, None, 250, 300, "open"),
    ("U-24", "K9", "pv", 1500, "2026-07-08", 0.97, "absorb", 1550, 1900, "open"),
    ("U-25", "K6L", "ev", 60, "2026-08-20", 0.98, "absorb", None, None, "open"),
)

CASES = table(
    "case hours hour month load_scale pv_scale ev_scale load_scale.office load_scale.shops"
    " bank_other_kw bank_other_kvar basis",
    ("winter_evening", 300, 18, 1, 1.0, 0.0, 0.6, 0.7, 0.9, 5600, 1500, "measured"),
    ("workday_noon", 900, 12, 7, 0.5, 0.9, 0.5, 1.0, 0.9, 5200, 1900, "measured"),
    ("sunday_noon", 200, 13, 5, 0.35, 1.0, 0.2, 0.15, 0.25, 2100, 400, "measured"),
    ("night_charging", 1400, 2, 11, 0.4, 0.0, 1.0, 0.2, 0.2, 2600, 600, "estimated"),
)

LIMITS = table(
    "limit value",
    ("line_loading_pct", 100),
    ("transformer_loading_pct", 100),
    ("voltage_change_lv_pct", 5),
    ("rounding_kw", 1),
)

# Feet east and north of the substation, for pictures.
NODES = table(
    "node x y zone",
    ("QUAY", 0, 0, "dock"), ("K0", 60, 0, "dock"), ("K1", 1300, 350, "dock"),
    ("K2", 2150, 500, "dock"), ("K3", 3200, 620, "market"), ("K4", 3750, 700, "market"),
    ("K5", 4600, 850, "hill"), ("K6", 5350, 1000, "hill"), ("K7", 2300, 1650, "dock"),
    ("K8", 2450, 2500, "dock"), ("K9", 3900, -250, "market"), ("K10", 4500, -500, "market"),
    ("K1L", 1300, 450, "dock"), ("K2L", 2150, 400, "dock"), ("K3L", 3200, 720, "market"),
    ("K4L", 3750, 800, "market"), ("K5L", 4600, 950, "hill"), ("K6L", 5350, 1100, "hill"),
    ("K7L", 2200, 1650, "dock"), ("K7P", 2050, 1700, "dock"), ("K8L", 2350, 2500, "dock"),
    ("K9L", 3900, -350, "market"), ("K10L", 4500, -600, "market"),
)  # fmt: skip

TABLES = {
    "source": SOURCE, "nodes": NODES, "lines": LINES, "conductors": CONDUCTORS,
    "transformers": TRANSFORMERS, "loads": LOADS, "generators": GENERATORS,
    "requests": REQUESTS, "cases": CASES, "limits": LIMITS,
}  # fmt: skip
