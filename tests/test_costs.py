"""Costs of alternatives: only what the sheet has, for what it is meant."""

from __future__ import annotations

import math
from typing import Any

import pytest
from feederhost.study.queue.costs import NAMES, Work, priced
from feederhost.study.queue.offers import Remedy

from asked import (
    LONG,
    found,
    line_of,
    request,
    two_lines,
)
from engine import two_bus


def cost(item: str, unit: str = "", low: float = 100, high: float = 300) -> dict[str, Any]:
    return {"item": item, "unit": unit, "low": low, "high": high, "year": 2026, "currency": "USD"}


def test_a_cost_per_km_goes_with_the_length():
    tables = two_lines(costs=[cost("reconductor, thin to thick", "km")])
    own = found(tables)["larger_conductor"]
    assert (own.cost_low, own.cost_high) == (LONG * 100, LONG * 300)
    assert own.currency == "USD 2026"
    assert "reconductor, thin to thick" in own.note


def test_without_the_sheet_no_cost():
    rows = found(two_lines())
    assert all(math.isnan(r.cost_low) and not r.currency for r in rows.values())


def test_the_order_does_not_heed_costs():
    dear = [cost("reconductor", "km", 1e6, 2e6), cost("volt-var", "", 1, 2)]
    assert list(found(two_lines(costs=dear))) == list(found(two_lines()))


OWN = Remedy("Q1", "larger_conductor", "line L2: ACSR 1/0 -> ACSR 336", kw=500.0)
WORK = Work("ACSR 1/0", "ACSR 336", length_km=2.0)


def price(items: list[dict[str, Any]], own: Remedy = OWN, work: Work | None = WORK) -> Remedy:
    _, checked = line_of(two_bus(3 + 6j, **request(), costs=items))
    return priced(own, checked, work)


@pytest.mark.parametrize(
    "item",
    ["reconductor", "Reconductor, 1/0 to 336", "larger_conductor ACSR 336", "larger conductor L2",
     "new conductor: ACSR 1/0 to ACSR 336"],
)  # fmt: skip
def test_items_that_are_meant(item: str):
    assert price([cost(item, "km")]).cost_low == 200.0


@pytest.mark.parametrize(
    "item",
    ["reconductor, 336 to 795", "reconductor, 1/0 to 795", "reconductor 1/0", "volt-var",
     "larger transformer", "land", "reconductor underground"],
)  # fmt: skip
def test_items_of_something_else(item: str):
    own = price([cost(item, "km")])
    assert math.isnan(own.cost_low)
    assert own.note == ""


def test_the_item_that_says_most_counts():
    items = [cost("reconductor", "km", 1, 2), cost("reconductor, 1/0 to 336", "km", 10, 20)]
    assert price(items).cost_low == 20.0


@pytest.mark.parametrize(
    ("unit", "low"),
    [("km", 200.0), ("USD/km", 200.0), ("per km", 200.0), ("m", 200_000.0),
     ("mi", 100 * 2 / 1.609344), ("each", 100.0), ("", 100.0), ("kW", 50_000.0)],
)  # fmt: skip
def test_units_of_costs(unit: str, low: float):
    assert price([cost("reconductor", unit)]).cost_low == pytest.approx(low, rel=1e-12)


def test_a_unit_that_means_nothing_leaves_the_cost_blank():
    own = price([cost("reconductor", "month")])
    assert math.isnan(own.cost_low)
    assert "nothing is known in month" in own.note


def test_transformers_are_told_apart_by_their_new_size():
    own = Remedy("Q1", "larger_transformer", "transformer T1: 50 kVA -> 75 kVA", kw=60.0)
    work = Work("50 kVA", "75 kVA", kva=75.0)
    items = [cost("transformer 50 kVA", "", 1, 2), cost("transformer 75 kVA", "kva", 10, 20)]
    assert price(items, own, work).cost_low == 750.0


def test_every_name_of_a_remedy_is_priced_by_it():
    for remedy, names in NAMES.items():
        for name in (remedy, *names):
            own = Remedy("Q1", remedy, "anything", kw=1.0)
            assert price([cost(name)], own, None).cost_low == 100.0, name
