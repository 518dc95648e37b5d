"""One row per customer and a time per stage: the log it stands for, whatever holds it, and what is refused."""

from __future__ import annotations

import datetime as dt
import re
import warnings
from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest

import journeys as jn
from journeys.errors import JourneysWarning, LogError

TIMES = {"visit": "seen", "open evening": "came", "joined": "joined_on"}


def wide(n: int = 60, seed: int = 3) -> pd.DataFrame:
    """Return people with a first visit and perhaps an evening and joining, some of them at the same moment."""
    rng = np.random.default_rng(seed)
    seen = pd.Timestamp("2025-01-01", tz="UTC") + pd.to_timedelta(rng.integers(0, 100 * 86_400, n), unit="s")
    came = seen + pd.to_timedelta(rng.choice([0, 1, 5, 9], n), unit="D")
    joined = came + pd.to_timedelta(rng.choice([0, 2], n), unit="D")
    frame = pd.DataFrame({"member": [f"m{i:03}" for i in range(n)], "seen": seen, "came": came, "joined_on": joined})
    frame["country"] = rng.choice(["NL", "BE"], n)
    frame.loc[rng.random(n) < 0.3, "came"] = pd.NaT
    frame.loc[rng.random(n) < 0.5, "joined_on"] = pd.NaT
    return frame


def long(frame: pd.DataFrame) -> pd.DataFrame:
    """Return the same events written out by pandas."""
    parts = [
        frame[["member", column, "country"]].rename(columns={column: "time"}).assign(event=state, sequence=i)
        for i, (state, column) in enumerate(TIMES.items())
    ]
    return pd.concat(parts).dropna(subset="time").sort_values(["time", "sequence"], kind="stable", ignore_index=True)


def rules(**more: Any) -> jn.JourneyRules:
    return jn.JourneyRules("member", "time", "event", converted="joined", silence="30d", sequence="sequence",
                           complete_history=True, as_of="2025-06-01", **more)  # fmt: skip


def through_polars(frame: pd.DataFrame) -> Any:
    polars = pytest.importorskip("polars", reason="optional engine missing: polars")
    return polars.from_arrow(pa.Table.from_pandas(frame, preserve_index=False))


class OnlyAStream:
    """A thing of which nothing is known but that it gives Arrow data."""

    def __init__(self, table: pa.Table) -> None:
        self._table = table

    def __arrow_c_stream__(self, requested_schema: object = None) -> object:
        return self._table.__arrow_c_stream__(requested_schema)


KINDS: dict[str, Callable[[pd.DataFrame], Any]] = {
    "pandas": lambda frame: frame,
    "pandas with Arrow types": lambda frame: frame.convert_dtypes(dtype_backend="pyarrow"),
    "pyarrow table": lambda frame: pa.Table.from_pandas(frame, preserve_index=False),
    "batches": lambda frame: pa.Table.from_pandas(frame, preserve_index=False).to_batches(max_chunksize=7),
    "polars": through_polars,
    "stream": lambda frame: OnlyAStream(pa.Table.from_pandas(frame, preserve_index=False)),
}


@pytest.mark.parametrize("kind", KINDS)
def test_the_tally_is_that_of_the_long_log(kind: str) -> None:
    frame = wide()
    log = jn.from_wide(KINDS[kind](frame), "member", TIMES, keep="country")
    assert isinstance(log, pa.Table)
    assert log.column_names == ["member", "time", "event", "sequence", "country"]
    for more in ({}, {"by": "country", "stages": ["visit", "open evening"]}):
        assert jn.tally(log, rules(**more)) == jn.tally(long(frame), rules(**more))


def test_rows_are_the_times_that_are_there_in_order() -> None:
    frame = wide()
    log = jn.from_wide(frame, "member", TIMES, keep=["country"]).to_pandas()
    wanted = long(frame)
    assert log.event.astype(str).tolist() == wanted.event.tolist()
    assert log.member.tolist() == wanted.member.tolist()
    assert (log.time == wanted.time).all()
    assert log.country.tolist() == wanted.country.tolist()
    assert log.sequence.tolist() == wanted.sequence.tolist()
    assert len(log) == frame[list(TIMES.values())].notna().sum().sum()


