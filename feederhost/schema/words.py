"""Criteria, states, proofs and answers: the words of a result."""

from __future__ import annotations

from enum import StrEnum


class Criterion(StrEnum):
    """What stops a rating from growing."""

    VOLTAGE_HIGH = "voltage_high"
    VOLTAGE_LOW = "voltage_low"
    VOLTAGE_CHANGE = "voltage_change"
    LINE_RATING = "line_rating"
    TRANSFORMER_RATING = "transformer_rating"
    REGULATOR_RATING = "regulator_rating"
    BANK_RATING = "bank_rating"
    HEAD_EXPORT = "head_export"
    HEAD_IMPORT = "head_import"
    UNBALANCE = "unbalance"
    SEARCH_CAP = "search_cap"
    DATA_FAULT = "data_fault"
    AC_CHECK = "ac_check"
    NEVER_RUNS = "never_runs"


# The criteria a search can meet, in the order of the `criteria` sheet.
LIMIT_CRITERIA = tuple(Criterion)[: tuple(Criterion).index(Criterion.SEARCH_CAP)]


class State(StrEnum):
    """What happened to a row."""

    HOSTED = "hosted"
    HOSTED_BASE_VIOLATION = "hosted_base_violation"
    CAPPED = "capped"
    NOT_ANALYSED = "not_analysed"


class Proof(StrEnum):
    """How far a row's number can be trusted."""

    PROVEN = "proven"
    BRACKETED = "bracketed"
    AC_ONLY = "ac_only"
    NOT_NEEDED = "not_needed"
    FAILED = "failed"
    NONE = ""


class Answer(StrEnum):
    """What a connection request is told."""

    FITS = "fits"
    FITS_SCREENS_OPEN = "fits_screens_open"
    FITS_WITH_REMEDY = "fits_with_remedy"
    FITS_UP_TO = "fits_up_to"
    DOES_NOT_FIT = "does_not_fit"
    DATA_FAULT = "data_fault"
