"""A larger conductor or transformer as an alternative, against the rebuilt workbook."""

from __future__ import annotations

import math
from typing import Any

from asked import (
    LIBRARY,
    ORDER,
    found,
    judged,
    rebuilt,
    refused,
    request,
    stop_kw,
    two_lines,
)
from engine import two_bus


def test_the_line_whose_next_size_buys_most():
    tables = two_lines()
    own = found(tables)["larger_conductor"]
    assert own.setting == "line L2: thin -> thick"
    bought = {name: stop_kw(rebuilt(tables, name, "thick")) for name in ("L1", "L2")}
    assert bought["L2"] > bought["L1"]
    assert own.kw == math.floor(bought["L2"])
    assert (own.criterion, own.proof) == ("voltage_high", "ac_only")
    assert judged(rebuilt(tables, "L2", "thick"), own.kw) >= 0
    assert judged(rebuilt(tables, "L2", "thick"), own.kw + 1) < 0


def test_it_is_the_next_size_and_not_the_largest():
    tables = rebuilt(two_lines(), "L2", "thick")
    rows = found(tables)
    assert rows["larger_conductor"].setting in {
        "line L1: thin -> thick",
        "line L2: thick -> thicker",
    }
    bought = {
        "line L1: thin -> thick": stop_kw(rebuilt(tables, "L1", "thick")),
        "line L2: thick -> thicker": stop_kw(rebuilt(tables, "L2", "thicker")),
    }
    assert rows["larger_conductor"].setting == max(bought, key=lambda name: bought[name])


def test_the_best_of_many_elements_and_cases():
    # A feeder on which cases and elements bind in turn: the outcome is that of trying them all.
    kilometres = (0.5, 0.2, 0.9, 0.4, 0.7)
    names = ["S", "A", "B", "C", "D", "N"]
    tables = two_lines(4000)
    tables["lines"] = [
        {"line": f"L{i}", "from_node": names[i], "to_node": names[i + 1],
         "conductor": "thick" if i == 2 else "thin", "length_km": km}
        for i, km in enumerate(kilometres)
    ]  # fmt: skip
    tables["loads"] = [{"node": name, "kw": 100, "kvar": 40} for name in names[1:]]
    tables["cases"] = [
        {"case": f"c{i}", "load_scale": load, "pv_scale": pv, "source_voltage_pu": v}
        for i, (load, pv, v) in enumerate([(0.9, 1.0, 1.01), (0.2, 0.6, 1.03), (0.3, 0.8, 1.02)])
    ]
    next_size = {"thin": "thick", "thick": "thicker"}
    bought = {
        row["line"]: stop_kw(rebuilt(tables, row["line"], next_size[row["conductor"]]))
        for row in tables["lines"]
    }
    best = max(bought, key=lambda name: bought[name])
    own = found(tables)["larger_conductor"]
    assert own.setting.startswith(f"line {best}: ")
    assert own.kw == math.floor(bought[best])


def test_it_may_carry_what_is_asked():
    tables = two_lines(1500)
    own = found(tables)["larger_conductor"]
    assert (own.kw, own.criterion, own.proof) == (1500.0, "", "not_needed")
    assert judged(rebuilt(tables, "L2", "thick"), 1500) >= 0


def test_a_line_of_its_own_impedance_takes_the_library_too():
    tables = two_bus(3 + 6j, rating_a=300, **request(), **LIBRARY)
    own = found(tables)["larger_conductor"]
    assert own.setting == "line L: as built -> thick"
    line = {
        k: v for k, v in tables["lines"][0].items() if k not in ("r1_ohm", "x1_ohm", "rating_a")
    }
    assert judged({**tables, "lines": [{**line, "conductor": "thick"}]}, own.kw) >= 0


def test_a_rating_is_lifted_at_the_element_itself():
    # 210 A and 200 A met at 3.5 MW; L2 is the lower, and a voltage limit is far off.
    sizes = (("thin", 0.1, 200), ("fair", 0.09, 210), ("thick", 0.05, 400))
    short = [
        {"conductor": n, "r1_ohm_per_km": r, "x1_ohm_per_km": 0.1, "rating_a": a}
        for n, r, a in sizes
    ]
    tables = two_lines(5000, conductors=short)
    tables = rebuilt(tables, "L1", "fair")
    rows = found(tables)
    assert rows["smaller_size"].criterion == "line_rating"
    own = rows["larger_conductor"]
    assert own.setting == "line L2: thin -> fair"
    assert own.kw == math.floor(stop_kw(rebuilt(tables, "L2", "fair")))


def test_no_larger_size_in_the_library():
    tables = rebuilt(rebuilt(two_lines(12_000), "L1", "thicker"), "L2", "thicker")
    own = found(tables)["larger_conductor"]
    assert refused(own)
    assert "no larger size" in own.note


def test_a_head_limit_is_no_matter_of_lines():
    tables = two_lines(source=[{"node": "S", "kv": 10, "export_limit_kw": 300}])
    rows = found(tables)
    assert rows["smaller_size"].criterion == "head_export"
    assert set(rows) == set(ORDER[:5])


def sized(kva: float, name: str, node: str) -> dict[str, Any]:
    return {"transformer": name, "from_node": "A", "to_node": node, "kva": kva, "kv_primary": 10,
            "kv_secondary": 0.4, "z_pct": 5, "x_over_r": 4, "no_load_kw": kva / 500}  # fmt: skip


def test_the_next_kva_of_the_sheet():
    tables = {
        **two_bus(0.2 + 0.2j, **request(900)),
        "transformers": [sized(500, "T1", "N"), sized(1000, "T2", "X"), sized(800, "T3", "Y"),
                         {**sized(600, "T4", "Z"), "kv_secondary": 0.48}],
    }  # fmt: skip
    tables["lines"][0]["to_node"] = "A"
    rows = found(tables)
    assert rows["smaller_size"].criterion == "transformer_rating"
    own = rows["larger_transformer"]
    assert own.setting == "transformer T1: 500 kVA -> 800 kVA"
    larger = {**tables, "transformers": [sized(800, "T1", "N"), *tables["transformers"][1:]]}
    assert own.kw == math.floor(stop_kw(larger))
    assert judged(larger, own.kw) >= 0


def test_fault_duty_bars_a_larger_size():
    # L1 of 0.4 km: |z| = 0.017 pu of 1.2 + j1.2 ohm, thick 0.4 + j0.8 ohm; source 0.01 pu.
    # At A 1 / |z| goes from 38.9 to 53.9 pu with x/r 10: 2244 A to 3111 A or so (57.7 A is 1 pu).
    strong = [{**c, "rating_a": 1000 + c["rating_a"]} for c in LIBRARY["conductors"]]
    source = [{"node": "S", "kv": 10, "short_circuit_mva": 100}]
    tables = two_lines(source=source, conductors=strong)
    tables["lines"][1] |= {"length_km": 0.3, "interrupting_a": 3000}
    free = {**tables, "lines": [{**r, "interrupting_a": None} for r in tables["lines"]]}
    assert found(free)["larger_conductor"].setting == "line L1: thin -> thick"
    own = found(tables)["larger_conductor"]
    assert own.setting == "line L2: thin -> thick"
    assert "line L1: thin -> thick would put L2 at" in own.note


def test_fault_duty_that_cannot_be_checked_is_said():
    tables = two_lines()
    tables["lines"][1]["interrupting_a"] = 3000
    own = found(tables)["larger_conductor"]
    assert not refused(own)
    assert own.note == "fault duty is not checked: short_circuit_mva is blank"
