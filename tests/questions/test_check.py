"""Whether to believe a fit: both sides by other means, laws that hold and laws that are broken, what cannot be run."""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations

import numpy as np
import pandas as pd
import processes
import pytest
import slow_sums
from small_chains import START, one

import journeys as jn
from journeys.errors import LogError
from journeys.questions.check import CheckResult
from journeys.questions.check_log import BUSY
from journeys.questions.check_rows import CheckRow
from journeys.questions.check_ways import way_rows
from journeys.tally.tables import KEYS

TESTS = ("days to convert", "steps to convert", "curve of conversion", "touchpoints of conversions", "memory")


def fitted(process: str, n: int, silences: float, seed: int, order: int = 1, **more: object) -> jn.JourneyFit:
    log = processes.simulate(process, n, silences, np.random.default_rng(seed))
    rules = processes.rules_of(silences, complete_history=True, **more)
    return jn.JourneyModel(order=order).fit(jn.tally(log, rules, order=order))


def of_paths(paths: list[list[str]], **more: object) -> jn.JourneyFit:
    """Return the fit to paths, one step a day, a customer each, told to the end, the sides of the street by turns."""
    rows = [
        (who, START + pd.Timedelta(days=day), event, f"side {who % 2}")
        for who, path in enumerate(paths)
        for day, event in enumerate(path)
    ]
    frame = pd.DataFrame(rows, columns=["who", "when", "what", "side"]).sort_values("when", kind="stable")
    settings = {"complete_history": True, "as_of": "2025-12-01", "touchpoints": "all", "silence": "30d"} | more
    rules = jn.JourneyRules("who", "when", "what", converted="joined", churned="left", **settings)  # type: ignore[arg-type]
    return jn.JourneyModel().fit(jn.tally(frame, rules))


def verdicts(result: CheckResult) -> dict[str, str]:
    return dict(zip(result.keys["check_name"], result.to_frame()["verdict"], strict=True))


# --- both sides -------------------------------------------------------------------------------------------


def test_the_model_in_the_long_run_is_what_first_passage_says() -> None:
    """Journeys all told to the end: within the last time followed is nearly ever."""
    fit = fitted("one step", 1_500, 14.0, 4)
    frame = jn.check(fit).to_frame().set_index("check_name")
    for name, clock in (("days to convert", "time"), ("steps to convert", "steps")):
        passage = jn.first_passage(fit, clock=clock, method="linearised")
        mean = one(passage, "estimate", start_state="entry", measure="mean")
        told = float(frame.loc[name, "compared"].split("model ")[1].split(",")[0])
        assert told == pytest.approx(mean, rel=0.01)
    effects = jn.removal(fit).to_frame().set_index("touchpoint")
    name = frame.loc["touchpoints of conversions", "about"]
    told = float(frame.loc["touchpoints of conversions", "compared"].split("model ")[1].split(" %")[0])
    assert told == pytest.approx(100 * effects.loc[name, "estimate"], abs=0.5)


def test_the_log_is_its_journeys_weighted_slowly() -> None:
    log, journeys = slow_sums.told_log(900, np.random.default_rng(25))
    fit = jn.JourneyModel().fit(jn.tally(log, slow_sums.rules()))
    frame = jn.check(fit).to_frame().set_index("check_name")
    last = float(frame.loc["days to convert", "compared"].split("within ")[1].split(" days")[0])
    won = np.array([each.outcome == "joined" and each.elapsed <= last for each in journeys])
    jump = slow_sums.jumps(journeys, np.ones(len(journeys))) * won
    for name, each in (
        ("days to convert", [each.elapsed for each in journeys]),
        ("steps to convert", [len(each.path) + 1 for each in journeys]),
    ):
        log_side = float(frame.loc[name, "compared"].split("log ")[1].split()[0])
        assert log_side == pytest.approx(float(jump @ np.array(each) / jump.sum()), rel=0.006)
    touch = frame.loc["touchpoints of conversions"]
    passed = np.array([touch["about"] in each.path for each in journeys])
    log_side = float(touch["compared"].split("log ")[1].split()[0])
    assert log_side == pytest.approx(100 * float(jump @ passed / jump.sum()), abs=0.06)


