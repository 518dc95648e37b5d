"""How many states back matter: by hand, a slow second count, orders above, groups, what cannot be run."""

from __future__ import annotations

import numpy as np
import pandas as pd
import processes
import pytest
from scipy.stats import chi2_contingency
from small_chains import START, one

import journeys as jn
from journeys.questions.memory_check import NO_MOVES, NO_SILENCE, TOO_FEW_CUSTOMERS


def counted(paths: list[list[str]], order: int = 1, **more: object) -> jn.Tally:
    """Return the tally of paths, one step a day, a customer each."""
    rows = [
        (who, START + pd.Timedelta(days=day), event, who % 2)
        for who, path in enumerate(paths)
        for day, event in enumerate(path)
    ]
    frame = pd.DataFrame(rows, columns=["who", "when", "what", "side"]).sort_values("when", kind="stable")
    settings = {"complete_history": True, "as_of": "2025-12-01", "silence": "30d"} | more
    rules = jn.JourneyRules("who", "when", "what", converted="joined", churned="left", **settings)  # type: ignore[arg-type]
    return jn.tally(frame, rules, order=order)


def slow_triples(log: pd.DataFrame, silences: float) -> pd.DataFrame:
    """Return state before, state and what came next, of states entered a silence before the end, row by row."""
    rows, limit = [], processes.SILENCE_DAYS
    for _, mine in log.groupby("customer"):
        before = "entry"
        days = ((mine["time"] - processes.START) / pd.Timedelta(days=1)).tolist()
        events = mine["event"].tolist()
        for i, (day, event) in enumerate(zip(days, events, strict=True)):
            if event == "joined":
                before = "entry"
                continue
            follows = i + 1 < len(events) and days[i + 1] - day <= limit
            if int(day) < silences * limit - limit:
                rows.append((before, event, events[i + 1] if follows else "lapsed"))
            before = event if follows else "entry"
    return pd.DataFrame(rows, columns=["before", "state", "next"])


def test_against_a_slow_second_count() -> None:
    log = processes.simulate("two steps .8", 250, 3.0, np.random.default_rng(3))
    triples = slow_triples(log, 3.0)
    result = jn.memory_check(jn.tally(log, processes.rules_of(3.0, complete_history=True)))
    x2 = df = 0.0
    for state, mine in triples.groupby("state"):
        found = chi2_contingency(pd.crosstab(mine["before"], mine["next"]), correction=False)
        x2, df = x2 + found.statistic, df + found.dof
        assert one(result, "statistic", check_name="order 1 or 2", state=state) == pytest.approx(found.statistic)
        assert one(result, "n_moves", check_name="order 1 or 2", state=state) == len(mine)
    assert one(result, "statistic", check_name="order 1 or 2", state="") == pytest.approx(x2)
    assert one(result, "df", check_name="order 1 or 2", state="") == df
    independence = chi2_contingency(pd.crosstab(triples["state"], triples["next"]), correction=False)
    assert one(result, "statistic", check_name="order 0 or 1", state="") == pytest.approx(independence.statistic)


def test_says_which_state_remembers() -> None:
    """At the fair, who came by post joins and who came from the street does not; the club remembers nothing."""
    rng = np.random.default_rng(8)
    paths = []
    for who in range(600):
        first = "post" if who % 2 else "street"
        if rng.random() < 0.5:
            paths.append([first, "fair", "joined" if (rng.random() < 0.9) == (first == "post") else "left"])
        else:
            paths.append([first, "club", "joined" if rng.random() < 0.5 else "left"])
    frame = jn.memory_check(counted(paths)).to_frame().set_index(["check_name", "state"])
    assert frame.loc[("order 1 or 2", ""), "verdict"] == "differs: 2 states of the past tell more than 1"
    assert frame.loc[("order 1 or 2", "fair"), "verdict"].startswith("differs")
    assert frame.loc[("order 1 or 2", "club"), "verdict"] == "agrees: 2 states of the past tell no more than 1"
    assert frame.loc[("order 1 or 2", "fair"), "example"].startswith("from fair after ")
    assert abs(frame.loc[("order 1 or 2", "fair"), "estimate"]) == pytest.approx(0.4, abs=0.1)
    bic = frame.loc[("order 1 or 2", "")]
    assert bic["bic_higher"] < bic["bic_lower"]


