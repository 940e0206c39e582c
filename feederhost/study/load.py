"""From a path to a feeder: read, check, root, audit, convert, with every finding in one go."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from feederhost.errors import Finding, InputError, Severity, fatal
from feederhost.feeder.audit import audit
from feederhost.feeder.branches import reversed_regulators
from feederhost.feeder.model import Feeder
from feederhost.feeder.perunit import build_feeder
from feederhost.feeder.phases import unbalanced_phases
from feederhost.feeder.tables import Tables, check_tables, in_order
from feederhost.feeder.topology import Topology, root_feeder
from feederhost.sheets.reading import read_workbook


@dataclass(frozen=True, eq=False)
class Loaded:
    """A feeder with what was noticed on the way, and the digests of its sheets."""

    feeder: Feeder
    tables: Tables
    findings: tuple[Finding, ...]
    digests: dict[str, str]

    @property
    def phases_assumed(self) -> bool:
        """Whether the workbook names no phases, so that the feeder is judged balanced."""
        return not any(
            (frame["phases"] != "").any()
            for frame in self.tables.sheets.values()
            if "phases" in frame
        )


def _at_source(tables: Tables, topology: Topology) -> list[Finding]:
    """Find candidates at the source node: nothing is judged there."""
    return [
        tables.finding(
            Severity.FATAL, "candidates", row, "node", "this is the source node itself",
            "name a node of the feeder",
        )
        for row, cells in tables.rows("candidates")
        if cells["node"] == topology.nodes[0]
    ]  # fmt: skip


def load_feeder(path: Path) -> Loaded:
    """Read a workbook or csv folder.

    Raises
    ------
    InputError
        If it cannot be read, or holds fatal findings (all of them are in the error).
    """
    raw = read_workbook(path)
    tables = check_tables(raw.tables)
    topology, rooted = root_feeder(tables)
    findings = list(tables.findings + rooted)
    if topology is not None:
        findings += audit(tables, topology)
        findings += reversed_regulators(tables, topology)
        findings += unbalanced_phases(tables)
        findings += _at_source(tables, topology)
    findings = list(in_order(findings))
    stopping = fatal(findings)
    if stopping or topology is None:
        count = f"{len(stopping)} fatal finding" + ("s" if len(stopping) != 1 else "")
        raise InputError(f"{path.name}: {count}", findings)
    return Loaded(build_feeder(tables, topology, raw.name), tables, tuple(findings), raw.digests)
