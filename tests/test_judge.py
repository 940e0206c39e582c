"""The judge, judged against closed forms.

Two-bus closed forms, per unit, V at the end real.  An export of current I at unity power
factor: V_source = V - z I, so |V - z I| = v0 and p = V I; for the voltage limit V, with
w = V^2:  p = w [r - sqrt(r^2 - |z|^2 (1 - v0^2/w))] / |z|^2.  An import: V_source = V + z I.
"""

from __future__ import annotations

import ast
import math
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from judge import NoSolution, base_case, first_violation

KV, Z_BASE = 10.0, 100.0  # 1 MVA: 1 pu is 1000 kW
TIGHT = 1e-9


def test_the_judge_shares_nothing_with_the_judged() -> None:
    for path in Path(__file__).parent.glob("judge*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            names = [a.name for a in node.names] if isinstance(node, ast.Import) else []
            names += [str(node.module)] if isinstance(node, ast.ImportFrom) else []
            assert not any(n.split(".")[0] == "feederhost" for n in names), path.name


def two_bus(r: float, x: float, **more: Any) -> dict[str, Any]:
    """Return source, one line (pu impedance), no load, one case with everything at full scale."""
    limits = {"v_max_pu": 1.05, "v_min_pu": 0.9, "voltage_change_mv_pct": 0, "search_cap_kw": 8000}
    limits.update(more.pop("limits", {}))
    line = {"line": "L", "from_node": "S", "to_node": "E", "r1_ohm": r * Z_BASE,
            "x1_ohm": x * Z_BASE, "rating_a": "unlimited"}  # fmt: skip
    line.update(more.pop("line", {}))
    return {
        "source": [{"node": "S", "kv": KV, **more.pop("source", {})}],
        "lines": [line],
        "cases": more.pop("cases", [{"case": "only", "pv_scale": 1.0, "ev_scale": 1.0}]),
        "limits": [{"limit": k, "value": v} for k, v in limits.items()],
        **more,
    }


def set_limits(tables: dict[str, Any], **values: float) -> None:
    kept = {r["limit"]: r["value"] for r in tables["limits"]} | values
    tables["limits"] = [{"limit": k, "value": v} for k, v in kept.items()]


def amps(current_pu: float) -> float:
    return current_pu * 1000 / (math.sqrt(3) * KV)


def at_voltage(z: complex, v: float, v0: float = 1.0) -> float:
    """Return the export that puts the end at v (negative: an import), pu; see the top."""
    w, r = v * v, z.real
    return w * (r - math.sqrt(r * r - abs(z) ** 2 * (1 - v0 * v0 / w))) / abs(z) ** 2


def at_current(z: complex, current: float, v0: float = 1.0) -> tuple[float, float]:
    """Return voltage and power at the end where it exports this current (negative: imports)."""
    v = z.real * current + math.sqrt(v0 * v0 - (z.imag * current) ** 2)
    return v, v * current


@pytest.mark.parametrize(
    ("r", "x", "expected"),
    # w [r - sqrt(r^2 - |z|^2 (1 - 1/w))] / |z|^2 with w = 1.05^2, evaluated to ten decimals.
    [(0.05, 0.05, 1.0776699562), (0.06, 0.02, 0.8774443248), (0.02, 0.06, 4.0509618548)],
)
def test_two_bus_voltage_high(r: float, x: float, expected: float) -> None:
    row = first_violation(two_bus(r, x), "E", "pv")
    assert row.hosting_kw / 1000 == pytest.approx(expected, abs=2e-10)
    assert (row.criterion, row.element, row.case) == ("voltage_high", "E", "only")


def test_a_narrow_excursion_is_not_stepped_over() -> None:
    # The end voltage peaks at w = 1 / (1 - r^2/|z|^2) and falls again; 1e-9 below the peak the
    # excursion is 2e-4 of the rating wide, 1e-9 above there is none up to the cap.
    r, x = 0.02, 0.06
    peak = math.sqrt(1 / (1 - r * r / (r * r + x * x)))
    below = peak * (1 - 1e-9)
    row = first_violation(two_bus(r, x, limits={"v_max_pu": below}), "E", "pv")
    assert row.hosting_kw / 1000 == pytest.approx(at_voltage(complex(r, x), below), rel=1e-6)
    row = first_violation(two_bus(r, x, limits={"v_max_pu": peak * (1 + 1e-9)}), "E", "pv")
    assert (row.criterion, row.hosting_kw) == ("search_cap", 8000)


def test_the_end_of_solutions_is_a_violation() -> None:
    # v has a real solution while 1 + 2 r p >= 2 |z| p (export), 1 >= 2 (|z| + r) p (import).
    r, x = 0.02, 0.06
    size = math.hypot(r, x)
    loose = {"v_max_pu": 2, "v_min_pu": 0.1, "search_cap_kw": 20000}
    for technology, expected in (("pv", 1 / (2 * (size - r))), ("ev", 1 / (2 * (size + r)))):
        row = first_violation(two_bus(r, x, limits=loose), "E", technology)
        assert row.criterion == "no_solution"
        assert row.hosting_kw / 1000 == pytest.approx(expected, rel=1e-6)


def test_a_base_case_without_solution_is_an_error() -> None:
    tables = two_bus(0.05, 0.05, loads=[{"node": "E", "kw": 5000}])  # the most is 4142 kW
    with pytest.raises(NoSolution):
        base_case(tables)
    with pytest.raises(NoSolution):
        first_violation(tables, "E", "pv")


def test_two_bus_voltage_low() -> None:
    row = first_violation(two_bus(0.05, 0.05), "E", "ev")
    assert row.criterion == "voltage_low"
    assert row.hosting_kw == pytest.approx(-1000 * at_voltage(0.05 + 0.05j, 0.9), rel=TIGHT)


def test_power_factor_scale_and_coincidence() -> None:
    # With q = t p injected, |V - z (1 - j t) I| = 1: the unity formula with z (1 - j t).
    r, x, pf = 0.04, 0.03, 0.95
    t = math.sqrt(1 - pf * pf) / pf
    kinds = [
        {"technology": "a", "direction": "export", "power_factor": pf, "vars": "absorb"},
        {"technology": "i", "direction": "export", "power_factor": pf, "vars": "inject"},
        {"technology": "d", "direction": "import", "power_factor": pf, "scale": "d_scale",
         "coincidence": 0.7},
        {"technology": "u", "direction": "import", "power_factor": pf, "vars": "inject"},
    ]  # fmt: skip
    tables = two_bus(r, x, technologies=kinds, cases=[{"case": "only", "d_scale": 0.5}])
    for name, v, turn, share in (
        ("a", 1.05, 1 + 1j * t, 1.0), ("i", 1.05, 1 - 1j * t, 1.0),
        ("d", 0.9, 1 - 1j * t, 0.35), ("u", 0.9, 1 + 1j * t, 1.0),
    ):  # fmt: skip
        expected = 1000 * abs(at_voltage(complex(r, x) * turn, v)) / share
        assert first_violation(tables, "E", name).hosting_kw == pytest.approx(expected, rel=TIGHT)
    assert first_violation(tables, "E", "pv").criterion == "never_runs"


def test_line_rating_and_worsening() -> None:
    z, limit = 0.02 + 0.03j, 0.8
    tables = two_bus(z.real, z.imag, line={"rating_a": amps(limit)}, limits={"v_max_pu": 1.1})
    row = first_violation(tables, "E", "pv")
    assert (row.criterion, row.element) == ("line_rating", "L")
    assert row.hosting_kw == pytest.approx(1000 * at_current(z, limit)[1], rel=TIGHT)
    # Existing PV at 0.9 is above the rating: the limit becomes 1.005 x 0.9.
    there = at_current(z, 0.9)[1]
    tables["generators"] = [{"node": "E", "kw": 1000 * there}]
    row = first_violation(tables, "E", "pv")
    assert row.broken == (("only", "line_rating", "L"),)
    expected = 1000 * (at_current(z, 0.9 * 1.005)[1] - there)
    assert row.hosting_kw == pytest.approx(expected, rel=1e-7)  # a difference of close numbers


def test_head_limits_and_bank() -> None:
    # Leaving the source: S = -(V - z I) I, that is P = -(V I - r I^2), Q = +x I^2.
    z, current = 0.02 + 0.03j, 0.8
    p = at_current(z, current)[1]
    head = complex(-(p - z.real * current**2), z.imag * current**2)
    wide = {"v_max_pu": 1.1, "v_min_pu": 0.8}
    tables = two_bus(z.real, z.imag, limits=wide, source={"export_limit_kw": -1000 * head.real})
    row = first_violation(tables, "E", "pv")
    assert (row.criterion, row.hosting_kw) == ("head_export", pytest.approx(1000 * p, rel=TIGHT))
    other = 0.3 + 0.2j
    case = {"case": "only", "pv_scale": 1, "bank_other_kw": 300, "bank_other_kvar": 200}
    # The bank sees 0.36 with nothing added, so its first violation is on the export side.
    kva = 1000 * abs(head + other)
    tables = two_bus(z.real, z.imag, limits=wide, cases=[case], source={"transformer_kva": kva})
    row = first_violation(tables, "E", "pv")
    assert (row.criterion, row.hosting_kw) == ("bank_rating", pytest.approx(1000 * p, rel=TIGHT))
    p = at_current(z, -current)[1]
    limit = {"import_limit_kw": 1000 * (-p + z.real * current**2)}
    row = first_violation(two_bus(z.real, z.imag, limits={**wide, **limit}), "E", "ev")
    assert (row.criterion, row.hosting_kw) == ("head_import", pytest.approx(-1000 * p, rel=TIGHT))


@pytest.mark.parametrize("technology", ["pv", "ev"])
def test_voltage_change_holds_the_emf(technology: str) -> None:
    # No load: EMF = 1.02 behind z_s + z; 50 MVA, x/r 3: |z_s| = 0.02 pu.  3 % up or down; the
    # steady state (1.02 held at S) would be stopped later.
    z = 0.03 + 0.02j
    z_s = 0.02 * (1 + 3j) / math.sqrt(10)
    source = {"voltage_pu": 1.02, "short_circuit_mva": 50, "x_over_r": 3}
    tables = two_bus(z.real, z.imag, source=source, limits={"voltage_change_mv_pct": 3})
    row = first_violation(tables, "E", technology)
    end = 1.02 + (0.03 if technology == "pv" else -0.03)
    expected = 1000 * abs(at_voltage(z + z_s, end, 1.02))
    assert (row.criterion, row.hosting_kw) == ("voltage_change", pytest.approx(expected, rel=TIGHT))
    del tables["source"][0]["short_circuit_mva"]
    set_limits(tables, v_max_pu=1.06)
    expected = 1000 * abs(at_voltage(z, end, 1.02))
    row = first_violation(tables, "E", technology)
    assert (row.criterion, row.hosting_kw) == ("voltage_change", pytest.approx(expected, rel=TIGHT))


def test_the_emf_is_set_with_the_base_load() -> None:
    # At the source node itself: base current I = 0.5 draws V = 1 there; with the export the
    # change at S is 0.5 % (own limit as all other nodes), E = 1 + z_s I.
    z_s = 0.02 * (1 + 10j) / math.sqrt(101)
    base_p = -at_current(0.001 + 0j, -0.5)[1]  # at E, I in phase with both voltages (x = 0)
    tables = two_bus(
        0.001, 0.0, source={"short_circuit_mva": 50}, loads=[{"node": "E", "kw": 1000 * base_p}],
        limits={"voltage_change_mv_pct": 0.5, "v_max_pu": 1.2},
    )  # fmt: skip
    emf = abs(1 + z_s * 0.5)
    end = (1 - 0.001 * 0.5) + 0.005  # the end moves by 0.5 % of nominal before S does
    net = at_voltage(z_s + 0.001, end, emf)
    row = first_violation(tables, "E", "pv")
    assert (row.criterion, row.element) == ("voltage_change", "E")
    assert row.hosting_kw == pytest.approx(1000 * (net + base_p), rel=1e-8)


def test_transformer() -> None:
    # 500 kVA, r 2 %, x 4 %: 0.04 + 0.08j on 1 MVA; V_secondary = 1/tap - z I at no load.
    z, tap = 0.04 + 0.08j, 0.975
    unit = {
        "transformer": "T", "from_node": "S", "to_node": "E", "kva": 500, "kv_primary": KV,
        "kv_secondary": 0.4, "r_pct": 2, "x_pct": 4, "tap_pu": tap, "no_load_kw": 7,
    }  # fmt: skip
    loose = {"voltage_change_lv_pct": 0, "transformer_loading_pct": 200}
    tables = two_bus(0, 0, transformers=[unit], lines=[], limits=loose)
    flow = base_case(tables)
    assert abs(flow.voltages["E"]) == pytest.approx(1 / tap, rel=TIGHT)
    assert flow.loss.real == pytest.approx(7.0, rel=TIGHT)  # on the primary, at 1.0 pu
    row = first_violation(tables, "E", "pv")
    expected = 1000 * at_voltage(z, 1.05, 1 / tap)
    assert (row.criterion, row.hosting_kw) == ("voltage_high", pytest.approx(expected, rel=TIGHT))
    # Rated current 0.5 pu on both sides; the primary carries I / tap, so it is first.  Without
    # the core, whose current would count at the primary.
    unit["no_load_kw"] = 0
    set_limits(tables, v_max_pu=1.2, transformer_loading_pct=100)
    row = first_violation(tables, "E", "pv")
    expected = 1000 * at_current(z, 0.5 * tap, 1 / tap)[1]
    assert (row.criterion, row.element) == ("transformer_rating", "T")
    assert row.hosting_kw == pytest.approx(expected, rel=TIGHT)
    unit["tap_pu"] = 1.025  # now the secondary
    row = first_violation(tables, "E", "pv")
    assert row.hosting_kw == pytest.approx(1000 * at_current(z, 0.5, 1 / 1.025)[1], rel=TIGHT)


def regulated(**unit: Any) -> dict[str, Any]:
    tables = two_bus(0.03, 0.04)
    tables["lines"][0]["from_node"] = "R"
    row = {"regulator": "VR", "from_node": "S", "to_node": "R", **unit}
    return {**tables, "regulators": [row]}


def test_regulator_taps_and_edges() -> None:
    # Steps of 10 % / 16 = 0.00625.  From 1.0 towards 1.02 +/- 0.00835: two steps reach 1.0125.
    tables = regulated(setpoint_pu=1.02)
    assert base_case(tables).taps == {"VR": 2}
    assert base_case(regulated(setpoint_pu=1.2)).taps == {"VR": 16}
    assert base_case(regulated(setpoint_pu=0.98, tap=5)).taps == {"VR": 5}
    z = 0.03 + 0.04j
    for technology, end, held in (
        ("pv", 1.05, 1.02 + 0.0167 / 2), ("ev", 0.9, 1.02 - 0.0167 / 2)
    ):  # fmt: skip
        row = first_violation(tables, "E", technology)
        assert row.hosting_kw == pytest.approx(1000 * abs(at_voltage(z, end, held)), rel=TIGHT)
        set_limits(tables, regulator_edge=0)
        row = first_violation(tables, "E", technology)
        assert row.hosting_kw == pytest.approx(1000 * abs(at_voltage(z, end, 1.0125)), rel=TIGHT)
        set_limits(tables, regulator_edge=1)
    # Out of reach: clamped at 1.1; that is above 1.05, so 1.1 + 0.0005 is the limit, at R and E.
    row = first_violation(regulated(setpoint_pu=1.2), "E", "pv")
    assert set(row.broken) == {("only", "voltage_high", "R"), ("only", "voltage_high", "E")}
    assert row.hosting_kw == pytest.approx(1000 * at_voltage(z, 1.1005, 1.1), rel=1e-8)
    # A fixed tap is not shifted; its rating holds on the side of the larger current (source).
    row = first_violation(regulated(tap=4, rating_a=amps(0.2)), "E", "pv")
    assert (row.criterion, row.element) == ("regulator_rating", "VR")
    expected = 1000 * at_current(z, 0.2 / 1.025, 1.025)[1]
    assert row.hosting_kw == pytest.approx(expected, rel=TIGHT)


def test_switch_carries_what_is_behind_it() -> None:
    # S - line - E =switch= B; the load stays on E, so the switch carries the plant alone.
    z, end, load = 0.03 + 0.04j, 1.04, 0.4
    plant = at_voltage(z, end) + load
    tables = two_bus(z.real, z.imag, loads=[{"node": "E", "kw": 1000 * load}])
    tables["lines"].append({"line": "SW", "from_node": "B", "to_node": "E",
                            "rating_a": amps(plant / end)})  # fmt: skip
    row = first_violation(tables, "B", "pv")
    assert (row.criterion, row.element) == ("line_rating", "SW")
    assert row.hosting_kw == pytest.approx(1000 * plant, rel=TIGHT)
    # A plant on this side of the switch leaves it without current.
    assert first_violation(tables, "E", "pv").criterion == "voltage_high"


def test_charging_counts_at_the_terminals() -> None:
    # Half of b at each end.  Series current I = p/V - j b V / 2 towards the source,
    # |V - z I| = 1: with A = V (1 + j z b/2), |z|^2/V^2 p^2 - 2 Re(A conj z)/V p + |A|^2 - 1 = 0.
    z, b, v = 0.04 + 0.05j, 0.06, 1.05
    a = v * (1 + 1j * z * b / 2)
    k2, k1, k0 = abs(z) ** 2 / v**2, -2 * (a * z.conjugate()).real / v, abs(a) ** 2 - 1
    p = (-k1 - math.sqrt(k1 * k1 - 4 * k2 * k0)) / (2 * k2)
    charged = {"b1_us_per_km": b / Z_BASE * 1e6, "length_km": 1}
    row = first_violation(two_bus(z.real, z.imag, line=charged), "E", "pv")
    assert (row.criterion, row.hosting_kw) == ("voltage_high", pytest.approx(1000 * p, rel=TIGHT))
    # The rating is met by the larger terminal current: here p/V at E; the series current, which
    # is no terminal's, is larger still.
    series = p / v - 1j * b * v / 2
    assert abs(series) > p / v > abs(series - 1j * b / 2 * (v - z * series))
    charged["rating_a"] = amps(p / v)
    tables = two_bus(z.real, z.imag, line=charged, limits={"v_max_pu": 1.2})
    row = first_violation(tables, "E", "pv")
    assert (row.criterion, row.hosting_kw) == ("line_rating", pytest.approx(1000 * p, rel=TIGHT))
    tables["lines"][0].update(from_node="E", to_node="S", charging_uf_per_km=(
        tables["lines"][0].pop("b1_us_per_km") / (2 * math.pi * 60)))  # fmt: skip
    assert first_violation(tables, "E", "pv").hosting_kw == pytest.approx(1000 * p, rel=TIGHT)
    # An import through a line of little reactance, V = 0.92: I = p/V + j b V / 2 from the
    # source; now the larger terminal is S.
    z, v = 0.04 + 0.002j, 0.92
    a = v * (1 + 1j * z * b / 2)
    k2, k1, k0 = abs(z) ** 2 / v**2, 2 * (a * z.conjugate()).real / v, abs(a) ** 2 - 1
    p = (-k1 + math.sqrt(k1 * k1 - 4 * k2 * k0)) / (2 * k2)
    series = p / v + 1j * b * v / 2
    sending = abs(series + 1j * b / 2 * (v + z * series))
    assert sending > abs(series) > p / v
    tables["lines"][0].update(
        r1_ohm=z.real * Z_BASE, x1_ohm=z.imag * Z_BASE, rating_a=amps(sending)
    )
    row = first_violation(tables, "E", "ev")
    assert (row.criterion, row.hosting_kw) == ("line_rating", pytest.approx(1000 * p, rel=TIGHT))


def test_voltage_dependent_loads_and_capacitors() -> None:
    # At the limit V the load draws s0 (z V^2 + i V + p), a capacitor gives b V^2; the plant is
    # what is missing to the net power, which solves |V - z conj(s)/V| = 1 with s = p + j q.
    z, v = 0.03 + 0.04j, 1.05
    s0, cap = 0.5 + 0.2j, 0.35
    drawn = s0 * (0.4 * v * v + 0.25 * v + 0.35)
    q = -drawn.imag + cap * v * v
    # |V - z (p - jq)/V| = 1: quadratic in p with A = V + j q z / V.
    a = v + 1j * q * z / v
    k2, k1, k0 = abs(z) ** 2 / v**2, -2 * (a * z.conjugate()).real / v, abs(a) ** 2 - 1
    p = (-k1 - math.sqrt(k1 * k1 - 4 * k2 * k0)) / (2 * k2)
    load = {"node": "E", "mw": 0.5, "kvar": 200, "zip_z": 0.4, "zip_i": 0.25, "zip_p": 0.35}
    tables = two_bus(
        z.real, z.imag, loads=[load], capacitors=[{"node": "E", "kvar": 350},
                                                  {"node": "E", "kvar": 999, "state": "off"}],
    )  # fmt: skip
    row = first_violation(tables, "E", "pv")
    assert row.hosting_kw == pytest.approx(1000 * (p + drawn.real), rel=TIGHT)


def test_cases_classes_and_own_limits() -> None:
    # Two cases; the second has less load of class `homes` and half the PV.  Own limit 1.03.
    z = 0.03 + 0.04j
    cases = [{"case": "a", "load_scale": 1, "pv_scale": 1, "source_voltage_pu": 1.01},
             {"case": "b", "load_scale": 1, "load_scale.homes": 0.2, "pv_scale": 0.9}]  # fmt: skip
    tables = two_bus(
        z.real, z.imag, cases=cases, nodes=[{"node": "E", "v_max_pu": 1.03}],
        loads=[{"node": "E", "kw": 600, "class": "homes"}], source={"voltage_pu": 1.02},
    )  # fmt: skip
    each = {"a": at_voltage(z, 1.03, 1.01) + 0.6, "b": (at_voltage(z, 1.03, 1.02) + 0.12) / 0.9}
    row = first_violation(tables, "E", "pv")
    assert row.case == min(each, key=lambda c: each[c]) == "b"
    assert row.hosting_kw == pytest.approx(1000 * each["b"], rel=TIGHT)


def test_storage_already_there_runs_in_the_direction_under_test() -> None:
    z = 0.03 + 0.04j
    there = [{"node": "E", "kw": 100, "technology": "storage"}]
    tables = two_bus(z.real, z.imag, generators=there)
    assert abs(base_case(tables).voltages["E"]) == pytest.approx(1.0, rel=TIGHT)
    out, back = at_voltage(z, 1.05) - 0.1, -at_voltage(z, 0.9) - 0.1
    assert first_violation(tables, "E", "pv").hosting_kw == pytest.approx(1000 * out, rel=TIGHT)
    assert first_violation(tables, "E", "ev").hosting_kw == pytest.approx(1000 * back, rel=TIGHT)
    row = first_violation(tables, "E", "storage")
    assert row.hosting_kw == pytest.approx(1000 * min(out, back), rel=TIGHT)


def test_units_and_forms_read_alike() -> None:
    plain = two_bus(0.03, 0.04)
    expected = first_violation(plain, "E", "pv").hosting_kw
    one_mile, kft = 1.609344, 5.28
    miles = {"length_mi": 1, "r1_ohm_per_mi": 3.0, "x1_ohm_per_mi": 4.0}
    feet = {"length_ft": 5280, "r1_ohm_per_kft": 3 / kft, "x1_ohm_per_kft": 4 / kft}
    metres = {"length_m": 1609.344, "r1_ohm_per_km": 3 / one_mile, "x1_ohm_per_km": 4 / one_mile}
    lent = {"length_mi": 1, "conductor": "C"}
    for line in (miles, feet, metres, lent):
        row = {"line": "L", "from_node": 7.0, "to_node": " S", "rating_a": "unlimited", **line}
        wire = {"conductor": "C", "r1_ohm_per_mi": 3.0, "x1_ohm_per_mi": 4.0, "rating_a": 300}
        tables = {**plain, "lines": [row], "conductors": [wire]}
        frames = {k: pd.DataFrame(v) for k, v in tables.items()}
        for form in (tables, frames):
            assert first_violation(form, "7", "pv").hosting_kw == pytest.approx(expected, rel=TIGHT)
