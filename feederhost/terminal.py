"""What a person, or a machine, reads on the terminal."""

from __future__ import annotations

import json
import math
import sys
import textwrap
import time
from typing import Any

import click

_WIDTH = 79
_PATIENCE = 1.0  # seconds before a stage gets a progress bar


class ProgressLine:
    """A progress bar on standard error for any stage that takes longer than a second.

    Silent when standard error is not a terminal.
    """

    def __init__(self, quiet: bool) -> None:
        self.on = not quiet and sys.stderr.isatty()
        self.stage = ""
        self.since = 0.0
        self.done = 0
        self.bar: Any = None

    def __enter__(self) -> ProgressLine:
        return self

    def __exit__(self, *_: object) -> None:
        self._close()

    def __call__(self, stage: str, done: int, total: int) -> None:
        """Take note that ``done`` of ``total`` steps of a stage are done."""
        if not self.on:
            return
        now = time.monotonic()
        if stage != self.stage:
            self._close()
            self.stage, self.since, self.done = stage, now, 0
        if self.bar is None and now - self.since > _PATIENCE and done < total:
            self.bar = click.progressbar(length=total, label=f"{stage:<22}", file=sys.stderr)
            self.bar.__enter__()
            self.done = 0
        if self.bar is not None:
            self.bar.update(done - self.done)
            self.done = done

    def _close(self) -> None:
        if self.bar is not None:
            self.bar.render_finish()
            self.bar = None


def as_json(value: object) -> str:
    """Return strict JSON: blanks and numbers that are not finite become null."""
    return json.dumps(_plain(value), indent=1, ensure_ascii=False, allow_nan=False)


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    if hasattr(value, "item"):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def host_lines(overview: dict[str, Any]) -> list[str]:
    """Return the summary of a `host` run, at most 79 columns wide."""
    lines = [*_title(overview), ""]
    lines.append(f"{'':<10}{'rows':>6}  {'smallest kW':<22}{'median kW':>10}  largest kW")
    for row in overview["technologies"]:
        if "smallest_kw" in row:
            low = f"{_sign(overview, row, 'smallest_at')}{row['smallest_kw']:,.0f}"
            low += f" at {row['smallest_at']}"
            high = f"{_sign(overview, row, 'largest_at')}{row['largest_kw']:,.0f}"
            high += f" at {row['largest_at']}"
            lines.append(
                f"{row['technology']:<10}{row['rows']:>6}  {low:<22}{row['median_kw']:>10,.0f}  "
                f"{high}"
            )
        else:
            lines.append(f"{row['technology']:<10}{row['rows']:>6}  no value")
        met = ", ".join(f"{name} {count}" for name, count in row["limits"].items() if name)
        lines += textwrap.wrap(
            f"first limits: {met}", _WIDTH, initial_indent=" " * 18, subsequent_indent=" " * 18
        )
    lines.append("")
    lines.append("proof     " + _tally(overview["proof"]))
    lines.append("state     " + _tally(overview["state"]))
    lines += _warned(overview)
    lines += _cautions(overview)
    return lines


def _sign(overview: dict[str, Any], row: dict[str, Any], key: str) -> str:
    """Return ">= " where the value named by ``key`` is the search cap, not a limit."""
    capped = any(
        h["state"] == "capped" and h["technology"] == row["technology"] and h["node"] == row[key]
        for h in overview["hosting"]
    )
    return ">= " if capped else ""


def check_lines(overview: dict[str, Any]) -> list[str]:
    """Return the summary of a `check` run, at most 79 columns wide."""
    lines = [*_title(overview), ""]
    lines.append(f"{'case':<18}{'loss kW':>9}{'head kW':>10}  {'lowest pu':<17}{'highest pu':<17}")
    for case in overview["base_cases"]:
        low = f"{case['lowest_pu']:.4f} {_short(case['lowest_node'], 9)}"
        high = f"{case['highest_pu']:.4f} {_short(case['highest_node'], 9)}"
        lines.append(
            f"{_short(case['case'], 17):<18}{case['loss_kw']:>9,.1f}{case['head_kw']:>10,.1f}  "
            f"{low:<17}{high:<17}".rstrip()
        )
        if case["taps"]:
            lines.append(f"{'':<18}taps: {_short(case['taps'], _WIDTH - 24)}")
    lines.append("")
    for row in overview["conditions"]:
        margin = f" ({row['margin']:.4g})" if isinstance(row["margin"], float) else ""
        lines += textwrap.wrap(
            f"{row['holds']:<11}{row['condition']}{margin}", _WIDTH, subsequent_indent=" " * 11
        )
    shown = [f for f in overview["audit"] if f["severity"] == "warning"]
    if shown:
        lines.append("")
    for f in shown:
        place = " ".join(str(p) for p in (f["sheet"], f["row"] or "", f["column"]) if p)
        text = f"warning {place}: {f['finding']}"
        text += f" - {f['suggestion']}" if f["suggestion"] else ""
        lines += textwrap.wrap(text, _WIDTH, subsequent_indent="    ")
    return lines + _warned(overview)


def screen_lines(overview: dict[str, Any]) -> list[str]:
    """Return the summary of a `screen` run, at most 79 columns wide."""
    lines = [*_title(overview), ""]
    lines.append(f"{'request':<14}{'node':<10}{'asked kW':>10}{'fits kW':>10}  answer")
    for row in overview["requests"]:
        asked, fits = (_figure(row[key]) for key in ("asked_kw", "fits_kw"))
        lines.append(
            f"{_short(row['request'], 13):<14}{_short(row['node'], 9):<10}{asked:>10}{fits:>10}"
            f"  {row['answer']}"
        )
        why = [str(row["criterion"] or ""), f"at {row['element']}" if row["element"] else ""]
        why.append(f"in {row['case']}" if row["case"] else "")
        told = " ".join(w for w in why if w)
        if told:
            lines += textwrap.wrap(
                told, _WIDTH, initial_indent=" " * 46, subsequent_indent=" " * 46
            )
    lines.append("")
    lines.append("answers   " + _tally(overview["answer"]))
    lines.append("proof     " + _tally(overview["proof"]))
    lines.append(f"reserve   {overview['reserve']}")
    lines += [f"withdrawn {text}" for text in overview["withdrawn"]]
    return lines + _warned(overview) + _cautions(overview)


def _figure(value: object) -> str:
    """Return a number of kW as shown; blank where there is none."""
    if not isinstance(value, int | float) or not math.isfinite(value):
        return "-"
    return f"{value:,.1f}".removesuffix(".0")


def _title(overview: dict[str, Any]) -> list[str]:
    date = overview["data_date"] or "not given"
    number = len(overview["cases"])
    cases = f"{number} case" + ("s" if number != 1 else "")
    text = f"{overview['feeder']}: {overview['nodes']} nodes, {cases}, data of {date}"
    return textwrap.wrap(text, _WIDTH)


def _tally(count: dict[str, int]) -> str:
    return ", ".join(f"{name} {number}" for name, number in count.items())


def _warned(overview: dict[str, Any]) -> list[str]:
    warnings, notes = overview["warnings"], overview["notes"]
    return [
        f"audit     {warnings} warning{'' if warnings == 1 else 's'}, "
        f"{notes} note{'' if notes == 1 else 's'}"
    ]


def _cautions(overview: dict[str, Any]) -> list[str]:
    lines = []
    for text in overview["cautions"]:
        lines += textwrap.wrap(f"caution   {text}", _WIDTH, subsequent_indent=" " * 10)
    return lines


def _short(text: str, width: int) -> str:
    return text if len(text) <= width else text[: width - 1] + "~"
