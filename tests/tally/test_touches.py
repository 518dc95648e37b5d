"""What journeys touch and what they are worth: the tables on a log small enough to check by hand, and their limits."""

from __future__ import annotations

from decimal import Decimal
from pathlib import Path
from typing import Any
from unittest.mock import patch

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest

import journeys as jn
from journeys.errors import LogError
from journeys.intake import batches
from journeys.kernels import touch_counts
from journeys.tally import order
from journeys.tally.tables import KEYS

# One letter a day; "+" joins, "-" declines. Silence is longer than the log, so that "E" stays open.
STORIES = {1: "ABA+", 2: "C-", 3: "BA+", 4: "+", 5: "E"}


def log(stories: dict[Any, str] = STORIES) -> pd.DataFrame:
    names = {"+": "joined", "-": "declined"}
    rows = [
        (customer, pd.Timestamp("2025-01-01", tz="UTC") + pd.Timedelta(days=day), names.get(letter, letter))
        for customer, story in stories.items()
        for day, letter in enumerate(story)
    ]
    frame = pd.DataFrame(rows, columns=["who", "when", "what"])
    frame["amount"] = np.where(frame["what"] == "joined", 100.5, -1.0)
    frame["country"] = np.where(frame["who"].astype(str) == "1", "NL", "BE")
    return frame


def rules(**more: Any) -> jn.JourneyRules:
    settings = {"log_start": "2025-01-01", "as_of": "2025-01-20", "complete_history": True} | more
    return jn.JourneyRules("who", "when", "what", converted="joined", churned="declined", silence="100d", **settings)


def summed(tally: jn.Tally, name: str, keys: list[str], sums: list[str]) -> dict[tuple[Any, ...], tuple[int, ...]]:
    frame = tally.table(name).groupby(keys)[sums].sum()
    return {key: tuple(int(one) for one in row) for key, row in zip(frame.index, frame.to_numpy(), strict=True)}


def test_a_log_small_enough_to_check_by_hand() -> None:
    tally = jn.tally(log(), rules(touchpoints=["C", "A", "B"], value="amount"))
    assert tally.touchpoints == ("C", "A", "B")
    # n, first, last, value in millionths: the first customer's 97.5 and the third's 98.5.
    assert summed(tally, "touches", ["state", "outcome", "distinct"], ["n", "first", "last", "value"]) == {
        ("A", "joined", 2): (2, 1, 2, 196_000_000),
        ("B", "joined", 2): (2, 1, 0, 196_000_000),
        ("C", "declined", 1): (1, 1, 1, -2_000_000),
        ("none of them", "joined", 0): (1, 0, 0, 100_500_000),
        ("none of them", "open", 0): (1, 0, 0, -1_000_000),
    }
    assert summed(tally, "touch_sets", ["outcome", "set"], ["n", "value"]) == {
        ("joined", 0b110): (2, 196_000_000), ("declined", 0b001): (1, -2_000_000),
        ("joined", 0): (1, 100_500_000), ("open", 0): (1, -1_000_000),
    }  # fmt: skip
    assert tally.table("journeys")["value"].sum() == 293_500_000
    people = tally.table("customers")
    assert people["value"].sum() == 293_500_000
    assert people["largest_value"].max() == 100_500_000


def test_all_states_have_their_bits_in_alphabetical_order() -> None:
    """A state that turns up late, or is named as a stage and never turns up, moves no bit."""
    tally = jn.tally(log({1: "ZBA+", 2: "C-"}), rules(touchpoints="all", stages=["Q", "Z"]))
    assert tally.touchpoints == ("A", "B", "C", "Z")
    assert summed(tally, "touch_sets", ["outcome", "set"], ["n"]) == {
        ("declined", 0b0100): (1,), ("joined", 0b1011): (1,)
    }  # fmt: skip
    with patch.object(batches, "_FEW_ROWS", 1):
        frame = pa.Table.from_pandas(log({1: "ZBA+", 2: "C-"}), preserve_index=False)
        slowly = jn.tally(frame.to_reader(max_chunksize=1), rules(touchpoints="all", stages=["Q", "Z"]))
    assert slowly == tally


def test_nothing_is_counted_unless_asked_for() -> None:
    tally = jn.tally(log(), rules())
    for name in ("touches", "touch_sets"):
        assert len(tally.table(name)) == 0
        assert not {"value"} & set(tally.table(name))
    assert "value" not in tally.table("journeys")
    assert "largest_value" not in tally.table("customers")
    assert tally.touchpoints == ()


def many(n: int, first: int = 0) -> pd.DataFrame:
    """Return a log of one journey each through state 0 and another, of `n` states."""
    frames = [log({f"{i}": "A+"}).assign(who=f"{i}") for i in range(first, first + n)]
    frame = pd.concat(frames, ignore_index=True)
    return frame.assign(what=np.where(frame["what"] == "A", "s" + frame["who"].str.zfill(2), frame["what"]))


