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

    # AC power flow.
    base_mva: float = _setting(1.0, "MVA", "power base of the per-unit core", _PROJECT)
    sweep_tolerance: float = _setting(
        1e-12, "pu", "voltage step at which a sweep has settled", _METHOD
    )
    sweep_limit: int = _setting(500, "-", "most sweeps before 'no solution'", _METHOD)
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
    swing_tries: int = _setting(
        9, "-", "sizes of storage tried side by side when its swing is located", _METHOD
    )
    swing_rounds: int = _setting(12, "-", "most rounds of locating a swing", _METHOD)
    search_lost_share: float = _setting(
        0.01, "-", "how closely the loss of a solution is located once a limit has been met, "
        "as a share of the cap", _METHOD,
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
    bound_rounds: int = _setting(
        24, "-", "most halvings when an upper bound is tightened by cuts", _METHOD
    )
    plain_sample: int = _setting(
        8, "-", "rows for which the plain programme is solved without --plain", _METHOD
    )
    seed: int = _setting(20, "-", "seed of every sample drawn", _PROJECT)

    # Reading and reporting.
    base_cells: int = _setting(
        200_000, "-", "cases x nodes up to which `base` lists everything", _PROJECT
    )
    cap_loads: float = _setting(10.0, "-", "default search cap over peak load", _PROJECT)
    cap_least_kw: float = _setting(100.0, "kW", "least default search cap", _PROJECT)
    zip_tolerance: float = _setting(
        0.01, "-", "how far the zip shares of a load may sum from one", _PROJECT
    )
    shared_kv: float = _setting(1.0, "kV", "nodes up to this are low voltage", "IEC 60038")


def sheet_settings() -> tuple[Field[Any], ...]:
    """Return the fields that are rows of the ``limits`` sheet."""
    return tuple(f for f in fields(Settings) if f.metadata["sheet"])
