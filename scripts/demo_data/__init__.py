"""The demo feeders as tables: an invented utility, Quillmere Light & Power Cooperative.

Nothing here describes a real network.  Conductor, cable and transformer figures have the
magnitudes of public catalogues; each module says how they were come by.
"""

from __future__ import annotations

from typing import Any

Rows = list[dict[str, Any]]


def table(header: str, *rows: tuple[Any, ...]) -> Rows:
    """Return rows as mappings from the words of ``header``; None is a blank cell."""
    names = header.split()
    return [dict(zip(names, row, strict=True)) for row in rows]
