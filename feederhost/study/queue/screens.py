"""Rule screens of one request: measured quantity, threshold, verdict, what is missing, source.

Screens are rules of thumb beside the power flow.  They count generation by its nameplate AC
rating, and are never assessed on what is only a default or an assumption.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Collection, Mapping

import numpy as np

from feederhost.feeder.model import EXPORT, IMPORT
from feederhost.flow.tree import Floats, path
from feederhost.study.queue.screen_data import ScreenData, screen_data
from feederhost.study.queue.screening import SOURCES, Screen, Trial, at_most, below, trial
from feederhost.study.queue.service_screens import (
    LISTED,
    centre_tap,
    line_type,
    listed,
    shared_secondary,
)
from feederhost.study.queue.voltage_screens import (
    CHANGES,
    EXPORT_CONTROL,
    export_control,
    voltage_changes,
)

__all__ = ["NAMES", "Screen", "ScreenData", "screen_data", "screen_site"]

_NO_MARKS = "automatic device on any line"
_NO_LOADS = "loads"
_NO_SOURCE = "short_circuit_mva of the source"


def screen_site(
    data: ScreenData,
    at: int,
    sizes: Mapping[int, float],
    size: float,
    only: Collection[str] = (),
) -> tuple[Screen, ...]:
    """Screen one request at a size.

    Parameters
    ----------
    data : ScreenData
    at : int
        Number of the site.
    sizes : mapping of int to float
        Sizes of the earlier sites, per unit; what they import counts for nothing.
    size : float
        Size of the site itself, per unit.
    only : collection of str
        Names of the screens that are wanted (see ``NAMES``); empty: all.

    Returns
    -------
    tuple of Screen
        Empty for a site that never exports or has a fault: the rules are about generation.
    """
    site = data.line.sites[at]
    if site.fault or EXPORT not in site.ways:
        return ()
    wanted = set(only or NAMES)
    own = trial(data, at, sizes, size)
    screens = [rule(own) for name, rule in _RULES.items() if name in wanted]
    if wanted & set(CHANGES):
        screens += [s for s in voltage_changes(own) if s.screen in wanted]
    if EXPORT_CONTROL in wanted and math.isfinite(site.export_limit):
        screens.append(export_control(own))
    return (*screens, *(listed(own, name) for name in LISTED if name in wanted))


def peak_load(trial: Trial) -> Screen:
    """Hold generation against the annual peak of the smallest section that holds the site.

    The peak is the largest demand of the section over the cases.
    """
    name, share = "peak load", trial.settings.screen_peak_pct
    missing = _unknown_sections(trial)
    at = 0 if missing else _upstream(trial)[-1]
    peak = float(trial.data.demand[at].max())
    total = float(trial.below[trial.data.sections[at]])
    threshold = share / 100 * peak
    return trial.screen(
        name, SOURCES["screen_peak_pct"], quantity=trial.feeder.kw(total),
        threshold=trial.feeder.kw(threshold), unit="kW",
        holds=at_most(total, threshold, trial.settings), missing=missing,
        detail=f"{share:g} % of {trial.feeder.kw(peak):,.6g} kW, {_section(trial, at)}",
    )  # fmt: skip


def minimum_load(trial: Trial) -> Screen:
    """Hold generation against the least demand of every section from the site to the source.

    The section with the largest share is shown.  A technology with a window is held to the
    cases of those hours (a case without an hour may be one of them), any other to all cases.
    """
    name, share = "minimum load", trial.settings.screen_minimum_pct
    inside, unknown, hours = _cases_inside(trial)
    missing = (*_unknown_sections(trial), *unknown)
    least = trial.data.demand.min(axis=1, where=inside, initial=np.inf)
    known = inside & ~trial.data.assumed
    on = _upstream(trial)
    sure = trial.data.demand.min(axis=1, where=known, initial=np.inf)
    if inside.any() and (least[on] < sure[on]).any():
        missing = (*missing, "a minimum load that is not assumed")
    totals = trial.below[list(trial.data.sections)]
    with np.errstate(divide="ignore"):
        at = 0 if missing else on[int((totals[on] / least[on]).argmax())]
    threshold = share / 100 * float(least[at])
    shown = trial.feeder.kw(threshold) if inside.any() else np.nan
    detail = f"{share:g} % of the least load{hours}, {_section(trial, at)}"
    if inside.any():
        case = int(np.where(inside, trial.data.demand[at], np.inf).argmin())
        detail += f", case {trial.data.cases[case]}"
    return trial.screen(
        name, SOURCES["screen_minimum_pct"], quantity=trial.feeder.kw(float(totals[at])),
        threshold=shown, unit="kW", holds=below(float(totals[at]), threshold, trial.settings),
        missing=missing, detail=detail,
    )  # fmt: skip


def fault_share(trial: Trial) -> Screen:
    """Hold the fault current of all generation against the source's, at the primary point."""
    name, source = "fault current", SOURCES["screen_fault_pct"]
    feeder, share = trial.feeder, trial.settings.screen_fault_pct
    node = int(trial.data.serving.primary[trial.site.node])
    added = feeder.amps(trial.infeed, node)
    if trial.data.level is None:
        return trial.screen(name, source, quantity=added, unit="A", missing=(_NO_SOURCE,))
    there = float(trial.data.level[node])
    threshold = share / 100 * there
    return trial.screen(
        name, source, quantity=added, threshold=feeder.amps(threshold, node), unit="A",
        holds=at_most(trial.infeed, threshold, trial.settings),
        detail=f"{share:g} % of {feeder.amps(there, node):,.6g} A at {feeder.nodes[node]}",
    )  # fmt: skip


