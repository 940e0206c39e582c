"""Exceptions (cannot compute) and findings (what is wrong with the data, and where)."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from enum import StrEnum


class FeederhostError(Exception):
    """Base of everything this package raises on purpose; ``exit_code`` is the command's answer."""

    exit_code = 1


class OutputError(FeederhostError):
    """The result cannot be written where it was asked for."""


class UsageError(FeederhostError):
    """The question itself is off: an unknown node, technology or case was asked for."""

    exit_code = 2


class InputError(FeederhostError):
    """The input cannot be read as a feeder, or carries fatal findings.

    Attributes
    ----------
    findings : tuple of Finding
        Everything found, fatal or not, so that all of it can be mended in one go.
    """

    exit_code = 3

    def __init__(self, message: str, findings: Iterable[Finding] = ()) -> None:
        super().__init__(message)
        self.findings = tuple(findings)


class NoSolutionError(FeederhostError):
    """The base case has no power flow solution."""

    exit_code = 3


class Severity(StrEnum):
    """How much a finding weighs: fatal findings stop the feeder, the others do not."""

    FATAL = "fatal"
    WARNING = "warning"
    NOTE = "note"


@dataclass(frozen=True)
class Finding:
    """One thing the audit noticed, addressed as the spreadsheet shows it.

    ``row`` is the row number in the sheet (the header is row 1), 0 for a whole sheet.
    """

    severity: Severity
    sheet: str
    row: int
    column: str
    value: str
    finding: str
    suggestion: str = ""

    def line(self) -> str:
        """Return the one-line form ``sheet row column: problem - suggestion``."""
        place = " ".join(p for p in (self.sheet, str(self.row or ""), self.column) if p)
        text = f"{place}: {self.finding}"
        return f"{text} - {self.suggestion}" if self.suggestion else text


def fatal(findings: Iterable[Finding]) -> tuple[Finding, ...]:
    """Return the findings that stop the feeder."""
    return tuple(f for f in findings if f.severity is Severity.FATAL)
