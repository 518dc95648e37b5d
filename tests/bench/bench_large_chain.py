"""First passage on a large chain beside a full matrix, and beside deeptime's mean first passage, where it is there.

    python tests/bench/bench_large_chain.py --states 20000 --full 4000 --repeats 3

The moves of each state stay within 50 neighbours, a few lead out. A full matrix is factored on fewer states and its
time is scaled by the cube of the sizes. Each solve is a process of its own, in turns; answers are held against each
other. `--peer PYTHON` names another interpreter for deeptime. Prints Markdown; answers that differ end it with exit
code 1, figures that miss what is wanted do not.
"""

from __future__ import annotations

import argparse
import json
import statistics
import subprocess
import sys
import time
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from figures import Figures, report
from measure import Cost, hold_to_two_cpus, in_turns, machine, peak, run

if TYPE_CHECKING:
    import numpy as np

HERE = Path(__file__).resolve()
NEIGHBOURS = 50
MOVES_OF_A_STATE = 8
SHARES_OUT = (0.02, 0.03)
SEED = 20250101
WANTED_SPEED = 100.0
MOST_GIB = 1.0
ABOUT = 10  # states whose answers are held against each other


@dataclass(frozen=True)
class Chain:
    """Moves between n states and to two outcomes, n and n + 1."""

    n: int
    state: np.ndarray
    target: np.ndarray
    p: np.ndarray


def chain(n: int) -> Chain:
    """Invent a chain."""
    import numpy as np

    rng = np.random.default_rng(SEED)
    state = np.repeat(np.arange(n), MOVES_OF_A_STATE)
    target = np.clip(state + rng.integers(-NEIGHBOURS, NEIGHBOURS + 1, len(state)), 0, n - 1)
    keys = np.unique(state * n + target)
    state, target = keys // n, keys % n
    weight = rng.exponential(size=len(state))
    p = weight / np.bincount(state, weight, n)[state] * (1 - sum(SHARES_OUT))
    every = np.arange(n)
    return Chain(
        n,
        np.concatenate([state, every, every]),
        np.concatenate([target, np.full(n, n), np.full(n, n + 1)]),
        np.concatenate([p, *(np.full(n, share) for share in SHARES_OUT)]),
    )


def ours(given: Chain, n_directions: int) -> tuple[float, dict[str, list[float]]]:
    """Solve with `passage`: to outcome n, and to either; perhaps with the spread from so many directions."""
    import numpy as np

    from journeys.kernels.absorption import passage

    n, p = given.n, given.p
    d = np.random.default_rng(SEED).normal(size=(n_directions, len(p))) * p * 1e-3
    began = time.perf_counter()
    one = passage(n, n + 2, given.state, given.target, p, p, p, np.arange(n + 2) == n)
    if n_directions:
        one.changes(d, d, d)
    took = time.perf_counter() - began
    over = passage(n, n + 2, given.state, given.target, p, p, p, np.arange(n + 2) >= n)
    return took, {"probability": _some(one.probability), "mean": _some(one.mean_given), "sd": _some(one.sd_given),
                  "over": _some(over.mean_given)}  # fmt: skip


def full(given: Chain) -> tuple[float, dict[str, list[float]]]:
    """Solve with a full matrix and LAPACK."""
    import numpy as np
    from scipy.linalg import lu_factor, lu_solve

    n = given.n
    p = np.zeros((n, n + 2))
    p[given.state, given.target] = given.p
    began = time.perf_counter()
    inner = p[:, :n]
    factors = lu_factor(np.eye(n) - inner)
    h = lu_solve(factors, p[:, n])
    g = lu_solve(factors, inner @ h + p[:, n])
    s = lu_solve(factors, inner @ h + p[:, n] + 2.0 * (inner @ g))
    took = time.perf_counter() - began
    return took, {"probability": _some(h), "mean": _some(g / h), "sd": _some(np.sqrt(s / h - (g / h) ** 2))}


def peers(given: Chain) -> tuple[float, dict[str, list[float]]]:
    """Ask deeptime for the mean first passage to either outcome: it has no passage that may fail."""
    import numpy as np
    from deeptime.markov.tools.analysis import mfpt
    from scipy.sparse import csr_matrix

    n = given.n
    ends = np.array([n, n + 1])
    cells = (np.concatenate([given.state, ends]), np.concatenate([given.target, ends]))
    matrix = csr_matrix((np.concatenate([given.p, [1.0, 1.0]]), cells), shape=(n + 2, n + 2))
    began = time.perf_counter()
    mean = mfpt(matrix, ends)
    return time.perf_counter() - began, {"over": _some(mean)}


