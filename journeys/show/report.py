"""The whole summary of a fit, written into a folder in one call; what writes it is loaded when it is asked for."""

from __future__ import annotations

import os
from collections.abc import Collection
from pathlib import Path

from journeys.checks import Duration
from journeys.models.fit import JourneyFit
from journeys.questions.summarise import MIN_CUSTOMERS, summarise


def write_report(
    fit: JourneyFit,
    folder: str | os.PathLike[str],
    horizons: Collection[Duration] | None = None,
    *,
    confidence_level: float = 0.95,
    min_customers: int = MIN_CUSTOMERS,
) -> list[Path]:
    """Write the whole summary of a fit into a folder: a page to read and to send, and every number of it as a table.

    Parameters
    ----------
    fit : JourneyFit
        A fit to a tally.
    folder : str or path-like
        Made where it does not exist.
    horizons : collection of durations, optional
        Such as ["7d", "30d"]: times within which the share converted is told; default: as in `time_to_convert`.
    confidence_level : float
        Between 0 and 1.
    min_customers : int
        As in `summarise`: numbers that describe fewer people are left out; 0 leaves none out.

    Returns
    -------
    list of pathlib.Path
        What was written: `summary.html`, one page that needs nothing from elsewhere, to be opened in a browser or
        printed; `summary.md`, the same without pictures; `summary.parquet` and `summary.csv`, one row per number;
        `columns.csv`, what the columns hold; and, where journeys are grouped, `groups.csv`.

    Raises
    ------
    LogError
        If the fit is a known chain without a log, or a what-if.
    ValueError
        If a horizon is not a duration, the level is not between 0 and 1, or `min_customers` not from 0 to 200.
    OSError
        If the folder cannot be made or written in.

    Examples
    --------
    >>> import tempfile
    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> from journeys.models.model import JourneyModel
    >>> from journeys.tally.count import count_log
    >>> days = ["2025-01-01", "2025-01-03", "2025-01-02", "2025-01-02", "2025-01-05"]
    >>> log = pd.DataFrame({"member": [1, 1, 2, 3, 3], "event": ["visit", "joined", "visit", "visit", "left"],
    ...                     "happened": pd.to_datetime(days, utc=True)})
    >>> rules = JourneyRules("member", "happened", "event", converted="joined", churned="left", silence="30d",
    ...                      complete_history=True, as_of="2025-03-01")
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     written = write_report(JourneyModel().fit(count_log(log, rules)), folder)
    >>> [path.name for path in written]
    ['summary.parquet', 'summary.csv', 'summary.md', 'summary.html', 'columns.csv']
    """
    from journeys.show.summary import write_summary

    overview = summarise(fit, horizons, confidence_level=confidence_level, min_customers=min_customers)
    return write_summary(overview, folder)