@pytest.mark.parametrize(("n", "sets"), [(15, True), (16, False), (63, False)])
@pytest.mark.parametrize("named", [False, True])
def test_sets_are_counted_for_fifteen_touchpoints(n: int, sets: bool, named: bool) -> None:
    states = [f"s{i:02}" for i in range(n)]
    tally = jn.tally(many(n), rules(touchpoints=states[::-1] if named else "all"))
    assert summed(tally, "touches", ["state", "distinct"], ["n", "first", "last"]) == {
        (state, 1): (1, 1, 1) for state in states
    }
    place = {state: i for i, state in enumerate(tally.touchpoints)}
    expected = {1 << place[state] for state in states} if sets else set()
    assert set(tally.table("touch_sets")["set"]) == expected


def test_more_than_63_states_have_to_be_named() -> None:
    with pytest.raises(LogError, match=r'touchpoints: got "all", but there are more than 63 states; wanted up to 63'):
        jn.tally(many(64), rules(touchpoints="all"))
    parts = [jn.tally(many(32, first), rules(touchpoints="all")) for first in (0, 32)]
    with pytest.raises(LogError, match=r'touchpoints: got "all", but there are more than 63 states'):
        parts[0] + parts[1]
    assert jn.tally(many(64), rules(touchpoints=["s63"])).touches["first"].sum() == 1


@pytest.mark.parametrize("sizes", [(4, 11), (8, 8), (16, 1)])
def test_tallies_with_other_states_add_up(sizes: tuple[int, int]) -> None:
    """Bits move to where the states of both stand, and sets go where both together are too many for them."""
    first, second = many(sizes[1], sizes[0]), many(sizes[0])
    both = rules(touchpoints="all", value="amount")
    whole = jn.tally(pd.concat([first, second]), both)
    assert jn.tally(first, both) + jn.tally(second, both) == whole
    assert jn.tally(second, both) + jn.tally(first, both) == whole
    assert (len(whole.touch_sets["n"]) > 0) == (sum(sizes) <= 15)


@pytest.mark.parametrize("touchpoints", ["all", ["B", "A"]])
def test_parts_by_group(touchpoints: Any, tmp_path: Path) -> None:
    grouped = rules(touchpoints=touchpoints, value="amount", by="country")
    tally = jn.tally(log({1: "AZB+", 2: "ZCB-", 3: "B"}), grouped)
    parts = tally.split("country")
    part = parts[("BE",)]
    assert summed(part, "touches", ["state", "distinct"], ["n"])["B", 1 if touchpoints != "all" else 3] is not None
    names = [
        {name for i, name in enumerate(part.touchpoints) if one >> i & 1} for one in part.table("touch_sets")["set"]
    ]
    expected = [{"B"}, {"Z", "C", "B"}] if touchpoints == "all" else [{"B"}, {"B"}]
    assert sorted(map(sorted, names)) == sorted(map(sorted, expected))
    again = parts[("NL",)] + part
    for name in KEYS:
        pd.testing.assert_frame_equal(again.table(name), tally.table(name))
    part.save(tmp_path / "part.parquet")
    assert jn.Tally.load(tmp_path / "part.parquet") == part


def test_a_part_of_too_many_states_has_no_sets_to_add() -> None:
    """With 16 states there are no sets, and a part that sees fewer brings none back."""
    frame = many(16)
    frame["country"] = np.where(frame["who"] == "0", "NL", "BE")
    grouped = rules(touchpoints="all", by="country")
    few = jn.tally(frame, grouped).where(country="NL")
    other = jn.tally(frame[frame["country"] == "NL"].assign(who="x"), grouped)
    assert (few.states, len(few.touch_sets["n"]), len(other.touch_sets["n"])) == (("s00",), 0, 1)
    # Both hold some of the groups, as far as adding goes.
    other = jn.tally(pd.concat([frame.assign(who="x"), frame.assign(country="FR", who="y")]).head(40), grouped)
    added = few + other.where(country="NL")
    assert len(added.touch_sets["n"]) == 0
    assert added.touches["n"].sum() == few.touches["n"].sum() + other.where(country="NL").touches["n"].sum()


def test_journeys_cut_by_a_period_stand_in_no_table_of_touches() -> None:
    tally = jn.tally(log(), rules(touchpoints=["A", "B", "C"], value="amount", split_at="2025-01-03T12:00:00Z"))
    early = "before 2025-01-03T12:00:00Z"
    frame = tally.table("journeys")
    assert frame["n"].sum() == 5
    cut = frame[(frame["period"] == early) & (frame["outcome"] == "open")]
    assert (cut["n"].sum(), cut["value"].sum(), cut["steps"].sum()) == (2, 0, 0)
    assert summed(tally, "touches", ["state", "outcome"], ["n"]) == {
        ("A", "joined"): (1,), ("B", "joined"): (1,), ("C", "declined"): (1,), ("none of them", "joined"): (1,),
    }  # fmt: skip
    assert tally.table("touch_sets")["n"].sum() == 3


