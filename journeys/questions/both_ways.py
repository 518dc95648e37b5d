"""The way to conversion by the model, and by the whole journeys of its log, as far as these were followed."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from journeys.kernels.arrays import FloatArray, IntArray, sum_at
from journeys.kernels.on_the_way import OnTheWay
from journeys.kernels.renewal import ComplexArray
from journeys.kernels.sojourn import cell_influence
from journeys.models.stays import outcome_column
from journeys.questions.ended import Ended, Sums
from journeys.questions.solved_curve import SolvedTime

# Journeys at risk up to which the log's curve is followed.
ENOUGH_AT_RISK = 20.0
# And the share of those still going on that must be under observation there: late conversions weigh its inverse.
ENOUGH_SEEN = 0.2
# Most times that the two curves are compared at.
_MOST_TIMES = 60


@dataclass(frozen=True, eq=False)
class BothCurves:
    """The time to convert by the model and by whole journeys with a sure entry.

    Attributes
    ----------
    journeys : Ended
        Journeys of its log.
    codes : int array
        The outcomes that count, as in the tables of the tally.
    solved : SolvedTime
        The curve of the model from entry.
    """

    journeys: Ended
    codes: IntArray
    solved: SolvedTime

    @cached_property
    def last_bin(self) -> int:
        """The last bin in which enough journeys were at risk, and enough of those that go on; -1 without any."""
        found, n = self.journeys.found, self.journeys.n_begun
        seen = found.at_risk[0] >= np.maximum(ENOUGH_AT_RISK, ENOUGH_SEEN * n * found.survival_before[0])
        there = np.flatnonzero(seen)
        return int(there[-1]) if len(there) else -1

    @cached_property
    def upper(self) -> FloatArray:
        """Upper ends of the bins up to the last, in days."""
        return self.journeys.stays.upper[: self.last_bin + 1]

    @property
    def last(self) -> float:
        """The last time followed, in days."""
        return float(self.upper[-1]) if self.last_bin >= 0 else 0.0

    @cached_property
    def n_by_bin(self) -> FloatArray:
        """Conversions counted in each bin up to the last."""
        stays = self.journeys.stays
        mine = np.isin(stays.target, outcome_column(self.codes)) & (stays.bin <= self.last_bin)
        return sum_at(stays.bin[mine], stays.n[mine], self.last_bin + 1)

    @cached_property
    def by_model(self) -> FloatArray:
        """Share converted by the upper end of each bin, says the model."""
        return self.solved.at(self.upper)

    @cached_property
    def few_times(self) -> IntArray:
        """Bins that stand for all: some even in the logarithm of time, the last among them."""
        telling = np.flatnonzero(self.by_model > 1e-4 * self.solved.limit)
        first = int(telling[0]) if len(telling) else 0
        if self.solved.whole or self.last_bin - first < _MOST_TIMES:
            return np.arange(first, self.last_bin + 1)
        picked = np.searchsorted(self.upper, np.geomspace(self.upper[first], self.last, _MOST_TIMES))
        return np.unique(np.append(np.minimum(picked, self.last_bin), self.last_bin))

    @cached_property
    def model_influence(self) -> FloatArray:
        """Influence of each bucket on the model's share at `few_times`."""
        found = self.solved.influence(self.upper[self.few_times])
        if found is None:
            raise RuntimeError("a curve of a fit to a log has influences")
        return found

    def area(self, times: FloatArray) -> FloatArray:
        """Return the weights that integrate a share, given at some times, from 0 to the last of them."""
        if self.solved.whole:
            return np.append(np.diff(times), 0.0)
        width = np.diff(times, prepend=0.0)
        return np.asarray((width + np.append(width[1:], 0.0)) / 2.0, np.float64)

    def mean_by_model(self) -> float:
        """Return the mean days of those converted by the last time, says the model."""
        if self.solved.whole:
            times = self.upper
        else:
            points = self.solved.curve.time
            times = np.append(points[(points > 0) & (points < self.last)], self.last)
        share = self.solved.at(times)
        return self.last - float(self.area(times) @ share) / float(share[-1])

    def log_curve(self) -> tuple[FloatArray, FloatArray]:
        """Return the log's share at `few_times`, and the influence of each bucket on it."""
        journeys, stays = self.journeys, self.journeys.stays
        mine = np.isin(stays.target, outcome_column(self.codes))
        tables = (stays.bin[None, :] <= self.few_times[:, None]) & mine
        share = tables @ journeys.found.q
        value = tables.astype(np.float64)
        return share, cell_influence(journeys.found, stays, journeys.by_bucket, value, np.zeros((len(value), 1)))

    def by_then(self) -> Sums:
        """Return the model's share converted by the last time."""
        return Sums(self.by_model[-1:], self.model_influence[:, -1:])

    def moves_by_then(self) -> Sums:
        """Return the moves of those converted by the last time, by the model, per journey that begins."""
        return self._summed(*self._way.moves())

    def touching_by_then(self, rows: IntArray) -> Sums:
        """Return the share converted by the last time that touches any of some rows of the fit, by the model."""
        places = self.solved.it.renewal.place[rows]
        places = places[places >= 0]
        if not len(places):
            return Sums(np.zeros(1), np.zeros_like(self.model_influence[:, :1]))
        return self._summed(*self._way.touching(places))

    @cached_property
    def _way(self) -> OnTheWay:
        it = self.solved.it
        row, column, _ = it.pairs
        return OnTheWay(self.solved.scale_for(self.last), int(it.renewal.place[0]), row, column)

    def _summed(self, value: ComplexArray, change: ComplexArray) -> Sums:
        """Return an answer by the last time from its transform and what each pair of states adds."""
        it, scale = self.solved.it, self.solved.scale_for(self.last)
        sofar = scale.summed(value[:, None])[:, 0]
        times = (np.arange(scale.n) + (0.0 if it.lattice else 0.5)) * scale.dt
        found = np.interp(self.last, times, sofar)
        tables = it.looked_up(scale, change, np.array([self.last]))
        return Sums(np.array([found]), it.by_bucket(tables))
