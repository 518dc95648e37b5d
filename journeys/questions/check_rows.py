"""One row of a check of a fit."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import FloatArray
from journeys.kernels.intervals import t_test, variance_from_buckets

NOT_RUN = "not run: "
NOTE = "note: "
FINE = "nothing to note"
AGREES = "agrees"
DIFFERS = "differs: "


@dataclass(frozen=True)
class CheckRow:
    """What was compared, and what came of it.

    Attributes
    ----------
    check_name : str
        Of the check.
    about : str
        What in particular: a column, a state; else blank.
    compared : str
        Both sides in words.
    size, unit : float, str
        Of the disagreement.
    std_error, df : float
        Of the size; NaN where it has no interval.
    p_alone : float
        Chance of such a disagreement in a right model, for itself; NaN for what is no test.
    verdict : str
        For tests, how it differs if it does; else the whole verdict.
    advice : str
        What to do about it, told where something is the matter.
    """

    check_name: str
    about: str = ""
    compared: str = ""
    size: float = np.nan
    unit: str = ""
    std_error: float = np.nan
    df: float = np.nan
    p_alone: float = np.nan
    verdict: str = ""
    advice: str = ""


def not_run(check_name: str, why: str, advice: str = "", about: str = "") -> CheckRow:
    """Return the row of a check that could not be run."""
    return CheckRow(check_name, about, verdict=NOT_RUN + why, advice=advice)


def beyond_rounding(size: FloatArray, error: float) -> FloatArray:
    """Return differences drawn towards 0 by the error that one side is solved with."""
    return np.asarray(np.sign(size) * np.maximum(np.abs(size) - error, 0.0), np.float64)


def difference_row(
    check_name: str, size: float, influence: FloatArray, unit: str, words: tuple[str, str, str], error: float
) -> CheckRow:
    """Return the row of a test of a difference that is 0 in a right model; not run where its spread is not known.

    `words` are what was compared, how it differs if it does, and what to do about it; `error` is that of the solution,
    which is no difference.
    """
    variance, df = variance_from_buckets(influence)
    std_error = float(np.sqrt(variance))
    if not std_error > error:
        return not_run(check_name, "there is nothing in it that varies from customer to customer")
    compared, verdict, advice = words
    p = float(t_test(beyond_rounding(np.array(size), error), std_error, df))
    return CheckRow(check_name, "", compared, size, unit, std_error, float(df), p, verdict, advice)
