"""Fault levels against hand-worked examples of textbooks, closed forms and a nodal inverse."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from feederhost.feeder.model import Feeder
from feederhost.flow.network import Network, refer
from feederhost.flow.shortcircuit import fault_current, fault_impedance, infeed
from feederhost.flow.tree import Tree

import engine
import small_feeders as small

# Nagrath & Kothari, Modern Power System Analysis, 3rd ed., Example 9.2 (data, steps and results
# from memory).  Two generators feed 11 kV; transformer to a 33 kV overhead line, transformer to
# a 6.6 kV cable, three-phase fault at its far end.  Base 100 MVA.
GENERATORS = 1 / (1 / 1.5 + 1 / 1.25)  # 10 MVA 15 % and 10 MVA 12.5 %, side by side
LINE_KM, LINE_OHM_PER_KM = 30, 0.27 + 0.36j
CABLE_KM, CABLE_OHM_PER_KM = 3, 0.135 + 0.08j
PRINTED_Z = 1.674 + 4.82j
PRINTED_PU = 0.196
PRINTED_A = 1715  # 0.196 x 8,750 A, each rounded
PRINTED_11_KV_PU = "0.88"


def test_the_radial_example_of_nagrath_and_kothari_per_unit():
    line = LINE_KM * LINE_OHM_PER_KM * 100 / 33**2
    cable = CABLE_KM * CABLE_OHM_PER_KM * 100 / 6.6**2
    network = small.network([-1, 0, 1, 2, 3], [0.1j * 100 / 10, line, 0.08j * 100 / 5, cable])
    source = np.array([[1j * GENERATORS]])
    z = fault_impedance(network, source)[:, 0, 0]
    # Four terms of the sum are printed with two decimals.
    assert z[-1] == pytest.approx(PRINTED_Z, abs=0.005)
    level = fault_current(network, source)[:, 0]
    assert level[-1] == pytest.approx(PRINTED_PU, abs=0.0005)
    # What is left at 11 kV while the cable end is shorted; the book takes the current as printed.
    left = PRINTED_PU * abs(z[-1] - 1j * GENERATORS)
    assert f"{left:.2f}" == PRINTED_11_KV_PU


def _book_feeder() -> Feeder:
    unit = {"kva": 10000, "kv_primary": 11, "kv_secondary": 33, "z_pct": 10, "x_over_r": 1e9}
    low = {"kva": 5000, "kv_primary": 33, "kv_secondary": 6.6, "z_pct": 8, "x_over_r": 1e9}
    return engine.build(
        {
            "source": [{"node": "G", "kv": 11, "short_circuit_mva": 100 / GENERATORS,
                        "x_over_r": 1e9}],
            "transformers": [
                {"transformer": "T1", "from_node": "G", "to_node": "H", **unit},
                {"transformer": "T2", "from_node": "K", "to_node": "M", **low},
            ],
            "lines": [
                _line("OH", "H", "K", LINE_KM, LINE_OHM_PER_KM),
                _line("CABLE", "M", "F", CABLE_KM, CABLE_OHM_PER_KM),
            ],
        }
    )  # fmt: skip


def _line(name: str, start: str, end: str, km: float, ohm_per_km: complex) -> dict[str, Any]:
    return {"line": name, "from_node": start, "to_node": end, "length_km": km,
            "r1_ohm_per_km": ohm_per_km.real, "x1_ohm_per_km": ohm_per_km.imag,
            "rating_a": "unlimited"}  # fmt: skip


def levels(feeder: Feeder, ratio: np.ndarray | None = None) -> dict[str, float]:
    """Fault currents in A by node, fixed ratios of transformers only."""
    network = refer(feeder.network, feeder.ratio if ratio is None else ratio)
    level = fault_current(network, feeder.z_source)[:, 0]
    return {name: feeder.amps(level[k], k) for k, name in enumerate(feeder.nodes)}


def test_the_same_example_as_a_workbook_in_amperes():
    amps = levels(_book_feeder())
    # The printed 1,715 A multiplies two rounded factors: 0.13 % above the exact 1,713 A.
    assert amps["F"] == pytest.approx(PRINTED_A, rel=2e-3)
    assert amps["G"] == pytest.approx(100e3 / GENERATORS / (math.sqrt(3) * 11))


def test_a_low_voltage_board_of_the_installation_guide():
    # Electrical Installation Guide according to IEC standards, chapter on short-circuit currents,
    # worked table (from memory): network of 500 MVA seen at 420 V 0.035 + j0.351 mohm;
    # transformer 20 kV/420 V, 1000 kVA, 5 %, 13.3 kW losses 2.35 + j8.5 mohm; 26 kA.
    r, x = 1.33, math.sqrt(5**2 - 1.33**2)
    feeder = engine.build(
        {
            "source": [{"node": "S", "kv": 20, "short_circuit_mva": 500, "x_over_r": 10}],
            "transformers": [
                {"transformer": "T", "from_node": "S", "to_node": "B", "kva": 1000,
                 "kv_primary": 20, "kv_secondary": 0.42, "r_pct": r, "x_pct": x}
            ],
            "lines": [_line("L", "B", "C", 1, 0.001 + 0.001j)],
        }
    )  # fmt: skip
    network = refer(feeder.network, feeder.ratio)
    k = feeder.nodes.index("B")
    z = fault_impedance(network, feeder.z_source)[:, 0, 0]
    milliohm = 1e3 * z * feeder.kv**2 / feeder.settings.base_mva
    seen_low = milliohm[0] * (0.42 / 20) ** 2
    assert seen_low.real == pytest.approx(0.035, abs=5e-4)
    assert seen_low.imag == pytest.approx(0.351, abs=5e-4)
    assert (milliohm[k] - seen_low).real == pytest.approx(2.35, abs=0.005)
    assert (milliohm[k] - seen_low).imag == pytest.approx(8.5, abs=0.05)
    assert round(levels(feeder)["B"] / 1e3) == 26


def test_equal_powers_in_series_halve():
    # Reactances add: 100 MVA of the source behind 100 MVA of a 10 MVA transformer of 10 %.
    feeder = engine.build(
        {
            "source": [{"node": "S", "kv": 10, "short_circuit_mva": 100, "x_over_r": 1e9}],
            "transformers": [
                {"transformer": "T", "from_node": "S", "to_node": "B", "kva": 10000,
                 "kv_primary": 10, "kv_secondary": 5, "z_pct": 10, "x_over_r": 1e9}
            ],
            "lines": [_line("L", "B", "C", 1, 0.25j)],
        }
    )  # fmt: skip
    amps = levels(feeder)
    assert amps["S"] == pytest.approx(100e3 / (math.sqrt(3) * 10))
    assert amps["B"] == pytest.approx(50e3 / (math.sqrt(3) * 5))
    # 0.25 ohm at 5 kV is 100 MVA once more.
    assert amps["C"] == pytest.approx(100e3 / 3 / (math.sqrt(3) * 5))


def test_a_ratio_scales_what_lies_before_it():
    # a = 1.05: Z = (0.1 + 0.2) a^2 + 0.4 j, all seen behind the ratio.
    network = small.network([-1, 0, 1], [0.2, 0.4j])
    ratio = np.array([[1.0], [1.0], [1.05]])
    z = fault_impedance(refer(network, ratio), np.array([[0.1]]))[:, 0, 0]
    wanted = (0.1 + 0.2) * 1.05**2 + 0.4j
    assert z.tolist() == pytest.approx([0.1, 0.3, wanted])
    level = fault_current(refer(network, ratio), np.array([[0.1]]), 1.1)[:, 0]
    assert level.tolist() == pytest.approx([11.0, 1.1 / 0.3, 1.1 / abs(wanted)])


@pytest.mark.parametrize("phases", [1, 3])
@pytest.mark.parametrize("seed", range(6))
def test_impedances_are_the_diagonal_of_the_nodal_inverse(seed, phases):
    # With the EMF shorted, the inverse of the admittance matrix holds the driving-point
    # impedances: no tree, no referral.
    rng = np.random.default_rng(seed)
    n = int(rng.integers(3, 12))
    parent = [-1, *(int(rng.integers(0, k)) for k in range(1, n))]
    z = rng.uniform(0.1, 1, (n, phases, phases)) + 1j * rng.uniform(0.1, 1, (n, phases, phases))
    z = z + z.transpose(0, 2, 1) + 3 * np.eye(phases)
    ratio = rng.uniform(0.9, 1.1, (n, phases))
    source = 0.3 * z[0]
    none = np.zeros((n, phases))
    plain = Network(Tree(np.array(parent)), np.concatenate([0 * z[:1], z[1:]]), none, none, none)
    found = fault_impedance(refer(plain, ratio), source)

    wider = [-1, *(p + 1 for p in parent)]
    padded = np.zeros((n + 1, phases))
    ratios = np.concatenate([np.ones((2, phases)), ratio[1:]])
    series = np.concatenate([z[:1], source[None], z[1:]])
    Y = small.nodal_matrix(wider, series, padded, padded, ratios)
    inverse = np.linalg.inv(Y[phases:, phases:])
    for k in range(n):
        own = slice(k * phases, (k + 1) * phases)
        np.testing.assert_allclose(found[k], inverse[own, own], rtol=1e-9)


def test_three_balanced_phases_give_the_positive_sequence():
    # Transposed line: Z1 = self - mutual (Kersting, section 4.1).
    z = np.full((2, 3, 3), 0.1 + 0.2j) + np.eye(3) * (0.3 + 0.5j)
    none = np.zeros((2, 3))
    network = Network(Tree(np.array([-1, 0])), z, none, none, np.ones((2, 3)))
    level = fault_current(network, z[1])
    z1 = abs(0.3 + 0.5j)
    np.testing.assert_allclose(level[1], 1 / (2 * z1), rtol=1e-12)
    np.testing.assert_allclose(level[0], 1 / z1, rtol=1e-12)


def test_without_source_impedance_there_is_no_level():
    network = small.network([-1, 0], [0.1])
    with pytest.raises(np.linalg.LinAlgError):
        fault_current(network, np.zeros((1, 1)))


def test_infeed_adds_multiples_of_rated_current_as_numbers():
    # 1.2 x 0.5 + 5 x 0.1; as phasors 90 degrees apart it would be 0.781.
    assert infeed(np.array([0.5, 0.1]), np.array([1.2, 5.0])) == pytest.approx(1.1)
    assert infeed(np.zeros(0), np.zeros(0)) == 0.0
