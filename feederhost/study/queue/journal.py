"""A journal of finished requests, so that an interrupted run can be taken up again.

One JSON line per request, each on disk before the next request starts.  The first line says
what the run was about: input digests, settings, options, version.  A journal about anything
else is not taken up.
"""

from __future__ import annotations

import json
import os
from dataclasses import asdict
from pathlib import Path
from typing import Any

from feederhost import __version__
from feederhost.errors import OutputError
from feederhost.study.load import Loaded
from feederhost.study.options import Options


def journal_of(output: Path) -> Path:
    """Return the path of the journal that belongs to an output."""
    return output.with_name(f"{output.name}.journal")


def heading(loaded: Loaded, options: Options) -> dict[str, Any]:
    """Return what a journal must be about to be taken up."""
    return {
        "version": __version__,
        "digests": loaded.digests,
        "settings": asdict(loaded.feeder.settings),
        "reserve": options.reserve,
        "remedies": options.remedies,
        "solver": options.solver,
    }


def finished(path: Path, about: dict[str, Any]) -> list[dict[str, Any]]:
    """Return the records of a journal about the same run; a torn last line is left out."""
    try:
        lines = path.read_text(encoding="utf-8").splitlines()
    except FileNotFoundError:
        return []
    records: list[dict[str, Any]] = []
    for number, line in enumerate(lines):
        try:
            record = json.loads(line)
        except json.JSONDecodeError:
            break
        if number == 0:
            if record != json.loads(json.dumps(about)):
                return []
        else:
            records.append(record)
    return records


class Journal:
    """Appends records to a journal file, each synced to disk; removes it when all is done."""

    def __init__(self, path: Path, about: dict[str, Any], records: list[dict[str, Any]]) -> None:
        self.path = path
        try:
            self.file = path.open("w", encoding="utf-8")
        except OSError as error:
            raise OutputError(f"cannot write {path}: {error.strerror}") from error
        for record in (about, *records):
            self._put(record)

    def _put(self, record: dict[str, Any]) -> None:
        self.file.write(json.dumps(record, ensure_ascii=False) + "\n")

    def add(self, record: dict[str, Any]) -> None:
        """Append one record and wait until it is on disk."""
        self._put(record)
        self.file.flush()
        os.fsync(self.file.fileno())

    def close(self, *, remove: bool) -> None:
        """Close the file, and remove it once the result itself is written."""
        self.file.close()
        if remove:
            self.path.unlink(missing_ok=True)
