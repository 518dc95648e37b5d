"""Coming back: against Kaplan-Meier by hand and by another program, a simulation, and the demo log's truth."""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cache

import comebacks
import numpy as np
import pandas as pd
import pytest
from club_log import club_fit, club_tally
from scipy.special import ndtr

import journeys as jn
from journeys.questions.comeback import NONE_SEEN, NOT_FOLLOWED, STILL_SILENCE
from journeys.questions.linear import TOO_FEW
from journeys.questions.within import BETWEEN_BINS, NO_UPPER_END

DAY = pd.Timedelta(days=1)
START = pd.Timestamp("2025-01-01")

Absence = tuple[float, bool]


def absences_log(absences: Sequence[Absence], last_day: float, *, whole_days: bool) -> pd.DataFrame:
    """Return a log in which each person joins once and is back after some days, or away for so long at the end."""
    rows = []
    for who, (days, back) in enumerate(absences):
        joined = 0.0 if back else last_day - days
        rows.append((who, joined, "joined"))
        if back:
            rows.append((who, days, "visit"))
    frame = pd.DataFrame(rows, columns=["who", "day", "what"])
    when = START + pd.to_timedelta((frame.day * 86_400e6).round().astype("int64"), unit="us")
    frame["when"] = when.dt.date if whole_days else when.dt.tz_localize("UTC")
    return frame.drop(columns="day")


def after_joining(
    absences: Sequence[Absence], last_day: float, *, whole_days: bool = True, silence: str | None = None
) -> jn.Tally:
    rules = jn.JourneyRules(
        "who", "when", "what", converted="joined", churned="left", silence=silence, complete_history=True,
        log_start=START.isoformat(), as_of=(START + last_day * DAY).isoformat(),
    )  # fmt: skip
    return jn.tally(absences_log(absences, last_day, whole_days=whole_days), rules)


def rows(tally: jn.Tally, after: str | list[str], horizons: Sequence[str] | None = None) -> pd.DataFrame:
    return jn.comeback(tally, after, horizons).to_frame().set_index(["after", "measure", "horizon"])


def estimates(tally: jn.Tally, after: str, horizons: list[str]) -> list[float]:
    found: list[float] = jn.comeback(tally, after, horizons).to_frame().estimate.tolist()
    return found


# --- by hand and by another program -----------------------------------------------------------------------

SIX: list[Absence] = [(2, True), (5, True), (5, True), (9, True), (4, False), (12, False)]


def test_six_absences_by_hand() -> None:
    # At risk 6, 4, 2 on days 2, 5, 9: away for longer 5/6, 5/6 * 2/4, 5/6 * 2/4 * 1/2.
    found = estimates(after_joining(SIX, 20), "joined", ["1d", "2d", "4d", "5d", "9d", "11d"])
    assert found == pytest.approx([4 / 6, 0, 1 / 6, 1 / 6, 7 / 12, 19 / 24, 19 / 24, 5.0], abs=1e-12)


def test_counts_are_of_all_absences_of_the_kind() -> None:
    frame = jn.comeback(after_joining(SIX, 20), "joined", ["2d"]).to_frame()
    assert (frame.n_absences == 6).all()
    assert (frame.n_back == 4).all()


def test_a_lapse_starts_at_the_last_event_and_not_at_the_silence() -> None:
    # Three fall silent after their only visit: back after 10 days, after 14, and away for 12 at the end.
    days = [("a", 0), ("a", 10), ("b", 0), ("b", 14), ("c", 2)]
    log = pd.DataFrame([(who, START + day * DAY, "visit") for who, day in days], columns=["who", "when", "what"])
    log["when"] = log["when"].dt.date
    rules = jn.JourneyRules("who", "when", "what", converted="joined", silence="7d", as_of="2025-01-15")
    frame = rows(jn.tally(log, rules), "lapsed", ["9d", "10d", "13d", "14d"])
    assert frame.estimate.tolist() == pytest.approx([2 / 3, 0, 1 / 3, 1 / 3, 1, 14], abs=1e-12)
    assert (frame.n_absences == 3).all(), "an absence no longer than the silence is none"


