from __future__ import annotations

import datetime as dt
from decimal import Decimal

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest

from journeys.errors import LogError
from journeys.intake.identity import bucket_major, customer_keys
from journeys.intake.normalise import Normaliser
from journeys.intake.rules import JourneyRules
from journeys.intake.times import TimeReader

DAY = 86_400_000_000
NOON = 1_751_284_800_000_000  # 2025-06-30T12:00Z
BASE = {"customer": "who", "time": "when", "event": "what", "silence": "30d"}


def batch(who=(1, 2, 3), when=(0, 5, 9), what=("a", "b", "a"), **more):
    columns = {"who": who, "when": when, "what": what, **more}
    if not isinstance(when, pa.Array):
        columns["when"] = pa.array(when, pa.timestamp("us", "UTC"))
    return pa.record_batch({k: v if isinstance(v, pa.Array) else pa.array(v) for k, v in columns.items()})


def read(*batches, **settings):
    normaliser = Normaliser(JourneyRules(**{**BASE, **settings}))
    return [normaliser.rows(one) for one in batches], normaliser


def counts(normaliser):
    frame = normaliser.findings.to_frame()
    return {row.code: (row.column, row.n, row.rows) for row in frame.itertuples()}


def test_plain_rows():
    (rows,), normaliser = read(batch())
    np.testing.assert_array_equal(rows.key, bucket_major(customer_keys(pa.array([1, 2, 3]))[0]))
    assert (rows.time.tolist(), rows.event.tolist(), rows.row.tolist()) == ([0, 5, 9], [0, 1, 0], [0, 1, 2])
    assert [a.dtype for a in (rows.key, rows.time, rows.event, rows.row)] == ["u8", "i8", "i4", "i8"]
    assert rows.sequence is None
    assert rows.ended is None
    assert normaliser.codes.names == ["a", "b"]
    assert len(normaliser.findings.to_frame()) == 0


def test_row_numbers_and_codes_go_on_over_batches():
    (_, second), normaliser = read(batch(), batch(what=("c", "a", None)))
    assert second.row.tolist() == [3, 4]
    assert second.event.tolist() == [2, 0]
    assert counts(normaliser) == {"missing_event": ("what", 1, [5])}
    assert (normaliser.n_rows, normaliser.n_kept) == (6, 5)
    assert normaliser.findings.n_unreadable * 6 == normaliser.n_rows


def test_each_row_is_left_out_for_the_first_reason():
    bad = batch(
        who=["a", None, "", "b", "c", "d", "e", "f", "g", "h"],
        when=[9, 9, 9, None, 9, 9, 1, 99, 9, 9],
        what=["x", "x", None, "x", "", None, "x", "x", "ping", "x"],
        staff=["yes", "no", "no", "no", "no", "no", "no", None, "no", "no"],
    )
    (rows,), normaliser = read(
        bad,
        exclude={"staff": ["yes"]},
        log_start="1970-01-01T00:00:00.000005",
        as_of="1970-01-01T00:00:00.000050",
        states={"ping": None, "x": "seen"},
    )
    assert rows.row.tolist() == [9]
    assert counts(normaliser) == {
        "excluded": ("staff", 1, [0]),
        "missing_customer": ("who", 2, [1, 2]),
        "missing_time": ("when", 1, [3]),
        "missing_event": ("what", 2, [4, 5]),
        "before_log_start": ("when", 1, [6]),
        "after_as_of": ("when", 1, [7]),
        "unmapped_event": ("what", 1, [8]),
    }
    assert normaliser.codes.names == ["x", "ping"]
    assert normaliser.targets == ["seen", None]


def test_both_dates_are_included():
    (rows,), _ = read(batch(when=(4, 5, 6)), log_start="1970-01-01T00:00:00.000005")
    assert rows.time.tolist() == [5, 6]
    normaliser = Normaliser(JourneyRules(**BASE), log_start_us=4, as_of_us=5)
    assert normaliser.rows(batch(when=(4, 5, 6))).time.tolist() == [4, 5]


@pytest.mark.parametrize("unit", ["s", "ms", "us", "ns"])
@pytest.mark.parametrize("zone", [None, "UTC", "Europe/Amsterdam", "+05:30"])
def test_timestamps_of_any_unit_and_zone(unit, zone):
    stamps = pa.array(["2025-06-30T12:00:00", None]).cast(pa.timestamp(unit))
    array = stamps.cast(pa.int64()).cast(pa.timestamp(unit, zone))  # the same instant, shown in the zone
    (rows,), normaliser = read(batch(who=(1, 2), when=array, what=("a", "a")))
    assert rows.time.tolist() == [NOON]
    expected = {"missing_time": ("when", 1, [1])}
    if zone is None:
        expected["naive_times"] = ("when", 1, [])
    assert counts(normaliser) == expected


