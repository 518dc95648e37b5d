"""What a fit refuses, what it warns of, and the flags that go with the warnings."""

from __future__ import annotations

import warnings
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from club_log import LOG, RULES, club_fit
from small_chains import START, log_of_paths, one

import journeys as jn
from journeys.errors import (
    DeadEndWarning,
    EndNotSeenWarning,
    JourneysError,
    JourneysWarning,
    LogError,
    ShortLogWarning,
)


def rules(**more) -> jn.JourneyRules:
    settings = {"converted": ["joined"], "churned": ["declined"], "silence": "10d"}
    return jn.JourneyRules("customer", "time", "event", **{**settings, **more})


def at(day: float) -> str:
    return str(START + pd.Timedelta(days=day))


PATHS = [["visit", "joined"], ["visit", "price", "declined"], ["visit"]]
DAYS = [[0.0, 1.0], [12.0, 13.0, 14.0], [18.0]]


def tallied(**more) -> jn.Tally:
    return jn.tally(log_of_paths(PATHS, [1, 2, 3], DAYS), rules(**more))


def test_open_moves_is_one_of_two_words() -> None:
    with pytest.raises(ValueError, match="open_moves: got 'dropped'; wanted one of 'censored', 'ignored'"):
        jn.JourneyModel(open_moves="dropped")


@pytest.mark.parametrize("silence", ["18d", "30d"])
def test_log_no_longer_than_its_silence(silence: str) -> None:
    match = f"the log is 18.0 days long, no longer than the silence of {silence[:2]} days, so nobody can be seen to"
    with pytest.raises(LogError, match=match):
        jn.JourneyModel().fit(tallied(silence=silence, complete_history=True))


@pytest.mark.filterwarnings("ignore::journeys.errors.EndNotSeenWarning")
def test_short_log_warns() -> None:
    """18 days are under one and a half silences of 13, and no less than as many of 12."""
    with pytest.warns(ShortLogWarning, match="the log of 18.0 days is shorter than one and a half silences"):
        jn.JourneyModel().fit(tallied(silence="13d", complete_history=True))
    jn.JourneyModel().fit(tallied(silence="12d", complete_history=True))


def test_no_sure_entry() -> None:
    late = "none of 3 journeys has a sure entry .* wanted a log that starts earlier, or complete_history=true"
    with pytest.raises(LogError, match=late):
        jn.JourneyModel().fit(tallied(silence=None))
    early = log_of_paths([["visit", "joined"], ["visit"]], [1, 2], [[0.0, 30.0], [1.0]])
    with pytest.raises(LogError, match="none of 2 journeys has a sure entry"):
        jn.JourneyModel().fit(jn.tally(early, rules(silence="31d", as_of=at(60))))


def test_no_outcome_ever_seen() -> None:
    log = log_of_paths([["visit", "price"], ["visit"]], [1, 2], [[0.0, 1.0], [20.0]])
    match = "no outcome was ever seen: wanted at least one of 'joined', 'declined' among the events; look at the"
    tally = jn.tally(log, rules())
    with pytest.raises(LogError, match=match):
        jn.JourneyModel().fit(tally)
    with pytest.raises(LogError, match=match):
        jn.audit(tally)
    assert issubclass(LogError, JourneysError)
    assert issubclass(LogError, ValueError)


def slow_state(n: int, last: float) -> pd.DataFrame:
    """Return a log in which `basket` is entered late only: seen for at most `last` days."""
    rng = np.random.default_rng(3)
    paths = [["visit", "joined"] if i % 3 else ["visit"] for i in range(n)]
    days = [(rng.uniform(0, 60) + np.arange(len(path))).tolist() for path in paths]
    paths += [["basket", "joined"], ["basket"], ["basket"]]
    days += [[100 - last, 100 - last / 2], [100 - last], [100 - last / 4]]
    return log_of_paths(paths, range(1, n + 4), days)


