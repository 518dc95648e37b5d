from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from club_log import club_fit
from scipy import stats
from simulated import log_end, simulate
from small_chains import ids_of_distinct_buckets, log_of_paths

import journeys as jn
from journeys.intake import identity
from journeys.kernels import resampling
from journeys.kernels.absorption import passage
from journeys.kernels.draw_intervals import acceleration, drawn_interval, transformed_error
from journeys.kernels.many_passages import Draws, dense_passages, looped_passages
from journeys.kernels.resampling import Refitter, bucket_weights
from journeys.kernels.return_walks import Walk, passage_walk, return_walk
from journeys.kernels.sojourn import fit_stays
from journeys.kernels.stays import FittedStays

RULES = jn.JourneyRules("customer", "time", "event", converted=["joined"], silence="30d",
                        log_start="2024-01-01", as_of=log_end(4))  # fmt: skip
KINDS = {
    "keep": {},
    "merge": {"repeats": "merge", "states": {"basket": "open evening"}},
    "no silence": {"silence": None, "complete_history": True},
}


@cache
def log() -> pd.DataFrame:
    return simulate(900, 4, np.random.default_rng(5))


def by_day(frame: pd.DataFrame) -> pd.DataFrame:
    return frame.assign(time=frame.time.dt.date)


@cache
def fitted(kind: str) -> jn.JourneyFit:
    if kind == "club":
        return club_fit()
    if kind == "dates":
        return jn.JourneyModel().fit(jn.tally(by_day(log()), replaced(as_of="2024-04-30")))
    if kind == "open ignored":
        return jn.JourneyModel(open_moves="ignored").fit(jn.tally(log(), RULES))
    return jn.JourneyModel().fit(jn.tally(log(), replaced(**KINDS[kind])))


def replaced(**changes: object) -> jn.JourneyRules:
    """Return the rules with other choices."""
    given = {"converted": ["joined"], "silence": "30d", "log_start": "2024-01-01", "as_of": log_end(4)} | changes
    return jn.JourneyRules("customer", "time", "event", **given)  # type: ignore[arg-type]


def refitter(fit: jn.JourneyFit, *, steps: bool = False) -> Refitter:
    assert fit.fitted_stays is not None
    return Refitter(fit.fitted_stays, fit.move_state, fit.move_target, fit.nodes.n_nodes, steps=steps)


def chain_places(fit: jn.JourneyFit, made: Refitter) -> np.ndarray:
    """Return where each move of the fit is among those of the refitter."""
    n = fit.nodes.n_nodes
    return np.searchsorted(made.state * n + made.target, fit.move_state * n + fit.move_target)


ALL = ["club", "keep", "dates", "merge", "open ignored", "no silence"]


@pytest.mark.filterwarnings("ignore::journeys.errors.JourneysWarning")
@pytest.mark.parametrize("kind", ALL)
def test_every_bucket_once_is_the_fit_itself(kind: str) -> None:
    fit = fitted(kind)
    made = refitter(fit)
    found = made.refit(np.ones((2, made.n_buckets)))
    place = chain_places(fit, made)
    for name in ("probability", "mean", "second"):
        values = getattr(found, name)
        assert values[place, 0] == pytest.approx(getattr(fit, name), rel=1e-13, abs=1e-15)
        assert (values[:, 0] == values[:, 1]).all()
        assert np.delete(values[:, 0], place).tolist() == [0.0] * (len(made.state) - len(place))