def without(tally: jn.Tally, group: int) -> jn.Tally:
    """Return a tally without the customers of each twentieth bucket."""
    tables = {}
    for name in KEYS:
        table = getattr(tally, name)
        keep = table["bucket"] % 20 != group
        tables[name] = {column: values[keep] for column, values in table.items()}
    gone = np.arange(len(tally.customers["people"])) % 20 == group
    customers = {
        name: values if name == "bucket" else np.where(gone, 0, values) for name, values in tally.customers.items()
    }
    return replace(tally, customers=customers, **tables)


def test_standard_errors_are_those_of_a_jackknife_over_groups_of_buckets() -> None:
    """M. H. Quenouille, Biometrika 43 (1956) 353-360, leaving out a twentieth at a time; its own noise is 16 %."""
    fit = fitted("copied", 1_500, 4.0, 6)
    assert fit.tally is not None
    codes = np.array([fit.tally.labels.index("joined")])

    def days_and_steps(tally: jn.Tally) -> list[CheckRow]:
        return way_rows(jn.JourneyModel().fit(tally), None, codes, np.random.default_rng(1))[:2]

    parts = [days_and_steps(without(fit.tally, group)) for group in range(20)]
    for i, row in enumerate(days_and_steps(fit.tally)):
        values = np.array([part[i].size for part in parts])
        jackknife = np.sqrt(19 / 20 * ((values - values.mean()) ** 2).sum())
        assert row.std_error == pytest.approx(jackknife, rel=0.4)


# --- laws that hold, and laws that are broken --------------------------------------------------------------


@pytest.mark.parametrize("process", ["one step", "copied"])
def test_a_right_chain_is_believed(process: str) -> None:
    result = jn.check(fitted(process, 2_000, 3.0, 17))
    found = verdicts(result)
    assert {found[name] for name in TESTS} == {"agrees"}
    assert not len(result.differing)
    assert found["between groups"] == "not run: the rules do not group journeys"
    assert (result.to_frame().loc[lambda frame: frame["verdict"] == "agrees", "advice"] == "").all()


@pytest.mark.parametrize(
    ("process", "wrong"),
    [
        ("two steps .8", {"memory"}),
        ("movers and stayers", {"memory", "steps to convert"}),
        ("tempi", {"curve of conversion"}),
    ],
)
def test_a_wrong_chain_is_found_out(process: str, wrong: set[str]) -> None:
    result = jn.check(fitted(process, 3_000, 6.0, 5))
    assert wrong <= set(result.differing["check_name"])
    assert (result.differing["advice"] != "").all()
    assert (result.differing["p_value_corrected"] < 0.05).all()


def test_touchpoints_that_the_chain_cannot_tell_apart() -> None:
    """Of those at the fair, nobody who came from the street joins, and eight in ten who came by post."""
    rng = np.random.default_rng(2)
    paths = []
    for who in range(400):
        joins = rng.random() < (0.8 if who % 2 else 0.0)
        paths.append(["post" if who % 2 else "street", "fair", "joined" if joins else "left"])
    row = jn.check(of_paths(paths)).differing.set_index("check_name").loc["touchpoints of conversions"]
    assert row["about"] in ("post", "street")
    assert abs(row["estimate"]) == pytest.approx(50.0)
    assert row["verdict"].startswith("differs: by the model ")


def test_one_state_more_of_memory_mends_it() -> None:
    """With two states of the past the law of two steps is the fit's own."""
    found = verdicts(jn.check(fitted("two steps .8", 2_500, 5.0, 8, order=2)))
    assert {found[name] for name in TESTS} == {"agrees"}


def test_groups_and_times_that_differ() -> None:
    rng = np.random.default_rng(9)
    paths = [
        ["post", "fair", "joined" if rng.random() < (0.7 if who % 2 else 0.3) else "left"] for who in range(400)
    ]
    frame = jn.check(of_paths(paths, by="side")).to_frame().set_index(["check_name", "about"])
    row = frame.loc[("between groups", "side")]
    assert row["verdict"] == "differs: moves are not the same for all of side"
    assert "from fair to " in row["compared"]
    assert abs(row["estimate"]) == pytest.approx(20.0, abs=5.0)
    each = jn.check(of_paths(paths, by="side"), by="side").to_frame()
    assert each["side"].unique().tolist() == ["side 0", "side 1"]
    assert not each["verdict"].str.startswith("differs").any()