def random_absences(n: int, seed: int, *, whole_days: bool) -> tuple[list[Absence], float]:
    rng = np.random.default_rng(seed)
    away = np.where(rng.random(n) < 0.7, rng.exponential(20.0, n), np.inf)
    seen = rng.uniform(1.0, 90.0, n)
    if whole_days:
        away, seen = np.floor(away), np.floor(seen)
    return [(float(min(a, c)), bool(a <= c)) for a, c in zip(away, seen, strict=True)], 100.0


def test_against_kaplan_meier_of_statsmodels() -> None:
    """statsmodels 0.15.0, duration.survfunc.SurvfuncRight: the curve, its median and Greenwood's errors."""
    from statsmodels.duration.survfunc import SurvfuncRight

    absences, last_day = random_absences(400, seed=5, whole_days=True)
    days, back = np.array(absences).T
    outside = SurvfuncRight(days, back)
    horizons = [f"{day:g}d" for day in outside.surv_times if day > 0]
    frame = rows(after_joining(absences, last_day), "joined", horizons)
    within = frame[1:-1]
    wanted = outside.surv_times > 0
    assert within.estimate.to_numpy() == pytest.approx(1 - outside.surv_prob[wanted], abs=1e-12)
    # Customers in 200 buckets: the errors agree but for chance, 1/sqrt(2 * 200) each, alike on all days.
    assert (within.std_error / outside.surv_prob_se[wanted]).median() == pytest.approx(1, abs=0.15)
    median = frame.loc[("joined", "median_days", "in the end")]
    assert median.estimate == outside.quantile(0.5)
    low, high = outside.quantile_ci(0.5, method="logit")
    assert (median.low, median.high) == pytest.approx((low, high), abs=3.0)


def test_moments_are_binned_to_within_a_hair_of_kaplan_meier() -> None:
    from statsmodels.duration.survfunc import SurvfuncRight

    absences, last_day = random_absences(2_000, seed=6, whole_days=False)
    outside = SurvfuncRight(*np.array(absences).T)
    tally = after_joining(absences, last_day, whole_days=False, silence="95d")
    for horizon in (1, 7, 30, 60):
        exact = 1 - outside.surv_prob[np.searchsorted(outside.surv_times, horizon, side="right") - 1]
        # An edge of the bins: what is left is the actuarial account of those who leave within a bin.
        assert estimates(tally, "joined", [f"{horizon}d"])[1] == pytest.approx(exact, abs=0.002)
    assert estimates(tally, "joined", ["7d"])[2] == pytest.approx(outside.quantile(0.5), rel=0.03)


# --- simulation -------------------------------------------------------------------------------------------

LAPSED, JOINED = ["60d", "90d", "120d"], ["7d", "30d", "90d"]


@cache
def simulated_answers(n_customers: int, days: float, replications: int) -> pd.DataFrame:
    answers = []
    for replication in range(replications):
        tally = comebacks.tally(n_customers, days, np.random.default_rng([20250101, replication]))
        for after, horizons in (("lapsed", LAPSED), ("joined", JOINED)):
            answers.append(jn.comeback(tally, after, horizons).to_frame())
    return pd.concat(answers, ignore_index=True)


def truth(after: str, measure: str, horizon: str) -> float:
    if measure == "median_days":
        return comebacks.median_days(after)
    return comebacks.back_within(after, math.inf if horizon == "so far" else float(horizon.removesuffix("d")))


def test_shares_are_right_under_censoring_and_plain_ones_are_not() -> None:
    for (after, measure, horizon), found in simulated_answers(300, 150.0, 60).groupby(["after", "measure", "horizon"]):
        error = found.estimate - truth(after, measure, horizon)
        se = error.std() / math.sqrt(len(error))
        if horizon == "so far":
            assert error.mean() < -0.05, "counts those still away as gone for good"
        elif measure == "returned":
            assert abs(error.mean()) < 3.5 * se


def test_intervals_cover() -> None:
    """A binomial of 60 at .95 is below 51 once in a hundred; a whole kind of rows lies within .91 and .99."""
    found = simulated_answers(300, 150.0, 60)
    found = found[found.horizon != "so far"]
    aim = np.array([truth(*key) for key in found[["after", "measure", "horizon"]].itertuples(index=False)])
    told = found[found.low.notna()].assign(covers=(found.low <= aim) & (aim <= found.high))
    assert len(told) > 0.95 * len(found)
    by_row = told.groupby(["after", "measure", "horizon"]).covers
    assert (by_row.mean() >= 51 / 60).all()
    by_measure = told.groupby("measure").covers.mean()
    assert by_measure.between(0.91, 0.99).all()


