"""What the log says by itself of the share converted by time, without the chain."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from journeys.kernels.records import FIRST_OUTCOME
from journeys.kernels.sojourn import fit_stays
from journeys.models.stays import journey_stays, outcome_column
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

    stays, _ = journey_stays(tally)
    found = fit_stays(stays, 0.0 if tally.whole_days else 0.5)
    winning = np.isin(stays.target, outcome_column(FIRST_OUTCOME + np.arange(len(tally.rules.converted))))
    share = np.bincount(stays.bin[winning], found.q[winning], stays.n_bins).cumsum()
    followed = found.at_risk[0] > 0
    return pd.DataFrame(
        {"time": stays.upper[followed], "estimate": share[followed], "n_at_risk": found.at_risk[0][followed]}
    )
