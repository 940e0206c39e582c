"""Referral of ideal ratios to the source side, and the branch put before the source."""

from __future__ import annotations

import numpy as np
import pytest
from feederhost.flow.limits import sending_voltage
from feederhost.flow.network import (
    Loading,
    Network,
    behind,
    behind_loading,
    refer,
    refer_loading,
)
from feederhost.flow.sweep import sweep
from feederhost.flow.tree import Tree
from feederhost.settings import Settings

from small_feeders import SETTINGS, judge, loading, network, nodal_matrix

# Invented: a regulator (1 -> 2), a transformer that lowers (2 -> 3) and one on a lateral; line
# charging, a core, a capacitor, constant-current and constant-impedance load.
PARENT = [-1, 0, 1, 2, 1, 4]
Z = [0.01 + 0.02j, 0.004 + 0.03j, 0.03 + 0.05j, 0.02 + 0.02j, 0.05 + 0.04j]
RATIO = np.array([1.0, 1.0, 1.05, 0.93, 0.975, 1.0])[:, None]
BEHIND = network(
    PARENT, Z,
    sending={1: 0.03j, 2: 0.002, 3: 0.01j, 5: 0.02j},
    receiving={1: 0.03j, 3: 0.01j, 5: 0.02j},
)  # fmt: skip
LOAD = loading(
    6,
    {2: 0.2 + 0.1j, 3: 0.3 + 0.1j, 4: -0.4 + 0.05j, 5: 0.2 + 0.15j},
    current={3: 0.1 + 0.05j, 5: 0.08 + 0.02j},
    shunt={2: 0.05 - 0.02j, 3: 0.2j, 5: 0.03 - 0.01j},
    source=1.02,
)


def test_voltages_behind_ratios_are_those_of_the_nodal_equations():
    referred = refer(BEHIND, RATIO)
    point = sweep(referred, refer_loading(LOAD, referred.gain), SETTINGS)
    actual = point.V[:, :, 0] * referred.gain
    assert np.abs(actual - judge(BEHIND, LOAD, RATIO)).max() < 1e-11


def test_currents_and_losses_behind_ratios_are_those_of_the_nodal_equations():
    referred = refer(BEHIND, RATIO)
    there = refer_loading(LOAD, referred.gain)
    point = sweep(referred, there, SETTINGS)
    V = judge(BEHIND, LOAD, RATIO)[:, 0]
    # Series current behind the ratio, from the nodal voltages alone.
    z = BEHIND.z[1:, 0, 0]
    a, sent = RATIO[1:, 0], V[np.array(PARENT[1:])]
    series = (a * sent - V[1:]) / z
    # A current referred to the source side is the actual one times the gain.
    assert np.abs(point.J[1:, 0, 0] / referred.gain[1:, 0] - series).max() < 1e-9
    losses = (referred.z[1:, 0, 0] * np.abs(point.J[1:, 0, 0]) ** 2).sum()
    assert losses == pytest.approx((z * np.abs(series) ** 2).sum(), abs=1e-11)
    # Terminal current before the ratio, the shunt there included: I = a J + y V.
    sent_there = sending_voltage(referred, point.V)[1:, 0, 0]
    terminal = point.J[1:, 0, 0] + referred.y_from[1:, 0] * sent_there
    gain_before = referred.gain[np.array(PARENT[1:]), 0]
    expected = a * series + BEHIND.y_from[1:, 0] * sent
    assert np.abs(terminal / gain_before - expected).max() < 1e-9


def test_power_from_the_source_does_not_depend_on_the_side_it_is_counted_on():
    referred = refer(BEHIND, RATIO)
    point = sweep(referred, refer_loading(LOAD, referred.gain), SETTINGS)
    V = judge(BEHIND, LOAD, RATIO)
    Y = nodal_matrix(PARENT, BEHIND.z, BEHIND.y_from, BEHIND.y_to, RATIO)
    expected = V[0, 0] * np.conj(Y[0] @ V[:, 0])
    assert point.V[0, 0, 0] * np.conj(point.J[0, 0, 0]) == pytest.approx(expected, abs=1e-11)


def test_gain_is_the_product_of_ratios_from_the_source():
    # 1.05 * 0.93 = 0.9765; the lateral: 0.975, held through a branch without a ratio.
    referred = refer(BEHIND, RATIO)
    assert referred.gain[:, 0] == pytest.approx([1, 1, 1.05, 0.9765, 0.975, 0.975])
    assert referred.z[3, 0, 0] == pytest.approx((0.03 + 0.05j) / 0.9765**2)
    assert referred.y_to[3, 0] == pytest.approx(0.01j * 0.9765**2)
    # The sending shunt of branch 3 stands before its ratio, at node 2.
    assert referred.y_from[3, 0] == pytest.approx(0.01j * 1.05**2)
    assert referred.y_from[5, 0] == pytest.approx(0.02j * 0.975**2)


