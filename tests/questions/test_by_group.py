"""A question asked of every group at once, against the same question asked of each part by itself."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from functools import cache
from typing import Any

import numpy as np
import pandas as pd
import pytest
import simulated

import journeys as jn
from journeys.errors import JourneysWarning, LogError

LENGTH = 2.5


@cache
def fit() -> jn.JourneyFit:
    log = simulated.simulate(1_500, LENGTH, np.random.default_rng(11))
    log["country"] = np.array(["NL", "BE", "FR"])[log["customer"].to_numpy() % 3]
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"], silence="30d", by="country", cohort="month",
        log_start=simulated.LOG_START, as_of=simulated.log_end(LENGTH),
    )  # fmt: skip
    return jn.JourneyModel().fit(jn.tally(log, rules))


QUESTIONS: dict[str, Callable[..., Any]] = {
    "outcomes": jn.outcomes,
    "steps": jn.first_passage,
    "days": lambda fit, **more: jn.first_passage(fit, "joined", "time", unit="hours", method="linearised", **more),
    "percentile": lambda fit, **more: jn.first_passage(fit, method="percentile", **more),
    "back": lambda fit, **more: jn.return_time(fit, "basket", **more),
    "table": lambda fit, **more: jn.time_to_convert(fit, ["7d"], **more),
    "moves": lambda fit, **more: fit.moves(**more),
}


@pytest.mark.parametrize("name", QUESTIONS)
def test_groups_answer_as_each_part_does(name: str) -> None:
    ask, tally = QUESTIONS[name], fit().tally
    assert tally is not None
    result = ask(fit(), by="country", confidence_level=0.9)
    frame = result.to_frame()
    assert frame.columns[0] == "country"
    assert list(dict.fromkeys(frame["country"])) == ["BE", "FR", "NL"]
    for country in ("BE", "NL"):
        alone = ask(jn.JourneyModel().fit(tally.where(country=country)), confidence_level=0.9)
        mine = frame[frame["country"] == country].drop(columns="country").reset_index(drop=True)
        pd.testing.assert_frame_equal(mine, alone.to_frame())
    level = result.confidence_interval(0.99)
    assert list(level.columns[:2]) == ["country", alone.keys.columns[0]]
    if getattr(result, "resamples", None) is not None:
        assert result.resamples.shape[1] == len(frame)


def test_a_group_that_cannot_carry_a_fit_is_a_row_that_says_why() -> None:
    frame = jn.outcomes(fit(), by="cohort").to_frame()
    assert list(dict.fromkeys(frame["cohort"])) == ["2024-01", "2024-02", "2024-03"]
    late = frame[frame["cohort"] == "2024-03"]
    assert len(late) == 1
    assert np.isnan(late["estimate"].iloc[0])
    assert late["flag"].iloc[0] == "followed for 15 days, no longer than the silence"


def test_several_columns() -> None:
    frame = jn.time_to_convert(fit(), by=["cohort", "country"]).to_frame()
    assert list(frame.columns[:2]) == ["cohort", "country"]
    assert len(frame[["cohort", "country"]].drop_duplicates()) == 9


def test_a_group_in_which_nobody_converts_has_its_rows() -> None:
    log = simulated.simulate(600, LENGTH, np.random.default_rng(4))
    log["won"] = log.groupby("customer")["event"].transform(lambda events: (events == "joined").any())
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"], silence="30d", by="won",
        log_start=simulated.LOG_START, as_of=simulated.log_end(LENGTH),
    )  # fmt: skip
    frame = jn.first_passage(jn.JourneyModel().fit(jn.tally(log, rules)), method="linearised", by="won").to_frame()
    nobody = frame[~frame["won"].astype(bool) & (frame["start_state"] == "entry")].set_index("measure")
    assert nobody.loc["probability", "estimate"] == 0
    assert nobody.loc["probability", "high"] > 0
    assert "cannot be reached" in nobody.loc["mean", "flag"]


def test_what_has_no_groups() -> None:
    known = jn.JourneyFit.from_matrix(pd.DataFrame([[0.5, 0.5]], index=["visit"], columns=["joined", "left"]))
    with pytest.raises(LogError, match="this chain was given, not fitted to a log, so it has no groups"):
        jn.outcomes(known, by="country")
    with pytest.raises(ValueError, match="by: got 'city'; wanted columns that journeys are grouped by: 'country'"):
        jn.outcomes(fit(), by="city")
    tally = fit().tally
    assert tally is not None
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", JourneysWarning)
        young = jn.JourneyModel().fit_whatever(tally.where(cohort="2024-03"))
    with pytest.raises(LogError, match="no group of cohort can carry a fit"):
        jn.outcomes(young, by="cohort")