@pytest.mark.parametrize(
    "encode", [lambda a: a, lambda a: a.dictionary_encode()], ids=["plain", "dictionary"]
)
@pytest.mark.parametrize("kind", [pa.date32(), pa.date64()])
def test_dates_are_whole_days(kind, encode):
    array = encode(pa.array([dt.date(2025, 6, 30), dt.date(1969, 12, 31), None], kind))
    (rows,), normaliser = read(batch(when=array))
    assert rows.time.tolist() == [NOON - DAY // 2, -DAY]
    assert normaliser.whole_days
    assert counts(normaliser) == {"missing_time": ("when", 1, [2])}


def test_nanoseconds_are_cut_down_and_counted():
    (rows,), normaliser = read(batch(when=pa.array([1_999, -1, 2_000], pa.timestamp("ns", "UTC"))))
    assert rows.time.tolist() == [1, -1, 2]
    assert counts(normaliser) == {"sub_microsecond": ("when", 2, [0, 1])}


@pytest.mark.parametrize(("unit", "per_second"), [("s", 1), ("ms", 1_000), ("us", 1_000_000)])
def test_times_outside_the_calendar(unit, per_second):
    first, last = -62_135_596_800 * per_second, 253_402_300_800 * per_second - 1
    edge = pa.array([first - 1, first, last, last + 1, 2**63 - 1, -(2**63)], pa.timestamp(unit, "UTC"))
    (rows,), normaliser = read(batch(who=range(6), when=edge, what=["a"] * 6))
    assert rows.row.tolist() == [1, 2]
    assert rows.time.tolist() == [v * (1_000_000 // per_second) for v in (first, last)]
    assert counts(normaliser) == {"out_of_range_time": ("when", 4, [0, 3, 4, 5])}


def test_dates_outside_the_calendar():
    days = pa.array([-719_163, -719_162, 2_932_896, 2_932_897, 2**31 - 1, None], pa.int32()).cast(pa.date32())
    times = TimeReader("when").read(days)
    assert times.out_of_range.tolist() == [True, False, False, True, True, False]
    assert times.usable().tolist() == [False, True, True, False, False, False]


@pytest.mark.parametrize(
    ("array", "message"),
    [
        (pa.array(["2025-06-30"]), r"column 'when' holds text, not times; .*pandas.to_datetime.*CAST"),
        (pa.array(["2025-06-30"]).dictionary_encode(), "holds text, not times"),
        (pa.array([1_751_284_800]), r"holds numbers, not times; .*unit=\"s\""),
        (pa.array([1.7e9]), "holds numbers, not times"),
        (pa.array([True]), "is of type bool; wanted timestamps or dates"),
        (pa.array([5], pa.time64("us")), "is of type time64"),
    ],
)
def test_refuses_other_times(array, message):
    with pytest.raises(LogError, match=message) as caught:
        read(batch(who=(1,), when=array, what=("a",)))
    assert "2025-06-30" not in str(caught.value)


def test_refuses_a_change_between_dates_and_timestamps():
    dates = pa.array([dt.date(2025, 6, 30)] * 3)
    with pytest.raises(LogError, match="column 'when' changes between dates and timestamps"):
        read(batch(), batch(when=dates))


def test_a_batch_without_any_time_changes_nothing():
    nothing = pa.array([None] * 3, pa.null())
    dates = pa.array([dt.date(2025, 6, 30)] * 3)
    (one, two), normaliser = read(batch(when=nothing), batch(when=dates))
    assert (len(one), len(two)) == (0, 3)
    assert normaliser.whole_days


@pytest.mark.parametrize(
    "what",
    [
        pa.array(["a", None, "b", "a"]),
        pa.array(["a", None, "b", "a"], pa.large_string()),
        pa.array(["a", None, "b", "a"], pa.string_view()),
        pa.array([b"a", None, b"b", b"a"]),
        pa.array(["a", "", "b", "a"]),
        pa.array(["z", "a", None, "b", "a"]).dictionary_encode().slice(1),
        pa.DictionaryArray.from_arrays(pa.array([0, None, 1, 0], pa.int8()), pa.array(["a", "b", "open"])),
        pa.DictionaryArray.from_arrays(pa.array([1, 0, 2, 1], pa.uint32()), pa.array([None, "a", "b"])),
        pa.DictionaryArray.from_arrays(
            pa.array([1, 0, 2, 1], pa.uint32()), pa.array(["", "a", "b"], pa.string_view())
        ),
    ],
)
def test_event_encodings(what):
    (rows,), normaliser = read(batch(who=range(4), when=range(4), what=what))
    assert [normaliser.codes.names[code] for code in rows.event] == ["a", "b", "a"]
    assert counts(normaliser) == {"missing_event": ("what", 1, [1])}


@pytest.mark.parametrize(
    "what", [pa.array([7, None, 12]), pa.array([7.0, np.nan, 12.0]), pa.array([7, None, 12], pa.uint8())]
)
def test_numbered_events_become_text(what):
    (rows,), normaliser = read(batch(what=what), converted=["12"])
    assert [normaliser.codes.names[code] for code in rows.event] == ["7", "12"]


@pytest.mark.parametrize(
    "what", [pa.array([1.5] * 3), pa.array([True] * 3), pa.array([dt.date(2025, 1, 1)] * 3)]
)
def test_refuses_other_events(what):
    with pytest.raises(LogError, match="column 'what' .*wanted names of events"):
        read(batch(what=what))


@pytest.mark.parametrize("name", ["entry", "lapsed", "open", "unknown"])
def test_reserved_names(name):
    reserved = batch(what=("a", name, "a"))
    with pytest.raises(LogError, match=rf"an event called '{name}'.*states = {{\"{name}\" = \"\w") as caught:
        read(reserved)
    _, normaliser = read(reserved, states={name: str(caught.value).split('"')[-2]})
    assert normaliser.n_kept == 3
    read(reserved, states={name: None})
    read(reserved, exclude={"what": [name]})


def test_unmapped_gathers_or_drops():
    events = batch(what=("view", "new", "joined"))
    _, gathered = read(events, states={"view": "seen"}, converted="joined", unmapped="other")
    assert gathered.targets == ["seen", "other", "joined"]
    (rows,), dropped = read(events, states={"view": "seen"}, converted="joined", unmapped="drop")
    assert rows.row.tolist() == [0, 2]
    assert dropped.targets == ["seen", None, "joined"]


@pytest.mark.parametrize(
    ("staff", "values"),
    [
        (pa.array(["y", None, "n"]), ["y", "n"]),
        (pa.array(["y", None, "n"], pa.string_view()), ["y", "n"]),
        (pa.array(["y", None, "n"]).dictionary_encode(), ["y", "n"]),
        (pa.array([True, None, True]), True),
        (pa.array([0, None, 4], pa.int8()), [0, 4, 260]),
        (pa.array([0.0, None, 4.0]), [0, 4]),
    ],
)
def test_exclude(staff, values):
    (rows,), normaliser = read(batch(staff=staff), exclude={"staff": values})
    assert rows.row.tolist() == [1]
    assert counts(normaliser) == {"excluded": ("staff", 2, [0, 2])}


def test_exclude_never_wraps_numbers():
    (rows,), _ = read(batch(staff=pa.array([4, 4, 4], pa.int8())), exclude={"staff": [260]})
    assert len(rows) == 3


@pytest.mark.parametrize(
    ("staff", "values"), [(["y"] * 3, [1]), ([1] * 3, ["1"]), ([True] * 3, ["true"]), ([1] * 3, True)]
)
def test_exclude_refuses_values_that_can_never_match(staff, values):
    with pytest.raises(
        LogError, match="exclude: column 'staff' is of type .* write them as the column has them"
    ):
        read(batch(staff=staff), exclude={"staff": values})


def test_sequence():
    (rows,), normaliser = read(batch(seq=pa.array([3.0, np.nan, 1.0])), sequence="seq")
    assert rows.sequence.tolist() == [3, 2**63 - 1, 1]
    assert counts(normaliser) == {"missing_sequence": ("seq", 1, [1])}
    with pytest.raises(LogError, match="column 'seq' is of type string; wanted whole numbers"):
        read(batch(seq=["1"] * 3), sequence="seq")


@pytest.mark.parametrize("gone", [[True, None, False], [1, None, 0], [1.0, None, 0.0]])
def test_ended_before(gone):
    (rows,), normaliser = read(batch(gone=gone), ended_before="gone")
    assert rows.ended.tolist() == [True, False, False]
    assert rows.ended.dtype == bool
    assert counts(normaliser) == {"missing_ended_before": ("gone", 1, [1])}


def test_ended_before_refuses_other_numbers():
    with pytest.raises(LogError, match="holds other numbers than 0 and 1"):
        read(batch(gone=[0, 1, 2]), ended_before="gone")


VALUES = [
    pa.array([3, None, -2]),
    pa.array([3, None, -2], pa.int8()),
    pa.array([3.0, None, -2.0], pa.float32()),
    pa.array([3.0, np.nan, -2.0]),
    pa.array([3.0, np.inf, -2.0]),
    pa.array([3.0, -np.inf, -2.0]),
    pa.array([Decimal("3.00"), None, Decimal("-2.00")]),
    pa.array([Decimal("3.00"), None, Decimal("-2.00")], pa.decimal256(60, 2)),
    pa.array([Decimal(7), Decimal(3), None, Decimal(-2)]).slice(1),
    pa.array([3, None, -2]).dictionary_encode(),
]


@pytest.mark.parametrize("amount", VALUES, ids=lambda array: str(array.type))
def test_values_of_any_type_of_number(amount):
    (rows,), normaliser = read(batch(amount=amount), value="amount")
    assert rows.value.tolist() == [3_000_000, 0, -2_000_000]
    assert rows.value.dtype == np.int64
    assert counts(normaliser) == {"missing_value": ("amount", 1, [1])}
    assert rows.row.tolist() == [0, 1, 2]


@pytest.mark.parametrize(
    ("amount", "millionths"),
    [
        (pa.array([19.99, 0.1, 1e-7]), [19_990_000, 100_000, 0]),
        (pa.array([1_234_567_890_123.375, -8e12, 0.0000014]), [1_234_567_890_123_375_000, -8 * 10**18, 1]),
        (pa.array([Decimal("0.000001"), Decimal("9000000000000"), Decimal("-9E12")]), [1, 9 * 10**18, -9 * 10**18]),
        (pa.array([Decimal("0.00000051"), Decimal("0.0000005"), Decimal("-1.9999995")]), [1, 0, -2_000_000]),
        (pa.array([9_000_000_000_000, -9_000_000_000_000, 0]), [9 * 10**18, -9 * 10**18, 0]),
        (pa.array([None, None, None], pa.null()), [0, 0, 0]),
    ],
)
def test_values_are_kept_to_the_millionth(amount, millionths):
    (rows,), _ = read(batch(amount=amount), value="amount")
    assert rows.value.tolist() == millionths


@pytest.mark.parametrize(
    "amount",
    [
        pa.array([0, 9_000_000_000_001, 0]), pa.array([0, 2**64 - 1, 0], pa.uint64()), pa.array([0.0, -9.1e12, 0.0]),
        pa.array([Decimal(0), Decimal("9000000000000.01"), Decimal(0)]),
        pa.array([Decimal(0), Decimal(10) ** 40, Decimal(0)], pa.decimal256(60, 0)),
    ],
)  # fmt: skip
def test_values_too_large_are_refused_unless_their_row_is_left_out(amount):
    with pytest.raises(LogError, match=r"column 'amount' holds (a value beyond 9,000,000,000,000|whole numbers above)"):
        read(batch(amount=amount), value="amount")
    if amount.type != pa.uint64():
        (rows,), normaliser = read(batch(amount=amount, what=("a", None, "b")), value="amount")
        assert rows.value.tolist() == [0, 0]
        assert set(counts(normaliser)) == {"missing_event"}


@pytest.mark.parametrize("amount", [["5", "6", "7"], [True, False, True], [dt.date(2025, 1, 1)] * 3])
def test_values_have_to_be_numbers(amount):
    with pytest.raises(LogError, match=r"column 'amount' is of type .*; wanted numbers: what each event is worth"):
        read(batch(amount=amount), value="amount")


def test_missing_values_of_rows_left_out_are_no_finding():
    (rows,), normaliser = read(batch(what=("a", None, "b"), amount=[None, None, 1.5]), value="amount")
    assert rows.value.tolist() == [0, 1_500_000]
    assert counts(normaliser) == {"missing_event": ("what", 1, [1]), "missing_value": ("amount", 1, [0])}


def test_midnights():
    midnights = batch(when=(0, DAY, 5 * DAY))
    assert counts(read(midnights)[1]) == {"midnight_times": ("when", 3, [])}
    assert counts(read(midnights, batch())[1]) == {}


def test_dictionaries_of_times_and_customers():
    frame = pd.DataFrame({"who": pd.Categorical(["x", None, "y"]), "what": pd.Categorical(["a", "b", "a"])})
    encoded = pa.array([NOON, NOON, None], pa.timestamp("us", "UTC")).dictionary_encode()
    (rows,), normaliser = read(batch(who=pa.array(frame["who"]), when=encoded, what=pa.array(frame["what"])))
    assert rows.time.tolist() == [NOON]
    assert set(counts(normaliser)) == {"missing_customer", "missing_time"}


def test_an_empty_batch():
    (rows,), normaliser = read(batch(who=pa.array([], pa.int64()), when=(), what=pa.array([], pa.string())))
    assert len(rows) == 0
    assert normaliser.findings.n_unreadable == 0