@pytest.mark.parametrize("rule", [{"cohort": "week"}, {"split_at": ["2025-03-01"]}])
def test_earlier_and_later(rule: dict[str, object]) -> None:
    """People who come from March on join more readily."""
    rng = np.random.default_rng(10)
    rows = []
    for who in range(500):
        begin = pd.Timestamp("2025-01-01", tz="UTC") + pd.Timedelta(days=int(rng.integers(0, 120)))
        path = ["fair", "joined" if rng.random() < (0.7 if begin.month > 2 else 0.3) else "left"]
        path = path[:1] if who % 20 == 0 else path
        rows += [(who, begin + pd.Timedelta(days=day), event) for day, event in enumerate(path)]
    log = pd.DataFrame(rows, columns=["who", "when", "what"]).sort_values("when", kind="stable")
    rules = jn.JourneyRules(
        "who", "when", "what", converted="joined", churned="left", silence="10d", complete_history=True,
        as_of="2025-06-01", **rule,  # type: ignore[arg-type]
    )  # fmt: skip
    result = jn.check(jn.JourneyModel().fit(jn.tally(log, rules)))
    assert verdicts(result)["earlier and later"].startswith("differs: moves are not the same for all of ")
    assert "split_at" in one(result, "advice", check_name="earlier and later")


# --- what the log is like ---------------------------------------------------------------------------------


def test_journeys_of_one_customer_by_pairs() -> None:
    rng = np.random.default_rng(3)
    rows, by_customer = [], []
    for who in range(150):
        readily, day, ends = rng.random(), 0, []
        for _ in range(int(rng.integers(1, 5))):
            ends.append(bool(rng.random() < readily))
            rows += [(who, day, "fair"), (who, day + 1, "joined" if ends[-1] else "left")]
            day += 3
        by_customer.append(np.array(ends, float))
    log = pd.DataFrame(rows, columns=["who", "day", "what"])
    log["when"] = START + pd.to_timedelta(log["day"], unit="D")
    rules = jn.JourneyRules(
        "who", "when", "what", converted="joined", churned="left", silence="30d", complete_history=True,
        as_of="2025-12-01",
    )  # fmt: skip
    result = jn.check(jn.JourneyModel().fit(jn.tally(log.sort_values("when", kind="stable"), rules)))
    p = np.concatenate(by_customer).mean()
    pairs = [(a - p) * (b - p) for ends in by_customer for a, b in combinations(ends, 2)]
    expected = float(np.mean(pairs)) / (p * (1 - p))
    assert one(result, "estimate", check_name="journeys of one customer") == pytest.approx(expected)
    assert verdicts(result)["journeys of one customer"].startswith("note: some customers convert again and again")
    clusters = np.array([len(ends) * (ends.mean() - p) for ends in by_customer])
    effect = float((clusters**2).sum() / (sum(map(len, by_customer)) * p * (1 - p)))
    # buckets hold a few customers each, which adds noise
    assert one(result, "estimate", check_name="design effect") == pytest.approx(effect, rel=0.25)


def test_a_robot_is_noted() -> None:
    rng = np.random.default_rng(6)
    paths = [["fair", "club", "joined" if rng.random() < 0.5 else "left"] for _ in range(100)]
    assert verdicts(jn.check(of_paths(paths)))["without the busy"] == "nothing to note"
    robot = ["fair", "club"] * BUSY
    rows = [(who, START + pd.Timedelta(days=i), name) for who, path in enumerate(paths) for i, name in enumerate(path)]
    rows += [(1_000, START + pd.Timedelta(minutes=i), event) for i, event in enumerate(robot)]
    log = pd.DataFrame(rows, columns=["who", "when", "what"]).sort_values("when", kind="stable")
    rules = jn.JourneyRules(
        "who", "when", "what", converted="joined", churned="left", silence="30d", complete_history=True,
        as_of="2025-12-01",
    )  # fmt: skip
    result = jn.check(jn.JourneyModel().fit(jn.tally(log, rules)))
    told = one(result, "compared", check_name="without the busy")
    assert told.endswith("without 1,001 moves made after a customer's first 1,000 events")
    # without these the robot is a visitor who has not ended, else one more who lapses after many visits
    assert one(result, "estimate", check_name="without the busy") == pytest.approx(-0.46, abs=0.02)


