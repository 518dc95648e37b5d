"""Quantiles from every start: reference chains, the curve they come from, flags, bounds, and coverage."""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from typing import Any

import numpy as np
import pandas as pd
import pytest
import simulated
from club_log import club_fit
from scipy import stats
from small_chains import START, known_chain, log_of_paths

import journeys as jn
from journeys.kernels.arrays import FloatArray
from journeys.models.fit import JourneyFit
from journeys.models.memory import Nodes
from journeys.questions import quantiles
from journeys.questions.elapsed import NO_DISTRIBUTION
from journeys.questions.linear import TOO_FEW
from journeys.questions.outcomes import UNREACHABLE
from journeys.questions.passage_curve import passage_curve
from journeys.questions.quantiles import BY_CURVE, NOT_IN_REACH, TOO_LARGE, quantile_estimates, quantiles_of_moves
from journeys.questions.walks import Walk, timed, walk_to
from journeys.results import Estimates


def asked(fit: jn.JourneyFit, to: Any, clock: str, levels: tuple[float, ...] = (0.5, 0.9)) -> list[Any]:
    found = timed(fit, walk_to(fit, to))
    return quantile_estimates(fit, found, to, clock=clock, levels=levels)


QUANTILES = [f"b{x:02d}" for x in (1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 14, 15, 16)]


# tests/reference/absorbing.json states the source of each case.
@pytest.mark.parametrize("start", QUANTILES)
def test_reference_chains(start: str, reference: Callable[[str, str], dict[str, Any]]) -> None:
    """Every quantile of steps the reference gives for absorption anywhere."""
    case = reference("absorbing", start)
    fit, _, outcomes = known_chain(case)
    told = case["expected"]["quantile_steps"]
    row = fit.nodes.labels.index(case["expected"]["distribution_from"])
    found = asked(fit, outcomes, "steps", tuple(float(level) for level in told))
    assert [estimates.value[row] for estimates, _ in found] == list(told.values())
    assert len(told) >= 5


def test_time_of_known_chains() -> None:
    """From A three exponentials of rate .5, from B two: gamma quantiles (c02 of the reference families)."""
    frame = pd.DataFrame(np.eye(3, 4, 1), index=["A", "B", "C"], columns=["A", "B", "C", "win"])
    fit = jn.JourneyFit.from_matrix(frame, dwell=dict.fromkeys("ABC", stats.expon(scale=2.0)))
    for (estimates, flag), level in zip(asked(fit, "win", "time"), (0.5, 0.9), strict=True):
        exact = [stats.gamma(n, scale=2.0).ppf(level) for n in (3, 3, 2, 1)]
        np.testing.assert_allclose(estimates.value, exact, rtol=2e-4)
        assert estimates.std_error.tolist() == [0.0] * 4
        low, high = estimates.bounds(0.95)
        assert low.tolist() == high.tolist() == estimates.value.tolist()
        assert not flag.any()


def test_whole_numbers_given_as_distributions_stay_whole() -> None:
    frame = pd.DataFrame([[0.5, 0.5]], index=["A"], columns=["A", "win"])
    fit = jn.JourneyFit.from_matrix(frame, dwell={"A": stats.geom(0.2)})
    (estimates, _), = asked(fit, "win", "time", (0.5,))
    # a geometric sum of geometric days is geometric with .1
    assert estimates.value.tolist() == [stats.geom(0.1).ppf(0.5)] * 2


def test_flags() -> None:
    chain = pd.DataFrame(
        [[0.0, 0.5, 0.5, 0.0], [0.0, 0.0, 0.0, 1.0]], index=["a", "b"], columns=["a", "b", "won", "lost"]
    )
    for dwell, clock, why in ((None, "time", NO_DISTRIBUTION), ({"a": 1.0, "b": 1.0}, "time", NO_DISTRIBUTION),
                              ({"a": 1.0}, "steps", "")):  # fmt: skip
        (estimates, flag), = asked(jn.JourneyFit.from_matrix(chain, dwell), "won", clock, (0.5,))
        assert flag.tolist() == [why, why, UNREACHABLE]
        assert np.isnan(estimates.value[2])
        assert np.isnan(estimates.value[0]) == (why != "")
    (estimates, flag), = asked(jn.JourneyFit.from_matrix(chain), ["b", "won"], "steps", (0.5,))
    assert estimates.value.tolist() == [2.0, 1.0, 0.0]
    assert not flag.any()


