"""Write the demo feeders of Quillmere Light & Power Cooperative, an invented utility.

Usage: ``python scripts/make_feeders.py [FOLDER]`` (default: ``feeders`` beside this script's
folder).  Place, people and networks are made up; conductors, cables and transformers have the
magnitudes of public catalogues.

`sedge_hollow.xlsx`
    A long overhead rural feeder with a voltage regulator, where voltage decides.
`cooper_quay.xlsx`
    A short urban cable feeder behind a shared bank, where ratings decide.
`mothwick_raw.xlsx`
    A small feeder full of ordinary data faults, for ``feederhost check``.

The paragraph at the head of each module of ``demo_data`` tells the scenario and what to look
at; it is also the `guide` sheet of its workbook.
"""

from __future__ import annotations

import sys
from pathlib import Path
from types import ModuleType

from feederhost.sheets.atomic import atomic_write
from feederhost.sheets.template import input_book, save_settled

from demo_data import cooper_quay, mothwick, sedge_hollow

FEEDERS: dict[str, ModuleType] = {
    "sedge_hollow": sedge_hollow,
    "cooper_quay": cooper_quay,
    "mothwick_raw": mothwick,
}
ORIGIN = (
    "\n\nAn invented feeder of an invented utility. `python scripts/make_feeders.py` writes this "
    "workbook anew."
)


def make(folder: Path) -> list[Path]:
    """Write every demo workbook into ``folder`` and return their paths."""
    folder.mkdir(parents=True, exist_ok=True)
    paths = []
    for name, feeder in FEEDERS.items():
        book = input_book(feeder.TABLES, (feeder.__doc__ or "").strip() + ORIGIN)
        # Text is never a formula for the writer: the planted ones go in past it.
        for (sheet, cell), value in getattr(feeder, "CELLS", {}).items():
            book[sheet][cell].value = value
        path = folder / f"{name}.xlsx"
        atomic_write(path, lambda scratch, book=book: save_settled(book, scratch))
        paths.append(path)
    return paths


if __name__ == "__main__":
    target = Path(sys.argv[1]) if sys.argv[1:] else Path(__file__).parents[1] / "feeders"
    for written in make(target):
        print(written)
