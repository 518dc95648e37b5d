"""Credit by the log: by hand, a slow second implementation, the removal game, closed forms, coverage, refusals."""

from __future__ import annotations

from functools import cache
from itertools import permutations
from typing import Any

import numpy as np
import pandas as pd
import pytest
import simulated
import slow_sums
from small_chains import column, one

import journeys as jn
from journeys.errors import LogError

NONE = "none of them"
# One letter a day; "+" joins, "-" declines.
STORIES = {1: "ABA+", 2: "C-", 3: "BA+", 4: "+", 5: "ACB+", 6: "C+", 7: "AB"}


def told(stories: dict[Any, str], paid: dict[str, float] | None = None, **more: Any) -> jn.JourneyFit:
    """Return the fit to stories told to the end: half a year passes after them."""
    names = {"+": "joined", "-": "declined"}
    rows = [
        (str(customer), pd.Timestamp("2025-01-01", tz="UTC") + pd.Timedelta(days=day), names.get(letter, letter))
        for customer, story in stories.items()
        for day, letter in enumerate(story)
    ]
    frame = pd.DataFrame(rows, columns=["who", "when", "what"])
    # an amount is paid by a customer at the first event
    amounts = frame["who"].map(paid or {}).fillna(0.0)
    frame["amount"] = np.where(frame.groupby("who").cumcount() == 0, amounts, 0.0)
    frame["country"] = np.where(frame["who"].str.startswith("b"), "BE", "NL")
    rules = jn.JourneyRules(
        "who", "when", "what", converted="joined", churned="declined", silence="30d",
        **{"as_of": "2025-07-01", "complete_history": True, "touchpoints": ["C", "A", "B"]} | more,
    )  # fmt: skip
    return jn.JourneyModel().fit(jn.tally(frame, rules))


def shares(fit: jn.JourneyFit, rule: str, names: str, **more: Any) -> list[float]:
    frame = jn.credit(fit, rule=rule, **more).to_frame()
    assert set(frame["touchpoint"]) == {*names, NONE}
    return frame.set_index("touchpoint")["estimate"].loc[[*names, NONE]].tolist()


def test_by_hand() -> None:
    """Five conversions: ABA, BA, none, ACB, C."""
    fit = told(STORIES, touchpoints=["C", "A", "B", "Q"])
    third = 1 / 3
    even = [1 / 2 + 1 / 2 + third, 1 / 2 + 1 / 2 + third, third + 1, 0, 1]
    assert shares(fit, "even", "ABCQ") == pytest.approx(np.array(even) / 5, rel=1e-12)
    assert shares(fit, "first", "ABCQ") == pytest.approx([2 / 5, 1 / 5, 1 / 5, 0, 1 / 5], rel=1e-12)
    assert shares(fit, "last", "ABCQ") == pytest.approx([2 / 5, 1 / 5, 1 / 5, 0, 1 / 5], rel=1e-12)
    frame = jn.credit(fit, rule=["even", "first", "last"]).to_frame()
    assert frame.columns.tolist()[:4] == ["touchpoint", "rule", "basis", "estimate"]
    assert frame["touchpoint"].tolist() == ["C", "A", "B", "Q", NONE] * 3
    assert frame["rule"].tolist() == ["even"] * 5 + ["first"] * 5 + ["last"] * 5
    assert (frame["basis"] == "log").all()
    assert (frame["flag"] == "too few").all()
    # of those who declined, all touched C
    assert shares(fit, "last", "ABCQ", to="declined") == [0, 0, 1, 0, 0]
    assert shares(fit, "last", "ABCQ", to="lapsed") == [0, 1, 0, 0, 0]


def test_some_of_the_touchpoints() -> None:
    """Among A and C alone: A, A, none, half and half, C."""
    fit = told(STORIES)
    assert shares(fit, "even", "AC", touchpoints=["C", "A"]) == pytest.approx([2.5 / 5, 1.5 / 5, 1 / 5], rel=1e-12)
    assert shares(fit, "even", "C", touchpoints="C") == pytest.approx([2 / 5, 3 / 5], rel=1e-12)
    # all of them by name is as counted
    assert shares(fit, "even", "ABC", touchpoints=["A", "B", "C"]) == shares(fit, "even", "ABC")


