from __future__ import annotations

import math
from functools import cache
from typing import Any

import numpy as np
import pandas as pd
import pytest
from club_log import club_fit, small_log
from scipy import stats
from simulated import log_end, simulate
from small_chains import ABSORBING, column, known_chain, one, ruin

import journeys as jn
from journeys.questions import bootstrap
from journeys.questions.first_passage import FirstPassageResult


def moments(result: Any, starts: list[str]) -> tuple[np.ndarray, ...]:
    """Return probability, mean and variance from each start."""
    found = [column(result, "estimate", "start_state", starts, measure=m) for m in ("probability", "mean", "sd")]
    return found[0], found[1], found[2] ** 2


def with_gaps(values: list[float | None]) -> np.ndarray:
    return np.array([np.nan if value is None else value for value in values])


@pytest.mark.parametrize("start", ABSORBING)
def test_steps_of_absorbing_chains(reference, start: str) -> None:
    """Kemeny and Snell 1960, Feller vol. 1, Grinstead and Snell 1997 and others; exact fractions and
    R markovchain 0.9.1; the source of each chain stands in tests/reference/absorbing.json (b01-b10, b14-b16).
    """
    case = reference("absorbing", start)
    expected, close = case["expected"], case["tolerance"]
    fit, states, ends = known_chain(case)
    over, mean, variance = moments(jn.first_passage(fit, ends), ["entry", *states])
    assert over.tolist() == [1.0] * len(over)
    # Entry's move into the first state is one step, and a sure one.
    assert mean == pytest.approx([expected["mean_steps"][0] + 1, *expected["mean_steps"]], **close)
    assert variance == pytest.approx([expected["variance_steps"][0], *expected["variance_steps"]], **close)
    for place, end in enumerate(ends):
        result = jn.first_passage(fit, end)
        share, mean, variance = moments(result, states)
        assert share == pytest.approx([row[place] for row in expected["absorption_probability"]], **close)
        means = with_gaps(expected["conditional_mean_steps"][end])
        assert mean == pytest.approx(means, nan_ok=True, **close)
        variances = with_gaps(expected["conditional_variance_steps"][end])
        assert variance == pytest.approx(variances, nan_ok=True, **close)
        entry = moments(result, ["entry"])
        assert entry[1] == pytest.approx(means[:1] + 1, **close)
        whole = column(result, "estimate", "start_state", states, measure="mean_unconditional")
        if len(ends) == 1:
            assert whole == pytest.approx(expected["mean_steps"], **close)
        else:
            assert np.isinf(whole[share < 1]).all()


@pytest.mark.parametrize("row", [0, 1, 2, 3, 5, 6, 7, 8, 9])
def test_duration_of_classical_ruin(reference, row: int) -> None:
    """Feller, vol. 1, 3rd ed. 1968, XIV.2, table 1 (recalled from memory); closed forms (b11).

    The row with 10,000 states is held against the kernel, in tests/kernels/test_absorption.py.
    """
    case = reference("absorbing", "b11")
    expected = case["expected"]["rows"][row]
    fit = jn.JourneyFit.from_matrix(ruin(expected["p"], expected["a"]))
    result = jn.first_passage(fit, ["0", str(expected["a"])])
    assert one(result, start_state=str(expected["z"]), measure="mean") == pytest.approx(
        expected["duration"], **case["tolerance"]
    )


def test_fair_ruin_among_a_thousand(reference) -> None:
    """Feller, vol. 1, 3rd ed. 1968, ch. XIV; F. Stern, Math. Magazine 48 (1975) 200-203; closed forms
    confirmed by 80-digit solves (b12).
    """
    case = reference("absorbing", "b12")
    rows, close = case["expected"]["rows"], case["tolerance"]
    fit = jn.JourneyFit.from_matrix(ruin(0.5, 1000))
    starts = [str(row["z"]) for row in rows]
    over, duration, variance = moments(jn.first_passage(fit, ["0", "1000"]), starts)
    assert over.tolist() == [1.0] * 4
    assert duration == pytest.approx([row["duration"] for row in rows], **close)
    assert variance == pytest.approx([row["variance"] for row in rows], **close)
    for end, share, given in (("0", "ruin", "duration_given_ruin"), ("1000", "win", "duration_given_win")):
        found = moments(jn.first_passage(fit, end), starts)
        assert found[0] == pytest.approx([row[share] for row in rows], **close)
        assert found[1] == pytest.approx([row[given] for row in rows], **close)


