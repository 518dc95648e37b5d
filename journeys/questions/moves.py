"""Every cell of the transition matrix with its interval."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.kernels.intervals import variance_from_buckets
from journeys.models.fit import JourneyFit
from journeys.questions.by_group import by_group
from journeys.questions.linear import TOO_FEW, probabilities, starts_counted
from journeys.results import CELL, Result, joined_flags

# Above this many states only moves that were seen are listed: all pairs would be millions of zeros.
LIST_ALL_UP_TO = 200


@dataclass(frozen=True, eq=False, repr=False)
class MovesResult(Result):
    """Moves by state and next state."""

    title: ClassVar[str] = "Moves"


def moves(
    fit: JourneyFit, *, by: str | Sequence[str] | None = None, confidence_level: float = 0.95
) -> MovesResult:
    """Return the probability of every move with its interval.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    by : str or sequence of str, optional
        Columns that journeys are grouped by: one fit per group, their columns first.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    MovesResult
        One row per (state, next_state), moves never seen included up to 200 states; columns n_moves
        (completed moves), estimate, std_error, low, high, n_effective, flag.

    Raises
    ------
    ValueError
        If the level is not between 0 and 1.

    Notes
    -----
    Clopper-Pearson at the effective number of trials P(1 - P)/V, V the linearised cluster variance, and at
    most the completed moves of the state; a move hardly or never seen gets one exact bound, flagged.

    References
    ----------
    C. J. Clopper, E. S. Pearson, Biometrika 26 (1934) 404-413. E. L. Korn, B. I. Graubard, Survey
    Methodology 24 (1998) 193-201 (exact interval at the effective sample size).

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.5, 0.5]], index=["basket"], columns=["basket", "joined"])
    >>> moves(JourneyFit.from_matrix(chain)).to_frame()[["state", "next_state", "estimate"]].values.tolist()
    [['entry', 'basket', 1.0], ['entry', 'joined', 0.0], ['basket', 'basket', 0.5], ['basket', 'joined', 0.5]]
    """
    import pandas as pd

    level = checks.confidence_level(confidence_level)
    if by is not None:
        return by_group(fit, by, partial(moves, confidence_level=level))
    nodes = fit.nodes
    if len(nodes.states) <= LIST_ALL_UP_TO:
        row, column = (part.ravel() for part in np.indices((nodes.n_rows, nodes.n_nodes)))
        # Nothing moves into entry, and nobody lapses before a first event.
        possible = (column > 0) & ~((row == 0) & (np.array(nodes.labels, dtype=object)[column] == "lapsed"))
        row, column = row[possible], column[possible]
    else:
        row, column = fit.move_state, fit.move_target
    seen = np.searchsorted(fit.move_state * nodes.n_nodes + fit.move_target, row * nodes.n_nodes + column)
    seen = np.minimum(seen, len(fit.move_state) - 1)
    found = (fit.move_state[seen] == row) & (fit.move_target[seen] == column)
    value = np.where(found, fit.probability[seen], 0.0)
    if fit.influence is None:
        std_error, df = np.zeros(len(row)), np.full(len(row), np.inf)
    else:
        variance, nu = variance_from_buckets(fit.influence.probability)
        std_error, df = np.where(found, np.sqrt(variance)[seen], 0.0), np.where(found, nu[seen], np.nan)
    n_moves = np.where(found, fit.n_moves[seen], 0.0 if fit.influence is not None else np.nan)
    estimates = probabilities(fit, value, std_error, df, starts_counted(fit)[row], CELL)
    labels = np.array(nodes.labels, dtype=object)
    row_flag = np.array([fit.row_flags.get(name, "") for name in nodes.labels[: nodes.n_rows]], dtype=object)
    flags = [(row_flag[row] == text, text) for text in dict.fromkeys(fit.row_flags.values())]
    return MovesResult(
        keys=pd.DataFrame({"state": labels[row], "next_state": labels[column]}),
        estimates=estimates,
        flag=joined_flags([(estimates.few, TOO_FEW), *flags], len(row)),
        counts={"n_moves": n_moves, "n_effective": estimates.n_effective},
        confidence_level=level,
    )
