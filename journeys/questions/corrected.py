"""p-values corrected for how many there are."""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import FloatArray


def corrected(p_value: FloatArray, method: str = "holm") -> FloatArray:
    """Return p-values corrected for their number; those that are not there are not counted.

    Parameters
    ----------
    p_value : ndarray, shape (n,)
        NaN where there is none.
    method : str
        "none", or a method of `statsmodels.stats.multitest.multipletests`. Holm's holds whatever the dependence: the
        chance that any of those with nothing behind them falls below a limit is at most that limit.

    References
    ----------
    S. Holm, A simple sequentially rejective multiple test procedure, Scandinavian Journal of Statistics 6 (1979)
    65-70.

    Examples
    --------
    >>> corrected(np.array([0.01, np.nan, 0.04])).tolist()
    [0.02, nan, 0.04]
    """
    there = np.isfinite(p_value)
    if method == "none" or not there.any():
        return p_value
    found = np.full(len(p_value), np.nan)
    found[there] = _holm(p_value[there]) if method == "holm" else _by_method(p_value[there], method)
    return found


def _holm(p: FloatArray) -> FloatArray:
    """Return p values times how many are at least as large, and never below a smaller one's.

    Written out, since nearly every summary asks for it and importing the library takes longer than all its tests.
    """
    order = np.argsort(p, kind="stable")
    found = np.empty(len(p))
    found[order] = np.minimum(np.maximum.accumulate(p[order] * np.arange(len(p), 0, -1)), 1.0)
    return found


def _by_method(p: FloatArray, method: str) -> FloatArray:
    from statsmodels.stats.multitest import multipletests

    return np.asarray(multipletests(p, method=method)[1])
