"""Rows of results as words: what the text and the page of a summary both tell."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

from journeys.checks import duration_us
from journeys.markup import LEFT_OUT, count_text
from journeys.questions.check_rows import DIFFERS, NOTE
from journeys.questions.few_people import is_hidden
from journeys.questions.overview import Overview
from journeys.questions.time_to_convert import IN_THE_END, SO_FAR
from journeys.show.words import amount_with_interval, length_words, outcome_words, percent, share_with_interval
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    import pandas as pd

Row = Mapping[Hashable, Any]


def left_out_words(overview: Overview) -> str:
    """Return what a reader should know of the numbers that are not there; nothing where all are."""
    if overview.few is None or not overview.few.anything:
        return ""
    return (
        f"{LEFT_OUT} stands for numbers about fewer than {overview.few.least} people, and for others beside them that "
        "would tell what they are."
    )


def tally_of(overview: Overview) -> Tally:
    """Return the tally that an overview rests on."""
    tally = overview.fit.tally
    if tally is None:
        msg = "overview: its fit has no tally; wanted the overview of a fit to a log"
        raise ValueError(msg)
    return tally


def span_words(overview: Overview) -> str:
    """Return from when to when the log reaches, and the level of the intervals."""
    tally = tally_of(overview)
    fine = "%Y-%m-%d" if tally.whole_days else "%Y-%m-%d %H:%M"
    return (
        f"Log from {tally.log_start.strftime(fine)} to {tally.as_of.strftime(fine)} UTC ({tally.days:.0f} days), "
        f"{tally.n_rows:,} rows. Intervals at {100 * overview.conversion.confidence_level:g} %."
    )


def rows_of(frame: pd.DataFrame | Sequence[Row], **keys: str) -> list[Row]:
    """Return the rows with the given keys; of rows already taken out of a frame, without going through it again."""
    rows: Sequence[Row] = frame if isinstance(frame, Sequence) else frame.to_dict("records")
    return [row for row in rows if all(row[name] == value for name, value in keys.items())]


def share(row: Row, flag: str | None = None) -> str:
    """Return the share in a row with its interval."""
    if is_hidden(row["flag"] if flag is None else flag):
        return LEFT_OUT
    return share_with_interval(row["estimate"], row["low"], row["high"], row["flag"] if flag is None else flag)


def amount(row: Row) -> str:
    """Return the number of steps or days in a row with its interval."""
    if is_hidden(row["flag"]):
        return LEFT_OUT
    return amount_with_interval(row["estimate"], row["low"], row["high"])


def whole_amount(row: Row) -> str:
    """Return a whole number of steps with its interval, where that is more than the number itself."""
    if not all(math.isfinite(row[name]) for name in ("estimate", "low", "high")):
        return amount(row)
    steps, low, high = (f"{row[name]:,.0f}" for name in ("estimate", "low", "high"))
    return steps if low == high else f"{steps} ({low}–{high})"


def points(row: Row) -> str:
    """Return a change of a share in a row in percentage points, with its interval."""
    return change({**row, **{name: 100 * row[name] for name in ("estimate", "low", "high")}})


def change(row: Row) -> str:
    """Return a change in a row, its sign always written, with its interval."""
    if is_hidden(row.get("flag", "")):
        return LEFT_OUT
    estimate, low, high = (row[name] for name in ("estimate", "low", "high"))
    if not math.isfinite(estimate):
        return ""
    digits = 1 if abs(estimate) >= 1 else 2
    # what rounds to nothing has no sign
    told, *ends = (f"{round(one, digits) or 0.0:+.{digits}f}".replace("-", "−") for one in (estimate, low, high))
    return f"{told} ({ends[0]} to {ends[1]})" if math.isfinite(low) and math.isfinite(high) else told


def count(row: Row) -> str:
    """Return how many of how many a row counts."""
    if math.isnan(row["n"]) and not is_hidden(row["note"]):
        return ""
    return f"{count_text(row['n'])} of {count_text(row['of'])}"


def notes_of(*flags: str) -> str:
    """Return flags joined, each told once."""
    return "; ".join(dict.fromkeys(part for flag in flags for part in parts_of(flag)))


def parts_of(flag: str) -> list[str]:
    """Return the texts that a flag is made of."""
    return flag.split("; ") if flag else []


def horizon_rows(overview: Overview) -> list[tuple[str, str, str, str]]:
    """Return since when, share converted by the log and by the model, and note: within horizons and in the end."""
    frame = overview.conversion.to_frame()
    frame = frame[(frame["measure"] == "converted") & (frame["horizon"] != SO_FAR)]
    told = []
    for horizon in dict.fromkeys(frame["horizon"]):
        by = {row["basis"]: row for row in rows_of(frame, horizon=horizon)}
        since = horizon if horizon == IN_THE_END else f"within {length_words(duration_us(horizon, 'horizon'))}"
        log, model = (share(by[basis]) if basis in by else "" for basis in ("log", "model"))
        told.append((since, log, model, notes_of(*(row["flag"] for row in by.values()))))
    return told


def time_lines(overview: Overview) -> list[str]:
    """Return how many steps and days the converted take, one sentence each."""
    frame = overview.conversion.to_frame()
    told = []
    for unit, words in (("steps", "steps, the converting event counted"), ("days", "days from their first event")):
        median, most, mean = (rows_of(frame, measure=name)[0] for name in (f"median_{unit}", f"q90_{unit}", unit))
        told_as = whole_amount if unit == "steps" else amount
        parts = (("half take at most", told_as(median)), ("90 % at most", told_as(most)), ("the mean is", amount(mean)))
        said = [f"{start} {number}" for start, number in parts if number]
        known = said and not is_hidden(mean["flag"])
        line = f"Of those who convert, {', '.join(said)} {words}" if known else f"{unit.capitalize()}: no answer"
        notes = notes_of(*(row["flag"] for row in (median, most, mean)))
        told.append(line + (f"; {notes}" if notes else ""))
    return told


def check_rows(overview: Overview) -> list[tuple[str, str]]:
    """Return each check with its verdict, where it differs with what was compared."""
    told = []
    for row in rows_of(overview.checks.to_frame()):
        name = f"{row['check_name']} ({row['about']})" if row["about"] else row["check_name"]
        told.append((name, row["verdict"] + (f" ({row['compared']})" if is_matter(row["verdict"]) else "")))
    return told


def is_matter(verdict: str) -> bool:
    """Tell whether a verdict is something to be told more of."""
    return verdict.startswith((DIFFERS, NOTE))


def comeback_lines(overview: Overview) -> list[str]:
    """Return how many of those whose journey ended have come back, a sentence per way of ending."""
    if overview.back is None:
        return []
    frame, rules = overview.back.to_frame(), tally_of(overview).rules
    told = []
    for after in dict.fromkeys(frame["after"]):
        mine = frame[(frame["after"] == after) & (frame["measure"] == "returned")]
        so_far = rows_of(mine, horizon=SO_FAR)[0]
        if is_hidden(so_far["flag"]) or not so_far["n_absences"]:
            continue
        ended = outcome_words(after, rules)
        line = f"Of those {ended}" if after == "lapsed" else f"After {ended}"
        line += f", {percent(so_far['estimate'])} came back so far"
        later = [row for row in rows_of(mine) if row["horizon"] != SO_FAR and not math.isnan(row["estimate"])]
        if later:
            row = later[-1]
            within = length_words(duration_us(row["horizon"], "horizon"))
            line += f"; {share(row)} within {within} of their last event, those still away accounted for"
        told.append(line)
    return told