@pytest.mark.parametrize("row", range(4))
def test_success_runs(reference, row: int) -> None:
    """Feller, vol. 1, 3rd ed. 1968, XIII.7 (7.7); closed form and exact rational chain (b13)."""
    case = reference("absorbing", "b13")
    expected = case["expected"]["rows"][row]
    r = expected["r"]
    over, under = (int(part) for part in expected["p"].split("/"))
    p = over / under
    names = [f"{n} in a row" for n in range(r + 1)]
    chain = pd.DataFrame(0.0, index=names[:-1], columns=names)
    for n in range(r):
        chain.loc[names[n], names[0]] += 1 - p
        chain.loc[names[n], names[n + 1]] += p
    _, mean, variance = moments(jn.first_passage(jn.JourneyFit.from_matrix(chain)), names[:1])
    assert mean[0] == pytest.approx(expected["mean"], **case["tolerance"])
    assert variance[0] == pytest.approx(expected["variance"], **case["tolerance"])


def exponentials(given: dict[str, Any]) -> dict[str, Any]:
    return {state: stats.expon(scale=1 / law["rate"]) for state, law in given["sojourn"].items()}


@pytest.mark.parametrize("start", ["c02", "c03", "c05", "c06"])
def test_time_through_exponential_stays(reference, start: str) -> None:
    """Cox, Renewal Theory, 1962; Ross, Introduction to Probability Models; Feller vol. 2, 1971; Neuts 1981:
    closed forms; the source of each stands in tests/reference/semi_markov.json.
    """
    case = reference("semi_markov", start)
    given, expected, close = case["input"], case["expected"], case["tolerance"]
    names, ends = given["states"], given["absorbing"]
    states = [name for name in names if name not in ends]
    matrix = pd.DataFrame(np.array(given["P"], float), index=names, columns=names).loc[states]
    fit = jn.JourneyFit.from_matrix(matrix, dwell=exponentials(given), entry=given["start"])
    _, mean, variance = moments(jn.first_passage(fit, ends, "time"), ["entry"])
    assert mean[0] == pytest.approx(expected["mean"], **close)
    assert variance[0] == pytest.approx(expected["variance"], **close)
    if "mean_given" in expected:
        for end in ends:
            share, mean, _ = moments(jn.first_passage(fit, end, "time"), ["entry"])
            assert share[0] == pytest.approx(expected["absorption_probability"][end], **close)
            assert mean[0] == pytest.approx(expected["mean_given"][end], **close)
    if "mean_steps" in expected:
        _, mean, variance = moments(jn.first_passage(fit, ends), states)
        assert mean[0] == pytest.approx(expected["mean_steps"], **close)
        assert variance[0] == pytest.approx(expected["variance_steps"], **close)


def test_time_with_given_moments_of_the_stays(reference) -> None:
    """Pyke, Ann. Math. Statist. 32 (1961) 1243-1259; Cinlar 1975, ch. 10; exact fractions (c09)."""
    case = reference("semi_markov", "c09")
    given, expected, close = case["input"], case["expected"], case["tolerance"]
    names, ends = given["states"], given["absorbing"]
    states = [name for name in names if name not in ends]
    dwell = {}
    for state, mean, square in zip(states, given["mean_sojourn"], given["second_moment_sojourn"], strict=True):
        variance = square - mean**2
        dwell[state] = stats.gamma(mean**2 / variance, scale=variance / mean)
    matrix = pd.DataFrame(np.array(given["P"], float), index=names, columns=names).loc[states]
    fit = jn.JourneyFit.from_matrix(matrix, dwell=dwell)
    _, mean, variance = moments(jn.first_passage(fit, ends, "time"), states)
    assert mean == pytest.approx(expected["mean"], **close)
    assert variance == pytest.approx(expected["variance"], **close)
    for end in ends:
        _, mean, variance = moments(jn.first_passage(fit, end, "time"), states)
        assert mean == pytest.approx(expected["conditional_mean"][end], **close)
        assert variance == pytest.approx(expected["conditional_variance"][end], **close)


