"""Speed of the bootstrap over buckets beside a loop over resamples, on arrays and through the public calls.

    python tests/bench/bench_resampling.py --states 50 --customers 20000 --resamples 399

Invents a log, counts and fits it, and asks where journeys end and how long they take, in steps and days, with
intervals from resamples (removal effects are not among the questions). Beside it the same resamples one after the
other: once on arrays, with the kernels a fit is made with, once through the public fit and questions on a tally of each
resample. The public calls tell medians and 90 % quantiles too, which the loop on arrays does not: it is compared with
the calls' parts but those. Answers must agree; no figure is asserted. The loops are timed on a few
resamples and scaled up.
"""

from __future__ import annotations

import argparse
import json
import statistics
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pandas as pd
from figures import Figures, report
from measure import hold_to_two_cpus, machine

import journeys as jn
from journeys.kernels.absorption import passage
from journeys.kernels.arrays import FloatArray, sum_at
from journeys.kernels.resampling import Refitter, bucket_weights
from journeys.kernels.return_walks import passage_walk
from journeys.kernels.sojourn import fit_stays
from journeys.questions.linear import leaning, passage_spread

AT_LEAST_ARRAYS, AT_LEAST_PUBLIC = 5.0, 30.0
DAYS = 200
START_US = 1_700_000_000_000_000
DAY_US = 86_400_000_000


def invented_log(n_states: int, n_customers: int, rng: np.random.Generator) -> pd.DataFrame:
    """Return a log in which each state leads to a quarter of the others, to `joined`, or to silence."""
    heading = rng.random((n_states, n_states)) * (rng.random((n_states, n_states)) < 0.25)
    heading *= 0.82 / np.maximum(heading.sum(axis=1, keepdims=True), 1e-9)
    ways = np.column_stack([heading, rng.uniform(0.02, 0.06, n_states)]).cumsum(axis=1)
    who = np.arange(n_customers)
    when = rng.uniform(0, DAYS, n_customers)
    state = rng.integers(0, n_states, n_customers)
    seen = []
    while len(who):
        seen.append((who, when, state))
        on = state < n_states
        who, when, state = who[on], when[on], state[on]
        state, last = (rng.random(len(who))[:, None] >= ways[state]).sum(axis=1), state
        when = when + rng.lognormal(-1.0 + 0.04 * last, 1.5)
        on = (state <= n_states) & (when < DAYS)
        who, when, state = who[on], when[on], state[on]
    who, when, state = (np.concatenate(parts) for parts in zip(*seen, strict=True))
    order = np.argsort(when, kind="stable")
    names = np.array([*(f"page {i:02d}" for i in range(n_states)), "joined"], dtype=object)
    stamps = pd.DatetimeIndex((START_US + (when[order] * DAY_US).astype(np.int64)).view("datetime64[us]"), tz="UTC")
    return pd.DataFrame({"customer": who[order], "time": stamps, "event": names[state[order]]})


def counted(n_states: int, n_customers: int) -> jn.Tally:
    """Return the tally of an invented log."""
    rules = jn.JourneyRules("customer", "time", "event", converted="joined", silence="30d", complete_history=True)
    return jn.tally(invented_log(n_states, n_customers, np.random.default_rng(1)), rules)


def ask(fit: jn.JourneyFit, **options: object) -> tuple[FloatArray, ...]:
    """Return where journeys end, and the mean steps and days to join, from entry and every state."""
    ends = jn.outcomes(fit).to_frame().estimate.to_numpy()
    steps, days = (jn.first_passage(fit, "joined", clock, **options).to_frame() for clock in ("steps", "time"))  # type: ignore[arg-type]
    return ends, *(frame.estimate[frame.measure == "mean"].to_numpy() for frame in (steps, days))


@dataclass(frozen=True)
class Case:
    """A tally, its fit, and resamples of its buckets."""

    tally: jn.Tally
    fit: jn.JourneyFit
    weights: FloatArray

    def kernel(self) -> tuple[FloatArray, FloatArray]:
        """Return mean steps and days of every resample, all at once."""
        fit = self.fit
        found = []
        for steps in (True, False):
            made = Refitter(fit.fitted_stays, fit.move_state, fit.move_target, fit.nodes.n_nodes, steps=steps)  # type: ignore[arg-type]
            walk = passage_walk(fit.nodes.n_rows, made.state, made.target, fit.target_mask("joined"))
            found.append(made.draws(self.weights, [walk])[0].mean_given)
        return found[0], found[1]

    def arrays(self, b: int) -> tuple[FloatArray, FloatArray]:
        """Return mean steps and days of one resample, by the kernels that a fit is made with."""
        fit, kept, w = self.fit, self.fit.fitted_stays, self.weights[b]
        stays, split = kept.stays, kept.by_bucket  # type: ignore[union-attr]
        n = sum_at(split.cell, split.n * w[split.bucket], len(stays.n))
        total = sum_at(split.cell, split.total * w[split.bucket], len(stays.n))
        survivors = sum_at(split.survivor_state, split.survivor_n * w[split.survivor_bucket], stays.n_states)
        open_n = split.open_n * w[split.open_bucket]
        mine = replace(stays, n=n, total=total, open_n=open_n, survivor_n=survivors)
        found = fit_stays(mine, kept.found.open_weight)  # type: ignore[union-attr]
        p, size, mask = found.probability, (fit.nodes.n_rows, fit.nodes.n_nodes), fit.target_mask("joined")
        at = (found.move_state, found.move_target)
        for outcome in fit.outcomes[1:]:
            passage(*size, *at, p, p, p, fit.target_mask(outcome))
        steps, days = (passage(*size, *at, p, *two, mask) for two in ((p, p), (found.mean, found.second)))
        return steps.mean_given, days.mean_given

    def means(self) -> tuple[FloatArray, FloatArray]:
        """Do what the public calls do for all but medians and quantiles."""
        fit = jn.JourneyModel().fit(self.tally)
        jn.outcomes(fit)
        at = (fit.nodes.n_rows, fit.nodes.n_nodes, fit.move_state, fit.move_target)
        for mean, second in ((fit.probability, fit.probability), (fit.mean, fit.second)):
            found = passage(*at, fit.probability, mean, second, fit.target_mask("joined"))
            passage_spread(fit, found, steps=mean is fit.probability)
            leaning(fit)
        return self.kernel()

    def public(self, b: int) -> tuple[FloatArray, ...]:
        """Return the answers of one resample through a tally of it."""
        live = np.flatnonzero(self.tally.customers["people"] > 0)
        times = np.zeros(len(self.tally.customers["people"]), np.int64)
        times[live] = self.weights[b].astype(np.int64)
        tables = {}
        for name in ("moves", "entries", "journeys"):
            table = getattr(self.tally, name)
            kept = times[table["bucket"]] > 0
            factor = times[table["bucket"]][kept]
            sums = [key for key in table if key in ("n", "steps", "steps_squared") or key.endswith(("_high", "_low"))]
            tables[name] = {key: x[kept] * factor if key in sums else x[kept] for key, x in table.items()}
        return ask(jn.JourneyModel().fit(replace(self.tally, **tables)), method="linearised")


