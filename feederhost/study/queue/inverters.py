"""What an inverter can do for a request: a fixed power factor, a volt-var or volt-watt curve."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from feederhost.feeder.model import EXPORT, Feeder
from feederhost.feeder.perunit import tangent_of
from feederhost.flow.limits import head_power
from feederhost.flow.sweep import sweep
from feederhost.schema import Proof
from feederhost.study.cases import BOTH, CaseStudy
from feederhost.study.nodal import rounded_down
from feederhost.study.queue.offers import (
    Ask,
    Remedy,
    Trial,
    carried,
    joined,
    offered,
    passes,
    present,
    remedy,
    whole_line,
    written,
)
from feederhost.study.queue.sites import Part, Site, ceiling_of, draw_of, power_of, reserved_power

FIXED_POWER_FACTOR = "fixed_power_factor"
# What stops a size that the inverter itself cannot carry: the column that says so.
INVERTER = "inverter_kva"


def exports(part: Part) -> bool:
    """Whether a part of a site can feed in."""
    return part.technology.direction in (EXPORT, BOTH)


def inverter_leaves(ask: Ask, site: Site) -> float:
    """Size beyond which the inverter lets a site's export grow no more in some case."""
    cases = [s.case for s in ask.line.studies[EXPORT] if draw_of(site, s.case, EXPORT) != 0]
    return min((ceiling_of(site, c, EXPORT, limited=False) for c in cases), default=math.inf)


def at_power_factor(site: Site, power_factor: float) -> Site:
    """Return a site whose exporting parts absorb at a power factor, or more if they do now."""
    most = -tangent_of(power_factor)
    parts = tuple(
        replace(p, reactive=min(p.reactive, most)) if exports(p) else p for p in site.parts
    )
    return replace(site, parts=parts)


def power_factors(ask: Ask) -> list[tuple[float, Site]]:
    """Power factors to try, least absorbing first, each with the site as it would be."""
    settings, site = ask.feeder.settings, ask.site
    steps = round((1 - settings.power_factor_lowest) / settings.power_factor_step)
    tried = [(1 - k * settings.power_factor_step) for k in range(steps + 1)]
    changed = [(pf, at_power_factor(site, pf)) for pf in tried]
    return [(pf, own) for pf, own in changed if own.parts != site.parts]


def fixed_power_factor(ask: Ask) -> Remedy | None:
    """Offer the least absorbing power factor at which what is asked fits.

    Where none carries it, the one that carries most.  None for a site that does not export, or
    whose power factor is at the end already.
    """
    choices = power_factors(ask)
    if EXPORT not in ask.site.ways or not choices:
        return None
    trials = [
        Trial(_setting(pf), ask.feeder, _with(ask, own), present(ask.line)) for pf, own in choices
    ]
    found = next(carried(ask, trials, 0.0, ask.least()), None)
    if found is None:
        lowest = _setting(ask.feeder.settings.power_factor_lowest)
        note = f"none down to {lowest} carries more than the smaller size"
        return remedy(ask, FIXED_POWER_FACTOR, "", note)
    number, stop = found
    own, trial = choices[number][1], trials[number]
    size, criterion = ask.site.asked, ""
    if stop.rating < size:
        size, criterion = rounded_down(ask.feeder, stop.rating), str(stop.criterion or "")
    left = inverter_leaves(ask, own)
    kept = min(size, inverter_leaves(ask, ask.site))
    note = ""
    if left < kept:
        # The inverter itself holds the power there: the last digit of a product may go up.
        exact = left * (1 + ask.feeder.settings.search_tolerance)
        size, criterion = rounded_down(ask.feeder, exact), INVERTER
        asked = written(ask.feeder.kw(ask.site.asked))
        note = f"the inverter leaves {written(ask.feeder.kw(size))} of {asked} kW"
    name = trial.setting
    if size <= ask.smaller:
        note = joined(note, "no more than the smaller size")
        return remedy(ask, FIXED_POWER_FACTOR, name, note)
    if not passes(whole_line(ask, trial), ask, size):
        return remedy(ask, FIXED_POWER_FACTOR, name, "the AC check did not pass")
    if math.isinf(left):
        units = (p.rating / own.asked * complex(1, p.reactive) for p in own.parts if exports(p))
        kva = ask.feeder.kw(size * abs(sum(units)))
        note = f"inverter_kva is blank: {kva:,.1f} kVA keep all kW"
    note = joined(note, _added_vars(ask, own, size), _head_loading(ask, own, size))
    proof = Proof.AC_ONLY if criterion else Proof.NOT_NEEDED
    return offered(remedy(ask, FIXED_POWER_FACTOR, name, note), ask, size, criterion, str(proof))


def _setting(power_factor: float) -> str:
    return f"{power_factor:.2f} absorbing" if power_factor < 1 else f"{power_factor:.2f}"


def _with(ask: Ask, own: Site) -> tuple[Site, ...]:
    """Return the queue with the request changed."""
    return tuple(own if i == ask.at else site for i, site in enumerate(ask.line.sites))


def _added_vars(ask: Ask, own: Site, size: float) -> str:
    """Say how much more the site absorbs at full output."""
    more = sum(
        p.rating / own.asked * (p.reactive - q.reactive)
        for p, q in zip(ask.site.parts, own.parts, strict=True)
    )
    return f"absorbs {ask.feeder.kw(size * more):,.1f} kvar more at full output"


def _head_loading(ask: Ask, own: Site, size: float) -> str:
    """Say what the head carries in the case that loads it most, before and after."""
    loads = []
    for study in ask.line.studies[EXPORT]:
        if draw_of(own, study.case, EXPORT) != 0:
            before, after = (head_of(ask, study, s, size) for s in (ask.site, own))
            loads.append((after, before, study.case.name))
    after, before, case = max(loads)
    return (
        f"loading at the head {_kva(ask.feeder, before)} -> {_kva(ask.feeder, after)} kVA "
        f"at this size (case {case})"
    )


def head_of(ask: Ask, study: CaseStudy, site: Site, size: float) -> float:
    """Apparent power at the head with a site at a size and the queue; NaN: no solution."""
    feeder, loading = ask.feeder, study.held.loading
    power = loading.power + reserved_power(feeder, ask.sizes, ask.line.sites, study.case, EXPORT)
    power[site.node] += power_of(site, size, study.case, EXPORT) / feeder.network.phases
    point = sweep(study.held.network, loading, feeder.settings, power)
    return float(np.abs(head_power(point).sum(axis=0))[0]) if point.solved.all() else math.nan


def _kva(feeder: Feeder, power: float) -> str:
    return "no solution" if math.isnan(power) else f"{feeder.kw(power):,.0f}"
