"""Cells of a raw sheet read as what their column asks for, and what is wrong with them."""

from __future__ import annotations

import datetime as dt
import math
import re
from dataclasses import dataclass
from typing import Any

from feederhost.schema import CHOICE, NUMBER, PHASES, STATES_OF_LINE, Column

# Text columns that nothing is looked up by.
FREE_TEXT = (
    "zone", "name", "data_date", "switching_state", "prepared_by", "feeder", "received", "item",
    "unit", "currency",
)  # fmt: skip

_NUMBER_TEXT = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)(e[+-]?\d+)?", re.IGNORECASE | re.ASCII)
_NUMBER_THEN_TEXT = re.compile(r"[+-]?\d[\d.,]*\s*[^\d.,\s].*", re.ASCII | re.DOTALL)
_WHOLE_NUMBER_TEXT = re.compile(r"([+-]?\d+)\.0+", re.ASCII)
_ERROR_TEXT = re.compile(
    r"#(REF!|N/A|DIV/0!|VALUE!|NAME\?|NULL!|NUM!|SPILL!|CALC!|GETTING_DATA)", re.IGNORECASE
)
_NOT_AVAILABLE = ("n/a", "n.a.", "#n/a")
_INFINITE = ("inf", "+inf", "-inf", "infinity", "+infinity", "-infinity", "∞")
# A float beyond this has no digit left for the units, so it is no numbered name either.
_LARGEST_NUMBERED_NAME = 2.0**53

# A switch is 1 when it lets current through: N.C. is closed, N.O. is open.
_LINE_STATES = {
    "1": "closed", "true": "closed", "nc": "closed", "0": "open", "false": "open", "no": "open",
}  # fmt: skip
_ON_OFF = {"1": "on", "true": "on", "0": "off", "false": "off"}


@dataclass(frozen=True)
class Reading:
    """What a cell says: its value, or what is wrong with it.

    ``value`` is a float for NUMBER columns (NaN: blank or unusable) and a str for the others
    (``""``: blank or unusable).  ``caution`` marks a value that is usable, with a warning.
    """

    value: float | str
    problem: str = ""
    suggestion: str = ""
    caution: bool = False


def written(cell: Any) -> str:
    """Return a cell as text, the way a spreadsheet shows it; blank cells give ``""``."""
    if cell is None:
        return ""
    if isinstance(cell, str):
        return cell.strip()
    if isinstance(cell, dt.datetime):
        if cell != cell:  # NaT, the blank among the dates
            return ""
        midnight = cell.time() == dt.time()
        return cell.date().isoformat() if midnight else cell.isoformat(sep=" ")
    if hasattr(cell, "item"):  # numpy scalars
        cell = cell.item()
    if isinstance(cell, bool):
        return str(cell).upper()
    if isinstance(cell, float):
        if math.isnan(cell):
            return ""
        return str(int(cell)) if _is_whole(cell) else repr(cell)
    return _of_other_type(cell)


def name(cell: Any) -> str:
    """Return a cell as a name: ``101``, ``101.0`` and ``" 101 "`` are the same one."""
    text = written(cell)
    whole = _WHOLE_NUMBER_TEXT.fullmatch(text)
    return whole.group(1) if whole else text


def read_cell(cell: Any, column: Column, factor: float = 1.0) -> Reading:
    """Read one cell as its column asks.

    Parameters
    ----------
    cell : str, int, float, bool, date or None
        The raw cell.
    column : Column
        What the column holds.
    factor : float
        Turns the written number into the column's canonical unit.
    """
    text = written(cell)
    empty: float | str = math.nan if column.kind == NUMBER else ""
    if not text:
        if column.required:
            return Reading(empty, "blank, and a value is needed", f"fill in: {column.meaning}")
        return Reading(empty)
    if text.startswith("="):
        return Reading(
            empty, "a formula that was never calculated",
            "open the workbook in a spreadsheet program, let it calculate, and save it",
        )  # fmt: skip
    if _ERROR_TEXT.fullmatch(text):
        return Reading(empty, f"the spreadsheet error {text}", "mend the formula behind it")
    if text.lower() in _NOT_AVAILABLE:
        return Reading(empty, "not available", "give a value, or leave the cell blank if it may be")
    if column.kind == NUMBER:
        return _read_number(cell, text, column, factor)
    if column.kind == CHOICE:
        return _read_choice(name(cell), column)
    if column.kind == PHASES:
        return _read_phases(text)
    return _read_text(cell, column)


