"""Screens of how a request is served: line type, shared secondary, centre tap, and what is listed.

A workbook without phases is judged balanced.  Where a screen asks about single-phase service the
unknown is read both ways, and the verdict stands only if it is the same.
"""

from __future__ import annotations

from feederhost.study.queue.screening import SOURCES, Screen, Trial, at_most

_THREE = 3
_RULE = SOURCES["screen_secondary_kw"]
_LISTED = {
    "spot network": ("2.2.1.3", "whether it connects to a spot network"),
    "transmission limit": ("2.2.1.9", "stability limits posted on the transmission side"),
    "no construction": ("2.2.1.10", "whether the utility has to build for it"),
}


def _clause(section: str) -> str:
    return _RULE.replace("2.2.1.7", section)


def line_type(trial: Trial) -> Screen:
    """Hold the primary line type against the connection of the transformer that serves the site.

    Three wires: a three-phase or phase-to-phase connection passes.  Four wires: an effectively
    grounded three-phase or a line-to-neutral one.  Without phases: three-phase.
    """
    site, serving = trial.site, trial.data.serving
    wires = serving.wires[serving.primary[site.node]]
    unit = serving.transformer(site.node)
    letters = len(trial.phases) or _THREE
    source = _clause("2.2.1.6")
    if not wires:
        return trial.screen("line type", source, missing=("wires of the primary line",))
    detail = f"{wires}-wire primary"
    if unit is not None and unit.connection:
        detail += f", {unit.name} {unit.connection}"
    if wires == "3" and letters > 1:
        return trial.screen("line type", source, detail=detail)
    if unit is None and letters < _THREE:
        # Straight on the primary, its phases say it: line to neutral, or phase to phase.
        return trial.screen("line type", source, holds=wires == "4" and letters == 1, detail=detail)
    if unit is None:
        missing = "the site's own transformer and its connection"
        return trial.screen("line type", source, missing=(missing,), detail=detail)
    if not unit.connection:
        missing = f"connection of transformer {unit.name}"
        return trial.screen("line type", source, missing=(missing,), detail=detail)
    grounded = unit.connection == "wye_wye"
    # On three wires only a single phase is left here: behind a delta it lies between phases.
    holds = (grounded and letters != 2) if wires == "4" else not grounded
    return trial.screen("line type", source, holds=holds, detail=detail)


def shared_secondary(trial: Trial) -> Screen:
    """Add up all generation on a shared single-phase secondary."""
    source, limit = SOURCES["screen_secondary_kw"], trial.settings.screen_secondary_kw
    serving, node = trial.data.serving, trial.site.node
    name = "shared secondary"
    if len(trial.phases) == _THREE:
        return trial.screen(name, source, detail="three-phase service")
    unit = serving.transformer(node)
    if unit is None:
        unknown = () if trial.phases else ("phases",)
        return trial.screen(
            name, source, threshold=limit, unit="kW",
            missing=(*unknown, "the transformer that serves it"),
        )  # fmt: skip
    head = int(serving.service[node])
    total = trial.feeder.kw(float(trial.below[head]))
    holds = at_most(total, limit, trial.settings)
    missing: tuple[str, ...] = ()
    if not holds and not trial.phases:
        missing = ("phases",)
    elif not holds and trial.data.loads[head] <= 1:
        missing = ("how many customers share the secondary",)
    return trial.screen(
        name, source, quantity=total, threshold=limit, unit="kW", holds=holds, missing=missing,
        detail=f"secondary of {unit.name}",
    )  # fmt: skip


def centre_tap(trial: Trial) -> Screen:
    """Hold the imbalance of a 240 V service against the rating of its transformer.

    The worst that can be is all of the site on one side.  No sheet says on which side a plant
    stands, so that more than the threshold is left open and never fails.
    """
    source, settings = SOURCES["screen_imbalance_pct"], trial.settings
    name, limit = "centre-tap imbalance", settings.screen_imbalance_pct
    if len(trial.phases) == _THREE:
        return trial.screen(name, source, detail="three-phase service")
    unit = trial.data.serving.transformer(trial.site.node)
    if unit is None:
        unknown = () if trial.phases else ("phases",)
        return trial.screen(
            name, source, threshold=limit, unit="%",
            missing=(*unknown, "the transformer that serves it"),
        )  # fmt: skip
    if not at_most(unit.kv, settings.screen_centre_tap_kv, settings):
        return trial.screen(name, source, detail=f"{unit.kv:g} kV service")
    share = 100 * trial.own / unit.rating
    holds = at_most(share, limit, settings)
    sides = "which side of the 240 V service it feeds"
    missing = () if holds else (sides,) if trial.phases else ("phases", sides)
    return trial.screen(
        name, source, quantity=share, threshold=limit, unit="%", holds=holds, missing=missing,
        detail=f"all of it on one side of {unit.name}",
    )  # fmt: skip


def listed(trial: Trial, name: str) -> Screen:
    """Return a screen that no workbook can answer: named, never counted."""
    section, missing = _LISTED[name]
    return trial.screen(name, _clause(section), missing=(missing,), counted=False)


LISTED = tuple(_LISTED)
