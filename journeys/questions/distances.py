"""Differences of two numbers, told apart on the scale on which each has an even spread."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray
from journeys.kernels.intervals import t_quantile, variance_from_buckets
from journeys.results import LOG, LOGIT, PLAIN, Estimates

# So much longer than the interval of the distance, that of the plain difference takes its place.
_LONGER = 1.1


@dataclass(frozen=True, eq=False)
class Distance:
    """How far apart two numbers are, on the logit or the log scale.

    Attributes
    ----------
    scale : str
        "logit" for shares, "log" for times and steps, "plain" where a number has no place on that scale.
    size, std_error, df : float
        The second less the first on that scale, its standard error, and the degrees of freedom of that.
    lean : float
        How much of the way from one to the other the second would go: the less sure number goes further.
    """

    scale: str
    size: float
    std_error: float
    df: float
    lean: float


def distance(a: float, b: float, pull_a: FloatArray, pull_b: FloatArray, *, is_share: bool) -> Distance:
    """Return how far apart two numbers are, from their influence by bucket, shape (n_buckets,) each.

    Examples
    --------
    >>> pull = np.array([0.1, -0.1, 0.1, -0.1])
    >>> found = distance(1.0, np.e, 0.0 * pull, np.e * pull, is_share=False)
    >>> found.scale, found.size, round(found.std_error, 4), found.lean
    ('log', 1.0, 0.2309, 1.0)
    """
    inside = 0 < a < 1 and 0 < b < 1 if is_share else 0 < a < np.inf and 0 < b < np.inf
    scale = (LOGIT if is_share else LOG) if inside else PLAIN
    both = np.array([a, b])
    slope = {LOGIT: both * (1.0 - both), LOG: both, PLAIN: np.ones(2)}[scale]
    x_a, x_b = pull_a / slope[0], pull_b / slope[1]
    variance, df = variance_from_buckets(x_b - x_a) if len(x_a) else (np.zeros(()), np.array(np.inf))
    spread = float(((x_b - x_a) ** 2).sum())
    lean = float(np.clip((x_b * (x_b - x_a)).sum() / spread, 0.0, 1.0)) if spread > 0 else 0.5
    at = _there(both, np.array([scale, scale], dtype=object))
    return Distance(scale, float(at[1] - at[0]), float(np.sqrt(variance)), float(df), lean)


@dataclass(frozen=True, eq=False)
class Differences(Estimates):
    """Differences whose bounds are those of the distance on another scale.

    Attributes
    ----------
    a, b : ndarray, shape (n,)
        The two numbers.
    scales : ndarray of str, shape (n,)
        As in `Distance`.
    spread, spread_df, lean : ndarray, shape (n,)
        Standard error of the distance, its degrees of freedom, and the lean (see `Distance`).
    """

    a: FloatArray
    b: FloatArray
    scales: np.ndarray
    spread: FloatArray
    spread_df: FloatArray
    lean: FloatArray

    def bounds(self, confidence_level: float) -> tuple[FloatArray, FloatArray]:
        """Return the lower and upper bounds at a level (see `Estimates.bounds`).

        Where both numbers rest on the same moves, as those of a what-if do, their distance is far surer than how large
        they both are, on which the difference depends as well: then the plain interval is the longer one, and holds.
        """
        low, high = super().bounds(confidence_level)
        reach = t_quantile(self.spread_df, confidence_level) * self.spread
        least, most = self._moved(-reach), self._moved(reach)
        level_counts = (high - low > _LONGER * (most - least)) & (low * high > 0)
        mine: BoolArray = (self.scale == PLAIN) & ~self.few & ~level_counts
        return np.where(mine, least, low), np.where(mine, most, high)

    def _moved(self, by: FloatArray) -> FloatArray:
        """Return the difference when the distance is larger by so much, both numbers having gone their part."""
        b = _back(_there(self.b, self.scales) + self.lean * by, self.scales)
        a = _back(_there(self.a, self.scales) - (1.0 - self.lean) * by, self.scales)
        return b - a

    def take(self, index: np.ndarray) -> Estimates:
        """Return those at `index`, positions or a mask."""
        own = ("a", "b", "scales", "spread", "spread_df", "lean")
        return Differences(**vars(super().take(index)), **{name: getattr(self, name)[index] for name in own})

    def times(self, factor: float) -> Estimates:
        """Return the same numbers in another unit; of times only."""
        value, std_error = self.value * factor, self.std_error * factor
        return replace(self, value=value, std_error=std_error, a=self.a * factor, b=self.b * factor)


def _there(x: FloatArray, scales: np.ndarray) -> FloatArray:
    from scipy.special import logit

    x = np.asarray(x, dtype=np.float64)
    share, time = scales == LOGIT, scales == LOG
    return np.where(share, logit(np.where(share, x, 0.5)), np.where(time, np.log(np.where(time, x, 1.0)), x))


def _back(x: FloatArray, scales: np.ndarray) -> FloatArray:
    from scipy.special import expit

    share, time = scales == LOGIT, scales == LOG
    with np.errstate(over="ignore"):
        # a spread many times the number itself: nothing is known
        return np.where(share, expit(np.where(share, x, 0.0)), np.where(time, np.exp(np.where(time, x, 0.0)), x))