def test_a_touchpoint_nobody_meets_gets_nothing() -> None:
    fit = told({f"{i}": "A+" for i in range(60)} | {"Q": "Q-"}, touchpoints=["A", "Q", "never"])
    frame = jn.credit(fit, rule=("even", "first", "last")).to_frame()
    for name in ("Q", "never"):
        mine = frame[frame["touchpoint"] == name]
        assert (mine["estimate"] == 0).all()
        # none of sixty: one exact bound
        assert mine["high"].to_numpy() == pytest.approx(1 - 0.05 ** (1 / 60), rel=1e-9)
    assert (frame.loc[frame["touchpoint"] == "A", "estimate"] == 1).all()


def test_even_is_the_shapley_value_of_the_removal_game() -> None:
    """L. S. Shapley, in Contributions to the Theory of Games II, Princeton 1953: the mean over all orders of what each
    adds, the worth of a set being the conversions that touch nothing outside of it.
    """
    stories = {1: "ABA+", 2: "BC+", 3: "D+", 4: "+", 5: "ACBD+", 6: "C+", 7: "AB", 8: "DDA+", 9: "B-"}
    touched = [frozenset(story[:-1]) for story in stories.values() if story.endswith("+")]

    def worth(there: frozenset[str]) -> int:
        return sum(each <= there for each in touched)

    added = dict.fromkeys("ABCD", 0.0)
    orders = list(permutations("ABCD"))
    for order in orders:
        for i, name in enumerate(order):
            added[name] += worth(frozenset(order[: i + 1])) - worth(frozenset(order[:i]))
    wanted = [added[name] / len(orders) / len(touched) for name in "ABCD"]
    found = shares(told(stories, touchpoints="all"), "even", "ABCD")
    assert found == pytest.approx([*wanted, worth(frozenset()) / len(touched)], rel=1e-12)


@cache
def slow_case() -> tuple[list[slow_sums.Told], jn.JourneyFit]:
    log, journeys = slow_sums.told_log(900, np.random.default_rng(5))
    return journeys, jn.JourneyModel().fit(jn.tally(log, slow_sums.rules()))


def portions(path: str, rule: str) -> list[float]:
    """Return what A, B, C and none of them get of one journey."""
    if not path:
        return [0, 0, 0, 1]
    if rule == "even":
        return [(name in path) / len(set(path)) for name in "ABC"] + [0]
    return [float(path[0 if rule == "first" else -1] == name) for name in "ABC"] + [0]


@pytest.mark.parametrize(
    ("rule", "weight"), [(r, "conversions") for r in ("even", "first", "last")] + [("even", "value")]
)
def test_against_a_slow_second_implementation(rule: str, weight: str) -> None:
    """Weights by their definition, and standard errors from numerical derivatives by bucket."""
    journeys, fit = slow_case()
    assert 30 < sum(one.outcome == slow_sums.OPEN for one in journeys) < 300
    parts = np.array([portions(one.path, rule) for one in journeys])
    won = np.array([one.outcome == "joined" for one in journeys]) * 1.0
    if weight == "value":
        won *= [one.worth for one in journeys]

    def answer(times: np.ndarray) -> np.ndarray:
        jump = slow_sums.jumps(journeys, times) * won
        return jump @ parts / jump.sum()

    result = jn.credit(fit, rule=rule, weight=weight)
    found = column(result, "estimate", "touchpoint", [*"ABC", NONE])
    assert found == pytest.approx(answer(np.ones(len(journeys))), rel=1e-9, abs=1e-12)
    error = column(result, "std_error", "touchpoint", [*"ABC", NONE])
    assert error == pytest.approx(slow_sums.std_errors(journeys, answer), rel=1e-5, abs=1e-9)
    # without the weights the open journeys would count as if they were never there
    plain = won @ parts / won.sum()
    assert np.abs(plain - found)[:3].max() > 0.01


