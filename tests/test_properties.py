"""What must hold for any feeder: names, units and order mean nothing, and tighter is never more.

Trees of up to seven nodes, drawn so that they shrink; invented, sensible for a feeder of 10 kV.
"""

from __future__ import annotations

import csv
import random
import tempfile
from collections.abc import Callable, Sequence
from copy import deepcopy
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from feederhost.sheets.template import write_input
from feederhost.study.base import base_cases_table, power_balance
from feederhost.study.load import load_feeder
from feederhost.study.nodal import Hosting, base_solutions, host
from feederhost.study.options import Options
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st

from engine import Sheets, answer, build
from judge import base_case
from random_feeders import random_feeder

Tables = dict[str, list[dict[str, Any]]]
few = settings(
    max_examples=8, deadline=None, derandomize=True,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.filter_too_much],
)  # fmt: skip

CASES = [
    {"case": "noon", "load_scale": 0.4, "pv_scale": 1.0, "ev_scale": 0.2},
    {"case": "evening", "load_scale": 1.0, "pv_scale": 0.1, "ev_scale": 1.0},
]
# Volts, ohms and amperes have their own column each; all else is in kW or pu.
KV = ("kv", "kv_primary", "kv_secondary")


def number(low: float, high: float) -> st.SearchStrategy[float]:
    """Return floats with three digits after the point: they shrink, and read well."""
    return st.integers(round(1000 * low), round(1000 * high)).map(lambda i: i / 1000)


@st.composite
def feeders(
    draw: st.DrawFn, *, x_over_r: tuple[float, float] = (0.3, 3.0), devices: bool = True
) -> Tables:
    """Draw a feeder; with ``devices`` also a service transformer, a regulator, a capacitor."""
    size = draw(st.integers(2, 6))
    names = ["S", *(f"n{i}" for i in range(1, size + 1))]
    lines = []
    for i in range(1, size + 1):
        r = draw(number(0.2, 1.2))
        lines.append({
            "line": f"L{i}", "from_node": names[draw(st.integers(0, i - 1))], "to_node": names[i],
            "length_km": draw(number(0.1, 2)), "r1_ohm_per_km": r,
            "x1_ohm_per_km": round(r * draw(number(*x_over_r)), 6),
            "rating_a": draw(st.sampled_from([90, 150, 240, "unlimited"])),
        })  # fmt: skip
    loads = [{"node": n, "kw": draw(number(0, 250)), "power_factor": draw(number(0.85, 1))}
             for n in names[1:]]  # fmt: skip
    tables: Tables = {
        "source": [{"node": "S", "kv": 10, "voltage_pu": draw(number(0.99, 1.02))}],
        "lines": lines, "loads": loads, "cases": deepcopy(CASES),
        "limits": [{"limit": "v_min_pu", "value": 0.92}, {"limit": "search_cap_kw",
                                                          "value": 8000}],
    }  # fmt: skip
    if draw(st.booleans()):
        tables["generators"] = [{"node": draw(st.sampled_from(names[1:])), "kw": draw(
            number(1, 150))}]  # fmt: skip
    if devices and draw(st.booleans()):
        tables["capacitors"] = [{"node": draw(st.sampled_from(names[1:])), "kvar": draw(
            number(10, 150))}]  # fmt: skip
        loads[0] |= {"zip_z": 0.3, "zip_i": 0.3, "zip_p": 0.4}
    if devices and draw(st.booleans()):
        tables["transformers"] = [{
            "transformer": "T", "from_node": draw(st.sampled_from(names[1:])), "to_node": "low",
            "kva": draw(st.sampled_from([100, 250])), "kv_primary": 10, "kv_secondary": 0.4,
            "z_pct": 4, "x_over_r": 1.5, "tap_pu": draw(st.sampled_from([0.975, 1.0])),
        }]  # fmt: skip
        loads.append({"node": "low", "kw": draw(number(1, 60))})
    if devices and draw(st.booleans()):
        first = lines[0]
        first["to_node"], kept = "reg", first["to_node"]
        tables["regulators"] = [{
            "regulator": "R", "from_node": "reg", "to_node": kept, "rating_a": 300,
            **draw(st.sampled_from([{"tap": 3}, {"setpoint_pu": 1.0, "bandwidth_pu": 0.015}])),
        }]  # fmt: skip
    return tables


