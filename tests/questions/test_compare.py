"""Differences between fits and between groups: against statistics that need no chain, and by simulation."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pandas as pd
import pytest
import simulated
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.proportion import test_proportions_2indep as two_shares

import journeys as jn
from journeys.errors import LogError

SILENCE = "30d"


def visits(n: int, joined: int, group: str, first: int = 0) -> pd.DataFrame:
    """Return customers who all visit on the same day; the first of them join a day later."""
    start = pd.Timestamp("2024-01-01T00:00:00Z")
    who = np.arange(first, first + n)
    seen = pd.DataFrame({"who": who, "when": start, "what": "visit"})
    won = pd.DataFrame({"who": who[:joined], "when": start + pd.Timedelta(days=1), "what": "joined"})
    return pd.concat([seen, won]).assign(group=group)


def rules(**more: Any) -> jn.JourneyRules:
    settings = {"complete_history": True, "as_of": "2024-06-01", "by": "group", **more}
    return jn.JourneyRules("who", "when", "what", converted="joined", silence=SILENCE, **settings)


@cache
def two_groups() -> jn.Tally:
    return jn.tally(pd.concat([visits(4_000, 480, "a"), visits(5_000, 700, "b", first=4_000)]), rules())


def row(result: Any, measure: str = "reached") -> pd.Series:
    return result.to_frame().set_index("measure").loc[measure]


def test_two_shares_of_independent_people() -> None:
    """Without clusters or open journeys it is the comparison of two proportions (statsmodels, unpooled Wald)."""
    fits = [jn.JourneyModel().fit(part) for part in two_groups().split("group").values()]
    found = row(jn.compare(*fits))
    wald = two_shares(700, 5_000, 480, 4_000, method="wald")
    assert found["estimate"] == pytest.approx(0.02, abs=1e-12)
    assert (found["estimate_a"], found["estimate_b"]) == pytest.approx((0.12, 0.14))
    # One redraw of 200 buckets: its standard error varies by 5 %.
    assert found["std_error"] == pytest.approx(wald.diff / wald.statistic, rel=0.15)
    assert found["p_value"] == pytest.approx(wald.pvalue, abs=0.01)
    within = row(jn.compare(*fits, within=["12h", "2d"]), "reached within 2d")
    assert within["estimate"] == pytest.approx(0.02, abs=1e-12)
    assert row(jn.compare(*fits, within="12h"), "reached within 12h")["estimate"] == 0.0


def test_the_same_people_on_both_sides_differ_by_nothing() -> None:
    fit = jn.JourneyModel().fit(two_groups())
    frame = jn.compare(fit, fit, moves=True).to_frame()
    assert (frame["estimate"].dropna() == 0).all()
    assert (frame.loc[frame["std_error"].notna(), "std_error"] == 0).all()


def test_shared_people_make_a_difference_surer() -> None:
    """A part of the people against all of them: the covariance is in the interval."""
    fits = [jn.JourneyModel().fit(tally) for tally in (two_groups(), two_groups().where(group="b"))]
    found = row(jn.compare(*fits))
    alone = [row(jn.compare(fit, jn.JourneyFit.from_matrix(_known(0.5)), "joined")) for fit in fits]
    assert found["std_error"] < 0.8 * np.hypot(*(one["std_error"] for one in alone))


def _known(share: float) -> pd.DataFrame:
    return pd.DataFrame([[share, 1 - share]], index=["visit"], columns=["joined", "lapsed"])


def test_against_a_known_chain_the_interval_is_the_fits_own() -> None:
    fit = jn.JourneyModel().fit(two_groups())
    found = row(jn.compare(jn.JourneyFit.from_matrix(_known(0.1)), fit, "joined"))
    ours = jn.first_passage(fit, method="linearised").to_frame().query("start_state == 'entry'")
    assert found["std_error"] == pytest.approx(ours.set_index("measure").loc["probability", "std_error"])
    assert found["estimate"] == pytest.approx(1_180 / 9_000 - 0.1)


def test_another_level_needs_no_new_answer_and_is_wider() -> None:
    fits = [jn.JourneyModel().fit(part) for part in two_groups().split("group").values()]
    result = jn.compare(*fits)
    at_95, at_99 = (result.confidence_interval(level) for level in (0.95, 0.99))
    assert (at_99["low"] < at_95["low"]).any()
    assert row(result)["low"] == pytest.approx(at_95.set_index("measure").loc["reached", "low"])


@pytest.mark.parametrize("correction", ["holm", "fdr_bh", "none"])
def test_each_group_against_the_rest(correction: str) -> None:
    logs = [visits(900, 90 + 10 * (i == 3), f"g{i}", first=1_000 * i) for i in range(6)]
    fit = jn.JourneyModel().fit(jn.tally(pd.concat(logs), rules()))
    frame = jn.compare(fit, by="group", correction=correction).to_frame()
    mine = frame[frame["measure"] == "reached"].set_index("group")
    assert mine.loc["g3", "estimate_a"] == pytest.approx(450 / 4_500)
    assert mine.loc["g3", "estimate_b"] == pytest.approx(100 / 900)
    there = frame["p_value"].notna()
    wanted = frame.loc[there, "p_value"]
    if correction != "none":
        wanted = multipletests(wanted, method=correction)[1]
    np.testing.assert_allclose(frame.loc[there, "p_value_corrected"], wanted)


def test_moves_that_one_side_never_made_are_told() -> None:
    extra = pd.DataFrame({
        "who": [1, 2], "when": pd.Timestamp("2024-01-02T00:00:00Z"), "what": "basket", "group": "a",
    })  # fmt: skip
    logs = pd.concat([visits(300, 60, "a"), visits(300, 60, "b", first=1_000), extra])
    fits = [jn.JourneyModel().fit(part) for part in jn.tally(logs, rules()).split("group").values()]
    frame = jn.compare(*fits, moves=True).to_frame().set_index(["measure", "state", "next_state"])
    moved = frame.loc[("move", "visit", "basket")]
    assert moved["estimate_b"] == 0
    assert "seen on one side only" in moved["flag"]
    assert np.isnan(moved["low"])




def young() -> jn.Tally:
    """Return cohorts of which the second has been followed for ten days."""
    early, late = visits(600, 120, "x"), visits(600, 180, "x", first=5_000)
    late["when"] += pd.Timedelta(days=50)
    return jn.tally(pd.concat([early, late]), rules(by=(), cohort="month", as_of="2024-03-11"))


def test_young_cohorts_are_compared_within_a_time_both_have_had() -> None:
    tally = young()
    sides = [tally.where(cohort=name) for name in ("2024-01", "2024-02")]
    found = row(jn.compare(*sides, within=["12h", "20d"]), "reached within 12h")
    assert found["estimate"] == 0.0
    late = row(jn.compare(*sides, within=["12h", "20d"]), "reached within 20d")
    assert np.isnan(late["estimate"])
    assert "10 of 20d followed" in late["flag"]
    with pytest.raises(ValueError, match="a tally that is not fitted can only be compared within a time"):
        jn.compare(*sides)


def test_what_cannot_be_compared() -> None:
    fit = jn.JourneyModel().fit(two_groups())
    known = jn.JourneyFit.from_matrix(_known(0.1))
    with pytest.raises(ValueError, match="wanted either two fits, or one fit and the columns of its groups"):
        jn.compare(fit)
    with pytest.raises(ValueError, match="by: got 'country'; wanted columns that journeys are grouped by: 'group'"):
        jn.compare(fit, by="country")
    with pytest.raises(LogError, match="a chain that was given has no log to count in"):
        jn.compare(known, known, "joined", within="7d")
    with pytest.raises(ValueError, match="within: to='visit' is no outcome"):
        jn.compare(fit, fit, "visit", within="7d")
    with pytest.raises(ValueError, match="correction: got 'bonferroni'"):
        jn.compare(fit, fit, correction="bonferroni")
    with pytest.raises(LogError, match="there is only one group of group"):
        jn.compare(jn.JourneyModel().fit(two_groups().where(group="a")), by="group")


def test_differences_cover_and_do_not_cry_wolf() -> None:
    """Two halves of customers who do not differ: the interval holds 0 in 95 % of logs (25 of them, binomial 99.9 %)."""
    rng = np.random.default_rng(3)
    hits = 0
    for _ in range(25):
        log = simulated.simulate(500, 2.5, rng)
        log["half"] = log["customer"] % 2
        tally = jn.tally(log, jn.JourneyRules(
            "customer", "time", "event", converted="joined", silence=SILENCE, by="half",
            log_start=simulated.LOG_START, as_of=simulated.log_end(2.5),
        ))  # fmt: skip
        fits = [jn.JourneyModel().fit(part) for part in tally.split("half").values()]
        found = row(jn.compare(*fits))
        hits += bool(found["low"] <= 0 <= found["high"])
    assert 19 <= hits <= 25


def test_stages_differ_as_plain_shares_do_where_all_is_decided() -> None:
    logs = []
    for group, first, n_basket in (("a", 0, 90), ("b", 10_000, 150)):
        log = visits(300, 60, group, first=first)
        basket = log[log["what"] == "visit"].iloc[:n_basket].assign(what="basket")
        logs += [log, basket.assign(when=basket["when"] + pd.Timedelta(hours=1))]
    tally = jn.tally(pd.concat(logs), rules(stages=["visit", "basket"]))
    fits = [jn.JourneyModel().fit(part) for part in tally.split("group").values()]
    frame = jn.compare(*fits, stages=True).to_frame()
    mine = frame[frame["measure"] == "stage reached"].set_index("state")
    assert mine.loc["basket", ["estimate_a", "estimate_b"]].tolist() == pytest.approx([0.3, 0.5])
    assert mine.loc["basket", "low"] > 0
    assert mine.loc["converted", "estimate"] == pytest.approx(0.0)
    with pytest.raises(LogError, match="stages: no stages were counted"):
        jn.compare(*(jn.JourneyModel().fit(part) for part in two_groups().split("group").values()), stages=True)
