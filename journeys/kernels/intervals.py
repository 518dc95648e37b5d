"""Intervals, and variances from buckets or clusters of customers."""

from __future__ import annotations

from typing import Literal

import numpy as np
import numpy.typing as npt

from journeys.kernels.arrays import FloatArray, IntArray

Side = Literal["both", "lower", "upper"]


def clopper_pearson(
    x: npt.ArrayLike, n: npt.ArrayLike, confidence_level: float = 0.95, side: Side = "both"
) -> tuple[FloatArray, FloatArray]:
    """Exact binomial interval of a proportion.

    Parameters
    ----------
    x, n : array_like
        Successes and trials; both may be fractional. NaN gives NaN.
    confidence_level : float, default 0.95
        Level of the interval.
    side : {"both", "lower", "upper"}, default "both"
        "lower" gives the lower bound at the full 1 - level and 1 as the upper one;
        "upper" gives 0 and the upper bound.

    Returns
    -------
    tuple of two float arrays
        Lower and upper bounds; 0 and 1 where `n` is 0.

    Raises
    ------
    ValueError
        For another `side`.

    References
    ----------
    C. J. Clopper and E. S. Pearson, Biometrika 26 (1934) 404-413.

    Examples
    --------
    >>> low, high = clopper_pearson([0, 3], 10)
    >>> low.round(4).tolist(), high.round(4).tolist()
    ([0.0, 0.0667], [0.3085, 0.6525])
    """
    from scipy.special import betainccinv, betaincinv

    if side not in ("both", "lower", "upper"):
        raise ValueError(f"side is {side!r}; it must be 'both', 'lower' or 'upper'")
    x, n = np.broadcast_arrays(np.asarray(x, dtype=np.float64), np.asarray(n, dtype=np.float64))
    alpha = (1.0 - confidence_level) / (2.0 if side == "both" else 1.0)
    unknown = ~((x >= 0) & (x <= n))
    low, high = np.zeros(x.shape), np.ones(x.shape)
    if side != "upper":
        some = x > 0
        low[some] = betaincinv(x[some], (n - x + 1.0)[some], alpha)
    if side != "lower":
        some = x < n
        high[some] = betainccinv((x + 1.0)[some], (n - x)[some], alpha)
    return np.where(unknown, np.nan, low), np.where(unknown, np.nan, high)


def variance_from_buckets(
    influence: FloatArray, n_buckets: int | IntArray | None = None
) -> tuple[FloatArray, FloatArray]:
    """Variance of an answer from the influence of each bucket of customers.

    Parameters
    ----------
    influence : float array, shape (G, ...)
        Influence of each bucket; rows of empty buckets are 0.
    n_buckets : int or int array of shape (...), optional
        Number of buckets that are not empty, of all answers or of each; default all rows.

    Returns
    -------
    tuple of two float arrays, each of shape (...)
        Variance, and degrees of freedom for a t quantile. NaN with fewer than two
        buckets; the most degrees of freedom, G - 1, where the variance is 0.

    Notes
    -----
    ``V = G/(G-1) sum IF**2``; ``nu = 2 G m2**2 / (m4 - m2**2)`` within 1 and G - 1, with m2
    and m4 the means of the second and fourth powers.

    References
    ----------
    F. E. Satterthwaite, Biometrics Bulletin 2 (1946) 110-114.

    Examples
    --------
    >>> import numpy as np
    >>> variance, df = variance_from_buckets(np.array([0.1, -0.1, 0.2, -0.2]))
    >>> round(float(variance), 4), round(float(df), 4)
    (0.1333, 3.0)
    """
    shape = influence.shape[1:]
    g = np.asarray(len(influence) if n_buckets is None else n_buckets, dtype=np.float64)
    g = np.where(g < 2, np.nan, g)
    # scaled first: fourth powers of small influences would vanish
    scale = np.max(np.abs(influence), axis=0, initial=0.0)
    square = (influence / np.where(scale > 0, scale, 1.0)) ** 2
    m2, m4 = square.sum(axis=0) / g, (square**2).sum(axis=0) / g
    spread = m4 - m2**2
    df = np.where(np.isnan(g), np.nan, np.full(shape, np.inf))
    np.divide(2.0 * g * m2**2, spread, out=df, where=spread > 0)
    return g / (g - 1.0) * square.sum(axis=0) * scale**2, np.clip(df, 1.0, g - 1.0)


def t_quantile(df: npt.ArrayLike, confidence_level: float) -> FloatArray:
    """Return the t quantile of a two-sided interval.

    Examples
    --------
    >>> t_quantile([10, np.inf], 0.95).round(3).tolist()
    [2.228, 1.96]
    """
    from scipy.special import stdtrit

    upper = 0.5 + confidence_level / 2.0
    return np.asarray(stdtrit(np.asarray(df, dtype=np.float64), upper), dtype=np.float64)


