"""The fitted chain: every move with its probability, mean dwell and the influence of each bucket on both."""

from __future__ import annotations

import os
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.errors import DeadEndWarning, warn
from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.graph import Classes, classify
from journeys.kernels.kept import Kept
from journeys.kernels.stays import FittedStays
from journeys.markup import facts, frame_table, short_name
from journeys.models.memory import Nodes

if TYPE_CHECKING:
    import pandas as pd

    from journeys.models.what_if import WhatIf
    from journeys.questions.moves import MovesResult
    from journeys.tally.tally import Tally

NO_WAY_OUT = "no move out was seen"
# A wider matrix is no longer read in a notebook.
WIDEST_SHOWN = 30


class NotInChainError(ValueError):
    """A name is neither a state nor an outcome of a chain.

    Attributes
    ----------
    briefly : str
        Which, in few words.
    """

    def __init__(self, name: str, message: str) -> None:
        """Keep the name."""
        super().__init__(message)
        self.briefly = f"{name!r} is never seen"


@dataclass(frozen=True, eq=False)
class Influence:
    """Derivative of each move by the stays of each bucket, arrays of shape (n_buckets, n_moves)."""

    probability: FloatArray
    mean: FloatArray
    second: FloatArray


@dataclass(frozen=True, eq=False)
class JourneyFit:
    """A chain fitted to a tally (or known, see `from_matrix`). Questions are functions of it.

    Attributes
    ----------
    nodes : Nodes
        Names of the states and outcomes.
    converted : tuple of str
        The outcomes that count as conversions.
    move_state, move_target : ndarray of int, shape (n_moves,)
        Where each move comes from and leads to, as positions in `nodes.labels`.
    n_moves : ndarray, shape (n_moves,)
        Completed moves counted (NaN in a known chain).
    probability, mean, second : ndarray, shape (n_moves,)
        Probability of the move; dwell and squared dwell (days) times the probability.
    row_flags : dict of str to str
        What to know of a state's row.
    open_moves : str
        As in `JourneyModel`, or "known".
    tally : Tally or None
        The counts behind the fit; None for a known chain.
    influence : Influence or None
        None for a known chain, which has no uncertainty.
    fitted_stays : FittedStays or None
        The binned stays behind the moves, in all and by bucket; None for a known chain.
    dwell : tuple or None
        In a known chain the distribution of each move's dwell in days, None where only a mean or nothing is
        given; None for a fit to a tally.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.5, 0.3, 0.2]], index=["basket"], columns=["basket", "joined", "declined"])
    >>> fit = JourneyFit.from_matrix(chain)
    >>> fit.matrix.loc["basket"].to_dict()
    {'basket': 0.5, 'joined': 0.3, 'declined': 0.2}
    """

    nodes: Nodes
    converted: tuple[str, ...]
    move_state: IntArray
    move_target: IntArray
    n_moves: FloatArray
    probability: FloatArray
    mean: FloatArray
    second: FloatArray
    row_flags: dict[str, str]
    open_moves: str
    tally: Tally | None = None
    influence: Influence | None = None
    fitted_stays: FittedStays | None = None
    dwell: tuple[Any, ...] | None = None

    @property
    def states(self) -> tuple[str, ...]:
        """Names of the states, entry not among them."""
        return self.nodes.states

    @property
    def outcomes(self) -> tuple[str, ...]:
        """Names of the outcomes, lapsed among them where a silence is given."""
        return self.nodes.outcomes

    @cached_property
    def matrix(self) -> pd.DataFrame:
        """The transition matrix: rows entry and the states, columns states and outcomes; rows sum to 1."""
        import pandas as pd

        dense = np.zeros((self.nodes.n_rows, self.nodes.n_nodes))
        dense[self.move_state, self.move_target] = self.probability
        labels = self.nodes.labels
        return pd.DataFrame(
            dense[:, 1:],
            index=pd.Index(labels[: self.nodes.n_rows], name="state"),
            columns=pd.Index(labels[1:], name="next_state"),
        )

    @cached_property
    def kept(self) -> Kept:
        """What questions worked out of this chain and ask for again."""
        return Kept()

    @cached_property
    def classes(self) -> Classes:
        """Classes of the nodes on the graph of moves: recurrent or transient, periods, dead ends."""
        used = self.probability > 0
        is_outcome = np.arange(self.nodes.n_nodes) >= self.nodes.n_rows
        return classify(self.nodes.n_nodes, self.move_state[used], self.move_target[used], is_outcome)

    def moves(self, *, by: str | Sequence[str] | None = None, confidence_level: float = 0.95) -> MovesResult:
        """Return every cell of the matrix with its interval (see `journeys.questions.moves.moves`)."""
        from journeys.questions.moves import moves

        return moves(self, by=by, confidence_level=confidence_level)

    def with_move(
        self, state: str, next_state: str, change: float, *, taken_from: str | Collection[str] | None = None
    ) -> WhatIf:
        """Return the chain with one move made likelier (see `journeys.models.what_if.with_move`)."""
        from journeys.models.what_if import with_move

        return with_move(self, state, next_state, change, taken_from=taken_from)

    def target_mask(self, to: str | Collection[str] | None) -> BoolArray:
        """Return which nodes `to` names.

        Parameters
        ----------
        to : str, collection of str or None
            An outcome, a state or several of either; None for all converted outcomes. In a chain of a higher order a
            state may be named by itself ("basket") or with what came before ("basket after price page").

        Returns
        -------
        ndarray of bool, shape (n_nodes,)

        Raises
        ------
        ValueError
            If a name is neither a state nor an outcome (`NotInChainError`), or nothing is named where the chain
            has no converted outcomes.
        """
        names = self.converted if to is None else (to,) if isinstance(to, str) else tuple(to)
        if not names:
            msg = f"`to` is missing; wanted one or more of {_listed(self.nodes.labels[1:])}"
            raise ValueError(msg)
        last = ("entry", *self.nodes.last_states, *self.nodes.outcomes)
        unknown = [name for name in names if name not in self.nodes.labels[1:] and name not in last[1:]]
        if unknown:
            wanted = f"one or more of {_listed(self.nodes.labels[1:])}"
            raise NotInChainError(unknown[0], f"to={unknown[0]!r} is not in this chain; wanted {wanted}")
        mask = np.isin(np.array(self.nodes.labels, dtype=object), names)
        return np.asarray(mask | np.isin(np.array(last, dtype=object), names), dtype=np.bool_)

    def save(self, path: str | os.PathLike[str]) -> None:
        """Write the fit to one file (see `journeys.models.store`)."""
        from journeys.models.store import save

        save(self, path)

    @classmethod
    def load(cls, path: str | os.PathLike[str]) -> JourneyFit:
        """Read a fit back (see `journeys.models.store`)."""
        from journeys.models.store import load

        return load(path)

    @classmethod
    def from_matrix(cls, frame: pd.DataFrame, dwell: Any = None, entry: Any = None) -> JourneyFit:
        """Return a known chain (see `journeys.models.known.from_matrix`)."""
        from journeys.models.known import from_matrix

        return from_matrix(frame, dwell, entry)

    def __repr__(self) -> str:
        """Return one line."""
        known = "known chain" if self.tally is None else f"fitted to {self.tally.n_journeys:,} journeys"
        return f"<JourneyFit: {len(self.states)} states, {len(self.outcomes)} outcomes, {known}>"

    def _repr_html_(self) -> str:
        if len(self.states) > WIDEST_SHOWN:
            return facts(repr(self).strip("<>"), {"moves": f"{len(self.probability):,}"})
        frame = self.matrix.reset_index(names="from")
        known = "a known chain" if self.tally is None else f"fitted to {self.tally.n_journeys:,} journeys"
        flagged = [f"{short_name(name)}: {text}" for name, text in self.row_flags.items() if text]
        return frame_table(frame, f"Probability of each move, {known}", flagged, 1)


