"""What journeys are worth in money."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace
from functools import partial
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.errors import LogError
from journeys.kernels.arrays import IntArray
from journeys.kernels.records import FIRST_OUTCOME, LAPSED
from journeys.models.fit import JourneyFit
from journeys.models.what_if import WhatIf
from journeys.questions import cautions
from journeys.questions.by_group import by_group
from journeys.questions.ended import Ended, Sums, ended, rows_ended
from journeys.questions.linear import ENOUGH_DF, ENOUGH_EVENTS, LEANS, TOO_FEW
from journeys.questions.stage_rows import NEVER_SEEN, flags
from journeys.questions.stages_by_log import NOT_TO_THE_END
from journeys.questions.touch_shares import outcome_codes
from journeys.results import KNOWN, PLAIN, Estimates, Result
from journeys.tally.accumulate import exact_limbs, join_limbs
from journeys.tally.tally import Tally

PER_JOURNEY, PER_CONVERSION, TOTAL, LARGEST = MEASURES = (
    "value_per_journey", "value_per_conversion", "total_so_far", "largest_customer_share",
)  # fmt: skip
NOT_OF_A_PART = "not known for a part of the journeys"
NOTHING_IN_ALL = "adds up to nothing or less"
# Of the value, with one customer, above which means are flagged (a judgement).
HEAVY = 0.05
_MILLION = 1_000_000
_ROUNDING = 1e-9


@dataclass(frozen=True, eq=False, repr=False)
class WorthResult(Result):
    """Worth of journeys, in the unit of the column of values."""

    title: ClassVar[str] = "What journeys are worth"

    @property
    def cautions(self) -> tuple[str, ...]:
        """What to keep in mind with these numbers."""
        return (cautions.HEAVY_TAIL,)

    def summary(self) -> str:
        """Return the answer as plain text, then what to keep in mind."""
        return f"{super().summary()}\n\n{cautions.told(self.cautions)}"


def worth(
    fit: JourneyFit,
    to: str | Collection[str] | None = None,
    *,
    by: str | Sequence[str] | None = None,
    confidence_level: float = 0.95,
) -> WorthResult:
    """Return what a journey, and a conversion, is worth in money.

    Parameters
    ----------
    fit : JourneyFit
        A fit to a log whose rules name a column of `value`.
    to : str or collection of str, optional
        The outcomes that count as conversions; default: all converted ones.
    by : str or sequence of str, optional
        Columns that journeys are grouped by: one block of rows per group.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    WorthResult
        One row per measure, in the unit of the column. `value_per_journey`: mean worth of all journeys that begin,
        whatever becomes of them. `value_per_conversion`: mean worth of those that convert. `total_so_far`: of all
        journeys, open ones too. `largest_customer_share`: part of that total that one customer holds; not known for
        part of the journeys. `n_journeys`: journeys behind the number. Where one customer holds more than 5 % of the
        value the flag says so: means then rest on few.

    Raises
    ------
    LogError
        If no values were counted, the chain was given or changed by hand, or no group can carry a fit.
    ValueError
        If `to` has a state in it, or another argument is not one of those.

    Notes
    -----
    With a journey worth the sum of its events: over the journeys with a sure entry that have ended, the sum of the
    worth of each, weighted by the jump of the Aalen-Johansen estimate of its outcome, which is the probability of each
    outcome times the mean worth of journeys that end so. What had not ended by the time journeys were followed to adds
    nothing, and is flagged where it is more than 1 %. Intervals from the linearised cluster variance, even about the
    estimate.

    References
    ----------
    P. K. Andersen, O. Borgan, R. D. Gill, N. Keiding, Statistical Models Based on Counting Processes, Springer 1993,
    section IV.4.

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> from journeys.models.model import JourneyModel
    >>> from journeys.tally.count import count_log
    >>> log = pd.DataFrame({"member": [1, 1, 2], "event": ["visit", "joined", "visit"], "fee": [0.0, 30.0, 0.0],
    ...                     "happened": pd.to_datetime(["2025-01-01", "2025-01-03", "2025-01-02"], utc=True)})
    >>> rules = JourneyRules("member", "happened", "event", converted="joined", silence="30d", value="fee",
    ...                      complete_history=True, as_of="2025-04-01")
    >>> frame = worth(JourneyModel().fit(count_log(log, rules))).to_frame()
    >>> frame[["measure", "estimate", "n_journeys"]].values.tolist()[:3]
    [['value_per_journey', 15.0, 2.0], ['value_per_conversion', 30.0, 1.0], ['total_so_far', 30.0, 2.0]]
    """
    level = checks.confidence_level(confidence_level)
    ask = partial(_worth, to=to, level=level)
    return ask(fit) if by is None else by_group(fit, by, ask)


def _worth(fit: JourneyFit, *, to: str | Collection[str] | None, level: float) -> WorthResult:
    """Answer for one fit."""
    import pandas as pd

    tally, codes = _checked(fit, to)
    journeys = ended(tally)
    ends = np.array([LAPSED, *range(FIRST_OUTCOME, tally.first_state)], dtype=np.int64)
    all_of_them, converted = _worth_of(journeys, ends), _worth_of(journeys, codes).over(journeys.share(codes))
    total, largest = _total(tally)
    n = np.array([journeys.n_journeys(ends), journeys.n_journeys(codes), float(tally.n_journeys), np.nan])
    means = [_mean(sums, trials) for sums, trials in ((all_of_them, n[0]), (converted, n[1]))]
    share = largest / total if total > 0 else np.nan
    heavy = (share > HEAVY, f"one customer holds {100 * share:.0f} % of the value")
    left = (journeys.left > LEANS, NOT_TO_THE_END)
    few = [(bool(one.few[0]) and bool(np.isfinite(one.value[0])), TOO_FEW) for one in means]
    return WorthResult(
        keys=pd.DataFrame({"measure": np.array(MEASURES, dtype=object)}),
        estimates=Estimates.joined([*means, _known(total), _known(share)]),
        flag=np.array(
            [
                flags((n[0] == 0, NEVER_SEEN), few[0], left, heavy),
                flags((n[1] == 0, NEVER_SEEN), few[1], left, heavy),
                flags(heavy),
                flags((tally.part, NOT_OF_A_PART), (not total > 0, NOTHING_IN_ALL), heavy),
            ],
            dtype=object,
        ),
        counts={"n_journeys": n},
        confidence_level=level,
    )


def _checked(fit: JourneyFit, to: str | Collection[str] | None) -> tuple[Tally, IntArray]:
    """Return the counts and the codes of the conversions, if the log tells of their worth."""
    if fit.tally is None or isinstance(fit, WhatIf):
        msg = "this chain was given or changed by hand: no log tells what its journeys are worth; wanted a fit to a log"
        raise LogError(msg)
    if fit.tally.rules.value is None:
        msg = 'no values were counted; name the column of amounts in the rules (value="…") and count again'
        raise LogError(msg)
    codes = outcome_codes(fit, fit.target_mask(to))
    if codes is None:
        msg = "`to` has a state in it, and values are counted by outcome; wanted one or more outcomes"
        raise ValueError(msg)
    return fit.tally, codes


def _worth_of(journeys: Ended, codes: IntArray) -> Sums:
    """Return the weighted worth of journeys that ended in some outcomes, per journey that begins."""
    rows = rows_ended(journeys.tally.journeys, codes)
    return journeys.sums(rows, np.zeros(len(rows["n"]), np.int64), join_limbs(rows, "value") / _MILLION, 1)


def _mean(sums: Sums, trials: float) -> Estimates:
    if not trials:
        return replace(_known(np.nan), scale=np.array([PLAIN], dtype=object))
    std_error, df = sums.spread()
    if std_error[0] <= _ROUNDING * abs(float(sums.value[0])):
        # All alike, as where everyone pays one price.
        std_error, df = np.zeros(1), np.full(1, len(sums.influence) - 1.0)
    few = ~(df >= ENOUGH_DF) | (trials < ENOUGH_EVENTS)
    return Estimates(sums.value, std_error, df, np.array([PLAIN], dtype=object), np.full(1, np.nan), few)


def _known(value: float) -> Estimates:
    nothing = np.full(1, np.nan)
    known = np.array([KNOWN], dtype=object)
    spread = np.zeros(1) if np.isfinite(value) else nothing
    return Estimates(np.array([value]), spread, np.full(1, np.inf), known, nothing, np.zeros(1, bool))


def _total(tally: Tally) -> tuple[float, float]:
    """Return what all journeys are worth so far, and the customer with the most; that is not known in a part."""
    total = sum(exact_limbs(tally.journeys, "value")) / _MILLION
    if tally.part:
        return total, np.nan
    return total, int(tally.customers["largest_value"].max(initial=0)) / _MILLION
