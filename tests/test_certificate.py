"""The recursion's proof: against the solver's duals, and against everything that must not pass."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from feederhost.flow.network import behind, behind_loading
from feederhost.flow.search import solve_with
from feederhost.proof import certificate as module
from feederhost.proof.branchflow import Seek, branch_flow, limit_gradient
from feederhost.proof.certificate import Multipliers, certify
from feederhost.proof.program import compile_programme
from feederhost.proof.valuing import Relaxed, solve_row
from feederhost.schema import Criterion
from feederhost.settings import Settings

from small_feeders import (
    SETTINGS,
    Posed,
    Row,
    band,
    bank,
    first,
    head_export,
    head_import,
    high,
    loading,
    low,
    network,
    plant,
    plants,
    pose,
    rated_receiving,
    rated_sending,
    system,
    two_bus,
)

# Charging, a core, a capacitor, constant-impedance and constant-current load; invented.
NET = network(
    [-1, 0, 1, 1, 3, 0], [0.02 + 0.05j, 0.01 + 0.06j, 0.03 + 0.04j, 0.04 + 0.03j, 0.02 + 0.02j],
    sending={1: 0.06j, 2: 0.004 - 0.01j, 4: 0.05j}, receiving={1: 0.06j, 4: 0.05j},
)  # fmt: skip
LOAD = loading(
    6, {1: 0.3 + 0.1j, 2: 0.4 + 0.2j, 4: 0.2 - 0.1j, 5: 0.1}, current={3: 0.2 + 0.1j},
    shunt={2: 0.2j, 4: 0.1 - 0.05j}, source=1.02,
)  # fmt: skip
WIDE = band(6, 0.8, 1.3)
OTHER = 0.1 + 0.1j

# Limits, plant node, sigma, t, and the criterion that binds.
KINDS: dict[str, tuple[list[Row], int, int, float, Criterion]] = {
    "voltage high": (band(6, 0.9, 1.05), 4, 1, -0.1, Criterion.VOLTAGE_HIGH),
    "voltage low": (band(6, 0.93, 1.1), 4, -1, 0.2, Criterion.VOLTAGE_LOW),
    "sending terminal, export": ([*WIDE, rated_sending(4, 0.6)], 4, 1, 0.0, Criterion.LINE_RATING),
    "sending terminal, import": ([*WIDE, rated_sending(4, 0.6)], 4, -1, 0.0, Criterion.LINE_RATING),
    "receiving terminal, export": (
        [*WIDE, rated_receiving(4, 0.6)], 4, 1, 0.3, Criterion.LINE_RATING),
    "receiving terminal, import": (
        [*WIDE, rated_receiving(4, 0.6)], 4, -1, 0.3, Criterion.LINE_RATING),
    "a core at the terminal": ([*WIDE, rated_sending(2, 0.9)], 2, 1, 0.0, Criterion.LINE_RATING),
    "rating far upstream": ([*WIDE, rated_receiving(1, 1.6)], 4, 1, 0.0, Criterion.LINE_RATING),
    "head export": ([*WIDE, head_export(0.5)], 2, 1, -0.3, Criterion.HEAD_EXPORT),
    "head import": ([*WIDE, head_import(2.0)], 2, -1, 0.0, Criterion.HEAD_IMPORT),
    "bank, export": ([*WIDE, bank(1.5)], 2, 1, 0.2, Criterion.BANK_RATING),
    "bank, import": ([*WIDE, bank(2.2)], 4, -1, 0.2, Criterion.BANK_RATING),
}  # fmt: skip


def solved_and_duals(posed: Posed, solver: str) -> tuple[Relaxed, dict[str, np.ndarray]]:
    """Solve the priced programme; multipliers of its three equations, in the core's units.

    An equation in units of a branch's power (or of the plant's voltage), the objective in units
    of the rating: a dual times rating over unit is the multiplier per unit.
    """
    programme = compile_programme(posed.system)
    tight = replace(SETTINGS, solver_gap=1e-9)
    w = posed.certificate.prices[:, 0]
    relaxed = solve_row(
        programme, posed.system, posed.flow, posed.seek, 0, w, posed.rating, 20.0, solver, tight
    )
    on_p, on_q, on_v = (c.dual_value for c in programme.problems[solver].constraints[:3])
    # The units that `solve_row` gave its variables, from its parameters r = r_k * power.
    flow = posed.flow
    power = programme.parameters["r"].value / flow.r[1:, 0]
    volt = float(np.ravel(programme.parameters["volt"].value)[0])
    y = {"p": on_p * posed.rating / power, "q": on_q * posed.rating / power,
         "v": on_v * posed.rating / volt, "T": relaxed.cone[1:]}  # fmt: skip
    return relaxed, y


@pytest.mark.parametrize("solver", ["ecos", "clarabel"])
@pytest.mark.parametrize("kind", KINDS)
def test_recursion_and_solver_reach_the_same_pair(kind: str, solver: str):
    rows, node, sigma, t, criterion = KINDS[kind]
    sys = system(NET, LOAD, rows, OTHER)
    one = plant(node, sigma=sigma, t=t, cap=20.0)
    assert first(sys, one).criterion == criterion
    posed = pose(sys, one)
    proof = posed.certificate
    assert proof.closes.tolist() == [True]
    relaxed, y = solved_and_duals(posed, solver)
    assert relaxed.g == pytest.approx(posed.rating, rel=1e-6)
    assert relaxed.loss_gap == pytest.approx(0.0, abs=1e-5 * posed.rating)
    assert np.abs(relaxed.v - posed.flow.v[:, 0]).max() < 1e-6
    for name, duals in y.items():
        mine = getattr(proof.multipliers, name)[1:, 0]
        assert np.abs(mine - duals).max() < 1e-4 * np.abs(mine).max(), name


def test_voltage_change_behind_a_source_impedance():
    # 3 % about the voltages with nothing added, the EMF held behind 0.01 + 0.08j.
    z_source = np.array([[0.01 + 0.08j]])
    base = solve_with(system(NET, LOAD, WIDE), plant(4), np.zeros(1), SETTINGS)
    emf = base.V[0] + z_source @ base.J[0]
    net, load = behind(NET, z_source), behind_loading(LOAD, emf)
    size = np.abs(base.V[:, 0, 0])
    rows = [high(k + 1, size[k] + 0.03, Criterion.VOLTAGE_CHANGE) for k in range(6)]
    rows += [low(k + 1, size[k] - 0.03, Criterion.VOLTAGE_CHANGE) for k in range(6)]
    sys = system(net, load, rows)
    for sigma, node, t in ((1, 5, -0.3), (-1, 5, 0.0), (1, 3, 0.3)):
        posed = pose(sys, plant(node, sigma=sigma, t=t, cap=20.0))
        assert posed.certificate.closes[0]
        relaxed, y = solved_and_duals(posed, "clarabel")
        assert relaxed.g == pytest.approx(posed.rating, rel=1e-6)
        for name, duals in y.items():
            mine = getattr(posed.certificate.multipliers, name)[1:, 0]
            assert np.abs(mine - duals).max() < 1e-4 * np.abs(mine).max(), name


# A switch on the way, one that ends a lateral, and an idle one.
SWITCHED = network([-1, 0, 1, 2, 3, 1, 3], [0.02 + 0.03j, 0, 0.03 + 0.04j, 0, 0, 0])
SWITCHED_LOAD = loading(7, {4: 0.2 + 0.1j, 5: 0.3, 3: 0.1})


@pytest.mark.parametrize(
    ("rows", "node", "sigma"),
    [
        (band(7, 0.9, 1.05), 4, 1),
        (band(7, 0.95, 1.1), 4, -1),
        ([*band(7, 0.8, 1.3), rated_sending(2, 0.7)], 4, 1),  # rated switch on the way
        ([*band(7, 0.8, 1.3), rated_receiving(4, 0.7)], 4, 1),
        ([*band(7, 0.8, 1.3), rated_sending(4, 0.7)], 4, -1),
        ([*band(7, 0.8, 1.3), rated_sending(6, 0.7)], 6, 1),  # idle but for the plant
        ([*band(7, 0.8, 1.3), bank(1.0)], 6, 1),
    ],
)
def test_switches_without_impedance_do_not_stop_the_proof(rows: list[Row], node: int, sigma: int):
    posed = pose(system(SWITCHED, SWITCHED_LOAD, rows), plant(node, sigma=sigma, cap=20.0))
    proof = posed.certificate
    assert proof.closes[0]
    assert np.isfinite(proof.multipliers.T).all()
    programme = compile_programme(posed.system)
    for solver in ("ecos", "clarabel"):
        relaxed = solve_row(
            programme, posed.system, posed.flow, posed.seek, 0, proof.prices[:, 0],
            posed.rating, 20.0, solver, SETTINGS,
        )  # fmt: skip
        assert relaxed.g == pytest.approx(posed.rating, rel=1e-5)


# --- two bus by hand -------------------------------------------------------------------------


def test_two_bus_multipliers_by_hand():
    # PV at the node, unity power factor, v <= w binding, price W on the branch:
    #   scale  y^p = 1;   up  y^v = -m;   down  y^p = 2 r m - 2 T P,  y^q = 2 x m - 2 T Q
    #   local  T v_0 = W - r y^p - x y^q + |z|^2 m
    # y^p = 1 gives m = (1 + 2 T P) / (2 r); with y^q that leaves one equation for T.
    r, x = 0.02, 0.06
    posed = pose(two_bus(r, x, [high(1, 1.05)]), plant(1, cap=8.0))
    P, Q, W = posed.flow.P[1, 0], posed.flow.Q[1, 0], posed.prices[1, 0]
    z2 = r * r + x * x
    # m = a + b T with a = 1/(2r), b = P/r; y^q = 2 x (a + b T) - 2 T Q:
    a, b = 1 / (2 * r), P / r
    T = (W - r - 2 * x * x * a + z2 * a) / (1 + x * (2 * x * b - 2 * Q) - z2 * b)
    m = a + b * T
    proof = posed.certificate
    assert proof.multipliers.T[1, 0] == pytest.approx(T, rel=1e-9)
    assert proof.limit_multiplier[0] == pytest.approx(m, rel=1e-9)
    assert proof.multipliers.p[1, 0] == pytest.approx(1.0, rel=1e-12)
    assert proof.multipliers.v[1, 0] == pytest.approx(-m, rel=1e-9)
    assert proof.closes[0]
    # Objective margin 1 - W d ell/dp, with ell = P^2 + Q^2 over v_0 = 1 differenced.
    h = 1e-5
    sys, one = posed.system, posed.plant
    ell = [abs(solve_with(sys, one, np.array([posed.rating + s]), SETTINGS).J[1, 0, 0]) ** 2
           for s in (h, -h)]  # fmt: skip
    margin = 1 - W * (ell[0] - ell[1]) / (2 * h)
    assert proof.objective_margin[0] == pytest.approx(margin, rel=1e-6)
    assert margin > 0


# --- what must not pass ----------------------------------------------------------------------


def unraised(posed: Posed, prices: np.ndarray) -> module.Certificate:
    """Certify at prices that may not be raised."""
    strict = Settings(price_raises=0)
    return certify(posed.flow, posed.seek, posed.gradient, prices, posed.ell_slope, strict)


@pytest.mark.parametrize("kind", ["voltage high", "rating far upstream", "bank, export"])
def test_without_prices_the_proof_does_not_close(kind: str):
    # "Maximise g" alone: the relaxation invents losses where an upper voltage limit or a rating
    # binds under reverse flow, and a cone multiplier turns negative.
    rows, node, sigma, t, _ = KINDS[kind]
    posed = pose(system(NET, LOAD, rows, OTHER), plant(node, sigma=sigma, t=t, cap=20.0))
    bare = unraised(posed, np.zeros_like(posed.prices))
    assert not bare.closes[0]
    assert bare.smallest[0] < -1e-3
    assert bare.residual[0] < 1e-8  # it is a pair, but not a feasible one
    # Prices just below the rate do not do either; the default ones, 10 % above it, do.
    below = posed.prices / 1.1 * 0.9
    assert not unraised(posed, below).closes[0]
    assert unraised(posed, posed.prices).closes[0]


def test_prices_are_raised_until_the_proof_closes():
    # From nothing: every branch whose multiplier is negative gets what it lacks and 10 % more.
    posed = pose(two_bus(0.05, 0.05, [high(1, 1.05)]), plant(1, cap=8.0),
                 prices=np.zeros((2, 1)))  # fmt: skip
    proof = posed.certificate
    assert proof.closes[0]
    assert proof.prices[1, 0] > 0.05  # above the exchange rate |z|^2 / (2 r)
    assert posed.prices[1, 0] == 0.0  # what was handed in stays as it was
    assert proof.residual[0] <= 1e-8


def test_raising_touches_only_rows_that_need_it():
    net = network([-1, 0, 1, 1], [0.03 + 0.03j, 0.04 + 0.03j, 0.05 + 0.02j])
    sys = system(net, loading(4, {2: 0.2, 3: 0.1 + 0.1j}), [high(k, 1.05) for k in range(1, 4)])
    alone = [pose(sys, plant(k, cap=20.0)) for k in (2, 3)]
    own = plants([2, 3], cap=20.0)
    point = solve_with(sys, own, np.array([p.rating for p in alone]), SETTINGS)
    flow = branch_flow(sys, own, point)
    seek = Seek(own.node, own.draw.sum(axis=1), np.array([p.row for p in alone]))
    gradient = limit_gradient(flow, sys, seek, reduced=False)
    prices = np.hstack([np.zeros((4, 1)), alone[1].prices])
    slope = np.hstack([p.ell_slope for p in alone])
    proof = certify(flow, seek, gradient, prices, slope, SETTINGS)
    assert proof.closes.tolist() == [True, True]
    assert (proof.prices[:, 0] > 0).any()
    assert np.array_equal(proof.prices[:, 1], alone[1].certificate.prices[:, 0])
    assert np.allclose(
        proof.multipliers.T[:, 1], alone[1].certificate.multipliers.T[:, 0], rtol=1e-9, atol=1e-12
    )


def test_the_way_back_into_the_limits_is_no_optimum():
    # r = 0.02, x = 0.06: v = 1.1025 again at 6.9740381452, falling: more would be allowed there,
    # so the limit's multiplier or the objective's rise must be of the wrong sign.
    sys, one = two_bus(0.02, 0.06, [high(1, 1.05)]), plant(1, cap=8.0)
    posed = pose(sys, one, Settings(price_raises=0), rating=6.9740381452, row=0)
    proof = posed.certificate
    assert not proof.closes[0]
    assert proof.objective_margin[0] < 0
    assert proof.multipliers.T[1, 0] < 0
    dear = unraised(posed, 10 * posed.prices)
    assert not dear.closes[0]


def test_a_limit_that_more_rating_only_loosens_proves_nothing():
    # The lower voltage limit under export: its slack grows, so its multiplier is negative.
    sys = two_bus(0.05, 0.05, [low(1, 0.95)])
    proof = pose(sys, plant(1), rating=1.0, row=0).certificate
    assert proof.limit_multiplier[0] < 0
    assert not proof.closes[0]


def test_a_price_that_eats_the_objective_is_no_proof():
    # Twenty times the price: all multipliers are positive, but more rating is worth nothing.
    posed = pose(two_bus(0.02, 0.06, [high(1, 1.05)]), plant(1, cap=8.0))
    proof = unraised(posed, 20 * posed.prices)
    assert proof.objective_margin[0] < 0
    assert not proof.closes[0]


# --- the residual is recomputed ----------------------------------------------------------------


def residual(posed: Posed, **changed: np.ndarray) -> float:
    proof = posed.certificate
    y = proof.multipliers
    y = Multipliers(*(changed.get(n, getattr(y, n)) for n in ("p", "q", "v", "T")))
    w = changed.get("w", proof.prices)
    limit = changed.get("limit", proof.limit_multiplier)
    return float(module._residual(posed.flow, posed.seek, posed.gradient, w, y, limit)[0])


@pytest.mark.parametrize("kind", KINDS)
def test_a_perturbed_multiplier_shows_in_the_residual(kind: str):
    rows, node, sigma, t, _ = KINDS[kind]
    posed = pose(system(NET, LOAD, rows, OTHER), plant(node, sigma=sigma, t=t, cap=20.0))
    assert residual(posed) <= 1e-8
    for name in ("p", "q", "v", "T"):
        values = getattr(posed.certificate.multipliers, name)
        at = int(np.abs(values[1:, 0]).argmax()) + 1
        spoilt = values.copy()
        spoilt[at, 0] *= 1 + 1e-5
        assert residual(posed, **{name: spoilt}) > 1e-8, name
    assert residual(posed, limit=posed.certificate.limit_multiplier * (1 + 1e-5)) > 1e-8
    assert residual(posed, w=posed.certificate.prices * (1 + 1e-4)) > 1e-8


def test_a_spoilt_recursion_does_not_close(monkeypatch: pytest.MonkeyPatch):
    posed = pose(two_bus(0.02, 0.06, [high(1, 1.05)]), plant(1, cap=8.0))
    assert posed.certificate.closes[0]
    sound = module._scaled

    def spoilt(*arguments):
        y, limit = sound(*arguments)
        return replace(y, v=y.v * (1 + 1e-6)), limit

    monkeypatch.setattr(module, "_scaled", spoilt)
    proof = unraised(posed, posed.prices)
    assert proof.residual[0] > 1e-8
    assert not proof.closes[0]


def test_a_recursion_that_is_cut_short_does_not_close():
    rows, node, sigma, t, _ = KINDS["voltage high"]
    posed = pose(system(NET, LOAD, rows, OTHER), plant(node, sigma=sigma, t=t, cap=20.0))
    short = Settings(recursion_limit=2)
    proof = certify(posed.flow, posed.seek, posed.gradient, posed.prices, posed.ell_slope, short)
    assert not proof.closes[0]
    assert proof.residual[0] > 1e-8


def test_a_plant_that_moves_no_limit_gets_no_proof():
    # The rated branch leaves the source by itself; nothing sets the limit's multiplier, and the
    # plant's own branch has a negative cone multiplier whatever it is.
    sys = system(network([-1, 0, 0], [0.02 + 0.02j] * 2), loading(3, {2: 0.5}),
                 [rated_sending(2, 0.4)])  # fmt: skip
    proof = pose(sys, plant(1), rating=1.0, row=0).certificate
    assert proof.multipliers.T[1, 0] < 0
    assert not proof.closes[0]
