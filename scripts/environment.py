"""The virtual environment behind `scripts/demo` and `scripts/test`: made once, renewed when stale.

Needs nothing but the standard library.  An environment counts as current while the installed
package holds the same files as this tree; an editable install always does.
"""

from __future__ import annotations

import hashlib
import shutil
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
VENV = ROOT / ".venv"
LEAST = (3, 11)
DEVELOPMENT = ("pytest", "pytest_cov", "hypothesis", "ruff", "mypy")
_STAMP = VENV / "feederhost.sha256"
_PROBE = (
    "import sys, importlib.util as u, feederhost\n"
    "print(feederhost.__path__[0])\n"
    "sys.exit(any(u.find_spec(name) is None for name in sys.argv[1:]))"
)


def ready(tools: Sequence[str] = ()) -> Path:
    """Return the Python of a `.venv` with this tree installed, making what is missing.

    Parameters
    ----------
    tools : sequence of str
        Modules that must be there too; if any are asked for, the `dev` extra is installed.
    """
    if not _runs(venv_python()):
        _make()
    if not is_current(venv_python(), tools):
        _install(".[dev]" if tools else ".")
    return venv_python()


def venv_python() -> Path:
    """Return where the interpreter of `.venv` is, made or not."""
    windows = VENV / "Scripts" / "python.exe"
    return windows if windows.exists() else VENV / "bin" / "python"


def installed_package(python: Path | str, tools: Sequence[str] = ()) -> Path | None:
    """Return the folder of the package that ``python`` imports; None without it or the tools."""
    # -I: neither this folder nor the caller's settings may stand in for an install.
    done = subprocess.run(
        [str(python), "-I", "-c", _PROBE, *tools], capture_output=True, text=True, check=False
    )
    return Path(done.stdout.strip()) if done.returncode == 0 else None


def is_current(python: Path | str, tools: Sequence[str] = ()) -> bool:
    """Whether ``python`` imports what stands in this tree, with the dependencies it asks for."""
    package = installed_package(python, tools)
    if package is None:
        return False
    if package.resolve() == ROOT / "feederhost":
        return True
    if _digest(package) != _digest(ROOT / "feederhost"):
        return False
    # Only an environment of these scripts says for which dependencies it was made.
    return not _STAMP.exists() or _STAMP.read_text() == _project_digest()


def _runs(python: Path) -> bool:
    if not python.exists():
        return False
    asked = f"import sys; sys.exit(sys.version_info < {LEAST})"
    return subprocess.run([str(python), "-c", asked], check=False).returncode == 0


def _make() -> None:
    python = _interpreter()
    print(f"making {VENV.name} with {python}", flush=True)
    done = subprocess.run([python, "-m", "venv", "--clear", str(VENV)], check=False)
    if done.returncode:
        raise SystemExit(
            "the virtual environment could not be made: the module venv is needed, which some "
            "systems keep in a package of its own (python3-venv)"
        )


def _interpreter() -> str:
    if sys.version_info >= LEAST:
        return sys.executable
    for minor in (14, 13, 12, 11):
        found = shutil.which(f"python3.{minor}")
        if found:
            return found
    raise SystemExit(f"Python 3.11 or later is needed, this is {sys.version.split()[0]}")


def _install(what: str) -> None:
    print(f"installing {what} into {VENV.name}", flush=True)
    # A build folder left behind would put deleted modules back into the package.
    shutil.rmtree(ROOT / "build", ignore_errors=True)
    command = [str(venv_python()), "-m", "pip", "install", "--quiet"]
    command += ["--disable-pip-version-check", what]
    if subprocess.run(command, cwd=ROOT, check=False).returncode:
        raise SystemExit("the installation failed: the lines above say why")
    _STAMP.write_text(_project_digest())


def _digest(package: Path) -> str:
    digest = hashlib.sha256()
    for file in sorted(f for f in package.rglob("*") if f.is_file()):
        if "__pycache__" not in file.parts:
            digest.update(f"{file.relative_to(package).as_posix()}\n".encode())
            digest.update(file.read_bytes())
    return digest.hexdigest()


def _project_digest() -> str:
    return hashlib.sha256((ROOT / "pyproject.toml").read_bytes()).hexdigest()
