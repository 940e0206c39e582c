"""What would make a request fit: alternatives in a fixed order, each proven again by AC.

Each stands alone, with the queue in place: a smaller size, a fixed power factor, volt-var,
volt-watt, a schedule, a regulator setting or tap, a larger conductor or transformer.  A row
without a number says why that alternative does not help.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

from feederhost.feeder.tables import Tables
from feederhost.schema import Proof
from feederhost.study.queue.controls import controls
from feederhost.study.queue.costs import priced
from feederhost.study.queue.inverters import fixed_power_factor
from feederhost.study.queue.offers import Ask, Remedy, offered, passes, remedy, written
from feederhost.study.queue.regulation import regulator_setting
from feederhost.study.queue.schedules import schedule
from feederhost.study.queue.stops import Line, Stop
from feederhost.study.queue.upgrades import upgrade

__all__ = ["SMALLER_SIZE", "Remedy", "remedies_of"]

SMALLER_SIZE = "smaller_size"


def remedies_of(
    line: Line, tables: Tables, at: int, sizes: Mapping[int, float], stop: Stop
) -> tuple[Remedy, ...]:
    """Return the alternatives of a request that does not fit.

    Parameters
    ----------
    line : Line
    tables : Tables
        The workbook: libraries of sizes, curves, costs, calendar of the cases.
    at : int
        Number of the site.
    sizes : mapping of int to float
        Sizes of the other sites, per unit.
    stop : Stop
        What the request meets first (see :func:`study.queue.stops.first_stop`).

    Returns
    -------
    tuple of Remedy
        In fixed order; alternatives that do not apply (a power factor of a charger, a setting
        with no regulator on the way) are left out.
    """
    ask = Ask(line, tables, at, sizes, stop)
    found = (
        smaller_size(ask),
        fixed_power_factor(ask),
        *controls(ask),
        schedule(ask),
        regulator_setting(ask),
    )
    # What is built is priced where its length is known.
    built = upgrade(ask)
    return (*(priced(r, tables) for r in found if r), *((built,) if built else ()))


def smaller_size(ask: Ask) -> Remedy:
    """Return the size that fits as the feeder is."""
    size, criterion = ask.smaller, str(ask.stop.criterion or "")
    own = remedy(ask, SMALLER_SIZE, f"{written(ask.feeder.kw(size))} kW")
    if ask.feeder.kw(size) < ask.feeder.settings.rounding_kw:
        note = "less than one step of rounding fits"
        return replace(own, setting="", criterion=criterion, note=note)
    if not passes(ask.line, ask, size):
        return replace(own, note="the AC check did not pass")
    return offered(own, ask, size, criterion, str(Proof.AC_ONLY))
