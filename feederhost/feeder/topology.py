"""Names to a rooted tree: branches joined at the source, loops and islands named."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import networkx as nx
import numpy as np

from feederhost.errors import Finding, Severity
from feederhost.feeder.columns import given
from feederhost.feeder.names import did_you_mean, listed, near_index
from feederhost.feeder.phases import check_phases
from feederhost.feeder.tables import Tables, in_order

BRANCH_IDS = {"lines": "line", "transformers": "transformer", "regulators": "regulator"}
# What a node may carry; a request alone makes no island of it, that is the request's own fault.
_CARRIED = ("loads", "generators", "capacitors", "candidates")


@dataclass(frozen=True)
class Edge:
    """One branch: a line, switch, transformer or regulator, as its row says."""

    sheet: str
    row: int
    name: str
    kind: str
    from_node: str
    to_node: str


@dataclass(frozen=True)
class Topology:
    """The feeder as a rooted tree.

    Attributes
    ----------
    nodes : tuple of str
        Names in root-first order, depth first, branches in sheet and row order; nodes[0] is
        the source and every parent stands before its children.
    parent : tuple of int
        parent[k] is the position of the node upstream of node k; -1 at the source.
    edges : tuple of (Edge or None)
        edges[k] joins parent[k] and k; None at the source.
    forward : tuple of bool
        Whether from_node of the row is the upstream end; True at the source.
    """

    nodes: tuple[str, ...]
    parent: tuple[int, ...]
    edges: tuple[Edge | None, ...]
    forward: tuple[bool, ...]


def root_feeder(tables: Tables) -> tuple[Topology | None, tuple[Finding, ...]]:
    """Root the closed branches at the source.

    Parameters
    ----------
    tables : Tables
        Checked tables.

    Returns
    -------
    topology : Topology or None
        What hangs on the source, branches that close a loop left out, so that the audit can
        go on; it stands for the feeder only where no finding is fatal.  None where the source
        has no name or no branch.
    findings : tuple of Finding
        Loops, islands, unknown nodes, phases that do not arrive.
    """
    closed, opened = _branches(tables)
    source = next((name for name in tables.sheets["source"]["node"].tolist() if name), "")
    known = _places(tables, source, (*closed, *opened))
    forest, findings = _forest(tables, closed)
    forest.add_nodes_from(known)
    findings += _node_findings(tables, known)
    if opened:
        names = listed(edge.name for edge in opened)
        problem = f"{len(opened)} open lines are left out ({names})"
        findings.append(tables.finding(Severity.NOTE, "lines", 0, "state", problem))
    if not source:
        return None, in_order(findings)
    if not forest[source]:
        problem = "no closed branch ends at the source"
        index = near_index(n for edge in closed for n in (edge.from_node, edge.to_node))
        hint = did_you_mean(source, index, "write the node where the feeder starts as the lines do")
        place = known[source]
        findings.append(tables.finding(Severity.FATAL, *place, problem, hint))
        return None, in_order(findings)
    findings += _islands(tables, forest, source, known, opened)
    topology = _rooted(forest, source)
    findings += check_phases(tables, topology)
    return topology, in_order(findings)


def base_kv(tables: Tables, topology: Topology) -> np.ndarray:
    """Return the base voltage of every node.

    Parameters
    ----------
    tables : Tables
        Checked tables.
    topology : Topology
        The same feeder, rooted.

    Returns
    -------
    numpy.ndarray
        (n,) kV line to line: the source's, times the rated ratio of every transformer passed;
        NaN where a rated voltage is unusable.
    """
    kv = [next((v for v in tables.sheets["source"]["kv"].tolist() if v == v), math.nan)]
    rated = {
        row: (cells["kv_primary"], cells["kv_secondary"])
        for row, cells in tables.rows("transformers")
    }
    for k, edge in enumerate(topology.edges):
        if edge is None:
            continue
        base = kv[topology.parent[k]]
        if edge.kind == "transformer":
            near, far = rated[edge.row] if topology.forward[k] else reversed(rated[edge.row])
            base = base * far / near
        kv.append(base if 0 < base < math.inf else math.nan)
    return np.array(kv)


def _branches(tables: Tables) -> tuple[list[Edge], list[Edge]]:
    """Return closed and open branches, in sheet and row order; rows without both ends are out."""
    closed: list[Edge] = []
    opened: list[Edge] = []
    for sheet, key in BRANCH_IDS.items():
        for row, cells in tables.rows(sheet):
            ends = cells["from_node"], cells["to_node"]
            if not all(ends):
                continue
            kind = "switch" if sheet == "lines" and _is_switch(cells) else key
            edge = Edge(sheet, row, cells[key], kind, *ends)
            (opened if cells.get("state") == "open" else closed).append(edge)
    return closed, opened


def _is_switch(cells: Mapping[str, Any]) -> bool:
    """Tell whether a line has no series impedance."""
    totals = given(cells, "r1_ohm", "x1_ohm")
    per_km = given(cells, "r1_ohm_per_km", "x1_ohm_per_km")
    if totals or per_km:
        some = any(cells[key] for key in (*totals, *per_km))
        return not some or (not totals and cells["length_km"] == 0)
    return not cells["conductor"] or cells["length_km"] == 0


def _places(
    tables: Tables, source: str, branches: Sequence[Edge]
) -> dict[str, tuple[str, int, str]]:
    """Return every node that exists, with sheet, row and column of its first mention."""
    mentions: list[tuple[str, tuple[str, int, str]]] = []
    rows = tables.sheets["source"].index.tolist()
    if source:
        mentions.append((source, ("source", rows[0], "node")))
    for edge in branches:
        mentions.append((edge.from_node, (edge.sheet, edge.row, "from_node")))
        mentions.append((edge.to_node, (edge.sheet, edge.row, "to_node")))
    for row, cells in tables.rows("nodes"):
        mentions.append((cells["node"], ("nodes", row, "node")))
    places: dict[str, tuple[str, int, str]] = {}
    for name, place in mentions:
        if name:
            places.setdefault(name, place)
    return places


def _forest(tables: Tables, closed: Sequence[Edge]) -> tuple[nx.Graph, list[Finding]]:
    """Join the closed branches in row order; name every one that closes a loop."""
    forest = nx.Graph()
    joined = nx.utils.UnionFind()
    closing: dict[frozenset[str], list[Edge]] = {}
    findings: list[Finding] = []
    for edge in closed:
        ends = edge.from_node, edge.to_node
        if ends[0] == ends[1]:
            problem = f"{edge.kind} {edge.name} runs from {ends[0]} to itself"
            hint = "give the node at its other end"
            findings.append(
                tables.finding(Severity.FATAL, edge.sheet, edge.row, "to_node", problem, hint)
            )
        elif joined[ends[0]] == joined[ends[1]]:
            path = nx.shortest_path(forest, *ends)
            others = [forest.edges[pair]["edge"] for pair in pairwise(path)]
            others = closing.get(frozenset(ends), others)
            closing.setdefault(frozenset(ends), [edge])
            names = listed(other.name for other in others)
            problem = f"{edge.kind} {edge.name} closes a loop with {names}"
            hint = "the feeder must be radial: open one of them"
            findings.append(
                tables.finding(
                    Severity.FATAL, edge.sheet, edge.row, BRANCH_IDS[edge.sheet], problem, hint
                )
            )
        else:
            joined.union(*ends)
            forest.add_edge(*ends, edge=edge)
    return forest, findings


def _rooted(forest: nx.Graph, source: str) -> Topology:
    nodes, parent, forward = [source], [-1], [True]
    edges: list[Edge | None] = [None]
    position = {source: 0}
    # networkx keeps neighbours in the order the branches were joined: row order.
    for upstream, node in nx.dfs_edges(forest, source):
        edge = forest.edges[upstream, node]["edge"]
        position[node] = len(nodes)
        nodes.append(node)
        parent.append(position[upstream])
        edges.append(edge)
        forward.append(edge.from_node == upstream)
    return Topology(tuple(nodes), tuple(parent), tuple(edges), tuple(forward))


def _node_findings(tables: Tables, known: Mapping[str, tuple[str, int, str]]) -> list[Finding]:
    """Return what is connected to a node that does not exist, and names that differ by case."""
    findings: list[Finding] = []
    index = near_index(known)
    for sheet in (*_CARRIED, "requests"):
        for row, cells in tables.rows(sheet):
            if cells["node"] and cells["node"] not in known:
                problem = f"no node {cells['node']}: no branch ends there"
                hint = did_you_mean(cells["node"], index, "name a node of `lines`")
                findings.append(tables.finding(Severity.FATAL, sheet, row, "node", problem, hint))
    spelt: dict[str, str] = {}
    for name, place in known.items():
        first = spelt.setdefault(name.casefold(), name)
        if first != name:
            problem = f"{name} and {first} differ only by case: two nodes"
            hint = "write them alike if they are one"
            findings.append(tables.finding(Severity.WARNING, *place, problem, hint))
    return findings


def _islands(
    tables: Tables,
    forest: nx.Graph,
    source: str,
    known: Mapping[str, tuple[str, int, str]],
    opened: Sequence[Edge],
) -> list[Finding]:
    """Return one finding per part of the feeder that hangs in the air."""
    carried: dict[str, tuple[str, int]] = {}
    for sheet in _CARRIED:
        for row, cells in tables.rows(sheet):
            carried.setdefault(cells["node"], (sheet, row))
    findings: list[Finding] = []
    supplied = nx.node_connected_component(forest, source)
    order = {name: number for number, name in enumerate(known)}
    tied = {node for edge in opened for node in (edge.from_node, edge.to_node)}
    stranded: set[str] = set()
    for part in nx.connected_components(forest.subgraph(known.keys() - supplied)):
        nodes = sorted(part, key=order.__getitem__)
        stranded.update(nodes)
        if len(nodes) > 1:
            place = known[nodes[0]]
        elif nodes[0] in carried:
            place = (*carried[nodes[0]], "node")
        elif nodes[0] in tied:
            continue  # the far end of a tie to another feeder
        else:
            problem = f"node {nodes[0]} is connected to nothing and is left out"
            findings.append(tables.finding(Severity.WARNING, *known[nodes[0]], problem))
            continue
        problem = f"{listed(nodes)}: no closed path to the source {source}"
        hint = _reconnection(tables, part, opened)
        findings.append(tables.finding(Severity.FATAL, *place, problem, hint))
    for row, cells in tables.rows("requests"):
        if cells["node"] in stranded:
            problem = f"node {cells['node']} has no closed path to the source {source}"
            findings.append(tables.finding(Severity.FATAL, "requests", row, "node", problem))
    return findings


def _reconnection(tables: Tables, part: set[str], opened: Iterable[Edge]) -> str:
    """Say what could join a part to the rest: an open line, or a row that lacks an end."""
    ties = [e for e in opened if (e.from_node in part) != (e.to_node in part)]
    if ties:
        texts = (f"{e.name} ({e.from_node} to {e.to_node})" for e in ties)
        return f"close one of the open lines {listed(texts)}, or add the missing line"
    endless = [
        f"{sheet} row {row}"
        for sheet in BRANCH_IDS
        for row, cells in tables.rows(sheet)
        if not (cells["from_node"] and cells["to_node"])
    ]
    if endless:
        return f"first mend the branches without both ends: {listed(endless)}"
    return "add the missing line, or mend the node names"