def test_time_to_a_state_of_a_chain_without_outcomes(reference) -> None:
    """Ross, Introduction to Probability Models, ch. 7 (section recalled from memory); Pyke 1961; exact
    fractions (c01). The diagonal there is the recurrence; here a start at the target is there at once.
    """
    case = reference("semi_markov", "c01")
    given, expected, close = case["input"], case["expected"], case["tolerance"]
    names = given["states"]
    dwell = {name: stats.expon(scale=mean) for name, mean in zip(names, given["mean_sojourn"], strict=True)}
    fit = jn.JourneyFit.from_matrix(pd.DataFrame(given["P"], index=names, columns=names), dwell=dwell)
    for place, name in enumerate(names):
        share, mean, variance = moments(jn.first_passage(fit, name, "time"), names)
        means = np.array(expected["mean_first_passage_time"])[:, place]
        variances = np.array(expected["variance_first_passage_time"])[:, place]
        means[place] = variances[place] = 0.0
        assert share.tolist() == [1.0, 1.0, 1.0]
        assert mean == pytest.approx(means, **close)
        assert variance == pytest.approx(variances, **close)


BASKET = pd.DataFrame(
    [[0.0, 0.5, 0.5, 0.0], [0.25, 0.0, 0.25, 0.5]], index=["price", "basket"],
    columns=["price", "basket", "left", "joined"],
)


@pytest.mark.parametrize(("unit", "in_days"), [("days", 1.0), ("weeks", 7.0), ("hours", 1 / 24), ("minutes", 1 / 1440)])
def test_units(unit: str, in_days: float) -> None:
    fit = jn.JourneyFit.from_matrix(BASKET, dwell={"price": stats.expon(scale=3.0), "basket": stats.uniform(0, 2)})
    days = moments(jn.first_passage(fit, "joined", "time"), ["entry", "price", "basket"])
    other = jn.first_passage(fit, "joined", "time", unit=unit)
    found = moments(other, ["entry", "price", "basket"])
    assert other.unit == unit
    assert found[0].tolist() == days[0].tolist()
    assert found[1] * in_days == pytest.approx(days[1], rel=1e-14)
    assert found[2] * in_days**2 == pytest.approx(days[2], rel=1e-14)


def test_dwell_of_a_move_goes_before_that_of_its_state() -> None:
    dwell = {"price": 4.0, "basket": 1.0, ("basket", "joined"): 9.0}
    fit = jn.JourneyFit.from_matrix(BASKET, dwell=dwell)
    # By hand: basket joins at once with 1/2, or goes round by price (1 + 4 days) with 1/4 * 1/2 each time.
    result = jn.first_passage(fit, "joined", "time")
    rounds = (1 / 8) / (1 - 1 / 8)
    assert one(result, start_state="basket", measure="mean") == pytest.approx(9.0 + 5.0 * rounds, rel=1e-12)
    assert one(result, start_state="price", measure="mean") == pytest.approx(13.0 + 5.0 * rounds, rel=1e-12)


def test_what_is_missing_is_said() -> None:
    no_dwell = jn.first_passage(jn.JourneyFit.from_matrix(BASKET), "joined", "time")
    assert one(no_dwell, start_state="basket", measure="probability") == pytest.approx(4 / 7)
    for measure in ("mean", "sd"):
        assert math.isnan(one(no_dwell, start_state="basket", measure=measure))
        assert one(no_dwell, "flag", start_state="basket", measure=measure) == "no dwell given"
    means = jn.JourneyFit.from_matrix(BASKET, dwell={"price": 4.0, "basket": 1.0})
    result = jn.first_passage(means, "joined", "time")
    assert one(result, start_state="basket", measure="mean") > 0
    assert math.isnan(one(result, start_state="basket", measure="sd"))
    assert one(result, "flag", start_state="basket", measure="sd") == "no spread given"


