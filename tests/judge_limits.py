"""What the judge watches: every limit of the workbook as a quantity of one circuit's unknowns."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from judge_tables import Feeder, Row, power, source_voltage

ZERO = 1e-12  # a slack this close to zero is rounding, not a violation (pu)
CRITERIA = (
    "voltage_high", "voltage_low", "voltage_change", "line_rating", "transformer_rating",
    "regulator_rating", "bank_rating", "head_export", "head_import",
)  # fmt: skip


@dataclass(frozen=True)
class Watch:
    """Everything watched in one circuit: quantity = coef * (|z| or Re z) + offset, z affine.

    A quantity above zero is a violation.
    """

    functional: np.ndarray
    constant: np.ndarray
    index: np.ndarray
    coef: np.ndarray
    offset: np.ndarray
    real: np.ndarray
    criterion: np.ndarray
    element: tuple[str, ...]

    def values(self, x: np.ndarray, slope: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return every quantity and its derivative with respect to the rating."""
        z, dz = self.functional @ x + self.constant, self.functional @ slope
        size = abs(z)
        dsize = (z.conj() * dz).real / np.where(size > 0, size, 1)
        z_real, dz_real = z.real[self.index], dz.real[self.index]
        value = np.where(self.real, z_real, size[self.index])
        change = np.where(self.real, dz_real, dsize[self.index])
        return self.coef * value + self.offset, self.coef * change


def watch_limits(
    feeder: Feeder, case: Row, ratios: np.ndarray, base: np.ndarray, steady: bool, change: bool
) -> Watch | None:
    """List every quantity of a circuit; those of one element share its name."""
    n, limits = len(feeder.nodes), feeder.limits
    functional: list[np.ndarray] = []
    constant: list[complex] = []
    items: list[tuple[int, float, float, bool, str, str]] = []

    def watch_terms(terms: dict[int, complex], plus: complex = 0.0) -> int:
        row = np.zeros(len(base), complex)
        for at, value in terms.items():
            row[at] += value
        functional.append(row)
        constant.append(plus)
        return len(functional) - 1

    for i, node in enumerate(feeder.nodes):
        z = watch_terms({i: 1.0})
        low, high = _node_limits(feeder, i)
        if steady and i != feeder.root:
            items += [(z, 1.0, -high, False, "voltage_high", node),
                      (z, -1.0, low, False, "voltage_low", node)]  # fmt: skip
        allowed = limits["voltage_change_" + ("mv" if feeder.kv[i] > 1 else "lv") + "_pct"] / 100
        if change and allowed > 0:
            items += [(z, 1.0, -abs(base[i]) - allowed, False, "voltage_change", node),
                      (z, -1.0, abs(base[i]) - allowed, False, "voltage_change", node)]  # fmt: skip
    if steady:
        ends: list[tuple[dict[int, complex], float, str, str]] = []
        for s in feeder.series:
            a = s.y + 1j * s.b_half
            # A terminal carries what flows through it, the no-load current of the core included.
            ends += [({s.f: a / s.tap**2 + s.no_load, s.t: -s.y / s.tap}, s.rated_f, s.kind,
                      s.name),
                     ({s.f: -s.y / s.tap, s.t: a}, s.rated_t, s.kind, s.name)]  # fmt: skip
        for k, link in enumerate(feeder.links):
            kind = "line" if link.kind == "switch" else link.kind
            for factor in {1.0, float(ratios[k])}:
                ends.append(({n + 1 + k: factor}, link.rated, kind, link.name))
        for terms, rated, kind, element in ends:
            if math.isfinite(rated):
                part = "line" if kind == "line" else "transformer"
                allowed = limits[f"{part}_loading_pct"] / 100
                items.append((watch_terms(terms), 1 / rated, -allowed, False, f"{kind}_rating",
                              element))  # fmt: skip
        items += _head(feeder, case, watch_terms)
    if not items:
        return None
    index, coef, offset, real, criteria, names = zip(*items, strict=True)
    return Watch(
        np.array(functional), np.array(constant), np.array(index), np.array(coef),
        np.array(offset), np.array(real), np.array([CRITERIA.index(c) for c in criteria]), names,
    )  # fmt: skip


def _node_limits(feeder: Feeder, i: int) -> tuple[float, float]:
    """Return lowest and highest voltage of a node: its own, the primary's, the general one."""
    limits, own = feeder.limits, feeder.own.get(feeder.nodes[i], {})
    pair: list[float] = []
    for side in ("min", "max"):
        value = float(limits[f"v_{side}_pu"])
        if feeder.kv[i] > 1:
            value = float(limits.get(f"v_{side}_primary_pu", value))
        if f"v_{side}_kv" in own:
            value = float(own[f"v_{side}_kv"]) / feeder.kv[i]
        pair.append(float(own.get(f"v_{side}_pu", value)))
    return pair[0], pair[1]


def _head(
    feeder: Feeder, case: Row, watch_terms: Callable[..., int]
) -> list[tuple[int, float, float, bool, str, str]]:
    """Return the quantities at the source: bank rating, most export, most import (MW)."""
    items: list[tuple[int, float, float, bool, str, str]] = []
    root = feeder.nodes[feeder.root]
    current, v = len(feeder.nodes), source_voltage(feeder, case)
    kva = power(feeder.source, "transformer_", "va")
    if kva is not None:
        p, q = (power(case, "bank_other_", u) or 0.0 for u in ("w", "var"))
        z = watch_terms({current: v}, complex(p, -q) / 1000)  # conj of S: V real, I as it is
        allowed = feeder.limits["transformer_loading_pct"] / 100
        items.append((z, 1000 / kva, -allowed, False, "bank_rating", root))
    for way, sign in (("export", -1.0), ("import", 1.0)):
        stated = [power(r, f"{way}_limit_", "w") for r in (feeder.source, feeder.limits)]
        bounds = [b for b in stated if b is not None]
        if bounds:
            z = watch_terms({current: v})
            items.append((z, sign, -min(bounds) / 1000, True, f"head_{way}", root))
    return items


def replace_broken(
    feeder: Feeder, watch: Watch, h: np.ndarray
) -> tuple[Watch, list[tuple[str, str]]]:
    """Replace limits broken with nothing added by the base value and what it may worsen by.

    A limit belongs to an element: where one terminal is over its rating, the replaced loading
    holds for both.
    """
    offset, broken = watch.offset.copy(), []
    for i in np.flatnonzero(h > ZERO):
        criterion, element = CRITERIA[watch.criterion[i]], watch.element[i]
        same = [j for j in range(len(h)) if watch.criterion[j] == watch.criterion[i]
                and watch.element[j] == element]  # fmt: skip
        if criterion.startswith("voltage"):
            offset[i] -= h[i] + feeder.limits["worsen_voltage_pu"]
        else:
            base = max(h[j] - watch.offset[j] for j in same)
            offset[same] = -base * (1 + feeder.limits["worsen_loading_pct"] / 100)
        if (criterion, element) not in broken:
            broken.append((criterion, element))
    return replace(watch, offset=offset), broken
