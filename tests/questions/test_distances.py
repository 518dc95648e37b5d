"""Differences told apart on the logit and the log scale: intervals, tests, and numbers without a place there."""

from __future__ import annotations

import numpy as np
import pytest
from club_log import club_fit
from scipy import stats

import journeys as jn
from journeys.kernels.intervals import t_quantile, variance_from_buckets
from journeys.questions.distances import Differences, distance
from journeys.results import KNOWN, PLAIN


def pulls(variance: float, sign: np.ndarray) -> np.ndarray:
    """Return influences of 200 buckets whose variance is that."""
    return sign * np.sqrt(variance * 199 / 200 / 200)


ODD, FOUR = np.tile([1.0, -1.0], 100), np.tile([1.0, 1.0, -1.0, -1.0], 50)


def test_two_shares_as_the_logarithm_of_the_odds_ratio() -> None:
    """B. Woolf, Annals of Human Genetics 19 (1955) 251-253: variance 1/x + 1/(n - x) of each side, added up."""
    (x, n), (y, m) = (30, 200), (60, 300)
    a, b = x / n, y / m
    found = distance(a, b, pulls(a * (1 - a) / n, ODD), pulls(b * (1 - b) / m, FOUR), is_share=True)
    assert found.size == pytest.approx(np.log(y / (m - y) / (x / (n - x))))
    assert found.std_error**2 == pytest.approx(1 / x + 1 / (n - x) + 1 / y + 1 / (m - y))
    assert found.lean == pytest.approx((1 / y + 1 / (m - y)) / found.std_error**2)


def test_the_same_people_on_both_sides() -> None:
    pull = pulls(0.01, ODD)
    found = distance(2.0, 2.0, pull, pull, is_share=False)
    assert (found.scale, found.size, found.std_error, found.df, found.lean) == ("log", 0.0, 0.0, 199.0, 0.5)


@pytest.mark.parametrize(("a", "b", "is_share"), [(0.0, 0.2, True), (0.3, 1.0, True), (0.0, 3.0, False)])
def test_numbers_without_a_place_on_the_scale(a: float, b: float, is_share: bool) -> None:
    found = distance(a, b, pulls(0.04, ODD), pulls(0.04, FOUR), is_share=is_share)
    assert (found.scale, found.size) == (PLAIN, b - a)
    assert found.std_error**2 == pytest.approx(0.08)


def _between(scale: str, a: float, b: float, is_share: bool) -> Differences:
    found = distance(a, b, pulls(0.0016, ODD), pulls(0.0004, FOUR), is_share=is_share)
    columns = (np.array([x]) for x in (b - a, np.sqrt(0.002), 199.0))
    assert found.scale == scale
    return Differences(
        *columns, np.array([PLAIN], dtype=object), np.full(1, np.nan), np.zeros(1, bool), a=np.array([a]),
        b=np.array([b]), scales=np.array([scale], dtype=object), spread=np.array([found.std_error]),
        spread_df=np.array([found.df]), lean=np.array([found.lean]),
    )  # fmt: skip


@pytest.mark.parametrize(("scale", "a", "b"), [("logit", 0.5, 0.55), ("log", 4.0, 4.1)])
def test_in_the_middle_it_is_nearly_the_plain_interval(scale: str, a: float, b: float) -> None:
    made = _between(scale, a, b, scale == "logit")
    low, high = made.bounds(0.95)
    half = stats.t(199).ppf(0.975) * np.sqrt(0.002)
    np.testing.assert_allclose([low[0], high[0]], [b - a - half, b - a + half], atol=0.002)
    known = Differences(**{**vars(made), "scale": np.array([KNOWN], dtype=object)})
    assert [float(bound[0]) for bound in known.bounds(0.95)] == [b - a, b - a]
    for name, one in (("taken", made.take(np.array([0]))), ("times", made.times(1.0))):
        np.testing.assert_array_equal(one.bounds(0.9), made.bounds(0.9), err_msg=name)


def test_an_interval_ends_at_no_difference_where_its_level_is_the_p_value() -> None:
    tally = club_fit().tally
    assert tally is not None
    found = jn.compare(club_fit(), jn.JourneyModel(open_moves="ignored").fit(tally), moves=True, correction="none")
    frame = found.to_frame().set_index(["measure", "state", "next_state"])
    told = frame[frame["p_value"].between(1e-9, 0.999)]
    assert len(told) > 5
    for key, row in told.iterrows():
        at = found.confidence_interval(1 - row["p_value"]).set_index(["measure", "state", "next_state"]).loc[key]
        nearer = at["low"] if row["estimate"] > 0 else at["high"]
        assert nearer == pytest.approx(0.0, abs=1e-6)
        assert row["low"] < row["estimate"] < row["high"]


def test_of_two_numbers_that_rise_and_fall_together_the_level_counts() -> None:
    """A share and 1.06 times it: their logits are as far apart whatever the share is, the difference is not."""
    pull = 0.01 * np.random.default_rng(4).normal(size=200) / np.sqrt(200)
    pull -= pull.mean()
    a, b, pull_b = 0.15, 0.159, 1.06 * pull
    found = distance(a, b, pull, pull_b, is_share=True)
    variance, df = variance_from_buckets(pull_b - pull)
    one = [np.array([value]) for value in (b - a, float(np.sqrt(variance)), float(df))]
    own = [np.array([value]) for value in (a, b, found.scale, found.std_error, found.df, found.lean)]
    whole = Differences(*one, np.array([PLAIN], dtype=object), np.array([np.nan]), np.array([False]), *own)
    low, high = whole.bounds(0.95)
    reach = t_quantile(one[2], 0.95) * one[1]
    assert found.std_error * 0.15 * 0.85 < 0.5 * one[1][0]
    np.testing.assert_allclose([low, high], [one[0] - reach, one[0] + reach])