def test_some_never_and_unreachable() -> None:
    chain = pd.DataFrame(
        [[0.0, 0.5, 0.0, 0.5], [0.0, 0.0, 0.0, 1.0], [0.0, 0.5, 0.0, 0.5]], index=["price", "basket", "visit"],
        columns=["price", "basket", "visit", "left"],
    )
    result = jn.first_passage(jn.JourneyFit.from_matrix(chain), "basket")
    assert one(result, start_state="price", measure="mean_unconditional") == math.inf
    assert one(result, "flag", start_state="price", measure="mean_unconditional") == "infinite: some never do"
    assert [one(result, start_state="basket", measure=m) for m in ("probability", "mean", "sd", "mean_unconditional")] \
        == [1.0, 0.0, 0.0, 0.0]
    away = jn.first_passage(jn.JourneyFit.from_matrix(chain), "visit")
    assert one(away, start_state="price", measure="probability") == 0.0
    assert math.isnan(one(away, start_state="price", measure="mean"))
    assert one(away, "flag", start_state="price", measure="mean") == "cannot be reached"


def test_quantiles_of_steps_of_absorbing_chains(reference) -> None:
    """Quantile = smallest n with P(T <= n) >= q; exact rational arithmetic (b01-b10, b14-b16, the source of each
    chain stands in tests/reference/absorbing.json). Ties are left out there.
    """
    held = 0
    for start in ABSORBING:
        case = reference("absorbing", start)
        expected, (fit, _, ends) = case["expected"], known_chain(case)
        result = jn.first_passage(fit, ends)
        for measure, level in (("median", "0.5"), ("q90", "0.9")):
            value = expected["quantile_steps"].get(level)
            if value is not None:
                assert one(result, start_state=expected["distribution_from"], measure=measure) == value
                held += 1
    assert held > 15


@pytest.mark.parametrize("start", ["c02", "c03", "c05", "c06"])
def test_quantiles_of_time_through_exponential_stays(reference, start: str) -> None:
    """Erlang, hypoexponential, geometric sum, phase type: closed forms, root search to 1e-12 (c02-c06)."""
    case = reference("semi_markov", start)
    given, expected = case["input"], case["expected"]
    names, ends = given["states"], given["absorbing"]
    states = [name for name in names if name not in ends]
    matrix = pd.DataFrame(np.array(given["P"], float), index=names, columns=names).loc[states]
    fit = jn.JourneyFit.from_matrix(matrix, dwell=exponentials(given), entry=given["start"])
    result = jn.first_passage(fit, ends, "time")
    for measure, level in (("median", "0.5"), ("q90", "0.9")):
        # The curve is good to 1e-4 in probability, which moves these quantiles by less than a thousandth.
        assert one(result, start_state="entry", measure=measure) == pytest.approx(
            expected["quantiles"][level], rel=1e-3
        )


@pytest.mark.parametrize("n", [4, 12])
def test_coupon_collector(n: int) -> None:
    """Feller, vol. 1, 3rd ed. 1968, IX.3(d): mean n (1 + 1/2 + ... + 1/n), variance the sum of (1-p)/p^2."""
    names = [f"{k} kinds" for k in range(n + 1)]
    chain = pd.DataFrame(0.0, index=names[:-1], columns=names)
    for k in range(n):
        chain.loc[names[k], names[k]] = k / n
        chain.loc[names[k], names[k + 1]] = 1 - k / n
    _, mean, variance = moments(jn.first_passage(jn.JourneyFit.from_matrix(chain)), names[:1])
    p = 1 - np.arange(n) / n
    assert mean[0] == pytest.approx((1 / p).sum(), rel=1e-12)
    assert variance[0] == pytest.approx(((1 - p) / p**2).sum(), rel=1e-10)