def test_standard_errors_are_the_spread_of_the_answers() -> None:
    found = simulated_answers(300, 150.0, 60)
    found = found[(found.horizon != "so far") & (found.after == "lapsed")]
    for _, row in found.groupby(["measure", "horizon"]):
        assert row.std_error.median() == pytest.approx(row.estimate.std(), rel=0.3)


def test_the_demo_log_gives_back_what_was_put_in() -> None:
    """Stated in demo_data/club_truth.py: .45 come back from a lapse, after the silence and a lognormal time."""
    frame = rows(club_tally(), "lapsed")
    assert list(frame.index.get_level_values("horizon")) == ["so far", "60d", "90d", "180d", "in the end"]
    for days in (60, 90, 180):
        row = frame.loc[("lapsed", "returned", f"{days}d")]
        true = 0.45 * ndtr(math.log((days - 30) / 15) / 0.8)
        assert abs(row.estimate - true) < 2.5 * row.std_error
        assert row.std_error < 0.007
    assert frame.estimate.iloc[0] < 0.42, "some are still to come back"
    for outcome, least, most in (("joined", 0.10, 0.12), ("declined", 0.15, 0.30)):
        row = rows(club_tally(), outcome).loc[(outcome, "returned", "180d")]
        assert row.low < most
        assert row.high > least


# --- medians ----------------------------------------------------------------------------------------------


def test_a_median_that_is_not_reached_is_missing_and_says_so() -> None:
    median = rows(club_tally(), "lapsed").loc[("lapsed", "median_days", "in the end")]
    assert median[["estimate", "std_error", "low", "high"]].isna().all()
    assert median.flag == "fewer than half came back within 232 days"


def test_a_median_is_never_read_beyond_the_last_one_followed() -> None:
    few_back: list[Absence] = [(float(1 + i % 3), True) for i in range(49)] + [(30.0, False)] * 51
    frame = rows(after_joining(few_back, 40), "joined", ["3d"])
    assert frame.loc[("joined", "median_days", "in the end"), "flag"] == "fewer than half came back within 30 days"
    enough = [*few_back, (4.0, True), (4.0, True)]
    assert rows(after_joining(enough, 40), "joined").loc[("joined", "median_days", "in the end"), "estimate"] == 4


def test_an_interval_without_upper_end_says_so() -> None:
    absences: list[Absence] = [(float(1 + i % 10), True) for i in range(52)] + [(30.0, False)] * 48
    answer = jn.comeback(after_joining(absences, 40), "joined", ["3d"])
    median = answer.to_frame().iloc[-1]
    assert (median.estimate, median.high, median.flag) == (10, math.inf, NO_UPPER_END)
    assert 5 < median.low < 10
    assert answer.confidence_interval(0.2).iloc[-1].high == 10, "at a lower level the curve gets there"


def test_no_interval_from_a_jump_of_the_last_ones_at_risk() -> None:
    absences: list[Absence] = [(2.0, True)] * 30 + [(3.0, False)] * 60 + [(20.0, True)] * 3
    median = rows(after_joining(absences, 40), "joined", ["2d"]).iloc[-1]
    assert (median.estimate, median.flag) == (20, TOO_FEW)
    assert math.isnan(median.low)
    assert math.isnan(median.high)


def test_intervals_of_medians_lie_where_people_come_back() -> None:
    """After a lapse nobody is back within the silence, so no bound of the time away lies there."""
    for replication in range(5):
        tally = comebacks.tally(60, 240.0, np.random.default_rng([3, replication]))
        median = rows(tally, "lapsed").iloc[-1]
        assert 30 < median.low < median.estimate < median.high


# --- properties -------------------------------------------------------------------------------------------


