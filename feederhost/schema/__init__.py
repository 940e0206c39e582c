"""The columns of every sheet, in and out: the single truth for reader, writer, template, docs.

Names of sheets, columns, states, proofs and criteria are the public interface: add, never
rename.  An input column with ``units`` is written with one of them as its suffix
(``length_km``, ``length_ft``); the first is the unit the checked tables carry.
"""

from feederhost.schema.columns import (
    CHOICE,
    LENGTH,
    NUMBER,
    PHASES,
    TEXT,
    UNIT_FACTORS,
    Column,
    Sheet,
)
from feederhost.schema.inputs import (
    BASES,
    BUILT_IN_CASES,
    BUILT_IN_TECHNOLOGIES,
    GUIDE,
    INPUT,
    MOST_CASES,
    PHASE_PAIRS,
    STATES_OF_LINE,
)
from feederhost.schema.results import RESULT
from feederhost.schema.words import LIMIT_CRITERIA, Answer, Criterion, Proof, State

__all__ = [
    "BASES",
    "BUILT_IN_CASES",
    "BUILT_IN_TECHNOLOGIES",
    "CHOICE",
    "GUIDE",
    "INPUT",
    "LENGTH",
    "LIMIT_CRITERIA",
    "MOST_CASES",
    "NUMBER",
    "PHASES",
    "PHASE_PAIRS",
    "RESULT",
    "STATES_OF_LINE",
    "TEXT",
    "UNIT_FACTORS",
    "Answer",
    "Column",
    "Criterion",
    "Proof",
    "Sheet",
    "State",
]