@pytest.mark.parametrize("p", [0.1, 0.5, 0.9])
def test_geometric_sum_of_exponentials_is_exponential(p: float) -> None:
    """Feller, vol. 2, 2nd ed. 1971, II.4: each stay exponential of mean 2, the last with probability p."""
    chain = pd.DataFrame([[1 - p, p]], index=["basket"], columns=["basket", "joined"])
    fit = jn.JourneyFit.from_matrix(chain, dwell={"basket": stats.expon(scale=2.0)})
    result = jn.first_passage(fit, clock="time")
    law = stats.expon(scale=2.0 / p)
    for measure, value in (("mean", law.mean()), ("sd", law.std()), ("mean_unconditional", law.mean())):
        assert one(result, start_state="basket", measure=measure) == pytest.approx(value, rel=1e-10)
    for measure, level in (("median", 0.5), ("q90", 0.9)):
        assert one(result, start_state="basket", measure=measure) == pytest.approx(law.ppf(level), rel=1e-3)


# --- uncertainty ------------------------------------------------------------------------------------------


@cache
def simulated_fit(n: int, length: float = 4) -> jn.JourneyFit:
    rules = jn.JourneyRules("customer", "time", "event", converted=["joined"], silence="30d",
                            log_start="2024-01-01", as_of=log_end(length))  # fmt: skip
    return jn.JourneyModel().fit(jn.tally(simulate(n, length, np.random.default_rng(n)), rules))


def by_row(result: FirstPassageResult) -> pd.DataFrame:
    return result.to_frame().set_index(["start_state", "measure"])


@pytest.mark.parametrize("clock", ["steps", "time"])
@pytest.mark.parametrize("which", ["club", "simulated", "to a state"])
def test_standard_errors_of_bootstrap_and_linearised_are_close(which: str, clock: str) -> None:
    """Within a fifth of each other where the linearised one rests on 20 degrees of freedom."""
    fit = club_fit() if which == "club" else simulated_fit(2_000)
    to = "basket" if which == "to a state" else None
    drawn = by_row(jn.first_passage(fit, to, clock))
    linear = by_row(jn.first_passage(fit, to, clock, method="linearised"))
    assert (drawn.estimate.to_numpy() == linear.estimate.to_numpy())[np.isfinite(drawn.estimate)].all()
    resampled = ~drawn.index.get_level_values("measure").isin(["median", "q90"])
    plain = resampled & (linear.flag == "") & (linear.std_error > 0)
    assert plain.sum() > 12
    ratio = drawn.std_error[plain] / linear.std_error[plain]
    assert ratio.between(1 / 1.2, 1.2).all(), ratio
    assert (ratio != 1).all()
    rest = ~resampled
    pd.testing.assert_frame_equal(drawn[rest], linear[rest])


@pytest.mark.parametrize("clock", ["steps", "time"])
def test_all_methods_agree_on_a_large_log(clock: str) -> None:
    frames = {name: by_row(jn.first_passage(club_fit(), None, clock, method=name)) for name in bootstrap.METHODS}
    linear = frames["linearised"]
    plain = (linear.flag == "") & ~linear.index.get_level_values("measure").isin(["median", "q90"])
    half = (linear.high - linear.low)[plain] / 2
    for name in ("bootstrap", "percentile", "bca"):
        frame = frames[name]
        assert (frame.flag == linear.flag).all()
        for end in ("low", "high"):
            assert ((frame[end] - linear[end])[plain].abs() < 0.35 * half).all(), (name, end)
            assert (frame[end] != linear[end])[plain].all()


def test_intervals_cover_the_truth_of_a_simulated_log() -> None:
    """Mean steps to convert and conversion of tests/simulated.py; 40 logs, 95 % intervals: of 80, 68 or more cover
    but once in 1,000 times (binomial; common practice, no source).
    """
    covered = []
    for seed in range(40):
        rules = jn.JourneyRules("customer", "time", "event", converted=["joined"], silence="30d",
                                log_start="2024-01-01", as_of=log_end(3))  # fmt: skip
        log = simulate(400, 3, np.random.default_rng(1_000 + seed))
        frame = by_row(jn.first_passage(jn.JourneyModel().fit(jn.tally(log, rules)), n_resamples=199)).loc["entry"]
        for measure, truth in (("probability", 0.15465), ("mean", 3.7493)):
            covered.append(frame.low[measure] <= truth <= frame.high[measure])
    assert sum(covered) >= 68


