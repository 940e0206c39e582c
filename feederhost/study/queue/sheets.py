"""The queue's answers as result sheets, and the lines a terminal shows of them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import pandas as pd

from feederhost.feeder.model import Feeder
from feederhost.schema import BASES, Answer, Criterion, Proof
from feederhost.study.cases import case_scale
from feederhost.study.load import Loaded
from feederhost.study.options import Options
from feederhost.study.queue.answers import Answered, open_screens
from feederhost.study.queue.remedies import SMALLER_SIZE, Remedy
from feederhost.study.queue.screens import Screen
from feederhost.study.queue.sites import Site
from feederhost.study.queue.stops import Line
from feederhost.study.results import at_limit, in_kw, result_frame
from feederhost.study.summary import cautions, unlimited


@dataclass(frozen=True)
class Page:
    """One request laid out: its row of `requests` and `queue`, its `screens` and `remedies`.

    Plain data, so that a journal can hold it and an interrupted run take it up again.
    """

    request: dict[str, object]
    queue: dict[str, object]
    screens: list[dict[str, object]]
    remedies: list[dict[str, object]]


def lay_out(line: Line, own: Answered, flags: str) -> Page:
    """Lay out one answer; a request whose AC check failed carries no number."""
    return Page(
        request_row(line.feeder, own, flags),
        queue_row(line, own),
        [screen_row(s) for s in own.screens],
        [remedy_row(r) for r in own.remedies],
    )


def queue_sheets(pages: Sequence[Page]) -> dict[str, pd.DataFrame]:
    """Return the sheets `requests`, `screens`, `remedies` and `queue`."""
    return {
        "requests": result_frame("requests", (p.request for p in pages)),
        "screens": result_frame("screens", (s for p in pages for s in p.screens)),
        "remedies": result_frame("remedies", (r for p in pages for r in p.remedies)),
        "queue": result_frame("queue", (p.queue for p in pages)),
    }


def request_row(feeder: Feeder, own: Answered, flags: str) -> dict[str, object]:
    """Return one request as the `requests` sheet shows it."""
    site = own.site
    opened = open_screens(own.screens)
    out: dict[str, object] = {
        "request": site.request, "order": site.order, "received": site.received,
        "node": site.node_name, "technology": site.technology, "phases": site.phases,
        "answer": str(own.answer), "proof": str(own.proof),
        "depends_on": ", ".join(own.depends_on),
        "provisional_on": ", ".join(own.provisional_on),
        "screens_failed": ", ".join(s.screen for s in opened if s.verdict == "fail"),
        "screens_open": ", ".join(s.screen for s in opened if s.verdict != "fail"),
        "flags": "; ".join(f for f in (flags, *site.flags, site.fault) if f),
    }  # fmt: skip
    if own.answer is Answer.DATA_FAULT:
        out["criterion"] = str(Criterion.DATA_FAULT)
        return out
    out["input_grade"] = _grade(feeder, site)
    out["asked_kw"] = in_kw(feeder, site.asked)
    if own.proof is Proof.FAILED:
        out["criterion"] = str(Criterion.AC_CHECK)
        return out
    out["fits_kw"] = in_kw(feeder, own.fits)
    if own.stop is not None and own.fits < site.asked:
        out |= _stop(feeder, own)
    best = best_remedy(own)
    if best is not None:
        out |= {
            "best_remedy": f"{best.remedy}: {best.setting}", "remedy_kw": _number(best.kw),
            "cost_low": _number(best.cost_low), "cost_high": _number(best.cost_high),
            "currency": best.currency,
        }  # fmt: skip
    return out


def _stop(feeder: Feeder, own: Answered) -> dict[str, object]:
    stop = own.stop
    assert stop is not None
    out: dict[str, object] = {"criterion": str(stop.criterion or "")}
    if stop.study is not None:
        out["case"] = stop.study.case.name
    if stop.swing:
        out["element"] = own.site.node_name
        out["unit"] = "%"
    elif stop.posed is not None and stop.limit >= 0 and stop.criterion is not None:
        value = own.value
        if not math.isnan(value):
            out |= at_limit(feeder, stop.criterion, stop.posed, stop.limit, value)
    return out


def best_remedy(own: Answered) -> Remedy | None:
    """Return the first remedy that carries most, a smaller size aside."""
    offered = [r for r in own.remedies if not math.isnan(r.kw) and r.remedy != SMALLER_SIZE]
    return max(offered, key=lambda r: r.kw, default=None)


def _grade(feeder: Feeder, site: Site) -> str:
    used = [
        c.basis for c in feeder.cases if any(case_scale(c, p.technology) for p in site.parts)
    ]  # fmt: skip
    return max(used, key=BASES.index, default="")


def _number(value: float) -> float | None:
    return None if math.isnan(value) else value


def screen_row(own: Screen) -> dict[str, object]:
    """Return one screen as the `screens` sheet shows it."""
    return {
        "request": own.request, "screen": own.screen, "quantity": _number(own.quantity),
        "threshold": _number(own.threshold), "unit": own.unit, "verdict": own.verdict,
        "missing": own.missing, "detail": own.detail, "source": own.source,
    }  # fmt: skip


def remedy_row(own: Remedy) -> dict[str, object]:
    """Return one remedy as the `remedies` sheet shows it."""
    return {
        "request": own.request, "remedy": own.remedy, "setting": own.setting,
        "kw": _number(own.kw), "criterion": own.criterion, "proof": own.proof,
        "energy_lost_mwh": _number(own.energy_lost_mwh), "cost_low": _number(own.cost_low),
        "cost_high": _number(own.cost_high), "currency": own.currency, "note": own.note,
    }  # fmt: skip


def queue_row(line: Line, own: Answered) -> dict[str, object]:
    """Return what a request leaves at its node, as the `queue` sheet shows it."""
    room = own.reach if math.isnan(own.reach) else max(own.reach - own.reserved, 0.0)
    return {
        "order": own.site.order, "request": own.site.request,
        "reserved_kw": in_kw(line.feeder, own.reserved),
        "head_room_kw": in_kw(line.feeder, room),
    }  # fmt: skip


def signoff_table(
    loaded: Loaded, pages: Sequence[Page], notes: Sequence[str], options: Options
) -> pd.DataFrame:
    """Return the `signoff` sheet: every assumption and exception, to accept or refuse."""
    feeder = loaded.feeder
    rows: list[tuple[str, object]] = [(text, "") for text in cautions(loaded, feeder)]
    rows.append(("size reserved for earlier requests", options.reserve))
    rows += [(f"basis of case {c.name}", c.basis) for c in feeder.cases]
    rows += [("element without a limiting rating", name) for name in unlimited(feeder)]
    rows += [("withdrawn", note) for note in notes]
    rows += [(f.finding, f.line()) for f in loaded.findings if f.severity == "warning"]
    for page in pages:
        own = page.request
        if own["provisional_on"]:
            rows.append((f"answer of {own['request']} is provisional", own["provisional_on"]))
        if own["flags"]:
            rows.append((f"flags of {own['request']}", own["flags"]))
    return result_frame("signoff", ({"assumption": k, "value": v} for k, v in rows))


def queue_trusted(pages: Sequence[Page]) -> bool:
    """Whether every request has an answer that is proven or needs no proof."""
    return all(p.request["proof"] in (Proof.PROVEN, Proof.NOT_NEEDED) for p in pages)