def test_higher_orders_of_a_tally_counted_so() -> None:
    """What comes third is what came first: two states back are not enough, three are."""
    rng = np.random.default_rng(12)
    paths = []
    for _ in range(600):
        first, second, third = (str(rng.choice(["a", "b"])) for _ in range(3))
        paths.append([first, second, third, "joined" if first == "a" else "left"])
    result = jn.memory_check(counted(paths, order=2))
    names = result.to_frame()["check_name"].unique().tolist()
    assert names == ["order 0 or 1", "order 1 or 2", "order 2 or 3"]
    assert one(result, "p_value_corrected", check_name="order 2 or 3", state="") < 1e-6
    states = result.to_frame().loc[lambda frame: frame["check_name"] == "order 2 or 3", "state"].tolist()
    assert "a then b" in states


def test_groups_are_corrected_together() -> None:
    rng = np.random.default_rng(4)
    paths = []
    for who in range(400):
        first = str(rng.choice(["post", "street"]))
        joins = first == "post" if who % 2 else rng.random() < 0.5
        paths.append([first, "fair", "joined" if joins else "left"])
    frame = jn.memory_check(counted(paths, by="side"), by="side").to_frame()
    assert list(frame.columns[:3]) == ["side", "check_name", "state"]
    whole = frame[(frame["check_name"] == "order 1 or 2") & (frame["state"] == "")].set_index("side")
    assert whole.loc[1, "verdict"].startswith("differs")
    assert whole.loc[0, "verdict"].startswith("agrees")
    orders = frame[frame["state"] == ""]
    assert (orders["p_value_corrected"] >= orders["p_value"]).all()
    assert orders["p_value_corrected"].min() == pytest.approx(orders["p_value"].min() * orders["p_value"].count())


def test_what_cannot_be_run_says_why() -> None:
    paths = [["post", "fair", "joined"]] * 30 + [["post", "fair"]] * 10
    short = jn.memory_check(counted(paths, as_of=str((START + pd.Timedelta(days=20)).date())))
    assert short.to_frame()["verdict"].unique().tolist() == [NO_MOVES]
    endless = jn.memory_check(counted(paths, silence=None))
    assert endless.to_frame()["flag"].unique().tolist() == [NO_SILENCE]
    few = jn.memory_check(counted([["post", "joined"], ["street", "left"]] * 3))
    assert few.to_frame()["verdict"].unique().tolist() == [TOO_FEW_CUSTOMERS]
    alike = jn.memory_check(counted([["post", "joined"]] * 30)).to_frame()
    assert alike["verdict"].unique().tolist() == ["not run: nothing to tell apart"]


def test_without_a_silence_a_log_in_which_all_has_ended_is_tested() -> None:
    paths = [["post", "fair", "joined"], ["street", "fair", "left"]] * 30
    result = jn.memory_check(counted(paths, silence=None))
    assert one(result, "p_value", check_name="order 1 or 2", state="") < 1e-6


def test_as_other_answers() -> None:
    result = jn.memory_check(counted([["post", "fair", "joined"], ["street", "fair", "left"]] * 30))
    assert repr(result) == f"<MemoryResult: {len(result.keys)} rows at 95 % confidence>"
    assert "order 1 or 2" in result.summary()
    assert "<table" in result._repr_html_()
    assert result.confidence_interval(0.9)["low"].isna().all()


def test_refusals() -> None:
    with pytest.raises(TypeError, match=r"tally: got str; wanted what journeys\.tally returns"):
        jn.memory_check("log.parquet")  # type: ignore[arg-type]
    with pytest.raises(ValueError, match="side"):
        jn.memory_check(counted([["post", "joined"]]), by="side")