def test_large_chains_are_told_so(monkeypatch: pytest.MonkeyPatch) -> None:
    fit = club_fit()
    plain = asked(fit, None, "time", (0.5,))[0]
    monkeypatch.setattr(quantiles, "TIME_WORK", 1.0)
    monkeypatch.setattr(quantiles, "STEP_WORK", 1.0)
    for clock in ("steps", "time"):
        estimates, flag = asked(fit, None, clock, (0.5,))[0]
        assert set(flag) == {BY_CURVE}
        assert np.isnan(np.concatenate(estimates.bounds(0.95))).all()
        assert np.isfinite(estimates.value).all()
        assert clock == "steps" or np.allclose(estimates.value, plain[0].value)
    monkeypatch.setattr(quantiles, "DENSE", 3)
    estimates, flag = asked(fit, None, "time", (0.5,))[0]
    assert np.isnan(estimates.value).all()
    assert set(flag) == {TOO_LARGE}


def test_too_few_events_have_no_interval() -> None:
    paths = [["a", "b", "won"], ["a", "lost"], ["b", "won"], ["a", "b", "lost"]]
    days = [[0, 1, 2.5], [3, 4], [5, 6], [7, 8, 9]]
    rules = jn.JourneyRules("customer", "time", "event", converted="won", churned="lost", silence="30d",
                            complete_history=True, as_of=str(START + pd.Timedelta(days=90)))  # fmt: skip
    fit = jn.JourneyModel().fit(jn.tally(log_of_paths(paths, range(4), days), rules))
    for clock in ("steps", "time"):
        estimates, flag = asked(fit, None, clock, (0.5,))[0]
        assert set(flag) == {TOO_FEW}
        assert np.isfinite(estimates.value).all()
        assert np.isnan(estimates.bounds(0.95)[0]).all()


@pytest.mark.parametrize("clock", ["steps", "time"])
def test_the_curve_meets_its_quantiles(clock: str) -> None:
    fit = club_fit()
    for level, (estimates, _) in zip((0.25, 0.8), asked(fit, None, clock, (0.25, 0.8)), strict=True):
        low, high = estimates.bounds(0.9)
        wider = estimates.bounds(0.99)
        for row, name in enumerate(fit.nodes.labels[: fit.nodes.n_rows]):
            curve = passage_curve(fit, start=name, clock=clock, given=True)
            here = curve.at([estimates.value[row] - (clock == "steps"), estimates.value[row]])
            assert here[-1] == pytest.approx(level, abs=2e-4) or here[0] < level <= here[1]
            told = curve.quantile(level, confidence_level=0.9).iloc[0]
            assert [told["estimate"], told["low"], told["high"]] == pytest.approx(
                [estimates.value[row], low[row], high[row]], rel=1e-3
            )
            assert wider[0][row] <= low[row] <= estimates.value[row] <= high[row] <= wider[1][row]


def test_units_and_parts_keep_their_bounds() -> None:
    """Whole numbers in another unit, some of them, and joined with others: bounds go along."""
    estimates = asked(club_fit(), None, "steps")[1][0]
    low, high = estimates.bounds(0.95)
    assert np.array_equal(low, np.round(low))
    halves = estimates.times(0.5).bounds(0.95)
    assert np.array_equal(halves[0], low / 2)
    assert np.array_equal(halves[1], high / 2)
    assert np.array_equal(estimates.take(np.array([3, 1])).bounds(0.95)[1], high[[3, 1]])
    other = asked(club_fit(), None, "time")[0][0]
    both = Estimates.joined([estimates, other]).bounds(0.95)[0]
    assert np.array_equal(both, np.concatenate([low, other.bounds(0.95)[0]]))


def test_a_split_state_gives_its_return_time() -> None:
    """c07 of the reference families: up and down in turn, exponential with rates .25 and 2."""
    frame = pd.DataFrame([[0.0, 1.0], [1.0, 0.0]], index=["up", "down"], columns=["up", "down"])
    fit = jn.JourneyFit.from_matrix(frame, dwell={"up": stats.expon(scale=4.0), "down": stats.expon(scale=0.5)})
    # nodes: 0 entry, 1 up (left), 2 down, 3 up (come back to)
    walk = Walk(4, 4, np.array([0, 1, 2]), np.array([1, 2, 3]), np.arange(3), np.arange(4) == 3)
    levels = {"0.5": 0.04398631721352558, "2": 0.3094386230268095, "10": 0.906188573295709}
    found = quantiles_of_moves(fit, walk, np.array([1]), clock="time", levels=list(levels.values()))
    for time, (estimates, _) in zip(levels, found, strict=True):
        assert estimates.value[0] == pytest.approx(float(time), rel=1e-3)