def _read_number(cell: Any, text: str, column: Column, factor: float) -> Reading:
    if text.lower() in column.words:
        return Reading(math.inf)
    if text.lower() in _INFINITE:
        return Reading(math.nan, "an infinite value", _words_hint(column, "give a finite number"))
    if isinstance(cell, (dt.date, dt.time)):
        return Reading(
            math.nan, "a date where a number belongs", "format the cell as a number and re-enter it"
        )
    if not _NUMBER_TEXT.fullmatch(text):
        return Reading(math.nan, "text where a number belongs", _text_hint(text, column))
    number = float(text)
    value = number * factor
    if not math.isfinite(value):
        return Reading(math.nan, "a number beyond all bounds", "give the value in its usual size")
    return _within_bounds(number, value, column)


def _within_bounds(number: float, value: float, column: Column) -> Reading:
    if column.name == "power_factor" and number < 0:
        return Reading(
            math.nan, "a negative power factor",
            "give it between 0 and 1, and `absorb` or `inject` in the column vars",
        )  # fmt: skip
    if column.lowest is not None and number < column.lowest:
        what = "negative" if column.lowest == 0 else f"below {column.lowest:g}"
        return Reading(math.nan, f"{what}, where that cannot be", f"check: {column.meaning}")
    if column.above is not None and number <= column.above:
        return Reading(math.nan, f"not above {column.above:g}", f"check: {column.meaning}")
    if column.highest is not None and number > column.highest:
        percent = column.name == "power_factor" and number <= 100
        hint = "percent? 95 % is written 0.95" if percent else f"check: {column.meaning}"
        return Reading(math.nan, f"above {column.highest:g}, where that cannot be", hint)
    return Reading(value)


def _read_choice(text: str, column: Column) -> Reading:
    word = text.lower()
    for choice in column.choices:
        if word == choice.lower():
            return Reading(choice)
    aliases: dict[str, str] = {}
    if column.choices == STATES_OF_LINE:
        aliases = _LINE_STATES
    elif column.choices == ("on", "off"):
        aliases = _ON_OFF
    plain = word.replace(".", "").replace("/", "")
    if plain in aliases:
        return Reading(aliases[plain])
    return Reading("", "not one of the words read here", f"write {' or '.join(column.choices)}")


def _read_phases(text: str) -> Reading:
    letters = sorted(text.upper())
    if len(set(letters)) == len(letters) and set(letters) <= set("ABC"):
        return Reading("".join(letters))
    return Reading("", "not a set of phases", "write ABC, AB, BC, AC, A, B or C")


def _read_text(cell: Any, column: Column) -> Reading:
    text = name(cell)
    # Spreadsheets turn names such as 3-4 into a date unasked.
    if isinstance(cell, (dt.date, dt.time)) and column.name not in FREE_TEXT:
        return Reading(
            text, "a date where a name belongs",
            "if the name is not a date, format the cell as text and re-enter it", True,
        )  # fmt: skip
    return Reading(text)


def _words_hint(column: Column, otherwise: str) -> str:
    return f"write {' or '.join(column.words)}" if column.words else otherwise


def _text_hint(text: str, column: Column) -> str:
    if re.fullmatch(r"[+-]?[\d.]+(,\d+)+\.?\d*", text, re.ASCII):
        return "write the number without commas, with a point for decimals"
    if _NUMBER_THEN_TEXT.fullmatch(text):
        return "write the number alone; the unit belongs in the header"
    return _words_hint(column, f"give a number: {column.meaning}")


def _is_whole(number: float) -> bool:
    return number.is_integer() and abs(number) < _LARGEST_NUMBERED_NAME


def _of_other_type(cell: Any) -> str:
    try:
        return str(cell).strip()
    except ValueError:  # whole numbers beyond the digits Python prints
        return f"{cell:#x}"
