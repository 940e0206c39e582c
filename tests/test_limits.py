"""What each limit row measures, against the nodal equations, and how that changes."""

from __future__ import annotations

import numpy as np
import pytest
from feederhost.flow.limits import (
    Limits,
    Quantity,
    head_power,
    measure,
    measure_change,
    sending_voltage,
    slack,
    slack_change,
)
from feederhost.flow.network import Loading, Network
from feederhost.flow.sweep import sweep, tangent
from feederhost.flow.tree import Tree

from small_feeders import (
    SETTINGS,
    bank,
    head_export,
    head_import,
    high,
    judge,
    limits,
    loading,
    low,
    network,
    nodal_matrix,
    rated_receiving,
    rated_sending,
    watched_export,
)

# A charged line, a transformer with a core, a lateral; two branches leave the source.
NET = network(
    [-1, 0, 1, 0, 2], [0.02 + 0.05j, 0.01 + 0.06j, 0.03 + 0.04j, 0.04 + 0.03j],
    sending={1: 0.06j, 2: 0.004 - 0.01j, 4: 0.05j}, receiving={1: 0.06j, 4: 0.05j},
)  # fmt: skip
LOAD = loading(
    5, {1: 0.3 + 0.1j, 2: 0.4 + 0.2j, 3: -0.5, 4: 0.2 - 0.1j}, current={4: 0.1},
    shunt={2: 0.2j}, source=1.02,
)  # fmt: skip
OTHER = 0.7 + 0.4j
ROWS = limits(
    [
        high(4, 1.05), low(4, 0.95), rated_sending(1, 1.5), rated_receiving(1, 1.5),
        rated_sending(4, 0.4), rated_receiving(4, 0.4), head_import(2.0), head_export(0.5),
        bank(3.0), watched_export(), rated_sending(2, 0.9),
    ],
    OTHER,
)  # fmt: skip


def expected_values(net: Network, load: Loading) -> list[float]:
    """Measure the rows from nodal voltages and two-port equations alone."""
    V = judge(net, load)[:, 0]

    def ends(k: int) -> tuple[complex, complex]:
        a, b = V[net.tree.parent[k]], V[k]
        through = (a - b) / net.z[k, 0, 0]
        return through + net.y_from[k, 0] * a, through - net.y_to[k, 0] * b

    Y = nodal_matrix(net.tree.parent.tolist(), net.z, net.y_from, net.y_to, net.gain)
    head = V[0] * np.conj(Y[0] @ V)
    sent_1, got_1 = ends(1)
    sent_4, got_4 = ends(4)
    v = abs(V[4]) ** 2
    return [
        v, v, abs(sent_1) ** 2, abs(got_1) ** 2, abs(sent_4) ** 2, abs(got_4) ** 2, head.real,
        head.real, abs(head + OTHER) ** 2, head.real, abs(ends(2)[0]) ** 2,
    ]  # fmt: skip


def test_every_quantity_is_what_the_nodal_equations_say():
    measured = measure(NET, ROWS, sweep(NET, LOAD, SETTINGS))[:, 0]
    assert measured == pytest.approx(expected_values(NET, LOAD), abs=1e-10)


def test_terminal_currents_are_not_series_currents():
    # A charged line without load: the sending end carries both halves, the far end none.
    lone = network([-1, 0], [0.01 + 0.1j], sending={1: 0.05j}, receiving={1: 0.05j})
    point = sweep(lone, loading(2), SETTINGS)
    both = limits([rated_sending(1, 1.0), rated_receiving(1, 1.0)])
    sent, got = measure(lone, both, point)[:, 0]
    far = 1 / (1 + (0.01 + 0.1j) * 0.05j)
    assert got == pytest.approx(0.0, abs=1e-20)
    assert sent == pytest.approx(abs(0.05j * far + 0.05j) ** 2, abs=1e-14)


