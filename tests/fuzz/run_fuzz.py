"""Damage sound input in every way, and see that it is read rightly or refused in one clear error.

    python tests/fuzz/run_fuzz.py --tries 2000 --seed 1
    python tests/fuzz/run_fuzz.py --target parquet --engine atheris --tries 20000

Each target runs in a process of its own, under a limit on its address space and on the time of one try. What it was
doing when it failed is kept under `tests/fuzz/kept/`, which the tests replay. The engine atheris, where it is
installed (`pip install atheris`), is guided by the branches taken; the plain one is not, and its tries can be repeated
to the byte.
"""

from __future__ import annotations

import argparse
import faulthandler
import json
import os
import resource
import shutil
import subprocess
import sys
import tempfile
import warnings
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import numpy as np

HERE = Path(__file__).resolve().parent
sys.path[:0] = [str(HERE), str(HERE.parents[1])]

KEPT = HERE / "kept"
MEMORY = 3 << 30
SECONDS = 30


class Tries:
    """Tries one input after another, in a folder of its own that must stay as it was.

    Parameters
    ----------
    name : str
        Of the target.
    folder : Path
        Where to put the input, and where the process keeps its temporary files.
    """

    def __init__(self, name: str, folder: Path) -> None:
        from targets import TARGETS

        self.target, self._folder = TARGETS[name], folder
        self.seeds = self.target.seeds(folder)
        for path in folder.iterdir():
            path.unlink()
        self.counts: Counter[str] = Counter()

    def one(self, data: bytes) -> None:
        """Try one input; raises on any outcome but right numbers or one clear error."""
        path = self._folder / f"input{self.target.suffix}"
        path.write_bytes(data)
        faulthandler.dump_traceback_later(SECONDS, exit=True)
        outcome = self.target.check(path)
        faulthandler.cancel_dump_traceback_later()
        path.unlink()
        if left := [one.name for one in self._folder.iterdir()]:
            raise AssertionError(f"left behind: {left}")
        self.counts[outcome] += 1


def in_child(name: str, engine: str, tries: int, seed: int, folder: Path) -> None:
    """Fuzz one target in this process; the last thing printed is what came out."""
    resource.setrlimit(resource.RLIMIT_AS, (MEMORY, MEMORY) if engine == "mutate" else (-1, -1))
    tempfile.tempdir = str(folder)
    warnings.simplefilter("error")
    if engine == "atheris":
        with_atheris(name, tries, seed, folder)
        return
    from mutate import mutated

    all_tries = Tries(name, folder)
    for number in range(tries):
        all_tries.one(mutated(all_tries.seeds, np.random.default_rng([seed, number])))
    print(json.dumps(all_tries.counts))


def with_atheris(name: str, tries: int, seed: int, folder: Path) -> None:
    """Let atheris choose the input; it ends the process itself."""
    import atheris

    with atheris.instrument_imports(include=["journeys"]):
        import journeys  # noqa: F401
    all_tries = Tries(name, folder)
    corpus = Path(str(folder) + ".corpus")
    corpus.mkdir(exist_ok=True)
    for number, data in enumerate(all_tries.seeds):
        (corpus / f"{number}").write_bytes(data)
    atheris.Setup(
        [sys.argv[0], str(corpus), f"-runs={tries}", f"-seed={seed}", "-max_len=20000", f"-timeout={SECONDS}",
         f"-rss_limit_mb={MEMORY >> 20}", f"-artifact_prefix={folder}.crash-"],
        counting(all_tries, Path(str(folder) + ".counts")),
    )  # fmt: skip
    atheris.Fuzz()


def counting(tries: Tries, file: Path) -> Callable[[bytes], None]:
    """Give the function that atheris calls, which notes the counts in a file, since nothing runs after the last."""

    def one(data: bytes) -> None:
        tries.one(data)
        file.write_text(json.dumps(tries.counts))

    return one


def fuzz(name: str, engine: str, tries: int, seed: int) -> dict[str, int] | str:
    """Fuzz one target in another process; the counts, or what went wrong."""
    root = Path(tempfile.mkdtemp(prefix="fuzz-"))
    folder = root / "work"
    folder.mkdir()
    words = [name, "--engine", engine, "--tries", tries, "--seed", seed, "--child", folder]
    # Allocators reserve address space that they never touch; the limit on it must not be about them.
    env = os.environ | {"ARROW_DEFAULT_MEMORY_POOL": "system", "MALLOC_ARENA_MAX": "2", "OPENBLAS_NUM_THREADS": "1"}
    command = [sys.executable, __file__, "--target", *map(str, words)]
    done = subprocess.run(command, env=env, capture_output=True, text=True)
    counts = Path(str(folder) + ".counts")
    try:
        if done.returncode == 0:
            told = counts.read_text() if engine == "atheris" else done.stdout.splitlines()[-1]
            return dict(json.loads(told))
        for path in folder.glob("input*"):
            KEPT.mkdir(exist_ok=True)
            shutil.copy(path, KEPT / f"{name}-{engine}-{seed}-{tries}{path.suffix}")
        return done.stderr[-3_000:] + f"\nexit code {done.returncode}"
    finally:
        shutil.rmtree(root)


def main() -> int:
    """Fuzz all targets and tell the counts; 1 if anything but reading or refusing came of it."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--target", help="such as parquet, csv.gz, rules or manifest; default all")
    parser.add_argument("--engine", choices=["mutate", "atheris"], default="mutate")
    parser.add_argument("--tries", type=int, default=1_000, help="for each target")
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--child", type=Path, help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.child:
        in_child(options.target, options.engine, options.tries, options.seed, options.child)
        return 0
    from targets import TARGETS

    failed = 0
    for name in [options.target] if options.target else TARGETS:
        found = fuzz(name, options.engine, options.tries, options.seed)
        if isinstance(found, str):
            failed = 1
            print(f"{name}: FAILED (input kept in {KEPT})\n{found}", flush=True)
            continue
        read, refused = found.get("read", 0), found.get("refused", 0)
        print(f"{name}: {read + refused:,} tried, {read:,} read, {refused:,} refused", flush=True)
    return failed


if __name__ == "__main__":
    sys.exit(main())
