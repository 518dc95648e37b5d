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


def test_a_state_that_a_group_never_sees() -> None:
    log = simulated.simulate(600, LENGTH, np.random.default_rng(4))
    log["country"] = np.array(["NL", "BE"])[log["customer"].to_numpy() % 2]
    log.loc[(log["country"] == "BE") & (log["event"] == "poster"), "event"] = "tram"
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"], silence="30d", by="country",
        log_start=simulated.LOG_START, as_of=simulated.log_end(LENGTH),
    )  # fmt: skip
    whole = jn.JourneyModel().fit(jn.tally(log, rules))
    frame = jn.first_passage(whole, "tram", method="linearised", by="country").to_frame()
    assert (frame["country"] == "NL").sum() == 1
    assert frame.loc[frame["country"] == "NL", "flag"].tolist() == ["'tram' is never seen"]
    curves = jn.passage_curve(whole, start="tram", by="country")
    assert curves.why == {("BE",): "", ("NL",): "'tram' is never seen"}
    with pytest.raises(ValueError, match="to='bus' is not in this chain"):
        jn.first_passage(whole, "bus", by="country")


@pytest.mark.parametrize("clock", ["time", "steps"])
def test_curves_are_those_of_each_part(clock: str) -> None:
    curves, tally = jn.passage_curve(fit(), clock=clock, by="country", confidence_level=0.9), fit().tally
    assert tally is not None
    assert list(curves.curves) == [("BE",), ("FR",), ("NL",)]
    alone = jn.passage_curve(jn.JourneyModel().fit(tally.where(country="FR")), clock=clock, confidence_level=0.9)
    asked = np.array([[0.0, 3.0], [7.0, np.inf]])
    assert curves.at(asked).shape == (3, 2, 2)
    np.testing.assert_allclose(curves.at(asked)[1], alone.at(asked), rtol=1e-12)
    assert curves.probability[1] == pytest.approx(alone.probability, rel=1e-12)
    for mine, its in (
        (curves.to_frame(), alone.to_frame()),
        (curves.to_frame([1, 7]), alone.to_frame([1, 7])),
        (curves.quantile(0.1), alone.quantile(0.1)),
        (curves.given_reached().quantile(), alone.given_reached().quantile()),
        (curves.given_reached().of_all().confidence_interval(0.8), alone.confidence_interval(0.8)),
    ):
        assert mine.columns[0] == "country"
        assert list(dict.fromkeys(mine["country"])) == ["BE", "FR", "NL"]
        pd.testing.assert_frame_equal(
            mine[mine["country"] == "FR"].drop(columns="country").reset_index(drop=True), its, rtol=1e-9
        )
    assert repr(curves).startswith("<GroupCurves: 3 groups of country, PassageCurve: entry to joined in ")
    told = curves.summary().splitlines()
    assert told[0].startswith("From entry to joined: % who reach it in the end")
    assert [line.split()[0] for line in told[1:]] == ["country", "BE", "FR", "NL"]


def test_curves_of_groups_without_a_fit() -> None:
    curves = jn.passage_curve(fit(), by=["cohort", "country"])
    why = "followed for 15 days, no longer than the silence"
    assert curves.why[("2024-03", "NL")] == why
    assert np.isnan(curves.at([1.0, 5.0])[-1]).all()
    assert not np.isnan(curves.at([1.0, 5.0])[0]).any()
    for frame in (curves.to_frame([1.0, 5.0]), curves.quantile([0.1, 0.2])):
        late = frame[(frame["cohort"] == "2024-03") & (frame["country"] == "NL")]
        assert late["flag"].tolist() == [why]
        assert late[["estimate", "std_error", "low", "high"]].isna().all(axis=None)
        assert len(frame) == 6 * 2 + 3
    assert why in curves.summary()
    assert "<table" in curves._repr_html_()


def test_what_has_no_curves_by_group() -> None:
    with pytest.raises(ValueError, match="by: got 'city'; wanted columns that journeys are grouped by"):
        jn.passage_curve(fit(), by="city")
    with pytest.raises(ValueError, match="start='bus' is no state of this chain"):
        jn.passage_curve(fit(), start="bus", by="country")
    tally = fit().tally
    assert tally is not None
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", JourneysWarning)
        young = jn.JourneyModel().fit_whatever(tally.where(cohort="2024-03"))
    with pytest.raises(LogError, match="by: no group of cohort can carry a curve"):
        jn.passage_curve(young, by="cohort")


def test_curves_of_a_group_in_which_nobody_converts() -> None:
    log = simulated.simulate(600, LENGTH, np.random.default_rng(4))
    log["won"] = log.groupby("customer")["event"].transform(lambda events: (events == "joined").any())
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"], silence="30d", by="won",
        log_start=simulated.LOG_START, as_of=simulated.log_end(LENGTH),
    )  # fmt: skip
    curves = jn.passage_curve(jn.JourneyModel().fit(jn.tally(log, rules)), by="won")
    nobody = curves.to_frame([5.0]).iloc[0]
    assert nobody["estimate"] == 0
    assert nobody["high"] > 0
    assert "cannot be reached" in nobody["flag"]