@cache
def _truth() -> tuple[FloatArray, FloatArray]:
    """Return median and q90 of days and steps given conversion, of a million simulated journeys."""
    rng = np.random.default_rng(20)
    n = 400_000
    kind, into = simulated.ONE_CLASS[0], np.minimum(simulated.ENTRY.cumsum(), 1.0)
    state = simulated.draw(np.broadcast_to(into, (n, 5)), rng)
    routes, mu = simulated.headings(kind).cumsum(axis=1), simulated.log_medians(kind)
    days, steps = np.zeros(n), np.ones(n)
    live, won = np.arange(n), []
    while len(live):
        here = state[live]
        heading = simulated.draw(routes[here], rng)
        to = np.minimum(heading, 5)
        stay = rng.lognormal(mu[here, to], simulated.SIGMA[here])
        going = (heading <= 5) & (stay <= simulated.SILENCE_DAYS)
        live, to, stay = live[going], to[going], stay[going]
        days[live] += stay
        steps[live] += 1
        state[live] = to
        won.append(live[to == 5])
        live = live[to < 5]
    mine = np.concatenate(won)
    return np.quantile(days[mine], [0.5, 0.9]), np.quantile(steps[mine], [0.5, 0.9], method="inverted_cdf")


def test_intervals_cover() -> None:
    """40 logs of 1,000 customers: the truth lies within the 95 % interval in all but a few.

    With 40 logs and 95 % fewer than 33 would come once in 4,000 (binomial); whole numbers cover more often.
    """
    days, steps = _truth()
    hits = np.zeros((2, 2))
    for seed in range(40):
        log = simulated.simulate(1_000, 4.0, np.random.default_rng([7, seed]))
        rules = jn.JourneyRules("customer", "time", "event", converted="joined", silence="30d",
                                complete_history=True, as_of=simulated.log_end(4.0))  # fmt: skip
        fit = jn.JourneyModel().fit(jn.tally(log, rules))
        for i, (clock, truth) in enumerate((("time", days), ("steps", steps))):
            for j, (estimates, _) in enumerate(asked(fit, None, clock)):
                low, high = estimates.bounds(0.95)
                hits[i, j] += low[0] <= truth[j] <= high[0]
    assert hits.min() >= 33


def test_a_long_line_is_walked(monkeypatch: pytest.MonkeyPatch) -> None:
    """A step on with chance 1/2: the wait for so many successes is negative binomial (Feller vol. 1, VI.8)."""
    monkeypatch.setattr("journeys.kernels.phase_type._BLOCK", 6_000)  # ten steps a block
    n = 600
    at = np.arange(n)
    frame = pd.DataFrame(np.zeros((n, n + 1)), index=[f"s{i}" for i in at], columns=[*(f"s{i}" for i in at), "won"])
    values = np.zeros((n, n + 1))
    values[at, at] = values[at, at + 1] = 0.5
    fit = JourneyFit.from_matrix(frame + values)
    for level, (estimates, _) in zip((0.45, 0.9), asked(fit, "won", "steps", (0.45, 0.9)), strict=True):
        ahead = n - at
        np.testing.assert_array_equal(estimates.value[1:], ahead + stats.nbinom.ppf(level, ahead, 0.5))


def test_a_large_chain_is_walked_as_long_as_it_takes_seconds() -> None:
    """20,000 states, each left for good once in ten thousand steps: half of them after 6,931 (a geometric law)."""
    n = 20_000
    at = np.arange(1, n + 1)
    state = np.concatenate([[0], at, at, at])
    target = np.concatenate([[1], np.maximum(at - 1, 1), np.minimum(at + 1, n), np.full(n, n + 1)])
    p = np.concatenate([[1.0], np.full(2 * n, 0.5 * (1 - 1e-4)), np.full(n, 1e-4)])
    order = np.lexsort((target, state))
    unknown = np.full(len(p), np.nan)
    nodes = Nodes(tuple(f"s{i}" for i in at), ("left",))
    fit = JourneyFit(nodes, (), state[order], target[order], unknown, p[order], unknown, unknown, {}, "known")
    result = jn.first_passage(fit, "left", method="linearised")
    frame = result.to_frame().set_index(["start_state", "measure"])
    assert frame.loc[("s7", "mean"), "estimate"] == pytest.approx(1e4, rel=1e-6)
    assert frame.loc[("s7", "median"), "flag"] == NOT_IN_REACH
    tenth = passage_curve(fit, "left", "s7", "steps").quantile(0.1)["estimate"][0]
    assert tenth == np.ceil(np.log(0.9) / np.log1p(-1e-4))