def logit_interval(
    p: npt.ArrayLike, se: npt.ArrayLike, df: npt.ArrayLike, confidence_level: float = 0.95
) -> tuple[FloatArray, FloatArray]:
    """Interval of a probability, symmetric on the logit scale.

    Parameters
    ----------
    p, se : array_like
        Probability and its standard error.
    df : array_like
        Degrees of freedom of the t quantile.
    confidence_level : float, default 0.95
        Level of the interval.

    Returns
    -------
    tuple of two float arrays
        Lower and upper bounds; NaN at 0 and 1, where the scale has no place.

    Examples
    --------
    >>> low, high = logit_interval(0.2, 0.05, 30)
    >>> round(float(low), 4), round(float(high), 4)
    (0.1167, 0.3212)
    """
    from scipy.special import expit, logit

    p, se = np.asarray(p, dtype=np.float64), np.asarray(se, dtype=np.float64)
    inside = np.where((p > 0) & (p < 1), p, np.nan)
    half = t_quantile(df, confidence_level) * se / (inside * (1.0 - inside))
    middle = logit(inside)
    return np.asarray(expit(middle - half)), np.asarray(expit(middle + half))


def log_interval(
    x: npt.ArrayLike, se: npt.ArrayLike, df: npt.ArrayLike, confidence_level: float = 0.95
) -> tuple[FloatArray, FloatArray]:
    """Interval of a positive number, symmetric on the log scale.

    Parameters
    ----------
    x, se : array_like
        The number and its standard error.
    df : array_like
        Degrees of freedom of the t quantile.
    confidence_level : float, default 0.95
        Level of the interval.

    Returns
    -------
    tuple of two float arrays
        Lower and upper bounds; NaN where `x` is not positive.

    Examples
    --------
    >>> low, high = log_interval(5.0, 0.5, 30)
    >>> round(float(low), 4), round(float(high), 4)
    (4.0764, 6.1329)
    """
    x, se = np.asarray(x, dtype=np.float64), np.asarray(se, dtype=np.float64)
    inside = np.where((x > 0) & np.isfinite(x), x, np.nan)
    with np.errstate(over="ignore"):
        # A spread many times the number itself: nothing is known, from 0 to infinity.
        factor = np.exp(t_quantile(df, confidence_level) * se / inside)
        return inside / factor, inside * factor


def t_interval(
    x: npt.ArrayLike, se: npt.ArrayLike, df: npt.ArrayLike, confidence_level: float = 0.95
) -> tuple[FloatArray, FloatArray]:
    """Interval of any number, symmetric about it.

    Parameters
    ----------
    x, se : array_like
        The number and its standard error.
    df : array_like
        Degrees of freedom of the t quantile.
    confidence_level : float, default 0.95
        Level of the interval.

    Returns
    -------
    tuple of two float arrays
        Lower and upper bounds.

    Examples
    --------
    >>> low, high = t_interval(-0.5, 0.5, 30)
    >>> round(float(low), 4), round(float(high), 4)
    (-1.5211, 0.5211)
    """
    x = np.asarray(x, dtype=np.float64)
    half = t_quantile(df, confidence_level) * np.asarray(se, dtype=np.float64)
    return x - half, x + half


def t_test(x: npt.ArrayLike, se: npt.ArrayLike, df: npt.ArrayLike) -> FloatArray:
    """Two-sided p-value of a number that would be 0.

    Parameters
    ----------
    x, se : array_like
        The number and its standard error.
    df : array_like
        Degrees of freedom of the t distribution.

    Returns
    -------
    float array
        NaN where the standard error is not positive.

    Examples
    --------
    >>> t_test(2.0, 1.0, 30).round(4).tolist()
    0.0546
    """
    from scipy.special import stdtr

    x, se = np.asarray(x, dtype=np.float64), np.asarray(se, dtype=np.float64)
    t = np.divide(np.abs(x), se, out=np.full(np.broadcast(x, se).shape, np.nan), where=se > 0)
    return np.asarray(2.0 * stdtr(df, -t), dtype=np.float64)


def ratio_variance(y: npt.ArrayLike, m: npt.ArrayLike) -> tuple[float, float, float]:
    """Ratio of two sums over clusters, with its linearised variance.

    Parameters
    ----------
    y, m : array_like, shape (n,)
        Numerator and denominator of each cluster; clusters with ``m = 0`` count.

    Returns
    -------
    tuple of three floats
        ``R = sum y / sum m``, ``sum (y - R m)**2 / (sum m)**2``, and that times n/(n - 1).
        NaN where it is not defined.

    References
    ----------
    W. G. Cochran, Sampling Techniques, 3rd edition, Wiley 1977, sections 2.11 and 6.4.

    Examples
    --------
    >>> ratio, variance, _ = ratio_variance([1, 0, 2, 1], [2, 1, 3, 2])
    >>> ratio, round(variance, 6)
    (0.5, 0.007812)
    """
    y, m = np.asarray(y, dtype=np.float64), np.asarray(m, dtype=np.float64)
    n, size = len(y), float(m.sum())
    if size == 0:
        return np.nan, np.nan, np.nan
    ratio = float(y.sum()) / size
    variance = float(np.sum((y - ratio * m) ** 2)) / size**2
    return ratio, variance, variance * n / (n - 1) if n > 1 else np.nan
