"""Names to a rooted tree; loops, islands, unknown nodes and phases that do not arrive."""

from __future__ import annotations

import random

import numpy as np
import pytest
from feederhost.feeder.phases import node_phases
from feederhost.feeder.tables import check_tables
from feederhost.feeder.topology import Edge, base_kv, root_feeder
from hypothesis import given, settings
from hypothesis import strategies as st

from feeder_sheets import alarms, feeder, notes, sheet

LINE = "line, from_node, to_node, r1_ohm, x1_ohm, rating_a, state, phases"
TRANSFORMER = "transformer, from_node, to_node, kva, kv_primary, kv_secondary, z_pct, x_over_r"


def lines(*rows):
    """Return lines from ``"L1 S A"`` or ``"L1 S A open"`` or ``"L1 S A closed AB"``."""
    usual = ["", "", "", "closed", None]
    table = []
    for row in rows:
        line, a, b, state, phases = [*row.split(), *usual[len(row.split()) :]]
        table.append([line, a, b, 1, 1, 300, state, phases])
    return sheet(LINE, *table)


def rooted(*rows, **sheets):
    sheets.setdefault("loads", None)
    return root_feeder(check_tables(feeder(lines=lines(*rows), **sheets)))


def texts(findings):
    return [f.line() for f in findings]


def test_root_first_order_is_depth_first_in_row_order():
    topology, findings = rooted(
        "L1 S A", "L2 A B", "L3 D A", "L4 B C", "L5 S E",
        transformers=sheet(TRANSFORMER, ["T", "E", "F", 100, 12.47, 0.48, 2, 1]),
        regulators=sheet("regulator, from_node, to_node, tap, rating_a", ["R", "C", "G", 0, 200]),
    )  # fmt: skip
    assert findings == ()
    assert topology.nodes == ("S", "A", "B", "C", "G", "D", "E", "F")
    assert topology.parent == (-1, 0, 1, 2, 3, 1, 0, 6)
    assert topology.forward == (True, True, True, True, True, False, True, True)
    assert topology.edges[0] is None
    assert topology.edges[4] == Edge("regulators", 2, "R", "regulator", "C", "G")
    assert topology.edges[5] == Edge("lines", 4, "L3", "line", "D", "A")
    assert topology.edges[7] == Edge("transformers", 2, "T", "transformer", "E", "F")


IMPEDANCE = "line, from_node, to_node, rating_a, length_km, conductor, r1_ohm_per_km, x1_ohm_per_km"
LIBRARY = sheet("conductor, r1_ohm_per_km, x1_ohm_per_km", ["W", 0.3, 0.4])


@pytest.mark.parametrize(
    ("cells", "kind"),
    [
        ([], "switch"),
        ([2], "switch"),
        ([2, "W"], "line"),
        ([0, "W"], "switch"),
        ([2, None, 0.3, 0.4], "line"),
        ([2, None, 0.3, 0], "line"),
        ([0, None, 0.3, 0.4], "switch"),
        ([2, None, 0, 0], "switch"),
        ([None, None, None, None, 1, 1], "line"),
        ([0, None, None, None, 0, 1], "line"),
        ([2, "W", None, None, 0, 0], "switch"),
    ],
)
def test_line_without_impedance_is_a_switch(cells, kind):
    table = sheet(IMPEDANCE + ", r1_ohm, x1_ohm", ["L1", "S", "A", 300, *cells])
    tables = check_tables(feeder(lines=table, conductors=LIBRARY, loads=None))
    topology, _ = root_feeder(tables)
    assert topology.edges[1].kind == kind


def test_open_lines_are_left_out_and_counted():
    topology, findings = rooted("L1 S A", "L2 A B", "L3 B S open", "L4 B X open")
    assert topology.nodes == ("S", "A", "B")
    assert texts(findings) == ["lines state: 2 open lines are left out (L3, L4)"]
    assert notes(findings, "lines") == texts(findings)


def test_loop_is_named_by_its_lines():
    topology, findings = rooted(
        "L3 S A", "L7 A B", "L12 C S", "L13 C D",
        transformers=sheet(TRANSFORMER, ["T2", "B", "C", 100, 12.47, 12.47, 2, 1]),
    )  # fmt: skip
    assert alarms(findings) == [("fatal", "transformers", 2, "transformer", "T2")]
    assert texts(findings) == [
        "transformers 2 transformer: transformer T2 closes a loop with L7, L3, L12 - the feeder "
        "must be radial: open one of them"
    ]
    assert set(topology.nodes) == {"S", "A", "B", "C", "D"}