def seconds(work: Callable[[], object]) -> float:
    """Return how long a call takes."""
    began = time.perf_counter()
    work()
    return time.perf_counter() - began


def made(n_states: int, n_customers: int, n_resamples: int) -> Case:
    """Return the case of some size."""
    tally = counted(n_states, n_customers)
    fit = jn.JourneyModel().fit(tally)
    n_buckets = fit.fitted_stays.by_bucket.n_buckets  # type: ignore[union-attr]
    return Case(tally, fit, bucket_weights(n_buckets, n_resamples, np.random.default_rng(2)))


def compare(case: Case, repeats: int, few: int, found: Figures) -> None:
    """Time the three in turns, and hold their answers against each other."""
    n = len(case.weights)
    few = min(few, n)
    fewer = max(few // 20, 1)
    works: dict[str, tuple[Callable[[], object], float]] = {
        "fit, outcomes, first passage in steps and days with resamples, public calls":
            (lambda: ask(jn.JourneyModel().fit(case.tally), n_resamples=n), 1.0),
        "of that, all but medians and quantiles": (case.means, 1.0),
        "of that, the resamples": (case.kernel, 1.0),
        "a loop over the resamples on arrays": (lambda: [case.arrays(b) for b in range(few)], n / few),
        "fit, outcomes and first passages once per resample, public calls":
            (lambda: [case.public(b) for b in range(fewer)], n / fewer),
    }  # fmt: skip
    case.kernel()
    times: dict[str, list[float]] = {name: [] for name in works}
    for _ in range(repeats):
        for name, (work, scale) in works.items():
            times[name].append(scale * seconds(work))
    for name, taken in times.items():
        found.rows.append((f"seconds: {name}", "", f"{statistics.median(taken):.2f}", ""))
    whole, means, kernels, arrays, public = (np.array(taken) for taken in times.values())
    ratio = statistics.median(arrays / means)
    found.compare("speed, without medians and quantiles, against the loop on arrays", ratio, least=AT_LEAST_ARRAYS)
    found.compare("speed against the public calls", statistics.median(public / whole), least=AT_LEAST_PUBLIC)
    found.compare("speed of the resamples alone against the loop on arrays", statistics.median(arrays / kernels))
    check(case, found)


def check(case: Case, found: Figures) -> None:
    """Hold the means of two resamples against each other, in steps and days."""
    whole = case.kernel()
    for b in range(2):
        for name, other in (("arrays", case.arrays(b)), ("public calls", case.public(b)[1:])):
            pairs = zip(whole, other, strict=True)
            same = all(np.allclose(one[b], two, rtol=1e-8, equal_nan=True) for one, two in pairs)
            found.answers.append((f"resample {b}: all at once, and by {name}", same))


def main() -> int:
    """Print the figures; 1 where answers differ."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--states", type=int, default=50)
    parser.add_argument("--customers", type=int, default=20_000)
    parser.add_argument("--resamples", type=int, default=399)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--few", type=int, default=60, help="resamples on which the loop on arrays is timed")
    parser.add_argument("--json", type=Path, help="write the figures there too")
    options = parser.parse_args()
    hold_to_two_cpus()
    case, found = made(options.states, options.customers, options.resamples), Figures()
    stays = case.fit.fitted_stays.stays  # type: ignore[union-attr]
    for name, value in (
        ("states", options.states), ("bins", stays.n_bins), ("buckets", case.weights.shape[1]),
        ("cells", len(stays.n)), ("moves", len(case.fit.probability)), ("resamples", len(case.weights)),
    ):  # fmt: skip
        found.rows.append((name, "", f"{value:,}", ""))
    compare(case, options.repeats, options.few, found)
    print(report(machine(), found))
    if options.json:
        told = {"rows": found.rows, "answers": found.answers}
        options.json.write_text(json.dumps(told), encoding="utf-8")
    return 0 if all(same for _, same in found.answers) else 1


if __name__ == "__main__":
    sys.exit(main())
