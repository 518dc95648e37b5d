"""Model against log: days, steps and touchpoints of those who convert, and the curve of who has converted by when."""

from __future__ import annotations

from collections.abc import Collection

import numpy as np

from journeys.kernels.arrays import IntArray
from journeys.kernels.bins import DAY_US
from journeys.kernels.largest import largest_of
from journeys.kernels.phase_type import DENSE
from journeys.models.fit import JourneyFit
from journeys.questions.both_ways import BothCurves
from journeys.questions.check_rows import CheckRow, beyond_rounding, difference_row, not_run
from journeys.questions.elapsed import elapsed
from journeys.questions.ended import Sums, ended, rows_ended
from journeys.questions.solved_curve import SolvedTime
from journeys.questions.touch_shares import touched
from journeys.questions.walks import walk_to
from journeys.tally.accumulate import join_limbs

DAYS, STEPS, CURVE = "days to convert", "steps to convert", "curve of conversion"
TOUCHES = "touchpoints of conversions"
# Conversions in all, and on each side of a time or with and without a touchpoint looked at.
ENOUGH = 20.0
# Buckets that are not empty: with fewer nobody knows how much customers differ.
ENOUGH_BUCKETS = 10
# The model's curves are solved to within so much.
OFF = 2e-4
# From one state to any other at every frequency: so many fill some 200 MB.
MOST_ON_THE_WAY = 100
MIXED = (
    "customers may be of several kinds or in several tempi: group them (`by`), trust conversion more than times, and "
    "see the check of memory"
)
REMEMBERED = (
    'credit by the log does not need the chain: use `credit(basis="log")`, and read removal effects with '
    "`share_in_log` beside them"
)
LONGER = "wait for a longer log, or give a shorter silence"


def way_rows(
    fit: JourneyFit, to: str | Collection[str] | None, codes: IntArray, rng: np.random.Generator
) -> list[CheckRow]:
    """Return the checks of days, steps, the curve and touchpoints."""
    walk = walk_to(fit, to)
    if walk.n_states > DENSE:
        return _none(f"curves in time are for up to {DENSE} states, this chain has {walk.n_states:,}")
    it = elapsed(fit, walk)
    if it is None or fit.tally is None or not it.found.probability[0] > 0:
        return _none("nobody is expected to convert")
    both = BothCurves(ended(fit.tally), codes, SolvedTime(it, 0))
    if both.journeys.by_bucket.n_buckets < ENOUGH_BUCKETS:
        return _none(f"fewer than {ENOUGH_BUCKETS} groups of customers to tell chance by")
    n = float(both.n_by_bin.sum()) if both.last_bin >= 0 else 0.0
    if n < ENOUGH:
        return _none(f"{n:,.0f} conversions of journeys whose start was seen, fewer than {ENOUGH:g}", LONGER)
    if walk.n_states > MOST_ON_THE_WAY:
        why = f"compared for up to {MOST_ON_THE_WAY} states, this chain has {walk.n_states:,}"
        return [_days(both), not_run(STEPS, why), _curve(both, rng), not_run(TOUCHES, why)]
    return [_days(both), _steps(both), _curve(both, rng), _touches(both, fit, rng)]


def _none(why: str, advice: str = "") -> list[CheckRow]:
    return [not_run(name, why, advice) for name in (DAYS, STEPS, CURVE, TOUCHES)]


def _days(both: BothCurves) -> CheckRow:
    """Compare the mean days of those who convert by the last time followed."""
    last, few = both.last, both.few_times
    n, days = _sums(both, "elapsed")
    log = days.over(n)
    model = both.mean_by_model()
    area, share = both.area(both.upper[few]), both.by_model[few]
    slope = -area / share[-1]
    slope[-1] += float(area @ share) / share[-1] ** 2
    size = model - float(log.value[0])
    influence = both.model_influence @ slope - log.influence[:, 0]
    compared = f"mean of those who convert within {last:.3g} days: model {model:.3g}, log {log.value[0]:.3g} days"
    differs = f"the model's times are too {'long' if size > 0 else 'short'}"
    return difference_row(DAYS, size, influence, "days", (compared, differs, MIXED), OFF * model)


