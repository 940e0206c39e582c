"""What one cell may hold, and how it is made safe on the way in and out."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from typing import Any

import numpy as np
import pandas as pd

Cell = str | float | int | bool | datetime | date | None


@dataclass(frozen=True)
class Table:
    """A table of plain cells, by column: ``columns[i]`` has ``length`` cells under header i."""

    headers: tuple[str, ...]
    columns: tuple[tuple[Cell, ...], ...]
    length: int

    def column(self, header: str) -> tuple[Cell, ...]:
        """Return the cells under a header, blanks where there is no such column."""
        if header in self.headers:
            return self.columns[self.headers.index(header)]
        return (None,) * self.length


# XML 1.0 section 2.2 leaves these out of a document; the tab and the line feed stay.
_ILLEGAL = re.compile("[\x00-\x08\x0b-\x1f\ud800-\udfff\ufffe\uffff]")
# ECMA-376 part 1, 22.9.2.19: `_x000D_` inside a string stands for that character.
_ESCAPED = re.compile("_x([0-9A-Fa-f]{4})_")
_FORMULA_STARTS = ("=", "+", "-", "@")
_GUARDED = re.compile("'+[=+@-]")
_NEGATIVE = re.compile(r"-(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_EARLIEST_YEAR = 1900  # a spreadsheet's calendar starts here; older dates are kept as text


def clean(text: str) -> str | None:
    """Return the text trimmed, line ends as line feeds, without unprintables; None when blank."""
    text = text.replace("\r\n", "\n").replace("\r", "\n")
    return _ILLEGAL.sub("", text).strip() or None


def decode_escapes(text: str) -> str:
    """Turn the ``_xHHHH_`` escapes of an .xlsx string into the characters they stand for."""
    return _ESCAPED.sub(lambda m: chr(int(m[1], 16)), text) if "_x" in text else text


def encode_escapes(text: str) -> str:
    """Keep text that only looks like an ``_xHHHH_`` escape from being read as one."""
    return _ESCAPED.sub(r"_x005F_x\1_", text) if "_x" in text else text


def starts_formula(text: str) -> bool:
    """Say whether a spreadsheet might take the text for a formula."""
    return text.startswith(_FORMULA_STARTS)


def guard(text: str) -> str:
    """Make text safe in a csv cell: what reads as a formula gets a leading apostrophe.

    Text starting with ``=``, ``+``, ``@``, or ``-`` without being a negative number, is
    guarded; so is text that looks guarded already, which makes ``unguard`` exact.
    """
    formula = starts_formula(text) and not _NEGATIVE.fullmatch(text)
    return f"'{text}" if formula or _GUARDED.match(text) else text


def unguard(text: str) -> str:
    """Undo ``guard``: drop one apostrophe that stands before ``=``, ``+``, ``-`` or ``@``."""
    return text[1:] if _GUARDED.match(text) else text


def plain(value: Any) -> Cell:
    """Return a table's value as a cell can hold it.

    NaN, NaT, NA and blank text become None; numpy scalars become Python's own; infinities,
    times and anything else become text.
    """
    if value is None or value is pd.NaT or value is pd.NA:
        return None
    if isinstance(value, str):
        return clean(str(value))
    if isinstance(value, bool | np.bool_):
        return bool(value)
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        number = float(value)
        return None if math.isnan(number) else number if math.isfinite(number) else str(number)
    if isinstance(value, pd.Timestamp):
        value = value.to_pydatetime(warn=False)
    if isinstance(value, date):
        aware = isinstance(value, datetime) and value.tzinfo is not None
        return value.isoformat() if aware or value.year < _EARLIEST_YEAR else value
    if isinstance(value, time | timedelta):
        return str(value)
    return clean(str(value))


def as_text(value: Cell) -> str:
    """Return a cell as the text a csv file holds.

    Whole numbers have no decimals, other numbers Python's shortest exact form, so that equal
    cells of an .xlsx and of a csv feeder give equal text.
    """
    if value is None:
        return ""
    if isinstance(value, bool):
        return "TRUE" if value else "FALSE"
    if isinstance(value, float):
        return str(int(value)) if value.is_integer() and abs(value) < 2**53 else repr(value)
    if isinstance(value, datetime):
        whole_day = value.time() == time()
        return value.date().isoformat() if whole_day else value.isoformat(sep=" ")
    return str(value)