def test_open_journeys_do_not_bias_it() -> None:
    """Each joins after two visits: to A, an hour apart, or to B, twenty days apart, but every seventh of B stays away.
    The log ends amid.
    """
    rng = np.random.default_rng(8)
    start = pd.Timestamp("2025-01-01", tz="UTC")
    began = rng.uniform(0, 60, 6000)
    rows = []
    for who, day in enumerate(began):
        name, later = ("A", 1 / 24) if who % 2 else ("B", 20.0)
        story = [(who, day, name), (who, day + later, name), (who, day + 2 * later, "joined")]
        rows += story[:1] if who % 14 == 0 else story
    frame = pd.DataFrame(rows, columns=["who", "day", "what"])
    frame = frame[frame["day"] <= 60]
    frame["when"] = start + pd.to_timedelta((frame["day"] * 86_400e6).astype("int64"), unit="us")
    rules = jn.JourneyRules("who", "when", "what", converted="joined", silence="30d", complete_history=True,
                            log_start=start, as_of=start + pd.Timedelta(days=60), touchpoints=["A", "B"])  # fmt: skip
    fit = jn.JourneyModel().fit(jn.tally(frame, rules))
    result = jn.credit(fit)
    joined = frame[frame["what"] == "joined"]["who"]
    truth = 7 / 13
    assert (joined % 2).mean() > 0.7
    assert one(result, "low", touchpoint="A") < truth < one(result, "high", touchpoint="A")
    assert one(result, "std_error", touchpoint="A") < 0.015


def test_parts_add_up_to_one_and_tallies_merge() -> None:
    log, _ = slow_sums.told_log(400, np.random.default_rng(6))
    whole = jn.tally(log, slow_sums.rules())
    parts = jn.tally(log[log["who"] % 3 == 0], slow_sums.rules()) + jn.tally(
        log[log["who"] % 3 != 0], slow_sums.rules()
    )
    for weight, rules in (("conversions", ("even", "first", "last")), ("value", ("even",))):
        told_once, told_twice = (
            jn.credit(jn.JourneyModel().fit(tally), rule=rules, weight=weight).to_frame() for tally in (whole, parts)
        )
        pd.testing.assert_frame_equal(told_once, told_twice)
        assert told_once.groupby("rule")["estimate"].sum().to_numpy() == pytest.approx(1.0, abs=1e-12)


def test_more_than_fifteen_touchpoints() -> None:
    stories = {f"{i}": f"{chr(97 + i % 20)}{chr(97 + i * 7 % 20)}+" for i in range(100)}
    fit = told(stories, touchpoints="all")
    frame = jn.credit(fit).to_frame()
    assert len(frame) == 21
    assert frame["estimate"].sum() == pytest.approx(1.0, abs=1e-12)
    with pytest.raises(ValueError, match='touchpoints: 20 states; wanted at most 15 named.*or basis="log"'):
        jn.credit(fit, basis="model")
    with pytest.raises(LogError, match="touchpoints: 20 are named in the rules, and for more than 15"):
        jn.credit(fit, touchpoints=["a", "b"])


def test_log_and_model_in_one_table() -> None:
    fit = told(STORIES)
    frame = jn.credit(fit, rule=("even", "last"), basis=("log", "model")).to_frame()
    assert frame[["rule", "basis"]].drop_duplicates().values.tolist() == [
        ["even", "log"], ["last", "log"], ["even", "model"],
    ]  # fmt: skip
    assert frame.groupby(["rule", "basis"])["estimate"].sum().to_numpy() == pytest.approx(1.0, abs=1e-12)


