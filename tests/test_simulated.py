"""The simulator against its own stated truth."""

from __future__ import annotations

import math
import random

import numpy as np
import pandas as pd
import pytest
import simulated
from simulated import CONVERTED, LOG_START, SILENCE_DAYS, STATES, CustomerClass


def plain_journey(chance: random.Random, kind: CustomerClass) -> tuple[bool, int, float]:
    """Walk one whole journey: converted or not, its steps, its days up to the last event."""
    state = chance.choices(range(5), simulated.ENTRY)[0]
    steps, days = 1, 0.0
    while True:
        headings = [*simulated.HEADING[state], simulated.JOINING[state] * kind.joining]
        to = chance.choices(range(7), [*headings, 1.0 - sum(headings)])[0]
        if to == 6:
            return False, steps, days
        median = simulated.MEDIAN_DAYS[state] * kind.tempo / (10.0 if to == 5 else 1.0)
        stay = median * math.exp(simulated.SIGMA[state] * chance.gauss(0.0, 1.0))
        if stay > SILENCE_DAYS:
            return False, steps, days
        steps, days = steps + 1, days + stay
        if to == 5:
            return True, steps, days
        state = to


@pytest.mark.parametrize("two_classes", [False, True])
def test_truth_agrees_with_plain_walks_of_whole_journeys(two_classes: bool) -> None:
    chance = random.Random(20240101)
    kinds = simulated.TWO_CLASSES if two_classes else simulated.ONE_CLASS
    truth = simulated.truth(two_classes=two_classes)
    walks = [
        plain_journey(chance, chance.choices(kinds, [kind.share for kind in kinds])[0]) for _ in range(40_000)
    ]
    converted = np.array([walk[0] for walk in walks])
    steps = np.array([walk[1] for walk in walks])[converted]
    days = np.array([walk[2] for walk in walks])[converted]
    for values, expected in (
        (converted.astype(float), truth.conversion),
        (steps, truth.mean_steps_to_convert),
        (days, truth.mean_days_to_convert),
    ):
        standard_error = values.std() / math.sqrt(len(values))
        assert abs(values.mean() - expected) < 4 * standard_error


def whole_journeys(log: pd.DataFrame, before_days: float) -> pd.DataFrame:
    """Return first journeys that began early enough to be seen whole: converted, steps, days by customer."""
    log = log.sort_values(["customer", "time"], kind="stable")
    days = (log["time"] - LOG_START) / pd.Timedelta(days=1)
    by_customer = log.assign(days=days).groupby("customer")
    journeys = pd.DataFrame(
        {
            "converted": by_customer["event"].last() == CONVERTED,
            "steps": by_customer["event"].size(),
            "days": by_customer["days"].last() - by_customer["days"].first(),
            "began": by_customer["days"].first(),
        }
    )
    return journeys[journeys["began"] < before_days]


def test_simulated_logs_hold_the_stated_truth() -> None:
    truth = simulated.truth()
    log = simulated.simulate(200_000, 40.0, np.random.default_rng(7), returning=0.0)
    journeys = whole_journeys(log, before_days=20 * SILENCE_DAYS)
    converted = journeys[journeys["converted"]]
    for values, expected in (
        (journeys["converted"].astype(float), truth.conversion),
        (converted["steps"], truth.mean_steps_to_convert),
        (converted["days"], truth.mean_days_to_convert),
    ):
        assert abs(values.mean() - expected) < 4 * values.std() / math.sqrt(len(values))


def test_simulated_moves_have_the_matrix_of_the_truth() -> None:
    matrix = simulated.truth(two_classes=True).matrix
    log = simulated.simulate(200_000, 40.0, np.random.default_rng(8), returning=0.0, two_classes=True)
    early = whole_journeys(log, before_days=20 * SILENCE_DAYS).index
    log = log[log["customer"].isin(early)].sort_values(["customer", "time"], kind="stable")
    following = log.groupby("customer")["event"].shift(-1).fillna("lapsed")
    moves = pd.crosstab(log["event"], following).drop(index=CONVERTED)
    n_out = moves.sum(axis=1)
    share = moves.div(n_out, axis=0).reindex(index=list(STATES), columns=matrix.columns, fill_value=0)
    expected = matrix.loc[list(STATES)]
    tolerance = 5 * np.sqrt(expected * (1 - expected)).div(np.sqrt(n_out), axis=0) + 1e-12
    assert ((share - expected).abs() <= tolerance.reindex_like(share)).all(axis=None)


def test_parameters_are_those_the_simulations_were_planned_for() -> None:
    truth = simulated.truth()
    assert truth.conversion == pytest.approx(0.155, abs=0.001)
    assert truth.mean_days_to_convert == pytest.approx(9.56, abs=0.01)
    assert truth.mean_days_to_convert_fitted == pytest.approx(truth.mean_days_to_convert, rel=1e-12)
    assert truth.matrix.loc["poster", "lapsed"] == pytest.approx(0.52, abs=0.005)
    assert np.allclose(truth.matrix.sum(axis=1), 1.0)
    mixed = simulated.truth(two_classes=True)
    assert mixed.mean_days_to_convert_fitted < 0.9 * mixed.mean_days_to_convert


@pytest.mark.parametrize("first_arrivals", ["uniform", "steady state from -8W"])
def test_logs_are_cut_to_their_window_and_come_in_order(first_arrivals: str) -> None:
    log = simulated.simulate(3000, 2.0, np.random.default_rng(3), first_arrivals=first_arrivals)
    assert list(log.columns) == ["customer", "time", "event"]
    assert log["time"].is_monotonic_increasing
    assert log["time"].min() >= LOG_START
    assert log["time"].max() <= simulated.log_end(2.0)
    assert set(log["event"]) == {*STATES, CONVERTED}
    again = simulated.simulate(3000, 2.0, np.random.default_rng(3), first_arrivals=first_arrivals)
    pd.testing.assert_frame_equal(log, again)


def test_a_steady_log_begins_in_the_middle_of_journeys() -> None:
    log = simulated.simulate(8000, 6.0, np.random.default_rng(5), first_arrivals="steady state from -8W")
    month = (log["time"] - LOG_START).dt.days // 30
    per_silence = month.value_counts().sort_index().iloc[:6]
    assert per_silence.min() > 0.85 * per_silence.max()
    ramp = simulated.simulate(8000, 6.0, np.random.default_rng(5))
    month = (ramp["time"] - LOG_START).dt.days // 30
    assert month.value_counts()[0] < 0.8 * month.value_counts()[5]


def test_customers_who_lapsed_come_back_after_more_than_the_silence() -> None:
    log = simulated.simulate(5000, 6.0, np.random.default_rng(9)).sort_values(
        ["customer", "time"], kind="stable"
    )
    before = log.groupby("customer")[["event", "time"]].shift()
    gap = (log["time"] - before["time"]) / pd.Timedelta(days=1)
    assert ((before["event"] != CONVERTED) & (gap > SILENCE_DAYS)).sum() > 200
    assert ((before["event"] == CONVERTED) & before["event"].notna()).sum() > 100
    never = simulated.simulate(5000, 6.0, np.random.default_rng(9), returning=0.0)
    never = never.sort_values(["customer", "time"], kind="stable")
    gaps = never.groupby("customer")["time"].diff()
    assert gaps.max() <= pd.Timedelta(days=SILENCE_DAYS)
