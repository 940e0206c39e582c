"""The whole study path against published and recomputed values of feeders from the literature.

Data of the 33-bus feeder: Baran & Wu, IEEE Trans. Power Delivery 4(2), 1989, 1401-1407.  Hosting
values were computed for this project with independent methods; they are not published.
"""

from __future__ import annotations

from dataclasses import replace
from decimal import Decimal

import cvxpy as cp
import numpy as np
import pytest
from feederhost.feeder.model import Feeder
from feederhost.flow.limits import System
from feederhost.flow.search import solve_with
from feederhost.proof.branchflow import Seek, branch_flow
from feederhost.proof.program import Programme, compile_programme
from feederhost.proof.solver import SOLVERS, Status
from feederhost.proof.valuing import solve_row
from feederhost.schema import Criterion, Proof, State
from feederhost.settings import Settings
from feederhost.study.base import base_cases_table, power_balance
from feederhost.study.cases import base_run, study_case
from feederhost.study.nodal import base_solutions
from feederhost.study.options import Options
from feederhost.study.summary import run_table

from engine import answer_rows, build, load
from published import (
    FEEDER33_B_LOSS_KW,
    FEEDER33_LEAST_LOSS_KW,
    FEEDER33_LEAST_LOSS_OPEN,
    PUBLISHED,
    published_feeder,
)
from small_feeders import SETTINGS, plant

# --- hosting on the 33-bus feeder ------------------------------------------------------------

# V0 = 1, one plant at unity power factor, V <= 1.05, no rating, one case, no voltage-change
# limit; the base voltage is below 0.95, so v_min is 0.90.  Node 2 hosts more than 60 MW.
LOOSE = {"v_min_pu": 0.9, "voltage_change_mv_pct": 0, "search_cap_kw": 60000}
PV_FULL_LOAD = {
    "3": 19.132, "4": 13.025, "5": 10.172, "6": 7.659, "7": 7.388, "8": 5.887, "9": 4.660,
    "10": 3.896, "11": 3.775, "12": 3.564, "13": 2.980, "14": 2.829, "15": 2.661, "16": 2.470,
    "17": 2.219, "18": 2.086, "19": 35.685, "20": 5.554, "21": 4.574, "22": 3.507, "23": 11.437,
    "24": 6.721, "25": 4.804, "26": 7.134, "27": 6.526, "28": 5.193, "29": 4.576, "30": 4.224,
    "31": 3.673, "32": 3.528, "33": 3.378,
}  # fmt: skip
PV_40_PERCENT = {"6": 5.4074, "9": 3.0940, "18": 1.2794, "25": 3.7133, "33": 2.0962}
EV_60_PERCENT = {"6": 3.19752, "12": 1.20151, "18": 0.61550, "25": 4.04237, "33": 1.06778}
# The other 33-bus feeder in print (branch 7-8 = 1.7114 + j1.2351 ohm).
PV_VARIANT_B = {"6": 7.669, "8": 4.811, "12": 3.250, "18": 2.036, "25": 4.807, "33": 3.382}


@pytest.mark.parametrize(
    ("technology", "load_scale", "variant_b", "values"),
    [
        ("pv", 1.0, False, PV_FULL_LOAD),
        ("pv", 0.4, False, PV_40_PERCENT),
        ("ev", 0.6, False, EV_60_PERCENT),
        ("pv", 1.0, True, PV_VARIANT_B),
    ],
    ids=["pv, full load", "pv, 40 % load", "ev, 60 % load", "pv, variant B"],
)
def test_33_bus_hosting(
    technology: str, load_scale: float, variant_b: bool, values: dict[str, float]
):
    tables = published_feeder("feeder33", load_scale=load_scale, limits=LOOSE, variant_b=variant_b)
    rows = answer_rows(tables, [(node, technology) for node in values])
    limit = Criterion.VOLTAGE_HIGH if technology == "pv" else Criterion.VOLTAGE_LOW
    for row, megawatts in zip(rows, values.values(), strict=True):
        assert row.rating == pytest.approx(megawatts, rel=1e-3)
        assert row.proof is Proof.PROVEN
        assert row.state is State.HOSTED
        assert row.criterion is limit
        assert row.upper == row.rating
        # Published: rounded down to the kW, never up.
        assert 0 <= 1000 * (row.rating - row.hosting) < 1
        assert round(1000 * row.hosting) == pytest.approx(1000 * row.hosting, abs=1e-6)


