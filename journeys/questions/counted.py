"""Quantiles with what their intervals need: the inverse of the band about a distribution function."""

from __future__ import annotations

from collections.abc import Hashable
from dataclasses import dataclass, replace

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray
from journeys.kernels.intervals import t_quantile
from journeys.results import KNOWN, Estimates

READ_OFF = "read off"
# At how many standard errors of the share, down and up, the curve is read; about those of usual levels.
SIDES = np.array([-4.0, -2.6, -2.0, -1.65, -1.0, 1.0, 1.65, 2.0, 2.6, 4.0])
_MIDDLE = len(SIDES) // 2
_STEPS = np.insert(SIDES, _MIDDLE, 0.0)
_ROUNDING = 1e-9  # a whole number reached but for rounding is that number


@dataclass(frozen=True, eq=False)
class ReadOff(Estimates):
    """Quantiles whose bounds are the inverse of the band about the distribution function.

    Attributes
    ----------
    logs : ndarray, shape (n, n_steps)
        Logarithm of where the distribution function meets the level and, on both sides, the level so many standard
        errors down and up; times and numbers are counted from `first`.
    first : int or None
        For whole numbers the one counted from: 0 for steps, -1 for days, of which 0 is one. None for times.
    unit : float
        What one of them is in the unit of `value`.

    References
    ----------
    R. S. Woodruff, Confidence intervals for medians and other position measures, J. Amer. Statist. Assoc. 47
    (1952) 635-646.
    """

    logs: FloatArray
    first: int | None = None
    unit: float = 1.0

    def bounds(self, confidence_level: float) -> tuple[FloatArray, FloatArray]:
        """Return the lower and upper bounds at a level (see `Estimates.bounds`)."""
        low, high = super().bounds(confidence_level)
        mine = (self.scale == READ_OFF) & ~self.few
        t = t_quantile(self.df, confidence_level)
        return np.where(mine, self._read(-t), low), np.where(mine, self._read(t), high)

    def _read(self, t: FloatArray) -> FloatArray:
        """Return where the curve meets the level so many standard errors up, on the line through what was read."""
        known = np.nan_to_num(t)
        i = np.clip(np.searchsorted(_STEPS, known, side="right") - 1, 0, len(_STEPS) - 2)
        each = np.arange(len(t))
        left, right = self.logs[each, i], self.logs[each, i + 1]
        with np.errstate(over="ignore"):
            # a spread many times the number itself: nothing is known, from 0 to infinity
            x = np.exp(left + (known - _STEPS[i]) / (_STEPS[i + 1] - _STEPS[i]) * (right - left))
        x = np.where(np.isnan(t), np.nan, x)
        return (x if self.first is None else up(x + self.first)) * self.unit

    @property
    def kind(self) -> Hashable:
        """What others share with whom these may be put into one."""
        return ReadOff, self.first, self.unit

    def take(self, index: np.ndarray) -> Estimates:
        """Return those at `index`, positions or a mask."""
        return ReadOff(**vars(super().take(index)), logs=self.logs[index], first=self.first, unit=self.unit)

    def times(self, factor: float) -> Estimates:
        """Return the same numbers in another unit."""
        return replace(self, value=self.value * factor, std_error=self.std_error * factor, unit=self.unit * factor)


def up(x: FloatArray) -> FloatArray:
    """Return the next whole number, or the number itself where it is whole but for rounding."""
    return np.asarray(np.ceil(x - _ROUNDING) + 0.0, dtype=np.float64)


def shares_about(share: FloatArray, std_error: FloatArray) -> FloatArray:
    """Return the shares some standard errors down and up, shape (n, n_sides); NaN where there is no such share."""
    about = share[:, None] + std_error[:, None] * SIDES
    return np.where((about > 0) & (about < 1), about, np.nan)


def inverted(
    at: FloatArray, about: FloatArray, df: FloatArray, few: BoolArray, known: BoolArray, first: int | None
) -> Estimates:
    """Return quantiles with what their intervals need, from where the curve meets the level.

    Parameters
    ----------
    at : float array, shape (n,)
        Where it meets the level.
    about : float array, shape (n, n_sides)
        Where it meets the level some standard errors down and up (`SIDES`); NaN or infinite where it does not.
    df : float array, shape (n,)
        Degrees of freedom of the standard error.
    few, known : bool arrays, shape (n,)
        Too few events for an interval; no uncertainty.
    first : int or None
        For whole numbers the one they are counted from (see `ReadOff`); None for times.
    """
    start = 0 if first is None else first
    with np.errstate(divide="ignore", invalid="ignore"):
        logs = np.log(np.insert(about, _MIDDLE, at, axis=1) - start)
        logs = _extended(np.where(np.isinf(logs), np.nan, logs))
        below, above = (np.abs(logs[:, _MIDDLE + side] - logs[:, _MIDDLE]) for side in (-1, 1))
        std_error = np.where(known, 0.0, (at - start) * (below + above) / 2.0)
    std_error = np.where(np.isfinite(at), std_error, np.nan)
    value = at if first is None else up(at)
    scale = np.where(known, KNOWN, READ_OFF).astype(object)
    df = np.where(known, np.inf, df)
    return ReadOff(value, std_error, df, scale, np.full(len(at), np.nan), few, logs=logs, first=first)


def _extended(logs: FloatArray) -> FloatArray:
    """Go on in a straight line where the curve ends before the level is met: the band has no end of its own there."""
    for side in (1, -1):
        ends = range(_MIDDLE + 1, len(_STEPS)) if side > 0 else range(_MIDDLE - 1, -1, -1)
        for j in ends:
            # next to the middle the line is that of the other side
            i, h = j - side, j - 2 * side
            slope = (logs[:, i] - logs[:, h]) / (_STEPS[i] - _STEPS[h])
            logs[:, j] = np.where(np.isnan(logs[:, j]), logs[:, i] + slope * (_STEPS[j] - _STEPS[i]), logs[:, j])
    return logs
