"""Small random logs that bring every rule to bear, and random rules to read them by.

Customers, events and times are few and the times lie on a coarse grid, so that ties, gaps equal to the
silence, repeated outcomes and rows at the very edges of the log happen all the time. One builder serves
both sources of chance: a seeded numpy generator (`random_log`) and hypothesis (`logs`), which can shrink.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Sequence
from decimal import Decimal
from functools import partial
from typing import Any, NamedTuple, Protocol, TypeVar
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pyarrow as pa
from hypothesis import strategies as st

T = TypeVar("T")

HOUR_US = 3_600_000_000
DAY_US = 24 * HOUR_US
# 2024-10-27T00:00:00Z: an hour later the clocks of Amsterdam show one hour a second time.
START_US = 1_729_987_200_000_000

STATES = ("visit", "price", "basket", "café ☕")
OUTCOMES = ("joined", "declined", "left")
CONVERTED_FIRST = (("joined",), ("joined", "left"), ("joined",))
INTEGER_IDS = (0, 1, -5, 2**53 + 1, -(2**63), 2**63 - 1)
# Amounts of money of each type; as millionths they need more than 32 bits, and no sum of 3,500 outgrows 63.
AMOUNTS: dict[str, tuple[Any, ...]] = {
    "whole": (5, 0, -3, None, 700_000_000, -(10**9)),
    "decimal": (Decimal("19.99"), Decimal("-0.000001"), None, Decimal("123456789.345678"), Decimal(0)),
    "float": (19.99, -5.25, 0.1, float("nan"), float("inf"), 1e-7, 1234567890.34, -700_000_000.0),
}
TEXT_IDS = ("a", "b", "1", "member-000000017", "Zoë", "a" * 40, " a", "b\x00c")


class RandomLog(NamedTuple):
    """One log three ways, with the rules for the package and for the slow reading."""

    frame: pd.DataFrame
    rules: dict[str, Any]
    rows: list[tuple[Any, ...]]
    slow: dict[str, Any]


class Chance(Protocol):
    """Where the builder's choices come from."""

    def whole(self, low: int, high: int) -> int:
        """Return a whole number from low to high, both possible."""


class NumpyChance:
    """Choices from a seeded generator."""

    def __init__(self, rng: np.random.Generator) -> None:
        self._rng = rng

    def whole(self, low: int, high: int) -> int:
        """Return a whole number from low to high, both possible."""
        return int(self._rng.integers(low, high + 1))


class HypothesisChance:
    """Choices that hypothesis makes and can shrink (towards low)."""

    def __init__(self, draw: st.DrawFn) -> None:
        self._draw = draw

    def whole(self, low: int, high: int) -> int:
        """Return a whole number from low to high, both possible."""
        return self._draw(st.integers(low, high))


def pick(chance: Chance, options: Sequence[T]) -> T:
    """Choose one of several."""
    return options[chance.whole(0, len(options) - 1)]


def once_in(chance: Chance, n: int) -> bool:
    """Be true once in n times."""
    return chance.whole(1, n) == n


def random_log(rng: np.random.Generator, *, n_rows: int | None = None) -> RandomLog:
    """Return a random log; `n_rows` asks for a long one of few customers (busy ones)."""
    return build(NumpyChance(rng), n_rows)


@st.composite
def logs(draw: st.DrawFn) -> RandomLog:
    """Draw a random log."""
    return build(HypothesisChance(draw), None)


def build(chance: Chance, n_rows: int | None) -> RandomLog:
    """Make the rules, then rows that suit them."""
    whole_days = once_in(chance, 5)
    unit = DAY_US if whole_days else HOUR_US
    n_ticks = pick(chance, (12, 24, 6)) if n_rows is None else n_rows // 4
    rules, slow = random_rules(chance, whole_days, n_ticks)
    names = random_names(chance, slow)
    ids: Sequence[Any] = pick(chance, (INTEGER_IDS, TEXT_IDS))
    first = chance.whole(0, len(ids) - 1)
    ids = [ids[(first + step) % len(ids)] for step in range(chance.whole(1, 4))]
    faults = once_in(chance, 2)
    jitter = not whole_days and once_in(chance, 3)
    amounts = pick(chance, tuple(AMOUNTS)) if "value" in rules else ""
    rows: list[tuple[Any, ...]] = []
    for _ in range(n_rows if n_rows is not None else chance.whole(1, 30)):
        if rows and once_in(chance, 8):
            rows.append(rows[chance.whole(0, len(rows) - 1)])
            continue
        # Ticks run from before the log's start to after its end, where the rules have such edges.
        time = START_US + unit * chance.whole(-2, n_ticks + 2)
        if jitter:
            time += pick(chance, (0, 0, 1, -1))
        rows.append(random_row(chance, pick(chance, ids), time, pick(chance, names), rules, faults, amounts))
    if not once_in(chance, 3):
        by_time = once_in(chance, 2)
        rows.sort(key=lambda row: (row[1] is None, row[1] or 0) if by_time else (str(row[0]), row[1] or 0))
    frame = as_frame(chance, rows, rules, whole_days, isinstance(ids[0], int), amounts)
    return RandomLog(frame, rules, rows, slow)