def slow_refit(kept: FittedStays, weights: np.ndarray) -> dict[tuple[int, int], tuple[float, float, float]]:
    """Estimate the moves of one resample from stays counted by weight, and where no silence ends them leave
    open stays out of states in which the longest stay is open.
    """
    stays, split = kept.stays, kept.by_bucket
    n = np.zeros(len(stays.n))
    total = np.zeros(len(stays.n))
    for bucket, cell, count, dwell in zip(split.bucket, split.cell, split.n, split.total, strict=True):
        n[cell] += weights[bucket] * count
        total[cell] += weights[bucket] * dwell
    survivors = np.zeros(stays.n_states)
    for bucket, state, count in zip(split.survivor_bucket, split.survivor_state, split.survivor_n, strict=True):
        survivors[state] += weights[bucket] * count
    there = n > 0
    mine = replace(
        stays, state=stays.state[there], target=stays.target[there], bin=stays.bin[there], n=n[there],
        total=total[there], open_state=split.open_state, open_bin=split.open_bin,
        open_n=split.open_n * weights[split.open_bucket], survivor_n=survivors,
    )  # fmt: skip
    found = fit_stays(mine, kept.found.open_weight)
    if stays.survivor_target is None:
        some = mine.open_n > 0
        unended = (found.survival_end > 1e-12) & np.isin(np.arange(stays.n_states), mine.open_state[some])
        closed = some & ~unended[mine.open_state]
        mine = replace(mine, open_state=mine.open_state[closed], open_bin=mine.open_bin[closed],
                       open_n=mine.open_n[closed])  # fmt: skip
        found = fit_stays(mine, kept.found.open_weight)
    moves = zip(found.move_state.tolist(), found.move_target.tolist(), strict=True)
    values = zip(found.probability, found.mean, found.second, strict=True)
    return dict(zip(moves, values, strict=True))


@pytest.mark.filterwarnings("ignore::journeys.errors.JourneysWarning")
@pytest.mark.parametrize("kind", ["keep", "dates", "merge", "open ignored", "no silence"])
def test_a_slow_loop_over_resamples_gives_the_same(kind: str) -> None:
    fit = fitted(kind)
    made, kept = refitter(fit), fit.fitted_stays
    assert kept is not None
    rng = np.random.default_rng(11)
    weights = bucket_weights(made.n_buckets, 6, rng)
    # few buckets: states go missing, and last stays that ended do
    weights[3:] *= rng.random((3, made.n_buckets)) < 0.03
    found = made.refit(weights)
    mask = fit.target_mask("joined")
    (drawn,) = made.draws(weights, [passage_walk(fit.nodes.n_rows, made.state, made.target, mask)])
    for b in range(len(weights)):
        slow = slow_refit(kept, weights[b])
        columns = np.array([slow.get(move, (0.0, 0.0, 0.0)) for move in zip(made.state, made.target, strict=True)])
        assert set(slow) <= set(zip(made.state.tolist(), made.target.tolist(), strict=True))
        assert found.probability[:, b] == pytest.approx(columns[:, 0], rel=1e-12, abs=1e-15)
        assert found.mean[:, b] == pytest.approx(columns[:, 1], rel=1e-12, abs=1e-15)
        assert found.second[:, b] == pytest.approx(columns[:, 2], rel=1e-12, abs=1e-15)
        walk = passage(fit.nodes.n_rows, fit.nodes.n_nodes, made.state, made.target, *columns.T, mask)
        seen = np.bincount(made.state, columns[:, 0], fit.nodes.n_rows) > 0
        assert np.isnan(drawn.probability[b]).tolist() == (~seen).tolist()
        for name in ("probability", "mean_given", "sd_given"):
            assert getattr(drawn, name)[b, seen] == pytest.approx(getattr(walk, name)[seen], nan_ok=True, rel=1e-8,
                                                                  abs=1e-9)  # fmt: skip
    assert kind != "no silence" or any(text == "completed moves only" for text in fit.row_flags.values())


def test_a_log_whose_customers_were_drawn_again_gives_the_same() -> None:
    """The whole way anew: customers of drawn buckets copied under new ids, counted, fitted, asked."""
    fit, frame = fitted("keep"), log()
    made = refitter(fit)
    weights = bucket_weights(made.n_buckets, 2, np.random.default_rng(2))
    walk = passage_walk(fit.nodes.n_rows, made.state, made.target, fit.target_mask(None))
    (steps,), (days,) = (refitter(fit, steps=kind).draws(weights, [walk]) for kind in (True, False))
    ids = np.sort(frame.customer.unique())
    keys, _ = identity.customer_keys(pa.array(ids))
    buckets = identity.bucket_of(keys)
    live = np.unique(buckets)
    bucket = pd.Series(np.searchsorted(live, buckets), index=ids)
    for b in range(2):
        times = weights[b].astype(int)[bucket[frame.customer].to_numpy()]
        copied = frame.loc[frame.index.repeat(times)]
        copy_number = copied.groupby([copied.index]).cumcount().to_numpy()
        again = copied.assign(customer=copied.customer * 1_000 + copy_number).sort_values("time", kind="stable")
        other = jn.JourneyModel().fit(jn.tally(again, RULES))
        for clock, drawn in (("steps", steps), ("time", days)):
            told = jn.first_passage(other, clock=clock, method="linearised").to_frame()
            told = told.set_index(["start_state", "measure"]).estimate.unstack()
            told = told.loc[list(fit.nodes.labels[: fit.nodes.n_rows])]
            assert drawn.probability[b] == pytest.approx(told.probability.to_numpy(), rel=1e-10)
            assert drawn.mean_given[b] == pytest.approx(told["mean"].to_numpy(), rel=1e-10)
            assert drawn.sd_given[b] == pytest.approx(told["sd"].to_numpy(), rel=1e-9)


