"""How a node is served: its primary point, its transformer, phases and wires.

A cell that was left blank is not known here, whatever default the power flow takes for it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from feederhost.feeder.model import Feeder
from feederhost.feeder.phases import node_phases
from feederhost.feeder.tables import Tables
from feederhost.feeder.topology import Topology
from feederhost.feeder.units import per_unit
from feederhost.flow.tree import Ints


@dataclass(frozen=True)
class Service:
    """A transformer between a secondary and the primary.

    ``kv`` is the rated voltage of its secondary; ``connection`` is blank where not given.
    """

    name: str
    rating: float
    kv: float
    connection: str


@dataclass(frozen=True, eq=False)
class Serving:
    """How every node is served.

    Attributes
    ----------
    primary : (n,) int
        Nearest node above low voltage, the node itself or towards the source.
    service : (n,) int
        Node below the transformer that serves a node from the primary; -1: none.
    services : mapping of int to Service
        By the node below.
    phases, wires : tuple of str
        Phases and number of wires at every node; blank: not known.
    """

    primary: Ints
    service: Ints
    services: Mapping[int, Service]
    phases: tuple[str, ...]
    wires: tuple[str, ...]

    def transformer(self, node: int) -> Service | None:
        """Return the transformer that serves a node from the primary."""
        return self.services.get(int(self.service[node]))


def serving(tables: Tables, feeder: Feeder) -> Serving:
    """Find how every node is served."""
    rows = dict(tables.rows("transformers"))
    primary, service = _services(feeder)
    below = sorted(set(service.tolist()) - {-1})
    return Serving(
        primary=primary,
        service=service,
        services={k: _service(tables, feeder, k, rows) for k in below},
        phases=_phases(tables, feeder),
        wires=_wires(tables, feeder, rows),
    )


def _services(feeder: Feeder) -> tuple[Ints, Ints]:
    n = feeder.tree.size
    primary, service = np.arange(n), np.full(n, -1)
    low = feeder.kv <= feeder.settings.shared_kv
    for k in range(1, n):
        if not low[k]:
            continue
        above = feeder.tree.parent[k]
        primary[k], service[k] = primary[above], service[above]
        edge = feeder.edges[k]
        if not low[above] and edge is not None and edge.kind == "transformer":
            service[k] = k
    return primary, service


def _service(tables: Tables, feeder: Feeder, k: int, rows: Mapping[int, Any]) -> Service:
    edge = feeder.edges[k]
    assert edge is not None
    cells = rows[edge.row]
    known = _given(tables, "transformers", edge.row, "connection")
    return Service(
        name=edge.name,
        rating=per_unit(cells["kva"], feeder.settings),
        kv=cells["kv_secondary" if edge.to_node == feeder.nodes[k] else "kv_primary"],
        connection=cells["connection"] if known else "",
    )


def _given(tables: Tables, sheet: str, row: int, key: str) -> bool:
    """Whether a cell was filled in; a default stands for no knowledge."""
    return bool(tables.checked[sheet].texts.get(key, {}).get(row, ""))


def _phases(tables: Tables, feeder: Feeder) -> tuple[str, ...]:
    parent = tuple(feeder.tree.parent.tolist())
    forward = tuple(
        edge is None or edge.from_node == feeder.nodes[above]
        for edge, above in zip(feeder.edges, parent, strict=True)
    )
    return node_phases(tables, Topology(feeder.nodes, parent, feeder.edges, forward))


def _wires(tables: Tables, feeder: Feeder, rows: Mapping[int, Any]) -> tuple[str, ...]:
    """Wires at every node: the source's, until a transformer says otherwise; blank: not known."""
    source = next(iter(tables.rows("source")))
    wires = [source[1]["wires"] if _given(tables, "source", source[0], "wires") else ""]
    for k, edge in enumerate(feeder.edges):
        if edge is None:
            continue
        above = wires[feeder.tree.parent[k]]
        if edge.kind == "transformer":
            connection = rows[edge.row]["connection"]
            forward = edge.from_node == feeder.nodes[feeder.tree.parent[k]]
            if not _given(tables, "transformers", edge.row, "connection"):
                above = ""
            elif connection == "delta_wye":
                above = "4" if forward else "3"
            elif connection == "delta_delta":
                above = "3"
        wires.append(above)
    return tuple(wires)
