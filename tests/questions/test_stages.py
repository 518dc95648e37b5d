"""Stages: by hand, against plain shares, the chain, closed forms, longer logs, and by group."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

import numpy as np
import pandas as pd
import pytest
import simulated
from scipy import stats

import journeys as jn
from journeys.errors import JourneysWarning, LogError, RulesError
from journeys.kernels.bins import DAY_US, elapsed_edges
from journeys.kernels.intervals import ratio_variance
from journeys.models.stage_stays import stage_rows
from journeys.questions.elapsed import NO_DISTRIBUTION
from journeys.questions.linear import TOO_FEW
from journeys.questions.outcomes import UNREACHABLE
from journeys.questions.stage_rows import ABOVE_ONE, NEVER_SEEN, Share
from journeys.questions.stages_by_log import NOT_TO_THE_END, rows_by_log
from journeys.questions.time_to_convert import TOO_LONG
from journeys.questions.within import BETWEEN_BINS

STAGES = ["price page", "open evening", "basket"]
LONG_AFTER = simulated.log_end(20)

# One journey a letter: the day of each event. What each of them reaches stands in the tests.
STORIES: dict[str, Sequence[tuple[int, str]]] = {
    "a": [(0, "price"), (2, "basket"), (3, "joined")],
    "b": [(0, "price"), (4, "basket"), (5, "left")],
    "c": [(0, "look"), (1, "price"), (2, "joined")],
    "d": [(0, "look")],
    "e": [(0, "basket"), (1, "price"), (3, "basket")],
    "f": [(0, "price"), (1, "look")],
    "g": [(0, "look"), (1, "basket"), (2, "left")],
    "h": [(0, "price"), (6, "basket"), (10, "joined")],
}


def by_hand(*, whole_days: bool = True, times: int = 1, **more: object) -> jn.JourneyFit:
    """Return the fit to the eight stories, each told by so many people, in a log in which all have ended."""
    told = [(who, day, what) for who, story in STORIES.items() for day, what in story]
    rows = [(f"{who}{i}", day, what, who) for who, day, what in told for i in range(times)]
    frame = pd.DataFrame(rows, columns=["who", "day", "what", "story"])
    when = pd.Timestamp("2025-01-01") + pd.to_timedelta(frame.day, unit="D")
    frame["when"] = when.dt.date if whole_days else when.dt.tz_localize("UTC")
    rules = jn.JourneyRules(
        "who", "when", "what", converted="joined", churned="left", silence="30d", complete_history=True,
        as_of="2025-04-01", **{"stages": ["price", "basket"], **more},  # type: ignore[arg-type]
    )  # fmt: skip
    return jn.JourneyModel().fit(jn.tally(frame.drop(columns="day"), rules))


def table(fit: jn.JourneyFit, *args: object, basis: str | None = "log", **kwargs: object) -> pd.DataFrame:
    frame = jn.stages(fit, *args, **kwargs).to_frame()  # type: ignore[arg-type]
    if basis is not None:
        frame = frame[frame.basis == basis]
    return frame.set_index(["stage", "measure", "outcome"] + (["basis"] if basis is None else []))


def went(frame: pd.DataFrame, stage: str, basis: str = "log") -> pd.Series:
    """Return where those in a stage went, by outcome, of a frame as `to_frame` gives it."""
    mine = frame[(frame.stage == stage) & (frame.measure == "went") & (frame.basis == basis)]
    return mine.set_index("outcome").estimate


@cache
def simulated_fit(n: int = 20_000, length: float = 12.0, seed: int = 5) -> jn.JourneyFit:
    return jn.JourneyModel().fit(simulated_tally(n, length, seed))


def simulated_tally(n: int, length: float, seed: int, as_of: pd.Timestamp | None = None, **more: object) -> jn.Tally:
    log = simulated.simulate(n, length, np.random.default_rng(seed))
    rules = jn.JourneyRules(
        "customer", "time", "event", converted="joined", silence="30d", horizons=["10d", "25d"],
        log_start=simulated.LOG_START.isoformat(), as_of=(as_of or simulated.log_end(length)).isoformat(),
        **{"stages": STAGES, "complete_history": True, **more},  # type: ignore[arg-type]
    )  # fmt: skip
    return jn.tally(log, rules)


# --- by hand ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("whole_days", [True, False])
def test_shares_by_hand(*, whole_days: bool) -> None:
    """Price: a b c e f h of eight; basket after it: a b e h; joined after both: a h."""
    found = table(by_hand(whole_days=whole_days)).estimate
    assert found.xs("reached", level="measure").tolist() == pytest.approx([1, 6 / 8, 4 / 8, 2 / 8])
    assert found.xs("of_stage_before", level="measure").tolist() == pytest.approx([6 / 8, 4 / 6, 2 / 4])
    frame = jn.stages(by_hand(whole_days=whole_days)).to_frame()
    for stage, shares in (
        ("entry", {"joined": 0, "left": 1 / 8, "lapsed": 1 / 8, "undecided": 0}),
        ("price", {"joined": 1 / 6, "left": 0, "lapsed": 1 / 6, "undecided": 0}),
        ("basket", {"left": 1 / 4, "lapsed": 1 / 4, "undecided": 0}),
    ):
        assert went(frame, stage).to_dict() == pytest.approx(shares)


@pytest.mark.parametrize("whole_days", [True, False])
def test_medians_by_hand(*, whole_days: bool) -> None:
    """To the price page 0 days for most; on to the basket 2, 4, 2, 6 days; on to joining 1 and 4."""
    frame = table(by_hand(whole_days=whole_days, times=8)).xs("median_days", level="measure").droplevel("outcome")
    # on whole days exact; moments are read off bins 5 % wide
    assert frame.estimate.tolist() == pytest.approx([0, 2, 1], rel=0 if whole_days else 0.05, abs=1e-12)
    assert frame.flag["price"] == ("" if whole_days else "within 1min, shown as 0")
    assert (frame.low[["basket", "converted"]] <= frame.estimate[["basket", "converted"]]).all()
    assert (frame.high[["basket", "converted"]] >= frame.estimate[["basket", "converted"]]).all()


def test_within_by_hand() -> None:
    """Within 3 days of entry: all six see the price, a and e the basket, a joins."""
    found = table(by_hand(), within="3d")
    assert found.estimate.xs("reached", level="measure").tolist() == pytest.approx([1, 6 / 8, 2 / 8, 1 / 8])
    assert found.estimate.xs("of_stage_before", level="measure").tolist() == pytest.approx([6 / 8, 1 / 3, 1 / 2])
    in_the_end = table(by_hand())
    rest = found.index.get_level_values("measure").isin(["went", "median_days"])
    pd.testing.assert_frame_equal(found[rest], in_the_end[rest])


def test_counts_by_hand() -> None:
    frame = table(by_hand())
    assert frame.n_reached.groupby(level="stage", sort=False).agg(["min", "max"]).to_numpy().tolist() == [
        [8, 8], [6, 6], [4, 4], [2, 2],
    ]  # fmt: skip
    assert (frame.n_open == 0).all()


def test_rows_add_up_where_all_have_ended() -> None:
    found, frame = table(by_hand()).estimate, jn.stages(by_hand()).to_frame()
    for stage, after in (("entry", "price"), ("price", "basket"), ("basket", "converted")):
        assert found[(after, "of_stage_before", "")] + went(frame, stage).sum() == pytest.approx(1)


def test_few_are_flagged_and_have_one_exact_bound() -> None:
    row = table(by_hand()).loc[("basket", "of_stage_before", "")]
    assert TOO_FEW in row.flag
    assert row.high == 1
    assert 0 < row.low < row.estimate


def test_order_of_rows_and_keys() -> None:
    frame = jn.stages(by_hand()).to_frame()
    assert list(frame.columns[:4]) == ["stage", "measure", "outcome", "basis"]
    assert frame.stage.drop_duplicates().tolist() == ["entry", "price", "basket", "converted"]
    price = frame[frame.stage == "price"]
    assert price.measure.drop_duplicates().tolist() == ["reached", "of_stage_before", "median_days", "went"]
    ends = price.outcome[price.measure == "went"].drop_duplicates().tolist()
    assert ends == ["joined", "left", "lapsed", "undecided"]
    assert not frame.duplicated(["stage", "measure", "outcome", "basis"]).any()
    assert (frame.outcome != "").equals(frame.measure == "went")


# --- against plain shares ---------------------------------------------------------------------------------


def test_without_censoring_the_ratio_of_two_counts_and_its_variance() -> None:
    """Cochran's variance of a ratio over clusters, here buckets, computed from the table itself."""
    tally = simulated_tally(3_000, 6, 3, as_of=LONG_AFTER)
    rows = tally.table("stages")
    found = table(jn.JourneyModel().fit(tally))
    assert (rows.next != "open").all()
    buckets = np.unique(rows.bucket)
    in_stage = {
        name: rows[rows.stage == name].groupby("bucket").n.sum().reindex(buckets, fill_value=0)
        for name in ("entry", *STAGES)
    }
    for before, name in zip(("entry", *STAGES), STAGES, strict=False):
        for measure, whole in (("reached", "entry"), ("of_stage_before", before)):
            ratio, _, variance = ratio_variance(in_stage[name], in_stage[whole])
            row = found.loc[(name, measure, "")]
            assert row.estimate == pytest.approx(ratio)
            assert row.std_error == pytest.approx(np.sqrt(variance))
    lost = rows[(rows.stage == "open evening") & (rows.next == "lapsed")]
    y = lost.groupby("bucket").n.sum().reindex(buckets, fill_value=0)
    ratio, _, variance = ratio_variance(y, in_stage["open evening"])
    row = found.loc[("open evening", "went", "lapsed")]
    assert (row.estimate, row.std_error) == pytest.approx((ratio, np.sqrt(variance)))


