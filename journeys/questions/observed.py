"""What the log says by itself of the share converted by time, without the chain."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from journeys.kernels.bins import elapsed_edges
from journeys.kernels.records import FIRST_OUTCOME
from journeys.models.stays import journey_stays, outcome_column
from journeys.questions.within import ended_within
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    import pandas as pd


def converted_by_log(tally: Tally) -> pd.DataFrame:
    """Return the share of whole journeys with a sure entry that converted by each end of a bin.

    Parameters
    ----------
    tally : Tally
        The counts.

    Returns
    -------
    DataFrame
        time (days), estimate, n_at_risk: journeys followed into the bin, open ones right-censored, other
        outcomes competing.

    References
    ----------
    P. K. Andersen, O. Borgan, R. D. Gill, N. Keiding, Statistical Models Based on Counting Processes, Springer
    1993, section IV.4.
    """
    import pandas as pd

    edges = elapsed_edges(tally.rules.silence_us, tally.whole_days, tally.rules.horizons_us)
    converted = outcome_column(FIRST_OUTCOME + np.arange(len(tally.rules.converted)))
    curve = ended_within(*journey_stays(tally), converted, edges)
    at_risk = curve.found.at_risk[0]
    followed = at_risk > 0
    times = curve.stays.upper[followed]
    return pd.DataFrame({"time": times, "estimate": curve.share[followed], "n_at_risk": at_risk[followed]})
