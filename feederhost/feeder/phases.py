"""Phases along the tree: which arrive at a node, and what asks for one that does not."""

from __future__ import annotations

from typing import TYPE_CHECKING

from feederhost.errors import Finding, Severity
from feederhost.feeder.tables import Tables

if TYPE_CHECKING:
    from feederhost.feeder.topology import Topology

_CONNECTED = ("capacitors", "loads", "generators", "requests", "candidates")


def node_phases(tables: Tables, topology: Topology) -> tuple[str, ...]:
    """Return the phases that arrive at every node.

    Parameters
    ----------
    tables : Tables
        Checked tables.
    topology : Topology
        The same feeder, rooted.

    Returns
    -------
    tuple of str
        Sorted letters, ``ABC`` at the source; a branch without phases carries those of the
        node before it.  ``""`` everywhere where no line gives phases: judged balanced.
    """
    if not any(tables.sheets["lines"]["phases"].tolist()):
        return ("",) * len(topology.nodes)
    arriving = ["ABC"]
    own = _branch_phases(tables)
    for k, edge in enumerate(topology.edges):
        if edge is not None:
            upstream = arriving[topology.parent[k]]
            carried = own[edge.sheet, edge.row] or upstream
            arriving.append("".join(p for p in upstream if p in carried))
    return tuple(arriving)


def check_phases(tables: Tables, topology: Topology) -> list[Finding]:
    """Return a fatal finding for everything on a phase that no line brings there."""
    arriving = node_phases(tables, topology)
    if not arriving[0]:
        return []
    own = _branch_phases(tables)
    findings: list[Finding] = []
    for k, edge in enumerate(topology.edges):
        if edge is not None:
            upstream = topology.nodes[topology.parent[k]], arriving[topology.parent[k]]
            findings += _lacking(tables, edge.sheet, edge.row, own[edge.sheet, edge.row], *upstream)
    at = dict(zip(topology.nodes, arriving, strict=True))
    for sheet in _CONNECTED:
        for row, cells in tables.rows(sheet):
            if cells["node"] in at:
                node = cells["node"]
                findings += _lacking(tables, sheet, row, cells["phases"], node, at[node])
    return findings


def unbalanced_phases(tables: Tables) -> list[Finding]:
    """Return a fatal finding per sheet that names phases other than all three.

    The feeder is judged balanced: on a single-phase lateral that would overstate what fits
    several times, so no number is better than that one.
    """
    findings = []
    for sheet, frame in tables.sheets.items():
        if "phases" not in frame or sheet == "requests":
            continue
        rows = [row for row, cells in tables.rows(sheet) if cells["phases"] not in ("", "ABC")]
        if rows:
            count = "1 row is" if len(rows) == 1 else f"{len(rows)} rows are"
            problem = f"{count} not on all three phases: this feeder is not balanced"
            hint = "only feeders with phases ABC throughout, or without phases, are judged here"
            findings.append(tables.finding(Severity.FATAL, sheet, rows[0], "phases", problem, hint))
    return findings


def _branch_phases(tables: Tables) -> dict[tuple[str, int], str]:
    return {
        (sheet, row): cells["phases"]
        for sheet in ("lines", "transformers", "regulators")
        for row, cells in tables.rows(sheet)
    }


def _lacking(
    tables: Tables, sheet: str, row: int, wanted: str, node: str, there: str
) -> list[Finding]:
    lacking = "".join(phase for phase in wanted if phase not in there)
    if not lacking:
        return []
    problem = f"no line brings phase {lacking} to node {node}"
    hint = f"phases there: {there or 'none'}"
    return [tables.finding(Severity.FATAL, sheet, row, "phases", problem, hint)]