def test_one_finding_per_independent_loop():
    # Figure of eight S-A-B-S and A-C-D-A: two independent loops (branches - nodes + 1 = 2).
    _, findings = rooted("L1 S A", "L2 A B", "L3 B S", "L4 A C", "L5 C D", "L6 D A")
    assert [f.finding for f in findings] == [
        "line L3 closes a loop with L2, L1",
        "line L6 closes a loop with L5, L4",
    ]


def test_parallel_lines_are_loops_and_named_by_each_other():
    _, findings = rooted("L1 S A", "L2 A S", "L3 A B", "L4 B S", "L5 S B", "L6 B S")
    assert [f.finding for f in findings] == [
        "line L2 closes a loop with L1",
        "line L4 closes a loop with L3, L1",
        "line L5 closes a loop with L4",
        "line L6 closes a loop with L4",
    ]


def test_loop_in_an_island_is_found_as_well():
    _, findings = rooted("L1 S A", "L2 X Y", "L3 Y Z", "L4 Z X")
    assert [f.finding for f in findings] == [
        "X, Y, Z: no closed path to the source S",
        "line L4 closes a loop with L3, L2",
    ]


def test_line_to_itself():
    topology, findings = rooted("L1 S A", "L2 A A")
    assert alarms(findings) == [("fatal", "lines", 3, "to_node", "A")]
    assert "runs from A to itself" in findings[0].finding
    assert topology.nodes == ("S", "A")


@pytest.mark.parametrize("row", [["L1", None, "A", 1, 1, 9], ["L1", "S", "=A1", 1, 1, 9]])
def test_branch_without_both_ends_is_left_out(row):
    table = sheet(LINE, row, ["L2", "S", "B", 1, 1, 9], ["L3", "A", "C", 1, 1, 9])
    topology, findings = root_feeder(check_tables(feeder(lines=table)))
    assert topology.nodes == ("S", "B")
    assert [f.suggestion for f in findings] == [
        "first mend the branches without both ends: lines row 2"
    ]


def test_island_names_its_nodes_and_the_open_line_that_could_join_it():
    _, findings = rooted("L1 S A", "L2 B C", "L3 C D", "L4 A D open", "L5 X Y open")
    assert alarms(findings) == [("fatal", "lines", 3, "from_node", "B")]
    assert findings[1].finding == "B, C, D: no closed path to the source S"
    assert findings[1].suggestion == (
        "close one of the open lines L4 (A to D), or add the missing line"
    )


def test_island_without_a_tie():
    _, findings = rooted("L1 S A", "L2 B C")
    assert [f.suggestion for f in findings] == ["add the missing line, or mend the node names"]


CARRYING = {
    "loads": sheet("node, kw, kvar", ["A", 1, 0], ["X", 1, 0]),
    "generators": sheet("node, kw", ["A", 1], ["X", 1]),
    "capacitors": sheet("node, kvar", ["A", 1], ["X", 1]),
    "candidates": sheet("node", ["A"], ["X"]),
    "requests": sheet("request, node, technology, kw", ["Q", "A", "pv", 1], ["R", "X", "pv", 1]),
}


@pytest.mark.parametrize("name", list(CARRYING))
@pytest.mark.parametrize("known_by", ["nodes", "tie"])
def test_single_node_without_supply(name, known_by):
    more = {"nodes": sheet("node", ["X"])} if known_by == "nodes" else {}
    rows = ["L1 S A"] + (["L2 A X open"] if known_by == "tie" else [])
    _, findings = rooted(*rows, **{name: CARRYING[name]}, **more)
    found = alarms(findings)
    if name == "requests":
        assert found[-1] == ("warning", "requests", 3, "node", "X")
        assert "no closed path to the source S" in findings[-1].finding
        assert found[:-1] == ([("warning", "nodes", 2, "node", "X")] if more else [])
    else:
        assert found == [("fatal", name, 3, "node", "X")]


def test_request_on_an_island_of_lines_is_warned_too():
    _, findings = rooted("L1 S A", "L2 X Y", requests=CARRYING["requests"])
    assert alarms(findings) == [
        ("fatal", "lines", 3, "from_node", "X"),
        ("warning", "requests", 3, "node", "X"),
    ]


