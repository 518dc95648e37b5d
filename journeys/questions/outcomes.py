"""Where journeys end: the probability of each outcome from entry and from every state."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from journeys import checks
from journeys.kernels.arrays import IntArray
from journeys.models.fit import JourneyFit
from journeys.models.group_stack import Stack
from journeys.questions.by_group import by_stack
from journeys.questions.linear import DOUBTFUL, TOO_FEW, leaning, probabilities, probability_spread, starts_counted
from journeys.questions.walks import stepped, walk_until
from journeys.results import LOGIT, Estimates, Result, joined_flags

if TYPE_CHECKING:
    import pandas as pd

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
    if not fit.nodes.outcomes:
        msg = "this chain has no outcomes; ask first_passage to a state instead"
        raise ValueError(msg)
    if by is not None:
        return by_stack(fit, by, partial(_of_stack, confidence_level=level))
    estimates, flag = _answers(fit)
    keys = pd.DataFrame(_keys(fit.nodes.labels[: fit.nodes.n_rows], fit.outcomes))
    return _result(keys, estimates, flag, level)


def _of_stack(stack: Stack, confidence_level: float) -> tuple[OutcomesResult, IntArray]:
    """Return the answers of several groups at once, and which group of the stack each row is about."""
    import pandas as pd

    estimates, flag = _answers(stack.fit, stack.live.sum(axis=1)[stack.row_group])
    names = [name for states in stack.states for name in ("entry", *states)]
    outcomes = stack.fit.outcomes
    result = _result(pd.DataFrame(_keys(names, outcomes)), estimates, flag, confidence_level)
    return result, np.repeat(stack.row_group, len(outcomes))


def _answers(fit: JourneyFit, n_buckets: IntArray | None = None) -> tuple[Estimates, np.ndarray]:
    """Return estimates and flags, start by start."""
    nodes, n_outcomes = fit.nodes, len(fit.outcomes)
    parts, unreachable, doubtful = [], [], []
    trials = starts_counted(fit)
    for node in range(nodes.n_rows, nodes.n_nodes):
        to = stepped(fit, walk_until(fit, np.arange(nodes.n_nodes) == node))
        std_error, df = probability_spread(fit, to, n_buckets)
        parts.append(probabilities(fit, to.probability, std_error, df, trials, LOGIT))
        unreachable.append((to.probability == 0) & ~to.doubtful)
        doubtful.append(to.doubtful)
    joined = Estimates.joined(parts)
    lean = [(np.tile(mask, n_outcomes), text) for text, mask in leaning(fit).items()]
    n = len(joined.value)
    flags = [(np.concatenate(unreachable), UNREACHABLE), (np.concatenate(doubtful), DOUBTFUL), (joined.few, TOO_FEW)]
    flag = joined_flags([*flags, *lean], n)
    # computed outcome by outcome, told start by start
    order = np.arange(n).reshape(n_outcomes, nodes.n_rows).T.ravel()
    return joined.take(order), flag[order]


def _keys(starts: Sequence[str], outcomes: Sequence[str]) -> dict[str, np.ndarray]:
    return {
        "start_state": np.repeat(np.array(starts, dtype=object), len(outcomes)),
        "outcome": np.tile(np.array(outcomes, dtype=object), len(starts)),
    }


def _result(keys: pd.DataFrame, estimates: Estimates, flag: np.ndarray, level: float) -> OutcomesResult:
    counts = {"n_effective": estimates.n_effective}
    return OutcomesResult(keys=keys, estimates=estimates, flag=flag, counts=counts, confidence_level=level)
