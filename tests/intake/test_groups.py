"""Columns that group journeys: values as codes, cohorts, and the rules that name them."""

from __future__ import annotations

import datetime as dt
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pytest

from journeys.errors import LogError, RulesError
from journeys.intake import groups
from journeys.intake.groups import GroupCodes, cohort_calendar
from journeys.intake.rules import JourneyRules

DAY_US = 86_400_000_000


def rules(**more: object) -> JourneyRules:
    return JourneyRules("who", "when", "what", silence="30d", **more)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("array", "values"),
    [
        (pa.array(["NL", "", None, "NL"]), ["NL", "not given", "not given", "NL"]),
        (pa.array([3, None, 3, 1], pa.int8()), [3, "not given", 3, 1]),
        (pa.array([True, False, None, True]), [True, False, "not given", True]),
        (pa.array([dt.date(2026, 1, 5), None] * 2), ["2026-01-05", "not given"] * 2),
        (pa.array(["a", "b", "a", None]).dictionary_encode(), ["a", "b", "a", "not given"]),
        (pa.array(["a", "b", "a", None], pa.large_string()), ["a", "b", "a", "not given"]),
        (pa.nulls(4), ["not given"] * 4),
    ],
)
def test_values_of_every_kind(array: pa.Array, values: list[object]) -> None:
    codes = GroupCodes(["column"])
    found = codes.encode([array])
    assert [codes.combinations[code] for code in found] == [(value,) for value in values]


def test_combinations_keep_their_codes_over_batches() -> None:
    codes = GroupCodes(["country", "size"])
    first = codes.encode([pa.array(["NL", "BE"]), pa.array([1, 1])])
    second = codes.encode([pa.array(["BE", "NL", "FR"]), pa.array([1, 2, 1])])
    assert first.tolist() == [0, 1]
    assert [codes.combinations[code] for code in second] == [("BE", 1), ("NL", 2), ("FR", 1)]
    assert second[0] == first[1]


def test_what_groups_cannot_be() -> None:
    with pytest.raises(LogError, match="'price' is of type double; wanted text, whole numbers, true/false or dates"):
        GroupCodes(["price"]).encode([pa.array([1.5])])
    codes = GroupCodes(["mixed"])
    codes.encode([pa.array(["a"])])
    with pytest.raises(LogError, match="'mixed' changes between text and whole numbers"):
        codes.encode([pa.array([1])])


def test_too_many_groups_are_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(groups, "MOST_GROUPS", 3)
    with pytest.raises(LogError, match="column 'page' holds more than 3 different values"):
        GroupCodes(["page"]).encode([pa.array(["a", "b", "c", "d"])])
    with pytest.raises(LogError, match=r"more than 3 combinations of values \(so far a 2, b 2\)"):
        GroupCodes(["a", "b"]).encode([pa.array([1, 1, 2, 2]), pa.array([1, 2, 1, 2])])


@pytest.mark.parametrize("zone", ["Europe/Amsterdam", "America/New_York", "Asia/Kathmandu", "UTC"])
@pytest.mark.parametrize("cohort", ["day", "week", "month"])
def test_every_moment_lies_in_the_cohort_of_its_local_day(cohort: str, zone: str) -> None:
    rng = np.random.default_rng(5)
    first = int(dt.datetime(2024, 2, 20, 3, tzinfo=dt.UTC).timestamp()) * 1_000_000
    last = first + 400 * DAY_US
    starts, names = cohort_calendar(cohort, zone, first, last)
    assert starts[0] <= first
    assert (np.diff(starts) > 0).all()
    for moment in [first, last, *rng.integers(first, last, 400).tolist()]:
        local = dt.datetime.fromtimestamp(moment / 1e6, ZoneInfo(zone)).date()
        monday = local - dt.timedelta(days=local.weekday())
        wanted = {"day": local.isoformat(), "week": monday.isoformat(), "month": f"{local:%Y-%m}"}[cohort]
        assert names[int(np.searchsorted(starts, moment, side="right")) - 1] == wanted


def test_built_in_columns_come_with_their_settings() -> None:
    assert rules(cohort="week", split_at="2026-01-01", by="country").by == ("country", "cohort", "period")
    assert rules(by=["cohort", "came_after"], cohort="day").by == ("cohort", "came_after")
    whole = rules(by=["country", "came_after"], cohort="month", timezone="Europe/Amsterdam", split_at=["2026-02-01"])
    assert JourneyRules.from_dict(whole.to_dict()) == whole
    assert whole.group_columns == ("country",)
    assert whole.columns == ("who", "when", "what", "country")


@pytest.mark.parametrize(
    ("settings", "message"),
    [
        ({"by": ["cohort"]}, "by: got 'cohort', a built-in column, without cohort; wanted cohort=\"week\""),
        ({"by": ["period"]}, "by: got 'period', a built-in column, without split_at"),
        ({"by": ["who"]}, "by: got 'who', which is the customer column"),
        ({"by": ["a", "a"]}, "by: got 'a' twice"),
        ({"by": ["state"]}, "by: got 'state', which is a column of the answers; wanted another name"),
        ({"by": 3}, "by: got 3; wanted the name of a column or a list"),
        ({"cohort": "year"}, "cohort: got 'year'; wanted one of 'day', 'week', 'month'"),
        ({"timezone": "Middle/Earth"}, "timezone: got 'Middle/Earth', which this machine does not know"),
        ({"split_at": "soon"}, "split_at"),
        ({"split_at": "2026-03-01", "as_of": "2026-02-01"}, "split_at: got 2026-03-01, not inside the log"),
        ({"split_at": "2026-01-01", "log_start": "2026-01-01"}, "split_at: got 2026-01-01, not inside the log"),
        ({"opens": ["joined"], "converted": "joined"}, "opens: got 'joined', an outcome; wanted states"),
        ({"stages": ["joined"], "converted": "joined"}, "stages: got 'joined', an outcome"),
        ({"stages": ["look"], "states": {"look": "visit"}}, "stages: got 'look', which `states` maps to 'visit'"),
    ],
)
def test_faults_are_told_with_what_was_wanted(settings: dict[str, object], message: str) -> None:
    with pytest.raises(RulesError) as fault:
        rules(**settings)
    assert message in str(fault.value)