def test_node_that_is_only_listed():
    _, findings = rooted("L1 S A", nodes=sheet("node", ["A"], ["X"]))
    assert alarms(findings) == [("warning", "nodes", 3, "node", "X")]
    assert "connected to nothing" in findings[0].finding


@pytest.mark.parametrize("name", list(CARRYING))
def test_unknown_nodes(name):
    _, findings = rooted("L1 S A", "L2 A x", **{name: CARRYING[name]})
    severity = "warning" if name == "requests" else "fatal"
    assert alarms(findings) == [(severity, name, 3, "node", "X")]
    assert findings[0].finding == "no node X: no branch ends there"
    assert findings[0].suggestion == "did you mean x?"


@pytest.mark.parametrize(
    ("asked", "suggestion"),
    [
        ("n-7", "did you mean N-7?"),
        ("N7", "did you mean N-7?"),
        ("N-77", "did you mean N-7?"),
        ("-N7", "did you mean N-7?"),
        ("Q-9", "name a node of `lines`"),
    ],
)
def test_unknown_nodes_get_the_nearest_name(asked, suggestion):
    _, findings = rooted("L1 S N-7", loads=sheet("node, kw", [asked, 1]))
    assert [f.suggestion for f in findings] == [suggestion]


def test_blank_nodes_are_not_unknown_ones():
    assert rooted("L1 S A", loads=sheet("node, kw", [None, 1]))[1] == ()


def test_names_that_differ_only_by_case():
    _, findings = rooted("L1 S n-7", "L2 n-7 A", "L3 A N-7")
    assert alarms(findings) == [("warning", "lines", 4, "to_node", "N-7")]
    assert findings[0].finding == "N-7 and n-7 differ only by case: two nodes"
    _, findings = rooted("L1 S A", source=sheet("node, kv", ["s", 12.47]))
    assert ("warning", "lines", 2, "from_node", "S") in alarms(findings)


@pytest.mark.parametrize(
    ("source", "suggestion"),
    [
        ("sub", "did you mean SUB?"),
        ("SUBB", "did you mean SUB?"),
        ("head", "write the node where the feeder starts as the lines do"),
    ],
)
def test_source_on_no_branch(source, suggestion):
    topology, findings = rooted("L1 SUB A", "L2 A head open", source=sheet("node, kv", [source, 1]))
    assert topology is None
    found = [f for f in findings if f.sheet == "source"]
    assert alarms(found) == [("fatal", "source", 2, "node", source)]
    assert found[0].suggestion == suggestion
    assert not any("no closed path" in f.finding for f in findings)


@pytest.mark.parametrize("source", [None, sheet("node, kv", [None, 12.47])])
def test_without_a_source_there_is_no_tree(source):
    topology, findings = rooted("L1 S A", "L2 A S", source=source)
    assert topology is None
    assert [f.finding for f in findings] == ["line L2 closes a loop with L1"]


def test_findings_quote_headers_as_written():
    table = lines("L1 S A", "L2 A A").rename(columns={"to_node": "To Node"})
    _, findings = root_feeder(check_tables(feeder(lines=table, loads=None)))
    assert [f.column for f in findings] == ["To Node"]


# Base voltages: 12.47 x 4.16/12.47 = 4.16; 4.16 x 0.48/4.16 = 0.48; reversed row the inverse.
def test_base_kv_follows_the_rated_ratios():
    transformers = sheet(
        TRANSFORMER,
        ["T1", "A", "B", 5000, 12.47, 4.16, 6, 8],
        ["T2", "B", "C", 500, 4.16, 0.48, 2, 2],
        ["T3", "D", "A", 5000, 24.94, 12.47, 6, 8],
        ["T4", "A", "E", 100, 12.0, 0.48, 2, 2],
    )
    raw = feeder(lines=lines("L1 S A", "L2 C F"), transformers=transformers, loads=None)
    tables = check_tables(raw)
    topology, _ = root_feeder(tables)
    kv = dict(zip(topology.nodes, base_kv(tables, topology).tolist(), strict=True))
    assert topology.forward[topology.nodes.index("D")] is False
    assert kv == pytest.approx(
        {"S": 12.47, "A": 12.47, "B": 4.16, "C": 0.48, "F": 0.48, "D": 24.94, "E": 0.4988},
        rel=1e-15,
    )