def random_row(
    chance: Chance, customer: Any, time: int, event: str, rules: dict[str, Any], faults: bool, amounts: str
) -> tuple[Any, ...]:
    """Make one row, now and then without its customer, time or event."""
    cells: list[Any] = [customer, time, event]
    if faults and once_in(chance, 12):
        cells[chance.whole(0, 2)] = None
    sequence = None
    if "sequence" in rules and not (faults and once_in(chance, 12)):
        sequence = chance.whole(0, 2)
    ended = once_in(chance, 4) if "ended_before" in rules else None
    columns: dict[str, Any] = {}
    if "exclude" in rules:
        columns["staff"] = pick(chance, ("no", "no", "yes", "test", None))
    if "country" in rules.get("by", ()):
        columns["country"] = pick(chance, ("NL", "BE", "NL", None, ""))
    if "size" in rules.get("by", ()):
        columns["size"] = chance.whole(1, 3)
    if "value" in rules:
        columns["amount"] = pick(chance, AMOUNTS[amounts])
    return (*cells, sequence, ended, columns)


def random_names(chance: Chance, slow: dict[str, Any]) -> list[str]:
    """Choose the events that occur: states, outcomes, and with a mapping the events it names and others."""
    names = list(STATES[: chance.whole(2, 4)])
    if slow["states"] is not None:
        names += ["look", "look again", "end", "noise"]
    outcomes = [*slow["converted"], *slow["churned"]]
    return names * 2 + outcomes * chance.whole(1, 3)


def random_rules(chance: Chance, whole_days: bool, n_ticks: int) -> tuple[dict[str, Any], dict[str, Any]]:
    """Return keyword arguments for `JourneyRules` and for `read_log` that say the same."""
    unit, letter = (DAY_US, "d") if whole_days else (HOUR_US, "h")
    n_outcomes = chance.whole(1, 3)
    converted = list(CONVERTED_FIRST[n_outcomes - 1])
    churned = [name for name in OUTCOMES[:n_outcomes] if name not in converted]
    if n_outcomes == 2 and once_in(chance, 2):
        converted, churned = ["joined"], ["declined"]
    silence = pick(chance, (3, 2, 5, 1, None))
    same = pick(chance, (1, 2))
    start = pick(chance, (0, -2, 2))
    end = pick(chance, (n_ticks, n_ticks + 2, n_ticks - 2))
    rules: dict[str, Any] = {
        "customer": "customer",
        "time": "time",
        "event": "event",
        "converted": converted,
        "churned": churned,
        "silence": None if silence is None else f"{silence}{letter}",
        "same_outcome_within": f"{same}{letter}",
        "log_start": as_text(START_US + start * unit, whole_days),
        "as_of": as_text(START_US + end * unit, whole_days),
        "repeats": pick(chance, ("keep", "merge")),
        "duplicates": pick(chance, ("keep", "drop")),
        "complete_history": once_in(chance, 4),
    }
    slow = {key: rules[key] for key in ("converted", "churned", "repeats", "duplicates", "complete_history")}
    slow |= {
        "silence_us": None if silence is None else silence * unit,
        "same_outcome_us": same * unit,
        "log_start_us": START_US + start * unit,
        "as_of_us": START_US + end * unit,
        "whole_days": whole_days,
        "states": None,
    }
    if once_in(chance, 3):
        rules["after_outcome"] = "stop"
        if once_in(chance, 2):
            rules["complete_history"] = slow["complete_history"] = True
        if not rules["complete_history"]:
            rules["ended_before"] = "ended"
    if once_in(chance, 3):
        rules["sequence"] = "sequence"
    if once_in(chance, 3):
        rules["exclude"] = {"staff": ["yes", "test"][: chance.whole(1, 2)]}
    if once_in(chance, 3):
        rules["states"] = {"look": "visit", "look again": "visit", "end": "joined", "basket": "the basket"}
        if once_in(chance, 2):
            rules["states"]["noise"] = None
        rules["unmapped"] = pick(chance, ("keep", "drop", "other", "visit"))
    names = ("after_outcome", "exclude", "states", "unmapped")
    if once_in(chance, 4):
        random_groups(chance, rules, slow, whole_days, n_ticks)
    if once_in(chance, 4):
        rules["opens"] = slow["opens"] = list(pick(chance, (["visit"], ["price", "visit"], ["price"], ["nowhere"])))
    if once_in(chance, 4):
        rules["stages"] = slow["stages"] = pick(chance, (["visit", "price"], ["price", "nowhere", "visit"], ["price"]))
    if once_in(chance, 3):
        touchpoints = pick(chance, (["price", "visit"], "all", ["nowhere", "café ☕", "the basket"], ["visit"], "all"))
        rules["touchpoints"] = slow["touchpoints"] = touchpoints
    if once_in(chance, 3):
        rules["value"] = slow["value"] = "amount"
    if once_in(chance, 3):
        many = [chance.whole(1, 9) for _ in range(chance.whole(1, 3))]
        rules["horizons"], slow["horizons_us"] = [f"{n}{letter}" for n in many], tuple(n * unit for n in many)
    slow |= {key: rules[key] for key in names if key in rules}
    return rules, slow


