"""What a column and an input sheet are, and the unit suffixes a header may carry."""

from __future__ import annotations

from dataclasses import dataclass

NUMBER, TEXT, CHOICE, PHASES = "number", "text", "choice", "phases"

# Factor from a written suffix to the first suffix of its family.
UNIT_FACTORS: dict[str, float] = {
    "km": 1.0, "m": 1e-3, "ft": 0.3048e-3, "mi": 1.609344,
    "ohm_per_km": 1.0, "ohm_per_mi": 1 / 1.609344, "ohm_per_kft": 1 / 0.3048,
    "us_per_km": 1.0, "us_per_mi": 1 / 1.609344,
    "kw": 1.0, "mw": 1e3, "kvar": 1.0, "mvar": 1e3, "kva": 1.0, "mva": 1e3,
}  # fmt: skip

LENGTH = ("km", "m", "ft", "mi")
IMPEDANCE = ("ohm_per_km", "ohm_per_mi", "ohm_per_kft")
SUSCEPTANCE = ("us_per_km", "us_per_mi")
KW, KVAR, KVA = ("kw", "mw"), ("kvar", "mvar"), ("kva", "mva")
UNLIMITED = "unlimited"


@dataclass(frozen=True)
class Column:
    """One column of a sheet.

    ``name`` is the name without its unit where ``units`` are given; ``key`` is the name the
    checked tables use (``length_km``).  A column whose ``units`` are power units and whose name
    is empty is headed by the bare unit (``kw`` or ``mw``).  ``pattern`` marks a family of
    columns (``<other>_scale``).  ``lowest`` and ``above`` are the bounds ``>=`` and ``>``.
    """

    name: str
    meaning: str
    kind: str = NUMBER
    unit: str = ""
    units: tuple[str, ...] = ()
    required: bool = False
    default: float | str | None = None
    choices: tuple[str, ...] = ()
    lowest: float | None = None
    above: float | None = None
    highest: float | None = None
    words: tuple[str, ...] = ()
    pattern: bool = False
    example: float | str | None = None

    @property
    def key(self) -> str:
        """Column name in the checked tables, with the canonical unit."""
        if not self.units:
            return self.name
        return f"{self.name}_{self.units[0]}" if self.name else self.units[0]

    @property
    def headers(self) -> tuple[str, ...]:
        """Every header that may carry this column."""
        if not self.units:
            return (self.name,)
        return tuple(f"{self.name}_{u}" if self.name else u for u in self.units)


@dataclass(frozen=True)
class Sheet:
    """One input sheet: its columns, whether a feeder needs it, and what it is for."""

    name: str
    meaning: str
    columns: tuple[Column, ...]
    required: bool = False

    def column(self, key: str) -> Column:
        """Return the column with the given checked-table key."""
        return next(c for c in self.columns if c.key == key)
