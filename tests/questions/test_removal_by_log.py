"""What the log says beside removal effects: by hand, a slow second implementation, orders of memory, calibration."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import simulated
import slow_sums
from small_chains import START, column, one

import journeys as jn
from journeys.questions import touch_shares
from journeys.questions.touch_shares import DIFFER, TOO_SHORT


def fitted(paths: list[list[str]], **more: object) -> jn.JourneyFit:
    """Return the fit to paths, one step a day, a customer each, told to the end."""
    rows = [
        (who, START + pd.Timedelta(days=day), event) for who, path in enumerate(paths) for day, event in enumerate(path)
    ]
    frame = pd.DataFrame(rows, columns=["who", "when", "what"]).sort_values("when", kind="stable")
    settings = {"complete_history": True, "as_of": "2025-06-01", "touchpoints": "all"} | more
    rules = jn.JourneyRules("who", "when", "what", converted="joined", churned="left", silence="30d", **settings)  # type: ignore[arg-type]
    return jn.JourneyModel().fit(jn.tally(frame, rules))


def walks(n: int, rng: np.random.Generator, *, memory: bool) -> list[list[str]]:
    """Return walks by way of the post or the street to the fair, whence four in ten join: with memory, eight in ten of
    those that came by post, and none of the others.
    """
    paths = []
    for _ in range(n):
        first = "post" if rng.random() < 0.5 else "street"
        chance = (0.8 if first == "post" else 0.0) if memory else 0.4
        paths.append([first, "fair", "joined" if rng.random() < chance else "left"])
    return paths


def test_by_hand() -> None:
    """Four join: post fair, street fair, fair fair, street."""
    paths = [
        ["post", "fair", "joined"], ["street", "fair", "joined"], ["fair", "fair", "joined"], ["street", "joined"],
        ["post", "left"], ["post", "street"],
    ]  # fmt: skip
    result = jn.removal(fitted(paths), touchpoints=["post", "street", "fair", ("post", "street"), ("post", "fair")])
    assert one(result, "share_in_log", touchpoint="post") == pytest.approx(1 / 4, rel=1e-12)
    assert one(result, "share_in_log", touchpoint="street") == pytest.approx(2 / 4, rel=1e-12)
    assert one(result, "share_in_log", touchpoint="fair") == pytest.approx(3 / 4, rel=1e-12)
    assert one(result, "share_in_log", touchpoint="post + street") == pytest.approx(3 / 4, rel=1e-12)
    assert one(result, "share_in_log", touchpoint="post + fair") == pytest.approx(3 / 4, rel=1e-12)


def test_against_a_slow_second_implementation() -> None:
    log, journeys = slow_sums.told_log(900, np.random.default_rng(25))
    won = np.array([one.outcome == "joined" for one in journeys]) * 1.0
    touched = np.array([["A" in one.path, "C" in one.path, bool({*"AC"} & {*one.path})] for one in journeys])

    def answer(times: np.ndarray) -> np.ndarray:
        jump = slow_sums.jumps(journeys, times) * won
        return jump @ touched / jump.sum()

    result = jn.removal(jn.JourneyModel().fit(jn.tally(log, slow_sums.rules())), touchpoints=["A", "C", ("A", "C")])
    names = ["A", "C", "A + C"]
    assert column(result, "share_in_log", "touchpoint", names) == pytest.approx(answer(np.ones(len(won))), rel=1e-9)
    error = column(result, "std_error_in_log", "touchpoint", names)
    assert error == pytest.approx(slow_sums.std_errors(journeys, answer), rel=1e-5)


def test_one_step_of_memory_agrees() -> None:
    """The state alone decides: effects and shares of 12,000 simulated customers lie within chance of each other."""
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"], silence="30d", log_start="2024-01-01",
        as_of=str(simulated.log_end(8)), touchpoints="all",
    )  # fmt: skip
    log = simulated.simulate(12_000, 8, np.random.default_rng(31), first_arrivals="steady state from -8W")
    frame = jn.removal(jn.JourneyModel().fit(jn.tally(log, rules))).to_frame()
    assert (frame["flag"] == "").all()
    away = frame["estimate"] - frame["share_in_log"]
    assert (np.abs(away) < 3.5 * frame["std_error_in_log"]).all()
    assert np.abs(away).max() < 0.03
    # the model knows more of each than the touched journeys alone
    assert (frame["std_error"] < frame["std_error_in_log"]).all()


def test_two_steps_of_memory_are_flagged() -> None:
    """All who join came by post, and the chain forgets it at the fair."""
    rng = np.random.default_rng(32)
    frame = jn.removal(fitted(walks(2_000, rng, memory=True))).to_frame().set_index("touchpoint")
    assert frame.loc["street", "share_in_log"] == 0
    assert frame.loc["post", "share_in_log"] == 1
    assert frame.loc["post", "estimate"] == pytest.approx(0.5, abs=0.05)
    assert (frame.loc[["post", "street"], "flag"] == DIFFER).all()
    mixed = walks(2_000, rng, memory=True) + walks(1_000, rng, memory=False)
    frame = jn.removal(fitted(mixed)).to_frame().set_index("touchpoint")
    assert (frame.loc[["post", "street"], "flag"] == DIFFER).all()
    assert frame.loc["fair", "flag"] == "too few"
    # order forgotten, the same walks are as the model has them
    frame = jn.removal(fitted(walks(3_000, rng, memory=False))).to_frame().set_index("touchpoint")
    assert (frame.loc[["post", "street"], "flag"] == "").all()


def test_how_often_a_right_model_is_flagged(monkeypatch: pytest.MonkeyPatch) -> None:
    """At a chance of 1 in 5 in place of 1 in 100 a fifth of 40 logs, not more than 17 (binomial, p < 0.001)."""
    monkeypatch.setattr(touch_shares, "_CHANCE", 0.2)
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"], silence="30d", log_start="2024-01-01",
        as_of=str(simulated.log_end(8)), touchpoints="all",
    )  # fmt: skip
    flagged = 0
    for seed in range(40):
        log = simulated.simulate(800, 8, np.random.default_rng([33, seed]), first_arrivals="steady state from -8W")
        frame = jn.removal(jn.JourneyModel().fit(jn.tally(log, rules)), n_redraws=1).to_frame()
        flagged += int(frame["flag"].str.contains(DIFFER).any())
    assert 1 <= flagged <= 17


def test_order_held_is_calibrated() -> None:
    """Two touchpoints that are alike: the one that came out ahead stays ahead in a share of redraws that is uniform
    from a half to 1, since the distance in standard errors is the absolute value of a normal one.
    """
    held = []
    for seed in range(60):
        rng = np.random.default_rng([34, seed])
        paths = []
        for _ in range(300):
            steps = [name for name in ("post", "street") if rng.random() < 0.4]
            rng.shuffle(steps)
            paths.append(["visit", *steps, "joined" if rng.random() < 0.4 else "left"])
        frame = jn.removal(fitted(paths), touchpoints=["post", "street"], n_redraws=200, rng=seed).to_frame()
        held.append(frame["order_held"][0] / 200)
    # Kolmogorov-Smirnov at 0.1 %, and the noise of 200 redraws
    levels = np.sort(2 * np.array(held) - 1)
    distance = np.abs(levels - (np.arange(60) + 0.5) / 60).max()
    assert distance < 1.95 / np.sqrt(60) + 0.03
    assert 0.67 < np.mean(held) < 0.83


def test_where_the_log_says_nothing_of_it() -> None:
    paths = walks(300, np.random.default_rng(35), memory=False)
    for fit, asked in (
        (fitted(paths, touchpoints=[]), {}),
        (fitted(paths).with_move("fair", "joined", 0.01), {}),
        (fitted(paths), {"to": "fair"}),
    ):
        frame = jn.removal(fit, **asked).to_frame()  # type: ignore[arg-type]
        assert frame[["share_in_log", "std_error_in_log"]].isna().all(axis=None)
        assert not frame["flag"].str.contains(DIFFER).any()
    some = jn.removal(fitted(paths, touchpoints=["post"]), touchpoints=["post", "street", ("post", "street")])
    there = some.to_frame().set_index("touchpoint")["share_in_log"].notna()
    assert there.to_dict() == {"post": True, "street": False, "post + street": False}
    assert "share_in_log" not in jn.removal(fitted(paths), how="divert").to_frame()


def test_other_outcomes_and_groups() -> None:
    rng = np.random.default_rng(36)
    fit = fitted([*walks(400, rng, memory=False), *[["post"]] * 40])
    result = jn.removal(fit, "lapsed", ["post", "street"])
    assert column(result, "share_in_log", "touchpoint", ["post", "street"]).tolist() == [1.0, 0.0]


def test_periods() -> None:
    """Journeys cut at the end of a period are conversions in neither table: all that are left touched the visit."""
    rng = np.random.default_rng(38)
    rows = []
    for who, day in enumerate(rng.uniform(0, 100, 900)):
        end = [["joined"], ["left"], []][rng.integers(3)]
        path = ["visit", *(["fair"] if who % 2 else []), *end]
        rows += [(who, START + pd.Timedelta(days=day + 4 * i), event) for i, event in enumerate(path)]
    frame = pd.DataFrame(rows, columns=["who", "when", "what"]).sort_values("when", kind="stable")
    rules = jn.JourneyRules("who", "when", "what", converted="joined", churned="left", silence="30d",
                            as_of="2025-07-01", complete_history=True, touchpoints="all",
                            split_at=["2025-02-20"])  # fmt: skip
    fit = jn.JourneyModel().fit(jn.tally(frame, rules))
    assert fit.tally is not None
    counted = [fit.tally.table(name).query("outcome == 'joined'")["n"].sum() for name in ("journeys", "touch_sets")]
    assert counted[0] == counted[1] < (frame["what"] == "joined").sum()
    effects = jn.removal(fit, by="period").to_frame()
    assert effects.columns.tolist()[:3] == ["period", "touchpoint", "estimate"]
    visit = effects[effects["touchpoint"] == "visit"]
    assert len(visit) == 2
    assert visit["share_in_log"].to_numpy() == pytest.approx(1.0, abs=1e-12)
    assert effects.loc[effects["touchpoint"] == "fair", "share_in_log"].between(0.3, 0.7).all()


def test_a_short_log_is_not_compared() -> None:
    """Whoever comes by the street joins after 99 days, and no journey whose start was seen is followed for over 50."""
    rng, rows = np.random.default_rng(37), []
    for who, day in enumerate(rng.uniform(-100, 80, 3_000)):
        way = [("post", 0.0), ("joined", 1.0)]
        if who % 2:
            way = [("street", 0.0), ("fair", 25.0), ("hall", 50.0), ("desk", 75.0), ("joined", 99.0)]
        way = way[: rng.integers(1, len(way))] if who % 7 == 0 else way
        rows += [(who, day + later, event) for event, later in way if 0 <= day + later <= 80]
    frame = pd.DataFrame(rows, columns=["who", "day", "what"])
    frame["when"] = START + pd.to_timedelta((frame["day"] * 86_400e6).astype("int64"), unit="us")
    rules = jn.JourneyRules("who", "when", "what", converted="joined", silence="30d", log_start=START,
                            as_of=START + pd.Timedelta(days=80), touchpoints="all")  # fmt: skip
    fit = jn.JourneyModel().fit(jn.tally(frame.sort_values("when", kind="stable"), rules))
    result = jn.removal(fit)
    assert result.to_frame()["flag"].str.contains(TOO_SHORT).all()
    assert not result.to_frame()["flag"].str.contains(DIFFER).any()
    assert one(result, "share_in_log", touchpoint="fair") < one(result, touchpoint="fair") - 0.1