def test_value_by_hand() -> None:
    """Worth of conversions: ABA 90, BA 30, none 10, ACB 60, C 10; paid back below."""
    paid = {"1": 90.0, "2": 1000.0, "3": 30.0, "4": 10.0, "5": 60.0, "6": 10.0}
    fit = told(STORIES, paid, value="amount")
    even = [45 + 15 + 20, 45 + 15 + 20, 20 + 10, 10]
    assert shares(fit, "even", "ABC", weight="value") == pytest.approx(np.array(even) / 200, rel=1e-12)
    among = shares(fit, "even", "C", weight="value", touchpoints="C")
    assert among == pytest.approx([70 / 200, 130 / 200], rel=1e-12)
    back = told(STORIES, paid | {"6": -50.0}, value="amount")
    result = jn.credit(back, weight="value")
    assert one(result, touchpoint="C") == pytest.approx((20 - 50) / 140, rel=1e-12)
    assert one(result, "flag", touchpoint="C") == "more paid back than paid; too few"
    assert result.to_frame()["estimate"].sum() == pytest.approx(1.0, abs=1e-12)
    lost = told(STORIES, paid | {"1": -100.0}, value="amount")
    with pytest.raises(LogError, match='weight="value": what the conversions are worth adds up to nothing or less'):
        jn.credit(told(STORIES, {"1": -90.0}, value="amount"), weight="value")
    assert shares(lost, "even", "ABC", weight="value")[3] == pytest.approx(1.0, rel=1e-12)


def test_one_block_per_group() -> None:
    """A group that only pays back has no shares, and the others keep theirs."""
    stories = {f"{c}{i}": ("AB+", "C-")[i % 4 == 0] for c in ("a", "b") for i in range(60)}
    paid = {name: 10.0 if name.startswith("a") else -10.0 for name in stories}
    fit = told(stories, paid, value="amount", by=["country"])
    frame = jn.credit(fit, rule=("even", "first"), by="country").to_frame()
    assert frame.columns.tolist()[:4] == ["country", "touchpoint", "rule", "basis"]
    assert frame.groupby(["country", "rule"])["estimate"].sum().to_numpy() == pytest.approx(1.0, abs=1e-12)
    worth = jn.credit(fit, weight="value", by="country").to_frame()
    assert (worth.loc[worth["country"] == "BE", "flag"] == "no value to share out").all()
    assert worth.loc[worth["country"] == "BE", "estimate"].isna().all()
    assert worth.loc[worth["country"] == "NL", "estimate"].tolist() == pytest.approx([0, 0.5, 0.5, 0], abs=1e-12)
    words = jn.credit(fit, rule=("even", "first"), by="country").summary()
    assert "NL: first credits A with 100 % and even with 50 %: where it is there, it opens journeys more often" in words


def test_summary_says_where_rules_differ() -> None:
    stories = {f"{i}": ("PBM+", "PM+", "BM+", "M-", "PB+", "BBM+")[i % 6] for i in range(300)}
    text = jn.credit(told(stories, touchpoints=["P", "B", "M"]), rule=("even", "first", "last")).summary()
    assert "\nfirst credits P with 60 % and last with 0 %: it opens journeys but seldom ends them." in text
    assert "last credits M with 80 % and first with 0 %: it ends journeys but seldom opens them." in text
    assert text.index("last credits M") < text.index("first credits P")
    words = " ".join(text.split())
    assert "An even split is a convention" in words
    assert "First and last are conventions too" in words
    assert "association, not cause" in words
    alone = jn.credit(told(stories, touchpoints=["P", "B", "M"])).summary()
    assert "credits" not in alone
    assert "conventions too" not in alone


def test_no_conversion() -> None:
    frame = jn.credit(told({f"{i}": "AB-" for i in range(40)}), rule=("even", "last")).to_frame()
    assert frame["estimate"].isna().all()
    assert (frame["flag"] == "never seen").all()


