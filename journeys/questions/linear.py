"""Linearised uncertainty: from a derivative by the moves to a standard error, and what flags come with it."""

from __future__ import annotations

import numpy as np

from journeys.kernels.absorption import Passage
from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at
from journeys.kernels.intervals import variance_from_buckets
from journeys.kernels.visits import often_visited
from journeys.models.fit import JourneyFit
from journeys.results import KNOWN, Estimates

# Fewer events, or fewer degrees of freedom, than these carry no two-sided interval (judgements).
ENOUGH_EVENTS = 5.0
ENOUGH_DF = 10.0
LEANS = 0.01
TOO_FEW = "too few"
DOUBTFUL = "too extreme to compute"


def probability_spread(
    fit: JourneyFit, found: Passage, n_buckets: IntArray | None = None
) -> tuple[FloatArray, FloatArray]:
    """Return standard error and degrees of freedom of the probability of a passage, from every start.

    Parameters
    ----------
    fit : JourneyFit
        The chain; a known one gives zeros, and infinite degrees of freedom.
    found : Passage
        Through its moves.
    n_buckets : ndarray of int, shape (n_states + 1,), optional
        Buckets that are not empty, by start, where the chain is that of several groups; default: all.

    Returns
    -------
    std_error, df : ndarray, shape (n_states + 1,)
        Exactly 0 from where the target is certain.
    """
    if fit.influence is None:
        n = len(found.probability)
        return np.zeros(n), np.full(n, np.inf)
    return _probability_spread(found, found.probability_changes(fit.influence.probability), n_buckets)


def passage_spread(fit: JourneyFit, found: Passage, *, steps: bool) -> dict[str, tuple[FloatArray, FloatArray]]:
    """Return standard errors and degrees of freedom of the answers of a passage, from every start.

    Parameters
    ----------
    fit : JourneyFit
        The chain; a known one gives zeros, and infinite degrees of freedom.
    found : Passage
        Through its moves.
    steps : bool
        The passage counts moves; else it is in time.

    Returns
    -------
    dict of str to (std_error, df), each of shape (n_states + 1,)
        By `probability`, `mean_given` and `sd_given`; NaN errors where the answer is undefined.
    """
    if fit.influence is None:
        return dict.fromkeys(("probability", "mean_given", "sd_given"), probability_spread(fit, found))
    pulls = fit.influence
    by_p = pulls.probability
    change = found.changes(by_p, by_p, by_p) if steps else found.changes(by_p, pulls.mean, pulls.second)
    return {
        "probability": _probability_spread(found, change.probability),
        "mean_given": _spread_of(change.mean_given),
        "sd_given": _spread_of(change.sd_given),
    }


def _probability_spread(
    found: Passage, change: FloatArray, n_buckets: IntArray | None = None
) -> tuple[FloatArray, FloatArray]:
    # where nothing else can happen the rows of the moves sum to 1, whatever the buckets; what is left is rounding
    return _spread_of(np.where(found.certain, 0.0, change), n_buckets)


def _spread_of(influence: FloatArray, n_buckets: IntArray | None = None) -> tuple[FloatArray, FloatArray]:
    variance, df = variance_from_buckets(influence, n_buckets)
    return np.sqrt(variance), df


def starts_counted(fit: JourneyFit) -> FloatArray:
    """Return the completed stays of entry and each state: trials behind a probability of exactly 0 or 1."""
    return sum_at(fit.move_state, fit.n_moves, fit.nodes.n_rows)


def probabilities(
    fit: JourneyFit | None, value: FloatArray, std_error: FloatArray, df: FloatArray, trials: FloatArray, scale: str
) -> Estimates:
    """Return probabilities with their effective trials and a mark where events are too few.

    Parameters
    ----------
    fit : JourneyFit or None
        The chain; None for shares that were counted without one.
    value, std_error, df, trials : ndarray, shape (n,)
        Probabilities, their spread, and the completed stays behind each, the most that `n_effective` can
        be for a single cell and what it is where the variance is zero.
    scale : str
        "logit" or "cell".
    """
    n = len(value)
    if fit is not None and fit.influence is None:
        return Estimates(
            value,
            np.zeros(n),
            np.full(n, np.inf),
            np.full(n, KNOWN, dtype=object),
            np.full(n, np.nan),
            np.zeros(n, bool),
        )
    variance = std_error**2
    effective = np.divide(value * (1 - value), variance, out=trials.astype(float).copy(), where=variance > 0)
    if scale == "cell":
        effective = np.minimum(effective, trials)
    smaller = np.where(np.isfinite(effective), effective, trials) * np.minimum(value, 1 - value)
    few = (smaller < ENOUGH_EVENTS) | ~(variance > 0)
    if scale == "logit":
        few |= df < ENOUGH_DF
    return Estimates(value, std_error, df, np.full(n, scale, dtype=object), effective, few)


def leaning(fit: JourneyFit) -> dict[str, BoolArray]:
    """Return, for each kind of row flag, from which starts more than 1 % pass a row that bears it.

    Returns
    -------
    dict of str to ndarray of bool, shape (n_states + 1,)
        By the words of the flag.
    """
    nodes = fit.nodes
    found = {}
    for text in dict.fromkeys(fit.row_flags.values()):
        bears = np.array([fit.row_flags.get(name) == text for name in nodes.labels[: nodes.n_rows]])
        found[text] = often_visited(
            nodes.n_rows, fit.move_state, fit.move_target, fit.probability, fit.classes, bears, LEANS
        )
    return found