# --- against the chain ------------------------------------------------------------------------------------


@pytest.mark.parametrize("within", [None, "10d", "25d"])
def test_log_and_model_agree_on_a_first_order_log(within: str | None) -> None:
    frame = table(simulated_fit(), within=within, basis=None)
    log, model = frame.xs("log", level="basis"), frame.xs("model", level="basis")
    both = log.index.intersection(model.index)
    log, model = log.loc[both], model.loc[both]
    told = (log.std_error > 0) & (model.std_error > 0)
    assert told.sum() >= 14
    z = (log.estimate - model.estimate)[told] / np.hypot(log.std_error, model.std_error)[told]
    assert z.abs().max() < 3.5
    # the model borrows strength from all moves
    assert (model.std_error[told] < log.std_error[told]).mean() > 0.9


def test_model_recovers_the_truth() -> None:
    matrix = simulated.truth().matrix
    entry = dict(zip(simulated.STATES, simulated.ENTRY.tolist(), strict=True))
    known = jn.JourneyFit.from_matrix(matrix.loc[list(simulated.STATES)], entry=entry)
    truth = table(known, STAGES, basis="model").estimate
    found = table(simulated_fit(), basis="model")
    some = [key for key in truth.index if key[1] in ("reached", "of_stage_before") and key[0] != "entry"]
    some += [("price page", "went", "joined"), ("open evening", "went", "lapsed")]
    z = (found.estimate[some] - truth[some]) / found.std_error[some]
    assert len(some) == 8
    assert z.abs().max() < 3.5
    assert (found.std_error[some] / truth[some] < 0.05).all()


