"""The first sections of a summary: how the expected share comes about, the log, where journeys end, how soon."""

from __future__ import annotations

import math

import numpy as np

from journeys.markup import LEFT_OUT, count_text, short_name
from journeys.questions.overview import Overview
from journeys.questions.plain_count import PlainCount
from journeys.questions.time_to_convert import IN_THE_END, SO_FAR
from journeys.show.parts import Curve, Dot, Dots, Lines, Part, Section, Table, Words
from journeys.show.rows import (
    Row,
    amount,
    count,
    horizon_rows,
    rows_of,
    share,
    tally_of,
    time_lines,
)
from journeys.show.words import UNDECIDED, listed, outcome_words, percent

LOG_FIRST = (
    'Log and model differ here by more than their intervals: go by the log as far as it reaches, and see "Whether to '
    'believe it" below.'
)


def opening(overview: Overview) -> str:
    """Return the headline: plain count, undecided, and what is expected in the end, in one sentence."""
    plain = overview.plain
    end = rows_of(overview.conversion.to_frame(), measure="converted", horizon=IN_THE_END)[0]
    return (
        f"{converted_words(overview)} so far {count_text(plain.n_converted)} of {count_text(plain.n_journeys)} "
        f"journeys of {count_text(plain.n_people)} people, {_of_all(plain.n_converted, plain)}; "
        f"{count_text(plain.n_undecided)} undecided "
        f"yet; expected in the end {share(end, end['flag'])}"
    )


def converted_words(overview: Overview) -> str:
    """Return the names of the converted outcomes, as in "joined or bought"."""
    return listed(tuple(short_name(name) for name in tally_of(overview).rules.converted))


def reconciliation(overview: Overview) -> Section:
    """Return how the expected share comes out of the plain one, line by line."""
    rows = [
        (row["line"], count(row), share(row, row["note"]), row["note"]) for row in rows_of(overview.reconciliation())
    ]
    caption = "From the plain count to the expected share"
    return Section(
        "Why the expected share is not the plain one",
        [Table(caption, ["what", "journeys", "share", "why"], rows)],
    )


def the_log(overview: Overview) -> Section:
    """Return what the numbers rest on: dates, people, journeys, and what was left out."""
    tally, plain = tally_of(overview), overview.plain
    size = (
        f"{count_text(plain.n_journeys)} journeys of {count_text(plain.n_people)} people; the start of "
        f"{count_text(plain.n_sure)} was seen, {count_text(plain.n_undecided)} are {UNDECIDED}."
    )
    found = rows_of(tally.findings)
    rows = [(row["code"], row["column"], f"{row['n']:,}", row["message"]) for row in found]
    caption = "What was left out or looked odd"
    table = Table(caption, ["finding", "column", "rows", "what it means"], rows, ours=("finding", "what it means"))
    return Section(
        "The log",
        [
            Words(size),
            table if rows else Words("Nothing was left out and nothing looked odd."),
        ],
    )


def endings(overview: Overview) -> Section:
    """Return where journeys end: so far, and expected in the end."""
    plain, rules = overview.plain, tally_of(overview).rules
    frame = overview.endings.to_frame()
    rows, dots = [], []
    for outcome, n in plain.n_by_outcome.items():
        row = rows_of(frame, start_state="entry", outcome=outcome)[0]
        name = outcome_words(outcome, rules)
        rows.append((name, count_text(n), _of_all(n, plain), share(row), row["flag"]))
        dots.append(share_dot(name, row))
    rows.append((UNDECIDED, count_text(plain.n_undecided), _of_all(plain.n_undecided, plain), "", ""))
    rows.append(("all journeys", count_text(plain.n_journeys), percent(1.0), "", ""))
    caption = "Journeys by how they end"
    columns = ["outcome", "journeys so far", "share so far", "expected in the end", "note"]
    picture = Dots("Expected in the end, of all who come in", "% of journeys", dots)
    return Section("Where journeys end", [Table(caption, columns, rows), picture])


def how_long(overview: Overview) -> Section:
    """Return by when how many convert, and how long they take: median and 90 % before the mean."""
    columns = ["since entry", "converted, by the log", "by the model", "note"]
    table = Table("Share converted by time since entry", columns, horizon_rows(overview))
    parts: list[Part] = [Lines(time_lines(overview)), table]
    if _apart(overview):
        parts.append(Words(LOG_FIRST))
    if (picture := _curve(overview)) is not None:
        parts.append(picture)
    return Section("How long it takes", parts)


def _apart(overview: Overview) -> bool:
    """Tell whether log and model differ in some share by more than their intervals."""
    frame = overview.conversion.to_frame()
    shares = frame[(frame.measure == "converted") & (frame.horizon != SO_FAR)].set_index(["horizon", "basis"])
    both = shares[["low", "high"]].unstack("basis").dropna()
    if both.empty:
        return False
    low, high = both["low"], both["high"]
    return bool(((low["log"] > high["model"]) | (low["model"] > high["log"])).any())


def _curve(overview: Overview) -> Curve | None:
    curve = overview.curve
    if curve is None or not curve.probability > 0:
        return None
    # As long as nearly all take: beyond it nothing rises.
    last = curve.last_time
    times = np.linspace(0.0, last, 121)
    frame = curve.to_frame(np.unique(np.floor(times)) if curve.whole else times)
    seen = curve.observed()
    seen = seen[seen["time"] <= last]
    half = rows_of(overview.conversion.to_frame(), measure="median_days")[0]
    words = amount(half)
    return Curve(
        caption=f"How many have converted ({converted_words(overview)}) by when",
        unit="days since entry",
        share_of="% of all who come in",
        time=frame[curve.clock].to_numpy(),
        share=100 * frame["estimate"].to_numpy(),
        low=100 * frame["low"].to_numpy(),
        high=100 * frame["high"].to_numpy(),
        seen_time=seen["time"].to_numpy(),
        seen_share=100 * seen["estimate"].to_numpy(),
        median=float(half["estimate"]),
        median_words=f"half by day {words}" if math.isfinite(half["estimate"]) else "",
    )


def _of_all(n: float, plain: PlainCount) -> str:
    return percent(n / plain.n_journeys) or LEFT_OUT


def share_dot(label: str, row: Row) -> Dot:
    """Return a share in a row as a dot, in percent."""
    return Dot(label, 100 * row["estimate"], 100 * row["low"], 100 * row["high"], row["flag"])