def test_names_do_not_matter() -> None:
    log = comebacks.log(200, 200.0, np.random.default_rng(4))
    answers = []
    for visit, joined in (("visit", "joined"), ("zebra", "aardvark")):
        rules = jn.JourneyRules("who", "when", "what", converted=joined, churned="left", silence="30d",
                                complete_history=True)  # fmt: skip
        tally = jn.tally(log.assign(what=log.what.map({"visit": visit, "joined": joined})), rules)
        answers.append(jn.comeback(tally, ["lapsed", joined, "left"]).to_frame().drop(columns="after"))
    pd.testing.assert_frame_equal(*answers)


def test_tallies_of_parts_added_give_the_answer_of_the_whole() -> None:
    log = comebacks.log(200, 200.0, np.random.default_rng(5))
    rules = jn.JourneyRules("who", "when", "what", converted="joined", silence="30d", complete_history=True,
                            log_start=comebacks.START.isoformat(), as_of="2024-07-19")  # fmt: skip
    odd = log.who % 2 == 1
    parts = jn.tally(log[odd], rules) + jn.tally(log[~odd], rules)
    whole = jn.tally(log, rules)
    pd.testing.assert_frame_equal(
        jn.comeback(parts, ["lapsed", "joined"]).to_frame(), jn.comeback(whole, ["lapsed", "joined"]).to_frame()
    )


def test_dates_give_nearly_the_answer_of_moments() -> None:
    rules = jn.JourneyRules("who", "when", "what", converted="joined", silence="30d", complete_history=True,
                            log_start="2024-01-01", as_of="2024-07-19")  # fmt: skip
    fine, dates = (
        rows(jn.tally(log, rules), ["lapsed", "joined"])
        for log in (comebacks.log(2_000, 200.0, np.random.default_rng(6), whole_days=whole) for whole in (False, True))
    )
    shares = fine.index.get_level_values("measure") == "returned"
    assert (fine.estimate - dates.estimate)[shares].abs().max() < 0.02
    assert (fine.estimate - dates.estimate)[~shares].abs().max() < 1.5
    medians = dates.estimate[~shares]
    assert (medians == medians.round()).all(), "whole days"


def test_several_kinds_are_blocks_of_rows_in_the_order_asked_for() -> None:
    both = jn.comeback(club_tally(), ["joined", "lapsed", "joined"], ["60d", "90d"]).to_frame()
    apart = [jn.comeback(club_tally(), after, ["60d", "90d"]).to_frame() for after in ("joined", "lapsed")]
    pd.testing.assert_frame_equal(both, pd.concat(apart, ignore_index=True))


@pytest.mark.parametrize("level", [0.5, 0.8, 0.999])
def test_another_level_is_the_answer_at_that_level(level: float) -> None:
    tally = comebacks.tally(300, 240.0, np.random.default_rng(7))
    answer = jn.comeback(tally, ["lapsed", "joined"])
    frame = answer.confidence_interval(level)
    fresh = jn.comeback(tally, ["lapsed", "joined"], confidence_level=level).to_frame()
    pd.testing.assert_frame_equal(frame, fresh[list(frame)])
    assert fresh.low.notna().all()
    wide = answer.confidence_interval(0.9999)
    assert (wide.low < frame.low).all()
    assert ((wide.high > frame.high) | np.isinf(frame.high)).all()


def test_rows_taken_and_in_another_unit_keep_their_bounds() -> None:
    answer = jn.comeback(comebacks.tally(300, 240.0, np.random.default_rng(7)), ["lapsed", "joined"])
    low, high = answer.estimates.bounds(0.9)
    last = np.flatnonzero(answer.keys.measure == "median_days")
    weeks = answer.estimates.take(last[::-1]).times(1 / 7)
    assert weeks.value == pytest.approx(answer.estimates.value[last[::-1]] / 7)
    assert weeks.bounds(0.9)[0] == pytest.approx(low[last[::-1]] / 7)
    assert weeks.bounds(0.9)[1] == pytest.approx(high[last[::-1]] / 7)


# --- what is odd or refused -------------------------------------------------------------------------------


def test_flags_of_horizons() -> None:
    frame = rows(club_tally(), "lapsed", ["7d", "30d", "44d", "60d", "300d"])
    flags = frame.flag.droplevel(["after", "measure"])
    assert flags["7d"] == flags["30d"] == STILL_SILENCE
    assert frame.loc[("lapsed", "returned", ["7d", "30d"]), "estimate"].isna().all()
    assert (flags["44d"], flags["60d"]) == (BETWEEN_BINS, "")
    assert flags["300d"] == f"{BETWEEN_BINS}; {NOT_FOLLOWED}"
    assert frame.estimate.loc[("lapsed", "returned", "300d")] < 0.47, "a lower bound"


