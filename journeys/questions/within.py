"""By when stays end in a wanted way, those still open accounted for, and by when a given share of them has."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from journeys.checks import duration_text
from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at
from journeys.kernels.bins import DAY_US
from journeys.kernels.intervals import logit_interval, variance_from_buckets
from journeys.kernels.sojourn import StayFit, cell_influence, fit_stays
from journeys.kernels.stays import BucketStays, Stays
from journeys.questions.linear import ENOUGH_DF, ENOUGH_EVENTS, TOO_FEW, probabilities
from journeys.results import LOG, LOGIT, Estimates, joined_flags
from journeys.tally.spans import surely_followed_us
from journeys.tally.tally import Tally

BETWEEN_BINS = "read between bin edges"
NO_UPPER_END = "no upper end: the share may never get there"

# A share within rounding of the wanted one has got there.
_CLOSE = 1e-12


@dataclass(frozen=True, eq=False)
class EndedWithin:
    """The share of stays that have ended in a wanted way, by time since they began.

    Attributes
    ----------
    stays, by_bucket : Stays, BucketStays
        Stays in one state, in all and by bucket of customers.
    found : StayFit
        The estimates from them.
    winning : ndarray of bool, shape (n_cells,)
        Which cells are the wanted end.
    edges_us : ndarray of int64 or None
        Upper edges of the bins in microseconds; None for bins of whole days.
    share : ndarray, shape (n_bins,)
        Share ended so by the end of each bin.
    """

    stays: Stays
    by_bucket: BucketStays
    found: StayFit
    winning: BoolArray
    edges_us: IntArray | None
    share: FloatArray

    @property
    def last_bin(self) -> int:
        """The last bin in which a stay was still at risk; -1 without stays."""
        at_risk = np.flatnonzero(self.found.at_risk[0] > 0)
        return int(at_risk[-1]) if len(at_risk) else -1

    @property
    def followed_us(self) -> float:
        """The longest time, in microseconds, that a stay was followed; infinite where all of them have ended."""
        if self.found.survival_end[0] <= _CLOSE:
            return np.inf
        return self.bounds_us(self.last_bin)[1] if self.last_bin >= 0 else 0.0

    def bounds_us(self, at: int) -> tuple[float, float]:
        """Return the lower and upper end of a bin in microseconds."""
        if self.edges_us is None:
            return float(at * DAY_US), float(at * DAY_US)
        return float(self.edges_us[at - 1]) if at else 0.0, float(self.edges_us[at])

    def shares(self, horizons_us: IntArray, too_long: str) -> tuple[Estimates, np.ndarray]:
        """Return the share that has ended so within each horizon, and its flags.

        Parameters
        ----------
        horizons_us : ndarray of int64, shape (n,)
            Microseconds since a stay began.
        too_long : str
            The flag of a horizon beyond what was followed: its share is a lower bound.
        """
        read = [self._read(float(one)) for one in horizons_us]
        value, std_error, df, known = np.array(read, np.float64).reshape(-1, 4).T
        estimates = probabilities(None, value, std_error, df, known, LOGIT)
        between = np.array([not self.is_bin_end(int(one)) for one in horizons_us], bool)
        beyond = horizons_us > self.followed_us
        flags: list[tuple[BoolArray, str]] = [(between, BETWEEN_BINS), (beyond, too_long), (estimates.few, TOO_FEW)]
        return estimates, joined_flags(flags, len(value))

    def at(self, time_us: float) -> tuple[float, FloatArray]:
        """Return the share that has ended so by a time, and the influence of each bucket on it."""
        phi = self.winning * self.part_of_bins(time_us)[self.stays.bin]
        influence = cell_influence(self.found, self.stays, self.by_bucket, phi, np.zeros(1))
        return float(self.found.q @ phi), influence

    def time_by(self, share: float) -> float:
        """Return by when, in days, the share has ended so; NaN where the curve does not get there."""
        there = np.flatnonzero(self.share >= share - _CLOSE)
        if not len(there):
            return np.nan
        at = int(there[0])
        low, high = self.bounds_us(at)
        before = self.share[at - 1] if at else 0.0
        rise = self.share[at] - before
        # a share of next to nothing is there before the curve rises
        part = float(np.clip((share - before) / rise, 0.0, 1.0)) if high > low and rise > 0 else 0.0
        return (low + part * (high - low)) / DAY_US

    def time(self, share: float) -> TimeBy:
        """Return by when the share has ended so, with what its interval needs."""
        days = self.time_by(share)
        if np.isnan(days):
            return TimeBy(self, share, days, np.nan, np.nan, few=False)
        value, std_error, df, known = (np.array([one]) for one in self._read(days * DAY_US))
        reached = probabilities(None, value, std_error, df, known, LOGIT)
        # On whole days the curve jumps past the share: the information there is carried over to the share itself.
        spread = float(np.sqrt(share * (1 - share) / reached.n_effective[0])) if reached.n_effective[0] > 0 else np.nan
        at = int(np.flatnonzero(self.share >= share - _CLOSE)[0])
        events = min(reached.n_effective[0] * min(share, 1 - share), self.found.at_risk[0, at])
        few = not (spread > 0 and df[0] >= ENOUGH_DF and events >= ENOUGH_EVENTS)
        return TimeBy(self, share, days, spread, float(df[0]), few=few)

    def _read(self, time_us: float) -> tuple[float, float, float, float]:
        """Return share, standard error, degrees of freedom, and of how many stays it is known, at a time."""
        part = self.part_of_bins(time_us)
        value, influence = self.at(time_us)
        variance, df = variance_from_buckets(influence)
        # Ended in the bins that lie wholly within the time, or still at risk after them.
        whole = int((part == 1).sum())
        known = float(self.stays.n[self.stays.bin < whole].sum())
        known += float(self.found.at_risk[0, whole]) if whole < self.stays.n_bins else 0.0
        return value, float(np.sqrt(variance)), float(df), known

    def part_of_bins(self, time_us: float) -> FloatArray:
        """Return the part of each bin that lies within a time."""
        if self.edges_us is None:
            return (np.arange(self.stays.n_bins) <= time_us // DAY_US).astype(np.float64)
        upper = self.edges_us[: self.stays.n_bins].astype(np.float64)
        lower = np.concatenate([[0.0], upper[:-1]])
        return np.asarray(np.clip((time_us - lower) / (upper - lower), 0.0, 1.0), np.float64)

    def is_bin_end(self, time_us: int) -> bool:
        """Tell whether a time is the end of a bin."""
        return time_us % DAY_US == 0 if self.edges_us is None else bool((self.edges_us == time_us).any())


@dataclass(frozen=True, eq=False)
class TimeBy:
    """By when a share of the stays has ended in the wanted way.

    Attributes
    ----------
    curve : EndedWithin
        Where it is read.
    share : float
        The share.
    days : float
        The time; NaN where the curve does not get there.
    spread, df : float
        Standard error of the curve where it reaches the share, and its degrees of freedom.
    few : bool
        Too few events, or stays at risk, for an interval.
    """

    curve: EndedWithin
    share: float
    days: float
    spread: float
    df: float
    few: bool

    def bounds(self, confidence_level: float) -> tuple[float, float]:
        """Return when the curve reaches the ends of the interval of its own value at `days`.

        The upper bound is infinite where the curve never gets to that end; both are NaN where there is no
        time, or too little to tell.
        """
        if np.isnan(self.days) or self.few:
            return np.nan, np.nan
        low, high = logit_interval(self.share, self.spread, self.df, confidence_level)
        latest = self.curve.time_by(float(high))
        return min(self.curve.time_by(float(low)), self.days), np.inf if np.isnan(latest) else latest

    @property
    def std_error(self) -> float:
        """Half the time in which the curve rises from one standard error below the share to one above."""
        if np.isnan(self.days) or not self.spread > 0:
            return np.nan
        below, above = max(self.share - self.spread, _CLOSE), min(self.share + self.spread, 1.0)
        return (self.curve.time_by(above) - self.curve.time_by(below)) / 2


@dataclass(frozen=True, eq=False)
class CurveTimes(Estimates):
    """Times read off a curve, with intervals read off it too.

    Attributes
    ----------
    read : tuple of TimeBy
        One for each number.
    unit : float
        How many of the numbers' unit a day is.
    """

    read: tuple[TimeBy, ...]
    unit: float = 1.0

    def bounds(self, confidence_level: float) -> tuple[FloatArray, FloatArray]:
        """Return the lower and upper bounds at a level (see `TimeBy.bounds`)."""
        both = np.array([one.bounds(confidence_level) for one in self.read], np.float64).reshape(-1, 2) * self.unit
        return both[:, 0], both[:, 1]

    def take(self, index: np.ndarray) -> CurveTimes:
        """Return those at `index`, positions or a mask."""
        read = tuple(self.read[i] for i in np.arange(len(self.read))[index])
        return CurveTimes(**vars(super().take(index)), read=read, unit=self.unit)

    def times(self, factor: float) -> CurveTimes:
        """Return the same numbers in another unit."""
        value, std_error = self.value * factor, self.std_error * factor
        return replace(self, value=value, std_error=std_error, unit=self.unit * factor)

    @classmethod
    def of(cls, time: TimeBy) -> CurveTimes:
        """Return one time in days."""
        return cls(
            value=np.array([time.days]),
            std_error=np.array([time.std_error]),
            df=np.array([time.df]),
            scale=np.array([LOG], dtype=object),
            n_effective=np.array([np.nan]),
            few=np.array([time.few]),
            read=(time,),
        )


def ended_within(stays: Stays, by_bucket: BucketStays, columns: IntArray, edges_us: IntArray | None) -> EndedWithin:
    """Return the curve of the share of stays that have ended in some columns.

    Parameters
    ----------
    stays, by_bucket : Stays, BucketStays
        Stays in one state, in all and by bucket of customers.
    columns : ndarray of int64
        The wanted ends; all other ones compete with them.
    edges_us : ndarray of int64 or None
        Upper edges of the bins in microseconds, of the stays' bins or more; None for bins of whole days.

    Returns
    -------
    EndedWithin

    Notes
    -----
    The Aalen-Johansen estimate, with open stays right-censored at their age; where all stays end in one way
    it is one less the Kaplan-Meier estimate. Variance linearised over buckets. A time by which a share has
    ended is read off the curve, linear within its bins, and its bounds are where the curve reaches the ends
    of the interval of the share (Woodruff's way), so that they never lie where the curve does not rise.

    References
    ----------
    E. L. Kaplan, P. Meier, J. Amer. Statist. Assoc. 53 (1958) 457-481. P. K. Andersen, O. Borgan, R. D. Gill,
    N. Keiding, Statistical Models Based on Counting Processes, Springer 1993, section IV.4. R. S. Woodruff,
    J. Amer. Statist. Assoc. 47 (1952) 635-646.

    Examples
    --------
    Four stays, seen by the day: one ends on day 1, one is open since day 1, one ends on day 2, one is open.

    >>> day, none = np.array([1, 2]), np.zeros(0, np.int64)
    >>> stays = Stays(1, 2, 4, np.zeros(2, np.int64), np.array([1, 1]), day, np.ones(2), np.array([1.0, 2.0]),
    ...     np.arange(4.0), np.arange(4.0), np.zeros(2, np.int64), np.array([1, 3]), np.ones(2), np.zeros(1))
    >>> split = BucketStays(4, np.array([0, 1]), np.array([0, 1]), np.ones(2), np.array([1.0, 2.0]),
    ...     np.array([2, 3]), np.zeros(2, np.int64), np.array([1, 3]), np.ones(2), none, none, np.zeros(0))
    >>> curve = ended_within(stays, split, np.array([1]), None)
    >>> curve.share.tolist(), curve.time_by(0.5)
    ([0.0, 0.25, 0.625, 0.625], 2.0)
    """
    found = fit_stays(stays, 0.0 if edges_us is None else 0.5)
    winning = np.isin(stays.target, columns)
    share = np.cumsum(sum_at(stays.bin, found.q * winning, stays.n_bins))
    return EndedWithin(stays, by_bucket, found, winning, edges_us, share)


def plain_share(whose: IntArray, n: FloatArray, mine: BoolArray, size: int) -> Estimates:
    """Return the plain share of what is counted, with no account of what is still open.

    Parameters
    ----------
    whose : ndarray of int64, shape (n,)
        Bucket of each row of a table.
    n : ndarray, shape (n,)
        What each row counts.
    mine : ndarray of bool, shape (n,)
        Rows that are the share.
    size : int
        Number of buckets.
    """
    all_n, won = sum_at(whose, n, size), sum_at(whose[mine], n[mine], size)
    share = won.sum() / all_n.sum()
    variance, df = variance_from_buckets((won - share * all_n) / all_n.sum())
    trials = np.array([all_n.sum()])
    return probabilities(None, np.array([share]), np.sqrt(variance)[None], df[None], trials, LOGIT)


def no_numbers(n: int) -> Estimates:
    """Return `n` estimates without a number."""
    blank = np.full(n, np.nan)
    return Estimates(blank, blank, blank, np.full(n, LOGIT, dtype=object), blank, np.zeros(n, bool))


def followed_short(tally: Tally, horizon_us: int) -> str:
    """Return in words that the youngest of some journeys have not been followed for as long, else nothing."""
    followed = surely_followed_us(tally.rules, tally.groups, tally.span)
    longest = tally.days_followed * DAY_US
    if followed is None:
        followed = int(longest)
    if followed >= horizon_us:
        return ""
    return f"{followed / DAY_US:.0f} of {duration_text(horizon_us)} followed"
