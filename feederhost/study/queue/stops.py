"""One request at a time, with everything before it in place: does it fit, how much, why not."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from feederhost.feeder.model import EXPORT, IMPORT, Feeder
from feederhost.flow.limits import Limits, System, measure, slack
from feederhost.flow.network import Loading, Network, OperatingPoint, behind_loading
from feederhost.flow.search import (
    NO_SOLUTION,
    WATCHED,
    Plants,
    first_violations,
)
from feederhost.flow.sweep import sweep
from feederhost.flow.tree import Complexes, Floats
from feederhost.schema import LIMIT_CRITERIA, Criterion
from feederhost.settings import Settings
from feederhost.study.cases import BOTH, CaseStudy, Posed, change_limits, join_limits
from feederhost.study.queue.sites import Site, ceiling_of, draw_of, power_of, reserved_power

_CHANGE = LIMIT_CRITERIA.index(Criterion.VOLTAGE_CHANGE)


@dataclass(frozen=True)
class Stop:
    """What a growing site meets first.

    Attributes
    ----------
    rating : float
        Largest size before it, per unit; inf: nothing up to the reach.
    criterion : Criterion or None
    way : str
        Direction in which it is met.
    study : CaseStudy or None
    posed : Posed or None
        The system with the queue in place.
    limit : int
        Its limit row; -1 where the solution is lost or nothing is met.
    swing : bool
        Whether it is the swing of storage from charge to discharge.
    """

    rating: float
    criterion: Criterion | None = None
    way: str = ""
    study: CaseStudy | None = None
    posed: Posed | None = None
    limit: int = -1
    swing: bool = False


@dataclass(frozen=True)
class Line:
    """The feeder with its cases posed in both directions, nothing of the queue in place."""

    feeder: Feeder
    studies: Mapping[str, tuple[CaseStudy, ...]]
    sites: tuple[Site, ...]
    reach: float

    def reach_of(self, site: Site) -> float:
        """Size up to which a site is looked at: never less than what it asks for."""
        return max(self.reach, site.asked)


def split_limits(limits: Limits) -> Limits:
    """Return the rows of a steady state: all but the voltage change."""
    keep = limits.criterion != _CHANGE
    return replace(
        limits,
        criterion=limits.criterion[keep], quantity=limits.quantity[keep],
        element=limits.element[keep], phase=limits.phase[keep], upper=limits.upper[keep],
        bound=limits.bound[keep],
    )  # fmt: skip


def with_queue(feeder: Feeder, study: CaseStudy, drawn: Complexes) -> tuple[Posed, ...] | None:
    """Pose a case with what the queue draws (n, phases, 1) in place; None: no solution.

    Limits broken with nothing added stay as the base run relaxed them; the voltage change is
    counted from the voltages with the queue in place.
    """
    steady = study.posed[0]
    network = steady.system.network
    loading = replace(study.held.loading, power=study.held.loading.power + drawn)
    base = sweep(network, loading, feeder.settings, start=study.held.point.V)
    if not base.solved.all():
        return None
    own = split_limits(steady.system.limits)
    none = np.zeros(0, dtype=bool)
    if len(study.posed) == 1:
        limits = join_limits(own, change_limits(feeder, network.gain, base, 0))
        return (Posed(System(network, loading, limits), 0, none, base),)
    beyond = study.posed[1].system.network
    shifted = behind_loading(loading, _emf(feeder, base))
    start = np.concatenate([shifted.source[None], base.V])
    settled = sweep(beyond, shifted, feeder.settings, start=start)
    change = change_limits(feeder, beyond.gain, settled, 1)
    return (
        Posed(System(network, loading, own), 0, none, base),
        Posed(System(beyond, shifted, change), 1, none, settled),
    )


def _emf(feeder: Feeder, base: OperatingPoint) -> Complexes:
    """EMF behind the source impedance that holds the source voltage of a base point."""
    assert feeder.z_source is not None
    emf: Complexes = base.V[0] + feeder.z_source @ base.J[0]
    return emf


def first_stop(line: Line, at: int, sizes: Mapping[int, float], *, limited: bool = True) -> Stop:
    """Find what site ``at`` meets first as it grows, the other sites standing at ``sizes``."""
    site, feeder = line.sites[at], line.feeder
    # Long strides to the nearest limit: the guard of the search rules out what lies between.
    settings = replace(feeder.settings, search_step_share=feeder.settings.queue_step_share)
    best = Stop(math.inf)
    for way in site.ways:
        for study in line.studies[way]:
            unit = draw_of(site, study.case, way)
            if unit == 0:
                continue
            reach = min(line.reach_of(site), ceiling_of(site, study.case, way, limited=limited))
            drawn = reserved_power(feeder, sizes, line.sites, study.case, way)
            posed = with_queue(feeder, study, drawn)
            if posed is None:
                return Stop(0.0, Criterion.AC_CHECK, way, study)
            for own in posed:
                cap = min(reach, best.rating)
                found = _first(feeder, own, site, unit, cap, settings)
                if found.rating < best.rating:
                    best = replace(found, way=way, study=study)
            best = _swing(line, site, study, way, drawn, min(reach, best.rating), best)
    return best


def head_room(line: Line, at: int, sizes: Mapping[int, float], stop: Stop) -> float:
    """Size up to which a site could grow at its node, inverter and export limit aside."""
    site = line.sites[at]
    if math.isinf(stop.rating) and min(site.inverter, site.export_limit) < math.inf:
        free = replace(site, inverter=math.inf, export_limit=math.inf)
        sites = (*line.sites[:at], free, *line.sites[at + 1 :])
        stop = first_stop(replace(line, sites=sites), at, sizes)
    return min(stop.rating, line.reach_of(site))


def _first(
    feeder: Feeder, own: Posed, site: Site, unit: complex, cap: float, settings: Settings
) -> Stop:
    """Search one system for the first violation of a site up to ``cap``."""
    phases = feeder.network.phases
    plants = Plants(
        node=np.array([site.node + own.shift]),
        draw=np.full((1, phases), unit / phases),
        cap=np.array([cap]),
    )
    if cap <= 0:
        return Stop(math.inf)
    found = first_violations(own.system, plants, settings, first_only=True)
    rating = found.rating[:, 0].copy()
    rating[WATCHED] = np.inf
    group = int(rating.argmin())
    if not math.isfinite(rating[group]):
        return Stop(math.inf)
    criterion = Criterion.AC_CHECK if group == NO_SOLUTION else LIMIT_CRITERIA[group]
    return Stop(float(rating[group]), criterion, posed=own, limit=int(found.row[group, 0]))


def _swing(
    line: Line, site: Site, study: CaseStudy, way: str, drawn: Complexes, cap: float, best: Stop
) -> Stop:
    """Check the swing of storage from full charge to full discharge against the voltage change.

    Sizes are tried side by side, then between the last that holds and the first that does not.
    """
    feeder, settings = line.feeder, line.feeder.settings
    if way != EXPORT or not math.isfinite(cap) or cap <= 0:
        return best
    stored = [p for p in site.parts if p.technology.direction == BOTH]
    if not stored or not np.isfinite(feeder.change).any():
        return best
    low, high = 0.0, cap
    for _ in range(settings.swing_rounds):
        tried = np.linspace(low, high, settings.swing_tries)
        room = swing_room(line, site, study, drawn, tried)
        broken = np.flatnonzero(room < 0)
        if broken.size == 0:
            return best
        first = int(broken[0])
        if first == 0:
            low = high = 0.0
            break
        low, high = float(tried[first - 1]), float(tried[first])
        if high - low <= settings.search_tolerance * high:
            break
    return Stop(low, Criterion.VOLTAGE_CHANGE, way, study, swing=True)


def swing_room(
    line: Line, site: Site, study: CaseStudy, others: Complexes, sizes: Floats
) -> Floats:
    """Least room of the voltage change when storage goes from charge to discharge, (m,).

    ``others`` (n, phases, 1 or m) is what the queue draws.
    """
    feeder, case = line.feeder, study.case
    stored = replace(
        site, parts=tuple(p for p in site.parts if p.technology.direction == BOTH)
    )  # fmt: skip
    share = stored.asked / site.asked
    frame = _change_frame(feeder, study, study.held.loading.power + others)
    ends = []
    for way in (EXPORT, IMPORT):
        own = np.array([power_of(stored, share * g, case, way) for g in sizes])
        ends.append(_moved_to(feeder, frame, site, own))
    return _room(feeder, frame, *ends)


@dataclass(frozen=True)
class _Frame:
    """Where a voltage change is counted: behind the source impedance where one is given."""

    network: Network
    loading: Loading
    power: Complexes
    shift: int


def _change_frame(feeder: Feeder, study: CaseStudy, power: Complexes) -> _Frame:
    """Frame of the voltage change with ``power`` (n, phases, m) drawn before it."""
    loading, network = study.held.loading, study.posed[0].system.network
    if len(study.posed) == 1:
        return _Frame(network, loading, power, 0)
    base = sweep(network, loading, feeder.settings, power)
    pad = np.zeros((1, *power.shape[1:]))
    return _Frame(
        study.posed[1].system.network,
        behind_loading(loading, _emf(feeder, base)),
        np.concatenate([pad, power]),
        1,
    )


def _moved_to(feeder: Feeder, frame: _Frame, site: Site, own: Complexes) -> OperatingPoint:
    """Operating points with ``own`` (m,) drawn at the site on top of the frame's power."""
    m = max(own.size, frame.power.shape[2])
    power = np.array(np.broadcast_to(frame.power, (*frame.power.shape[:2], m)))
    power[site.node + frame.shift] += own / feeder.network.phases
    return sweep(frame.network, frame.loading, feeder.settings, power)


