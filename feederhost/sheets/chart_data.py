"""What the charts show: blocks of columns for the sheet ``chart_data``, chosen and sorted."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

from feederhost.schema import Proof, State
from feederhost.sheets.cells import Cell, Table

CHART_DATA = "chart_data"
FIRST_ROW = 3  # of a block's data: its title and its headers stand above
MOST_BARS = 60  # more names than this cannot be read along one axis
PROVEN, CAPPED, UNPROVEN = "proven", "capped: at least", "bracketed or ac_only"
_PROOFS: dict[str, str] = {Proof.PROVEN: PROVEN, Proof.NOT_NEEDED: CAPPED,
           Proof.BRACKETED: UNPROVEN, Proof.AC_ONLY: UNPROVEN}  # fmt: skip
RESERVED, ROOM = "reserved", "head room at the node"
BASE, HOSTING, PLANT = "base", "plant at its hosting", "plant node"
LOWER, UPPER = "v_min_pu", "v_max_pu"


@dataclass(frozen=True)
class Block:
    """The cells behind one chart.

    ``columns`` have one header each and may differ in length.  For a hosting chart the first
    column holds the names, the others one series of bars each; for a profile the first column
    is the distance of the points, ``distance_km`` before the limits that of the limits.
    """

    title: str
    subtitle: str
    headers: tuple[str, ...]
    columns: tuple[tuple[Cell, ...], ...]
    axis: str = "node (phases), by distance from the source"
    measure: str = "hosting, kW"

    @property
    def is_profile(self) -> bool:
        """Whether voltage against distance is shown, not hosting by node."""
        return self.headers[0] == "distance_km"


def chart_blocks(tables: Mapping[str, Table]) -> tuple[Block, ...]:
    """Return a block per chart: hosting per technology, profiles, queue; none without data."""
    blocks: list[Block] = []
    hosting, profile = tables.get("hosting"), tables.get("profile")
    if hosting:
        for (technology,), rows in _groups(hosting, ("technology",)).items():
            blocks += _hosting_block(hosting, technology, rows)
    if profile:
        by_plant = _groups(profile, ("technology", "plant_node", "case"))
        for (technology, plant_node, case), rows in by_plant.items():
            blocks += _profile_block(profile, technology, plant_node, case, rows)
    if tables.get("queue"):
        blocks += _queue_block(tables["queue"])
    return tuple(blocks)


def _queue_block(table: Table) -> list[Block]:
    """Show what each request holds and leaves, in order; the first ones of a long queue."""
    names = table.column("request")
    count = min(len(names), MOST_BARS)
    if not count:
        return []
    remark = f"the first {MOST_BARS} of {len(names):,} requests" if len(names) > count else ""
    columns = (names, table.column("reserved_kw"), table.column("head_room_kw"))
    return [
        Block(
            "Queue: reserved, and what would still fit at its node", remark,
            ("request", RESERVED, ROOM), tuple(tuple(c[:count]) for c in columns),
            "request, in order of the queue", "kW",
        )
    ]  # fmt: skip


def data_rows(blocks: Sequence[Block]) -> Iterator[list[Cell]]:
    """Yield the rows of the sheet: blocks side by side, a blank column after each."""
    yield [cell for b in blocks for cell in [b.title, *[None] * len(b.headers)]]
    yield [cell for b in blocks for cell in [*b.headers, None]]
    for i in range(max((len(c) for b in blocks for c in b.columns), default=0)):
        yield [
            cell
            for b in blocks
            for cell in [*(c[i] if i < len(c) else None for c in b.columns), None]
        ]


def _groups(table: Table, names: Sequence[str]) -> dict[tuple[str, ...], list[int]]:
    """Return the row numbers of every combination of the named columns, in order of sight."""
    groups: dict[tuple[str, ...], list[int]] = {}
    for row, key in enumerate(zip(*(table.column(name) for name in names), strict=True)):
        groups.setdefault(tuple("" if k is None else str(k) for k in key), []).append(row)
    return groups


def _hosting_block(table: Table, technology: str, rows: Sequence[int]) -> list[Block]:
    hosting, proof = table.column("hosting_kw"), table.column("proof")
    state, distance = table.column("state"), _numbers(table.column("distance_km"), math.inf)
    value = _numbers(hosting, math.inf)
    rows = [r for r in rows if state[r] != State.NOT_ANALYSED]
    failed = sum(proof[r] == Proof.FAILED for r in rows)
    shown = sorted(rows, key=lambda r: value[r])[:MOST_BARS]
    shown.sort(key=lambda r: distance[r])
    series = {r: _PROOFS.get(str(proof[r])) for r in shown if value[r] < math.inf}
    used = [name for name in (PROVEN, CAPPED, UNPROVEN) if name in series.values()]
    if not used:
        return []
    remarks = [f"the {MOST_BARS} smallest of {len(rows):,} rows"] if len(rows) > MOST_BARS else []
    remarks += [f"{failed} failed and without a bar"] if failed else []
    labels = tuple(_label(table, r) for r in shown)
    bars = (tuple(value[r] if series.get(r) == name else None for r in shown) for name in used)
    return [
        Block(f"Hosting by node: {technology}", ", ".join(remarks), ("node", *used),
              (labels, *bars))
    ]  # fmt: skip


def _label(table: Table, row: int) -> str:
    several = len(set(table.column("feeder"))) > 1
    names = [*(["feeder"] if several else []), "node", "phases"]
    return " ".join(str(c) for n in names if (c := table.column(n)[row]) is not None)


def _profile_block(
    table: Table, technology: str, plant_node: str, case: str, rows: Sequence[int]
) -> list[Block]:
    distance = _numbers(table.column("distance_km"), math.inf)
    rows = sorted((r for r in rows if distance[r] < math.inf), key=lambda r: distance[r])
    if not rows:
        return []
    columns: dict[str, tuple[Cell, ...]] = {
        name: tuple(table.column(source)[r] for r in rows)
        for name, source in ((BASE, "base_pu"), (HOSTING, "hosting_pu"))
    }
    at_plant = [str(table.column("node")[r]) == plant_node for r in rows]
    columns[PLANT] = tuple(
        v if here else None for v, here in zip(columns[HOSTING], at_plant, strict=True)
    )
    points = {name: cells for name, cells in columns.items() if any(c is not None for c in cells)}
    ends = (rows[0], rows[-1])
    limits = {name: tuple(table.column(name)[r] for r in rows) for name in (LOWER, UPPER)}
    if all(len(set(cells)) == 1 for cells in limits.values()):
        # One band for all nodes is a pair of straight lines; else every node shows its own.
        limits = {name: (cells[0],) * len(ends) for name, cells in limits.items()}
        limit_distance = tuple(distance[r] for r in ends)
    else:
        limit_distance = tuple(distance[r] for r in rows)
    limits = {name: cells for name, cells in limits.items() if any(c is not None for c in cells)}
    return [
        Block(
            f"Voltage against distance: {technology} at {plant_node}, case {case}",
            "",
            ("distance_km", *points, "distance_km", *limits),
            (tuple(distance[r] for r in rows), *points.values(), limit_distance, *limits.values()),
        )
    ]


def _numbers(cells: Sequence[Cell], missing: float) -> list[float]:
    return [float(c) if isinstance(c, int | float) else missing for c in cells]