def _steps(both: BothCurves) -> CheckRow:
    """Compare the mean steps of those who convert by the last time followed."""
    model = both.moves_by_then().over(both.by_then())
    n, steps = _sums(both, "steps")
    log = steps.over(n)
    size = float(model.value[0] - log.value[0])
    both_means = f"model {model.value[0]:.3g}, log {log.value[0]:.3g} steps"
    compared = f"mean of those who convert within {both.last:.3g} days: {both_means}"
    differs = f"the model's ways are too {'long' if size > 0 else 'short'}"
    influence = model.influence[:, 0] - log.influence[:, 0]
    return difference_row(STEPS, size, influence, "steps", (compared, differs, MIXED), OFF * float(model.value[0]))


def _curve(both: BothCurves, rng: np.random.Generator) -> CheckRow:
    """Compare the curves where they are furthest apart for their uncertainty."""
    sofar = np.cumsum(both.n_by_bin)[both.few_times]
    apart = np.flatnonzero((sofar >= ENOUGH) & (sofar[-1] - sofar >= ENOUGH))
    if not len(apart):
        return not_run(CURVE, f"at no time {ENOUGH:g} conversions before it and after it", LONGER)
    log, log_influence = both.log_curve()
    model = both.by_model[both.few_times]
    difference = (model - log)[apart]
    influence = (both.model_influence - log_influence)[:, apart]
    z, p = largest_of(beyond_rounding(difference, OFF), influence, rng)
    at = int(np.abs(z).argmax())
    time, size = both.upper[both.few_times[apart[at]]], 100.0 * float(difference[at])
    compared = (
        f"converted within {time:.3g} days, of {len(apart)} times the one most apart: "
        f"model {100 * model[apart[at]]:.1f} %, log {100 * log[apart[at]]:.1f} %"
    )
    differs = f"the model has {'more' if size > 0 else 'fewer'} converted by then"
    return CheckRow(CURVE, "", compared, size, "points", p_alone=p, verdict=differs, advice=MIXED)


def _touches(both: BothCurves, fit: JourneyFit, rng: np.random.Generator) -> CheckRow:
    """Compare the share of the conversions that touch each touchpoint, of those by the last time followed."""
    tally = both.journeys.tally
    if not len(tally.touches["n"]):
        return not_run(TOUCHES, "no touches were counted", 'name `touchpoints` in the rules, or "all"')
    rows = {name: fit.nodes.rows_of(name) for name in tally.touchpoints}
    names = [name for name, mine in rows.items() if len(mine)]
    log = touched(both.journeys, both.codes, [[name] for name in names], np.ones(len(names), bool), both.last_bin)
    log = log.over(_sums(both, "steps")[0])
    parts = [both.touching_by_then(rows[name]).over(both.by_then()) for name in names]
    model = np.array([part.value[0] for part in parts])
    smaller = np.maximum(np.minimum(log.value, 1 - log.value), np.minimum(model, 1 - model))
    mine = np.flatnonzero(smaller * both.n_by_bin.sum() >= ENOUGH)
    if not len(mine):
        return not_run(TOUCHES, f"no touchpoint has {ENOUGH:g} conversions with it and without it", LONGER)
    difference = model - log.value
    influence = np.concatenate([part.influence for part in parts], axis=1) - log.influence
    z, p = largest_of(beyond_rounding(difference[mine], OFF), influence[:, mine], rng)
    at = int(mine[np.abs(z).argmax()])
    compared = (
        f"conversions within {both.last:.3g} days that touch {names[at]}, of {len(mine)} touchpoints the one most "
        f"apart: model {100 * model[at]:.1f} %, log {100 * log.value[at]:.1f} %"
    )
    size = 100.0 * float(difference[at])
    differs = f"by the model {'more' if size > 0 else 'fewer'} conversions pass there"
    return CheckRow(TOUCHES, names[at], compared, size, "points", p_alone=p, verdict=differs, advice=REMEMBERED)


def _sums(both: BothCurves, name: str) -> tuple[Sums, Sums]:
    """Return the weighted conversions by the last time followed, and their days or steps."""
    journeys = both.journeys
    rows = rows_ended(journeys.tally.journeys, both.codes, both.last_bin)
    amount = join_limbs(rows, "elapsed") / DAY_US if name == "elapsed" else rows[name].astype(np.float64)
    none = np.zeros(len(amount), np.int64)
    return journeys.sums(rows, none, rows["n"].astype(np.float64), 1), journeys.sums(rows, none, amount, 1)