def test_a_purchase_told_twice_is_worth_one() -> None:
    frame = log({1: "A++"})
    frame["when"] = frame["when"].iloc[0] + pd.to_timedelta([0, 60, 90], unit="min")
    tally = jn.tally(frame, rules(value="amount"))
    assert tally.table("journeys")["value"].tolist() == [99_500_000]
    # An hour and more apart they are two.
    frame["when"] = frame["when"].iloc[0] + pd.to_timedelta([0, 60, 121], unit="min")
    assert sum(jn.tally(frame, rules(value="amount")).table("journeys")["value"]) == 200_000_000


def test_rows_of_other_value_are_no_duplicates() -> None:
    frame = pd.concat([log({1: "A+"}), log({1: "A"}), log({1: "A"}).assign(amount=7.0)], ignore_index=True)
    tally = jn.tally(frame, rules(value="amount", duplicates="drop"))
    assert sum(tally.table("journeys")["value"]) == 106_500_000
    assert tally.findings.set_index("code")["n"]["duplicate"] == 1
    assert jn.tally(frame, rules(duplicates="drop")).findings.set_index("code")["n"]["duplicate"] == 2


def test_exact_sums_of_decimals_and_refunds(tmp_path: Path) -> None:
    """A thousand journeys of nearly nine million million each: no sum is rounded, whichever way they are added."""
    amounts = [Decimal("8999999999999.999999"), Decimal("-8999999999999.999998")] * 500
    frame = pd.concat([log({f"c{i}": "+"}) for i in range(1_000)], ignore_index=True)
    frame["amount"] = pd.Series(amounts, dtype=pd.ArrowDtype(pa.decimal128(30, 6)))
    tally = jn.tally(frame, rules(value="amount"))
    assert sum(tally.table("journeys")["value"]) == 500
    assert sum(tally.table("customers")["value"]) == 500
    parts = [jn.tally(frame[frame.index % 2 == part], rules(value="amount")) for part in (0, 1)]
    assert sum(parts[1].table("journeys")["value"]) == -8999999999999999998 * 500
    assert sum(parts[1].table("customers")["value"]) == -8999999999999999998 * 500
    assert set(parts[1].table("customers")["largest_value"]) == {0}
    assert parts[0] + parts[1] == tally
    tally.save(tmp_path / "tally.parquet")
    assert jn.Tally.load(tmp_path / "tally.parquet") == tally


@pytest.mark.parametrize("chunk", [1, 100])
@pytest.mark.parametrize("shuffled", [False, True])
def test_values_of_one_customer_too_large_to_add_are_refused(chunk: int, shuffled: bool) -> None:
    """Also where later events would bring the sum down again, however the stream is cut."""
    frame = log({1: "AAAA+", 2: "A"}).assign(amount=[4e12, 4e12, 4e12, -4e12, -4e12, 1.0])
    if shuffled:
        frame = frame.iloc[::-1]
    frame = pa.Table.from_pandas(frame, preserve_index=False)
    with (
        patch.object(batches, "_FEW_ROWS", 1),
        patch.object(order, "CHUNK_ROWS", chunk),
        pytest.raises(LogError, match="column 'amount': the values of one customer add up to more than 9,000,000,000"),
    ):
        jn.tally(frame.to_reader(max_chunksize=chunk), rules(value="amount"))


def test_large_values_that_fit_are_added_the_long_way() -> None:
    frame = log({1: "AAAA+", 2: "AA+"}).assign(amount=[4e12, 4e12, -4e12, 4e12, -7e12, -8e12, 8e12, 8e12])
    tally = jn.tally(frame, rules(value="amount"))
    assert sorted(tally.table("journeys")["value"]) == [10**18, 8 * 10**18]


def test_the_room_for_running_sums_is_judged_by_row() -> None:
    value = np.array([5, 5, -5, 9, 9], np.int64) * 10**17
    begin, before = np.array([0, 3]), np.array([8, 7]) * 10**18
    touch_counts._check_room(value[:3], begin[:1], before[:1])
    with pytest.raises(OverflowError):
        touch_counts._check_room(value, begin, np.array([8, 75 * 10**17 // 10**18 + 1]) * 10**18)
    with pytest.raises(OverflowError):
        touch_counts._check_room(-value, begin, -before - 10**18)


def test_the_order_of_rows_does_not_depend_on_the_workers() -> None:
    frame = pd.concat([many(12), many(12, 30).assign(what="s03")])
    settings = rules(touchpoints="all", stages=["s03", "s01"])
    tally = jn.tally(frame, settings, n_workers=1)
    assert len(tally.stages["n"]) > 12
    for n_workers in (2, 3, 7):
        assert jn.tally(frame, settings, n_workers=n_workers) == tally
