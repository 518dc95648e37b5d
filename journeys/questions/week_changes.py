"""Whether a week differs from the span before it: who converts in time, and where stays lead."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at
from journeys.kernels.intervals import t_interval, t_test, variance_from_buckets
from journeys.kernels.records import OPEN
from journeys.tally.tables import N_BUCKETS
from journeys.tally.weeks import JOURNEY, STAY

if TYPE_CHECKING:
    import pandas as pd

CONVERTED, MOVE = "converted", "move"
COLUMNS = (
    "measure", "state", "next_state", "n_before", "n_now", "before", "now", "difference", "std_error", "low", "high",
    "p_value", "p_value_corrected",
)  # fmt: skip
# A share that fewer stand behind, on either side and either way, is not compared: its spread cannot be judged.
FEWEST = 5
# An event seen less often a week is not missed when it stays away, nor when it comes half as often.
FEWEST_TO_MISS, FEWEST_TO_HALVE = 10, 50
NEW, GONE, HALVED = "new", "gone", "halved"


@dataclass(frozen=True)
class _Side:
    """For each bucket, how many there are and how many of them went one way."""

    n: FloatArray
    x: FloatArray

    @property
    def share(self) -> float:
        return float(self.x.sum() / self.n.sum())

    @property
    def pull(self) -> FloatArray:
        """How each bucket pulls on the share."""
        return np.asarray((self.x - self.share * self.n) / self.n.sum())


def week_changes(
    table: Mapping[str, NDArray[Any]],
    names: Sequence[str],
    before: range,
    now: int,
    *,
    keep: BoolArray | None = None,
    confidence_level: float = 0.95,
) -> pd.DataFrame:
    """Return how a week differs from the weeks before it.

    Parameters
    ----------
    table : mapping of str to ndarray
        Columns bucket, state, next, flag, week and n of `tally.weeks`, one row per key.
    names : sequence of str
        What the codes of states stand for.
    before : range
        The weeks before.
    now : int
        The week.
    keep : ndarray of bool, optional
        Rows to look at: those of a group.
    confidence_level : float
        Of the intervals.

    Returns
    -------
    DataFrame
        One row for conversion and one for each move that is common enough, with the columns `COLUMNS`: shares before
        and now, their difference with its interval, and the p-value, not yet corrected (p_value_corrected is NaN).

    Notes
    -----
    Both shares are ratios of sums over customers; each of the 200 buckets pulls on the difference by what it holds of
    both, so that customers seen in both weeks are allowed for. The variance is at least that of two shares of
    independent trials that do not differ.
    """
    import pandas as pd

    rows = np.isin(table["week"], [*before, now]) & (True if keep is None else keep)
    held = {name: column[rows] for name, column in table.items()}
    later = held["week"] == now
    answers = []
    journey = held["flag"] == JOURNEY
    answers.append(_difference(CONVERTED, "entry", "", held, journey, held["next"] == 1, later, confidence_level))
    stay = held["flag"] == STAY
    pairs = np.unique(np.stack([held["state"][stay], held["next"][stay]]), axis=1)
    for state, next_code in pairs.T.tolist():
        if next_code == OPEN:
            continue
        mine = stay & (held["state"] == state)
        there = held["next"] == next_code
        answers.append(_difference(MOVE, names[state], names[next_code], held, mine, there, later, confidence_level))
    return pd.DataFrame([one for one in answers if one is not None], columns=list(COLUMNS))


def _difference(
    measure: str,
    state: str,
    next_state: str,
    held: Mapping[str, IntArray],
    mine: BoolArray,
    went: BoolArray,
    later: BoolArray,
    level: float,
) -> tuple[Any, ...] | None:
    """Return the difference of one share, None where too few stand behind it."""
    a, b = (_side(held, mine & side, went) for side in (~later, later))
    if min(a.n.sum(), b.n.sum()) == 0:
        return None
    pooled = (a.x.sum() + b.x.sum()) / (a.n.sum() + b.n.sum())
    if min(a.n.sum(), b.n.sum()) * min(pooled, 1 - pooled) < FEWEST:
        return None
    live = (a.n + b.n) > 0
    variance, df = variance_from_buckets((b.pull - a.pull)[live])
    # All or nothing has no spread between buckets: then what chance alone would give if nothing had changed.
    by_chance = pooled * (1 - pooled) * (1 / a.n.sum() + 1 / b.n.sum())
    difference, std_error = b.share - a.share, float(np.sqrt(np.fmax(variance, by_chance)))
    low, high = np.clip(t_interval(difference, std_error, df, level), -1, 1)
    p_value = float(t_test(difference, std_error, df))
    return (
        measure, state, next_state, int(a.n.sum()), int(b.n.sum()), a.share, b.share, difference, std_error,
        float(low), float(high), p_value, np.nan,
    )  # fmt: skip


def _side(held: Mapping[str, IntArray], mine: BoolArray, went: BoolArray) -> _Side:
    n, x = (sum_at(held["bucket"][rows], held["n"][rows].astype(np.float64), N_BUCKETS) for rows in (mine, mine & went))
    return _Side(n, x)


def event_changes(
    by_week: Mapping[str, Mapping[int, int]], before: range, now: int
) -> list[tuple[str, str, float, int]]:
    """Return events that are new in a week, have gone, or come half as often as in the weeks before.

    Parameters
    ----------
    by_week : mapping of str to mapping of int to int
        For each event, how often it came in each week; weeks in which it did not come may be left out.
    before : range
        The weeks before; at least one.
    now : int
        The week.

    Returns
    -------
    list of (event, what, mean number a week before, number now)
        `what` is "new", "gone" or "halved".

    Examples
    --------
    >>> event_changes({"visit": {0: 90, 1: 110, 2: 40}, "joined": {0: 9, 1: 8}, "quiz": {2: 3}}, range(2), 2)
    [('quiz', 'new', 0.0, 3), ('visit', 'halved', 100.0, 40)]
    """
    found = []
    for event in sorted(by_week):
        mean = sum(by_week[event].get(week, 0) for week in before) / len(before)
        n = by_week[event].get(now, 0)
        if n and not any(count for week, count in by_week[event].items() if week < now):
            found.append((event, NEW, mean, n))
        elif not n and mean >= FEWEST_TO_MISS:
            found.append((event, GONE, mean, n))
        elif n <= mean / 2 and mean >= FEWEST_TO_HALVE:
            found.append((event, HALVED, mean, n))
    return found
