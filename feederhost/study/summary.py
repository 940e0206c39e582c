"""The `summary`, `run` and `timing` sheets, and the few lines a terminal shows."""

from __future__ import annotations

import importlib.metadata
import math
import platform
import statistics
from collections import Counter
from dataclasses import fields

import pandas as pd

from feederhost import __version__
from feederhost.feeder.model import Feeder
from feederhost.schema import RESULT, Proof, State
from feederhost.study.load import Loaded
from feederhost.study.options import Options
from feederhost.study.results import counts
from feederhost.study.rows import Hosting, HostingRow

NOT_PHASED = "not valid on single-phase laterals: no phases are given, judged balanced"
CAUTIONS = (
    "a screening estimate: it reserves no capacity and promises no connection",
    "values are one at a time: they must not be added across nodes",
    "normal switching only, at the data date shown",
    "local codes, utility standards and the licensed engineer in charge decide",
)
NOT_COVERED = (
    "protection coordination, grounding and ground-fault overvoltage, islanding, harmonics, "
    "flicker, transient and dynamic stability are not studied",
)
_LIBRARIES = ("numpy", "scipy", "pandas", "cvxpy", "ecos", "clarabel", "networkx", "openpyxl")


def summary_table(
    loaded: Loaded, hosting: Hosting, options: Options, base_complete: bool
) -> pd.DataFrame:
    """Return the `summary` sheet."""
    feeder = hosting.feeder
    rows: list[tuple[str, object]] = [("feeder", feeder.name)]
    rows += [(key, feeder.notes.get(key, "not given")) for key in ("data_date", "switching_state")]
    rows.append(("nodes", len(feeder.nodes)))
    rows += [("case", f"{c.name} (basis {c.basis})") for c in _few(feeder)]
    if len(feeder.cases) > _SHOWN:
        rows.append(("case", f"and {len(feeder.cases) - _SHOWN} more, see base_cases"))
    rows += [(f"state {k}", v) for k, v in counts(hosting)["state"].items()]
    rows += [(f"proof {k}", v) for k, v in counts(hosting)["proof"].items()]
    for line in technology_lines(hosting):
        rows.append((f"hosting {line['technology']}", _sentence(line)))
    rows += _limits_used(feeder)
    if not base_complete:
        rows.append(("base", "lists the binding cases and those of lowest and highest voltage"))
    rows.append(("unlimited elements", ", ".join(unlimited(feeder)) or "none"))
    rows += [("caution", text) for text in cautions(loaded, feeder)]
    if options.cases:
        rows.append(("caution", "only these cases were looked at: " + ", ".join(options.cases)))
    rows += [("not covered", text) for text in NOT_COVERED]
    return _pairs("summary", rows)


_SHOWN = 24


def _few(feeder: Feeder) -> tuple:
    return feeder.cases[:_SHOWN]


def _pairs(sheet: str, rows: list[tuple[str, object]]) -> pd.DataFrame:
    return pd.DataFrame(rows, columns=list(RESULT[sheet].names), dtype=object)


def cautions(loaded: Loaded, feeder: Feeder) -> list[str]:
    """Return the cautions that this feeder calls for, the heaviest first."""
    out = [NOT_PHASED] if loaded.phases_assumed else []
    out += CAUTIONS
    out.append(f"data date: {feeder.notes.get('data_date', 'not given')}")
    if feeder.settings.v_min_primary_pu is None and float(feeder.kv.max()) > (
        feeder.settings.shared_kv
    ):
        out.append(
            "nodes above 1 kV are held to the service limits: transformer and service drop "
            "beyond them are not in the model"
        )
    return out


def unlimited(feeder: Feeder) -> list[str]:
    """Name the lines, switches and regulators whose rating does not limit."""
    return [
        e.name for k, e in enumerate(feeder.edges)
        if e is not None and not math.isfinite(float(feeder.rating[k, 0]))
    ]  # fmt: skip


def _limits_used(feeder: Feeder) -> list[tuple[str, object]]:
    settings = feeder.settings
    rows: list[tuple[str, object]] = []
    for f in fields(settings):
        value = getattr(settings, f.name)
        if f.metadata["sheet"] and value is not None:
            unit = f.metadata["unit"].replace("-", "")
            rows.append((f"limit {f.name}", f"{value:g} {unit}".strip()))
    for name, value in (
        ("bank rating", feeder.bank), ("head export", feeder.export_limit),
        ("head import", feeder.import_limit),
    ):  # fmt: skip
        if math.isfinite(value):
            unit = "kVA" if name == "bank rating" else "kW"
            rows.append((f"limit {name}", f"{feeder.kw(value):g} {unit}"))
    return rows


