"""What removal effects of many touchpoints with intervals cost, beside a loop that solves the chain anew without each.

A chain of 60 states is fitted to an invented log. `jn.removal` gives all effects with intervals and how often their
order held in 100 redraws. The loop takes each state out in turn and solves for the conversion that is left: once for
the bare effects, and once in each of the 100 redraws, every one fitted anew, for standard errors. A B A B.

Run from the repository: ``python tests/bench/bench_removal.py``.
"""

from __future__ import annotations

import argparse
import statistics
import sys
import time
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parent))

from bench_curve import fit_of  # noqa: E402

import journeys as jn  # noqa: E402
from journeys.kernels.arrays import FloatArray  # noqa: E402
from journeys.kernels.resampling import Refitter, bucket_weights  # noqa: E402


def converted(p: FloatArray, left: FloatArray) -> float:
    """Return the probability of a conversion from entry, row 0 of the moves between states."""
    return float(np.linalg.solve(np.eye(len(p)) - p, left)[0])


def effects_one_by_one(p: FloatArray, left: FloatArray) -> FloatArray:
    """Return what is lost without each state: arrivals there come to nothing, and the chain is solved again."""
    whole = converted(p, left)
    found = np.empty(len(p) - 1)
    for c in range(1, len(p)):
        without, still = p.copy(), left.copy()
        without[:, c] = 0.0
        still[c] = 0.0
        found[c - 1] = 1.0 - converted(without, still) / whole
    return found


def dense(fit: jn.JourneyFit, state: FloatArray, target: FloatArray, p: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the moves between entry and the states as a matrix, and those that convert."""
    n = fit.nodes.n_rows
    matrix = np.zeros((n, fit.nodes.n_nodes))
    matrix[state, target] = p
    return matrix[:, :n], matrix[:, fit.target_mask(None)].sum(axis=1)


def bare_loop(fit: jn.JourneyFit) -> FloatArray:
    """Return the effects alone, in the order of the states."""
    return effects_one_by_one(*dense(fit, fit.move_state, fit.move_target, fit.probability))


def loop_of_refits(fit: jn.JourneyFit, n_redraws: int, rng: np.random.Generator) -> FloatArray:
    """Return standard errors of the effects from redraws of the customers, in the order of the states."""
    if fit.fitted_stays is None:
        raise TypeError
    refitter = Refitter(fit.fitted_stays, fit.move_state, fit.move_target, fit.nodes.n_nodes, steps=True)
    weights = bucket_weights(fit.fitted_stays.by_bucket.n_buckets, n_redraws, rng)
    drawn = [
        effects_one_by_one(*dense(fit, refitter.state, refitter.target, p))
        for p in refitter.refit(weights).probability.T
    ]
    return np.std(drawn, axis=0, ddof=1)


def timed(job: Callable[[], object]) -> tuple[float, object]:
    """Return the wall time of a call, and its answer."""
    began = time.perf_counter()
    answer = job()
    return time.perf_counter() - began, answer


def main(argv: Sequence[str] | None = None) -> int:
    """Print the figures."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--states", type=int, default=60)
    parser.add_argument("--customers", type=int, default=20_000)
    parser.add_argument("--redraws", type=int, default=100)
    parser.add_argument("--repeats", type=int, default=3)
    asked = parser.parse_args(argv)
    fit = fit_of(asked.states, asked.customers, np.random.default_rng(1))
    turns = []
    for turn in range(asked.repeats):
        ours, result = timed(lambda: jn.removal(fit, n_redraws=asked.redraws).to_frame())
        bare, effects = timed(lambda: bare_loop(fit))
        refits, errors = timed(lambda turn=turn: loop_of_refits(fit, asked.redraws, np.random.default_rng(turn)))
        turns.append((ours, bare, refits))
    frame = result.set_index("touchpoint").loc[list(fit.states)]
    apart = float(np.abs(frame["estimate"].to_numpy() - effects).max())
    of_errors = float(np.median(errors / frame["std_error"].to_numpy()))
    ours, bare, refits = (statistics.median(column) for column in zip(*turns, strict=True))
    print(f"{len(frame)} touchpoints: removal with intervals and order in {asked.redraws} redraws {ours:.3f} s")
    print(f"solved anew without each, no intervals: {bare:.3f} s, ratio {bare / ours:.3f}")
    print(f"fitted and solved anew without each in {asked.redraws} redraws: {refits:.3f} s, ratio {refits / ours:.1f}")
    print(f"largest difference of the effects {apart:.1e}; standard errors of redraws to ours, median {of_errors:.2f}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