def test_model_rows_of_a_stage_add_up() -> None:
    found, frame = table(simulated_fit(), basis="model").estimate, jn.stages(simulated_fit()).to_frame()
    names = ["entry", *STAGES, "converted"]
    for stage, after in zip(names, names[1:], strict=False):
        total = found[(after, "of_stage_before", "")] + went(frame, stage, "model").sum()
        assert total == pytest.approx(1, abs=1e-9)


def test_log_rows_nearly_add_up_where_some_are_open() -> None:
    found, frame = table(simulated_fit()).estimate, jn.stages(simulated_fit()).to_frame()
    names = ["entry", *STAGES, "converted"]
    for stage, after in zip(names, names[1:], strict=False):
        total = found[(after, "of_stage_before", "")] + went(frame, stage).drop("undecided").sum()
        assert total == pytest.approx(1, abs=0.02)


def test_one_leg_within_a_time_is_the_passage_curve() -> None:
    fit = simulated_fit(3_000, 6.0)
    mine = table(fit, ["open evening"], within="10d", basis="model").loc[("open evening", "reached", "")]
    curve = jn.passage_curve(fit, "open evening").to_frame([10.0]).iloc[0]
    assert mine.estimate == pytest.approx(curve.estimate, abs=2e-4)
    assert mine.std_error == pytest.approx(curve.std_error, rel=0.02)


