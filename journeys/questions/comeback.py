"""Coming back at all: what share of those whose journey ended begin another one, and after how long away."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.errors import RulesError
from journeys.kernels.bins import DAY_US, STANDARD_HORIZONS_US, elapsed_edges
from journeys.kernels.records import FIRST_OUTCOME, LAPSED
from journeys.models.stays import absence_stays, live_buckets
from journeys.questions.linear import TOO_FEW
from journeys.questions.time_to_convert import IN_THE_END, SO_FAR
from journeys.questions.within import NO_UPPER_END, CurveTimes, EndedWithin, ended_within, no_numbers, plain_share
from journeys.results import Estimates, Result, joined_flags
from journeys.tally.tally import Tally

NONE_SEEN = "none seen"
NOT_FOLLOWED = "longer than any absence was followed"
STILL_SILENCE = "no absence after a lapse ends within the silence"
ALL_BACK = 1
HALF = 0.5
MOST_HORIZONS = 4

_Block = tuple[list[tuple[str, str, str]], Estimates, np.ndarray, tuple[int, int]]


@dataclass(frozen=True, eq=False, repr=False)
class ComebackResult(Result):
    """Share of absences that ended in coming back, by horizon, and the time by which half had."""

    title: ClassVar[str] = "Coming back"


def comeback(
    tally: Tally,
    after: str | Collection[str] = "lapsed",
    horizons: Collection[checks.Duration] | None = None,
    *,
    confidence_level: float = 0.95,
) -> ComebackResult:
    """Return what share of the customers whose journey ended come back, within what time.

    Parameters
    ----------
    tally : Tally
        The counts.
    after : str or collection of str
        How the journey before ended: "lapsed", an outcome, or several of these, each with rows of its own.
    horizons : collection of durations, optional
        Such as ["60d", "180d"], since the customer's last event: after a lapse the silence is part of it.
        Default: round ones as long as absences were followed, after a lapse those beyond the silence.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    ComebackResult
        One row per (after, measure, horizon). Measure `returned`: horizon "so far" is the plain share of
        ended journeys whose customer is back; a duration is the share back within it, those still away
        accounted for. Measure `median_days`: days since the last event by which half are back, missing where
        the log does not get there. Counts `n_absences` (of that kind, all told) and `n_back` (of these, over).

    Raises
    ------
    RulesError
        If the rules have no silence and `after` is "lapsed", or end a customer's story at the first outcome
        and `after` is an outcome.
    ValueError
        If `after` is neither "lapsed" nor an outcome, a horizon is not a duration, or the level is not
        between 0 and 1.
    TypeError
        If `tally` is not a tally.

    Notes
    -----
    An absence begins with the last event of a journey that ended and is over with the customer's next event
    that begins another; one that is not over by `as_of` counts as open, right-censored there. Every absence
    counts, so a customer who comes and goes counts often; the standard errors allow for it. Shares by
    Kaplan and Meier's estimate, with variance linearised over buckets of customers; the interval of the
    median lies between the times at which the curve reaches the ends of the interval of its own value.

    In words for readers, what lapsed is "quiet for over 30 days (41 % later came back)" with the share so
    far, or "... (44 % came back within 90 days of their last event)".

    References
    ----------
    E. L. Kaplan, P. Meier, Nonparametric estimation from incomplete observations, J. Amer. Statist. Assoc.
    53 (1958) 457-481. R. S. Woodruff, Confidence intervals for medians and other position measures, J. Amer.
    Statist. Assoc. 47 (1952) 635-646.

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> from journeys.tally.count import count_log
    >>> log = pd.DataFrame({"member": [1, 1, 2, 3, 3, 4], "event": "visit", "happened": pd.to_datetime(
    ...     ["2025-01-01", "2025-02-15", "2025-01-05", "2025-01-02", "2025-03-20", "2025-01-09"], utc=True)})
    >>> rules = JourneyRules("member", "happened", "event", converted="joined", silence="30d", as_of="2025-03-25")
    >>> frame = comeback(count_log(log, rules), horizons=["60d"]).to_frame()
    >>> frame[["after", "measure", "horizon", "estimate"]].round(2).values.tolist()[:2]
    [['lapsed', 'returned', 'so far', 0.4], ['lapsed', 'returned', '60d', 0.25]]
    """
    import pandas as pd

    level = checks.confidence_level(confidence_level)
    names = _asked(tally, after)
    wanted = None if horizons is None else sorted({checks.duration_us(one, "horizons") for one in horizons})
    blocks = [_block(tally, name, wanted, level) for name in names]
    keys, parts, flags, counts = zip(*blocks, strict=True)
    of = np.repeat(np.array(counts), [len(block) for block in keys], axis=0)
    return ComebackResult(
        keys=pd.DataFrame([key for block in keys for key in block], columns=["after", "measure", "horizon"]),
        estimates=Estimates.joined(parts),
        flag=np.concatenate(flags),
        counts={"n_absences": of[:, 0], "n_back": of[:, 1]},
        confidence_level=level,
    )


def _asked(tally: Tally, after: str | Collection[str]) -> list[str]:
    """Return how the journeys asked about ended, each once, in the order given."""
    if not isinstance(tally, Tally):
        msg = f"tally: got {type(tally).__name__}; wanted the counts of a log from journeys.tally, or fit.tally"
        raise TypeError(msg)
    rules = tally.rules
    names = list(dict.fromkeys([after] if isinstance(after, str) else after))
    known = ["lapsed", *rules.outcomes]
    listed = ", ".join(map(repr, known))
    wrong = [name for name in names if name not in known]
    if wrong or not names:
        got = repr(wrong[0]) if wrong else "nothing"
        msg = f"after: got {got}; wanted how a journey can end by these rules, one or more of {listed}"
        raise ValueError(msg)
    if "lapsed" in names and rules.silence_us is None:
        msg = (
            "after: got 'lapsed', but by these rules nothing lapses (silence=None), so nobody comes back from it; "
            "give the rules a silence such as \"30d\" and count the log again, or ask after an outcome"
        )
        raise RulesError(msg)
    ends = [name for name in names if name != "lapsed"]
    if ends and rules.after_outcome == "stop":
        msg = (
            f"after: got {ends[0]!r}, but by these rules a customer's story ends at the first outcome "
            '(after_outcome="stop"), so what came after it was left out; count the log again with '
            'after_outcome="reopen", or ask after "lapsed"'
        )
        raise RulesError(msg)
    return names


def _block(tally: Tally, after: str, wanted: list[int] | None, level: float) -> _Block:
    """Return keys, estimates, flags and counts of the absences after one kind of end."""
    code = LAPSED if after == "lapsed" else FIRST_OUTCOME + tally.rules.outcomes.index(after)
    least_us = (tally.rules.silence_us or 0) if after == "lapsed" else 0
    mine = tally.gaps["outcome"] == code
    back = tally.gaps["back"][mine] == 1
    n = tally.gaps["n"][mine].astype(np.float64)
    edges = elapsed_edges(tally.rules.silence_us, tally.whole_days, tally.rules.horizons_us)
    curve = ended_within(*absence_stays(tally, code), np.array([ALL_BACK]), edges) if len(n) else None
    chosen = _horizons(tally, curve, least_us) if wanted is None else wanted
    keys = [(after, "returned", SO_FAR), *((after, "returned", checks.duration_text(one)) for one in chosen)]
    keys.append((after, "median_days", IN_THE_END))
    if curve is None:
        return keys, no_numbers(len(keys)), np.full(len(keys), NONE_SEEN, dtype=object), (0, 0)
    bucket = live_buckets(tally)
    so_far = plain_share(bucket[tally.gaps["bucket"][mine]], n, back, curve.by_bucket.n_buckets)
    shares, share_flags = curve.shares(np.array(chosen, np.int64), NOT_FOLLOWED)
    too_soon = np.array(chosen, np.int64) <= least_us
    shares, share_flags = _blanked(shares, too_soon), np.where(too_soon, STILL_SILENCE, share_flags)
    half = curve.time(HALF)
    endless = np.isinf(half.bounds(level)[1])
    unreached = f"fewer than half came back within {_followed_text(curve)}"
    flag = np.concatenate([
        joined_flags([(so_far.few, TOO_FEW)], 1),
        share_flags,
        joined_flags([(np.isnan([half.days]), unreached), (np.array([half.few]), TOO_FEW),
                      (np.array([endless]), NO_UPPER_END)], 1),
    ])  # fmt: skip
    estimates = Estimates.joined([so_far, shares, CurveTimes.of(half)])
    return keys, estimates, flag, (int(n.sum()), int(n[back].sum()))


def _horizons(tally: Tally, curve: EndedWithin | None, least_us: int) -> list[int]:
    """Return round horizons beyond the shortest absence there can be: the last few that an absence was followed for.

    Where none is, the first one after that absence, so that there is a share by time to read, with its flag.
    """
    span = float(tally.as_of_us - tally.log_start_us)
    longest = span if curve is None else min(curve.bounds_us(curve.last_bin)[1], span)
    rounds = [one for one in STANDARD_HORIZONS_US if one % DAY_US == 0 or not tally.whole_days]
    beyond = [one for one in rounds if one > least_us] or [2 * least_us]
    return [one for one in beyond if one <= longest][-MOST_HORIZONS:] or beyond[:1]


def _followed_text(curve: EndedWithin) -> str:
    """Return, in words, for how long absences were followed: the last whole bin, so that it is not overstated."""
    low, high = curve.bounds_us(curve.last_bin)
    days = (low or high) / DAY_US
    if days >= 1:
        return f"{np.floor(days):.0f} day" + ("" if days < 2 else "s")
    return f"{days * 24:.2g} hours"


def _blanked(estimates: Estimates, mask: np.ndarray) -> Estimates:
    """Return the same with no number under `mask`."""
    return Estimates(
        np.where(mask, np.nan, estimates.value),
        np.where(mask, np.nan, estimates.std_error),
        np.where(mask, np.nan, estimates.df),
        estimates.scale,
        np.where(mask, np.nan, estimates.n_effective),
        estimates.few & ~mask,
    )