def test_a_ratio_at_the_source_row_is_ignored():
    odd = RATIO.copy()
    odd[0] = 3.0
    assert np.array_equal(refer(BEHIND, odd).gain, refer(BEHIND, RATIO).gain)


def test_referring_is_done_afresh_each_time():
    once = refer(BEHIND, RATIO)
    again = refer(Network(BEHIND.tree, BEHIND.z, BEHIND.y_from, BEHIND.y_to, once.gain), RATIO)
    assert np.array_equal(once.gain, again.gain)
    assert np.array_equal(once.z, again.z)


def test_no_ratio_leaves_everything_as_it_was():
    same = refer(BEHIND, np.ones((6, 1)))
    assert np.array_equal(same.z, BEHIND.z)
    assert np.array_equal(same.y_from, BEHIND.y_from)
    assert np.array_equal(same.gain, np.ones((6, 1)))


def test_phases_refer_by_the_gain_of_each_phase():
    # Two phases with a coupling z_ab: it is divided by the product of both gains.
    z = np.zeros((2, 2, 2), complex)
    z[1] = [[0.1, 0.02], [0.02, 0.1]]
    two = Network(Tree(np.array([-1, 0])), z, np.zeros((2, 2)), np.zeros((2, 2)), np.ones((2, 2)))
    referred = refer(two, np.array([[1.0, 1.0], [1.1, 0.9]]))
    expected = [[0.1 / 1.21, 0.02 / 0.99], [0.02 / 0.99, 0.1 / 0.81]]
    assert np.allclose(referred.z[1], expected, rtol=0, atol=1e-15)


def test_referred_loading_keeps_power():
    gain = np.array([1.0, 1.1])[:, None]
    load = loading(2, {1: 0.5}, current={1: 0.2}, shunt={1: 0.1j})
    there = refer_loading(load, gain)
    assert there.power[1, 0, 0] == 0.5
    assert there.current[1, 0, 0] == pytest.approx(0.22)
    assert there.shunt[1, 0, 0] == pytest.approx(0.121j)


# --- behind ----------------------------------------------------------------------------------


def test_a_branch_before_the_source_returns_the_same_point():
    # EMF = V_0 + z_s I_0: with it held, the old source node sits where it was held before.
    z_s = 0.004 + 0.04j
    plain = sweep(BEHIND, LOAD, SETTINGS)
    emf = plain.V[0] + z_s * plain.J[0]
    network_behind = behind(BEHIND, np.array([[z_s]]))
    load_behind = behind_loading(LOAD, emf)
    assert network_behind.tree.parent.tolist() == [-1, 0, 1, 2, 3, 2, 5]
    point = sweep(network_behind, load_behind, SETTINGS)
    assert np.abs(point.V[1:] - plain.V).max() < 1e-11
    assert np.abs(point.J[1, 0, 0] - plain.J[0, 0, 0]) < 1e-11
    assert np.abs(point.V[:, :, 0] - judge(network_behind, load_behind)).max() < 1e-11


def test_a_branch_before_the_source_moves_with_the_load():
    # Two bus, one more branch: V = E - (z_s + z) I is the chain of both impedances.
    z_s, z = 0.01 + 0.05j, 0.02 + 0.03j
    chain = behind(network([-1, 0], [z]), np.array([[z_s]]))
    load = behind_loading(loading(2, {1: 0.6 + 0.2j}), np.array([[1.03 + 0j]]))
    far = sweep(chain, load, SETTINGS).V[2, 0, 0]
    whole = sweep(network([-1, 0], [z_s + z]), loading(2, {1: 0.6 + 0.2j}, source=1.03), SETTINGS)
    assert far == pytest.approx(whole.V[1, 0, 0], abs=1e-12)


def test_gain_and_terminal_shunts_move_with_their_node():
    referred = refer(BEHIND, RATIO)
    moved = behind(referred, np.array([[0.1j]]))
    assert np.array_equal(moved.gain[1:], referred.gain)
    assert moved.gain[0, 0] == 1.0
    assert np.array_equal(moved.y_to[1:], referred.y_to)
    assert np.array_equal(moved.y_from[1:], referred.y_from)


# --- records ---------------------------------------------------------------------------------


def test_records_cannot_be_changed_afterwards():
    with pytest.raises(ValueError, match="read-only"):
        BEHIND.z[1] = 0
    with pytest.raises(ValueError, match="read-only"):
        LOAD.power[1] = 0


def test_a_solved_column_is_one_with_a_finite_mismatch():
    # 1.2 pu over r = x = 0.5: far beyond 1 / (2 (r + |z|)) = 0.41, the most that can arrive.
    load = Loading(
        np.array([[[0.0, 0.0]], [[0.1, 1.2]]]), np.zeros((2, 1, 1)), np.zeros((2, 1, 1)),
        np.ones((1, 1)),
    )  # fmt: skip
    point = sweep(network([-1, 0], [0.5 + 0.5j]), load, Settings())
    assert point.solved.tolist() == [True, False]