def with_dead_ends(
    nodes: Nodes, state: IntArray, target: IntArray, columns: list[FloatArray], row_flags: dict[str, str]
) -> tuple[IntArray, IntArray, list[FloatArray], IntArray]:
    """Add a move to itself, probability 1, to every row from which no move was seen.

    Returns
    -------
    state, target, columns
        The moves, sorted; the first column is the probability, the others get 0.
    kept : ndarray of int
        Where each move came from in the input, -1 for an added one.
    """
    rows = np.setdiff1d(np.arange(nodes.n_rows), state)
    labels = nodes.labels
    for row in rows:
        # told last, whatever else was told of the row
        row_flags.pop(labels[row], None)
        row_flags[labels[row]] = NO_WAY_OUT
    if len(rows):
        names = ", ".join(nodes.labels[row] for row in rows[:5])
        warn(f"no move out of {names} was seen: taken as never left", DeadEndWarning)
    state, target = np.concatenate([state, rows]), np.concatenate([target, rows])
    order = np.lexsort((target, state))
    kept = np.concatenate([np.arange(len(columns[0])), np.full(len(rows), -1)])[order]
    grown = [
        np.concatenate([column, np.full(len(rows), 1.0 if i == 0 else 0.0)])[order] for i, column in enumerate(columns)
    ]
    return state[order], target[order], grown, kept


def _listed(names: tuple[str, ...]) -> str:
    shown = ", ".join(repr(name) for name in names[:12])
    return shown + (f" and {len(names) - 12} more" if len(names) > 12 else "")