def test_no_absence_of_the_kind() -> None:
    frame = rows(after_joining(SIX, 20), "left")
    assert (frame.flag == NONE_SEEN).all()
    assert frame[["estimate", "std_error", "low", "high"]].isna().all(axis=None)
    assert (frame[["n_absences", "n_back"]] == 0).all(axis=None)
    assert {"so far", "in the end"} < set(frame.index.get_level_values("horizon"))


def test_nobody_back_has_a_bound_from_those_followed_so_long() -> None:
    # Of 40 away, 10 for 30 days: the exact upper bound of 0 of 10 at the full 5 % is 1 - .05^(1/10) = .2589.
    tally = after_joining([(5.0, False)] * 30 + [(30.0, False)] * 10, 40)
    frame = rows(tally, "joined", ["2d", "20d", "35d"])
    within = frame.iloc[1:-1].droplevel(["after", "measure"])
    assert (within.estimate == 0).all()
    assert within.high.tolist() == pytest.approx([1 - 0.05 ** (1 / 40), 1 - 0.05 ** (1 / 10), 1])
    assert within.flag["20d"] == TOO_FEW
    assert within.flag["35d"] == f"{NOT_FOLLOWED}; {TOO_FEW}"


@pytest.mark.parametrize("after", ["opened", ["joined", "open"], "entry", "visit", []])
def test_after_something_that_ends_no_journey(after: str | list[str]) -> None:
    with pytest.raises(ValueError, match=r"after: got .* one or more of 'lapsed', 'joined', 'left'"):
        jn.comeback(after_joining(SIX, 20, silence="15d"), after)


def test_after_a_lapse_where_nothing_lapses() -> None:
    with pytest.raises(ValueError, match=r"got 'lapsed', but .* nothing lapses \(silence=None\).*give the rules"):
        jn.comeback(after_joining(SIX, 20))


def test_after_an_outcome_at_which_the_story_ends() -> None:
    log = absences_log(SIX, 20, whole_days=True)
    rules = jn.JourneyRules("who", "when", "what", converted="joined", silence="3d", complete_history=True,
                            after_outcome="stop", as_of="2025-01-21")  # fmt: skip
    tally = jn.tally(log, rules)
    with pytest.raises(ValueError, match=r"after: got 'joined', but .* ends at the first outcome .*\"reopen\""):
        jn.comeback(tally, ["lapsed", "joined"])
    assert (jn.comeback(tally).to_frame().flag == NONE_SEEN).all(), "all joined at once"


def test_a_fit_is_not_a_tally() -> None:
    with pytest.raises(TypeError, match=r"tally: got JourneyFit; wanted .* fit\.tally"):
        jn.comeback(club_fit())  # type: ignore[arg-type]


def test_wrong_horizons_and_levels() -> None:
    with pytest.raises(ValueError, match="horizons"):
        jn.comeback(club_tally(), horizons=["soon"])
    with pytest.raises(ValueError, match="confidence_level"):
        jn.comeback(club_tally(), confidence_level=95)


@pytest.mark.parametrize(
    ("silence", "days", "expected"),
    [
        ("30d", 40, ["60d"]),
        ("400d", 500, ["800d"]),
        ("1h", 5, ["1d", "2d", "3d"]),
        ("30d", 400, ["60d", "90d", "180d", "365d"]),
        ("1d", 400, ["60d", "90d", "180d", "365d"]),
    ],
)
def test_default_horizons_after_a_lapse_are_beyond_the_silence(silence: str, days: int, expected: list[str]) -> None:
    times = [START, START + days * DAY]
    log = pd.DataFrame({"who": [1, 2], "when": [t.tz_localize("UTC") for t in times], "what": "visit"})
    tally = jn.tally(log, jn.JourneyRules("who", "when", "what", converted="joined", silence=silence))
    assert rows(tally, "lapsed").index.get_level_values("horizon").tolist() == ["so far", *expected, "in the end"]
