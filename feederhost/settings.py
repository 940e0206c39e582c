"""Every limit, default and tolerance of the project, with unit, meaning and source.

Nothing else in the package holds a bare tolerance.  The fields marked ``sheet`` are the rows
of the ``limits`` sheet: a workbook's own value replaces the default.  ``run`` prints them all.
"""

from __future__ import annotations

from dataclasses import Field, dataclass, field, fields
from typing import Any


def _setting(default: Any, unit: str, meaning: str, source: str, sheet: bool = False) -> Any:
    metadata = {"unit": unit, "meaning": meaning, "source": source, "sheet": sheet}
    return field(default=default, metadata=metadata)


_ANSI = "ANSI C84.1 Range A, service voltage (secondary copy seen, not the standard itself)"
_RVC = "IEEE 1547-2018 clause 7.2.2, rapid voltage change (secondary copy seen)"
_RATING = "common practice: 100 % of the normal rating"
_PROJECT = "project choice"
_METHOD = "project choice; see the method notes in DEVELOPERS.md"


def _sgip(section: str) -> str:
    return f"FERC pro forma SGIP section {section} (as quoted in NREL/TP-6A20-72102)"


@dataclass(frozen=True)
class Settings:
    """All limits and tolerances of one run; frozen, printed on the ``run`` sheet."""

    # Limits: rows of the `limits` sheet.
    v_min_pu: float = _setting(0.95, "pu", "lowest voltage allowed at a node", _ANSI, True)
    v_max_pu: float = _setting(1.05, "pu", "highest voltage allowed at a node", _ANSI, True)
    v_min_primary_pu: float | None = _setting(
        None, "pu", "lowest voltage at nodes above 1 kV; blank: v_min_pu", _ANSI, True
    )
    v_max_primary_pu: float | None = _setting(
        None, "pu", "highest voltage at nodes above 1 kV; blank: v_max_pu", _ANSI, True
    )
    voltage_change_mv_pct: float = _setting(
        3.0, "%", "voltage change on loss of the plant, nodes above 1 kV; 0 = off", _RVC, True
    )
    voltage_change_lv_pct: float = _setting(
        5.0, "%", "voltage change on loss of the plant, nodes up to 1 kV; 0 = off", _RVC, True
    )
    line_loading_pct: float = _setting(100.0, "%", "share of line rating allowed", _RATING, True)
    transformer_loading_pct: float = _setting(
        100.0, "%", "share of transformer rating allowed", _RATING, True
    )
    export_limit_kw: float | None = _setting(
        None, "kW", "most power the feeder head may export; blank: no limit", _PROJECT, True
    )
    import_limit_kw: float | None = _setting(
        None, "kW", "most power the feeder head may import; blank: no limit", _PROJECT, True
    )
    unbalance_pct: float = _setting(
        2.0, "%", "negative over positive sequence voltage (phase-modelled feeders)",
        "EN 50160, supply voltage unbalance (secondary copy seen)", True,
    )  # fmt: skip
    worsen_voltage_pu: float = _setting(
        0.0005, "pu", "how far a voltage limit broken already may get worse", _PROJECT, True
    )
    worsen_loading_pct: float = _setting(
        0.5, "%", "how far a rating or head limit broken already may get worse", _PROJECT, True
    )
    search_cap_kw: float | None = _setting(
        None, "kW", "largest rating looked at; blank: ten times peak load, at least 100 kW",
        _PROJECT, True,
    )  # fmt: skip
    rounding_kw: float = _setting(
        1.0, "kW", "published values are rounded down to this step", _PROJECT, True
    )
    regulator_edge: float = _setting(
        1.0, "-", "1: regulators held at the band edge that is worse; 0: at the tap found",
        "common practice: generation runs at setpoint + half the bandwidth", True,
    )  # fmt: skip
    screen_peak_pct: float = _setting(
        15.0, "%", "screen: generation over the annual peak load of a line section",
        _sgip("2.2.1.2"), True,
    )  # fmt: skip
    screen_minimum_pct: float = _setting(
        100.0, "%", "screen: generation over the minimum load of a line section, to stay below",
        _sgip("2.4.4.1") + "; section number from memory", True,
    )  # fmt: skip
    screen_fault_pct: float = _setting(
        10.0, "%", "screen: fault current of all generation over that of the source",
        _sgip("2.2.1.4"), True,
    )  # fmt: skip
    screen_interrupting_pct: float = _setting(
        87.5, "%", "screen: fault current over the interrupting capability of a device",
        _sgip("2.2.1.5"), True,
    )  # fmt: skip
    screen_secondary_kw: float = _setting(
        20.0, "kW", "screen: generation on a shared single-phase secondary",
        _sgip("2.2.1.7"), True,
    )  # fmt: skip
    screen_imbalance_pct: float = _setting(
        20.0, "%", "screen: imbalance of a 240 V centre-tapped service over the transformer rating",
        _sgip("2.2.1.8"), True,
    )  # fmt: skip
    screen_centre_tap_kv: float = _setting(
        0.25, "kV", "screen: services above this are not 240 V centre-tapped",
        "project choice, to apply " + _sgip("2.2.1.8"), True,
    )  # fmt: skip
    screen_inverter_pu: float = _setting(
        1.2, "pu", "screen: fault current of an inverter over its rated current, where "
        "`technologies` gives none",
        "common practice: 1.0 to 1.2 beyond the first cycle", True,
    )  # fmt: skip
    screen_rotating_pu: float = _setting(
        5.0, "pu", "screen: the same for a rotating machine",
        "common practice: 5 to 6 for synchronous machines", True,
    )  # fmt: skip
    screen_prefault_pu: float = _setting(
        1.0, "pu", "screen: voltage before a fault, at the place of the fault",
        "common practice: nominal voltage", True,
    )  # fmt: skip

    # AC power flow.
    base_mva: float = _setting(1.0, "MVA", "power base of the per-unit core", _PROJECT)
    sweep_tolerance: float = _setting(
        1e-12, "pu", "voltage step at which a sweep has settled", _METHOD
    )
    sweep_limit: int = _setting(3000, "-", "most sweeps before 'no solution'", _METHOD)
    sweep_review: int = _setting(
        20, "-", "sweeps after which a column's rate of settling is judged", _METHOD
    )
    tangent_tolerance: float = _setting(
        1e-11, "-", "relative step at which the tangent of a sweep has settled", _METHOD
    )
    mismatch_tolerance: float = _setting(
        1e-8, "pu", "largest power mismatch of a published operating point (1 MVA)", _METHOD
    )
    collapse_pu: float = _setting(
        0.1, "pu", "below this voltage a sweep counts as without solution", _METHOD
    )
    runaway: float = _setting(1e12, "-", "slope at which a tangent counts as lost", _METHOD)
    tap_passes: int = _setting(50, "-", "most passes over all regulators for the taps", _METHOD)
    edge_tolerance: float = _setting(
        1e-9, "pu", "how closely a regulator is put on its band edge", _METHOD
    )

    # First-violation search.
    search_step_share: float = _setting(
        0.05, "-", "longest step of the search, as a share of the cap", _METHOD
    )
    search_first_share: float = _setting(
        1e-4, "-", "shortest step of the search, as a share of the cap", _METHOD
    )
    queue_step_share: float = _setting(
        0.25, "-", "longest step of the search for one request, as a share of its reach", _METHOD
    )
    rounding_slack: float = _setting(
        1e-12, "pu", "slack below zero that counts as rounding, not as a violation", _METHOD
    )
    tiny_rating: float = _setting(
        1e-7, "pu", "rating that stands for just above zero in an AC check", _METHOD
    )
    swing_tries: int = _setting(
        9, "-", "sizes of storage tried side by side when its swing is located", _METHOD
    )
    swing_rounds: int = _setting(12, "-", "most rounds of locating a swing", _METHOD)
    search_lost_share: float = _setting(
        0.001, "-", "how closely the loss of a solution is located once a limit has been met",
        _METHOD,
    )  # fmt: skip
    search_overshoot: float = _setting(
        1.2, "-", "how far a step reaches past the nearest tangent zero", _METHOD
    )
    search_tolerance: float = _setting(
        1e-10, "-", "relative width at which a first violation is located", _METHOD
    )
    search_refinements: int = _setting(
        80, "-", "most halvings when a first violation is located", _METHOD
    )
    column_budget: int = _setting(
        2_000_000, "-", "complex numbers one sweep array may hold; more is cut in blocks", _METHOD
    )

    # Relaxation and proof.
    price_margin: float = _setting(
        0.1, "-", "how far a loss price stands above the exchange rate (eps)", _METHOD
    )
    price_floor: float = _setting(
        0.02, "-", "lowest loss price as a share of the branch resistance", _METHOD
    )
    price_floor_share: float = _setting(
        1e-6, "-", "lowest loss price of a branch's own power, as a share of the rating", _METHOD
    )
    idle_share: float = _setting(
        1e-3, "-", "least power a branch is scaled by, as a share of the largest", _METHOD
    )
    price_raises: int = _setting(
        40, "-", "most rounds of raising prices where a multiplier is negative", _METHOD
    )
    recursion_tolerance: float = _setting(
        1e-8, "-", "largest stationarity or scale residual of a closed proof", _METHOD
    )
    recursion_limit: int = _setting(400, "-", "most sweeps of the multiplier recursion", _METHOD)
    recursion_step: float = _setting(
        1e-13, "-", "relative step at which the multiplier recursion has settled", _METHOD
    )
    multiplier_tolerance: float = _setting(
        1e-9, "-", "most negative cone multiplier, as a share of the largest", _METHOD
    )
    solver_agreement: float = _setting(
        1e-4, "-", "largest relative gap between solver and AC value of a proven row", _METHOD
    )
    solver_gap: float = _setting(
        1e-7, "-", "duality gap at which the conic solver stops, as a share of the rating", _METHOD
    )
    solver_feasibility: float = _setting(
        1e-8, "-", "residual at which the conic solver stops", _METHOD
    )
    solver_room: float = _setting(
        10.0, "-", "cap of the priced programme over the AC value", _METHOD
    )
    fictitious_loss_share: float = _setting(
        1e-4, "-", "fictitious loss, as a share of the rating, up to which a relaxed "
        "solution counts as tight", _METHOD,
    )  # fmt: skip
    recovery_tolerance: float = _setting(
        1e-4, "pu", "largest voltage gap between a relaxed solution and its AC recovery", _METHOD
    )
    above_share: float = _setting(
        1e-4, "-", "how far above the value a violation must be seen (1.0001 x)", _METHOD
    )
    range_limit: float = _setting(
        1e6, "-", "flow range beyond which cuts are given up, over the largest power", _METHOD
    )
    bound_rounds: int = _setting(
        24, "-", "most halvings when an upper bound is tightened by cuts", _METHOD
    )
    plain_sample: int = _setting(
        8, "-", "rows for which the plain programme is solved without --plain", _METHOD
    )
    seed: int = _setting(20, "-", "seed of every sample drawn", _PROJECT)

    # Remedies.
    power_factor_lowest: float = _setting(
        0.90, "-", "lowest absorbing power factor proposed as a remedy",
        "IEEE 1547-2018 clause 5.2: 44 % of rated kVA at full output (secondary copy seen)",
    )  # fmt: skip
    power_factor_step: float = _setting(0.01, "-", "step between the power factors tried", _PROJECT)
    curve_damping: float = _setting(
        0.5, "-", "share of the gap to its curve that an inverter closes per round", _METHOD
    )
    curve_tolerance: float = _setting(
        1e-9, "pu", "gap between power and curve at which an inverter has settled", _METHOD
    )
    curve_rounds: int = _setting(
        120, "-", "rounds after which an inverter that has not settled hunts", _METHOD
    )
    curve_sweep_share: float = _setting(
        0.01, "-", "voltage step at which a sweep under curves has settled, over the smallest gap "
        "to a curve, both in pu", _METHOD,
    )  # fmt: skip
    curve_outputs: int = _setting(
        11, "-", "outputs from zero to full at which a curve is looked at, per size", _METHOD
    )
    var_full_output: float = _setting(
        0.2, "-", "share of rated output below which reactive power falls off in proportion",
        "IEEE 1547-2018 clause 5.2 (secondary copy seen)",
    )  # fmt: skip
    schedule_cases: int = _setting(
        288, "-", "fewest cases for a schedule: every hour of the day in every month", _PROJECT
    )
    setpoint_step: float = _setting(
        0.005, "pu", "step between the regulator setpoints tried", _PROJECT
    )
    tap_step_pct: float = _setting(
        2.5, "%", "step of a transformer's off-circuit taps",
        "common practice: +-2 x 2.5 % (manufacturer's page seen)",
    )  # fmt: skip
    tap_positions: int = _setting(
        2, "-", "off-circuit taps of a transformer to either side of 1",
        "common practice: +-2 x 2.5 % (manufacturer's page seen)",
    )  # fmt: skip

    # Reading and reporting.
    base_cells: int = _setting(
        200_000, "-", "cases x nodes up to which `base` lists everything", _PROJECT
    )
    digits: int = _setting(13, "-", "significant digits of a published power", _PROJECT)
    flag_elements: int = _setting(
        12, "-", "broken elements named in the flags of a row before '... more'", _PROJECT
    )
    cap_loads: float = _setting(10.0, "-", "default search cap over peak load", _PROJECT)
    cap_least_kw: float = _setting(100.0, "kW", "least default search cap", _PROJECT)
    zip_tolerance: float = _setting(
        0.01, "-", "how far the zip shares of a load may sum from one", _PROJECT
    )
    shared_kv: float = _setting(1.0, "kV", "nodes up to this are low voltage", "IEC 60038")
    screen_tolerance: float = _setting(
        1e-9, "-", "share by which sums of ratings may differ and still be equal in a screen",
        _PROJECT,
    )  # fmt: skip
    screen_slope_spread: float = _setting(
        1.5, "-", "cases whose loss of generation, times the steepest voltage change per kW seen "
        "and this, stays below the worst change found are left out of that screen", _METHOD,
    )  # fmt: skip


def sheet_settings() -> tuple[Field[Any], ...]:
    """Return the fields that are rows of the ``limits`` sheet."""
    return tuple(f for f in fields(Settings) if f.metadata["sheet"])