def expected_shares() -> tuple[jn.JourneyFit, dict[str, dict[str, float]]]:
    """Return the known chain of the simulated logs, and its credit in closed form where every state is a touchpoint."""
    matrix = simulated.truth().matrix
    enter = {name: float(x) for name, x in matrix.loc["entry"].items() if x > 0}
    known = jn.JourneyFit.from_matrix(matrix.drop(index="entry"), entry=enter)
    names = list(known.states)
    rows = matrix.loc[names]
    visits = np.linalg.inv(np.eye(len(names)) - rows[names].to_numpy())
    join = visits @ rows["joined"].to_numpy()
    entry = np.array([enter.get(name, 0.0) for name in names])
    even = jn.credit(known, "joined", basis="model").to_frame().set_index("touchpoint")["estimate"]
    removal = jn.removal(known, "joined").to_frame().set_index("touchpoint")["estimate"]
    return known, {
        "even": {name: even[name] for name in names},
        "first": dict(zip(names, entry * join / (entry @ join), strict=True)),
        "last": dict(zip(names, entry @ visits * rows["joined"].to_numpy() / (entry @ join), strict=True)),
        "touch": {name: removal[name] for name in names},
    }


def test_coverage_on_simulated_logs() -> None:
    """Nominal 95 %, 60 logs of 700 customers with five shares by each rule, and the shares beside removal effects."""
    _, expected = expected_shares()
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"], silence="30d", log_start="2024-01-01",
        as_of=str(simulated.log_end(8)), touchpoints="all",
    )  # fmt: skip
    inside: dict[str, list[np.ndarray]] = {name: [] for name in expected}
    for seed in range(60):
        log = simulated.simulate(700, 8, np.random.default_rng([79, seed]), first_arrivals="steady state from -8W")
        fit = jn.JourneyModel().fit(jn.tally(log, rules))
        frame = jn.credit(fit, rule=("even", "first", "last")).to_frame()
        frame = frame[frame["touchpoint"] != NONE]
        for rule, mine in frame.groupby("rule"):
            truths = mine["touchpoint"].map(expected[str(rule)])
            inside[str(rule)].append(((mine["low"] <= truths) & (truths <= mine["high"])).to_numpy())
        effects = jn.removal(fit, n_redraws=1).to_frame()
        truths = effects["touchpoint"].map(expected["touch"])
        away = np.abs(effects["share_in_log"] - truths) / effects["std_error_in_log"]
        inside["touch"].append((away <= 1.97).to_numpy())
    for name, held in inside.items():
        assert 0.90 <= np.mean(held) <= 0.99, name


def test_refusals() -> None:
    fit = told(STORIES)
    with pytest.raises(LogError, match=r'basis="log": no touches were counted; name touchpoints in the rules .* count'):
        jn.credit(told(STORIES, touchpoints=[]))
    with pytest.raises(LogError, match="this chain was given or changed by hand"):
        jn.credit(fit.with_move("C", "joined", 0.01))
    with pytest.raises(ValueError, match="`to` has a state in it"):
        jn.credit(fit, "B")
    with pytest.raises(ValueError, match="touches of 'E' were not counted; wanted names among 'C', 'A', 'B'"):
        jn.credit(fit, touchpoints=["A", "E"])
    with pytest.raises(ValueError, match="'A' stands there twice"):
        jn.credit(fit, touchpoints=["A", "A"])
    with pytest.raises(TypeError, match="wanted names of states, or None"):
        jn.credit(fit, touchpoints=[("A", "B")])  # type: ignore[list-item]
    with pytest.raises(LogError, match="rule='first': first and last touches are counted among all touchpoints"):
        jn.credit(fit, rule="first", touchpoints=["A"])
    with pytest.raises(LogError, match='weight="value": no values were counted'):
        jn.credit(fit, weight="value")
    with pytest.raises(ValueError, match="rule='last': the model gives the even split alone"):
        jn.credit(fit, rule="last", basis="model")
    with pytest.raises(ValueError, match='weight="value": the model knows no values'):
        jn.credit(fit, basis=("log", "model"), weight="value")
    with pytest.raises(ValueError, match='weight="value": values are counted for the even split alone'):
        jn.credit(fit, rule=("even", "last"), weight="value")
    with pytest.raises(ValueError, match="rule: got none"):
        jn.credit(fit, rule=())
    with pytest.raises(ValueError, match="weight: got 'steps'"):
        jn.credit(fit, weight="steps")