def test_events_of_one_time_follow_in_the_order_of_the_mapping() -> None:
    noon = pd.Timestamp("2025-01-01T12:00Z")
    frame = pd.DataFrame({"member": [1], "seen": [noon], "came": [noon], "joined_on": [noon]})
    for order in (["visit", "open evening", "joined"], ["open evening", "visit", "joined"]):
        log = jn.from_wide(frame, "member", {state: TIMES[state] for state in order})
        assert log["event"].to_pylist() == order
        moves = jn.tally(log, rules()).table("moves")
        assert list(zip(moves.state, moves.next, strict=True)) == sorted(zip(order, order[1:], strict=False))


def test_dates_stay_dates() -> None:
    frame = pd.DataFrame(
        {"member": ["a", "b"], "seen": [dt.date(2025, 1, 1), dt.date(2025, 1, 2)], "came": [dt.date(2025, 1, 4), None]}
    )
    log = jn.from_wide(frame, "member", {"visit": "seen", "open evening": "came"})
    assert log["time"].type == pa.date32()
    tally = jn.tally(log, rules())
    assert tally.whole_days
    assert tally.n_journeys == 2


def test_units_and_zones_of_timestamps_are_brought_together() -> None:
    moment = dt.datetime(1969, 12, 31, 23, 59, 59, 999_999)
    table = pa.table({
        "member": [1], "seen": pa.array([0], pa.timestamp("s", "Europe/Amsterdam")),
        "came": pa.array([5], pa.timestamp("ms", "UTC")), "joined_on": pa.array([-1], pa.timestamp("ns", "UTC")),
    })  # fmt: skip
    log = jn.from_wide(table, "member", TIMES)
    assert log["time"].type == pa.timestamp("us", "UTC")
    # a nanosecond before 1970 lies in the microsecond before
    assert [time.replace(tzinfo=None) for time in log["time"].to_pylist()] == [
        moment, dt.datetime(1970, 1, 1), dt.datetime(1970, 1, 1, 0, 0, 0, 5_000),
    ]  # fmt: skip
    assert log["event"].to_pylist() == ["joined", "visit", "open evening"]


def test_one_type_of_time_is_left_as_it_is() -> None:
    table = pa.table({"member": [1, 2], "seen": pa.array([7, None], pa.timestamp("ns")), "came": pa.nulls(2)})
    with pytest.warns(JourneysWarning):
        log = jn.from_wide(table, "member", {"visit": "seen", "open evening": "came"})
    assert log["time"].type == pa.timestamp("ns")
    assert log["time"].cast(pa.int64()).to_pylist() == [7]


def test_dates_of_two_types_are_brought_together() -> None:
    days = {"seen": pa.array([3], pa.date32()), "came": pa.array([4 * 86_400_000], pa.date64())}
    table = pa.table({"member": [1], **days})
    log = jn.from_wide(table, "member", {"visit": "seen", "open evening": "came"})
    assert log["time"].to_pylist() == [dt.date(1970, 1, 4), dt.date(1970, 1, 5)]


def test_a_customer_in_several_rows_has_the_events_of_all() -> None:
    days = pd.to_datetime(["2025-01-01", "2025-01-05"], utc=True)
    frame = pd.DataFrame({"member": ["a", "a"], "seen": days, "joined_on": [pd.NaT, days[1]]})
    log = jn.from_wide(frame, "member", {"visit": "seen", "joined": "joined_on"})
    assert log["event"].to_pylist() == ["visit", "visit", "joined"]
    assert jn.tally(log, rules()).n_people == 1


def test_other_names_for_the_columns() -> None:
    log = jn.from_wide(wide(), "member", TIMES, time="happened", event="what")
    assert log.column_names == ["member", "happened", "what", "sequence"]


def test_customers_without_any_time_are_counted_in_a_warning() -> None:
    frame = wide()
    frame.loc[[3, 8], list(TIMES.values())] = pd.NaT
    with pytest.warns(JourneysWarning, match="^2 of 60 rows have no time in any of the columns") as caught:
        log = jn.from_wide(frame, "member", TIMES)
    assert caught[0].filename == __file__
    assert {"m003", "m008"}.isdisjoint(log["member"].to_pylist())
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        jn.from_wide(wide(), "member", TIMES)


def test_a_frame_without_rows() -> None:
    log = jn.from_wide(wide().iloc[:0], "member", TIMES, keep="country")
    assert log.num_rows == 0
    assert log.column_names == ["member", "time", "event", "sequence", "country"]


def test_missing_customers_are_left_to_the_count_of_findings() -> None:
    frame = wide()
    frame.loc[0, "member"] = None
    tally = jn.tally(jn.from_wide(frame, "member", TIMES), rules())
    missing = tally.findings.set_index("code").n["missing_customer"]
    assert missing == frame.loc[0, list(TIMES.values())].notna().sum()


