"""Volt-var and volt-watt as alternatives: the curve in the AC loop, in every case.

A size holds where every output looked at, from zero to full, keeps every limit in every case;
nothing is claimed between them, and curves move in the loop: the proof is ``ac_only``.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from feederhost.feeder.model import EXPORT
from feederhost.flow.curves import CATEGORY_B, VOLT_WATT, VOLT_WATT_STORAGE, Curve
from feederhost.schema import Proof
from feederhost.study.cases import BOTH
from feederhost.study.nodal import rounded_down
from feederhost.study.queue.following import Control, Room, Run, at_hand, room_of, runs_of
from feederhost.study.queue.inverters import INVERTER
from feederhost.study.queue.offers import Ask, Remedy, joined, offered, remedy, written

_HUNTS = "the inverter hunts on this curve here: not offered"


def controls(ask: Ask) -> tuple[Remedy, ...]:
    """Offer volt-var, then volt-watt; nothing for a site that does not export."""
    runs = runs_of(ask)
    if all(run.way != EXPORT for run in runs):
        return ()
    return volt_var(ask, runs), volt_watt(ask, runs)


def volt_var(ask: Ask, runs: list[Run]) -> Remedy:
    """Offer the volt-var curve that carries most.

    The curves of sheet `curves` are tried where it has any, else the default of IEEE 1547-2018
    category B.
    """
    curves, faults = volt_var_curves(ask)
    answers = [_volt_var(ask, runs, curve) for curve in curves]
    answers += [remedy(ask, "volt_var", name, fault) for name, fault in faults]
    best = max(answers, key=lambda r: -1.0 if math.isnan(r.kw) else r.kw)
    unused = [f"{name} is not used: {fault}" for name, fault in faults if name != best.setting]
    return replace(best, note=joined(best.note, *unused))


def volt_var_curves(ask: Ask) -> tuple[list[Curve], list[tuple[str, str]]]:
    """Return the curves to try, and those of the workbook that cannot be used, with the reason."""
    points: dict[str, list[tuple[float, float]]] = {}
    for _, cells in ask.tables.rows("curves"):
        points.setdefault(f"curve {cells['curve']}", []).append((cells["v_pu"], cells["q_pu"]))
    curves, faults = [], []
    for name, pairs in points.items():
        voltage, share = np.array(sorted(pairs)).T
        if np.isnan(voltage).any() or np.isnan(share).any():
            faults.append((name, "a point of it lacks v_pu or q_pu"))
        elif voltage.size < 2 or (np.diff(voltage) <= 0).any():
            faults.append((name, "it takes two points at least, each at a voltage of its own"))
        elif (np.diff(share) > 0).any():
            faults.append((name, "q_pu rises with the voltage; positive is injecting"))
        else:
            curves.append(Curve(name, voltage, share))
    return (curves if points else [CATEGORY_B]), faults


def _volt_var(ask: Ask, runs: list[Run], curve: Curve) -> Remedy:
    own, control = remedy(ask, "volt_var", curve.name), Control(var=curve)
    size, criterion, hunts = _largest(ask, runs, control)
    if hunts:
        return replace(own, note=_HUNTS)
    if criterion:
        size = rounded_down(ask.feeder, size)
    note = ""
    rooms = _rooms(ask, runs, control, size)
    firm = size * min(
        r.delivered[0] for r, run in zip(rooms, runs, strict=True) if run.way == EXPORT
    )
    if firm < size * (1 - ask.feeder.settings.search_tolerance):
        note = (
            f"vars go first: the inverter leaves {ask.feeder.kw(firm):,.1f} of "
            f"{written(ask.feeder.kw(size))} kW"
        )
        size, criterion = rounded_down(ask.feeder, firm), INVERTER
        rooms = _rooms(ask, runs, control, size)
    if size <= ask.smaller:
        return replace(own, note=joined(note, "no more than the smaller size"), criterion=criterion)
    if any(room.least[0] < 0 for room in rooms):
        return replace(own, note="the AC check did not pass")
    if math.isinf(ask.site.inverter):
        kva = ask.feeder.kw(math.hypot(size, size * float(np.abs(curve.share).max())))
        note = (
            f"inverter_kva is blank: q_pu is taken of the kW, and {kva:,.1f} kVA keep all of them"
        )
    note = joined(note, f"{ask.feeder.settings.curve_outputs} outputs looked at in every case")
    return offered(replace(own, note=note), ask, size, criterion, str(Proof.AC_ONLY))


def volt_watt(ask: Ask, runs: list[Run]) -> Remedy:
    """Offer what volt-watt leaves firm of the asked size.

    The curtailed share is not counted: ``kw`` is what is delivered in the worst case.
    """
    storage = any(p.technology.direction == BOTH for p in ask.site.parts)
    curve = VOLT_WATT_STORAGE if storage else VOLT_WATT
    own, control = remedy(ask, "volt_watt", curve.name), Control(watt=curve)
    whole = ask.site.asked
    kept: dict[str, float] = {}
    energy = 0.0
    for run in runs:
        room = room_of(ask, run, control, np.array([whole]))
        if room.hunts[0]:
            return replace(own, note=_HUNTS)
        if room.least[0] < 0:
            note = f"a limit breaks all the same: curtailing starts at {curve.voltage[0]:.2f} pu"
            return replace(own, note=note, criterion=room.criterion[0])
        if run.way == EXPORT:
            case, delivered = run.study.case, float(room.delivered[0])
            kept[case.name] = delivered
            full = float(at_hand(ask, run, ask.site.parts, np.array([whole]))[0])
            energy += case.hours * ask.feeder.kw(full) * (1 - delivered) / 1e3
    case_name = min(kept, key=lambda name: kept[name])
    least = kept[case_name]
    note = (
        f"{written(ask.feeder.kw(whole))} kW may be built; up to {100 * (1 - least):.1f} % is "
        f"curtailed (case {case_name}) and not counted as firm"
    )
    if not math.isnan(energy):
        hours = sum(c.hours for c in ask.feeder.cases)
        note = joined(note, f"energy over the {hours:,.0f} h of the cases")
    if least < 1 - ask.feeder.settings.search_tolerance:
        firm, criterion = rounded_down(ask.feeder, whole * least), str(ask.stop.criterion or "")
    else:
        firm, criterion = whole, ""
    own = replace(own, note=note, energy_lost_mwh=energy)
    return offered(own, ask, firm, criterion, str(Proof.AC_ONLY))


def _largest(ask: Ask, runs: list[Run], control: Control) -> tuple[float, str, bool]:
    """Largest size before the first that breaks a limit, what breaks, and whether it hunts.

    Sizes are tried side by side, then between the last that holds and the first that does not.
    """
    settings = ask.feeder.settings
    cap, criterion = ask.site.asked, ""
    for run in runs:
        at_cap = room_of(ask, run, control, np.array([cap]))
        if at_cap.hunts[0]:
            return 0.0, "", True
        if at_cap.least[0] >= 0:
            continue
        low, high = 0.0, cap
        for _ in range(settings.swing_rounds):
            tried = np.linspace(low, high, settings.swing_tries)
            room = room_of(ask, run, control, tried)
            broken = np.flatnonzero(room.least < 0)
            first = int(broken[0]) if broken.size else tried.size - 1
            criterion = room.criterion[first]
            if first == 0:
                return 0.0, criterion, False
            low, high = float(tried[first - 1]), float(tried[first])
            # What is published is rounded down: closer than that is of no use.
            if rounded_down(ask.feeder, low) == rounded_down(ask.feeder, high):
                break
        cap = low
    return cap, criterion, False


def _rooms(ask: Ask, runs: list[Run], control: Control, size: float) -> list[Room]:
    """Look at one size in every case."""
    return [room_of(ask, run, control, np.array([size])) for run in runs]