def test_weights_are_multinomial() -> None:
    weights = bucket_weights(50, 4_000, np.random.default_rng(3))
    assert (weights.sum(axis=1) == 50).all()
    assert (weights == np.round(weights)).all()
    # Each weight is binomial(50, 1/50): mean 1, variance .98; 200,000 of them, hardly dependent.
    assert weights.mean() == 1.0
    assert weights.var() == pytest.approx(0.98, abs=5 * np.sqrt(3 / 2e5))
    assert (bucket_weights(50, 9, np.random.default_rng(4)) == bucket_weights(50, 9, np.random.default_rng(4))).all()


def test_batches_change_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    fit = fitted("keep")
    made = refitter(fit)
    weights = bucket_weights(made.n_buckets, 7, np.random.default_rng(1))
    masks = [fit.target_mask(name) for name in ("joined", "basket")]
    walks = [passage_walk(fit.nodes.n_rows, made.state, made.target, mask) for mask in masks]
    whole = made.draws(weights, walks)
    for name, value in (("_AT_ONCE", 2), ("_WORKERS", 3)):
        monkeypatch.setattr(resampling, name, value)
    for one, other in zip(whole, made.draws(weights, walks), strict=True):
        for name in ("probability", "mean_given", "sd_given", "certain"):
            np.testing.assert_allclose(getattr(one, name), getattr(other, name), rtol=1e-12)


# --- passages through many chains at once -----------------------------------------------------------------


def many_chains(rng: np.random.Generator, m: int, n_nodes: int, n: int) -> tuple[Walk, tuple[np.ndarray, ...]]:
    """Return n chains in which many moves are missing, some rows lose walks."""
    state, target = np.nonzero(np.ones((m, n_nodes)))
    p = rng.random((len(state), n)) * (rng.random((len(state), n)) < 0.3)
    p[(state == m - 1)[:, None] & (rng.random(n) < 0.3)] = 0.0
    rows = np.zeros((m, n))
    np.add.at(rows, state, p)
    loss = np.where(rng.random((m, n)) < 0.2, 1.25, 1.0)
    p = p / np.where(rows > 0, rows * loss, 1.0)[state]
    tau = rng.gamma(2.0, 3.0, p.shape)
    values = (p, p * tau, p * tau**2 * (1 + rng.random(p.shape)))
    is_target = np.isin(np.arange(n_nodes), (1, n_nodes - 1))
    return passage_walk(m, state, target, is_target), values


@pytest.mark.parametrize("m", [5, 40])
def test_many_at_once_are_many_one_by_one(m: int) -> None:
    walk, values = many_chains(np.random.default_rng(m), m, m + 3, 60)
    at_once, one_by_one = dense_passages(walk, *values), looped_passages(walk, *values)
    assert np.isnan(at_once.mean_given).any() or m > 5
    assert (at_once.certain == one_by_one.certain).all()
    assert at_once.certain.any()
    assert not at_once.certain.all()
    for name in ("probability", "mean_given", "sd_given"):
        np.testing.assert_allclose(getattr(at_once, name), getattr(one_by_one, name), rtol=1e-8, atol=1e-9)