@dataclass(frozen=True)
class Result:
    """What one row says: rating in kW, each criterion alone in kW (inf: not met)."""

    kw: float
    criterion: str
    alone: tuple[float, ...]
    broken: bool


def results(hosting: Hosting) -> dict[tuple[str, str], Result]:
    """Return what every row says, by node and technology."""
    feeder = hosting.feeder
    return {
        (feeder.nodes[r.candidate.node], r.candidate.technology): Result(
            feeder.kw(r.rating), str(r.criterion), tuple(map(feeder.kw, r.by_group)),
            bool(r.broken),
        )
        for r in hosting.rows
    }  # fmt: skip


def ask(tables: Sheets, **settings: object) -> dict[tuple[str, str], Result]:
    return results(answer(tables, **settings))


def assert_alike(
    before: dict[tuple[str, str], Result],
    after: dict[tuple[str, str], Result],
    renamed: Callable[[str], str] = str,
    close: float = 1e-6,
) -> None:
    """Every row of ``before`` is there and says the same; there may be more rows."""
    for (node, technology), old in before.items():
        new = after[renamed(node), technology]
        assert new.kw == pytest.approx(old.kw, rel=close, abs=1e-6), (node, technology)
        assert new.broken == old.broken
        # Of two limits met at once either may be named.
        ordered = sorted(old.alone[:-2])
        if ordered[1] > ordered[0] * (1 + 1e-5):
            assert new.criterion == old.criterion, (node, technology)


# --- names, order, direction --------------------------------------------------------------------


@few
@given(feeders(), st.randoms(use_true_random=False))
def test_names_and_row_order_mean_nothing(tables: Tables, chance: random.Random) -> None:
    names = {r[end] for sheet in ("lines", "transformers", "regulators")
             for r in tables.get(sheet, []) for end in ("from_node", "to_node")}  # fmt: skip
    numbers = list(range(100, 100 + len(names)))
    chance.shuffle(numbers)
    renamed = {n: str(i) for n, i in zip(sorted(names), numbers, strict=True)}
    other: Tables = {}
    for sheet, rows in tables.items():
        other[sheet] = [
            {k: renamed.get(v, v) if k in ("node", "from_node", "to_node") else v
             for k, v in row.items()}
            for row in rows
        ]  # fmt: skip
        chance.shuffle(other[sheet])
    assert_alike(ask(tables), ask(other), renamed.__getitem__)


@few
@given(feeders(), st.randoms(use_true_random=False))
def test_the_direction_of_a_line_is_the_trees(tables: Tables, chance: random.Random) -> None:
    other = deepcopy(tables)
    for row in other["lines"]:
        if chance.random() < 0.7:
            row["from_node"], row["to_node"] = row["to_node"], row["from_node"]
    assert_alike(ask(tables), ask(other), close=1e-9)


# --- units and bases ----------------------------------------------------------------------------


def _swapped(row: dict[str, Any], old: str, new: str, factor: float) -> None:
    if old in row:
        row[new] = row.pop(old) * factor


@few
@given(feeders(), st.sampled_from(["ft", "mi", "m", "total"]))
def test_units_mean_nothing(tables: Tables, unit: str) -> None:
    other = deepcopy(tables)
    for row in other["lines"]:
        if unit == "total":
            for letter in "rx":
                row[f"{letter}1_ohm"] = row.pop(f"{letter}1_ohm_per_km") * row["length_km"]
            del row["length_km"]
        else:
            # International foot and mile (1959): 0.3048 m, 1609.344 m.
            per_km = {"ft": 1 / 0.0003048, "mi": 1 / 1.609344, "m": 1000.0}[unit]
            _swapped(row, "length_km", f"length_{unit}", per_km)
            for letter in "rx" if unit != "m" else "":
                name = {"ft": "kft", "mi": "mi"}[unit]
                _swapped(row, f"{letter}1_ohm_per_km", f"{letter}1_ohm_per_{name}",
                         {"ft": 0.3048, "mi": 1.609344}[unit])  # fmt: skip
    for row in other["loads"]:
        _swapped(row, "kw", "mw", 1e-3)
    for row in other.get("capacitors", []):
        _swapped(row, "kvar", "mvar", 1e-3)
    assert_alike(ask(tables), ask(other))


