"""An independent judge of hosting: AC first violation straight from the feeder's tables.

It shares no code with the package.  The rating grows from zero by continuation: tangent
predictor, Newton corrector, so it stays on the high-voltage branch.  Between two points every
limit is looked at through values AND slopes, so that an excursion inside a step is found, and
the first crossing is closed in by bracketing to 1e-10 of the rating.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from scipy.optimize import brentq

from judge_limits import CRITERIA, ZERO, Watch, replace_broken, watch_limits
from judge_network import (
    Circuit,
    NoSolution,
    build,
    held_ratios,
    newton,
    ratios_of,
    solve_base,
    taps_found,
)
from judge_tables import (
    Feeder,
    Row,
    Tables,
    demand,
    name,
    power,
    reactive,
    read,
    rows,
    scale_of,
    source_voltage,
)

__all__ = ["Base", "JudgeRow", "NoSolution", "base_case", "first_violation", "worst_slack"]


@dataclass(frozen=True)
class JudgeRow:
    """The judge's answer for one node and technology.

    ``hosting_kw`` is unrounded; ``criterion`` may also be ``search_cap``, ``never_runs`` or
    ``no_solution`` (the power flow ends before any limit is met).  ``per_criterion`` holds the
    first violation of each criterion alone, for those that are met up to the cap; it is
    complete only where every criterion was asked for.  ``broken`` names the limits that are
    broken with nothing added, as (case, criterion, element).
    """

    hosting_kw: float
    criterion: str
    element: str = ""
    case: str = ""
    direction: str = ""
    per_criterion: dict[str, float] = field(default_factory=dict)
    broken: tuple[tuple[str, str, str], ...] = ()


@dataclass(frozen=True)
class Base:
    """Power flow of one case with nothing added (voltages in pu, powers in kW and kvar)."""

    voltages: dict[str, complex]
    head: complex
    loss: complex
    taps: dict[str, float]


@dataclass(frozen=True)
class Point:
    """One solved rating: g in kW, unknowns, their slope, quantities and their slope."""

    g: float
    x: np.ndarray
    dx: np.ndarray
    h: np.ndarray
    dh: np.ndarray


def first_violation(
    tables: Tables, node: str, technology: str, *, cap_kw: float | None = None,
    every_criterion: bool = True,
) -> JudgeRow:  # fmt: skip
    """Return the rating at which the first limit is met as the plant at a node grows.

    Parameters
    ----------
    tables : mapping of sheet name to rows or data frame
        The feeder in workbook form.
    node, technology : str
        Where, and what; power factor and largest rating may stand in ``candidates``.
    cap_kw : float, optional
        End of the search; default as in the workbook's rules.
    every_criterion : bool
        Go on to the cap for ``per_criterion``; else stop at the first violation.

    Raises
    ------
    NoSolution
        A case has no power flow solution with nothing added.
    """
    feeder = read(tables)
    kind = _plant(feeder, tables, node, technology)
    if cap_kw is None:
        peak = 1000 * sum(s.real for _, _, s, _ in feeder.loads)
        cap_kw = float(feeder.limits.get("search_cap_kw", max(100.0, 10 * peak)))
        cap_kw = power(kind, "max_", "w") or cap_kw
    ways = ("export", "import") if kind["direction"] == "both" else (kind["direction"],)
    answers = [_one_way(feeder, node, kind, way, cap_kw, every_criterion) for way in ways]
    least = min(answers, key=lambda a: a.hosting_kw)
    merged: dict[str, float] = {}
    for a in answers:
        for c, g in a.per_criterion.items():
            merged[c] = min(g, merged.get(c, math.inf))
    return JudgeRow(least.hosting_kw, least.criterion, least.element, least.case, least.direction,
                    merged, least.broken)  # fmt: skip


def worst_slack(tables: Tables, node: str, technology: str, kw: float) -> dict[str, float]:
    """Return the least slack of every criterion, over all cases, at full output of a rating.

    Slack in pu voltage, share of rating or MW; below zero is a violation; -inf for a case
    without solution.
    """
    feeder = read(tables)
    kind = _plant(feeder, tables, node, technology)
    ways = ("export", "import") if kind["direction"] == "both" else (kind["direction"],)
    least: dict[str, float] = {}
    for way in ways:
        for case in feeder.cases:
            for circuit, watch, base, _ in _studies(feeder, case, node, kind, way):
                at: Point | None = base
                while at is not None and at.g < kw:
                    step, nxt = kw - at.g, None
                    while nxt is None and step > 1e-9 * kw:
                        nxt = _advance(circuit, watch, at, at.g + step)
                        step /= 2
                    at = nxt
                for c in np.unique(watch.criterion):
                    worst = -math.inf if at is None else -at.h[watch.criterion == c].max()
                    least[CRITERIA[c]] = min(float(worst), least.get(CRITERIA[c], math.inf))
    return least


def base_case(tables: Tables, case: str | None = None) -> Base:
    """Return the power flow with nothing added, taps found, in a case (default: the first)."""
    feeder = read(tables)
    chosen = next(c for c in feeder.cases if case is None or str(c["case"]) == case)
    taps = taps_found(feeder, chosen)
    circuit = build(feeder, ratios_of(feeder, taps), demand(feeder, chosen, None),
                    source_voltage(feeder, chosen))  # fmt: skip
    x, _ = solve_base(circuit)
    v = x[: circuit.n]
    loss = sum(
        abs((v[s.f] / s.tap - v[s.t]) * s.y) ** 2 * s.z
        for s in feeder.series
    ) + sum(s.no_load * abs(v[s.f]) ** 2 for s in feeder.series)  # fmt: skip
    head = v[feeder.root] * x[circuit.n].conj()
    found = {a.name: float(t) for a, t in zip(feeder.links, taps, strict=True)
             if a.kind == "regulator"}  # fmt: skip
    return Base(dict(zip(feeder.nodes, v.tolist(), strict=True)), 1000 * complex(head),
                1000 * complex(loss), found)  # fmt: skip


def _plant(feeder: Feeder, tables: Tables, node: str, technology: str) -> Row:
    """Return the technology's row with what the candidate's row adds (power factor, cap)."""
    kind = dict(feeder.technologies[technology])
    for r in rows(tables, "candidates"):
        if name(r["node"]) == node and r.get("technology", technology) == technology:
            kind.update({k: v for k, v in r.items() if k not in ("node", "technology")})
    return kind


def _one_way(
    feeder: Feeder, node: str, kind: Row, way: str, cap: float, every: bool
) -> JudgeRow:  # fmt: skip
    found: dict[str, tuple[float, str, str]] = {}
    broken: list[tuple[str, str, str]] = []
    end = (math.inf, "")
    ran = False
    for case in feeder.cases:
        if scale_of(kind, case) == 0:
            continue
        ran = True
        for circuit, watch, base, was_broken in _studies(feeder, case, node, kind, way):
            broken += [(str(case["case"]), *b) for b in was_broken]
            last = _march(circuit, watch, base, str(case["case"]), cap, every, found)
            end = min(end, (last, str(case["case"])))
    if not ran:
        return JudgeRow(math.nan, "never_runs", direction=way)
    per_criterion = {c: g for c, (g, _, _) in found.items()}
    first = min(found, key=lambda c: found[c][0]) if found else ""
    if found and found[first][0] <= end[0]:
        g, element, case_name = found[first]
        return JudgeRow(g, first, element, case_name, way, per_criterion, tuple(broken))
    if end[0] < cap:
        return JudgeRow(end[0], "no_solution", node, end[1], way, per_criterion, tuple(broken))
    return JudgeRow(cap, "search_cap", "", "", way, per_criterion, tuple(broken))


def _studies(
    feeder: Feeder, case: Row, node: str, kind: Row, way: str
) -> list[tuple[Circuit, Watch, Point, list[tuple[str, str]]]]:
    """Return the circuits to march in a case: voltage held, and EMF held where it differs."""
    share = scale_of(kind, case) * float(kind.get("coincidence", 1.0)) / 1000
    unit = complex(share, reactive(share, kind, export=way == "export"))
    unit *= 1 if way == "export" else -1
    ratios = held_ratios(feeder, case, way)
    drawn = demand(feeder, case, way)
    v_source = source_voltage(feeder, case)
    plant = feeder.nodes.index(node)
    circuit = build(feeder, ratios, drawn, v_source, 0.0, plant, unit)
    x, dx = solve_base(circuit)
    emf = "short_circuit_mva" in feeder.source
    watches = [(circuit, watch_limits(feeder, case, ratios, x, steady=True, change=not emf))]
    if emf:
        ratio = float(feeder.source.get("x_over_r", 10.0))
        z = complex(1, ratio) / math.hypot(1, ratio) / float(feeder.source["short_circuit_mva"])
        behind = build(feeder, ratios, drawn, v_source + z * x[circuit.n], z, plant, unit)
        watches.append((behind, watch_limits(feeder, case, ratios, x, steady=False, change=True)))
    studies = []
    for c, watch in watches:
        if watch is None:
            continue
        x, dx = solve_base(c, x)
        h, dh = watch.values(x, dx)
        watch, was_broken = replace_broken(feeder, watch, h)
        h, dh = watch.values(x, dx)
        studies.append((c, watch, Point(0.0, x, dx, h, dh), was_broken))
    return studies


def _advance(circuit: Circuit, watch: Watch, at: Point, g: float) -> Point | None:
    """Go from a solved point to another rating on the same branch, or None."""
    n = circuit.n
    guess = at.x + (g - at.g) * at.dx
    move = abs(guess[:n] - at.x[:n]).max()
    if move > 0.1:
        return None
    solved = newton(circuit, g, guess)
    # A corrector that undoes much of the predictor has landed on another branch.
    if solved is None or abs(solved[0][:n] - guess[:n]).max() > 1e-6 + 0.3 * move:
        return None
    return Point(g, *solved, *watch.values(*solved))


def _march(
    circuit: Circuit, watch: Watch, base: Point, case: str, cap: float, every: bool,
    found: dict[str, tuple[float, str, str]],
) -> float:  # fmt: skip
    """Grow the rating; enter first crossings in ``found``; return where solutions end (or inf).

    Stops where nothing smaller than what was found before can be met.
    """
    codes = set(np.unique(watch.criterion).tolist())
    at, step = base, cap / 2000
    while codes:
        best = {c: found.get(CRITERIA[c], (cap,))[0] for c in codes}
        stop = max(best.values()) if every else min([cap] + [f[0] for f in found.values()])
        if at.g >= stop:
            break
        step = min(step, cap / 50)
        nxt = _advance(circuit, watch, at, min(at.g + step, stop))
        if nxt is None:
            step /= 2
            if step < 1e-10 * max(at.g, cap / 2000):
                return at.g
            continue
        for c in sorted(codes):
            mask = watch.criterion == c
            bracket = _bracket(circuit, watch, mask, at, nxt, 0)
            if bracket is not None:
                g, element = _close_in(circuit, watch, mask, *bracket)
                codes.discard(c)
                if g < found.get(CRITERIA[c], (math.inf,))[0]:
                    found[CRITERIA[c]] = (g, element, case)
        at, step = nxt, step * 1.5
    return math.inf


def _bracket(
    circuit: Circuit, watch: Watch, mask: np.ndarray, a: Point, b: Point, depth: int
) -> tuple[Point, Point] | None:
    """Return the first part of [a, b] that begins without and ends with a violation."""
    h0, h1, d0, d1 = a.h[mask], b.h[mask], a.dh[mask], b.dh[mask]
    # Rising at a, falling at b: a peak inside, below the crossing of the two tangents (if
    # concave; half as much again is allowed for where it is not quite).
    peaked = (d0 > 0) & (d1 < 0)
    if peaked.any() and depth < 40:
        width = b.g - a.g
        run = (h1[peaked] - h0[peaked] - d1[peaked] * width) / (d0[peaked] - d1[peaked])
        run = np.clip(run, 0.01 * width, 0.99 * width)
        top = h0[peaked] + d0[peaked] * run
        top += 0.5 * (top - np.maximum(h0[peaked], h1[peaked]))
        if top.max() > ZERO:
            middle = _advance(circuit, watch, a, a.g + float(run[top.argmax()]))
            if middle is not None:
                left = _bracket(circuit, watch, mask, a, middle, depth + 1)
                return left or _bracket(circuit, watch, mask, middle, b, depth + 1)
    return (a, b) if (h1 > ZERO).any() else None


def _close_in(
    circuit: Circuit, watch: Watch, mask: np.ndarray, a: Point, b: Point
) -> tuple[float, str]:
    """Close the bracket in to 1e-10 of the rating; return rating and element."""
    known = {a.g: a, b.g: b}

    def worst(g: float) -> float:
        if g not in known:
            near = min(known.values(), key=lambda p: abs(p.g - g))
            point = _advance(circuit, watch, near, g) or _advance(circuit, watch, a, g)
            if point is None:
                return 1.0
            known[g] = point
        return float(known[g].h[mask].max()) - ZERO

    g = a.g
    if worst(a.g) < 0:
        g = float(brentq(worst, a.g, b.g, xtol=1e-11 * b.g, rtol=1e-12))
    point = min(known.values(), key=lambda p: abs(p.g - g))
    element = np.array(watch.element)[mask][int(point.h[mask].argmax())]
    return g, str(element)
