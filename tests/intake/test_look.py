from __future__ import annotations

import datetime as dt

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from journeys.checks import DAY_US, instant_us
from journeys.errors import LogError
from journeys.intake.look import first_look
from journeys.intake.read import open_log
from journeys.intake.rules import JourneyRules

START = pd.Timestamp("2025-01-01", tz="UTC")


def look(times, now_us=None, **settings):
    rules = JourneyRules("who", "when", "what", **{"silence": "30d", **settings})
    return first_look(open_log(pd.DataFrame({"when": times}), ["when"]), rules, now_us=now_us)


def year(n=5_000):
    return list(START + pd.to_timedelta(np.linspace(0, 365, n), unit="D").round("us"))


def us(text):
    return instant_us(text, "x")


def test_first_and_last():
    found = look([*year(), None], now_us=us("2025-12-31T12:00"))
    assert (found.first_us, found.last_us) == (us("2025-01-01"), us("2026-01-01"))
    assert (found.n_rows, found.whole_days) == (5_001, False)
    assert found.n_later_than_now == sum(moment > pd.Timestamp("2025-12-31T12:00Z") for moment in year())


def test_a_clock_ahead():
    with pytest.raises(
        LogError, match=r"column 'when': 2 of 5002 rows lie long after .*set as_of=\"2026-01-01\""
    ):
        look([*year(), *pd.to_datetime(["2031-05-05", "2031-05-06"], utc=True)])


def test_a_clock_behind():
    with pytest.raises(LogError, match=r"1 of 5001 rows lie long before .*set log_start=\"2025-01-01\""):
        look([*year(), pd.Timestamp(0, tz="UTC")])


def test_both_ends_are_told_at_once():
    with pytest.raises(LogError, match=r"log_start=\"2025-01-01\".*as_of=\"2026-01-01\"") as caught:
        look([pd.Timestamp(0, tz="UTC"), *year(), pd.Timestamp("2031-05-05", tz="UTC")])
    assert 'log_start="1970-01-01" if they are right' in str(caught.value)


def test_either_advice_mends_it():
    times = [pd.Timestamp(0, tz="UTC"), *year()]
    assert look(times, log_start="2025-01-01").first_us == us("2025-01-01")
    assert look(times, log_start="1970-01-01").first_us == 0
    late = [*year(), pd.Timestamp("2031-05-05", tz="UTC")]
    assert look(late, as_of="2026-01-01").last_us == us("2026-01-01")
    assert look(late, as_of="2031-05-05").last_us == us("2031-05-05")


def test_what_is_no_hole():
    far = pd.Timestamp("2031-05-05", tz="UTC")
    assert look([*year(), *[far] * 6]).last_us == us("2031-05-05")  # over 0.1 % of the rows
    assert look([*year(), START + pd.Timedelta(days=365 + 180)]).n_rows == 5_001  # under half the span
    short = [START + pd.Timedelta(hours=hour / 100) for hour in range(5_000)]
    assert look([*short, START + pd.Timedelta(days=30)]).n_rows == 5_001  # under the silence
    with pytest.raises(LogError, match="set as_of"):
        look([*short, START + pd.Timedelta(days=33)])
    with pytest.raises(LogError, match="set as_of"):
        look([*short, START + pd.Timedelta(days=20)], silence=None)


def test_dates():
    found = look([dt.date(2025, 1, 1), dt.date(2025, 3, 1)])
    assert found.whole_days
    assert found.last_us - found.first_us == 59 * DAY_US


def test_no_usable_time():
    with pytest.raises(LogError, match=r"column 'when' of pandas frame, 2 rows holds no usable time$"):
        look(pd.to_datetime([None, None]))
    with pytest.raises(LogError, match="no usable time between log_start and as_of"):
        look(year(), log_start="2030-01-01")


@given(st.lists(st.integers(-(10**14), 10**14), min_size=1, max_size=60), st.integers(1, 60))
def test_cut_anywhere_it_looks_the_same(times, at):
    stamps = pa.array(times, pa.timestamp("us", "UTC"))
    batches = [pa.record_batch({"when": stamps[:at]}), pa.record_batch({"when": stamps[at:]})]
    rules = JourneyRules("who", "when", "what", silence=None)
    found = first_look(open_log(iter(batches), ["when"]), rules)
    assert (found.first_us, found.last_us, found.n_rows) == (min(times), max(times), len(times))