@pytest.mark.parametrize("kv", [None, "?", 0])
def test_base_kv_is_blank_where_a_rated_voltage_is(kv):
    tables = check_tables(
        feeder(
            lines=lines("L1 S A"), loads=None,
            transformers=sheet(TRANSFORMER, ["T1", "A", "B", 5000, 12.47, kv, 6, 8]),
        )
    )  # fmt: skip
    topology, _ = root_feeder(tables)
    found = base_kv(tables, topology)
    assert isinstance(found, np.ndarray)
    np.testing.assert_array_equal(found, [12.47, 12.47, np.nan])


def test_phases_narrow_along_the_tree():
    regulators = sheet("regulator, from_node, to_node, tap, rating_a", ["R", "C", "D", 0, 200])
    rows = ("L1 S A closed ABC", "L2 A B closed cb", "L3 B C closed B")
    tables = check_tables(feeder(lines=lines(*rows), loads=None, regulators=regulators))
    topology, findings = root_feeder(tables)
    assert findings == ()
    assert topology.nodes == ("S", "A", "B", "C", "D")
    assert node_phases(tables, topology) == ("ABC", "ABC", "BC", "B", "B")


def test_no_phases_on_any_line_is_balanced():
    tables = check_tables(feeder())
    topology, findings = root_feeder(tables)
    assert findings == ()
    assert node_phases(tables, topology) == ("", "", "")


def test_branch_on_phases_that_do_not_arrive():
    _, findings = rooted("L1 S A closed AB", "L2 A B closed BC", "L3 B C closed C")
    assert alarms(findings) == [
        ("fatal", "lines", 3, "phases", "BC"),
        ("fatal", "lines", 4, "phases", "C"),
    ]
    assert findings[0].finding == "no line brings phase C to node A"
    assert findings[0].suggestion == "phases there: AB"
    assert findings[1].finding == "no line brings phase C to node B"


def test_branch_where_no_phase_arrives():
    _, findings = rooted("L1 S A closed AB", "L2 A B closed C", "L3 B C closed A")
    assert [f.suggestion for f in findings] == ["phases there: AB", "phases there: none"]


def test_phases_that_no_line_gives_are_not_missed_on_a_balanced_feeder():
    _, findings = rooted("L1 S A", loads=sheet("node, kw, phases", ["A", 1, "C"]))
    assert findings == ()


def test_unknown_nodes_have_no_phases_to_miss():
    _, findings = rooted("L1 S A closed A", loads=sheet("node, kw, phases", ["X", 1, "C"]))
    assert [f.column for f in findings] == ["node"]


@pytest.mark.parametrize("name", list(CARRYING))
def test_plant_on_phases_that_do_not_arrive(name):
    table = CARRYING[name].copy()
    table["phases"] = ["C", "A"]
    _, findings = rooted("L1 S A closed AB", "L2 A X closed A", **{name: table})
    severity = "warning" if name == "requests" else "fatal"
    assert alarms(findings) == [(severity, name, 2, "phases", "C")]


@settings(max_examples=60, deadline=None)
@given(st.integers(2, 30), st.integers(0, 2**32 - 1))
def test_random_trees_are_rooted_whatever_the_order_and_direction_of_rows(n, seed):
    chance = random.Random(seed)
    upstream = {k: chance.randrange(k) for k in range(1, n)}
    rows = [(f"L{k}", *chance.sample([f"N{k}", f"N{p}"], 2)) for k, p in upstream.items()]
    chance.shuffle(rows)
    source = sheet("node, kv", ["N0", 12.47])
    topology, findings = rooted(*(" ".join(row) for row in rows), source=source)
    assert findings == ()
    assert sorted(topology.nodes) == sorted(f"N{k}" for k in range(n))
    for k in range(1, n):
        edge, parent = topology.edges[k], topology.nodes[topology.parent[k]]
        assert topology.parent[k] < k
        assert {edge.from_node, edge.to_node} == {parent, topology.nodes[k]}
        assert topology.forward[k] == (edge.from_node == parent)
        assert upstream[int(topology.nodes[k][1:])] == int(parent[1:])
    # Depth first: every subtree is one run of positions.
    for k in range(1, n):
        inside = [j for j in range(k, n) if k in _ancestors(topology.parent, j)]
        assert inside == list(range(k, k + len(inside)))


def _ancestors(parent, k):
    chain = [k]
    while parent[chain[-1]] >= 0:
        chain.append(parent[chain[-1]])
    return chain