@few
@given(feeders(), st.sampled_from([0.6, 1.247, 2.0]))
def test_another_voltage_with_everything_scaled_changes_no_kw(tables: Tables, by: float) -> None:
    other = deepcopy(tables)
    for rows in other.values():
        for row in rows:
            row |= {k: row[k] * by for k in KV if k in row}
            row |= {k: row[k] * by**2 for k in ("r1_ohm_per_km", "x1_ohm_per_km") if k in row}
            if isinstance(row.get("rating_a"), int | float):
                row["rating_a"] /= by
    assert_alike(ask(tables), ask(other))


@few
@given(feeders(), st.sampled_from([0.1, 10.0, 100.0]))
def test_the_power_base_changes_no_kw(tables: Tables, mva: float) -> None:
    assert_alike(ask(tables), ask(tables, base_mva=mva))


# --- switches and halves ------------------------------------------------------------------------


@few
@given(feeders(), st.data())
def test_a_switch_in_a_line_changes_nothing(tables: Tables, data: st.DataObject) -> None:
    other = deepcopy(tables)
    row = other["lines"][data.draw(st.integers(0, len(other["lines"]) - 1))]
    end = data.draw(st.sampled_from(["from_node", "to_node"]))
    other["lines"].append({"line": "SW", "from_node": "between", "to_node": row[end],
                           "rating_a": "unlimited"})  # fmt: skip
    row[end] = "between"
    assert_alike(ask(tables), ask(other))


@few
@given(feeders(), st.data())
def test_a_line_in_two_halves_changes_nothing(tables: Tables, data: st.DataObject) -> None:
    other = deepcopy(tables)
    row = other["lines"][data.draw(st.integers(0, len(other["lines"]) - 1))]
    share = data.draw(st.sampled_from([0.1, 0.5, 0.8]))
    rest = row | {"line": "rest", "from_node": "between"}
    row["to_node"] = "between"
    row["length_km"], rest["length_km"] = share * row["length_km"], (1 - share) * row["length_km"]
    other["lines"].append(rest)
    assert_alike(ask(tables), ask(other))


# --- tighter is never more ----------------------------------------------------------------------

LOOSER: dict[str, Callable[[Tables], None]] = {
    "v_max_pu": lambda t: t["limits"].append({"limit": "v_max_pu", "value": 1.06}),
    "v_min_pu": lambda t: t["limits"][0].update(value=0.91),
    "voltage_change_mv_pct": lambda t: t["limits"].append(
        {"limit": "voltage_change_mv_pct", "value": 3.5}
    ),
    "line_loading_pct": lambda t: t["limits"].append({"limit": "line_loading_pct", "value": 130}),
    "export_limit_kw": lambda t: t["source"][0].update(export_limit_kw=600),
    "one rating": lambda t: t["lines"][0].update(rating_a="unlimited"),
}


@pytest.mark.parametrize("looser", LOOSER.values(), ids=LOOSER)
@settings(few, max_examples=4)
@given(tables=feeders(x_over_r=(0.3, 3.0)))
def test_a_looser_limit_never_lowers_hosting(
    looser: Callable[[Tables], None], tables: Tables
) -> None:
    tables["source"][0]["export_limit_kw"] = 400
    other = deepcopy(tables)
    looser(other)
    before, after = ask(tables), ask(other)
    assume(not any(r.broken for r in before.values()))
    for where, old in before.items():
        assert after[where].kw >= old.kw * (1 - 1e-8), where


@few
@given(feeders(x_over_r=(0.05, 0.95), devices=False), st.data())
def test_existing_pv_never_raises_pv_hosting_under_a_voltage_limit(
    tables: Tables, data: st.DataObject
) -> None:
    # Holds on feeders of x/r below 1; above, reactive losses of the flow may lower the voltage.
    for row in tables["lines"]:
        row["rating_a"] = "unlimited"
    tables["limits"] = [{"limit": "v_min_pu", "value": 0.5}, {"limit": "search_cap_kw",
        "value": 8000}, {"limit": "voltage_change_mv_pct", "value": 0}]  # fmt: skip
    tables["candidates"] = [{"node": r["to_node"], "technology": "pv"} for r in tables["lines"]]
    other = deepcopy(tables)
    there = {"node": data.draw(st.sampled_from([r["to_node"] for r in tables["lines"]])),
             "kw": data.draw(number(1, 300))}  # fmt: skip
    other["generators"] = [*tables.get("generators", []), there]
    before, after = ask(tables), ask(other)
    assume(not any(r.broken for r in [*before.values(), *after.values()]))
    for where, old in before.items():
        assert after[where].kw <= old.kw * (1 + 1e-8), where


