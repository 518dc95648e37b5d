"""Where journeys end: the probability of each outcome from entry and from every state."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.kernels.absorption import passage
from journeys.models.fit import JourneyFit
from journeys.questions.by_group import by_group
from journeys.questions.linear import DOUBTFUL, TOO_FEW, leaning, probabilities, probability_spread, starts_counted
from journeys.results import LOGIT, Estimates, Result, joined_flags

UNREACHABLE = "cannot be reached"


@dataclass(frozen=True, eq=False, repr=False)
class OutcomesResult(Result):
    """Outcome probabilities by start state and outcome."""

    title: ClassVar[str] = "Where journeys end"


def outcomes(
    fit: JourneyFit, *, by: str | Sequence[str] | None = None, confidence_level: float = 0.95
) -> OutcomesResult:
    """Return the probability of each outcome, from entry and from every state.

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
    OutcomesResult
        One row per (start_state, outcome); the outcomes of a start sum to 1 unless some walks never end.

    Raises
    ------
    ValueError
        If the level is not between 0 and 1, or the chain has no outcomes.

    Notes
    -----
    The hitting probabilities h = N P_o with N = (I - P_tt)^-1; intervals on the logit scale from the
    linearised cluster variance, dh_s/dP_ij = N_si h_j.

    References
    ----------
    J. G. Kemeny, J. L. Snell, Finite Markov Chains, Van Nostrand 1960, chapter III.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.5, 0.3, 0.2]], index=["basket"], columns=["basket", "joined", "declined"])
    >>> frame = outcomes(JourneyFit.from_matrix(chain)).to_frame()
    >>> frame[["start_state", "outcome", "estimate"]].round(3).values.tolist()
    [['entry', 'joined', 0.6], ['entry', 'declined', 0.4], ['basket', 'joined', 0.6], ['basket', 'declined', 0.4]]
    """
    import pandas as pd

    level = checks.confidence_level(confidence_level)
    if by is not None:
        return by_group(fit, by, partial(outcomes, confidence_level=level))
    nodes = fit.nodes
    if not nodes.outcomes:
        msg = "this chain has no outcomes; ask first_passage to a state instead"
        raise ValueError(msg)
    parts, unreachable, doubtful = [], [], []
    p, trials = fit.probability, starts_counted(fit)
    for outcome in nodes.outcomes:
        to = passage(nodes.n_rows, nodes.n_nodes, fit.move_state, fit.move_target, p, p, p, fit.target_mask(outcome))
        std_error, df = probability_spread(fit, to)
        parts.append(probabilities(fit, to.probability, std_error, df, trials, LOGIT))
        unreachable.append((to.probability == 0) & ~to.doubtful)
        doubtful.append(to.doubtful)
    joined = Estimates.joined(parts)
    lean = [(np.tile(mask, len(nodes.outcomes)), text) for text, mask in leaning(fit).items()]
    n = len(joined.value)
    flags = [(np.concatenate(unreachable), UNREACHABLE), (np.concatenate(doubtful), DOUBTFUL), (joined.few, TOO_FEW)]
    flag = joined_flags([*flags, *lean], n)
    # Computed outcome by outcome, told start by start.
    order = np.arange(n).reshape(len(nodes.outcomes), nodes.n_rows).T.ravel()
    keys = pd.DataFrame(
        {
            "start_state": np.repeat(np.array(nodes.labels[: nodes.n_rows], dtype=object), len(nodes.outcomes)),
            "outcome": np.tile(np.array(nodes.outcomes, dtype=object), nodes.n_rows),
        }
    )
    return OutcomesResult(
        keys=keys,
        estimates=joined.take(order),
        flag=flag[order],
        counts={"n_effective": joined.n_effective[order]},
        confidence_level=level,
    )