def test_ties_undecided_and_unsure_are_noted() -> None:
    log = processes.simulate("one step", 400, 1.5, np.random.default_rng(2), running=True)
    log["time"] = log["time"].dt.floor("D")
    fit = jn.JourneyModel().fit(jn.tally(log, processes.rules_of(1.5)))
    found = verdicts(jn.check(fit))
    assert "in an order that only the file knows" in found["ties"]
    assert found["undecided journeys"].startswith("note: ")
    assert found["unsure entries"].startswith("note: where journeys begin is known of only")
    # whoever has two decided journeys by now did not lapse twice, so they are a choice of customers
    assert found["journeys of one customer"] == "not run: in a log of under two silences nobody can have lapsed twice"


# --- what cannot be run, and what is refused --------------------------------------------------------------


def test_what_cannot_be_run_says_why() -> None:
    found = verdicts(jn.check(of_paths([["fair", "joined"]] * 11 + [["fair", "left"]] * 9, touchpoints=())))
    why = "not run: 11 conversions of journeys whose start was seen, fewer than 20"
    assert {found[name] for name in TESTS[:4]} == {why}
    assert found["memory"].startswith("not run: ")
    assert found["enough events"] == "note: only 9 journeys that ended without converting"
    one_customer = pd.DataFrame(
        [(1, START + pd.Timedelta(days=day), ("fair", "joined")[day % 2]) for day in range(60)],
        columns=["who", "when", "what"],
    )
    rules = jn.JourneyRules("who", "when", "what", converted="joined", silence="30d", complete_history=True)
    alone = verdicts(jn.check(jn.JourneyModel().fit(jn.tally(one_customer, rules))))
    assert {alone[name] for name in TESTS[:4]} == {"not run: fewer than 10 groups of customers to tell chance by"}
    many = verdicts(jn.check(of_paths([["fair", "joined"], ["fair", "left"]] * 50, touchpoints=())))
    assert many["touchpoints of conversions"] == "not run: no touches were counted"
    assert many["days to convert"] == "agrees"
    assert many["steps to convert"] == "not run: there is nothing in it that varies from customer to customer"


def test_whole_days() -> None:
    log, _ = slow_sums.told_log(900, np.random.default_rng(25))
    found = verdicts(jn.check(jn.JourneyModel().fit(jn.tally(log, slow_sums.rules()))))
    assert all(not found[name].startswith("not run") for name in TESTS)


def test_as_other_answers() -> None:
    fit = fitted("one step", 300, 3.0, 1)
    result, again = jn.check(fit), jn.check(fit)
    pd.testing.assert_frame_equal(result.to_frame(), again.to_frame())
    frame = result.to_frame()
    assert list(frame.columns) == [
        "check_name", "about", "estimate", "std_error", "low", "high", "confidence_level", "unit", "compared",
        "p_value", "p_value_corrected", "verdict", "advice", "flag",
    ]  # fmt: skip
    assert (frame["verdict"] != "").all()
    narrow = result.confidence_interval(0.5)
    assert (narrow["low"].dropna() >= frame["low"].dropna()).all()
    assert "steps to convert" in result.summary()
    assert repr(result) == f"<CheckResult: {len(frame)} rows at 95 % confidence>"


def test_refusals() -> None:
    chain = pd.DataFrame([[0.0, 0.5, 0.5]], index=["fair"], columns=["fair", "joined", "left"])
    known = jn.JourneyFit.from_matrix(chain)
    with pytest.raises(LogError, match="this chain was given, not fitted to a log"):
        jn.check(known)
    fit = of_paths([["fair", "joined"], ["fair", "left"]] * 20)
    with pytest.raises(LogError, match="this chain was changed by hand"):
        jn.check(fit.with_move("fair", "joined", 0.01))
    with pytest.raises(ValueError, match="to='fair' has a state in it; wanted outcomes"):
        jn.check(fit, to="fair")
    with pytest.raises(ValueError, match="side"):
        jn.check(fit, by="side")
    with pytest.raises(ValueError, match="confidence_level"):
        jn.check(fit, confidence_level=2.0)
