from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from journeys.kernels.intervals import (
    clopper_pearson,
    log_interval,
    logit_interval,
    ratio_variance,
    variance_from_buckets,
)


@pytest.mark.parametrize("start", ["d01", "d02"])
def test_clopper_pearson(reference, start: str) -> None:
    """Newcombe, Statistics in Medicine 17 (1998) 857-872, and a grid; R 4.2.2 binom.test (d01, d02)."""
    case = reference("intervals", start)
    for row in case["expected"]["rows"]:
        low, high = clopper_pearson(row["x"], row["n"], row["conf"])
        assert [float(low), float(high)] == pytest.approx(row["clopper_pearson"], **case["tolerance"]), row


def test_clopper_pearson_bounds_hold_their_tails() -> None:
    x, n, alpha = np.array([1, 4, 9]), 12, 0.1
    low, high = clopper_pearson(x, n, 1 - alpha)
    np.testing.assert_allclose(stats.binom.sf(x - 1, n, low), alpha / 2)
    np.testing.assert_allclose(stats.binom.cdf(x, n, high), alpha / 2)
    one_low, one = clopper_pearson(x, n, 1 - alpha, side="lower")
    zero, one_high = clopper_pearson(x, n, 1 - alpha, side="upper")
    np.testing.assert_allclose(stats.binom.sf(x - 1, n, one_low), alpha)
    np.testing.assert_allclose(stats.binom.cdf(x, n, one_high), alpha)
    assert one.tolist() == [1.0] * 3
    assert zero.tolist() == [0.0] * 3


def test_clopper_pearson_at_the_ends_and_between_whole_numbers() -> None:
    low, high = clopper_pearson([0, 7, 0, np.nan, 9], [7, 7, 0, 5, 7])
    np.testing.assert_allclose(low, [0, 0.025 ** (1 / 7), 0, np.nan, np.nan])
    np.testing.assert_allclose(high, [1 - 0.025 ** (1 / 7), 1, 1, np.nan, np.nan])
    low, high = clopper_pearson([2.0, 2.5, 3.0], [9.0, 9.5, 10.0])
    assert (np.diff(low) > 0).all()
    assert (np.diff(high) > 0).all()
    with pytest.raises(ValueError, match="side is 'left'"):
        clopper_pearson(1, 2, side="left")  # type: ignore[arg-type]


@pytest.mark.parametrize("start", ["h01", "h02", "h04"])
def test_ratio_variance(reference, start: str) -> None:
    """Cochran, Sampling Techniques, 3rd ed. 1977; R survey 4.1-1 svyratio (h01, h02, h04)."""
    case = reference("ratio_variance", start)
    expected, close = case["expected"], {x: case["tolerance"][x] for x in ("rel", "abs")}
    ratio, plain, scaled = ratio_variance(case["input"]["y"], case["input"]["m"])
    assert ratio == pytest.approx(expected["ratio"], **close)
    assert plain == pytest.approx(expected["var_linearised"], **close)
    assert scaled == pytest.approx(expected["var_linearised_n_over_n_minus_1"], **close)
    assert scaled**0.5 == pytest.approx(expected["se_n_over_n_minus_1"], **close)


@pytest.mark.open_data
def test_clustered_transitions_as_ratios(reference, shared) -> None:
    """Life histories `holson` of R markovchain 0.9.1; R survey 4.1-1 svyratio (h03)."""
    case = reference("ratio_variance", "h03")
    path = pd.read_csv(shared / "reference" / case["input"]["data"]).to_numpy()[:, 1:]
    for i in range(3):
        visits = (path[:, :-1] == i + 1).sum(axis=1)
        for j in range(3):
            moves = ((path[:, :-1] == i + 1) & (path[:, 1:] == j + 1)).sum(axis=1)
            ratio, plain, scaled = ratio_variance(moves, visits)
            expected = case["expected"]
            assert ratio == pytest.approx(expected["ratio"][i][j], **case["tolerance"])
            assert plain**0.5 == pytest.approx(expected["se_linearised"][i][j], **case["tolerance"])
            assert scaled**0.5 == pytest.approx(expected["se_n_over_n_minus_1"][i][j], **case["tolerance"])


def test_ratio_variance_without_a_denominator() -> None:
    assert np.isnan(ratio_variance([0.0, 0.0], [0.0, 0.0])).all()
    assert np.isnan(ratio_variance([1.0], [2.0])[2])


def test_variance_from_buckets() -> None:
    rng = np.random.default_rng(5)
    influence = rng.standard_t(3, size=(40, 3)) * np.array([1.0, 1e-90, 1e60])
    variance, df = variance_from_buckets(influence)
    np.testing.assert_allclose(variance, 40 / 39 * (influence**2).sum(axis=0))
    one = influence[:, 0]
    m2, m4 = (one**2).mean(), (one**4).mean()
    assert 1 < df[0] < 39
    assert df[0] == pytest.approx(2 * 40 * m2**2 / (m4 - m2**2))
    assert variance_from_buckets(influence / influence.max(axis=0))[1] == pytest.approx(df)


def test_empty_buckets_count_only_where_told() -> None:
    some = np.random.default_rng(6).normal(size=30)
    padded = np.concatenate([some, np.zeros(170)])
    np.testing.assert_allclose(variance_from_buckets(padded, 30), variance_from_buckets(some))


def test_degrees_of_freedom_stay_within_their_bounds() -> None:
    lone = np.zeros((50, 3))
    lone[0, 0] = 1.0  # all in one bucket
    lone[:, 1] = np.tile([1.0, -1.0], 25)  # all buckets alike
    variance, df = variance_from_buckets(lone)
    assert df.tolist() == [pytest.approx(2 * 50 / 49), 49.0, 49.0]
    assert variance.tolist() == pytest.approx([50 / 49, 2500 / 49, 0.0])
    assert np.isnan(variance_from_buckets(np.ones(1))).all()


def test_logit_and_log_intervals() -> None:
    p, se, df = np.array([0.1, 0.6]), np.array([0.02, 0.1]), np.array([12.0, 199.0])
    low, high = logit_interval(p, se, df, 0.9)
    half = stats.t.ppf(0.95, df) * se / (p * (1 - p))
    np.testing.assert_allclose(np.log(high / (1 - high)) - np.log(p / (1 - p)), half)
    np.testing.assert_allclose(np.log(p / (1 - p)) - np.log(low / (1 - low)), half)
    low, high = log_interval(10 * p, se, df, 0.9)
    np.testing.assert_allclose(np.log(high / (10 * p)), stats.t.ppf(0.95, df) * se / (10 * p))
    np.testing.assert_allclose(low * high, (10 * p) ** 2)


def test_a_hopeless_spread_leaves_all_open() -> None:
    low, high = log_interval([1e-9, 20.0], [1.0, 1_000.0], 1.0)
    assert low == pytest.approx(0.0, abs=1e-200)
    assert (high > 1e200).all()


def test_no_interval_where_the_scale_has_no_place() -> None:
    assert np.isnan(logit_interval([0.0, 1.0, np.nan], 0.1, 9)).all()
    assert np.isnan(log_interval([0.0, -1.0, np.inf], 0.1, 9)).all()
