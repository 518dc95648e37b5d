"""Worth of journeys: by hand, a slow second implementation, coverage, groups, heavy tails, refusals."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pandas as pd
import pytest
import slow_sums
from small_chains import column, one

import journeys as jn
from journeys.errors import JourneysWarning, LogError

MEASURES = ["value_per_journey", "value_per_conversion", "total_so_far", "largest_customer_share"]


def shop(n: int = 180, **more: Any) -> jn.JourneyFit:
    """Return the fit to a shop's log: of `n` people a third buy for 30 and a third of these get 10 back at once, in
    the event before; a third leave, having paid 1; a third fall silent, having paid 2. Told to the end.
    """
    rows = []
    for who in range(n):
        start = pd.Timestamp("2025-01-01T08:00:00Z") + pd.Timedelta(days=(who * 7) % 100, minutes=who)
        begun = [(0, "visit", (0.0, 1.0, 2.0)[who % 3])]
        ended = [[(1, "refund", -10.0)] * (who % 9 == 0) + [(2, "bought", 30.0)], [(2, "left", 0.0)], []][who % 3]
        rows += [(f"{who}", start + pd.Timedelta(days=day), what, paid) for day, what, paid in begun + ended]
    frame = pd.DataFrame(rows, columns=["who", "when", "what", "paid"])
    frame["country"] = np.where(frame["who"].astype(int) % 2, "BE", "NL")
    rules = jn.JourneyRules(
        "who", "when", "what",
        **{"converted": "bought", "churned": "left", "silence": "30d", "as_of": "2025-07-20",
           "complete_history": True, "value": "paid"} | more,
    )  # fmt: skip
    return jn.JourneyModel().fit(jn.tally(frame.sort_values("when", kind="stable"), rules))


def test_by_hand() -> None:
    """Of nine people three buy, one of them with a refund: 80; three leave, 3; three fall silent, 6."""
    result = jn.worth(shop())
    assert result.to_frame()["measure"].tolist() == MEASURES
    bought = 60 * 30 - 20 * 10
    total = bought + 60 + 120
    expected = [total / 180, bought / 60, total, 30 / total]
    assert column(result, "estimate", "measure", MEASURES) == pytest.approx(expected, rel=1e-12)
    frame = result.to_frame()
    assert frame["n_journeys"].tolist()[:3] == [180, 60, 180]
    assert np.isnan(frame["n_journeys"][3])
    # no censoring: the clustered standard error of a mean, here one journey a customer
    low, high = frame["low"], frame["high"]
    assert ((low < frame["estimate"]) & (frame["estimate"] < high)).tolist() == [True, True, False, False]
    assert low[2] == high[2] == frame["estimate"][2]
    assert (frame["flag"] == ["", "", "", ""]).all()
    # what those who leave are worth
    assert one(jn.worth(shop(), "left"), measure="value_per_conversion") == pytest.approx(1.0, rel=1e-12)
    both = one(jn.worth(shop(), ["left", "lapsed"]), measure="value_per_conversion")
    assert both == pytest.approx(1.5, rel=1e-12)


def test_one_price_for_all_has_no_spread_and_is_not_few() -> None:
    frame = jn.worth(shop(), "left").to_frame()
    assert frame.loc[1, ["std_error", "low", "high", "flag"]].tolist() == [0, 1, 1, ""]


def test_more_paid_back_than_paid() -> None:
    log = pd.DataFrame(
        {"who": ["a", "a", "b"], "when": pd.to_datetime(["2025-01-01", "2025-01-02", "2025-01-01"], utc=True),
         "what": ["visit", "bought", "visit"], "paid": [-50.0, 20.0, 0.0]}
    ).sort_values("when", kind="stable")  # fmt: skip
    rules = jn.JourneyRules("who", "when", "what", converted="bought", silence="30d", complete_history=True,
                            as_of="2025-06-01", value="paid")  # fmt: skip
    frame = jn.worth(jn.JourneyModel().fit(jn.tally(log, rules))).to_frame()
    assert frame["estimate"].tolist()[:3] == [-15.0, -30.0, -30.0]
    assert np.isnan(frame["estimate"][3])
    assert frame["flag"].tolist() == ["too few", "too few", "", "adds up to nothing or less"]


@cache
def slow_case() -> tuple[pd.DataFrame, list[slow_sums.Told]]:
    return slow_sums.told_log(900, np.random.default_rng(15))


def test_against_a_slow_second_implementation() -> None:
    """Weights by their definition, and standard errors from numerical derivatives by bucket."""
    log, journeys = slow_case()
    fit = jn.JourneyModel().fit(jn.tally(log, slow_sums.rules()))
    paid = np.array([one.worth for one in journeys])
    won = np.array([one.outcome == "joined" for one in journeys]) * 1.0
    over = np.array([one.outcome != slow_sums.OPEN for one in journeys]) * 1.0

    def answer(times: np.ndarray) -> np.ndarray:
        jump = slow_sums.jumps(journeys, times)
        return np.array([jump @ (paid * over), jump @ (paid * won) / (jump @ won)])

    result = jn.worth(fit)
    found = column(result, "estimate", "measure", MEASURES)
    assert found[:2] == pytest.approx(answer(np.ones(len(journeys))), rel=1e-9)
    assert found[2:] == pytest.approx([paid.sum(), paid.max() / paid.sum()], rel=1e-12)
    error = column(result, "std_error", "measure", MEASURES)
    assert error[:2] == pytest.approx(slow_sums.std_errors(journeys, answer), rel=1e-5)
    # a plain mean of the ended ones is another number
    assert abs(found[0] - paid @ over / over.sum()) > 0.5 * error[0]


def test_coverage() -> None:
    """Nominal 95 %, 40 logs of 300 journeys. What is seen of the journeys depends on when they began, not on worth;
    the truth is the mean of 12,000 journeys told to the end.
    """
    _, all_of_them = slow_sums.told_log(12_000, np.random.default_rng(1), days=60_000)
    paid = np.array([one.worth for one in all_of_them])
    won = np.array([one.outcome == "joined" for one in all_of_them])
    truths = [paid.mean(), paid[won].mean()]
    inside = []
    for seed in range(40):
        log, _ = slow_sums.told_log(300, np.random.default_rng([16, seed]), days=160)
        frame = jn.worth(jn.JourneyModel().fit(jn.tally(log, slow_sums.rules(160)))).to_frame()
        inside.append(((frame["low"] <= [*truths, 0, 0]) & ([*truths, 0, 0] <= frame["high"])).to_numpy()[:2])
    assert 0.89 <= np.mean(inside) <= 0.99


def test_tallies_merge() -> None:
    log, _ = slow_case()
    rules = slow_sums.rules()
    parts = jn.tally(log[log["who"] % 3 == 0], rules) + jn.tally(log[log["who"] % 3 != 0], rules)
    told = [jn.worth(jn.JourneyModel().fit(tally)).to_frame() for tally in (jn.tally(log, rules), parts)]
    pd.testing.assert_frame_equal(*told)


def test_by_group() -> None:
    fit = shop(360, by=["country"])
    frame = jn.worth(fit, by="country").to_frame()
    assert frame.columns.tolist()[:3] == ["country", "measure", "estimate"]
    totals = frame[frame["measure"] == "total_so_far"]["estimate"]
    assert totals.sum() == pytest.approx(one(jn.worth(fit), measure="total_so_far"), rel=1e-12)
    largest = frame[frame["measure"] == "largest_customer_share"]
    assert largest["estimate"].isna().all()
    assert largest["flag"].tolist() == ["not known for a part of the journeys"] * 2
    whole = jn.worth(fit).to_frame()
    mean = whole["estimate"][0]
    per = frame[frame["measure"] == "value_per_journey"]
    assert np.average(per["estimate"], weights=per["n_journeys"]) == pytest.approx(mean, rel=1e-12)


def test_heavy_tails_are_flagged() -> None:
    log, _ = slow_case()
    log = log.copy()
    log.loc[log.index[0], "paid"] = 2000.0
    fit = jn.JourneyModel().fit(jn.tally(log, slow_sums.rules()))
    frame = jn.worth(fit).to_frame()
    share = frame["estimate"][3]
    assert share > 0.05
    assert frame["flag"].str.endswith(f"one customer holds {100 * share:.0f} % of the value").all()
    words = jn.worth(fit).summary()
    assert words.startswith("What journeys are worth")
    assert "Means of money rest on few" in words


def test_journeys_that_were_not_followed_to_the_end() -> None:
    """Nothing lapses: what the undecided will bring is not known."""
    with pytest.warns(JourneysWarning, match="the longest stay in visit is still open"):
        fit = shop(silence=None)
    frame = jn.worth(fit).to_frame()
    assert frame["flag"].tolist() == ["not all followed to the end"] * 2 + ["", ""]
    assert frame["estimate"][1] == pytest.approx((60 * 30 - 20 * 10) / 60, rel=1e-12)


def test_no_conversion() -> None:
    frame = jn.worth(shop(converted=["bought", "won"]), "won").to_frame()
    assert np.isnan(frame["estimate"][1])
    assert frame["flag"][1] == "never seen"


def test_a_group_in_which_nothing_has_ended() -> None:
    """The others of the log keep their numbers, by every question about touchpoints and money."""
    rows = [(who, day, what, paid) for who in range(90) for day, what, paid in
            [(who % 60, "visit", 1.0), *([(who % 60 + 1, "bought", 30.0)] if who % 2 else [])]]  # fmt: skip
    rows += [(who, 115, "visit", 0.0) for who in range(100, 130)]
    frame = pd.DataFrame(rows, columns=["who", "day", "what", "paid"])
    frame["when"] = slow_sums.START.tz_localize("UTC") + pd.to_timedelta(frame["day"], unit="D")
    frame["country"] = np.where(frame["who"] < 100, "NL", "BE")
    rules = slow_sums.rules(converted="bought", by=["country"], touchpoints="all")
    fit = jn.JourneyModel().fit(jn.tally(frame.drop(columns="day").sort_values("when", kind="stable"), rules))
    worth = jn.worth(fit, by="country").to_frame().set_index(["country", "measure"])
    assert worth.loc[("BE", "value_per_journey"), ["estimate", "std_error", "low", "high"]].isna().all()
    assert worth.loc[("BE", "value_per_journey"), "flag"].startswith("never seen")
    assert worth.loc[("NL", "value_per_journey"), "estimate"] == pytest.approx(1 + 30 / 2, rel=1e-12)
    credit = jn.credit(fit, by="country").to_frame().set_index(["country", "touchpoint"])
    assert credit["estimate"].loc["NL", "visit"] == 1
    assert np.isnan(credit["estimate"].loc["BE", "visit"])
    removal = jn.removal(fit, by="country").to_frame().set_index("country")
    assert removal["share_in_log"].loc["NL"] == 1
    assert np.isnan(removal["share_in_log"].loc["BE"])


def test_refusals() -> None:
    chain = pd.DataFrame([[0.5, 0.5]], index=["visit"], columns=["joined", "left"])
    with pytest.raises(LogError, match="no log tells what its journeys are worth"):
        jn.worth(jn.JourneyFit.from_matrix(chain))
    with pytest.raises(LogError, match=r"no values were counted; name the column of amounts in the rules"):
        jn.worth(shop(value=None))
    with pytest.raises(ValueError, match="`to` has a state in it, and values are counted by outcome"):
        jn.worth(shop(), "refund")
    with pytest.raises(ValueError, match="confidence_level"):
        jn.worth(shop(), confidence_level=95)
