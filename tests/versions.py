"""Run tests with other versions of what the package builds on: the lowest that it admits, pandas 2, the newest.

    python tests/versions.py floors
    python tests/versions.py pandas2 -- tests/intake tests/questions
    python tests/versions.py newest --folder /tmp/newest

Makes an environment in a folder (a temporary one by default; one that is there is used again), installs this clone
with what its tests need, tells the versions, and runs pytest on what follows `--`: by default the parts that numbers go
through. Only the packages of the core and of the extra `report` are held to their floors; the tools of the tests are
the newest.
"""

from __future__ import annotations

import argparse
import re
import subprocess
import sys
import tempfile
import tomllib
import venv
from collections.abc import Sequence
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
PARTS = ["tests/intake", "tests/tally", "tests/kernels", "tests/models", "tests/questions"]
SETS = ("floors", "pandas2", "newest")


def requirements() -> list[str]:
    """Return what the core and its report need, as pyproject.toml has it."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    return [*project["dependencies"], *project["optional-dependencies"]["report"]]


def constraints(which: str) -> list[str]:
    """Return what pip is to be held to."""
    if which == "floors":
        return [f"{name}=={floor}" for name, floor in map(floor_of, requirements())]
    return ["pandas<3"] if which == "pandas2" else []


def floor_of(requirement: str) -> tuple[str, str]:
    """Return the name and lowest version of a requirement such as "numpy>=2.0"."""
    found = re.fullmatch(r"([A-Za-z0-9_-]+)>=([\d.]+)", requirement)
    if found is None:
        raise SystemExit(f"pyproject.toml: {requirement!r}; wanted a name, >= and a version")
    return found[1], found[2]


def made(folder: Path, which: str) -> Path:
    """Make the environment, and return its Python."""
    python = folder / ("Scripts" if sys.platform == "win32" else "bin") / "python"
    if not python.exists():
        venv.create(folder, with_pip=True)
    held = folder / "constraints.txt"
    held.write_text("\n".join(constraints(which)) + "\n", encoding="utf-8")
    upgrade = ["--upgrade", "--upgrade-strategy", "eager"] if which == "newest" else []
    command = [python, "-m", "pip", "install", "--quiet", *upgrade, "-c", held, "-e", f"{ROOT}[test,report]"]
    subprocess.run(list(map(str, command)), check=True)
    return python


def main(argv: Sequence[str] | None = None) -> int:
    """Make the environment, tell what is in it, run the tests; pytest's exit code."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("which", choices=SETS)
    parser.add_argument("--folder", type=Path, help="for the environment; default: a temporary one")
    parser.add_argument("tests", nargs="*", default=PARTS, help="words for pytest, after --")
    asked = parser.parse_args(argv)
    with tempfile.TemporaryDirectory(prefix="versions-") as spare:
        python = made(asked.folder or Path(spare), asked.which)
        names = [re.split(r"[<>=]", one)[0] for one in requirements()]
        told = "import importlib.metadata as m, sys; print(*(f'{n} {m.version(n)}' for n in sys.argv[1:]), sep=', ')"
        subprocess.run([python, "-c", told, *names], check=True)
        return subprocess.run([python, "-m", "pytest", "-q", *asked.tests], cwd=ROOT).returncode


if __name__ == "__main__":
    sys.exit(main())