def test_end_not_seen() -> None:
    match = "no stay in basket was seen as long as the silence: the share that lapses there is an upper bound"
    tally = jn.tally(slow_state(90, 8.0), rules(as_of=at(100)))
    with pytest.warns(EndNotSeenWarning, match=match) as told:
        fit = jn.JourneyModel().fit(tally)
    assert {warning.filename for warning in told} == {__file__}, "the line that asked for the fit is the one shown"
    assert fit.row_flags == {"basket": "end not seen"}
    assert fit.matrix.sum(axis=1).to_numpy() == pytest.approx(1.0, abs=1e-12)
    # What joined on day 4 of three stays, one of them open since 2 days: 1 of 2; the rest counts as lapsed.
    assert fit.matrix.loc["basket", ["joined", "lapsed"]].tolist() == [0.5, 0.5]
    moves = fit.moves().to_frame().set_index("state")["flag"]
    assert moves.loc["basket"].str.contains("end not seen").all()
    assert not moves.loc["visit"].str.contains("end not seen").any()
    ends = jn.outcomes(fit)
    assert "end not seen" in one(ends, "flag", start_state="basket", outcome="joined")
    assert "end not seen" in one(ends, "flag", start_state="entry", outcome="joined"), "3 of 93 pass there"
    assert "end not seen" not in one(ends, "flag", start_state="visit", outcome="joined")
    days = jn.first_passage(fit, "joined", "time")
    assert "end not seen" in one(days, "flag", start_state="basket", measure="mean")
    assert "end not seen" not in one(days, "flag", start_state="visit", measure="mean")
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert jn.JourneyModel(open_moves="ignored").fit(tally).row_flags == {}


def test_a_hundredth_of_the_walks_is_too_little_to_flag() -> None:
    tally = jn.tally(slow_state(600, 8.0), rules(as_of=at(100)))
    with pytest.warns(EndNotSeenWarning):
        fit = jn.JourneyModel().fit(tally)
    ends = jn.outcomes(fit)
    assert one(ends, "flag", start_state="entry", outcome="joined") == ""
    assert "end not seen" in one(ends, "flag", start_state="basket", outcome="joined")


def test_few_seen_to_the_end() -> None:
    tally = jn.tally(slow_state(90, 11.0), rules(as_of=at(100)))
    fit = jn.JourneyModel().fit(tally)
    assert fit.row_flags == {"basket": "few seen to the end"}
    assert "few seen to the end" in one(jn.outcomes(fit), "flag", start_state="basket", outcome="lapsed")


def test_end_not_seen_of_merged_visits() -> None:
    log = log_of_paths(
        [["visit"] * 3 + ["joined"], ["visit"], ["visit"] * 9], [1, 2, 3],
        [[0, 5, 9, 12], [1], list(range(32, 41))],
    )
    tally = jn.tally(log, rules(repeats="merge", complete_history=True, as_of=at(45)))
    match = "visits to visit may last longer than any that was followed: the share that lapses there is an upper bound"
    with pytest.warns(EndNotSeenWarning, match=match):
        fit = jn.JourneyModel().fit(tally)
    # One visit of 12 days joined, one of 11 days lapsed, one is still open after 13: 1/3, 1/3, and who knows.
    assert fit.matrix.loc["visit", "joined"] == pytest.approx(1 / 3, abs=1e-12)
    assert fit.matrix.sum(axis=1).to_numpy() == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize(("n_open", "flags"), [(1, {}), (40, {"visit": "end not seen"})])
def test_one_open_visit_among_many_is_no_end_not_seen(n_open: int, flags: dict[str, str]) -> None:
    """Visits of 12 days that lapse, seen by the dozen; what matters is how many go on for longer than any of them."""
    paths = [["visit"] * 3] * 60 + [["visit", "joined"]] * 60 + [["visit"] * 20] * n_open
    days = [[0.0, 1.0, 2.0]] * 60 + [[1.0, 4.0]] * 60 + [[40.0 + i for i in range(20)]] * n_open
    log = log_of_paths(paths, range(1, len(paths) + 1), days)
    tally = jn.tally(log, rules(repeats="merge", complete_history=True, as_of=at(60)))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore" if flags else "error")
        fit = jn.JourneyModel().fit(tally)
    assert fit.row_flags == flags
    # 60 joined after 3 days, the others lapsed after 12, or are still there after 20: all of these are called lapsed
    assert fit.matrix.loc["visit", "joined"] == pytest.approx(60 / len(paths), abs=1e-12)
    assert fit.matrix.loc["visit", "lapsed"] == pytest.approx(1 - 60 / len(paths), abs=1e-12)