def test_large_chains_are_solved_one_by_one(monkeypatch: pytest.MonkeyPatch) -> None:
    fit = fitted("keep")
    made = refitter(fit)
    weights = bucket_weights(made.n_buckets, 5, np.random.default_rng(6))
    walk = passage_walk(fit.nodes.n_rows, made.state, made.target, fit.target_mask(None))
    (dense,) = made.draws(weights, [walk])
    monkeypatch.setattr(resampling, "_DENSE", 3)
    monkeypatch.setattr(resampling, "dense_passages", None)
    (looped,) = made.draws(weights, [walk])
    np.testing.assert_allclose(dense.mean_given, looped.mean_given, rtol=1e-11)


def test_what_a_resample_lacks() -> None:
    # 0 -> 1 or 3; 1 -> 2 or 3; node 2 is the target. Resamples: all there; no way from 1; no stay in 1; none in 0.
    state, target = np.array([0, 0, 1, 1]), np.array([1, 3, 2, 3])
    p = np.array([[0.5, 0.5, 0.5, 0.0], [0.5, 0.5, 0.5, 0.0], [0.5, 0.0, 0.0, 1.0], [0.5, 1.0, 0.0, 0.0]])
    walk = passage_walk(2, state, target, np.arange(4) == 2)
    found = dense_passages(walk, p, p, p)
    np.testing.assert_array_equal(found.probability, [[0.25, 0.5], [0.0, 0.0], [0.0, np.nan], [np.nan, 1.0]])
    np.testing.assert_array_equal(found.mean_given, [[2.0, 1.0], [np.nan, np.nan], [np.nan, np.nan], [np.nan, 1.0]])
    assert found.certain.tolist() == [[False, False], [False, False], [False, False], [False, True]]


def test_return_walk_closes_the_way_it_came() -> None:
    """Gambler's ruin on 0..4, p = 1/2 (Feller, vol. 1, XIV): back to 2 before an end with 1/2, in two steps."""
    state, target = np.array([0, 0, 1, 1, 2, 2]), np.array([3, 1, 0, 2, 1, 4])  # capitals 1, 2, 3; ends 0 and 4
    p = np.full((6, 1), 0.5)
    back = dense_passages(return_walk(3, 5, state, target, 1), p, p, p)
    assert [back.probability[0, 0], back.mean_given[0, 0], back.sd_given[0, 0]] == pytest.approx([0.5, 2.0, 0.0])
    # An end leads to state 0, capital 1: cycles of 1 -> 0 are now a step each.
    again = dense_passages(return_walk(3, 5, state, target, 1, restart=True), p, p, p)
    assert again.probability[0, 0] == 1.0
    # By hand: x1 = 1 + x1 / 2 = 2, x3 = 1 + x1 / 2 = 2, so 1 + (x1 + x3) / 2 = 3.
    assert again.mean_given[0, 0] == pytest.approx(3.0)
    stuck = dense_passages(return_walk(1, 1, np.array([0]), np.array([0]), 0, never_left=True), p[:1], p[:1], p[:1])
    assert stuck.probability[0, 0] == 0.0


def test_all_may_lapse_in_a_resample_though_nobody_did() -> None:
    """Two leave `look` after a day, the third has been there for 23 hours: without the two, that one lapses."""
    paths = [("visit", "look", "joined"), ("visit", "look", "joined"), ("visit", "look")]
    frame = log_of_paths(paths, ids_of_distinct_buckets(3), [(1, 2, 3), (1, 2, 3), (98, 99)])
    rules = replaced(log_start="2025-01-01", as_of="2025-04-10T23:00:00Z", complete_history=True)
    fit = jn.JourneyModel().fit(jn.tally(frame, rules))
    made, look, lapsed = refitter(fit), fit.nodes.labels.index("look"), fit.nodes.labels.index("lapsed")
    place = np.flatnonzero((made.state == look) & (made.target == lapsed))
    assert lapsed not in fit.move_target
    weights = np.array([[1.0, 1.0, 1.0], *np.eye(3)])
    assert np.sort(made.refit(weights).probability[place[0]]).tolist() == [0.0, 0.0, 0.0, 1.0]
    walk = passage_walk(fit.nodes.n_rows, made.state, made.target, fit.target_mask("lapsed"))
    (drawn,) = made.draws(weights, [walk])
    assert np.sort(drawn.probability[:, 0]).tolist() == [0.0, 0.0, 0.0, 1.0]