def random_groups(
    chance: Chance, rules: dict[str, Any], slow: dict[str, Any], whole_days: bool, n_ticks: int
) -> None:
    """Add rules that group journeys, the same for both readings."""
    by = [name for name in ("country", "size", "came_after") if once_in(chance, 2)]
    if once_in(chance, 2):
        rules["cohort"] = pick(chance, ("day", "week", "month"))
        rules["timezone"] = pick(chance, ("Europe/Amsterdam", "UTC", "America/New_York"))
        slow["cohort_of"] = partial(cohort_of, rules["cohort"], "UTC" if whole_days else rules["timezone"])
        by.append("cohort")
    first, last = (slow[name] for name in ("log_start_us", "as_of_us"))
    if once_in(chance, 2):
        unit = DAY_US if whole_days else HOUR_US
        ticks = {chance.whole(0, n_ticks) for _ in range(chance.whole(1, 2))}
        cuts = sorted(cut for cut in (START_US + unit * tick for tick in ticks) if first < cut <= last)
        if cuts:
            rules["split_at"] = [as_text(cut, whole_days) for cut in cuts]
            slow["splits_us"] = cuts
            by.append("period")
    if by:
        rules["by"] = slow["by"] = by


def cohort_of(cohort: str, timezone: str, time_us: int) -> str:
    """Return the name of the cohort that a moment lies in."""
    when = dt.datetime(1970, 1, 1, tzinfo=dt.UTC) + dt.timedelta(microseconds=time_us)
    day = when.astimezone(ZoneInfo(timezone)).date()
    if cohort == "month":
        return f"{day:%Y-%m}"
    return (day - dt.timedelta(days=day.weekday() if cohort == "week" else 0)).isoformat()


def as_text(time_us: int, whole_days: bool) -> str:
    """Return a time as the rules would have it written."""
    when = dt.datetime(1970, 1, 1, tzinfo=dt.UTC) + dt.timedelta(microseconds=time_us)
    return when.date().isoformat() if whole_days else when.isoformat()


def as_frame(
    chance: Chance,
    rows: list[tuple[Any, ...]],
    rules: dict[str, Any],
    whole_days: bool,
    integer_ids: bool,
    amounts: str,
) -> pd.DataFrame:
    """Return the rows as a data frame, in one of several types that hold the same values."""
    customers, times, events, sequences, ended, columns = (list(part) for part in zip(*rows, strict=True))
    frame = pd.DataFrame({"customer": customer_column(customers, integer_ids)})
    frame["time"] = time_column(chance, times, whole_days)
    empty = pick(chance, (None, ""))
    texts = pd.Series([empty if event is None else event for event in events], dtype="string")
    frame["event"] = texts.astype("category") if once_in(chance, 3) else texts
    if "sequence" in rules:
        missing = any(value is None for value in sequences)
        frame["sequence"] = pd.array(sequences, dtype="Int64" if missing else "int64")
    if "ended_before" in rules:
        frame["ended"] = pd.array(ended, dtype="bool")
    if "exclude" in rules:
        frame["staff"] = pd.array([cells["staff"] for cells in columns], dtype="string")
    if "country" in rules.get("by", ()):
        countries = pd.array([cells["country"] for cells in columns], dtype="string")
        frame["country"] = pd.Series(countries).astype("category") if once_in(chance, 3) else countries
    if "size" in rules.get("by", ()):
        frame["size"] = pd.array([cells["size"] for cells in columns], dtype="int64")
    if "value" in rules:
        cells_of = [cells["amount"] for cells in columns]
        kinds = {"whole": "Int64", "decimal": pd.ArrowDtype(pa.decimal128(25, 6)), "float": "float64"}
        frame["amount"] = pd.Series(cells_of, dtype=kinds[amounts])
    return frame


def customer_column(customers: list[Any], integer_ids: bool) -> Any:
    """Return ids as whole numbers (nullable where one is missing) or text."""
    if not integer_ids:
        return pd.array(customers, dtype="string")
    return pd.array(customers, dtype="Int64" if None in customers else "int64")


def time_column(chance: Chance, times: list[int | None], whole_days: bool) -> Any:
    """Return times with a zone or without (then UTC), in micro- or nanoseconds; dates as plain dates."""
    stamps = pd.Series(np.array([np.datetime64("NaT") if t is None else t for t in times], "datetime64[us]"))
    if whole_days:
        return pd.Series([None if pd.isna(stamp) else stamp.date() for stamp in stamps], dtype=object)
    kind = pick(chance, ("utc", "naive", "naive ns", "zone"))
    if kind == "naive":
        return stamps
    if kind == "naive ns":
        return stamps.astype("datetime64[ns]")
    aware = stamps.dt.tz_localize("UTC")
    return aware.dt.tz_convert("Europe/Amsterdam") if kind == "zone" else aware
