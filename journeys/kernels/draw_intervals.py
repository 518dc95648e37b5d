"""Standard errors and intervals from the answers of many resamples."""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import FloatArray, IntArray


def transformed_error(draws: FloatArray, value: FloatArray, *, logit: bool) -> tuple[FloatArray, IntArray]:
    """Spread of an answer over resamples as a standard error, measured on a scale on which it is even.

    Parameters
    ----------
    draws : float array, shape (n_resamples, n)
        Answers of the resamples; NaN where one is undefined.
    value : float array, shape (n,)
        The answers themselves.
    logit : bool
        The scale: logit for probabilities, else the logarithm.

    Returns
    -------
    std_error : float array, shape (n,)
        Brought back to the scale of the answer (delta method); NaN where fewer than two resamples have a place,
        and for an infinite answer.
    n_undefined : int array, shape (n,)
        Resamples without a place on the scale.

    References
    ----------
    B. Efron, R. J. Tibshirani, An Introduction to the Bootstrap, Chapman and Hall 1993, chapters 6 and 12.

    Examples
    --------
    >>> error, lost = transformed_error(np.array([[1.0], [np.e**2], [0.0]]), np.array([2.0]), logit=False)
    >>> error.round(4).tolist(), lost.tolist()
    ([2.8284], [1])
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        placed = np.log(draws) - np.log1p(-draws) if logit else np.log(draws)
    defined = np.isfinite(placed)
    n = defined.sum(axis=0)
    middle = np.where(defined, placed, 0.0).sum(axis=0) / np.maximum(n, 1)
    square = np.where(defined, placed - middle, 0.0) ** 2
    value = np.where(np.isfinite(value), value, np.nan)
    error = np.sqrt(square.sum(axis=0) / np.maximum(n - 1, 1)) * (value * (1 - value) if logit else value)
    return np.where(n > 1, error, np.nan), len(draws) - n


def acceleration(influence: FloatArray) -> FloatArray:
    """How fast the standard error of an answer changes with the answer, from the influence of each bucket.

    Parameters
    ----------
    influence : float array, shape (n_buckets, n)

    Returns
    -------
    float array, shape (n,)
        0 where nothing has influence.

    References
    ----------
    B. Efron, Better bootstrap confidence intervals, JASA 82 (1987) 171-185, formula (7.3).

    Examples
    --------
    >>> acceleration(np.array([[3.0], [-1.0], [-1.0], [-1.0]])).round(4).tolist()
    [0.0962]
    """
    # scaled first: third powers of small influences would vanish
    scale = np.max(np.abs(influence), axis=0, initial=0.0)
    even = influence / np.where(scale > 0, scale, 1.0)
    square = (even**2).sum(axis=0)
    speed = np.zeros(square.shape)
    np.divide((even**3).sum(axis=0), 6.0 * square**1.5, out=speed, where=square > 0)
    return speed


def drawn_interval(
    draws: FloatArray, value: FloatArray, confidence_level: float, accelerations: FloatArray | None = None
) -> tuple[FloatArray, FloatArray]:
    """Percentile interval, or with accelerations the bias-corrected and accelerated one (BCa).

    Parameters
    ----------
    draws : float array, shape (n_resamples, n)
        NaN and infinite draws are left out.
    value : float array, shape (n,)
        The answers themselves.
    confidence_level : float
        Between 0 and 1.
    accelerations : float array, shape (n,), optional
        From `acceleration`.

    Returns
    -------
    low, high : float arrays, shape (n,)
        NaN where no draw is left, or, with accelerations, where all lie on one side of the answer.

    References
    ----------
    B. Efron, Better bootstrap confidence intervals, JASA 82 (1987) 171-185. B. Efron, R. J. Tibshirani, An
    Introduction to the Bootstrap, Chapman and Hall 1993, chapters 13 and 14.

    Examples
    --------
    >>> draws = np.arange(1.0, 100.0)[:, None]
    >>> [end.tolist() for end in drawn_interval(draws, np.array([50.0]), 0.9)]
    [[5.0], [95.0]]
    """
    from scipy.special import ndtr, ndtri

    ordered = np.sort(np.where(np.isfinite(draws), draws, np.nan), axis=0)
    n = np.isfinite(ordered).sum(axis=0)
    tails = np.array([(1 - confidence_level) / 2, (1 + confidence_level) / 2])[:, None]
    shares = np.repeat(tails, len(value), axis=1)
    if accelerations is not None:
        below = (ordered < value).sum(axis=0) + 0.5 * (ordered == value).sum(axis=0)
        bias = ndtri(np.divide(below, n, out=np.full(len(value), np.nan), where=n > 0))
        bias = np.where(np.isfinite(bias), bias, np.nan)
        pushed = bias + ndtri(tails)
        slope = 1.0 - accelerations * pushed
        # past this the correction has no meaning: the interval goes on to the last draw
        shares = np.where(slope > 0, ndtr(bias + pushed / np.where(slope > 0, slope, 1.0)), pushed > 0)
        shares = np.where(np.isnan(pushed), np.nan, shares)
    low, high = (_ranked(ordered, n, share) for share in shares)
    return low, high


def _ranked(ordered: FloatArray, n: IntArray, share: FloatArray) -> FloatArray:
    """Value at a share of the ordered draws: the draw of rank share (n + 1), between ranks on the line."""
    known = (n > 0) & ~np.isnan(share)
    rank = np.clip(np.where(known, share, 0.0) * (n + 1) - 1, 0, np.maximum(n - 1, 0))
    rank = np.where(np.abs(rank - np.rint(rank)) < 1e-9, np.rint(rank), rank)
    under = np.floor(rank).astype(np.int64)
    over = np.minimum(under + 1, np.maximum(n - 1, 0))
    column = np.arange(ordered.shape[1])
    first, second = ordered[under, column], ordered[over, column]
    return np.where(known, first + (rank - under) * (second - first), np.nan)
