"""Quantiles with what their intervals need: the inverse of the band about a distribution function."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray
from journeys.kernels.intervals import log_interval
from journeys.results import KNOWN, LOG, Estimates

COUNTED = "counted"
_ROUNDING = 1e-9  # a whole number reached but for rounding is that number


@dataclass(frozen=True, eq=False)
class CountedEstimates(Estimates):
    """Quantiles in whole numbers, whose bounds are the inverse of the band about the distribution function.

    Attributes
    ----------
    between : ndarray, shape (n,)
        Where the line through the distribution function meets the level.
    below, above : ndarray, shape (n,)
        How far the logarithm of that moves when the level goes down or up by one standard error.
    first : int
        The number counted from: 0 for steps, -1 for days, of which 0 is one.
    unit : float
        What one of them is in the unit of `value`.

    References
    ----------
    R. S. Woodruff, Confidence intervals for medians and other position measures, J. Amer. Statist. Assoc. 47
    (1952) 635-646.
    """

    between: FloatArray
    below: FloatArray
    above: FloatArray
    first: int = 0
    unit: float = 1.0

    def bounds(self, confidence_level: float) -> tuple[FloatArray, FloatArray]:
        """Return the lower and upper bounds at a level (see `Estimates.bounds`)."""
        low, high = super().bounds(confidence_level)
        mine = (self.scale == COUNTED) & ~self.few
        x = self.between - self.first
        lower = log_interval(x, x * self.below, self.df, confidence_level)[0]
        upper = log_interval(x, x * self.above, self.df, confidence_level)[1]
        lower, upper = (up(one + self.first) * self.unit for one in (lower, upper))
        return np.where(mine, lower, low), np.where(mine, upper, high)

    def take(self, index: np.ndarray) -> Estimates:
        """Return those at `index`, positions or a mask."""
        places = (self.between[index], self.below[index], self.above[index])
        return CountedEstimates(**vars(super().take(index)), **dict(zip(("between", "below", "above"), places,
                                strict=True)), first=self.first, unit=self.unit)  # fmt: skip

    def times(self, factor: float) -> Estimates:
        """Return the same numbers in another unit."""
        return replace(
            self, value=self.value * factor, std_error=self.std_error * factor, unit=self.unit * factor
        )


def up(x: FloatArray) -> FloatArray:
    """Return the next whole number, or the number itself where it is whole but for rounding."""
    return np.asarray(np.ceil(x - _ROUNDING) + 0.0, dtype=np.float64)


def inverted(
    at: FloatArray, low: FloatArray, high: FloatArray, df: FloatArray, few: BoolArray, known: BoolArray,
    first: int | None,
) -> Estimates:  # fmt: skip
    """Return quantiles with what their intervals need, from where the curve meets the level.

    Parameters
    ----------
    at, low, high : float arrays, shape (n,)
        Where it meets the level, and the level less and plus one standard error; NaN for no band, infinite
        where the curve ends below.
    df : float array, shape (n,)
        Degrees of freedom of the standard error.
    few, known : bool arrays, shape (n,)
        Too few events for an interval; no uncertainty.
    first : int or None
        For whole numbers the one they are counted from (see `CountedEstimates`); None for times.
    """
    start = 0 if first is None else first
    with np.errstate(divide="ignore", invalid="ignore"):
        logs = np.log(np.maximum(np.stack([low, at, high]) - start, 1e-12))
        below, above = logs[1] - logs[0], logs[2] - logs[1]
        # where nobody is beyond, the band has no upper end of its own
        above = np.where(np.isfinite(above), above, below)
        std_error = np.where(known, 0.0, (at - start) * (below + above) / 2.0)
    std_error = np.where(np.isfinite(at), std_error, np.nan)
    value = at if first is None else up(at)
    scale = np.where(known, KNOWN, LOG if first is None else COUNTED).astype(object)
    df = np.where(known, np.inf, df)
    columns = (value, std_error, df, scale, np.full(len(at), np.nan), few)
    if first is None:
        return Estimates(*columns)
    return CountedEstimates(*columns, between=at, below=below, above=above, first=first)
