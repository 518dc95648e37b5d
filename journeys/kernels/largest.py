"""The chance of the largest of several numbers that go together."""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import FloatArray
from journeys.kernels.intervals import variance_from_buckets

_AT_ONCE = 2_000_000


def largest_of(
    difference: FloatArray, influence: FloatArray, rng: np.random.Generator, n_draws: int = 5_000
) -> tuple[FloatArray, float]:
    """Return differences in standard errors, and the chance of one as large as the largest of them.

    Parameters
    ----------
    difference : float array, shape (n,)
        Each 0 if nothing is behind it.
    influence : float array, shape (n_buckets, n)
        What each bucket of customers does to them.
    rng : numpy.random.Generator
        Source of chance.
    n_draws : int
        Draws of the largest.

    Returns
    -------
    z : float array, shape (n,)
        0 where the variance is 0.
    p_value : float
        No smaller than 1/(n_draws + 1).

    Notes
    -----
    Buckets multiplied by independent normal numbers give normal draws with the correlations that the buckets have
    among the differences. Standard errors being estimates, each draw is divided by the root of a chi square over its
    degrees of freedom, the median of the differences': multivariate t. The largest of each draw is compared with the
    largest found.

    References
    ----------
    V. Chernozhukov, D. Chetverikov, K. Kato, Gaussian approximations and multiplier bootstrap for maxima of sums of
    high-dimensional random vectors, Ann. Statist. 41 (2013) 2786-2819.

    Examples
    --------
    Two differences that are one and the same are one test:

    >>> rng = np.random.default_rng(1)
    >>> pulls = np.repeat(rng.normal(size=(200, 1)), 2, axis=1)
    >>> z, p = largest_of(1.96 * np.sqrt((pulls**2).sum(axis=0)), pulls, rng)
    >>> abs(p - 0.05) < 0.01
    True
    """
    variance, df = variance_from_buckets(influence)
    there = variance > 0
    z = np.zeros(len(difference))
    z[there] = difference[there] / np.sqrt(variance[there])
    if not there.any():
        return z, 1.0
    unit = influence[:, there] / np.linalg.norm(influence[:, there], axis=0)
    largest, step = float(np.abs(z).max()), max(_AT_ONCE // max(unit.shape), 1)
    above, known = 0, float(np.median(df[there]))
    for first in range(0, n_draws, step):
        n = min(step, n_draws - first)
        draws = rng.standard_normal((n, len(unit))) @ unit
        draws /= np.sqrt(rng.chisquare(known, n) / known)[:, None]
        above += int((np.abs(draws).max(axis=1) >= largest).sum())
    return z, (1.0 + above) / (1.0 + n_draws)
