"""Headers of a raw sheet matched with the columns of the schema."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

from feederhost.errors import Finding, Severity
from feederhost.feeder.names import did_you_mean, fold, listed, near_index
from feederhost.schema import UNIT_FACTORS, Column, Sheet

HEADER_ROW = 1


@dataclass(frozen=True)
class Head:
    """One header that is read: where it stands, what it carries, and in which unit.

    ``factor`` turns a written number into the unit of ``key``.
    """

    position: int
    written: str
    key: str
    column: Column
    factor: float = 1.0


def match_headers(
    sheet: Sheet, headers: Sequence[str], filled: Sequence[bool]
) -> tuple[tuple[Head, ...], tuple[Finding, ...]]:
    """Match the headers of a sheet, as written, with its columns.

    Parameters
    ----------
    sheet : Sheet
        What the schema knows of the sheet.
    headers : sequence of str
        Header texts in column order; duplicates and blanks are possible.
    filled : sequence of bool
        Whether any cell below that header carries something.

    Returns
    -------
    heads : tuple of Head
        One per quantity found, in column order; of two headers for one quantity the first.
    findings : tuple of Finding
        Unknown headers (notes; warnings on ``regulators``), doubled quantities (fatal).
    """
    heads: dict[str, Head] = {}
    findings: list[Finding] = []
    index = near_index(h for c in sheet.columns for h in c.headers)
    for position, written in enumerate(headers):
        head = _match(sheet, position, written)
        if head is None:
            if written.strip() or filled[position]:
                findings.append(_unknown(sheet, written, index))
        elif head.key in heads:
            findings.append(_doubled(sheet, heads[head.key], head))
        else:
            heads[head.key] = head
    return tuple(heads.values()), tuple(findings)


def missing_headers(sheet: Sheet, heads: Sequence[Head]) -> tuple[Finding, ...]:
    """Return one fatal finding per required column that no header carries."""
    found = {head.key for head in heads}
    return tuple(
        Finding(
            Severity.FATAL, sheet.name, HEADER_ROW, column.key, "",
            "this column is needed and is not there",
            f"add a column headed {' or '.join(column.headers)}: {column.meaning}",
        )
        for column in sheet.columns
        if column.required and column.key not in found
    )  # fmt: skip


def _match(sheet: Sheet, position: int, written: str) -> Head | None:
    folded = fold(written)
    for column in sheet.columns:
        if column.pattern:
            if re.fullmatch(_pattern(column.name), folded):
                return Head(position, written, folded, column)
        elif folded in column.headers:
            unit = column.units[column.headers.index(folded)] if column.units else ""
            return Head(position, written, column.key, column, UNIT_FACTORS.get(unit, 1.0))
    return None


def _pattern(name: str) -> str:
    """Return ``load_scale.<class>`` as a regular expression."""
    return ".+".join(re.escape(part) for part in re.split(r"<\w+>", name))


def _unknown(sheet: Sheet, written: str, index: dict[str, list[str]]) -> Finding:
    severity = Severity.WARNING if sheet.name == "regulators" else Severity.NOTE
    if not written.strip():
        return Finding(
            severity, sheet.name, HEADER_ROW, "", "",
            "a column without a header is not read", "give it a header, or empty it",
        )  # fmt: skip
    folded = fold(written)
    other_units = next(
        (c.headers for c in sheet.columns if c.units and c.name and folded.startswith(c.name)), ()
    )
    hint = f"this quantity is read from {listed(other_units)}" if other_units else ""
    return Finding(
        severity, sheet.name, HEADER_ROW, written, written,
        "this column is not known and is not read", did_you_mean(folded, index, hint),
    )  # fmt: skip


def _doubled(sheet: Sheet, first: Head, second: Head) -> Finding:
    return Finding(
        Severity.FATAL, sheet.name, HEADER_ROW, second.written, second.written,
        f"the same quantity stands under two headers, {first.written!r} and {second.written!r}",
        "keep one of them",
    )  # fmt: skip