def technology_lines(hosting: Hosting) -> list[dict[str, object]]:
    """Per technology: rows with a number, smallest, median and largest hosting, first limits."""
    feeder = hosting.feeder
    lines = []
    for name in dict.fromkeys(r.candidate.technology for r in hosting.rows):
        own = [r for r in hosting.rows if r.candidate.technology == name]
        valued = [r for r in own if math.isfinite(r.hosting)]
        line: dict[str, object] = {"technology": name, "rows": len(own), "with_value": len(valued)}
        if valued:
            low = min(valued, key=lambda r: r.hosting)
            high = max(valued, key=lambda r: r.hosting)
            line |= {
                "smallest_kw": feeder.kw(low.hosting), "smallest_at": _place(feeder, low),
                "median_kw": statistics.median(feeder.kw(r.hosting) for r in valued),
                "largest_kw": feeder.kw(high.hosting), "largest_at": _place(feeder, high),
                "capped": sum(r.state is State.CAPPED for r in valued),
            }  # fmt: skip
        line["limits"] = dict(Counter(str(r.criterion) for r in own).most_common())
        lines.append(line)
    return lines


def _place(feeder: Feeder, row: HostingRow) -> str:
    return feeder.nodes[row.candidate.node]


def _sentence(line: dict[str, object]) -> str:
    met = ", ".join(f"{k} {v}" for k, v in line["limits"].items())  # type: ignore[attr-defined]
    if "smallest_kw" not in line:
        return f"no value in {line['rows']} rows ({met})"
    return (
        f"smallest {line['smallest_kw']:,.0f} kW at {line['smallest_at']}, "
        f"median {line['median_kw']:,.0f} kW, "
        f"largest {line['largest_kw']:,.0f} kW at {line['largest_at']}; first limits: {met}"
    )


def run_table(loaded: Loaded, hosting: Hosting | None, options: Options) -> pd.DataFrame:
    """Return the `run` sheet: versions, settings and digests; no time stamps."""
    rows: list[tuple[str, object]] = [
        ("feederhost", __version__), ("python", platform.python_version())
    ]  # fmt: skip
    for name in _LIBRARIES:
        try:
            rows.append((name, importlib.metadata.version(name)))
        except importlib.metadata.PackageNotFoundError:
            rows.append((name, "not installed"))
    if hosting is not None:
        rows.append(("solver", hosting.solver))
        solved = [r.evidence.relaxed for r in hosting.rows if r.evidence and r.evidence.relaxed]
        rows.append(("rows solved by the conic solver", len(solved)))
        rows.append(("of these by clarabel", sum(s.answer.solver == "clarabel" for s in solved)))
        gaps = [
            abs(r.evidence.relaxed.g / r.rating - 1)
            for r in hosting.rows
            if r.proof is Proof.PROVEN and r.rating > 0 and r.evidence and r.evidence.relaxed
        ]
        rows.append(("largest disagreement of proven rows", max(gaps, default=0.0)))
    rows += [
        ("option nodes", ", ".join(options.nodes) or "all"),
        ("option technologies", ", ".join(options.technologies) or "all"),
        ("option cases", ", ".join(options.cases) or "all"),
        ("option plain", "yes" if options.plain else "sample"),
    ]
    settings = loaded.feeder.settings
    for f in fields(settings):
        value = getattr(settings, f.name)
        rows.append((f"setting {f.name}", "none" if value is None else value))
    rows += [(f"sha256 {sheet}", digest) for sheet, digest in loaded.digests.items()]
    return _pairs("run", rows)


def timing_table(rows: list[tuple[str, object]]) -> pd.DataFrame:
    """Return the `timing` sheet."""
    return _pairs("timing", rows)


def flags_for_all(loaded: Loaded, options: Options) -> str:
    """Return the flags that every row of a run carries."""
    flags = ["phases_assumed"] if loaded.phases_assumed else []
    if options.cases:
        flags.append("only cases asked for: " + ", ".join(options.cases))
    return "; ".join(flags)
