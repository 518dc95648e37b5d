"""p-values corrected for their number, against a general-purpose library."""

from __future__ import annotations

import numpy as np
import pytest
from statsmodels.stats.multitest import multipletests

from journeys.questions.corrected import corrected


@pytest.mark.parametrize("n", [1, 2, 7, 300])
def test_holm_as_in_statsmodels(n: int):
    rng = np.random.default_rng(n)
    for power in (1, 4, 9):
        p = rng.random(n) ** power
        p[rng.random(n) < 0.2] = p[0]
        np.testing.assert_allclose(corrected(p), multipletests(p, method="holm")[1], rtol=1e-14)
        missing = np.append(p, np.nan)
        np.testing.assert_array_equal(corrected(missing), np.append(corrected(p), np.nan))


def test_without_any_and_by_another_method():
    assert np.isnan(corrected(np.array([np.nan, np.nan]))).all()
    p = np.array([0.01, 0.02, 0.5])
    np.testing.assert_array_equal(corrected(p, "none"), p)
    np.testing.assert_allclose(corrected(p, "fdr_bh"), [0.03, 0.03, 0.5])
