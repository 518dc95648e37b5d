"""Fitted stays whose moves were made likelier or less likely by hand, with what each bucket does to the change."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from journeys.kernels.arrays import FloatArray, IntArray
from journeys.kernels.sojourn import cell_influence
from journeys.kernels.stays import FittedStays

if TYPE_CHECKING:
    from scipy.sparse import csr_array


@dataclass(frozen=True, eq=False)
class Change:
    """One change of the probabilities of a chain.

    Attributes
    ----------
    at : int
        Place of the move that is changed by hand.
    grown : bool
        That place is new, so that all places from it on have moved up by one.
    is_new : bool
        The move had no probability before: it takes the stays of all moves of its state.
    mine : int array
        Places of the moves of its state.
    before, after : float arrays, shape (n_moves,)
        Probabilities before and after.
    d_before, d_after : float arrays, shape (n_buckets, n_moves)
        Influence of each bucket on them.
    """

    at: int
    grown: bool
    is_new: bool
    mine: IntArray
    before: FloatArray
    after: FloatArray
    d_before: FloatArray
    d_after: FloatArray


@dataclass(frozen=True, eq=False)
class ReweightedStays:
    """The stays behind each move of a chain: those of moves of a fit, times a weight.

    Attributes
    ----------
    kept : FittedStays
        What was fitted.
    move : int array, shape (n_parts,)
        Place among the moves of the chain.
    source : int array, shape (n_parts,)
        The move of `kept.found` whose stays are taken.
    weight : float array, shape (n_parts,)
        What their probabilities are multiplied by.
    change : float array, shape (n_buckets, n_parts), or None
        Influence of each bucket on the weight; None where all is as it was fitted.
    """

    kept: FittedStays
    move: IntArray
    source: IntArray
    weight: FloatArray
    change: FloatArray | None = None

    @classmethod
    def of(cls, kept: FittedStays) -> ReweightedStays:
        """Return the stays as they were fitted."""
        n = len(kept.move)
        return cls(kept, kept.move, np.arange(n, dtype=np.int64), np.ones(n))

    def changed(self, it: Change) -> ReweightedStays:
        """Return the stays after a change of the probabilities: each move keeps its dwell.

        Parameters
        ----------
        it : Change
            The change.

        Notes
        -----
        With w the weight, p and r the probability before and after: w r / p. Its influence follows by the product
        and the chain rule.
        """
        before = np.zeros((len(it.d_before), len(self.weight))) if self.change is None else self.change
        move = self.move + (it.grown & (self.move >= it.at))
        keep = np.flatnonzero(~it.is_new | (move != it.at))
        to, w, d_w = move[keep], self.weight[keep], before[:, keep]
        used = it.before[to] > 0
        ratio = np.divide(it.after[to], it.before[to], out=np.zeros(len(to)), where=used)
        d_ratio = np.zeros((len(d_w), len(to)))
        d_ratio[:, used] = (it.d_after[:, to] - ratio * it.d_before[:, to])[:, used] / it.before[to[used]]
        parts = [(to, self.source[keep], w * ratio, d_w * ratio + w * d_ratio)]
        if it.is_new:
            row = np.flatnonzero(np.isin(to, it.mine))
            p, d_p = it.after[it.at], it.d_after[:, it.at, None]
            parts.append((np.full(len(row), it.at), self.source[keep][row], p * w[row], p * d_w[:, row] + d_p * w[row]))
        moves, sources, weights, d_weights = zip(*parts, strict=True)
        return ReweightedStays(
            kept=self.kept,
            move=np.concatenate(moves),
            source=np.concatenate(sources),
            weight=np.concatenate(weights),
            change=np.concatenate(d_weights, axis=1),
        )

    @cached_property
    def listed(self) -> tuple[IntArray, IntArray]:
        """Cells of the fit, then rows for what outlives the last bin, as often as they are used, and for which part.

        As it was fitted each is there once, in its order, with part -1 where it belongs to no move.
        """
        whole = np.concatenate([self.kept.found.cell_move, self.kept.found.survivor_move])
        if self.change is None:
            return np.arange(len(whole)), whole
        order = np.argsort(whole, kind="stable")
        first = np.searchsorted(whole[order], np.arange(len(self.kept.move) + 1))
        many = np.diff(first)[self.source]
        part = np.repeat(np.arange(len(many)), many)
        within = np.arange(len(part)) - np.repeat(np.cumsum(many) - many, many)
        return order[first[self.source[part]] + within], part

    @cached_property
    def dwell(self) -> FloatArray:
        """Mean dwell in days of what is `listed`."""
        found, survivors = self.kept.found, len(self.kept.found.survivor_move)
        return np.concatenate([found.tau, np.full(survivors, self.kept.stays.survivor_dwell)])[self.listed[0]]

    @cached_property
    def probability(self) -> FloatArray:
        """Probability of what is `listed`, weighted."""
        cell, part = self.listed
        return self._q[cell] * np.where(part >= 0, self.weight[part], 0.0)

    @property
    def _q(self) -> FloatArray:
        return np.concatenate([self.kept.found.q, self.kept.found.survival_end])

    def influence(self, tables: FloatArray) -> FloatArray:
        """Return the influence of each bucket on the sum of value tables over what is `listed`.

        Parameters
        ----------
        tables : float array, shape (n_tables, n_listed)
            Value of a stay.

        Returns
        -------
        float array, shape (n_buckets, n_tables)
        """
        kept, cells = self.kept, len(self.kept.found.q)
        if self.change is None:
            return cell_influence(kept.found, kept.stays, kept.by_bucket, tables[:, :cells], tables[:, cells:])
        cell, part = self.listed
        by_cell = tables @ self._gather(self.weight[part], cell, len(self._q))
        by_part = tables @ self._gather(self._q[cell], part, len(self.weight))
        found = cell_influence(kept.found, kept.stays, kept.by_bucket, by_cell[:, :cells], by_cell[:, cells:])
        return np.asarray(found + self.change @ by_part.T, dtype=np.float64)

    @staticmethod
    def _gather(value: FloatArray, to: IntArray, n: int) -> csr_array:
        from scipy.sparse import csr_array

        return csr_array((value, (np.arange(len(to)), to)), shape=(len(to), n))
