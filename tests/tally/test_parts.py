"""Tallies of grouped journeys: parts that add up to the whole, and what each part is followed for."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pandas as pd
import pytest
import simulated

import journeys as jn
from journeys.errors import JourneysError, LogError
from journeys.tally import passes
from journeys.tally.tables import KEYS, SUMS

LENGTH = 2.5


@cache
def log() -> pd.DataFrame:
    frame = simulated.simulate(1_500, LENGTH, np.random.default_rng(11))
    frame["country"] = np.array(["NL", "BE", "FR"])[frame["customer"].to_numpy() % 3]
    frame["age"] = 18 + frame["customer"].to_numpy() % 5
    return frame


def rules(**more: Any) -> jn.JourneyRules:
    settings: dict[str, Any] = {"log_start": simulated.LOG_START, "as_of": simulated.log_end(LENGTH), **more}
    return jn.JourneyRules("customer", "time", "event", converted=["joined"], silence="30d", **settings)


def totals(tally: jn.Tally, name: str, without: tuple[str, ...] = ()) -> pd.DataFrame:
    """Return a table summed over its groups."""
    frame = tally.table(name).astype(object)
    sums = [name for name in frame if name in ("n", "dwell", "elapsed", "steps", "steps_squared", "away")]
    keys = [name for name in frame if name not in sums and name not in tally.rules.by and name not in without]
    return frame.groupby(keys, as_index=False)[sums].sum().sort_values(keys, ignore_index=True)


@pytest.mark.parametrize("name", KEYS)
def test_groups_add_up_to_the_whole(name: str) -> None:
    whole = jn.tally(log(), rules())
    grouped = jn.tally(log(), rules(by=["country", "came_after"], cohort="week", timezone="Europe/Amsterdam"))
    pd.testing.assert_frame_equal(totals(grouped, name), totals(whole, name), check_dtype=False)


@pytest.mark.parametrize("name", KEYS)
def test_parts_hold_what_the_log_of_the_group_holds(name: str) -> None:
    part = jn.tally(log(), rules(by="country")).where(country="NL")
    alone = jn.tally(log()[log()["country"] == "NL"], rules())
    pd.testing.assert_frame_equal(totals(part, name), totals(alone, name), check_dtype=False)
    assert part.states == alone.states


def test_parts_put_together_are_the_whole() -> None:
    tally = jn.tally(log(), rules(by=["country", "age"]))
    parts = list(tally.split("country").values())
    again = parts[2] + parts[0] + parts[1]
    assert again.groups == tally.groups
    for name in KEYS:
        pd.testing.assert_frame_equal(again.table(name), tally.table(name))
    with pytest.raises(JourneysError, match="different parts of the groups cannot be added"):
        tally + parts[0]


def test_conditions_pick_values_lists_and_ranges() -> None:
    tally = jn.tally(log(), rules(by=["country", "age"]))
    assert tally.where(country=["NL", "BE"], age=(None, 19)).groups == (("BE", 18), ("BE", 19), ("NL", 18), ("NL", 19))
    assert tally.where(age=(22, None)).n_journeys == tally.where(age=22).n_journeys
    assert tally.where(age=(18, 22)) is tally
    assert [values for values in tally.split(["age"])] == [(age,) for age in range(18, 23)]
    for conditions, message in (
        ({"city": "Ghent"}, "'city' is no column that journeys are grouped by; there are 'country', 'age'"),
        ({"country": "DE"}, "country: got 'DE', which no journey has; there are 'BE', 'FR', 'NL'"),
        ({"age": (1, 2, 3)}, r"age: got \(1, 2, 3\); wanted a pair"),
        ({"age": (90, 99)}, "no group of journeys meets"),
    ):
        with pytest.raises(ValueError, match=message):
            tally.where(**conditions)
    with pytest.raises(TypeError, match="age: got the range"):
        tally.where(age=(18, "x"))


def test_a_part_is_saved_and_loaded(tmp_path: Any) -> None:
    part = jn.tally(log(), rules(by=["country"], cohort="month", stages=["price page", "basket"])).where(country="BE")
    part.save(tmp_path / "part.parquet")
    again = jn.Tally.load(tmp_path / "part.parquet")
    assert again == part
    assert (again.groups, again.part) == (part.groups, True)


def test_the_first_period_is_the_log_cut_there() -> None:
    """Moves of the first period are those of a log that ends just before the cut."""
    cut = simulated.LOG_START + pd.Timedelta(days=40, hours=7)
    first = jn.tally(log(), rules(split_at=[cut])).where(period=f"before {cut:%Y-%m-%dT%H:%M:%S}Z")
    last = cut - pd.Timedelta(microseconds=1)
    alone = jn.tally(log()[log()["time"] <= last], rules(as_of=last))
    for name in ("moves", "entries", "gaps"):
        pd.testing.assert_frame_equal(totals(first, name), totals(alone, name), check_dtype=False)
    unknown = ("steps", "steps_squared")
    mine, wanted = totals(first, "journeys"), totals(alone, "journeys")
    pd.testing.assert_frame_equal(mine.drop(columns=[*unknown]), wanted.drop(columns=[*unknown]), check_dtype=False)


def test_how_long_parts_were_followed() -> None:
    tally = jn.tally(log(), rules(cohort="week", split_at=["2024-02-01"]))
    assert tally.days_followed == pytest.approx(44)  # from 1 February to 16 March
    assert tally.where(period="before 2024-02-01").days_followed == pytest.approx(31)
    young = jn.tally(log(), rules(cohort="week")).where(cohort=("2024-02-19", None))
    assert young.days_followed == pytest.approx(26)
    with pytest.raises(LogError, match=r"followed for 26.0 days at most, no longer than the silence of 30 days"):
        jn.JourneyModel().fit(young)


def test_what_periods_cannot_be() -> None:
    with pytest.raises(LogError, match="split_at: 2030-01-01 does not lie inside the log"):
        jn.tally(log(), jn.JourneyRules("customer", "time", "event", silence="30d", split_at=["2030-01-01"]))
    dates = log().assign(time=log()["time"].dt.date)
    with pytest.raises(LogError, match="but the log holds dates; wanted cuts at whole days"):
        jn.tally(dates, rules(split_at=["2024-02-01T12:00:00Z"]))


def test_too_many_groups_of_journeys(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(passes, "MOST_GROUPS", 10)
    with pytest.raises(LogError, match="by: 15 groups of journeys; wanted 10 at most"):
        jn.tally(log(), rules(by=["country", "age"]))


def test_sums_are_named_for_every_table() -> None:
    assert set(SUMS) == set(KEYS)


def test_a_period_in_which_nobody_enters_keeps_the_people_who_move() -> None:
    days = ["2025-01-30", "2025-02-02", "2025-02-05", "2025-02-03", "2025-02-04"]
    frame = pd.DataFrame({
        "member": [1, 1, 1, 2, 2], "event": ["visit", "visit", "joined", "visit", "joined"],
        "happened": pd.to_datetime(days, utc=True),
    })  # fmt: skip
    cut = jn.JourneyRules(
        "member", "happened", "event", converted="joined", silence="30d", split_at=["2025-02-01"],
        complete_history=True, as_of="2025-04-01",
    )  # fmt: skip
    part = jn.tally(frame, cut).split("period")[("from 2025-02-01",)]
    assert set(part.moves["bucket"]) <= set(np.flatnonzero(part.customers["people"]))
    assert jn.JourneyModel().fit(part).matrix.loc["visit", "joined"] == 1
