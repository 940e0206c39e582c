"""Every case as the search sees it: base solution, held taps, and the limits that count."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from feederhost.errors import NoSolutionError
from feederhost.feeder.model import EXPORT, IMPORT, Case, Feeder, Generators, Technology
from feederhost.flow.limits import Limits, Quantity, System, measure, slack
from feederhost.flow.network import Loading, OperatingPoint, behind, behind_loading
from feederhost.flow.sweep import sweep
from feederhost.flow.taps import Solved, find_taps, hold_at_edge, solve_at
from feederhost.flow.tree import Complexes, Floats
from feederhost.schema import LIMIT_CRITERIA, Criterion

BOTH = "both"


@dataclass(frozen=True)
class Posed:
    """One system of a case: in steady state, or behind the source impedance for the change.

    ``shift`` is how many nodes stand before the feeder's own source node; ``broken`` marks
    the limit rows that nothing added breaks already; ``base`` is the point with nothing added.
    """

    system: System
    shift: int
    broken: np.ndarray
    base: OperatingPoint


@dataclass(frozen=True)
class CaseStudy:
    """A case in one direction under test: solution with nothing added, systems to search."""

    case: Case
    index: int
    held: Solved
    posed: tuple[Posed, ...]


def case_scale(case: Case, technology: Technology) -> float:
    """Power seen in a case per unit of rating (0 where the technology does not run)."""
    return _output(case, technology) * technology.coincidence


def _output(case: Case, technology: Technology) -> float:
    return case.scales.get(technology.scale, 0.0) if technology.scale else 1.0


def plant_draw(direction: str, reactive: float) -> complex:
    """Power drawn per unit of rating: -(1 + jt) exported, 1 + jt imported."""
    return complex(1, reactive) if direction == IMPORT else -complex(1, reactive)


def case_loading(feeder: Feeder, case: Case, direction: str) -> Loading:
    """Return what the nodes draw in a case, not referred.

    ``direction`` is the one under test: plants of direction `both` run that way, and stand
    at zero in the base run (``direction`` blank).
    """
    scale = np.array(
        [
            case.scales.get(f"load_scale.{name}", case.scales.get("load_scale", 1.0))
            for name in feeder.classes
        ]
    )
    power = (feeder.power * scale).sum(axis=2) + _generation(feeder, case, direction)
    current = (feeder.current * scale).sum(axis=2)
    shunt = (feeder.shunt * scale).sum(axis=2) + feeder.fixed_shunt
    held = np.full((feeder.network.phases, 1), case.source_voltage, dtype=complex)
    return Loading(power[..., None], current[..., None], shunt[..., None], held)


def _generation(feeder: Feeder, case: Case, direction: str) -> Complexes:
    drawn = np.zeros(feeder.ratio.shape, dtype=complex)
    plants: Generators = feeder.generators
    for node, which, rating, reactive in zip(
        plants.node, plants.technology, plants.rating, plants.reactive, strict=True
    ):
        technology = feeder.technologies[which]
        way = direction if technology.direction == BOTH else technology.direction
        if way:
            # kW x scale; coincidence belongs to what is asked for, not to what is there.
            seen = rating * _output(case, technology)
            drawn[node] += seen * plant_draw(way, reactive) / feeder.network.phases
    return drawn


def base_run(feeder: Feeder, case: Case) -> Solved:
    """Solve a case with nothing added and find its taps.

    Raises
    ------
    NoSolutionError
        If there is no operating point; it names the case and the weakest node.
    """
    try:
        return find_taps(
            feeder.network,
            case_loading(feeder, case, ""),
            feeder.ratio,
            feeder.regulators,
            feeder.settings,
        )
    except NoSolutionError as error:
        raise _named(error, feeder, case) from error


def _named(error: NoSolutionError, feeder: Feeder, case: Case) -> NoSolutionError:
    node = feeder.nodes[int(str(error))]
    return NoSolutionError(
        f"case {case.name}: no power flow solution with nothing added (weakest node {node})"
    )


def study_case(feeder: Feeder, index: int, found: Solved, direction: str) -> CaseStudy:
    """Pose a case for one direction: regulators held, limits laid out, broken ones relaxed."""
    case, settings = feeder.cases[index], feeder.settings
    side = settings.regulator_edge * (1 if direction == EXPORT else -1)
    try:
        # The edge is that of the base voltage; plants of direction `both` only run after it.
        edge = hold_at_edge(
            feeder.network,
            case_loading(feeder, case, ""),
            found,
            feeder.regulators,
            side,
            settings,
        )
        loading = case_loading(feeder, case, direction)
        held = solve_at(feeder.network, loading, edge.ratio, settings)
    except NoSolutionError as error:
        raise _named(error, feeder, case) from error
    own = steady_limits(feeder, held, case, direction)
    if feeder.z_source is None or not np.isfinite(feeder.change).any():
        change = change_limits(feeder, held.network.gain, held.point, 0)
        both = System(held.network, held.loading, join_limits(own, change))
        posed: tuple[Posed, ...] = (_pose(feeder, held, both, 0),)
    else:
        posed = (
            _pose(feeder, held, System(held.network, held.loading, own), 0),
            _behind_source(feeder, held),
        )
    return CaseStudy(case, index, held, posed)


def _behind_source(feeder: Feeder, held: Solved) -> Posed:
    """Pose the voltage-change check: the EMF behind the source impedance is held."""
    assert feeder.z_source is not None
    network = behind(held.network, feeder.z_source)
    emf = held.point.V[0] + feeder.z_source @ held.point.J[0]
    loading = behind_loading(held.loading, emf)
    base = sweep(network, loading, feeder.settings)
    limits = change_limits(feeder, network.gain, base, 1)
    return Posed(System(network, loading, limits), 1, np.zeros(limits.size, bool), base)


def steady_limits(feeder: Feeder, held: Solved, case: Case, direction: str) -> Limits:
    """Lay out voltage, rating and head limits, referred to the source side."""
    n = feeder.tree.size
    gain = held.network.gain[:, 0]
    k = np.arange(1, n)
    parent_gain = gain[feeder.tree.parent[1:]]
    rated = np.isfinite(feeder.rating[1:, 0])
    # Without a shunt both terminals carry one current: only the tighter one is a row.
    network = held.network
    both = (network.y_from[1:, 0] != 0) | (network.y_to[1:, 0] != 0)
    sending = rated & (both | (parent_gain < gain[1:]))
    receiving = rated & (both | (parent_gain >= gain[1:]))
    i2 = feeder.rating[1:, 0] ** 2
    code = LIMIT_CRITERIA.index
    rows = [
        _block(code(Criterion.VOLTAGE_HIGH), Quantity.VOLTAGE, k, True,
               (feeder.v_max[1:, 0] / gain[1:]) ** 2),
        _block(code(Criterion.VOLTAGE_LOW), Quantity.VOLTAGE, k, False,
               (feeder.v_min[1:, 0] / gain[1:]) ** 2),
        _block(feeder.rating_criterion[1:][sending], Quantity.CURRENT_FROM, k[sending], True,
               (i2 * parent_gain**2)[sending]),
        _block(feeder.rating_criterion[1:][receiving], Quantity.CURRENT_TO, k[receiving], True,
               (i2 * gain[1:] ** 2)[receiving]),
    ]  # fmt: skip
    source = np.zeros(1, dtype=np.intp)
    head = Quantity.HEAD_POWER
    for criterion, quantity, upper, bound in (
        (Criterion.HEAD_EXPORT, head, False, -feeder.export_limit),
        (Criterion.HEAD_IMPORT, head, True, feeder.import_limit),
        (Criterion.BANK_RATING, Quantity.BANK_POWER, True, feeder.bank**2),
    ):
        if np.isfinite(bound):
            rows.append(_block(code(criterion), quantity, source, upper, np.array([bound])))
    if direction == EXPORT:
        rows.append(_block(-1, head, source, False, np.zeros(1)))
    return join_limits(*rows, bank_other=case.bank_other)


def change_limits(feeder: Feeder, gain: Floats, base: OperatingPoint, shift: int) -> Limits:
    """Bounds on the voltage change, around the voltages with nothing added.

    Behind a source impedance the source bus moves too and counts as a node.
    """
    allowed = feeder.change[:, 0] if shift else feeder.change[1:, 0]
    k = np.arange(feeder.tree.size)[0 if shift else 1 :]
    on = np.isfinite(allowed)
    k, allowed = k[on] + shift, allowed[on]
    size = np.abs(base.V[k, 0, 0])
    step = allowed / gain[k, 0]
    code = LIMIT_CRITERIA.index(Criterion.VOLTAGE_CHANGE)
    return join_limits(
        _block(code, Quantity.VOLTAGE, k, True, (size + step) ** 2),
        _block(code, Quantity.VOLTAGE, k, False, np.maximum(size - step, 0.0) ** 2),
    )


def _block(
    criterion: int | np.ndarray,
    quantity: Quantity,
    element: np.ndarray,
    upper: bool,
    bound: Floats,
) -> Limits:
    m = element.size
    return Limits(
        criterion=np.broadcast_to(criterion, (m,)),
        quantity=np.full(m, int(quantity)),
        element=element,
        phase=np.zeros(m, dtype=np.intp),
        upper=np.full(m, upper),
        bound=bound,
    )


def join_limits(*parts: Limits, bank_other: complex | None = None) -> Limits:
    """Put limit rows one after the other."""
    names = ("criterion", "quantity", "element", "phase", "upper", "bound")
    other = parts[0].bank_other if bank_other is None else bank_other
    joined = {name: np.concatenate([getattr(p, name) for p in parts]) for name in names}
    return Limits(**joined, bank_other=other)


def _pose(feeder: Feeder, held: Solved, system: System, shift: int) -> Posed:
    """Relax the limits that are broken with nothing added: nobody pays for what he found."""
    limits = system.limits
    measured = measure(system.network, limits, held.point)[:, 0]
    loading = _element_loading(limits, measured)
    broken = (slack(limits, measured[:, None])[:, 0] < 0) | (loading > 1)
    broken &= limits.criterion >= 0
    relaxed = np.where(broken, _allowance(feeder, system, measured, loading), limits.bound)
    own = System(system.network, system.loading, replace(limits, bound=relaxed))
    return Posed(own, shift, broken, held.point)


def _allowance(feeder: Feeder, system: System, measured: Floats, loading: Floats) -> Floats:
    """Bound that stands in for a broken one: the base value and what it may worsen by."""
    settings, limits = feeder.settings, system.limits
    gain = system.network.gain[limits.element, limits.phase]
    step = np.where(limits.upper, 1.0, -1.0) * settings.worsen_voltage_pu / gain
    share = 1 + settings.worsen_loading_pct / 100
    return np.select(
        [limits.quantity == Quantity.VOLTAGE, limits.quantity == Quantity.HEAD_POWER],
        [(np.sqrt(np.maximum(measured, 0.0)) + step) ** 2, measured * share],
        limits.bound * loading * share**2,
    )


def _element_loading(limits: Limits, measured: Floats) -> Floats:
    """Measured over bound of squared ratings, at the terminal of the element loaded more."""
    ratings = (limits.quantity != Quantity.VOLTAGE) & (limits.quantity != Quantity.HEAD_POWER)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.where(ratings & (limits.bound > 0), measured / limits.bound, 0.0)
    current = (limits.quantity == Quantity.CURRENT_FROM) | (limits.quantity == Quantity.CURRENT_TO)
    worst = np.zeros(int(limits.element.max(initial=0)) + 1)
    np.maximum.at(worst, limits.element[current], share[current])
    return np.where(current, worst[limits.element], share)
