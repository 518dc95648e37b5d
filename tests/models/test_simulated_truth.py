"""The fit against a stated truth: unbiased where plain counts are not, and from logs that begin mid-way.

The sizes aimed at are those of the study in tests/bench/study_censoring.py, which this runs in small.
"""

from __future__ import annotations

import pandas as pd
import pytest
from bench.study_censoring import CLOSED, FIRST, FIT, IGNORED, SURE, errors, left_edge, undecided

REPLICATIONS, CUSTOMERS = 60, 2_000


def by_way(found: pd.DataFrame) -> pd.DataFrame:
    return found.set_index(["way", "measure"])


@pytest.mark.parametrize(("silences", "closed_bias"), [(1.5, 0.18), (2.0, 0.10), (3.0, 0.05)])
def test_undecided_journeys(silences: float, closed_bias: float) -> None:
    """Counting closed journeys alone puts conversion +.18, +.10 and +.05 too high; the fit is right."""
    table = by_way(errors(undecided(CUSTOMERS, silences, REPLICATIONS, seed=1)))
    for measure in ("conversion", "days"):
        fit = table.loc[(FIT, measure)]
        assert abs(fit["bias"]) < 3 * fit["bias_se"]
    assert closed_bias / 2 < table.loc[(CLOSED, "conversion"), "bias"] < 1.5 * closed_bias
    assert table.loc[(CLOSED, "days"), "bias"] < -1.0, "the quick ones are seen first"
    ignored = table.loc[(IGNORED, "conversion")]
    assert ignored["bias"] > closed_bias / 2
    assert table.loc[(FIT, "conversion"), "rmse"] < ignored["rmse"] / 3
    assert table.loc[(FIT, "days"), "rmse"] < table.loc[(CLOSED, "days"), "rmse"]


def test_left_edge() -> None:
    """Of a shop long open, a log of two silences: the first event seen is often no entry (+.009)."""
    table = by_way(errors(left_edge(4_000, 2.0, REPLICATIONS, seed=2)))
    for measure in ("conversion", "days"):
        sure = table.loc[(SURE, measure)]
        assert abs(sure["bias"]) < 3 * sure["bias_se"]
    first = table.loc[(FIRST, "conversion")]
    assert 0.0045 < first["bias"] < 0.018
    assert first["bias"] > 3 * first["bias_se"]
    assert table.loc[(FIRST, "days"), "bias"] < -3 * table.loc[(FIRST, "days"), "bias_se"]
