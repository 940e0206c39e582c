"""The feeder with nothing added: sheets `base` and `base_cases`."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import pandas as pd

from feederhost.feeder.model import Case, Feeder
from feederhost.flow.limits import Quantity, head_power, measure, sending_voltage
from feederhost.flow.sweep import node_shunt
from feederhost.flow.taps import Solved
from feederhost.flow.tree import Floats
from feederhost.schema import LIMIT_CRITERIA, RESULT, Criterion
from feederhost.study.cases import steady_limits
from feederhost.study.rows import element_name


def series_loss(solved: Solved) -> complex:
    """Loss in the series impedances, r ell + j x ell, per unit."""
    J = solved.point.J[:, :, 0]
    return complex(np.einsum("ka,kab,kb->", np.conj(J), solved.network.z, J))


def core_loss(solved: Solved) -> float:
    """No-load loss of transformers, per unit."""
    network, V = solved.network, solved.point.V
    sending = np.abs(sending_voltage(network, V)[:, :, 0]) ** 2
    receiving = np.abs(V[:, :, 0]) ** 2
    return float((network.y_from.real * sending + network.y_to.real * receiving).sum())


def power_balance(solved: Solved) -> complex:
    """Power from the source minus what loads, shunts and series impedances take, per unit."""
    V, loading = solved.point.V[..., 0], solved.loading
    taken = loading.power[..., 0] + loading.current[..., 0] * np.abs(V)
    shunt = np.conj(node_shunt(solved.network, loading)[..., 0]) * np.abs(V) ** 2
    return complex(head_power(solved.point).sum() - (taken + shunt).sum()) - series_loss(solved)


def violations(feeder: Feeder, case: Case, solved: Solved) -> dict[int, list[str]]:
    """Name the limits broken with nothing added, by node (a branch counts at its lower node)."""
    limits = steady_limits(feeder, solved, case, "")
    measured = measure(solved.network, limits, solved.point)[:, 0]
    over = np.where(limits.upper, measured > limits.bound, measured < limits.bound)
    named: dict[int, list[str]] = {}
    for row in np.flatnonzero(over):
        criterion = LIMIT_CRITERIA[limits.criterion[row]]
        k = int(limits.element[row])
        text = str(criterion)
        if criterion not in (Criterion.VOLTAGE_HIGH, Criterion.VOLTAGE_LOW):
            text += f" {element_name(feeder, criterion, k)}"
        if text not in named.setdefault(k, []):
            named[k].append(text)
    return named


def loadings(feeder: Feeder, case: Case, solved: Solved) -> tuple[float, str]:
    """Largest share of a rating in percent of what is allowed, and where (bank included)."""
    limits = steady_limits(feeder, solved, case, "")
    measured = measure(solved.network, limits, solved.point)[:, 0]
    rated = (limits.quantity != Quantity.VOLTAGE) & (limits.quantity != Quantity.HEAD_POWER)
    rated &= limits.bound > 0
    if not rated.any():
        return math.nan, ""
    share = np.where(rated, measured / np.where(rated, limits.bound, 1.0), -1.0)
    at = int(share.argmax())
    criterion = LIMIT_CRITERIA[limits.criterion[at]]
    return 100 * math.sqrt(share[at]), element_name(feeder, criterion, int(limits.element[at]))


def base_cases_table(feeder: Feeder, base: Sequence[Solved]) -> pd.DataFrame:
    """Return the `base_cases` sheet."""
    rows = []
    for case, solved in zip(feeder.cases, base, strict=True):
        loss = series_loss(solved)
        head = complex(head_power(solved.point).sum())
        size = _actual(solved)
        low, high = int(size.argmin()), int(size.argmax())
        worst, where = loadings(feeder, case, solved)
        rows.append(
            {
                "case": case.name, "loss_kw": feeder.kw(loss.real + core_loss(solved)),
                "loss_kvar": feeder.kw(loss.imag), "head_kw": feeder.kw(head.real),
                "head_kvar": feeder.kw(head.imag), "lowest_pu": float(size[low]),
                "lowest_node": feeder.nodes[low], "highest_pu": float(size[high]),
                "highest_node": feeder.nodes[high],
                "worst_loading_pct": worst if math.isfinite(worst) else None,
                "worst_element": where, "taps": _taps(feeder, solved),
            }
        )  # fmt: skip
    return pd.DataFrame(rows, columns=list(RESULT["base_cases"].names), dtype=object)


def _actual(solved: Solved) -> Floats:
    return np.abs(solved.point.V[:, 0, 0]) * solved.network.gain[:, 0]


def _taps(feeder: Feeder, solved: Solved) -> str:
    parts = []
    for regulator, tap in zip(feeder.regulators, solved.taps, strict=True):
        edge = feeder.edges[regulator.node]
        held = "" if regulator.moves else " fixed"
        parts.append(f"{edge.name if edge else ''} {tap:+g}{held}")
    return ", ".join(parts)


def base_table(
    feeder: Feeder, base: Sequence[Solved], binding: set[str] | None = None
) -> tuple[pd.DataFrame, bool]:
    """Return the `base` sheet and whether it holds every case.

    Beyond ``Settings.base_cells`` only binding cases and those of the lowest and the highest
    voltage are listed.
    """
    everything = len(base) * len(feeder.nodes) <= feeder.settings.base_cells
    listed = range(len(base))
    if not everything:
        lowest = min(listed, key=lambda i: _actual(base[i]).min())
        highest = max(listed, key=lambda i: _actual(base[i]).max())
        keep = {lowest, highest}
        names = binding or set()
        keep |= {i for i in listed if feeder.cases[i].name in names}
        listed = sorted(keep)  # type: ignore[assignment]
    rows: list[dict[str, object]] = []
    for i in listed:
        case, solved = feeder.cases[i], base[i]
        named = violations(feeder, case, solved)
        size, V = _actual(solved), solved.point.V[:, 0, 0]
        rows += [
            {
                "case": case.name, "node": feeder.nodes[k], "voltage_pu": float(size[k]),
                "angle_deg": math.degrees(float(np.angle(V[k]))),
                "violation": "; ".join(named.get(k, [])),
            }
            for k in range(len(feeder.nodes))
        ]  # fmt: skip
    return pd.DataFrame(rows, columns=list(RESULT["base"].names), dtype=object), everything
