"""Whole files or none: written beside the target, then moved into place."""

from __future__ import annotations

import os
import secrets
import shutil
from collections.abc import Callable
from pathlib import Path

from feederhost.errors import OutputError


def atomic_write(path: Path, write: Callable[[Path], None]) -> None:
    """Let ``write`` fill a temporary file beside ``path``, then put it in the place of ``path``.

    Whoever opens ``path`` meanwhile finds the old file or the new one, never half of one; after
    a failure the old file is untouched and the temporary one is gone.

    Parameters
    ----------
    path : Path
        The file to write.  A symbolic link is followed.  An existing file keeps its mode.
    write : callable
        Called once with the temporary path, which ends in ``.tmp``.

    Raises
    ------
    OutputError
        The folder is missing, or folder or file cannot be written.
    """
    target = Path(os.path.realpath(path))
    # Not tempfile: its files are private to the user, and the mode would stay on the result.
    scratch = target.with_name(f".{target.name}.{secrets.token_hex(4)}.tmp")
    try:
        if target.exists() and not os.access(target, os.W_OK):
            raise PermissionError(13, "the file is write-protected")
        write(scratch)
        if target.exists():
            shutil.copymode(target, scratch)
        os.replace(scratch, target)
    except OSError as error:
        raise OutputError(
            f"cannot write {path}: {error.strerror or error} - "
            "close it where it is open, or name another place"
        ) from error
    finally:
        scratch.unlink(missing_ok=True)