def test_a_status_history_is_a_log_already() -> None:
    """As the docstring says: valid_from and status, the same status several times running, repeats="merge"."""
    days = pd.to_datetime(["2025-01-01", "2025-01-04", "2025-01-10"], utc=True)
    frame = pd.DataFrame({"member": 1, "valid_from": days, "status": ["trial", "trial", "paying"]})
    read = jn.JourneyRules("member", "valid_from", "status", converted="paying", silence="30d", repeats="merge",
                           complete_history=True)  # fmt: skip
    moves = jn.tally(frame, read).table("moves")
    assert moves[["state", "next", "n"]].to_numpy().tolist() == [["trial", "paying", 1]]
    assert moves.dwell.tolist() == [9 * 86_400_000_000]


# --- refusals ---------------------------------------------------------------------------------------------


def test_dates_with_timestamps_are_refused_by_name() -> None:
    frame = wide().assign(came=dt.date(2025, 1, 1))
    wanted = "times: dates in 'came', but timestamps in 'seen', 'joined_on'; wanted all alike"
    with pytest.raises(LogError, match=re.escape(wanted)):
        jn.from_wide(frame, "member", TIMES)


def test_times_with_and_without_a_zone_are_refused_by_name() -> None:
    frame = wide()
    frame["came"] = frame.came.dt.tz_localize(None)
    with pytest.raises(ValueError, match="a zone in 'seen', 'joined_on', but timestamps without one in 'came'"):
        jn.from_wide(frame, "member", TIMES)


def test_columns_that_hold_no_times() -> None:
    frame = wide().assign(came="2025-01-01")
    with pytest.raises(ValueError, match=r"column 'came' holds no times; it holds text: .*pandas\.to_datetime"):
        jn.from_wide(frame, "member", TIMES)
    with pytest.raises(ValueError, match="column 'came' holds no times; it is of type int64"):
        jn.from_wide(frame.assign(came=5), "member", TIMES)


def test_times_too_far_away_to_be_brought_to_another_unit() -> None:
    far = pa.array([2**62], pa.timestamp("s"))
    table = pa.table({"member": [1], "seen": far, "came": pa.array([1], pa.timestamp("us"))})
    with pytest.raises(LogError, match="far outside the years 1 to 9999"):
        jn.from_wide(table, "member", {"visit": "seen", "open evening": "came"})


def test_unknown_columns_name_the_nearest() -> None:
    with pytest.raises(ValueError, match="pandas frame has no column 'joined_at'; there are 'joined_on'"):
        jn.from_wide(wide(), "member", {"joined": "joined_at"})
    with pytest.raises(ValueError, match="no column 'members'; there are 'member'"):
        jn.from_wide(wide(), "members", TIMES)
    with pytest.raises(ValueError, match="no column 'land'"):
        jn.from_wide(wide(), "member", TIMES, keep="land")


@pytest.mark.parametrize(
    ("args", "kwargs", "kind", "message"),
    [
        (("member", {}), {}, ValueError, "times: got none; wanted at least one state"),
        (("member", ["seen"]), {}, TypeError, r"times: got \['seen'\]; wanted a mapping"),
        (("member", {"visit": 3}), {}, TypeError, r"times\['visit'\]: got 3"),
        (("member", {"": "seen"}), {}, TypeError, "times: got ''; wanted a name"),
        (("", TIMES), {}, TypeError, "customer: got ''"),
        (("member", TIMES), {"time": None}, TypeError, "time: got None"),
        (("member", TIMES), {"keep": [4]}, TypeError, "keep: got 4"),
        (("member", {"visit": "seen", "look": "seen"}), {}, ValueError, "'seen' is named twice"),
        (("member", {"visit": "member"}), {}, ValueError, "'member' is named twice"),
        (("member", TIMES), {"time": "member"}, ValueError, "two columns called 'member'"),
        (("member", TIMES), {"event": "sequence"}, ValueError, "two columns called 'sequence'"),
        (("member", TIMES), {"keep": ["country", "country"]}, ValueError, "two columns called 'country'"),
    ],
)
def test_refused_arguments(args: Any, kwargs: Any, kind: type[Exception], message: str) -> None:
    with pytest.raises(kind, match=message):
        jn.from_wide(wide(), *args, **kwargs)


def test_what_is_no_table() -> None:
    with pytest.raises(TypeError, match="got a dict"):
        jn.from_wide({"member": [1]}, "member", {"visit": "seen"})