@pytest.mark.parametrize("whole_days", [True, False])
def test_legs_within_a_time_where_the_last_stage_has_only_one_way(*, whole_days: bool) -> None:
    """If the last stage is reached only through all others, its passage curve is that of the legs added up."""
    rng = np.random.default_rng(11)
    rows = []
    for who in range(400):
        day, at = rng.uniform(0, 200), "a"
        while at:
            rows.append((who, day, at))
            further = {"a": ["a", "b", ""], "b": ["a", "c", "b", ""], "c": ["won", ""], "won": [""]}[at]
            at = further[rng.integers(len(further))]
            day += rng.gamma(2.0, 2.0)
    frame = pd.DataFrame(rows, columns=["who", "day", "what"])
    when = pd.Timestamp("2025-01-01") + pd.to_timedelta((frame.day * 86_400).round(), unit="s")
    frame["when"] = when.dt.date if whole_days else when.dt.tz_localize("UTC")
    rules = jn.JourneyRules("who", "when", "what", converted="won", silence="40d", complete_history=True,
                            as_of="2025-07-20")  # fmt: skip
    fit = jn.JourneyModel().fit(jn.tally(frame.drop(columns="day"), rules))
    mine = table(fit, ["a", "b", "c"], within="15d", basis="model")
    for name, to in (("c", "c"), ("converted", "won")):
        curve = jn.passage_curve(fit, to).to_frame([15.0]).iloc[0]
        row = mine.loc[(name, "reached", "")]
        assert row.estimate == pytest.approx(curve.estimate, abs=2e-4)
        assert row.std_error == pytest.approx(curve.std_error, rel=0.02)


def chain(dwell: object) -> jn.JourneyFit:
    frame = pd.DataFrame(
        [[0, 0.8, 0, 0.2], [0, 0, 0.5, 0.5], [0, 0, 0, 1.0]], index=["a", "b", "c"], columns=["a", "b", "c", "gone"]
    )
    return jn.JourneyFit.from_matrix(frame, dwell=dwell)


def test_known_chain_against_the_hypoexponential() -> None:
    """Two exponential legs of rates 1/2 and 1/5: F = 1 - (r2 exp(-r1 t) - r1 exp(-r2 t)) / (r2 - r1)."""
    fit = chain({"a": stats.expon(scale=2.0), "b": stats.expon(scale=5.0), "c": stats.expon(scale=1.0)})
    r1, r2 = 1 / 2, 1 / 5
    for days in (0.5, 4.0, 30.0):
        found = table(fit, ["b", "c"], within=f"{days}d", basis="model").estimate
        legs = 1 - (r2 * np.exp(-r1 * days) - r1 * np.exp(-r2 * days)) / (r2 - r1)
        assert found[("b", "reached", "")] == pytest.approx(0.8 * (1 - np.exp(-r1 * days)), abs=1e-4)
        assert found[("c", "reached", "")] == pytest.approx(0.4 * legs, abs=1e-4)
    median = table(fit, ["b", "c"], basis="model").estimate[("c", "median_days", "")]
    assert median == pytest.approx(5 * np.log(2), rel=1e-3)


def test_known_chain_on_whole_days_against_the_negative_binomial() -> None:
    """Two geometric legs of p = .3 take 2 + negative binomial days."""
    fit = chain(dict.fromkeys("abc", stats.geom(0.3)))
    found = table(fit, ["b", "c"], within="9d", basis="model").estimate
    assert found[("c", "reached", "")] == pytest.approx(0.4 * stats.nbinom(2, 0.3).cdf(7), abs=1e-6)


def test_known_chain_is_without_uncertainty_and_needs_dwells_for_times() -> None:
    frame = jn.stages(chain(None), ["b", "c"]).to_frame()
    assert (frame.basis == "model").all()
    shares = frame[frame.measure != "median_days"]
    assert (shares.std_error == 0).all()
    assert (shares.low == shares.estimate).all()
    assert frame.loc[frame.measure == "reached", "estimate"].tolist() == pytest.approx([1, 0.8, 0.4, 0.4])
    assert (frame.flag[frame.measure == "median_days"] == NO_DISTRIBUTION).all()
    assert frame[["n_reached", "n_open"]].isna().all(axis=None)
    within = table(chain(None), ["b", "c"], within="3d", basis="model")
    assert within.flag.xs("reached", level="measure").tolist() == ["", *[NO_DISTRIBUTION] * 3]


