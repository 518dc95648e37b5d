"""What a passage curve costs beside its own linear solves, how exact it is, and where bands from all starts end.

A chain of 20 states is fitted to an invented log of 200 buckets; `passage_curve(…).to_frame()` with bands is timed
against the solves inside it alone (one for the target, one for the visits from the start, on every scale), A B A B.

Run from the repository: ``python tests/bench/bench_curve.py``.
"""

from __future__ import annotations

import argparse
import statistics
import sys
import time
import warnings
from collections.abc import Callable, Sequence
from dataclasses import replace
from functools import partial
from pathlib import Path

import numpy as np
import pandas as pd

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from scipy import stats  # noqa: E402

import journeys as jn  # noqa: E402
from journeys.errors import JourneysWarning  # noqa: E402
from journeys.questions import quantiles  # noqa: E402
from journeys.questions.elapsed import elapsed  # noqa: E402
from journeys.questions.solved_curve import SolvedTime  # noqa: E402
from journeys.questions.walks import timed, walk_to  # noqa: E402

START = pd.Timestamp("2024-01-01T00:00:00Z")


def fit_of(n_states: int, n_customers: int, rng: np.random.Generator) -> jn.JourneyFit:
    """Return a fit to random paths: every state may follow every other, 8 % of the moves convert."""
    length = np.minimum(rng.geometric(0.12, n_customers), 40)
    customer = np.repeat(np.arange(n_customers), length)
    state = rng.integers(0, n_states, len(customer))
    begin = np.repeat(rng.uniform(0, 150, n_customers), length)
    first = np.repeat(np.cumsum(length) - length, length)
    step = rng.lognormal(0.0, 1.6, len(customer)) * (1 + state % 5)
    days = begin + np.cumsum(step) - np.cumsum(step)[first]
    names = np.array([f"s{i:03d}" for i in range(n_states)], dtype=object)[state]
    last = np.append(customer[1:] != customer[:-1], True)
    names[last & (rng.random(len(names)) < 0.5)] = "won"
    log = pd.DataFrame(
        {"customer": customer, "time": START + pd.to_timedelta((days * 86_400e6).astype(np.int64), unit="us"),
         "event": names}
    ).sort_values("time", kind="stable")  # fmt: skip
    rules = jn.JourneyRules("customer", "time", "event", converted="won", silence="30d", complete_history=True,
                            log_start=START, as_of=START + pd.Timedelta(days=200))  # fmt: skip
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", JourneysWarning)
        return jn.JourneyModel().fit(jn.tally(log[log["time"] <= START + pd.Timedelta(days=200)], rules))


def seconds(job: Callable[[], object]) -> float:
    """Return the wall time of a call."""
    began = time.perf_counter()
    job()
    return time.perf_counter() - began


def solves(fit: jn.JourneyFit) -> tuple[float, float]:
    """Return the seconds that the linear solves of a curve from entry take: matrices ready made, and made too."""
    it = elapsed(fit, walk_to(fit, None))
    if it is None:
        raise TypeError
    total, set_up = 0.0, 0.0
    start = int(it.renewal.place[0])
    for hi, _, scale in SolvedTime(it, 0).parts():
        set_up += seconds(partial(it.renewal.solve, hi / (scale.n - 1), scale.n))
        began = time.perf_counter()
        systems = list(scale._systems())
        set_up += time.perf_counter() - began
        one = np.zeros((len(it.renewal.open_states), 1))
        one[start] = 1.0
        for _, matrix, right in systems:
            # one of them is turned over, as the visits are solved for from the left
            total += seconds(partial(np.linalg.solve, matrix, right[..., None]))
            total += seconds(partial(np.linalg.solve, matrix.transpose(0, 2, 1), one))
    return total, total + set_up


def worst_error() -> float:
    """Return the largest error of curves that have a closed form."""
    times, errors = np.geomspace(1e-3, 200, 500), []
    for n in (1, 4, 10):
        frame = pd.DataFrame(np.eye(n, n + 1, 1), index=range(n), columns=[*range(n), "won"])
        fit = jn.JourneyFit.from_matrix(frame, {str(i): stats.expon(scale=2.0) for i in range(n)})
        errors.append(np.abs(jn.passage_curve(fit, "won").at(times) - stats.gamma(n, scale=2.0).cdf(times)).max())
    for again in (0.5, 0.9, 0.99):
        frame = pd.DataFrame([[again, 1 - again]], index=["a"], columns=["a", "won"])
        fit = jn.JourneyFit.from_matrix(frame, {"a": stats.expon(scale=1 - again)})
        errors.append(np.abs(jn.passage_curve(fit, "won").at(times) - stats.expon.cdf(times)).max())
    return float(max(errors))


def main(argv: Sequence[str] | None = None) -> int:
    """Print the figures."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--states", type=int, default=20)
    parser.add_argument("--customers", type=int, default=20_000)
    parser.add_argument("--repeats", type=int, default=5)
    parser.add_argument("--growth", type=int, nargs="*", default=[10, 20, 40, 80])
    asked = parser.parse_args(argv)
    fit = fit_of(asked.states, asked.customers, np.random.default_rng(1))
    turns = [(*solves(fit), seconds(lambda: jn.passage_curve(replace(fit)).to_frame())) for _ in range(asked.repeats)]
    alone, made, whole = (statistics.median(column) for column in zip(*turns, strict=True))
    ratio, other = (statistics.median(turn[2] / turn[i] for turn in turns) for i in (0, 1))
    cells = 0 if fit.fitted_stays is None else len(fit.fitted_stays.found.q)
    print(f"{asked.states} states, {cells:,} cells: solves alone {alone:.3f} s, curve with bands {whole:.3f} s, "
          f"ratio {ratio:.2f} (wanted at most 2); matrices and solves {made:.3f} s, ratio {other:.2f}")
    print(f"largest error against closed forms {worst_error():.1e} (wanted at most 1e-4)")
    for n_states in asked.growth:
        larger = fit_of(n_states, 200 * n_states, np.random.default_rng(2))
        found = timed(larger, walk_to(larger, None))
        quantiles.TIME_WORK = quantiles.STEP_WORK = np.inf
        for clock in ("steps", "time"):
            took = seconds(partial(quantiles.quantile_estimates, larger, found, None, clock=clock))
            print(f"median and q90 of {clock} from every start with intervals, {n_states} states, "
                  f"{len(larger.probability):,} moves: {took:.2f} s")
    return 0


if __name__ == "__main__":
    sys.exit(main())
