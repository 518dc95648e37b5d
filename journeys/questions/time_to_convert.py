"""The share that converts, within each horizon and in the end, and how long it takes."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from functools import partial
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.errors import LogError, RulesError
from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.bins import DAY_US, STANDARD_HORIZONS_US, elapsed_edges
from journeys.kernels.phase_type import DENSE
from journeys.kernels.records import FIRST_OUTCOME
from journeys.models.fit import JourneyFit
from journeys.models.stays import journey_stays, live_buckets, outcome_column
from journeys.models.what_if import WhatIf
from journeys.questions.by_group import by_group
from journeys.questions.first_passage import from_entry
from journeys.questions.linear import TOO_FEW
from journeys.questions.passage_curve import passage_curve
from journeys.questions.within import BETWEEN_BINS, ended_within, followed_short, no_numbers, plain_share
from journeys.results import Estimates, Result, joined_flags
from journeys.tally.tally import Tally

__all__ = [
    "BETWEEN_BINS", "IN_THE_END", "NO_CURVE", "SO_FAR", "TOO_LONG", "TimeToConvertResult", "default_horizons",
    "time_to_convert",
]  # fmt: skip

IN_THE_END = "in the end"
SO_FAR = "so far"
TOO_LONG = "longer than any journey was followed"
NO_CURVE = f"no curve of time above {DENSE} states"

_Row = tuple[tuple[str, str, str], Estimates, np.ndarray]


@dataclass(frozen=True, eq=False, repr=False)
class TimeToConvertResult(Result):
    """Share converted by horizon, and median, 90 % quantile and mean of steps and days given conversion."""

    title: ClassVar[str] = "Time to convert"


def time_to_convert(
    fit: JourneyFit,
    horizons: Collection[checks.Duration] | None = None,
    *,
    by: str | Sequence[str] | None = None,
    confidence_level: float = 0.95,
) -> TimeToConvertResult:
    """Return the summary table: what share converts, by when, and how long it takes.

    Parameters
    ----------
    fit : JourneyFit
        A fit to a tally.
    horizons : collection of durations, optional
        Such as ["7d", "30d"]; default: those of the rules, else round ones that fit the conversions seen.
    by : str or sequence of str, optional
        Columns that journeys are grouped by: one fit per group, their columns first, the same horizons for all.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    TimeToConvertResult
        One row per (measure, horizon, basis). Measure `converted`: horizon "so far", by the log, is the
        plain share of all journeys; a duration, by the log, is the share of journeys with a sure entry
        converted within it, undecided ones accounted for, and by the model, beside it, what the chain makes
        of the moves; "in the end", by the model. Measures `median_steps`, `q90_steps`, `steps`,
        `median_days`, `q90_days` and `days`: median, 90 % quantile and mean given conversion, by the model. A
        what-if has no rows by the log, which did not change with it.

    Raises
    ------
    LogError
        If the fit is a known chain without a log.
    ValueError
        If a horizon is not a duration, or the level is not between 0 and 1.

    Notes
    -----
    Within horizons: the Aalen-Johansen estimate on whole journeys, those still open right-censored at their
    age, other outcomes competing; its variance is linearised over buckets of customers. The model's share is
    that of `passage_curve`, and what is "in the end" that of `first_passage`. Where the two shares of a horizon
    differ by more than their intervals, customers of several kinds are mixed, or what comes next depends on
    more than the last state.

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
    >>> answer.to_frame()[["measure", "horizon", "basis", "estimate"]].round(3).values.tolist()[:3]
    [['converted', 'so far', 'log', 0.333], ['converted', '7d', 'log', 0.333], ['converted', '7d', 'model', 0.333]]
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
    chosen = np.array(sorted(set(default_horizons(tally) if wanted is None else wanted)), np.int64)
    if by is not None:
        same = [checks.duration_text(int(one)) for one in chosen]
        return by_group(fit, by, partial(time_to_convert, horizons=same, confidence_level=level))
    so_far = [] if isinstance(fit, WhatIf) else [_so_far(tally)]
    told = [*so_far, *_within(fit, tally, chosen), *_in_the_end(fit)]
    keys, parts, flags = zip(*told, strict=True)
    return TimeToConvertResult(
        keys=pd.DataFrame(list(keys), columns=["measure", "horizon", "basis"]),
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


def _so_far(tally: Tally) -> _Row:
    """Return the plain share of journeys converted by `as_of`, undecided and unsure ones in the denominator."""
    table, bucket = tally.journeys, live_buckets(tally)
    n = table["n"].astype(np.float64)
    share = plain_share(bucket[table["bucket"]], n, _converted(tally, table["outcome"]), int(bucket.max()) + 1)
    return ("converted", SO_FAR, "log"), share, joined_flags([(share.few, TOO_FEW)], 1)


def _within(fit: JourneyFit, tally: Tally, horizons_us: IntArray) -> list[_Row]:
    """Return the share converted within each horizon, by the log and by the model."""
    sources = {} if isinstance(fit, WhatIf) else {"log": _by_log(tally, horizons_us)}
    sources["model"] = _by_model(fit, horizons_us)
    return [
        (("converted", checks.duration_text(int(one)), basis), shares.take(np.array([i])), flag[[i]])
        for i, one in enumerate(horizons_us)
        for basis, (shares, flag) in sources.items()
    ]


def _by_log(tally: Tally, horizons_us: IntArray) -> tuple[Estimates, np.ndarray]:
    """Return the share of sure-entry journeys converted within each horizon, and its flags."""
    edges = elapsed_edges(tally.rules.silence_us, tally.whole_days, tally.rules.horizons_us)
    winning = outcome_column(FIRST_OUTCOME + np.arange(len(tally.rules.converted)))
    shares, flags = ended_within(*journey_stays(tally), winning, edges).shares(horizons_us, TOO_LONG)
    if tally.rules.cohort is not None:
        # Not all of a young cohort have had the time: that is never left unsaid.
        for i, horizon in enumerate(horizons_us.tolist()):
            flags[i] = "; ".join(text for text in (flags[i], followed_short(tally, horizon)) if text)
    return shares, flags


def _by_model(fit: JourneyFit, horizons_us: IntArray) -> tuple[Estimates, np.ndarray]:
    """Return the share the chain has converted within each horizon, and its flags."""
    n = len(horizons_us)
    if fit.nodes.n_rows > DENSE:
        return no_numbers(n), np.full(n, NO_CURVE, dtype=object)
    return passage_curve(fit).estimates(horizons_us / DAY_US)


def _in_the_end(fit: JourneyFit) -> list[_Row]:
    """Return the share converted in the end, and steps and days given conversion, by the model."""
    rows: list[_Row] = []
    for clock, unit in (("steps", "steps"), ("time", "days")):
        answer = from_entry(fit, None, clock)
        wanted = {"median": f"median_{unit}", "q90": f"q90_{unit}", "mean": unit}
        if clock == "steps":
            wanted = {"probability": "converted", **wanted}
        for measure, name in wanted.items():
            row = (answer.keys.measure == measure).to_numpy()
            rows.append(((name, IN_THE_END, "model"), answer.estimates.take(row), answer.flag[row]))
    return rows