def _some(x: np.ndarray) -> list[float]:
    step = max(1, len(x) // ABOUT)
    return [float(value) for value in x[: step * ABOUT : step]]


class Bench:
    """The runs and what they found."""

    def __init__(self, states: int, fewer: int, repeats: int, peer: str, found: Figures) -> None:
        """Keep the sizes."""
        self.states, self.fewer, self.repeats, self.peer, self.found = states, fewer, repeats, peer, found

    def ask(self, who: str, states: int, python: str = sys.executable, directions: int = 0) -> list[str]:
        """Return the words of one process."""
        return [python, str(HERE), "--solve", who, "--states", str(states), "--directions", str(directions)]

    def against_full(self) -> None:
        """Compare with the full matrix, whose time is scaled up."""
        tell(f"{self.states:,} states, and a full matrix of {self.fewer:,}")
        pairs = in_turns(self.ask("ours", self.states), self.ask("full", self.fewer), self.repeats)
        mine, theirs = ([pair[k] for pair in pairs] for k in (0, 1))
        scale = (self.states / self.fewer) ** 3
        what = f"first passage on {self.states:,} states, to a full matrix scaled from {self.fewer:,} by {scale:g}"
        ratios = [_inside(their) * scale / _inside(our) for our, their in pairs]
        whole = [_inside(their) * scale / our.seconds for our, their in pairs]
        self.found.compare(f"{what}: speed", statistics.median(ratios), least=WANTED_SPEED)
        self.found.compare(f"{what}: speed, our whole process counted", statistics.median(whole))
        self.memory(f"first passage on {self.states:,} states", mine)
        self.noted("journeys passage", mine)
        self.noted(f"full matrix of {self.fewer:,}", theirs)
        small = run(self.ask("ours", self.fewer))
        self.agree(f"{self.fewer:,} states: ours and a full matrix", small, theirs[0], ("probability", "mean", "sd"))

    def with_spread(self, directions: int) -> None:
        """Measure passage and the influence of so many buckets on every answer."""
        tell(f"with {directions} buckets")
        costs = [run(self.ask("ours", self.states, directions=directions)) for _ in range(self.repeats)]
        self.memory(f"the same with the influence of {directions} buckets", costs)
        self.noted(f"journeys passage and changes, {directions} buckets", costs)

    def against_peer(self) -> None:
        """Compare with deeptime's mean first passage."""
        there = subprocess.run([self.peer, "-c", "import deeptime"], capture_output=True, check=False).returncode == 0
        if not there:
            self.found.rows.append(("against deeptime's mean first passage", "", "deeptime is not installed", ""))
            return
        tell("deeptime")
        pairs = in_turns(self.ask("ours", self.states), self.ask("deeptime", self.states, self.peer), self.repeats)
        what = f"first passage on {self.states:,} states, to deeptime's mean alone"
        self.found.compare(f"{what}: speed", statistics.median(_inside(b) / _inside(a) for a, b in pairs))
        self.found.compare(f"{what}: peak memory", statistics.median(peak(a) / peak(b) for a, b in pairs))
        self.noted("deeptime mfpt", [pair[1] for pair in pairs])
        self.agree(f"{self.states:,} states: ours and deeptime's means", *pairs[0], ("over",))

    def memory(self, what: str, costs: list[Cost]) -> None:
        """Note the peak of the process beside what is wanted."""
        got = statistics.median(map(peak, costs)) / 1024
        self.found.rows.append((f"{what}: peak memory of the process", f"≤ {MOST_GIB:g} GiB", f"{got:.3g} GiB",
                                "yes" if got <= MOST_GIB else "no"))  # fmt: skip

    def noted(self, who: str, costs: list[Cost]) -> None:
        """Note a process, and what of its time the solve took."""
        inside = statistics.median(map(_inside, costs))
        self.found.cost("large chain", f"{who} (the solve: {inside:.2f} s)", 0, costs)

    def agree(self, what: str, one: Cost, two: Cost, names: tuple[str, ...]) -> None:
        """Hold the answers of two processes against each other."""
        a, b = (json.loads(cost.said)["answers"] for cost in (one, two))
        close = all(abs(x - y) <= 1e-9 * abs(y) for name in names for x, y in zip(a[name], b[name], strict=True))
        self.found.answers.append((what, close))


def _inside(cost: Cost) -> float:
    """Return the seconds of the solve alone."""
    return float(json.loads(cost.said)["seconds"])


def tell(what: str) -> None:
    """Say on stderr what goes on."""
    print(f"… {what}", file=sys.stderr, flush=True)


def options() -> argparse.Namespace:
    """Read the options."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--states", type=int, default=20_000)
    parser.add_argument("--full", type=int, default=4_000, metavar="STATES", help="states of the full matrix")
    parser.add_argument("--directions", type=int, default=200, help="buckets; 0: leave them out")
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--peer", default=sys.executable, metavar="PYTHON", help="interpreter that has deeptime")
    parser.add_argument("--json", type=Path, metavar="FILE", help="write the rows there too")
    parser.add_argument("--solve", choices=("ours", "full", "deeptime"), help=argparse.SUPPRESS)
    asked = parser.parse_args()
    for name in ("states", "full", "repeats"):
        if getattr(asked, name) < 1:
            parser.error(f"--{name} {getattr(asked, name)}: wanted at least 1")
    return asked


def main() -> int:
    """Measure and print; or be one of the processes measured."""
    asked = options()
    if asked.solve:
        given = chain(asked.states)
        solved = {"ours": lambda: ours(given, asked.directions), "full": lambda: full(given),
                  "deeptime": lambda: peers(given)}[asked.solve]  # fmt: skip
        took, answers = solved()
        print(json.dumps({"seconds": took, "answers": answers}))
        return 0
    hold_to_two_cpus()
    about = machine()
    found = Figures()
    bench = Bench(asked.states, asked.full, asked.repeats, asked.peer, found)
    bench.against_full()
    if asked.directions:
        bench.with_spread(asked.directions)
    bench.against_peer()
    if asked.json:
        told = {"machine": about, "rows": found.rows, "answers": found.answers}
        asked.json.write_text(json.dumps(told, indent=1, ensure_ascii=False), encoding="utf-8")
    print(report(about, found))
    return 0 if all(same for _, same in found.answers) else 1


if __name__ == "__main__":
    sys.exit(main())
