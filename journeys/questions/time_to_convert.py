"""The share that converts, within each horizon and in the end, and how long it takes."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.errors import LogError, RulesError
from journeys.kernels.arrays import BoolArray
from journeys.kernels.bins import DAY_US, STANDARD_HORIZONS_US, elapsed_edges
from journeys.kernels.intervals import variance_from_buckets
from journeys.kernels.records import FIRST_OUTCOME
from journeys.kernels.sojourn import StayFit, cell_influence, fit_stays
from journeys.kernels.stays import Stays
from journeys.models.fit import JourneyFit
from journeys.models.stays import journey_stays, live_buckets, outcome_column
from journeys.questions.first_passage import first_passage
from journeys.questions.linear import TOO_FEW, probabilities
from journeys.results import LOGIT, Estimates, Result, joined_flags
from journeys.tally.tally import Tally

IN_THE_END = "in the end"
SO_FAR = "so far"
BETWEEN_BINS = "read between bin edges"
TOO_LONG = "longer than any journey was followed"


@dataclass(frozen=True, eq=False, repr=False)
class TimeToConvertResult(Result):
    """Share converted by horizon, and mean steps and days given conversion."""

    title: ClassVar[str] = "Time to convert"


def time_to_convert(
    fit: JourneyFit, horizons: Collection[checks.Duration] | None = None, *, confidence_level: float = 0.95
) -> TimeToConvertResult:
    """Return the summary table: what share converts, by when, and how long it takes.

    Parameters
    ----------
    fit : JourneyFit
        A fit to a tally.
    horizons : collection of durations, optional
        Such as ["7d", "30d"]; default: those of the rules, else round ones that fit the conversions seen.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    TimeToConvertResult
        One row per (measure, horizon, basis). Measure `converted`: horizon "so far", by the log, is the
        plain share of all journeys; a duration, by the log, is the share of journeys with a sure entry
        converted within it, undecided ones accounted for; "in the end", by the model. Measures `steps` and
        `days`: means given conversion, by the model.

    Raises
    ------
    LogError
        If the fit is a known chain without a log.
    ValueError
        If a horizon is not a duration, or the level is not between 0 and 1.

    Notes
    -----
    Within horizons: the Aalen-Johansen estimate on whole journeys, those still open right-censored at their
    age, other outcomes competing; its variance is linearised over buckets of customers.

    References
    ----------
    P. K. Andersen, O. Borgan, R. D. Gill, N. Keiding, Statistical Models Based on Counting Processes,
    Springer 1993, section IV.4.

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> from journeys.models.model import JourneyModel
    >>> from journeys.tally.count import count_log
    >>> days = ["2025-01-01", "2025-01-03", "2025-01-02", "2025-01-02", "2025-01-05"]
    >>> log = pd.DataFrame({"member": [1, 1, 2, 3, 3], "event": ["visit", "joined", "visit", "visit", "left"],
    ...                     "happened": pd.to_datetime(days, utc=True)})
    >>> rules = JourneyRules("member", "happened", "event", converted="joined", churned="left", silence="30d",
    ...                      complete_history=True, as_of="2025-03-01")
    >>> answer = time_to_convert(JourneyModel().fit(count_log(log, rules)), ["7d"])
    >>> answer.to_frame()[["measure", "horizon", "estimate"]].round(3).values.tolist()[:3]
    [['converted', 'so far', 0.333], ['converted', '7d', 0.333], ['converted', 'in the end', 0.333]]
    """
    import pandas as pd

    level = checks.confidence_level(confidence_level)
    tally = fit.tally
    if tally is None:
        msg = "this chain was given, not fitted to a log, so there is no time to convert to count; ask first_passage"
        raise LogError(msg)
    if not fit.converted:
        msg = "the rules name no converted outcome; wanted converted=[...] in the rules"
        raise RulesError(msg)
    wanted = None if horizons is None else [checks.duration_us(one, "horizons") for one in horizons]
    chosen = sorted(set(default_horizons(tally) if wanted is None else wanted))
    so_far = _so_far(fit, tally)
    by_log, log_flags = _within(fit, tally, np.array(chosen, np.int64))
    parts, keys = [so_far, by_log], [("converted", SO_FAR, "log")]
    keys += [("converted", checks.duration_text(one), "log") for one in chosen]
    flags = [joined_flags([(so_far.few, TOO_FEW)], 1), log_flags]
    for clock, measure, names in (
        ("steps", "probability", "converted"),
        ("steps", "mean", "steps"),
        ("time", "mean", "days"),
    ):
        answer = first_passage(fit, None, clock)
        row = ((answer.keys.start_state == "entry") & (answer.keys.measure == measure)).to_numpy()
        parts.append(answer.estimates.take(row))
        flags.append(answer.flag[row])
        keys.append((names, IN_THE_END, "model"))
    return TimeToConvertResult(
        keys=pd.DataFrame(keys, columns=["measure", "horizon", "basis"]),
        estimates=Estimates.joined(parts),
        flag=np.concatenate(flags),
        confidence_level=level,
    )


def default_horizons(tally: Tally) -> list[int]:
    """Return the horizons of the rules, else four round ones around the elapsed times of the conversions seen.

    Parameters
    ----------
    tally : Tally
        The counts.

    Returns
    -------
    list of int
        Microseconds, increasing.
    """
    if tally.rules.horizons_us:
        return sorted(tally.rules.horizons_us)
    table = tally.journeys
    mine = _converted(tally, table["outcome"]) & (table["sure"] == 1)
    if not mine.any():
        return [7 * DAY_US, 30 * DAY_US]
    order = np.argsort(table["bin"][mine], kind="stable")
    bins, n = table["bin"][mine][order], table["n"][mine][order]
    share = np.cumsum(n) / n.sum()
    round_ones = [one for one in STANDARD_HORIZONS_US if not tally.whole_days or one % DAY_US == 0]
    edges = elapsed_edges(tally.rules.silence_us, tally.whole_days, tally.rules.horizons_us)
    picked = []
    for quantile in (0.25, 0.5, 0.75, 0.95):
        at = bins[np.searchsorted(share, quantile)]
        elapsed = int(at) * DAY_US if edges is None else int(edges[at])
        fitting = [one for one in round_ones if one >= elapsed] or [round_ones[-1]]
        picked.append(fitting[0])
    span = tally.as_of_us - tally.log_start_us
    return [one for one in sorted(set(picked)) if one <= span] or [round_ones[0]]


def _converted(tally: Tally, outcome: np.ndarray) -> BoolArray:
    return (outcome >= FIRST_OUTCOME) & (outcome < FIRST_OUTCOME + len(tally.rules.converted))


def _so_far(fit: JourneyFit, tally: Tally) -> Estimates:
    """Return the plain share of journeys converted by `as_of`, undecided and unsure ones in the denominator."""
    table, bucket = tally.journeys, live_buckets(tally)
    size = int(bucket.max()) + 1
    mine = _converted(tally, table["outcome"])
    whose = bucket[table["bucket"]]
    all_n = np.bincount(whose, table["n"], size)
    won = np.bincount(whose[mine], table["n"][mine], size)
    share = won.sum() / all_n.sum()
    variance, df = variance_from_buckets((won - share * all_n) / all_n.sum())
    one = np.array([share])
    return probabilities(fit, one, np.sqrt(variance)[None], df[None], np.array([all_n.sum()]), LOGIT)


def _within(fit: JourneyFit, tally: Tally, horizons_us: np.ndarray) -> tuple[Estimates, np.ndarray]:
    """Return the share of sure-entry journeys converted within each horizon."""
    stays, by_bucket = journey_stays(tally)
    found = fit_stays(stays, 0.0 if tally.whole_days else 0.5)
    edges = elapsed_edges(tally.rules.silence_us, tally.whole_days, tally.rules.horizons_us)
    winning = np.isin(stays.target, outcome_column(FIRST_OUTCOME + np.arange(len(tally.rules.converted))))
    value, influence, between = [], [], []
    for horizon in horizons_us:
        weight, exact = _share_of_bins(int(horizon), edges, stays)
        phi = winning * weight[stays.bin]
        value.append(float(found.q @ phi))
        influence.append(cell_influence(found, stays, by_bucket, phi, np.zeros(1)))
        between.append(not exact)
    variance, df = variance_from_buckets(np.stack(influence, axis=1))
    trials = np.full(len(value), stays.n.sum())
    estimates = probabilities(fit, np.array(value), np.sqrt(variance), df, trials, LOGIT)
    beyond = horizons_us > _followed(found, stays)
    flag = joined_flags([(np.array(between), BETWEEN_BINS), (beyond, TOO_LONG), (estimates.few, TOO_FEW)], len(value))
    return estimates, flag


def _share_of_bins(horizon_us: int, edges: np.ndarray | None, stays: Stays) -> tuple[np.ndarray, bool]:
    """Return the share of each bin that lies within the horizon, and whether it is a bin edge."""
    if edges is None:
        return (np.arange(stays.n_bins) <= horizon_us // DAY_US).astype(float), horizon_us % DAY_US == 0
    upper = edges[: stays.n_bins].astype(float)
    lower = np.concatenate([[0.0], upper[:-1]])
    return np.clip((horizon_us - lower) / (upper - lower), 0.0, 1.0), bool((edges == horizon_us).any())


def _followed(found: StayFit, stays: Stays) -> float:
    """Return the longest elapsed time (microseconds) at which a journey was still at risk, or infinity."""
    if found.survival_end[0] <= 1e-12:
        return np.inf
    at_risk = np.flatnonzero(found.at_risk[0] > 0)
    return float(stays.upper[at_risk[-1]] * DAY_US) if len(at_risk) else 0.0