def test_a_stage_out_of_reach_of_the_chain() -> None:
    found = table(chain(None), ["b", "a"], basis="model")
    assert found.loc[("a", "reached", ""), "estimate"] == 0
    assert found.loc[("a", "reached", ""), "flag"] == UNREACHABLE
    assert found.loc[("a", "of_stage_before", ""), "estimate"] == 0


# --- journeys still under way ------------------------------------------------------------------------------


@cache
def truth_within(days: int) -> dict[str, float]:
    """Plain shares of journeys that began in the first half year of a long log: all are followed for 180 days."""
    tally = simulated_tally(60_000, 12, 77, cohort="month")
    early = tally.where(cohort=(None, "2024-06"))
    rows = early.table("stages")
    edges = elapsed_edges(30 * DAY_US, False, [10 * DAY_US, 25 * DAY_US])
    assert edges is not None
    in_time = edges[rows.bin] <= days * DAY_US
    assert not ((rows.next == "open") & in_time).any()
    began = rows.n[rows.stage == "entry"].sum()
    return {name: float(rows.n[(rows.next == name) & in_time].sum() / began) for name in STAGES}


def test_shares_of_a_short_log_are_those_of_a_long_one() -> None:
    """40 logs of 1.5 silences: the mean share within 25 days is the truth; the plain share is far below it."""
    truth, found, plain = truth_within(25), [], []
    for seed in range(40):
        tally = simulated_tally(1_000, 1.5, 1_000 + seed)
        rows = stage_rows(tally)
        told = rows_by_log(tally, rows, tuple(STAGES), 25 * DAY_US)
        found.append([row.estimate.value[0] for row in told if row.measure == "reached"][1:])
        plain.append((rows.reached() / rows.reached()[0])[1:4])
    mean, error = np.mean(found, axis=0), np.std(found, axis=0) / np.sqrt(40)
    wanted = np.array(list(truth.values()))
    assert (np.abs(mean - wanted) < 3.5 * error + 0.002).all()
    assert (np.mean(plain, axis=0)[1:] < wanted[1:] - 5 * error[1:]).all()


def test_intervals_cover_the_truth() -> None:
    """100 logs of 600 people: the shares within 10 days are covered as often as they say, within chance."""
    truth, wanted = truth_within(10), tuple(STAGES)
    inside = []
    for seed in range(100):
        tally = simulated_tally(600, 2.5, 2_000 + seed)
        told = rows_by_log(tally, stage_rows(tally), wanted, 10 * DAY_US)
        mine = {row.stage: row.estimate.bounds(0.95) for row in told if row.measure == "reached"}
        inside.append([mine[name][0][0] <= truth[name] <= mine[name][1][0] for name in wanted[:2]])
    # 95 % less three standard errors of 100 trials for each; both together not all but always
    assert (np.mean(inside, axis=0) > 0.88).all()
    assert 0.90 < np.mean(inside) < 1.0


def test_flags_of_how_long_journeys_were_followed() -> None:
    fit = jn.JourneyModel().fit(simulated_tally(2_000, 1.5, 9))
    flag = table(fit, within="200d").flag.xs("reached", level="measure").droplevel("outcome")
    assert TOO_LONG in flag["basket"]
    assert table(fit, within="10d").loc[("price page", "reached", ""), "flag"] == ""
    assert table(fit, within="11d").loc[("price page", "reached", ""), "flag"] == BETWEEN_BINS
    tally = simulated_tally(3_000, 6, 3, as_of=LONG_AFTER)
    ended = table(jn.JourneyModel().fit(tally))
    assert not ended.flag.str.contains(NOT_TO_THE_END).any()


def test_open_journeys_are_flagged_and_counted_as_undecided() -> None:
    rows = [("a", 0, "price"), ("b", 0, "price"), ("b", 1, "basket"), ("c", 19, "price"), ("d", 0, "price")]
    frame = pd.DataFrame(rows, columns=["who", "day", "what"])
    frame["when"] = (pd.Timestamp("2025-01-01") + pd.to_timedelta(frame.day, unit="D")).dt.date
    rules = jn.JourneyRules("who", "when", "what", converted="joined", silence=None, complete_history=True,
                            stages=["price", "basket"], as_of="2025-01-21")  # fmt: skip
    with pytest.warns(JourneysWarning):
        fit = jn.JourneyModel().fit_whatever(jn.tally(frame.drop(columns="day"), rules))
    found = table(fit)
    assert found.loc[("price", "went", "undecided"), "estimate"] == 3 / 4
    assert found.loc[("basket", "went", "undecided"), "estimate"] == 1
    # four journeys at risk on day 1, one goes on to the basket
    assert found.loc[("basket", "reached", ""), "estimate"] == 1 / 4
    assert NOT_TO_THE_END in found.loc[("basket", "reached", ""), "flag"]
    assert found.loc[("basket", "reached", ""), ["n_reached", "n_open"]].tolist() == [1, 1]


