"""Shares of journeys with the influence of each bucket, and rows of the table of stages."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from journeys.kernels.arrays import FloatArray
from journeys.kernels.intervals import variance_from_buckets
from journeys.questions.linear import probabilities
from journeys.results import KNOWN, LOGIT, Estimates, joined_flags

ENTRY, CONVERTED, UNDECIDED = "entry", "converted", "undecided"
REACHED, OF_STAGE_BEFORE, MEDIAN_DAYS, WENT = MEASURES = ("reached", "of_stage_before", "median_days", "went")
LOG_BASIS, MODEL_BASIS = BASES = ("log", "model")

NEVER_SEEN = "never seen"
ABOVE_ONE = "above 1 by chance, shown as 1"
_ROUNDING = 1e-9


@dataclass(frozen=True, eq=False)
class Share:
    """A share of journeys.

    Attributes
    ----------
    value : float
        NaN where it has no meaning.
    influence : ndarray, shape (n_buckets,), or None
        What each bucket of customers does to it; None where it is known.
    trials : float
        Journeys behind it: what a share of exactly 0 or 1 has its bound from.
    """

    value: float
    influence: FloatArray | None
    trials: float

    def times(self, other: Share) -> Share:
        """Return the product, behind which are the journeys of the first."""
        if self.influence is None or other.influence is None:
            return Share(self.value * other.value, None, self.trials)
        influence = self.influence * other.value + other.influence * self.value
        return Share(self.value * other.value, influence, self.trials)

    def over(self, other: Share, trials: float) -> Share:
        """Return the ratio; no number where the other is 0."""
        if not other.value > 0:
            return Share(np.nan, self.influence, trials)
        ratio = self.value / other.value
        if self.influence is None or other.influence is None:
            return Share(ratio, None, trials)
        return Share(ratio, (self.influence - ratio * other.influence) / other.value, trials)

    def estimate(self) -> Estimates:
        """Return it with what its interval needs."""
        value = np.clip(np.array([self.value]), 0.0, 1.0)
        if self.influence is None:
            blank = np.array([np.nan])
            known = np.array([KNOWN], dtype=object)
            return Estimates(value, np.zeros(1), np.full(1, np.inf), known, blank, np.zeros(1, bool))
        variance, df = variance_from_buckets(self.influence[:, None])
        # What is 0 or 1 but for rounding has its bound from the trials.
        close = np.minimum(value, 1.0 - value) < _ROUNDING
        value = np.where(close, np.rint(value), value)
        std_error = np.where(np.isnan(value), np.nan, np.where(close, 0.0, np.sqrt(variance)))
        found = probabilities(None, value, std_error, df, np.array([self.trials]), LOGIT)
        return replace(found, few=found.few & ~np.isnan(value))


@dataclass(frozen=True, eq=False)
class Row:
    """One row of the table: its keys, its number, and its flag."""

    stage: str
    measure: str
    outcome: str
    basis: str
    estimate: Estimates
    flag: str


def flags(*parts: tuple[bool, str]) -> str:
    """Return the texts that hold, joined by semicolons.

    Examples
    --------
    >>> flags((True, "too few"), (False, "never seen"), (True, "end not seen"))
    'too few; end not seen'
    """
    return str(joined_flags([(np.array([bool(holds)]), text) for holds, text in parts], 1)[0])