@few
@given(feeders(), number(0.3, 1.1), number(0, 1))
def test_one_more_case_never_raises_hosting(tables: Tables, load: float, sun: float) -> None:
    other = deepcopy(tables)
    other["cases"].append({"case": "more", "load_scale": load, "pv_scale": sun, "ev_scale": 0.5})
    before, after = ask(tables), ask(other)
    for where, old in before.items():
        assert after[where].kw <= old.kw * (1 + 1e-9), where
    # The order of cases means nothing, nor does one that stands there twice.
    other["cases"] = [*reversed(other["cases"]), other["cases"][0] | {"case": "again"}]
    assert_alike(after, ask(other), close=1e-9)


# --- power balance ------------------------------------------------------------------------------


@few
@given(feeders(devices=False))
def test_source_and_injections_equal_loads_and_losses(tables: Tables) -> None:
    feeder = build(tables)
    sheet = base_cases_table(feeder, base_solutions(feeder, Options())).to_dict("records")
    demand = sum(r["kw"] for r in tables["loads"])
    there = sum(r["kw"] for r in tables.get("generators", []))
    for case, shown in zip(CASES, sheet, strict=True):
        taken = case["load_scale"] * demand - case["pv_scale"] * there
        assert shown["head_kw"] - taken == pytest.approx(shown["loss_kw"], abs=1e-6)
        assert shown["loss_kw"] >= 0


@pytest.mark.parametrize("seed", range(3000, 3012))
def test_base_cases_balance_and_are_the_judges(seed: int) -> None:
    tables = random_feeder(seed)
    feeder = build(tables)
    base = base_solutions(feeder, Options())
    sheet = base_cases_table(feeder, base).to_dict("records")
    for case, solved, shown in zip(tables["cases"], base, sheet, strict=True):
        assert abs(power_balance(solved)) < 1e-9
        judged = base_case(tables, case["case"])
        assert shown["head_kw"] == pytest.approx(judged.head.real, rel=1e-8, abs=1e-6)
        assert shown["head_kvar"] == pytest.approx(judged.head.imag, rel=1e-8, abs=1e-6)
        assert shown["loss_kw"] == pytest.approx(judged.loss.real, rel=1e-8, abs=1e-6)
        sizes = {n: abs(v) for n, v in judged.voltages.items()}
        assert shown["lowest_pu"] == pytest.approx(min(sizes.values()), rel=1e-9)
        assert shown["highest_pu"] == pytest.approx(max(sizes.values()), rel=1e-9)


# --- files --------------------------------------------------------------------------------------


def _write_folder(tables: Sheets, folder: Path) -> None:
    folder.mkdir()
    for sheet, rows in tables.items():
        headers = list(dict.fromkeys(k for row in rows for k in row))
        with (folder / f"{sheet}.csv").open("w", newline="", encoding="utf-8") as file:
            writer = csv.DictWriter(file, headers)
            writer.writeheader()
            writer.writerows(rows)


def _hosted(path: Path) -> Sequence[tuple[Any, ...]]:
    hosting = host(load_feeder(path).feeder, Options())
    return [(r.candidate, r.state, r.criterion, r.rating, r.hosting, *r.by_group)
            for r in hosting.rows]  # fmt: skip


@settings(few, max_examples=5)
@given(feeders())
def test_workbook_and_folder_give_what_the_tables_give(tables: Tables) -> None:
    direct = answer(tables, plain_sample=8)
    with tempfile.TemporaryDirectory() as place:
        book, folder = Path(place, "tables.xlsx"), Path(place, "tables")
        write_input(tables, book)
        _write_folder(tables, folder)
        by_book, by_folder = _hosted(book), _hosted(folder)
    assert by_book == by_folder
    assert by_book == [
        (r.candidate, r.state, r.criterion, r.rating, r.hosting, *r.by_group) for r in direct.rows
    ]