def test_a_ratio_above_one_is_shown_as_one_and_flagged() -> None:
    """a goes on to the price and the basket; b is last seen before the price: later nobody is short of the basket."""
    rows = [("a", 0, "look"), ("a", 1, "price"), ("a", 9, "basket"), ("b", 16, "look")]
    frame = pd.DataFrame(rows, columns=["who", "day", "what"])
    frame["when"] = (pd.Timestamp("2025-01-01") + pd.to_timedelta(frame.day, unit="D")).dt.date
    rules = jn.JourneyRules("who", "when", "what", converted="joined", silence=None, complete_history=True,
                            stages=["price", "basket"], as_of="2025-01-21")  # fmt: skip
    tally = jn.tally(frame.drop(columns="day"), rules)
    told = rows_by_log(tally, stage_rows(tally), ("price", "basket"), None)
    found = {(row.stage, row.measure): row for row in told}
    assert found["price", "reached"].estimate.value[0] == 0.5
    assert found["basket", "reached"].estimate.value[0] == 1
    ratio = found["basket", "of_stage_before"]
    assert ratio.estimate.value[0] == 1
    assert ABOVE_ONE in ratio.flag


# --- groups -----------------------------------------------------------------------------------------------


def test_groups_add_up_to_the_whole() -> None:
    fit = by_hand(times=6, by=["story"])
    groups = jn.stages(fit, by="story").to_frame()
    groups = groups[(groups.basis == "log") & (groups.measure == "reached")]
    whole = table(fit).xs("reached", level="measure").droplevel("outcome")
    assert groups.groupby("stage").n_reached.sum().to_dict() == whole.n_reached.to_dict()
    began = groups[groups.stage == "entry"].set_index("story").n_reached
    groups = groups.assign(mine=groups.estimate * groups.story.map(began))
    assert (groups.groupby("stage").mine.sum() / began.sum()).to_dict() == pytest.approx(whole.estimate.to_dict())
    told = groups.set_index(["story", "stage"]).estimate
    assert told.unstack("stage").loc["c"].to_dict() == {"entry": 1, "price": 1, "basket": 0, "converted": 0}
    d = jn.stages(fit, by="story").to_frame().query("story == 'd' and stage == 'basket'")
    assert d.flag.str.contains(NEVER_SEEN).all()


def test_by_period_counts_a_stage_in_the_period_its_journey_began_in() -> None:
    tally = simulated_tally(4_000, 8, 21, split_at=["2024-04-01"])
    frame = jn.stages(jn.JourneyModel().fit(tally), by="period", within="10d").to_frame()
    entry = frame[(frame.stage == "entry") & (frame.measure == "reached") & (frame.basis == "log")]
    assert entry.n_reached.sum() == tally.n_journeys
    shares = frame[(frame.stage == "price page") & (frame.measure == "reached") & (frame.basis == "log")]
    assert len(shares) == 2
    assert np.diff(shares.estimate)[0] == pytest.approx(0, abs=4 * np.hypot(*shares.std_error))


# --- odd ones and refusals ---------------------------------------------------------------------------------


def test_a_stage_never_seen() -> None:
    frame = jn.stages(by_hand(stages=["price", "gift", "basket"])).to_frame()
    for basis in ("log", "model"):
        mine = frame[(frame.basis == basis) & (frame.measure != "went")].set_index(["stage", "measure"])
        for stage in ("gift", "basket", "converted"):
            assert mine.estimate[stage, "reached"] == 0
            assert NEVER_SEEN in mine.flag[stage, "reached"]
        assert np.isnan(mine.estimate["basket", "of_stage_before"])
        assert went(frame, "price", basis).sum() == pytest.approx(1)
    later = frame[frame.stage.isin(["gift", "basket", "converted"])]
    assert later.flag.str.contains(NEVER_SEEN).all()
    assert (later.n_reached == 0).all()
    assert later.groupby("stage").size().to_dict() == {"gift": 13, "basket": 11, "converted": 6}


