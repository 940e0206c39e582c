"""A plain-text page per request, drafted for the engineer's review."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Sequence

from feederhost.schema import Answer, Proof
from feederhost.study.load import Loaded
from feederhost.study.queue.sheets import Page
from feederhost.study.summary import NOT_COVERED, cautions

HEADING = "Draft for the engineer's review - not a determination"
_WIDTH = 76
_WORDS = {
    Answer.FITS: "The size asked for fits, and every rule screen that counts has passed.",
    Answer.FITS_SCREENS_OPEN: "It passes the power flow; rule screens failed or lack data.",
    Answer.FITS_WITH_REMEDY: "The size asked for fits only with one of the remedies below.",
    Answer.FITS_UP_TO: "A smaller size fits.",
    Answer.DOES_NOT_FIT: "Nothing fits at this node as the feeder stands.",
    Answer.DATA_FAULT: "The request cannot be judged: its data have a fault.",
}


def letters(loaded: Loaded, pages: Sequence[Page]) -> dict[str, str]:
    """Return file name and text of every request's letter, in queue order."""
    written: dict[str, str] = {}
    for at, page in enumerate(pages):
        own = page.request
        stem = re.sub(r"[^A-Za-z0-9._-]+", "_", str(own["request"])).strip("._") or "request"
        written[f"{own['order']:04d}_{stem}.txt"] = letter(loaded, pages[:at], page)
    return written


def letter(loaded: Loaded, before: Sequence[Page], page: Page) -> str:
    """Return one letter: asked, answer, why, what would fit, not studied, cautions.

    Other customers appear only as a number of requests and their sum.
    """
    feeder, own = loaded.feeder, page.request
    lines = [HEADING, "=" * len(HEADING), ""]
    lines += _pair("feeder", f"{feeder.name}, data of {feeder.notes.get('data_date', 'not given')}")
    lines += _pair("request", f"{own['request']}, received {own['received'] or 'no date given'}")
    asked = own.get("asked_kw")
    size = "see below" if asked is None else f"{asked:,.1f} kW of {own['technology']}"
    lines += _pair("asked", f"{size} at node {own['node']}")
    lines += ["", "Answer"]
    answer = Answer(str(own["answer"]))
    if own["proof"] == Proof.FAILED:
        lines += _text(f"{answer}: no size is given, for the AC check did not confirm one.")
    else:
        lines += _text(f"{answer}: {_WORDS[answer]}")
    if own.get("fits_kw") is not None:
        lines += _text(f"Fits without a remedy: {own['fits_kw']:,.1f} kW ({own['proof']}).")
    if own["flags"]:
        lines += _text(f"To know: {own['flags']}.")
    lines += _why(before, page)
    lines += _fitting(page)
    lines += ["", "Not studied"]
    lines += [part for text in NOT_COVERED for part in _text(text)]
    lines += ["", "Cautions"]
    lines += [part for text in cautions(loaded, feeder) for part in _text(text)]
    return "\n".join(lines) + "\n"


def _why(before: Sequence[Page], page: Page) -> list[str]:
    own = page.request
    lines = ["", "Why"]
    if own.get("criterion") and own["answer"] != Answer.DATA_FAULT:
        where = f" at {own['element']}" if own.get("element") else ""
        when = f" in case {own['case']}" if own.get("case") else ""
        lines += _text(f"Met first: {own['criterion']}{where}{when}.")
        if own.get("value_at_limit") is not None:
            lines += _text(
                f"Measured {own['value_at_limit']:,.4g} against {own['limit_value']:,.4g} "
                f"{own['unit']}."
            )
    held = [float(str(p.queue["reserved_kw"])) for p in before if p.queue["reserved_kw"]]
    lines += _text(f"In place before it: {len(held)} earlier requests, {sum(held):,.0f} kW.")
    for key, text in (
        ("depends_on", "The answer depends on {} of them."),
        ("provisional_on", "Provisional: {} earlier requests have no settled size."),
    ):
        if own[key]:
            lines += _text(text.format(len(str(own[key]).split(", "))))
    for s in page.screens:
        if s["verdict"] != "pass":
            missing = f" (missing: {s['missing']})" if s["missing"] else ""
            lines += _text(f"Screen {s['screen']}: {s['verdict']}{missing}.")
    return lines


def _fitting(page: Page) -> list[str]:
    if not page.remedies:
        return []
    lines = ["", "What would fit"]
    for r in page.remedies:
        size = "no number" if r["kw"] is None else f"{r['kw']:,.1f} kW"
        note = f"; {r['note']}" if r["note"] else ""
        lines += _text(f"{r['remedy']}: {r['setting']} - {size}{note}")
    return lines


def _pair(key: str, value: str) -> list[str]:
    return textwrap.wrap(f"{key:<10}{value}", _WIDTH, subsequent_indent=" " * 10)


def _text(text: str) -> list[str]:
    return textwrap.wrap(text, _WIDTH, initial_indent="  ", subsequent_indent="  ")