def test_node_2_of_the_33_bus_feeder_hosts_more_than_the_cap():
    tables = published_feeder("feeder33", limits=LOOSE)
    (row,) = answer_rows(tables, [("2", "pv")])
    assert (row.state, row.proof, row.hosting) == (State.CAPPED, Proof.NOT_NEEDED, 60.0)
    assert row.criterion is Criterion.SEARCH_CAP


# --- published base cases ----------------------------------------------------------------------


def within_last_digit(value: float, printed: str) -> bool:
    return abs(value - float(printed)) <= 10.0 ** int(Decimal(printed).as_tuple().exponent)


@pytest.mark.parametrize("name", PUBLISHED)
def test_published_losses_and_lowest_voltage(name: str):
    # Papers, and how their figures are known, in published.py: feeder10 Grainger & Lee /
    # Baghzouz & Ertem 1990, feeder12 Das et al. 1994, feeder15 Das et al. 1995, feeder33 and
    # feeder69 Baran & Wu 1989, feeder34 Chis et al. 1997.
    printed = PUBLISHED[name]
    feeder = build(published_feeder(name))
    base = base_solutions(feeder, Options())
    (row,) = base_cases_table(feeder, base).to_dict("records")
    assert row["lowest_node"] == printed.v_min_node
    assert within_last_digit(row["lowest_pu"], printed.v_min)
    assert within_last_digit(row["loss_kw"], printed.loss_kw)
    if printed.loss_kvar is not None:
        assert within_last_digit(row["loss_kvar"], printed.loss_kvar)
    assert abs(power_balance(base[0])) < 1e-9


def base_loss_kw(feeder: Feeder) -> float:
    base = base_solutions(feeder, Options())
    return float(base_cases_table(feeder, base)["loss_kw"].iloc[0])


def test_33_bus_base_cases_recomputed():
    # 202.677 kW and 210.998 kW, 0.91309 pu: recomputed for this project; 139.55 kW with the
    # switching of Baran & Wu 1989 (seen quoted; its open branches from memory).
    feeder = build(published_feeder("feeder33"))
    assert base_loss_kw(feeder) == pytest.approx(202.677, abs=1e-3)
    lowest = base_cases_table(feeder, base_solutions(feeder, Options()))["lowest_pu"].iloc[0]
    assert lowest == pytest.approx(0.91309, abs=1e-5)
    other = build(published_feeder("feeder33", variant_b=True))
    assert base_loss_kw(other) == pytest.approx(FEEDER33_B_LOSS_KW, abs=1e-3)
    switched = build(published_feeder("feeder33", open_branches=FEEDER33_LEAST_LOSS_OPEN))
    assert within_last_digit(base_loss_kw(switched), FEEDER33_LEAST_LOSS_KW)


# --- loss-minimising PV ------------------------------------------------------------------------


def least_loss(programme: Programme) -> Programme:
    """Return the same programme with the rating free and only sum w ell to be made small.

    Variables, parameters and constraints are those of the module; of its objective
    g - w ell the first term is left out.  With w = r it minimises the loss.
    """
    lost = programme.parameters["w"] @ programme.variables["ell"]
    problems = {
        name: cp.Problem(cp.Minimize(lost), p.constraints) for name, p in programme.problems.items()
    }
    return replace(programme, problems=problems)