def test_merged_visits_of_the_club_are_seen_to_their_end() -> None:
    """Each state has hundreds of lapses; in none does one visit in a hundred outlast all that were followed."""
    merged = jn.tally(LOG, replace(jn.JourneyRules.from_toml(RULES), repeats="merge"))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        fit = jn.JourneyModel().fit(merged)
    assert fit.row_flags == {}
    # whether a visit is one stay or several makes no difference to where journeys end, but for the model's memory
    ends, plain = (jn.outcomes(one).to_frame().set_index(["start_state", "outcome"]).loc["entry"] for one in (
        fit, club_fit()))  # fmt: skip
    assert (ends.flag == "").all()
    assert ends.estimate.to_numpy() == pytest.approx(plain.estimate.to_numpy(), abs=0.01)


def test_longest_stay_open_without_a_silence() -> None:
    log = log_of_paths(
        [["visit", "joined"], ["visit", "declined"], ["visit", "price"], ["visit", "price", "joined"]], [1, 2, 3, 4],
        [[0, 5], [3, 4], [1, 2], [4, 5, 6]],
    )
    match = "the longest stay in price is still open, so only completed moves are counted there; give a silence"
    with pytest.warns(JourneysWarning, match=match):
        fit = jn.JourneyModel().fit(jn.tally(log, rules(silence=None, complete_history=True)))
    assert fit.row_flags == {"price": "completed moves only"}
    assert fit.matrix.loc["price", "joined"] == 1.0
    assert fit.outcomes == ("joined", "declined"), "nothing lapses without a silence"
    assert "completed moves only" in one(jn.outcomes(fit), "flag", start_state="entry", outcome="joined")
    assert fit.matrix.sum(axis=1).to_numpy() == pytest.approx(1.0, abs=1e-12)


def test_dead_end_of_a_fit() -> None:
    log = log_of_paths([["visit", "joined"], ["visit", "asleep"]], [1, 2], [[0, 1], [0, 1]])
    tally = jn.tally(log, rules(silence=None, complete_history=True))
    with pytest.warns(DeadEndWarning, match="no move out of asleep was seen: taken as never left"):
        fit = jn.JourneyModel(open_moves="ignored").fit(tally)
    assert fit.row_flags == {"asleep": "no move out was seen"}
    assert fit.matrix.loc["asleep", "asleep"] == 1.0
    assert fit.classes.dead_end.tolist() == [name == "asleep" for name in fit.nodes.labels]
    ends = jn.outcomes(fit)
    assert one(ends, start_state="entry", outcome="joined") == 0.5
    assert one(ends, start_state="asleep", outcome="joined") == 0.0
    assert "cannot be reached" in one(ends, "flag", start_state="asleep", outcome="joined")
    assert "no move out was seen" in one(ends, "flag", start_state="entry", outcome="joined")
    with pytest.warns(JourneysWarning) as caught:
        censored = jn.JourneyModel().fit(tally)
    assert {one.category for one in caught} == {JourneysWarning, DeadEndWarning}
    assert censored.matrix.loc["asleep", "asleep"] == 1.0


@pytest.mark.filterwarnings("ignore::journeys.errors.DeadEndWarning")
def test_many_states_are_not_all_named_in_a_warning() -> None:
    names = [f"state {i}" for i in range(8)]
    paths = [["visit", "joined"], *[["visit", name] for name in names]]
    log = log_of_paths(paths, range(1, 10), [[0, 1]] * 9)
    tally = jn.tally(log, rules(silence=None, complete_history=True))
    with pytest.warns(JourneysWarning, match="state 0, state 1, state 2, state 3, state 4 and 3 more is still open"):
        jn.JourneyModel().fit(tally)
