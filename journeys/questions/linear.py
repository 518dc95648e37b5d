"""Linearised uncertainty: from a derivative by the moves to a standard error, and what flags come with it."""

from __future__ import annotations

import numpy as np

from journeys.kernels.absorption import passage
from journeys.kernels.arrays import BoolArray, FloatArray, sum_at
from journeys.kernels.intervals import variance_from_buckets
from journeys.models.fit import JourneyFit
from journeys.results import KNOWN, Estimates

# Fewer events, or fewer degrees of freedom, than these carry no two-sided interval (judgements).
ENOUGH_EVENTS = 5.0
ENOUGH_DF = 10.0
LEANS = 0.01
TOO_FEW = "too few"


def spread(
    fit: JourneyFit, by_p: FloatArray, by_mean: FloatArray, by_second: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return standard error and degrees of freedom of answers from their derivatives.

    Parameters
    ----------
    fit : JourneyFit
        The chain; a known one gives zeros.
    by_p, by_mean, by_second : ndarray, shape (n_answers, n_moves)
        Derivatives by each move's probability, mean and second moment.

    Returns
    -------
    std_error, df : ndarray, shape (n_answers,)
    """
    if fit.influence is None:
        return np.zeros(len(by_p)), np.full(len(by_p), np.inf)
    influence = fit.influence.probability @ by_p.T
    if by_mean.any() or by_second.any():
        influence = influence + fit.influence.mean @ by_mean.T + fit.influence.second @ by_second.T
    variance, df = variance_from_buckets(influence)
    return np.sqrt(variance), df


def starts_counted(fit: JourneyFit) -> FloatArray:
    """Return the completed stays of entry and each state: trials behind a probability of exactly 0 or 1."""
    return sum_at(fit.move_state, fit.n_moves, fit.nodes.n_rows)


def probabilities(
    fit: JourneyFit, value: FloatArray, std_error: FloatArray, df: FloatArray, trials: FloatArray, scale: str
) -> Estimates:
    """Return probabilities with their effective trials and a mark where events are too few.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    value, std_error, df, trials : ndarray, shape (n,)
        Probabilities, their spread, and the completed stays behind each, the most that `n_effective` can
        be for a single cell and what it is where the variance is zero.
    scale : str
        "logit" or "cell".
    """
    n = len(value)
    if fit.influence is None:
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
    found: dict[str, BoolArray] = {}
    for label, text in fit.row_flags.items():
        here = np.array([name == label for name in fit.nodes.labels])
        p = fit.probability
        reach = passage(fit.nodes.n_rows, fit.nodes.n_nodes, fit.move_state, fit.move_target, p, p, p, here)
        found[text] = found.get(text, np.zeros(fit.nodes.n_rows, bool)) | (reach.probability > LEANS)
    return found
