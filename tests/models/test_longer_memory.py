"""Chains of a higher order: the same as first-order chains of events that carry their past in their names."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import journeys as jn
from journeys.errors import JourneysError

STATES = ("poster", "price", "basket")


@pytest.fixture(scope="module")
def log() -> pd.DataFrame:
    """Return a log of journeys whose next step depends on the last two."""
    rng = np.random.default_rng(8)
    rows: list[tuple[int, float, str]] = []
    for who in range(1_500):
        day, before, now = rng.uniform(0, 150), "", rng.choice(STATES)
        while True:
            rows.append((who, day, now))
            if now in ("joined", "declined"):
                break
            day += rng.exponential(3.0)
            ends = 0.5 if (before, now) == ("price", "basket") else 0.12
            nexts = (*STATES, "joined", "declined", "")
            p = np.array([*(rng_weights(before, now)), 0.7, 0.3, 1.0])
            p = np.concatenate([p[:3] / p[:3].sum() * (1 - ends), p[3:] / p[3:].sum() * ends])
            before, now = now, str(rng.choice(nexts, p=p))
            if not now or day > 200:
                break
    frame = pd.DataFrame(rows, columns=["member", "day", "event"])
    frame["happened"] = pd.Timestamp("2025-01-01", tz="UTC") + pd.to_timedelta(frame["day"], unit="D")
    return frame.sort_values("happened", ignore_index=True)


def rng_weights(before: str, now: str) -> list[float]:
    """Return where a journey goes on to, which depends on where it came from."""
    return [1.0 + 2.0 * (before == state) + 0.5 * (now == state) for state in STATES]


def rules(**more: object) -> jn.JourneyRules:
    given = {"complete_history": True, "log_start": "2025-01-01", "as_of": "2025-07-20", **more}
    ends = {"converted": "joined", "churned": "declined", "silence": "20d"}
    return jn.JourneyRules("member", "happened", "event", **ends, **given)


def with_past(log: pd.DataFrame, n_before: int) -> pd.DataFrame:
    """Return the log with the states before in the name of each state; a journey begins after an outcome or silence."""
    log = log.sort_values(["member", "happened"], kind="stable")
    passed: dict[int, list[str]] = {}
    last: dict[int, pd.Timestamp] = {}
    names = []
    for who, when, event in zip(log["member"], log["happened"], log["event"], strict=True):
        path = passed.setdefault(who, [])
        if who in last and when - last[who] > pd.Timedelta(days=20):
            path.clear()
        if event in ("joined", "declined"):
            names.append(event)
            path.clear()
        else:
            before = path[-n_before:]
            names.append(f"{event} after " + ", ".join([*(["entry"] if len(path) < n_before else []), *before]))
            path.append(event)
        last[who] = when
    return log.assign(event=names)


@pytest.mark.parametrize("order", [2, 3])
def test_a_fit_of_order_k_is_the_fit_of_events_that_carry_their_past(log: pd.DataFrame, order: int) -> None:
    fit = jn.JourneyModel(order=order).fit(jn.tally(log, rules(), order=order))
    named = jn.JourneyModel().fit(jn.tally(with_past(log, order - 1), rules()))
    assert sorted(fit.states) == sorted(named.states)
    pd.testing.assert_frame_equal(
        fit.matrix, named.matrix.loc[fit.matrix.index, fit.matrix.columns], rtol=1e-12, atol=1e-15
    )
    for ask in (jn.outcomes, lambda one: jn.first_passage(one, clock="time", method="linearised")):
        mine, theirs = (ask(one).to_frame() for one in (fit, named))
        keys = list(mine.columns[:2])
        both = mine.merge(theirs, on=keys, suffixes=("", "_named"))
        assert len(both) == len(mine)
        for column in ("estimate", "low", "high"):
            np.testing.assert_allclose(both[column], both[f"{column}_named"], rtol=1e-9, atol=1e-12)


def test_targets_and_touchpoints_may_be_named_by_the_last_state(log: pd.DataFrame) -> None:
    fit = jn.JourneyModel(order=2).fit(jn.tally(log, rules(touchpoints="all"), order=2))
    named = jn.JourneyModel().fit(jn.tally(with_past(log, 1), rules()))
    baskets = [state for state in named.states if state.startswith("basket")]
    assert len(baskets) == 4

    def from_entry(one: jn.JourneyFit, to: object) -> pd.Series:
        frame = jn.first_passage(one, to=to, clock="steps", method="linearised").to_frame()
        return frame[frame.start_state == "entry"].set_index("measure")["estimate"]

    pd.testing.assert_series_equal(from_entry(fit, "basket"), from_entry(named, baskets), rtol=1e-12)
    effect = jn.removal(fit, touchpoints=["basket"]).to_frame().iloc[0]
    other = jn.removal(named, touchpoints=[tuple(baskets)]).to_frame().iloc[0]
    assert effect.touchpoint == "basket"
    for column in ("estimate", "low", "high"):
        assert effect[column] == pytest.approx(other[column], rel=1e-9)
    assert effect.share_in_log == pytest.approx(effect.estimate, abs=0.03)
    assert sorted(jn.removal(fit).to_frame()["touchpoint"]) == sorted(STATES)
    assert jn.credit(fit, basis="model").to_frame()["estimate"].notna().all()


def test_coming_back_is_to_the_state_whatever_came_before(log: pd.DataFrame) -> None:
    fit = jn.JourneyModel(order=2).fit(jn.tally(log, rules(), order=2))
    frame = jn.return_time(fit, "basket", method="linearised").to_frame()
    back = frame[frame.measure == "probability"].set_index("state")["estimate"]
    assert set(back.index) == {f"basket after {name}" for name in ("entry", *STATES)}
    # A walk from the matrix itself: the probability of meeting any basket again.
    matrix = fit.matrix
    rest = [name for name in matrix.index if name != "entry" and not name.startswith("basket")]
    inner = matrix.loc[rest, rest].to_numpy()
    into = matrix.loc[rest, list(back.index)].sum(axis=1).to_numpy()
    meets = np.linalg.solve(np.eye(len(rest)) - inner, into)
    for name, share in back.items():
        at_once = matrix.loc[name, list(back.index)].sum()
        assert share == pytest.approx(at_once + matrix.loc[name, rest].to_numpy() @ meets, rel=1e-9)


def test_a_lower_order_can_be_fitted_to_a_tally_of_a_higher(log: pd.DataFrame) -> None:
    tally = jn.tally(log, rules(), order=3)
    for order in (1, 2):
        fit = jn.JourneyModel(order=order).fit(tally)
        plain = jn.JourneyModel(order=order).fit(jn.tally(log, rules(), order=order))
        pd.testing.assert_frame_equal(fit.matrix, plain.matrix, rtol=1e-12)
        np.testing.assert_allclose(fit.influence.probability, plain.influence.probability, atol=1e-12)


def test_moves_of_unknown_history_stay_out() -> None:
    """Of journeys under way when the log began nobody knows the state before their first one."""
    frame = pd.DataFrame(
        [(1, "2025-01-02", "a"), (1, "2025-01-03", "b"), (1, "2025-01-04", "c"), (1, "2025-01-05", "joined")]
        + [(2, "2025-03-02", "a"), (2, "2025-03-03", "c"), (2, "2025-03-04", "joined")],
        columns=["member", "happened", "event"],
    )
    frame["happened"] = pd.to_datetime(frame["happened"], utc=True) + pd.Timedelta(hours=1)
    tally = jn.tally(frame, rules(complete_history=False), order=2)
    before = tally.table("moves").set_index(["state", "next"])["previous_1"].to_dict()
    assert before == {("a", "b"): "unknown", ("b", "c"): "a", ("c", "joined"): "b", ("a", "c"): "entry"} | {
        ("c", "joined"): before["c", "joined"]
    }
    fit = jn.JourneyModel(order=2).fit(tally)
    assert fit.states == ("a after entry", "b after a", "c after a", "c after b")
    assert fit.n_moves.sum() == 4 + 1  # all moves but one, and the sure entry


def test_parts_sums_and_files_keep_the_history(log: pd.DataFrame, tmp_path: Path) -> None:
    log = log.assign(half=np.where(log["member"] % 2, "odd", "even"))
    whole = jn.tally(log, rules(by=["half"]), order=2)
    odd = jn.tally(log[log["half"] == "odd"], rules(by=["half"]), order=2)
    even = jn.tally(log[log["half"] == "even"], rules(by=["half"]), order=2)
    assert (odd + even).checksum == jn.tally(log, rules(by=["half"]), order=2).checksum
    pd.testing.assert_frame_equal(whole.where(half="odd").table("moves"), odd.table("moves"))
    pd.testing.assert_frame_equal(whole.where(half="odd").table("contexts"), odd.table("contexts"))
    whole.save(tmp_path / "tally.parquet")
    assert jn.Tally.load(tmp_path / "tally.parquet") == whole
    fit = jn.JourneyModel(order=2).fit(whole)
    fit.save(tmp_path / "fit.parquet")
    assert jn.JourneyFit.load(tmp_path / "fit.parquet").states == fit.states
    by_half = jn.outcomes(fit, by="half").to_frame()
    alone = jn.outcomes(jn.JourneyModel(order=2).fit(odd)).to_frame()
    mine = by_half[by_half["half"] == "odd"].reset_index(drop=True)
    np.testing.assert_allclose(mine["estimate"], alone["estimate"], rtol=1e-12)


def test_what_cannot_be_asked_is_said(log: pd.DataFrame) -> None:
    tally = jn.tally(log, rules(), order=2)
    with pytest.raises(ValueError, match=r"jn.tally\(log, rules, order=3\)"):
        jn.JourneyModel(order=3).fit(tally)
    with pytest.raises(ValueError, match="order=4; wanted at most 3"):
        jn.tally(log, rules(), order=4)
    fit = jn.JourneyModel(order=2).fit(tally)
    with pytest.raises(ValueError, match="stands for 4 states.*'basket after entry'"):
        jn.passage_curve(fit, start="basket")
    curve = jn.passage_curve(fit, start="basket after price")
    assert 0 < curve.at([10.0])[0] < 1
    with pytest.raises(ValueError, match="by the log alone"):
        jn.stages(fit, ["price", "basket"])
    with pytest.raises(JourneysError, match="different orders"):
        tally + jn.tally(log.assign(member=log["member"] + 10_000), rules())