def test_resamples_are_kept() -> None:
    fit = club_fit()
    result = jn.first_passage(fit, clock="time", unit="weeks", n_resamples=60)
    frame, draws = result.to_frame(), result.resamples
    assert draws is not None
    assert draws.shape == (60, len(frame))
    quantile = frame.measure.isin(["median", "q90"]).to_numpy()
    assert np.isnan(draws[:, quantile]).all()
    never = frame.measure.eq("mean_unconditional").to_numpy()
    assert np.isinf(draws[:, never]).all()
    rest = ~(quantile | never)
    assert np.isfinite(draws[:, rest]).all()
    error = np.log(draws[:, rest]).std(axis=0, ddof=1) * frame.estimate[rest]
    share = frame.measure.eq("probability").to_numpy()[rest]
    assert frame.std_error[rest][~share].to_numpy() == pytest.approx(error[~share].to_numpy(), rel=1e-9)
    assert result.method == "bootstrap"
    assert jn.first_passage(fit, method="linearised").resamples is None


def test_bootstrap_interval_by_hand() -> None:
    """Even on the logit scale, t with one degree of freedom less than buckets (200 here)."""
    result = jn.first_passage(club_fit(), n_resamples=99, rng=3)
    row = by_row(result).loc[("entry", "probability")]
    draws = result.resamples[:, 0]
    logit = np.log(row.estimate / (1 - row.estimate))
    error = np.log(draws / (1 - draws)).std(ddof=1)
    ends = logit + np.array([-1, 1]) * stats.t.ppf(0.975, 199) * error
    assert [row.low, row.high] == pytest.approx((1 / (1 + np.exp(-ends))).tolist(), rel=1e-9)


def test_percentiles_by_hand() -> None:
    result = jn.first_passage(club_fit(), method="percentile", rng=5)
    draws = result.resamples[:, 3]
    row = by_row(result).loc[("entry", "mean")]
    assert [row.low, row.high] == pytest.approx(np.sort(draws)[[49, 1949]].tolist())
    other = result.confidence_interval(0.9)
    assert [other.low[3], other.high[3]] == pytest.approx(np.sort(draws)[[99, 1899]].tolist())


@pytest.mark.parametrize("method", ["bootstrap", "percentile", "bca", "linearised"])
def test_another_level_draws_nothing_again(method: str, monkeypatch: pytest.MonkeyPatch) -> None:
    result = jn.first_passage(club_fit(), method=method, rng=1)
    fresh = jn.first_passage(club_fit(), method=method, rng=1, confidence_level=0.8).to_frame()
    monkeypatch.setattr("journeys.questions.bootstrap.Refitter", None)
    narrow = result.confidence_interval(0.8)
    pd.testing.assert_frame_equal(narrow, fresh[list(narrow)])
    wide = result.confidence_interval(0.99)
    both = narrow.low.notna()
    assert both.sum() > 20
    assert ((wide.low <= narrow.low) & (narrow.high <= wide.high))[both].all()


def test_chance_is_an_argument() -> None:
    fit = club_fit()
    default, again = (by_row(jn.first_passage(fit)) for _ in range(2))
    pd.testing.assert_frame_equal(default, again, check_exact=True)
    seven = by_row(jn.first_passage(fit, rng=7))
    pd.testing.assert_frame_equal(seven, by_row(jn.first_passage(fit, rng=np.random.default_rng(7))))
    assert (seven.std_error != default.std_error)[("entry", "probability")]
    # A refit to the same counts is the same fit; another tally starts elsewhere.
    other = jn.JourneyModel().fit(fit.tally)
    pd.testing.assert_frame_equal(by_row(jn.first_passage(other)), default, check_exact=True)
    one_generator = np.random.default_rng(1)
    first, second = (by_row(jn.first_passage(fit, rng=one_generator)) for _ in range(2))
    assert (first.std_error != second.std_error)[("entry", "probability")]


