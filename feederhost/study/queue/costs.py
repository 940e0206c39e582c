"""What an alternative costs: ranges of the `costs` sheet, and nothing where it has none.

An item belongs to an alternative when it starts with the alternative's name or one of its plain
names, and every further word is found in what the alternative sets or builds: ``reconductor,
1/0 to 336`` is the price of a line's change from ``ACSR 1/0`` to ``ACSR 336``; before ``to``
stands what there is, after it what comes.  Of several items the one that says most is taken.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, replace
from typing import Any

from feederhost.feeder.tables import Tables
from feederhost.schema import LENGTH, UNIT_FACTORS
from feederhost.study.queue.offers import Remedy, joined

NAMES = {
    "fixed_power_factor": ("fixed power factor", "power factor"),
    "volt_var": ("volt var",),
    "volt_watt": ("volt watt",),
    "schedule": ("schedule",),
    "regulator_setting": ("regulator setting", "setpoint change", "tap change", "setpoint"),
    "larger_conductor": ("larger conductor", "new conductor", "conductor", "reconductor"),
    "larger_transformer": ("larger transformer", "new transformer", "transformer"),
}
_WORD = re.compile(r"[a-z0-9]+(?:[./][a-z0-9]+)*")
_ONCE = ("", "each", "piece", "unit", "lump", "sum", "once")
_TO = "to"


@dataclass(frozen=True)
class Work:
    """What an alternative changes, in words, and how much of it there is."""

    old: str = ""
    new: str = ""
    length_km: float = math.nan
    kva: float = math.nan


def priced(own: Remedy, tables: Tables, work: Work | None = None) -> Remedy:
    """Return an alternative with the range the workbook gives for it; blank where none."""
    if math.isnan(own.kw):
        return own
    work = work or Work(new=own.setting)
    items = [(_fits(own, work, cells["item"]), cells) for _, cells in tables.rows("costs")]
    best, cells = max(items, key=lambda item: item[0], default=(-1, None))
    if cells is None or best < 0:
        return own
    quantity = _quantity(cells["unit"], own, work)
    if math.isnan(quantity):
        note = f"cost of {cells['item']}: nothing is known in {cells['unit']}"
        return replace(own, note=joined(own.note, note))
    low, high = cells["low"], cells["high"]
    year = "" if math.isnan(cells["year"]) else f"{cells['year']:.0f}"
    return replace(
        own,
        cost_low=low * quantity,
        cost_high=high * quantity,
        currency=" ".join(word for word in (cells["currency"], year) if word),
        note=joined(own.note, f"cost: {cells['item']}"),
    )


def _words(text: Any) -> list[str]:
    return _WORD.findall(str(text).lower().replace("_", " "))


def _fits(own: Remedy, work: Work, item: str) -> int:
    """How many words an item says beyond the alternative's name; -1 where it is another's."""
    said = _words(item)
    best = -1
    for name in (own.remedy, *NAMES.get(own.remedy, ())):
        head = _words(name)
        if said[: len(head)] != head:
            continue
        rest = said[len(head) :]
        there, comes = set(_words(work.old)), set(_words(work.new))
        cut = rest.index(_TO) if _TO in rest else 0
        before, after = set(rest[:cut]), set(rest[cut:]) - {_TO}
        if before <= there and after <= comes | set(_words(own.setting)) - there:
            best = max(best, len(rest))
    return best


def _quantity(unit: str, own: Remedy, work: Work) -> float:
    """How many of a cost's units an alternative takes; NaN where that is not known."""
    # `USD/km` and `per km` are both so much a km.
    name = (_words(unit) or [""])[-1].rpartition("/")[2]
    if name in LENGTH:
        return work.length_km / UNIT_FACTORS[name]
    if name == "kw":
        return own.kw
    if name == "kva":
        return work.kva
    return 1.0 if name in _ONCE else math.nan