# --- intervals from draws ---------------------------------------------------------------------------------


def test_error_is_the_spread_on_the_scale() -> None:
    rng = np.random.default_rng(8)
    odds = rng.normal(-1.0, 0.3, (5_000, 1))
    share = 1 / (1 + np.exp(-odds))
    error, lost = transformed_error(share, np.array([0.25]), logit=True)
    assert error[0] == pytest.approx(odds.std(ddof=1) * 0.25 * 0.75, rel=1e-12)
    assert lost.tolist() == [0]
    times = np.exp(odds)
    times[:7, 0] = (np.nan, 0.0, np.inf, np.nan, 0.0, np.inf, np.nan)
    error, lost = transformed_error(times, np.array([2.0]), logit=False)
    assert error[0] == pytest.approx(2.0 * odds[7:].std(ddof=1), rel=1e-12)
    assert lost.tolist() == [7]


@pytest.mark.parametrize("draws", [np.full((9, 1), np.nan), np.r_[0.4, np.full(8, np.nan)][:, None]])
def test_error_needs_two_draws(draws: np.ndarray) -> None:
    error, lost = transformed_error(draws, np.array([0.4]), logit=True)
    assert np.isnan(error[0])
    assert lost[0] >= 8


@pytest.mark.parametrize("level", [0.5, 0.9, 0.95, 0.99])
def test_percentiles(level: float) -> None:
    """numpy 2.4, numpy.quantile(method="weibull"): the draw of rank p (n + 1)."""
    draws = np.random.default_rng(1).gamma(2.0, size=(199, 3))
    draws[:, 2] = np.where(np.arange(199) < 40, np.nan, draws[:, 2])
    low, high = drawn_interval(draws, draws[0], level)
    for i in range(3):
        some = draws[~np.isnan(draws[:, i]), i]
        ends = np.quantile(some, [(1 - level) / 2, (1 + level) / 2], method="weibull")
        assert [low[i], high[i]] == pytest.approx(ends.tolist(), rel=1e-12)


@pytest.mark.parametrize("level", [0.9, 0.95])
def test_bca(level: float) -> None:
    """scipy 1.17, scipy.stats.bootstrap(method="BCa") on the mean of a skew sample; it ranks draws by p (n - 1)."""
    sample = np.random.default_rng(7).gamma(3.0, size=60)
    theirs = stats.bootstrap((sample,), np.mean, n_resamples=9_999, method="BCa", confidence_level=level,
                             rng=np.random.default_rng(1))  # fmt: skip
    draws = theirs.bootstrap_distribution[:, None]
    speed = acceleration((sample - sample.mean())[:, None])
    low, high = drawn_interval(draws, np.array([sample.mean()]), level, speed)
    assert [low[0], high[0]] == pytest.approx(list(theirs.confidence_interval), rel=2e-3)
    plain = drawn_interval(draws, np.array([sample.mean()]), level)
    assert low[0] > plain[0][0]
    assert high[0] > plain[1][0]


def test_bca_without_skew_is_percentile() -> None:
    draws = np.linspace(-3.0, 3.0, 1999)[:, None]
    plain, corrected = (drawn_interval(draws, np.zeros(1), 0.95, speed) for speed in (None, np.zeros(1)))
    assert [end[0] for end in corrected] == pytest.approx([end[0] for end in plain], rel=1e-9)


def test_bca_has_nothing_to_say_where_all_draws_lie_on_one_side() -> None:
    low, high = drawn_interval(np.ones((50, 2)) * [1.0, np.nan], np.array([2.0, 1.0]), 0.95, np.zeros(2))
    assert np.isnan([low, high]).all()


def test_acceleration_of_small_influence() -> None:
    part = np.array([[3.0], [-1.0], [-1.0], [-1.0]])
    assert acceleration(part * 1e-150) == pytest.approx(acceleration(part))
    assert acceleration(np.zeros((4, 1))).tolist() == [0.0]


def test_draws_hold_resamples_first() -> None:
    walk, values = many_chains(np.random.default_rng(0), 4, 6, 9)
    found = dense_passages(walk, *values)
    assert isinstance(found, Draws)
    assert found.probability.shape == found.certain.shape == found.sd_given.shape == (9, 4)
