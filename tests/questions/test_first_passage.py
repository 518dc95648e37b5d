from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from small_chains import ABSORBING, column, known_chain, one, ruin

import journeys as jn


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
