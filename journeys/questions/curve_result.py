"""What `passage_curve` gives back: shares by time with bands, and quantiles."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from journeys import checks
from journeys.kernels.arrays import FloatArray
from journeys.kernels.intervals import variance_from_buckets
from journeys.markup import frame_table, plain_number, short_name
from journeys.models.fit import JourneyFit
from journeys.models.what_if import WhatIf
from journeys.questions.counted import inverted, shares_about, up
from journeys.questions.first_passage import UNIT_DAYS
from journeys.questions.linear import TOO_FEW, leaning, probabilities, starts_counted
from journeys.questions.observed import converted_by_log
from journeys.questions.outcomes import UNREACHABLE
from journeys.questions.quantiles import NOT_IN_REACH, quantiles_of_moves
from journeys.questions.solved_curve import Solved, asked_times, limit_influence, telling_times
from journeys.questions.walks import Walk
from journeys.results import LOGIT, Estimates, joined_flags, text_table

if TYPE_CHECKING:
    import pandas as pd

NEVER_THAT_MANY = "never reached by that many"
NO_BAND = "no band: too many steps"


@dataclass(frozen=True, eq=False, repr=False)
class PassageCurve:
    """How many have reached a target by when, from one start (see `passage_curve`).

    The bands hold at each time by itself, not for all times together.

    Attributes
    ----------
    fit : JourneyFit
        The chain.
    start : str
        Where journeys begin.
    to : tuple of str
        What is to be reached.
    clock : str
        "steps" or "time".
    given : bool
        True: of those who ever reach it; False: of all who start.
    unit : str
        "steps", or the unit of time.
    confidence_level : float
        Level that `to_frame` shows.
    """

    fit: JourneyFit
    start: str
    to: tuple[str, ...]
    clock: str
    given: bool
    unit: str
    confidence_level: float
    _walk: Walk = field(repr=False)
    _solved: Solved = field(repr=False)
    _share: FloatArray = field(repr=False)

    @property
    def probability(self) -> float:
        """Probability of ever reaching the target."""
        return self._solved.limit

    @property
    def whole(self) -> bool:
        """Tell whether anything happens at whole steps or days only."""
        return self._solved.whole

    @property
    def _per_unit(self) -> float:
        return UNIT_DAYS[self.unit] if self.clock == "time" else 1.0

    @property
    def _row(self) -> int:
        return self.fit.nodes.labels.index(self.start)

    def at(self, times: npt.ArrayLike) -> FloatArray:
        """Return the share that has reached the target by each time.

        Parameters
        ----------
        times : array_like
            From 0, in the unit of the curve; infinite for the end. Steps, and days of a log of dates, count
            when they are full.

        Returns
        -------
        float array of the same shape
            NaN where the target is out of reach and the share is of those who reach it, and beyond the steps that
            are walked. In time, 0 where less than 1e-8 of all who start are there: that is the error of the answer.

        Raises
        ------
        ValueError
            If a time is negative or no number.
        """
        asked = asked_times(times)
        reached = self._solved.at(asked.ravel() * self._per_unit).reshape(asked.shape)
        return reached / (self.probability or np.nan) if self.given else reached

    def to_frame(self, times: npt.ArrayLike | None = None) -> pd.DataFrame:
        """Return one tidy row per time.

        Parameters
        ----------
        times : array_like, optional
            As in `at`. Default: some 60 that show the whole curve.

        Returns
        -------
        DataFrame
            time (or steps), estimate, std_error, low, high, confidence_level, flag.
        """
        asked, estimates, flag = self._shown if times is None else self._estimates(asked_times(times).ravel())
        return _tidy(self.clock, asked, estimates, self.confidence_level, flag)

    def confidence_interval(self, confidence_level: float = 0.95) -> pd.DataFrame:
        """Return the bands at another level, without computing the curve again.

        Parameters
        ----------
        confidence_level : float
            Between 0 and 1.

        Returns
        -------
        DataFrame
            time (or steps), low, high, confidence_level.
        """
        asked, estimates, flag = self._shown
        frame = _tidy(self.clock, asked, estimates, checks.confidence_level(confidence_level), flag)
        return frame[[self.clock, "low", "high", "confidence_level"]]

    def estimates(self, times: npt.ArrayLike) -> tuple[Estimates, np.ndarray]:
        """Return the share at each time as estimates, with the flags, for answers that show it among others.

        Parameters
        ----------
        times : array_like, shape (n,)
            As in `at`.
        """
        _, found, flag = self._estimates(asked_times(times).ravel())
        return found, flag

    def quantile(
        self, p: float | Sequence[float] = (0.5, 0.9), *, confidence_level: float | None = None
    ) -> pd.DataFrame:
        """Return by when some shares have reached the target.

        Parameters
        ----------
        p : float or sequence of float
            Shares between 0 and 1: of those who reach it, or of all who start, as the curve is.
        confidence_level : float, optional
            Default: that of the curve.

        Returns
        -------
        DataFrame
            One row per share: share, estimate, std_error, low, high, confidence_level, flag. Infinite where
            fewer than that ever reach the target.

        Raises
        ------
        ValueError
            If a share or the level is not between 0 and 1.
        """
        level = self.confidence_level if confidence_level is None else checks.confidence_level(confidence_level)
        shares = np.atleast_1d(np.asarray(p, dtype=np.float64))
        if not ((shares > 0) & (shares < 1)).all():
            msg = f"p: got {p!r}; wanted shares between 0 and 1"
            raise ValueError(msg)
        estimates, flag = self._quantiles(shares)
        return _tidy("share", shares, estimates.times(1.0 / self._per_unit), level, flag)

    @property
    def last_time(self) -> float:
        """Time (or steps) by which all but one in a thousand of those who ever reach the target have reached it."""
        return float(telling_times(self._solved)[-1] / self._per_unit)

    def given_reached(self) -> PassageCurve:
        """Return the curve of those who ever reach the target, from the same solution."""
        return replace(self, given=True)

    def of_all(self) -> PassageCurve:
        """Return the curve of all who start, from the same solution."""
        return replace(self, given=False)

    @property
    def has_observed(self) -> bool:
        """Tell whether `observed` has anything to give."""
        fit = self.fit
        same = self.start == "entry" and set(self.to) == set(fit.converted) and not self.given
        return fit.tally is not None and not isinstance(fit, WhatIf) and self.clock == "time" and same

    def observed(self) -> pd.DataFrame:
        """Return the same share by the log alone, without the chain.

        Returns
        -------
        DataFrame
            time, estimate, n_at_risk: the Aalen-Johansen estimate on whole journeys with a sure entry, at the
            ends of the bins of elapsed time, as long as any journey was followed.

        Raises
        ------
        ValueError
            If the curve is not one of elapsed time from entry to the converted outcomes, of all who start, in
            a fit to a log.
        """
        tally = self.fit.tally
        if tally is None or not self.has_observed:
            msg = (
                "the log has a curve of its own only for the elapsed time from entry to the converted outcomes, of "
                'all who start; wanted to=None, start="entry", clock="time", given=False, and a fit to a log, unchanged'
            )
            raise ValueError(msg)
        frame = converted_by_log(tally)
        return frame.assign(time=frame["time"] / self._per_unit)

    def summary(self) -> str:
        """Return the answer as plain text: the share in the end, the median, and some points of the curve."""
        shown = self._few().drop(columns="confidence_level")
        rows = [[plain_number(value) for value in row] for row in shown.to_numpy(dtype=object)]
        heads = [str(name) for name in shown.columns]
        told = [
            [plain_number(share), plain_number(estimate), f"{plain_number(low)} to {plain_number(high)}", str(flag)]
            for share, estimate, _, low, high, _, flag in self.given_reached().quantile((0.5, 0.9)).to_numpy(object)
        ]
        whom = "of those who reach it" if self.given else "of all who start"
        what = "number of steps" if self.clock == "steps" else "time"
        return "\n".join(
            [
                f"From {self.start} to {', '.join(self.to)}: {100 * self.probability:.1f} % reach it in the end",
                f"When half, and when 90 % of those who reach it have done so, in {self.unit}",
                text_table([["share", self.clock, "interval", "flag"], *told], right=[0, 1], width=0),
                f"Share {whom}, intervals at {100 * self.confidence_level:g} % for each {what} by itself",
                text_table([heads, *rows], right=range(len(heads) - 1), width=0),
            ]
        )

    def _few(self) -> pd.DataFrame:
        """Return a dozen points of the curve."""
        frame = self.to_frame()
        return frame.iloc[np.unique(np.linspace(0, len(frame) - 1, 12).round().astype(int))]

    def __repr__(self) -> str:
        """Return one line."""
        return (
            f"<PassageCurve: {self.start} to {', '.join(self.to)} in {self.unit}, "
            f"{'given that it is reached' if self.given else 'of all who start'}, "
            f"{100 * self.confidence_level:g} % confidence>"
        )

    def _repr_html_(self) -> str:
        few = self._few().drop(columns="confidence_level")
        whom = "of those who reach it" if self.given else "of all who start"
        caption = f"From {short_name(self.start)} to {', '.join(map(short_name, self.to))}, share {whom} by {self.unit}"
        return frame_table(few, f"{caption}, intervals at {100 * self.confidence_level:g} %", n_keys=1)

    @cached_property
    def _shown(self) -> tuple[FloatArray, Estimates, np.ndarray]:
        return self._estimates(telling_times(self._solved) / self._per_unit)

    @cached_property
    def _limit_influence(self) -> FloatArray | None:
        return limit_influence(self.fit, self._walk, self._share, self._row)

    def _spread(self, days: FloatArray, value: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return standard error and degrees of freedom of the share at each time; NaN where there is no band."""
        pulled, whole = self._solved.influence(days), self._limit_influence
        if pulled is None or whole is None:
            known = self.fit.influence is None
            return np.full(len(days), 0.0 if known else np.nan), np.full(len(days), np.inf)
        if self.given and self.probability > 0:
            pulled = (pulled - value * whole[:, None]) / self.probability
        variance, df = variance_from_buckets(pulled)
        return np.sqrt(variance), df

    def _estimates(self, asked: FloatArray) -> tuple[FloatArray, Estimates, np.ndarray]:
        """Return times in the unit of the curve, the share at each, and its flags."""
        value = self.at(asked)
        within = np.where(np.isfinite(asked), asked, 1e9)
        std_error, df = self._spread(within * self._per_unit, value)
        std_error = np.where(value == 0, 0.0, std_error)
        no_band = np.isnan(std_error)
        trials = np.full(len(asked), starts_counted(self.fit)[self._row] * (self.probability if self.given else 1.0))
        estimates = probabilities(self.fit, value, np.nan_to_num(std_error), df, trials, LOGIT)
        if no_band.any():
            estimates = replace(estimates, std_error=std_error, few=estimates.few & ~no_band)
        n = len(asked)
        lean = [(np.full(n, bool(mask[self._row])), text) for text, mask in leaning(self.fit).items()]
        unreached = np.full(n, self.probability <= 0)
        beyond = np.isnan(value) & ~unreached
        flags = [(unreached, UNREACHABLE), (beyond, NOT_IN_REACH), (no_band & ~beyond, NO_BAND)]
        flags += [(estimates.few & ~unreached & ~beyond, TOO_FEW), *lean]
        return asked, estimates, joined_flags(flags, n)

    def _quantiles(self, shares: FloatArray) -> tuple[Estimates, np.ndarray]:
        """Return quantiles in days or steps."""
        if self.given:
            start = np.array([self._row], dtype=np.int64)
            pairs = quantiles_of_moves(
                self.fit, self._walk, start, clock=self.clock, levels=shares.tolist(), probability=self._share
            )
            return Estimates.joined([pair[0] for pair in pairs]), np.concatenate([pair[1] for pair in pairs])
        at = self._solved.inverse(shares)
        within = np.where(np.isfinite(at), at, 0.0)
        points = [up(within), np.maximum(up(within) - 1.0, 0.0)] if self._solved.whole else [within]
        spreads = [self._spread(one, shares) for one in points]
        larger = np.argmax(np.stack([np.nan_to_num(one[0]) for one in spreads]), axis=0)
        std_error, df = (np.stack([one[i] for one in spreads])[larger, np.arange(len(at))] for i in (0, 1))
        # never met where there is no such share
        asked = np.nan_to_num(shares_about(shares, std_error), nan=2.0)
        about = self._solved.inverse(asked.ravel()).reshape(asked.shape)
        few = probabilities(self.fit, shares, np.nan_to_num(std_error), df, np.zeros(len(at)), LOGIT).few
        first = None if not self._solved.whole else 0 if self.clock == "steps" else -1
        known = np.full(len(at), self.fit.influence is None)
        estimates = inverted(at, about, df, few & np.isfinite(at), known, first)
        lost, never = ~np.isfinite(at), shares >= self.probability
        flags = [(np.full(len(at), self.probability <= 0), UNREACHABLE), (lost & never, NEVER_THAT_MANY)]
        flags += [(lost & ~never, NOT_IN_REACH), (estimates.few & ~lost, TOO_FEW)]
        return estimates, joined_flags(flags, len(at))


def _tidy(key: str, asked: FloatArray, estimates: Estimates, level: float, flag: np.ndarray) -> pd.DataFrame:
    """Return one row per time or share, with its interval."""
    import pandas as pd

    low, high = estimates.bounds(level)
    told = {"estimate": estimates.value, "std_error": estimates.std_error, "low": low, "high": high}
    return pd.DataFrame({key: asked, **told, "confidence_level": level, "flag": flag})
