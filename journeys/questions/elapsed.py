"""From a fit to the distribution of the elapsed time to a target, and what each bucket of customers does to it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from journeys.kernels.absorption import Passage
from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at
from journeys.kernels.dwell_grid import BinnedDwell, GivenDwell
from journeys.kernels.grids import DECADES, Grids, Part, points_for
from journeys.kernels.phase_type import DENSE
from journeys.kernels.renewal import ComplexArray, MassOn, Renewal, Scale
from journeys.kernels.reweighted import ReweightedStays
from journeys.models.fit import JourneyFit
from journeys.models.what_if import WhatIf
from journeys.questions.walks import Walk, stepped, timed

NO_DISTRIBUTION = "no distribution of dwell given"
_TABLES = 8_000_000  # numbers in the value tables worked on at once
_LONGEST_LATTICE = 2**16  # whole days, 179 years


@dataclass(frozen=True, eq=False)
class Elapsed:
    """The elapsed time to a target, ready to be solved for.

    Attributes
    ----------
    fit : JourneyFit
        The chain.
    walk : Walk
        Its moves and the target.
    grids : Grids
        The moves with their dwell, and what was solved of them.
    lattice : bool
        Time is in whole days.
    found : Passage
        Probability and moments.
    """

    fit: JourneyFit
    walk: Walk
    grids: Grids
    lattice: bool
    found: Passage

    @property
    def renewal(self) -> Renewal:
        """The moves with their dwell."""
        return self.grids.renewal

    @cached_property
    def top(self) -> float:
        """Days after which nothing is left to happen: 20 times the silence, or the mean and 6 sd of the time."""
        spread = self.found.mean_given + 6.0 * self.found.sd_given
        longest = float(np.max(spread[self.renewal.open_states], initial=0.0))
        tally = self.fit.tally
        if tally is not None and tally.rules.silence_us is not None:
            longest = max(longest, tally.rules.silence_us / 86_400e6)
        return 20.0 * longest if longest > 0 else 1.0

    def scales(self) -> Iterator[Part]:
        """Yield the grids of all scales of time, the longest first, fine enough for walks of so many moves."""
        return self.grids.scales(self.top, self._points)

    def on_days(self, days: float) -> Scale:
        """Return the grid of whole days up to at least `days`, exact at each (lattice only)."""
        return self.grids.solve(1.0, _days_for(days))

    @property
    def room(self) -> int:
        """How many numbers all that can be solved for holds, about."""
        return self.grids.room(_days_for(self.top) // DECADES if self.lattice else self._points)

    @cached_property
    def _points(self) -> int:
        steps = stepped(self.fit, self.walk).mean_given
        return points_for(float(np.max(steps[self.renewal.open_states], initial=1.0)))

    @cached_property
    def at_once(self) -> FloatArray:
        """Probability of the target in no time, from every open state."""
        walk = self.walk
        direct = (self.fit.move_state[walk.origin] == 0) & walk.is_target[walk.target]
        share = sum_at(walk.state[direct], self.fit.probability[walk.origin[direct]], walk.n_states)
        return share[self.renewal.open_states]

    def values(self, scale: Scale, visits: ComplexArray, times: FloatArray) -> FloatArray:
        """Return the value tables of the probability of the target up to each time.

        Parameters
        ----------
        scale : Scale
            A grid that reaches as far as the times.
        visits : complex array, shape (n_freq, n_open)
            Visits from the start, from `Scale.visits`.
        times : float array, shape (n_times,)
            Days.

        Returns
        -------
        float array, shape (n_times, n_listed)
            Values of the stays that `ReweightedStays.listed` lists.

        Notes
        -----
        One more journey through the move i to j with dwell u adds G_ij(t - u): the chance to come to i, take u,
        and go on from j to the target, all within t.
        """
        row, column, _ = self.pairs
        return self.looked_up(scale, visits[:, row] * scale.reach[:, column], times)

    @cached_property
    def pairs(self) -> tuple[IntArray, IntArray, IntArray]:
        """Places from and to which moves lead (see `Renewal.place`), each pair once, and the pair of each move."""
        size, lead = len(self.renewal.open_states), self.renewal.leading
        row = self.renewal.place[self.walk.state[lead]]
        column = self.renewal.place[self.walk.target[lead]]
        key, where = np.unique(row * (size + 1) + column, return_inverse=True)
        return key // (size + 1), key % (size + 1), where

    def looked_up(self, scale: Scale, gain_of: ComplexArray, times: FloatArray) -> FloatArray:
        """Return the value tables of an answer up to each time.

        Parameters
        ----------
        scale : Scale
            A grid that reaches as far as the times.
        gain_of : complex array, shape (n_freq, n_pairs)
            Transform of what one more journey through each of the `pairs`, taking no time, adds.
        times : float array, shape (n_times,)
            Days.

        Returns
        -------
        float array, shape (n_times, n_listed)
            As `values`.
        """
        where, pairs = self.pairs[2], len(self.pairs[0])
        # a row of zeros in front, for dwells longer than the time
        gain = np.zeros((scale.n + 1, pairs))
        gain[1:] = scale.summed(gain_of)
        flat = gain.ravel()
        move, dwell = self._cells
        has = np.flatnonzero(move >= 0)
        far = np.minimum(np.rint(dwell[has] / scale.dt), scale.n + 1.0).astype(np.int64)
        place = (1 - far) * pairs + where[move[has]]
        found = np.zeros((len(times), len(move)))
        for i, step in enumerate((times / scale.dt + 1e-9).astype(np.int64)):
            found[i, has] = flat[np.maximum(place + min(int(step), scale.n - 1) * pairs, 0)]
        return found

    @cached_property
    def _cells(self) -> tuple[IntArray, FloatArray]:
        """Leading move (-1: none) and dwell of each of the stays that are listed."""
        stays = self._stays
        if stays is None:
            return np.zeros(0, np.int64), np.zeros(0)
        place = np.full(len(self.fit.probability) + 1, -1, dtype=np.int64)
        place[self.walk.origin[self.renewal.leading]] = np.arange(len(self.renewal.leading))
        part = stays.listed[1]
        return place[np.where(part >= 0, stays.move[part], -1)], stays.dwell

    @cached_property
    def _stays(self) -> ReweightedStays | None:
        return stays_of(self.fit)

    def by_bucket(self, tables: FloatArray) -> FloatArray:
        """Return the influence of each bucket on the answers of value tables, shape (n_buckets, n_tables)."""
        if self._stays is None:
            return np.zeros((2, len(tables)))
        step = max(_TABLES // max(tables.shape[1], 1), 1)
        parts = [self._stays.influence(tables[i : i + step]) for i in range(0, len(tables), step)]
        return np.concatenate(parts, axis=1)


def stays_of(fit: JourneyFit) -> ReweightedStays | None:
    """Return the binned stays behind the moves of a fit, or of what it was changed to; None for a known chain."""
    if isinstance(fit, WhatIf):
        return fit.stays
    return None if fit.fitted_stays is None else ReweightedStays.of(fit.fitted_stays)


def elapsed(fit: JourneyFit, walk: Walk) -> Elapsed | None:
    """Return the elapsed time to the target of a walk; None where a dwell on the way has no distribution.

    What is solved for it is kept with the fit, for the next question about that target.
    """
    found = timed(fit, walk)

    def prepare() -> tuple[Grids, bool] | None:
        p = fit.probability[walk.origin]
        mass, lattice, lacking = _masses(fit, walk)
        renewal = Renewal(walk.n_states, walk.n_nodes, walk.state, walk.target, p > 0, walk.is_target, mass)
        return None if lacking[renewal.leading].any() else (Grids(renewal), lattice)

    def room(made: tuple[Grids, bool] | None) -> int:
        return 1 if made is None else Elapsed(fit, walk, *made, found).room

    made = prepare() if walk.n_states > DENSE else fit.kept.get(("elapsed", walk.key), prepare, room)
    return None if made is None else Elapsed(fit, walk, *made, found)


def _days_for(days: float) -> int:
    """Return how many points the grid of whole days up to at least `days` has."""
    return 1 << int(np.ceil(np.log2(np.clip(days + 2.0, 16.0, _LONGEST_LATTICE))))


def _masses(fit: JourneyFit, walk: Walk) -> tuple[MassOn, bool, BoolArray]:
    """Return the masses of the moves on a grid, whether time is in whole days, and which moves have none."""
    stays = stays_of(fit)
    if stays is not None:
        whole_days = fit.tally is not None and fit.tally.whole_days
        return _binned(fit, walk, stays).mass, whole_days, np.zeros(len(walk.origin), np.bool_)
    at_once = fit.move_state[walk.origin] == 0
    given = [None] * len(walk.origin) if fit.dwell is None else [fit.dwell[i] for i in walk.origin]
    kinds = list({id(one): one for one in given if one is not None}.values())
    number = {id(one): i for i, one in enumerate(kinds)}
    which = np.array([-1 if one is None else number[id(one)] for one in given], dtype=np.int64)
    lattice = bool(kinds) and all(_on_whole_days(one) for one in kinds)
    masses = GivenDwell(fit.probability[walk.origin], which, [one.cdf for one in kinds], lattice)
    return masses.mass, lattice, (which < 0) & ~at_once


def _binned(fit: JourneyFit, walk: Walk, it: ReweightedStays) -> BinnedDwell:
    place = np.full(len(fit.probability) + 1, -1, dtype=np.int64)
    place[walk.origin] = np.arange(len(walk.origin))
    cell, part = it.listed
    move = place[np.where(part >= 0, it.move[part], -1)]
    stays, outlives = it.kept.stays, cell >= len(it.kept.found.q)
    row = np.append(stays.state, np.zeros(stays.n_states, np.int64))[cell]
    at_once, mine = (row == 0) & ~outlives & (move >= 0), (row > 0) & (move >= 0)
    atoms = np.concatenate([np.flatnonzero(at_once), np.flatnonzero(outlives & (move >= 0))])
    # a move never seen shares the bins of several moves: one density in each, with the mean of them all
    q, bin_of = it.probability[mine], stays.bin[cell[mine]]
    key, where = np.unique(move[mine] * stays.n_bins + bin_of, return_inverse=True)
    together, at = sum_at(where, q, len(key)), key % stays.n_bins
    middle = (stays.lower[at] + stays.upper[at]) / 2.0
    total = sum_at(where, q * it.dwell[mine], len(key))
    return BinnedDwell(
        n_moves=len(walk.origin),
        move=key // stays.n_bins,
        bin=at,
        q=together,
        tau=np.divide(total, together, out=middle, where=together > 0),
        lower=stays.lower,
        upper=stays.upper,
        atom_move=move[atoms],
        atom_at=np.where(outlives[atoms], stays.survivor_dwell, 0.0),
        atom_q=it.probability[atoms],
    )


def _on_whole_days(given: object) -> bool:
    """Tell whether a frozen distribution lives on whole numbers."""
    from scipy import stats

    kind = getattr(given, "dist", None)
    return isinstance(kind, stats.rv_discrete) and float(given.support()[0]).is_integer()  # type: ignore[attr-defined]