def interrupting_duty(trial: Trial) -> Screen:
    """Find the device that comes closest to its interrupting capability, all generation added.

    A fault just behind the device: the level is that of its end towards the source.
    """
    name, source = "interrupting duty", SOURCES["screen_interrupting_pct"]
    feeder, share, data = trial.feeder, trial.settings.screen_interrupting_pct, trial.data
    missing = (
        *((_NO_SOURCE,) if data.level is None else ()),
        *(() if data.devices else ("interrupting_a of any line",)),
    )
    if data.level is None or missing:
        return trial.screen(name, source, unit="A", missing=missing)
    level = data.level
    device = max(data.devices, key=lambda d: (level[d.node] + trial.infeed) / d.capability)
    duty = float(level[device.node]) + trial.infeed
    threshold = share / 100 * device.capability
    amps = [feeder.amps(v, device.node) for v in (duty, threshold, device.capability)]
    detail = f"{share:g} % of {amps[2]:,.6g} A, line {device.name}"
    if not at_most(duty - trial.own_infeed, threshold, trial.settings):
        detail += "; above it without this request"
    return trial.screen(
        name, source, quantity=amps[0], threshold=amps[1], unit="A",
        holds=at_most(duty, threshold, trial.settings), detail=detail,
    )  # fmt: skip


def _upstream(trial: Trial) -> list[int]:
    """Positions of the sections that hold the site, the whole feeder first."""
    on = {0, *path(trial.feeder.tree, trial.site.node)}
    return [i for i, head in enumerate(trial.data.sections) if head in on]


def _section(trial: Trial, at: int) -> str:
    edge = trial.feeder.edges[trial.data.sections[at]]
    return f"behind line {edge.name}" if edge is not None else "whole feeder"


def _unknown_sections(trial: Trial) -> tuple[str, ...]:
    marks = () if trial.data.marked else (_NO_MARKS,)
    return (*marks, *(() if trial.data.loads[0] else (_NO_LOADS,)))


def _cases_inside(trial: Trial) -> tuple[np.ndarray, tuple[str, ...], str]:
    """Cases that fall into the hours of the site, what is missing to say so, and the hours."""
    hours = trial.data.hours
    every = np.ones(hours.size, dtype=bool)
    kinds = [
        trial.data.kinds[p.technology.name]
        for p in trial.site.parts
        if p.technology.direction != IMPORT
    ]
    windows = [k.window for k in kinds if k.window is not None]
    if len(windows) < len(kinds):
        return every, (), ""
    words = ", ".join(dict.fromkeys(f"{a:g} to {b:g}" for a, b in windows))
    if np.isnan(hours).all():
        return every, ("hour of the cases",), f" of hours {words}"
    inside = np.isnan(hours)
    for window in windows:
        inside |= _within(hours, window)
    unknown = () if inside.any() else (f"a case within hours {words}",)
    return inside, unknown, f" of hours {words}"


def _within(hours: Floats, window: tuple[float, float]) -> np.ndarray:
    """Tell which hours fall into a window, both ends included; it may run past midnight."""
    first, last = window
    if first <= last:
        inside: np.ndarray = (hours >= first) & (hours <= last)
        return inside
    return (hours >= first) | (hours <= last)


_RULES: Mapping[str, Callable[[Trial], Screen]] = {
    "peak load": peak_load,
    "minimum load": minimum_load,
    "fault current": fault_share,
    "interrupting duty": interrupting_duty,
    "line type": line_type,
    "shared secondary": shared_secondary,
    "centre-tap imbalance": centre_tap,
}
NAMES = (*_RULES, *CHANGES, EXPORT_CONTROL, *LISTED)
