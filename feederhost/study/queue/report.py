"""The whole answer to the command `screen`: the queue in order, journalled, as result sheets."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import asdict
from pathlib import Path

from feederhost.errors import OutputError
from feederhost.sheets.atomic import atomic_write
from feederhost.study.base import base_cases_table
from feederhost.study.load import load_feeder
from feederhost.study.options import Options
from feederhost.study.queue.answers import Answered, Bench, answer, set_up, settled, taken_up
from feederhost.study.queue.journal import Journal, finished, heading
from feederhost.study.queue.letters import letters
from feederhost.study.queue.sheets import (
    Page,
    lay_out,
    queue_sheets,
    queue_trusted,
    signoff_table,
)
from feederhost.study.reports import (
    ALL_PROVEN,
    NOT_ALL_PROVEN,
    Clock,
    Report,
    feeder_heading,
)
from feederhost.study.results import audit_table
from feederhost.study.summary import flags_for_all, run_table, timing_table


def screen_report(path: Path, options: Options, journal: Path | None = None) -> Report:
    """Answer every connection request, and lay out the sheets of the queue.

    Parameters
    ----------
    journal : Path, optional
        Where finished requests are kept; with ``options.resume`` they are not done again.

    Raises
    ------
    InputError, NoSolutionError, UsageError
        As :func:`host_report`; also where there is no open request.
    """
    clock = Clock()
    loaded = load_feeder(path)
    clock.lap("read and check")
    bench = set_up(loaded, options)
    clock.lap("base cases")
    pages = _pages(bench, journal)
    clock.lap("requests")
    tables = queue_sheets(pages) | {
        "signoff": signoff_table(loaded, pages, bench.notes, options),
        "audit": audit_table(loaded.findings),
        "base_cases": base_cases_table(loaded.feeder, bench.base),
        "run": run_table(loaded, None, options),
        "timing": timing_table(clock.rows),
    }
    overview = feeder_heading(loaded) | {
        "solver": bench.prover.solver,
        "reserve": options.reserve,
        "answer": _count(pages, "answer"),
        "proof": _count(pages, "proof"),
        "requests": tables["requests"].to_dict("records"),
        "withdrawn": list(bench.notes),
    }
    code = ALL_PROVEN if queue_trusted(pages) else NOT_ALL_PROVEN
    return Report(tables, overview, code, letters(loaded, pages))


def _count(pages: Sequence[Page], key: str) -> dict[str, int]:
    return dict(Counter(str(p.request[key]) or "blank" for p in pages))


def _pages(bench: Bench, journal: Path | None) -> list[Page]:
    """Answer the queue in order; requests that a journal holds are taken from there."""
    flags = flags_for_all(bench.loaded, bench.options)
    about = heading(bench.loaded, bench.options)
    kept = finished(journal, about) if journal and bench.options.resume else []
    book = Journal(journal, about, kept) if journal else None
    pages: list[Page] = []
    answers: list[Answered] = []
    try:
        for at, site in enumerate(bench.line.sites):
            if at < len(kept):
                page, own = Page(**kept[at]["page"]), taken_up(site, kept[at])
            else:
                own = answer(bench, at, answers)
                page = lay_out(bench.line, own, flags)
                if book is not None:
                    book.add({"page": asdict(page), **settled(own)})
            pages.append(page)
            answers.append(own)
            bench.options.progress("requests", at + 1, len(bench.line.sites))
    finally:
        if book is not None:
            book.close(remove=False)
    return pages


def write_letters(report: Report, folder: Path | None) -> None:
    """Write one plain-text draft per request into a folder, made where it is not there.

    Raises
    ------
    OutputError
        If the folder or a file in it cannot be written.
    """
    if folder is None:
        return
    texts: dict[str, str] = report.letters
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for name, text in texts.items():
            atomic_write(folder / name, lambda scratch, text=text: _put(scratch, text))  # type: ignore[misc]
    except OSError as error:
        raise OutputError(f"cannot write letters to {folder}: {error.strerror}") from error


def _put(path: Path, text: str) -> None:
    path.write_text(text, encoding="utf-8")