def _room(feeder: Feeder, frame: _Frame, a: OperatingPoint, b: OperatingPoint) -> Floats:
    """Least room left by the change between two points, (m,)."""
    moved = frame.network.gain * np.abs(np.abs(a.V[:, 0]) - np.abs(b.V[:, 0]))
    # The source bus counts where it moves, that is behind a source impedance.
    allowed = feeder.change[:, 0] if frame.shift else feeder.change[1:, 0]
    room = (allowed[:, None] - moved[1:]).min(axis=0)
    return np.where(a.solved & b.solved, room, -np.inf)


@dataclass(frozen=True)
class _Queues:
    """Queues side by side: every site and size that occurs, and in which of m queues it does."""

    members: tuple[tuple[int, float], ...]
    present: np.ndarray

    @classmethod
    def of(cls, sizes: Sequence[Mapping[int, float]]) -> _Queues:
        """Collect what the queues have in common, so that it is worked out once."""
        members = tuple(dict.fromkeys(pair for s in sizes for pair in s.items()))
        number = {pair: i for i, pair in enumerate(members)}
        present = np.zeros((len(members), len(sizes)), dtype=bool)
        for column, own in enumerate(sizes):
            present[[number[pair] for pair in own.items()], column] = True
        return cls(members, present)

    def power(self, line: Line, study: CaseStudy, way: str) -> Complexes:
        """Power the queues draw in a case, (n, phases, m)."""
        feeder, phases = line.feeder, line.feeder.network.phases
        drawn = np.zeros((feeder.tree.size, phases, self.present.shape[1]), dtype=complex)
        for (at, size), where in zip(self.members, self.present, strict=True):
            site = line.sites[at]
            drawn[site.node] += power_of(site, size, study.case, way) / phases * where
        return drawn