@pytest.mark.parametrize("method", ["bootstrap", "percentile", "bca", "linearised"])
def test_known_chains_are_known_whatever_the_method(method: str) -> None:
    result = jn.first_passage(jn.JourneyFit.from_matrix(BASKET), "joined", method=method)
    frame = result.to_frame()
    assert result.resamples is None
    finite = np.isfinite(frame.estimate)
    assert (frame.std_error[finite] == 0).all()
    assert (frame.low == frame.estimate)[finite].all()
    assert (frame.n_undefined == 0).all()


def test_target_is_there_at_once_whatever_the_method() -> None:
    for method in ("bootstrap", "bca", "linearised"):
        frame = by_row(jn.first_passage(club_fit(), "basket", method=method)).loc["basket"]
        assert frame.estimate.tolist() == [1.0, 0.0, 0.0, 0.0, 0.0, 0.0]
        assert (frame.low == frame.estimate).all()
        assert (frame.high == frame.estimate).all()
        assert (frame.flag == "").all()


def test_rare_targets_lose_resamples_and_say_so() -> None:
    """Two customers in two buckets of 40 convert: e^-2 of the resamples hold neither, and the times are unknown."""
    log = small_log(60)
    rare = log[(log.what != "joined") | log.who.isin([0, 30])]
    rules = jn.JourneyRules("who", "when", "what", converted=["joined"], churned=["declined"], silence="30d",
                            complete_history=True, as_of=log.when.max())  # fmt: skip
    fit = jn.JourneyModel().fit(jn.tally(rare, rules))
    result = jn.first_passage(fit, n_resamples=2_000)
    frame = by_row(result).loc["entry"]
    gone = np.exp(-2) * 2_000
    assert frame.n_undefined["mean"] == pytest.approx(gone, abs=5 * np.sqrt(gone))
    assert np.isnan([frame.low["mean"], frame.high["mean"], frame.std_error["mean"]]).all()
    assert frame.flag["mean"] == "too few; undefined in over 5 % of resamples"
    assert frame.low["probability"] == 0.0
    assert 0.03 < frame.high["probability"] < 0.3
    assert frame.n_undefined["probability"] == np.sum(result.resamples[:, 0] == 0)
    by_ends = by_row(jn.first_passage(fit, method="percentile")).loc["entry"]
    assert by_ends.n_undefined["probability"] == 0
    assert by_ends.low["probability"] == 0.0


@pytest.mark.filterwarnings("ignore::journeys.errors.JourneysWarning")
@pytest.mark.parametrize("method", ["bootstrap", "percentile", "bca"])
@pytest.mark.parametrize("n", [1, 2, 3, 9])
@pytest.mark.parametrize("clock", ["steps", "time"])
def test_hardly_any_customers(n: int, method: str, clock: str) -> None:
    rules = jn.JourneyRules("who", "when", "what", converted=["joined"], churned=["declined"], silence="30d",
                            complete_history=True, as_of="2025-07-20T08:00:00Z")  # fmt: skip
    log = small_log(n)
    fit = jn.JourneyModel().fit(jn.tally(log[log.who < n], rules))
    for to in ("joined", ["joined", "declined", "lapsed"], "look"):
        frame = jn.first_passage(fit, to, clock, method=method).to_frame()
        plain = frame[np.isfinite(frame.estimate) & (frame.flag == "")]
        assert ((plain.low <= plain.estimate) & (plain.estimate <= plain.high)).all()
        assert set(plain.start_state) <= ({to} if isinstance(to, str) else set()) or n > 5
        assert not np.isinf(frame.low).any()


