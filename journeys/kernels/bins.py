"""Bins of dwell and elapsed time: upper edges in whole microseconds, right-closed."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

import numpy as np
from numpy.typing import NDArray

DAY_US = 86_400_000_000
HOUR_US = 3_600_000_000
# Years 1 to 9999 in microseconds: no gap between two rows of a readable log is longer.
LONGEST_US = 9_999 * 366 * DAY_US
# Floating-point numbers that agree in their leading 18 bits lie within 1/64 of an octave.
SUB_OCTAVE_SHIFT = 46
# Whole numbers of so many bits are floating-point numbers without rounding.
_EXACT_BITS = 52
STEPS_TO_SILENCE = 219
FINEST_SHARE = 43_200
STANDARD_HORIZONS_US = (
    HOUR_US,
    *(days * DAY_US for days in (1, 2, 3, 7, 14, 30, 60, 90, 180, 365)),
)


def dwell_edges(silence_us: int | None, whole_days: bool = False) -> NDArray[np.int64] | None:
    """Return the upper edges of the dwell bins, or None where a bin is a whole day.

    Parameters
    ----------
    silence_us : int or None
        The silence in microseconds. With None the bins start at one second.
    whole_days : bool
        True for a log of dates: bin d then holds the dwell of exactly d days.

    Returns
    -------
    ndarray of int64, shape (n_bins,), or None
        Increasing edges; a dwell x lies in the first bin whose edge is >= x.

    Notes
    -----
    Geometric bins 5 % wide, the first one from 0 to silence/43,200, one edge exactly at the silence, and
    on past it, for stays that repeats have made longer than the silence.

    Examples
    --------
    >>> edges = dwell_edges(30 * 86_400_000_000)
    >>> int(edges[0]), int(edges[219]) == 30 * 86_400_000_000
    (60000000, True)
    """
    if whole_days:
        return None
    ratio = FINEST_SHARE ** (1.0 / STEPS_TO_SILENCE)
    if silence_us is None:
        return _geometric(1e6, ratio)
    within = silence_us / FINEST_SHARE * ratio ** np.arange(STEPS_TO_SILENCE)
    beyond = _geometric(silence_us * ratio, ratio)
    edges = np.concatenate([np.rint(within).astype(np.int64), [silence_us], beyond])
    return np.unique(np.maximum(edges, 1))


def elapsed_edges(
    silence_us: int | None, whole_days: bool = False, horizons_us: Sequence[int] = ()
) -> NDArray[np.int64] | None:
    """Return the upper edges of the bins of a journey's elapsed time, one at each horizon.

    Parameters
    ----------
    silence_us : int or None
        As in `dwell_edges`.
    whole_days : bool
        As in `dwell_edges`.
    horizons_us : sequence of int
        Extra edges in microseconds, beside the standard ones from an hour to a year.

    Returns
    -------
    ndarray of int64, shape (n_bins,), or None
        Increasing edges.
    """
    edges = dwell_edges(silence_us, whole_days)
    if edges is None:
        return None
    return np.unique(np.concatenate([edges, STANDARD_HORIZONS_US, np.asarray(horizons_us, np.int64)]))


def bin_of(duration_us: NDArray[np.int64], edges: NDArray[np.int64] | None) -> NDArray[np.int64]:
    """Return the bin of each duration (whole days where `edges` is None)."""
    if edges is None:
        return np.asarray(duration_us // DAY_US, np.int64)
    if len(duration_us) < len(edges):
        return np.asarray(np.searchsorted(edges, duration_us, side="left"), np.int64)
    # The leading bits tell a bin that is not too high, and few steps up settle it: far faster than a search. What is
    # taken off goes beyond what rounding to a floating-point number can add.
    at_least = np.maximum(duration_us, 0)
    at_least -= at_least >> _EXACT_BITS
    lowest = lowest_bins(edges.tobytes())[at_least.astype(np.float64).view(np.int64) >> SUB_OCTAVE_SHIFT]
    bins: NDArray[np.int64] = lowest.astype(np.int64)
    while (above := duration_us > edges[bins]).any():
        bins += above
    return bins


@cache
def lowest_bins(edges: bytes) -> NDArray[np.int16]:
    """Return, for the leading bits of a duration as a floating-point number, the lowest bin it can be in.

    Parameters
    ----------
    edges : bytes
        Upper edges of the bins, as int64.

    Returns
    -------
    ndarray of int16
        By the bits that `SUB_OCTAVE_SHIFT` leaves.
    """
    last = int(np.array(float(LONGEST_US)).view(np.int64)) >> SUB_OCTAVE_SHIFT
    lowest = (np.arange(last + 1, dtype=np.int64) << SUB_OCTAVE_SHIFT).view(np.float64)
    return np.searchsorted(np.frombuffer(edges, np.int64), np.ceil(lowest), side="left").astype(np.int16)


def bin_bounds_days(edges: NDArray[np.int64] | None, n_bins: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return lower and upper bounds in days of the first `n_bins` bins, each of shape (n_bins,)."""
    if edges is None:
        days = np.arange(n_bins, dtype=np.float64)
        return days, days
    upper = edges[:n_bins] / DAY_US
    return np.concatenate([[0.0], upper[:-1]]), upper


def _geometric(first: float, ratio: float) -> NDArray[np.int64]:
    steps = int(np.ceil(np.log(LONGEST_US / first) / np.log(ratio))) + 1
    edges: NDArray[np.float64] = np.rint(first * ratio ** np.arange(max(steps, 1)))
    return edges.astype(np.int64)
