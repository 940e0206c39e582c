"""One request put to the rule screens: generation by nameplate, and a screen's verdict."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, fields

import numpy as np

from feederhost.feeder.model import IMPORT, Feeder
from feederhost.flow.shortcircuit import infeed
from feederhost.flow.tree import Floats, subtree_sum
from feederhost.settings import Settings
from feederhost.study.queue.screen_data import ScreenData
from feederhost.study.queue.sites import Site

PASS, FAIL, OPEN = "pass", "fail", "not assessed"
SOURCES = {f.name: str(f.metadata["source"]) for f in fields(Settings)}


@dataclass(frozen=True)
class Screen:
    """One screen of one request.

    Attributes
    ----------
    request, screen : str
    quantity, threshold : float
        What was measured and what it is held to; NaN: not known, or no number.
    unit : str
        Unit of both.
    verdict : str
        "pass", "fail" or "not assessed".
    missing : str
        What is missing where it is not assessed.
    source : str
        Where the rule stands.
    counted : bool
        Whether the answer of the request heeds it.
    detail : str
        Where and when it was measured.
    """

    request: str
    screen: str
    quantity: float
    threshold: float
    unit: str
    verdict: str
    missing: str
    source: str
    counted: bool = True
    detail: str = ""


@dataclass(frozen=True, eq=False)
class Trial:
    """A request at a size, with the earlier ones at theirs.

    Attributes
    ----------
    at : int
        Number of the site.
    sizes : mapping of int to float
        Sizes of the earlier sites, the site itself left out.
    size : float
    own, own_infeed : float
        Nameplate generation and fault current of the site itself.
    below : (n,) float
        Nameplate generation at and below every node, existing, earlier and this.
    infeed : float
        Fault current that all of it adds.
    """

    data: ScreenData
    at: int
    sizes: Mapping[int, float]
    size: float
    own: float
    own_infeed: float
    below: Floats
    infeed: float

    @property
    def site(self) -> Site:
        """The request."""
        return self.data.line.sites[self.at]

    @property
    def feeder(self) -> Feeder:
        """The feeder."""
        return self.data.line.feeder

    @property
    def settings(self) -> Settings:
        """Settings of the feeder."""
        return self.feeder.settings

    @property
    def phases(self) -> str:
        """Phases the site connects to; blank: not known."""
        return self.site.phases or self.data.serving.phases[self.site.node]

    def screen(
        self,
        name: str,
        source: str,
        *,
        quantity: float = math.nan,
        threshold: float = math.nan,
        unit: str = "",
        holds: bool = True,
        missing: tuple[str, ...] = (),
        detail: str = "",
        counted: bool = True,
    ) -> Screen:
        """Return the screen with its verdict: open where anything is missing."""
        verdict = OPEN if missing else PASS if holds else FAIL
        return Screen(
            self.site.request, name, quantity, threshold, unit, verdict, "; ".join(missing),
            source, counted, detail,
        )  # fmt: skip


def trial(data: ScreenData, at: int, sizes: Mapping[int, float], size: float) -> Trial:
    """Add up the generation that a request finds and its own."""
    sites = data.line.sites
    others = {i: g for i, g in sizes.items() if i != at and g > 0}
    generation, fault = np.array(data.generation), data.infeed
    for i, g in {**others, at: size}.items():
        generation[sites[i].node] += nameplate(sites[i], g)
        fault += fault_infeed(data, sites[i], g)
    return Trial(
        data=data,
        at=at,
        sizes=others,
        size=size,
        own=nameplate(sites[at], size),
        own_infeed=fault_infeed(data, sites[at], size),
        below=subtree_sum(data.line.feeder.tree, generation),
        infeed=fault,
    )


def nameplate(site: Site, size: float) -> float:
    """Return what a site of a size counts with: the AC ratings that export, or its inverter."""
    out = sum(p.rating for p in site.parts if p.technology.direction != IMPORT)
    return min(size * out / site.asked, site.inverter) if out else 0.0


def fault_infeed(data: ScreenData, site: Site, size: float) -> float:
    """Return the fault current a site of a size adds: by nameplate, whatever export is agreed.

    The rated current is that of the ratings at their power factors, capped by the inverter.  An
    inverter larger than that counts whole at the size asked for, and in proportion below it.
    """
    parts = [p for p in site.parts if p.technology.direction != IMPORT]
    apparent = np.array([p.rating * math.hypot(1, p.reactive) for p in parts])
    whole = float(apparent.sum())
    if not whole:
        return 0.0
    own = infeed(apparent, np.array([data.kinds[p.technology.name].multiple for p in parts]))
    rated = whole * size / site.asked
    if math.isfinite(site.inverter):
        rated = min(rated * max(1.0, site.inverter / whole), site.inverter)
    return own / whole * rated


def at_most(quantity: float, threshold: float, settings: Settings) -> bool:
    """Whether a sum stays within a threshold; equal but for rounding counts as within."""
    return quantity <= threshold * (1 + settings.screen_tolerance)


def below(quantity: float, threshold: float, settings: Settings) -> bool:
    """Whether a sum stays below a threshold; equal but for rounding does not."""
    return quantity < threshold * (1 - settings.screen_tolerance)
