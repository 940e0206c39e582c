"""An export or charging limit by hour and month as an alternative, and the energy it costs."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from feederhost.feeder.model import EXPORT
from feederhost.schema import Proof
from feederhost.study.cases import BOTH, CaseStudy
from feederhost.study.nodal import rounded_down
from feederhost.study.queue.offers import (
    Ask,
    Remedy,
    Trial,
    joined,
    offered,
    present,
    remedy,
    stop_in_case,
    written,
)
from feederhost.study.queue.sites import draw_of, power_of
from feederhost.study.queue.stops import least_slack

SCHEDULE = "schedule"
MONTHS, HOURS = range(1, 13), range(24)


@dataclass(frozen=True)
class Span:
    """One case in one direction of the site: when it is, for how long, and what fits.

    ``size`` is the largest size that fits in the case alone, ``full`` the power at the asked
    size, ``unit`` the power per unit of size.
    """

    study: CaseStudy
    way: str
    month: int
    hour: int
    hours: float
    size: float
    full: float
    unit: float


def schedule(ask: Ask) -> Remedy | None:
    """Offer what is asked, held back in the hours of the months in which it does not fit.

    The limit of an hour and month is the least over its cases; energy lost is the sum over
    cases of their hours times what is held back.  None where the site never runs.
    """
    found, missing = calendar(ask)
    if missing:
        return remedy(ask, SCHEDULE, "", missing)
    spans = _spans(ask, found)
    if not spans:
        return None
    limits = _limits(ask, spans)
    held = [_held(ask, span, limits) for span in spans]
    sizes = [min(ask.site.asked, p / s.unit) for p, s in zip(held, spans, strict=True)]
    own = remedy(ask, SCHEDULE, _setting(ask, spans, limits))
    if not all(_passes(ask, s, g) for s, g in zip(spans, sizes, strict=True)):
        return replace(own, note="the AC check did not pass")
    full = sum(s.hours * s.full for s in spans)
    lost = sum(s.hours * (s.full - p) for s, p in zip(spans, held, strict=True))
    if lost >= full:
        return replace(own, note="nothing would be left in any hour")
    total = sum(hours for _, _, hours in found.values())
    note = joined(
        f"{100 * lost / full:.1f} % of the energy over the {total:,.0f} h of the cases is lost",
        _calendar_text(ask, limits),
    )
    own = replace(own, note=note, energy_lost_mwh=ask.feeder.kw(lost) / 1e3)
    return offered(own, ask, ask.site.asked, "", str(Proof.AC_ONLY))


def calendar(ask: Ask) -> tuple[dict[str, tuple[int, int, float]], str]:
    """Return month, hour and hours of every case, and what is missing for a schedule."""
    fewest, used = ask.feeder.settings.schedule_cases, {c.name for c in ask.feeder.cases}
    found = {}
    for _, cells in ask.tables.rows("cases"):
        when = (cells["month"], cells["hour"], cells["hours"])
        if cells["case"] in used and not any(math.isnan(v) for v in when):
            found[cells["case"]] = (int(when[0]), int(when[1]), float(when[2]))
    need = (
        f"a schedule takes {fewest} cases at least that cover the year: month, hour and hours "
        f"given, every hour of every month"
    )
    if len(used) < fewest:
        return found, f"{need}; there are {len(used)}"
    bins = {(month, hour) for month, hour, _ in found.values()}
    gaps = len(MONTHS) * len(HOURS) - len(bins & {(m, h) for m in MONTHS for h in HOURS})
    if len(found) < len(used):
        return found, f"{need}; {len(used) - len(found)} cases lack one of these"
    if gaps:
        return found, f"{need}; {gaps} hours of a month have no case"
    return found, ""


def _spans(ask: Ask, found: dict[str, tuple[int, int, float]]) -> list[Span]:
    own = Trial("", ask.feeder, ask.line.sites, present(ask.line))
    spans = []
    for way in ask.site.ways:
        for study in ask.line.studies[way]:
            unit = abs(draw_of(ask.site, study.case, way).real)
            if unit == 0:
                continue
            stop = stop_in_case(ask, own, study.index, way, 0.0)
            full = abs(power_of(ask.site, ask.site.asked, study.case, way).real)
            when = found[study.case.name]
            spans.append(Span(study, way, *when, min(stop.rating, ask.site.asked), full, unit))
    return spans


def _key(ask: Ask, span: Span) -> tuple[str, int, int]:
    """Limits go by direction; storage swings between both, so that one size holds for both."""
    stored = any(p.technology.direction == BOTH for p in ask.site.parts)
    return ("" if stored else span.way, span.month, span.hour)


def _limits(ask: Ask, spans: list[Span]) -> dict[tuple[str, int, int], float]:
    """Least power that fits, per unit and rounded down, of every hour and month held back."""
    limits: dict[tuple[str, int, int], float] = {}
    for span in spans:
        if span.size < ask.site.asked:
            key = _key(ask, span)
            power = rounded_down(ask.feeder, span.size * span.unit)
            limits[key] = min(limits.get(key, math.inf), power)
    return limits


def _held(ask: Ask, span: Span, limits: dict[tuple[str, int, int], float]) -> float:
    """Power left of a case by the limit of its hour and month."""
    return min(span.full, limits.get(_key(ask, span), math.inf))


def _passes(ask: Ask, span: Span, size: float) -> bool:
    """Check a case by AC at the size its limit leaves."""
    own = Trial("", ask.feeder, ask.line.sites, present(ask.line))
    line = own.line(0.0, {span.way: (span.study,)})
    return bool(least_slack(line, ask.at, np.array([size]), [ask.sizes])[0] >= 0)


def _setting(ask: Ask, spans: list[Span], limits: dict[tuple[str, int, int], float]) -> str:
    """Say in one line how often is held back, and when most."""
    ways = {span.way for span in spans}
    word = "power" if len(ways) > 1 else "export" if EXPORT in ways else "charging"
    if not limits:
        return f"{word} never limited"
    (_, month, hour), least = min(limits.items(), key=lambda item: (item[1], item[0]))
    when = len({key[1:] for key in limits})
    return (
        f"{word} limited in {when} of {len(MONTHS) * len(HOURS)} hours of the months, "
        f"least {written(ask.feeder.kw(least))} kW in month {month}, hour {hour}"
    )


def _calendar_text(ask: Ask, limits: dict[tuple[str, int, int], float]) -> str:
    """Write out the limits, month by month."""
    lines = []
    for way in sorted({key[0] for key in limits}):
        for month in MONTHS:
            hours = {h: p for (w, m, h), p in limits.items() if w == way and m == month}
            if hours:
                text = ", ".join(
                    f"{h} h {written(ask.feeder.kw(p))}" for h, p in sorted(hours.items())
                )
                lines.append(f"{way} kW in month {month}: {text}".strip())
    return "; ".join(lines)