def test_slack_is_positive_inside_on_either_side():
    rows = limits([high(1, 1.05), low(1, 0.95), head_import(2.0), head_export(0.5)])
    measured = np.array([[1.0, 1.2], [1.0, 0.8], [1.5, 2.5], [1.5, -0.75]])
    expected = [[0.1025, -0.0975], [0.0975, -0.1025], [0.5, -0.5], [2.0, -0.25]]
    assert np.allclose(slack(rows, measured), expected, rtol=0, atol=1e-15)
    assert slack_change(rows, np.ones((4, 1)))[:, 0].tolist() == [-1, 1, -1, 1]


def test_changes_are_central_differences():
    change = np.zeros((5, 1, 1), complex)
    change[4] = -1 - 0.4j
    point = sweep(NET, LOAD, SETTINGS)
    moved = tangent(NET, LOAD, SETTINGS, point, np.array(LOAD.power), change)
    found = measure_change(NET, ROWS, point, moved)[:, 0]
    h = 1e-4
    ends = [measure(NET, ROWS, sweep(NET, LOAD, SETTINGS, LOAD.power + s * change))[:, 0]
            for s in (h, -h)]  # fmt: skip
    assert found == pytest.approx((ends[0] - ends[1]) / (2 * h), abs=1e-7)


def test_head_power_holds_every_branch_at_the_source():
    point = sweep(NET, LOAD, SETTINGS)
    J = point.J[[1, 3], 0, 0]
    at_source = point.V[0, 0, 0]
    expected = at_source * np.conj(J.sum() + NET.y_from[1, 0] * at_source)
    assert head_power(point)[0, 0] == pytest.approx(expected, abs=1e-12)
    # A load at the source node itself counts too.
    there = loading(5, {0: 0.25 + 0.5j}, source=1.02)
    none = sweep(NET, loading(5, source=1.02), SETTINGS)
    gain = head_power(sweep(NET, there, SETTINGS)) - head_power(none)
    assert gain[0, 0] == pytest.approx(0.25 + 0.5j, abs=1e-12)


def test_sending_voltage_is_the_parents():
    point = sweep(NET, LOAD, SETTINGS)
    V = point.V[:, 0, 0]
    assert sending_voltage(NET, point.V)[:, 0, 0].tolist() == V[[0, 0, 1, 0, 2]].tolist()


def test_phases_are_measured_one_by_one_and_the_head_over_all():
    # Two uncoupled phases, one loaded: only its own rows move.
    z = np.zeros((2, 2, 2), complex)
    z[1] = np.diag([0.1, 0.1])
    net = Network(Tree(np.array([-1, 0])), z, np.zeros((2, 2)), np.zeros((2, 2)), np.ones((2, 2)))
    power = np.zeros((2, 2, 1), complex)
    power[1, 0] = 0.5
    none = np.zeros((2, 2, 1), complex)
    point = sweep(net, Loading(power, none, none, np.ones((2, 1))), SETTINGS)
    rows = Limits(
        criterion=np.zeros(5), phase=np.array([0, 1, 0, 1, 0]), element=np.array([1, 1, 1, 1, 0]),
        quantity=np.array([Quantity.VOLTAGE] * 2 + [Quantity.CURRENT_FROM] * 2
                          + [Quantity.HEAD_POWER]),
        upper=np.ones(5, bool), bound=np.ones(5),
    )  # fmt: skip
    # V = (1 + sqrt(1 - 4 * 0.1 * 0.5)) / 2 = 0.947214 where 0.5 is drawn through 0.1.
    V = (1 + np.sqrt(0.8)) / 2
    expected = [V**2, 1.0, (0.5 / V) ** 2, 0.0, 0.5 / V]
    assert measure(net, rows, point)[:, 0] == pytest.approx(expected, abs=1e-11)


def test_no_rows_is_an_empty_measurement():
    nothing = limits([])
    assert nothing.size == 0
    assert measure(NET, nothing, sweep(NET, LOAD, SETTINGS)).shape == (0, 1)


def test_limit_rows_cannot_be_changed_afterwards():
    for name in ("bound", "upper", "element", "quantity", "criterion"):
        with pytest.raises(ValueError, match="read-only"):
            getattr(ROWS, name)[0] = 1