def least_slack(
    line: Line,
    at: int,
    size: Floats,
    sizes: Sequence[Mapping[int, float]],
    *,
    limited: bool = True,
) -> Floats:
    """Least slack over all limits, cases and directions of a site, for m queues side by side.

    Parameters
    ----------
    size : (m,) float
        Size of the site itself.
    sizes : sequence of m mappings
        Sizes of the others.

    Returns
    -------
    (m,) float
        Minus infinity where a case has no solution.
    """
    site, feeder = line.sites[at], line.feeder
    queue = _Queues.of(sizes)
    least = np.full(size.size, np.inf)
    changes = bool(np.isfinite(feeder.change).any())
    for way in site.ways:
        for study in line.studies[way]:
            if draw_of(site, study.case, way) == 0:
                continue
            others = queue.power(line, study, way)
            own = np.array([power_of(site, g, study.case, way, limited=limited) for g in size])
            least = np.minimum(least, _steady_slack(line, site, study, others, own))
            if not changes:
                continue
            frame = _change_frame(feeder, study, study.held.loading.power + others)
            still = _moved_to(feeder, frame, site, np.zeros(1, dtype=complex))
            least = np.minimum(
                least, _room(feeder, frame, _moved_to(feeder, frame, site, own), still)
            )
            if way == EXPORT and any(p.technology.direction == BOTH for p in site.parts):
                least = np.minimum(least, swing_room(line, site, study, others, size))
    return least


def _steady_slack(
    line: Line, site: Site, study: CaseStudy, others: Complexes, own: Complexes
) -> Floats:
    """Least slack of one case's steady limits with the site at its power, (m,)."""
    feeder = line.feeder
    steady = study.posed[0].system
    power = study.held.loading.power + others
    power[site.node] += own / feeder.network.phases
    point = sweep(steady.network, study.held.loading, feeder.settings, power)
    limits = split_limits(steady.limits)
    room = slack(limits, measure(steady.network, limits, point))
    least = room.min(axis=0, initial=np.inf, where=(limits.criterion >= 0)[:, None])
    return np.where(point.solved, least, -np.inf)