def test_a_first_stage_never_seen() -> None:
    frame = jn.stages(by_hand(stages=["gift"])).to_frame()
    assert (frame.estimate[(frame.measure == "reached") & (frame.stage != "entry")] == 0).all()
    assert went(frame, "entry", "model").sum() == pytest.approx(1)
    assert went(frame, "entry").to_dict() == pytest.approx(
        {"joined": 3 / 8, "left": 2 / 8, "lapsed": 3 / 8, "undecided": 0}
    )


def test_without_a_converted_outcome_the_last_stage_is_the_last() -> None:
    rules = jn.JourneyRules("who", "when", "what", churned=["left", "joined"], silence="30d", complete_history=True,
                            stages=["price", "basket"], as_of="2025-04-01")  # fmt: skip
    rows = [(who, pd.Timestamp("2025-01-01") + pd.Timedelta(days=day), what)
            for who, story in STORIES.items() for day, what in story]  # fmt: skip
    log = pd.DataFrame(rows, columns=["who", "when", "what"])
    frame = jn.stages(jn.JourneyModel().fit(jn.tally(log, rules))).to_frame()
    assert frame.stage.iloc[-1] == "basket"
    expected = {"left": 1 / 4, "joined": 2 / 4, "lapsed": 1 / 4, "undecided": 0}
    assert went(frame, "basket").to_dict() == pytest.approx(expected)
    assert went(frame, "basket", "model").sum() == pytest.approx(1)


def test_other_stages_than_were_counted_have_model_rows_only() -> None:
    frame = jn.stages(by_hand(), ["basket", "price"]).to_frame()
    assert (frame.basis == "model").all()
    assert frame.n_reached.isna().all()
    same = jn.stages(by_hand(), ["price", "basket"]).to_frame()
    pd.testing.assert_frame_equal(same, jn.stages(by_hand()).to_frame())


def test_refusals() -> None:
    fit = by_hand()
    with pytest.raises(RulesError, match=r"rules have none; name them in the rules, JourneyRules\(stages="):
        jn.stages(by_hand(stages=[]))
    with pytest.raises(RulesError, match="a known chain has none of its own"):
        jn.stages(chain(None))
    with pytest.raises(ValueError, match=r"stages: got 'baskett', which is no state .* 'basket'"):
        jn.stages(fit, ["price", "baskett"])
    with pytest.raises(ValueError, match="stages: got 'joined', an outcome"):
        jn.stages(fit, ["price", "joined"])
    with pytest.raises(ValueError, match="'price' twice"):
        jn.stages(fit, ["price", "price"])
    with pytest.raises(ValueError, match="stages: got none"):
        jn.stages(fit, [])
    with pytest.raises(ValueError, match="within"):
        jn.stages(fit, within="soon")
    with pytest.raises(ValueError, match="confidence_level"):
        jn.stages(fit, confidence_level=95)
    with pytest.raises(LogError, match="this chain was given"):
        jn.stages(chain(None), ["b"], by="story")
    with pytest.raises(ValueError, match="by: got 'country'"):
        jn.stages(by_hand(by=["story"]), by="country")


def test_products_and_ratios_of_shares_have_the_influence_of_their_parts() -> None:
    rng = np.random.default_rng(2)
    a, b, da, db = 0.6, 0.3, rng.normal(size=5), rng.normal(size=5)
    first, second, eps = Share(a, da, 10), Share(b, db, 10), 1e-7
    moved = (a + eps * da) * (b + eps * db)
    assert first.times(second).influence == pytest.approx((moved - a * b) / eps, rel=1e-5, abs=1e-6)
    moved = (b + eps * db) / (a + eps * da)
    assert second.over(first, 10).influence == pytest.approx((moved - b / a) / eps, rel=1e-5, abs=1e-6)


def test_other_levels_and_text() -> None:
    answer = jn.stages(simulated_fit(3_000, 6.0))
    wide, narrow = answer.confidence_interval(0.99), answer.confidence_interval(0.5)
    has = narrow.high.notna() & (narrow.low < narrow.high)
    assert has.sum() > 20
    assert ((wide.high - wide.low)[has] > (narrow.high - narrow.low)[has]).all()
    assert answer.summary().startswith("Stages, intervals at 95 %")