def test_many_states_are_resampled_only_when_asked(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(bootstrap, "MOST_STATES", 5)
    with pytest.raises(ValueError, match=r'method="bootstrap" on 6 states .*; wanted method="linearised", or n_res'):
        jn.first_passage(simulated_fit(2_000))
    assert jn.first_passage(simulated_fit(2_000), n_resamples=30).resamples.shape[0] == 30
    assert len(jn.first_passage(simulated_fit(2_000), method="linearised").to_frame()) == 36
    assert len(jn.first_passage(jn.JourneyFit.from_matrix(ruin(0.5, 9)), "0").to_frame()) == 54


def test_fitted_chain_walked_by_chance() -> None:
    """A walk through the fitted chain of the club, 40,000 times: share, mean, spread and quantiles of its steps."""
    fit = club_fit()
    frame = by_row(jn.first_passage(fit, method="linearised")).estimate.loc["entry"]
    n, rng = fit.nodes.n_nodes, np.random.default_rng(12)
    matrix = np.eye(n)
    matrix[: fit.nodes.n_rows] = 0.0
    matrix[fit.move_state, fit.move_target] = fit.probability
    ways = matrix.cumsum(axis=1)
    ways[:, -1] = 1.0
    at, steps = np.zeros(40_000, int), np.zeros(40_000, int)
    while (moving := np.flatnonzero(at < fit.nodes.n_rows)).size:
        at[moving] = (rng.random(len(moving))[:, None] >= ways[at[moving]]).sum(axis=1)
        steps[moving] += 1
    took = steps[at == fit.nodes.labels.index("joined")]
    share = len(took) / len(at)
    assert frame["probability"] == pytest.approx(share, abs=4 * np.sqrt(share / len(at)))
    assert frame["mean"] == pytest.approx(took.mean(), abs=4 * took.std() / np.sqrt(len(took)))
    assert frame["sd"] == pytest.approx(took.std(), rel=0.05)
    for measure, level in (("median", 0.5), ("q90", 0.9)):
        error = 4 * np.sqrt(level * (1 - level) / len(took))
        assert np.mean(took <= frame[measure]) > level - error
        assert np.mean(took <= frame[measure] - 1) < level + error


def test_refusals() -> None:
    fit = jn.JourneyFit.from_matrix(BASKET)
    with pytest.raises(ValueError, match="`to` is missing; wanted one or more of 'price', 'basket', 'left', 'joined'"):
        jn.first_passage(fit)
    with pytest.raises(ValueError, match="`to` is missing"):
        jn.first_passage(fit, [])
    with pytest.raises(ValueError, match="to='bought' is not in this chain; wanted one or more of 'price'"):
        jn.first_passage(fit, "bought")
    with pytest.raises(ValueError, match="to='entry' is not in this chain"):
        jn.first_passage(fit, ["joined", "entry"])
    with pytest.raises(ValueError, match="clock: got 'days'; wanted one of 'steps', 'time'"):
        jn.first_passage(fit, "joined", "days")
    with pytest.raises(ValueError, match="unit: got 'months'; wanted one of 'weeks', 'days', 'hours', 'minutes'"):
        jn.first_passage(fit, "joined", "time", unit="months")
    with pytest.raises(ValueError, match="confidence_level: got 0; wanted a share between 0 and 1"):
        jn.first_passage(fit, "joined", confidence_level=0)
    many = pd.DataFrame(np.eye(20), index=[f"s{i}" for i in range(20)], columns=[f"s{i}" for i in range(20)])
    with pytest.raises(ValueError, match="'s11' and 8 more"):
        jn.first_passage(jn.JourneyFit.from_matrix(many), "nowhere")


def test_refusals_of_methods() -> None:
    fit = jn.JourneyFit.from_matrix(BASKET)
    with pytest.raises(ValueError, match="method: got 'basic'; wanted one of 'bootstrap', 'percentile', 'bca', 'lin"):
        jn.first_passage(fit, "joined", method="basic")
    for method in ("percentile", "bca"):
        with pytest.raises(ValueError, match=rf'n_resamples: got 1998; wanted at least 1,999, .*"{method}" reads off'):
            jn.first_passage(fit, "joined", method=method, n_resamples=1_998)
    with pytest.raises(ValueError, match="n_resamples: got 19; wanted at least 20, fewer do not carry a standard"):
        jn.first_passage(fit, "joined", n_resamples=19)
    for wrong in (0, 39.5, "399", True):
        with pytest.raises(ValueError, match="n_resamples: got .*; wanted a whole number from 1"):
            jn.first_passage(fit, "joined", n_resamples=wrong)  # type: ignore[arg-type]
    for wrong in (-1, 0.5, "seed", True):
        with pytest.raises(ValueError, match="rng: got .*; wanted a whole number from 0, a numpy.random.Generator or"):
            jn.first_passage(fit, "joined", rng=wrong)  # type: ignore[arg-type]