@pytest.mark.parametrize("solver", SOLVERS)
@pytest.mark.parametrize(
    ("variant_b", "megawatts", "loss_kw"),
    # Variant B: the literature prints 2.59 MW and 111.03 kW (Acharya, Mahat & Mithulananthan,
    # IJEPES 28, 2006 and later papers; from memory); 2.5902 and 111.030, and variant A, are
    # recomputed for this project.
    [(True, 2.5902, 111.030), (False, 2.5753, 103.966)],
)
def test_loss_minimising_pv_at_bus_6(
    solver: str, variant_b: bool, megawatts: float, loss_kw: float
):
    tables = published_feeder("feeder33", variant_b=variant_b, limits=LOOSE)
    feeder = build(tables)
    posed = study_case(feeder, 0, base_run(feeder, feeder.cases[0]), "export").posed[0]
    sys: System = posed.system
    one = plant(feeder.nodes.index("6"))
    flow = branch_flow(sys, one, solve_with(sys, one, np.ones(1), SETTINGS))
    seek = Seek(one.node, one.draw.sum(axis=1), np.zeros(1, int))
    found = solve_row(
        least_loss(compile_programme(sys)), sys, flow, seek, 0, flow.r[:, 0], 1.0, 10.0, solver,
        SETTINGS,
    )  # fmt: skip
    assert found.answer.status is Status.CLEAN
    assert found.g == pytest.approx(megawatts, abs=2e-4)
    # The published objective condition is met here, so the relaxation is exact.
    assert abs(found.loss_gap) < 1e-6
    assert 1000 * (flow.r[:, 0] * found.ell).sum() == pytest.approx(loss_kw, abs=2e-3)
    J = solve_with(sys, one, np.array([found.g]), SETTINGS).J[:, 0, 0]
    assert 1000 * (flow.r[:, 0] * np.abs(J) ** 2)[1:].sum() == pytest.approx(loss_kw, abs=1e-3)


# --- defaults ------------------------------------------------------------------------------------


def test_default_limits_are_those_of_the_standards():
    defaults = Settings()
    # ANSI C84.1, Range A, service voltage: 114 to 126 V on a 120 V base (secondary copy seen).
    assert (defaults.v_min_pu, defaults.v_max_pu) == (114 / 120, 126 / 120)
    assert (defaults.v_min_primary_pu, defaults.v_max_primary_pu) == (None, None)
    # IEEE 1547-2018, clause 7.2.2, rapid voltage change: 3 % at medium voltage, 5 % at low
    # voltage (secondary copy seen).
    assert (defaults.voltage_change_mv_pct, defaults.voltage_change_lv_pct) == (3.0, 5.0)
    # EN 50160, supply voltage unbalance: 2 % (secondary copy seen).
    assert defaults.unbalance_pct == 2.0
    # Common practice: normal ratings in full.
    assert (defaults.line_loading_pct, defaults.transformer_loading_pct) == (100.0, 100.0)


def test_a_workbook_without_limits_gets_the_defaults_and_one_with_limits_its_own():
    plain = build(published_feeder("feeder33"))
    assert plain.v_min[1:] == pytest.approx(np.full((32, 1), 0.95))
    assert plain.v_max[1:] == pytest.approx(np.full((32, 1), 1.05))
    assert plain.change == pytest.approx(np.full((33, 1), 0.03))
    own = build(published_feeder("feeder33", limits={"v_max_pu": 1.06, "voltage_change_mv_pct": 2}))
    assert own.v_max[1:] == pytest.approx(np.full((32, 1), 1.06))
    assert own.change == pytest.approx(np.full((33, 1), 0.02))


def test_the_run_sheet_prints_every_setting():
    printed = dict(run_table(load(published_feeder("feeder33")), None, Options()).itertuples(
        index=False, name=None
    ))  # fmt: skip
    assert printed["setting v_min_pu"] == 0.95
    assert printed["setting v_max_pu"] == 1.05
    assert printed["setting voltage_change_mv_pct"] == 3.0
    assert printed["setting mismatch_tolerance"] == 1e-8
    assert sum(key.startswith("setting ") for key in printed) == len(Settings.__dataclass_fields__)
