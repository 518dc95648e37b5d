"""Groups of journeys beside each other: a wide table for files, small ones for the page, and what columns mean."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from journeys.checks import duration_us
from journeys.markup import LEFT_OUT, short_name
from journeys.questions.overview import Overview
from journeys.questions.time_to_convert import IN_THE_END, SO_FAR
from journeys.show.conversion_sections import share_dot
from journeys.show.parts import Dot, Dots, Part, Section, Table, Words
from journeys.show.rows import Row, amount, notes_of, points, rows_of, share, tally_of
from journeys.show.words import chance, length_words
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    import pandas as pd

# Longer tables of groups are not read on a page; they stand in groups.csv.
LONGEST_TABLE = 40

_MEANINGS = {
    "section": "which question a row answers",
    "start_state": "where journeys are followed from: entry, or a state",
    "state": "state that a move leaves",
    "next_state": "state or outcome that a move leads to",
    "outcome": "how journeys end; lapsed: silent for longer than the silence of the rules",
    "stage": "stage of the ordered list in the rules; entry and converted are the first and the last",
    "after": "how the journey before ended",
    "touchpoint": "state that attribution is about",
    "rule": "how conversions are credited: even over the touchpoints passed, to the first, to the last",
    "order_held": "in how many of 100 redraws of the customers the touchpoint stayed ahead of the next",
    "share_in_log": "share of converting journeys in the log that pass the touchpoint, undecided ones accounted for",
    "std_error_in_log": "standard error of that share",
    "estimate_a": "the number of all other groups",
    "estimate_b": "the number of the group",
    "p_value": "of a difference at least as large between groups that do not differ, or from a model that is right",
    "p_value_corrected": "the same, corrected for the number of comparisons",
    "check_name": "what was looked at to tell whether the model may be believed",
    "about": "the column or touchpoint that it was looked at in",
    "unit": "unit of a disagreement between model and log",
    "compared": "both sides of the comparison, in words",
    "verdict": "what came of the check",
    "advice": "what to do about it",
    "measure": "what is told",
    "horizon": "within what time since entry; so far: by the end of the log; in the end: as time goes on",
    "basis": "log: straight from the journeys; model: from the fitted chain",
    "estimate": "the number: shares from 0 to 1, steps, or days; blank where infinite or undefined (see flag)",
    "std_error": "standard error of the estimate, customers being what is redrawn",
    "low": "lower end of the interval",
    "high": "upper end of the interval",
    "confidence_level": "level of the interval",
    "n_effective": "independent trials that would tell as much",
    "n_moves": "completed moves counted",
    "change": "by how much the move is made likelier, as a probability",
    "derivative": "change of the number per unit of probability, for a small shift",
    "n_undefined": "resamples in which the number has no value",
    "n_absences": "journeys ended in that way, after which the customer could come back",
    "n_back": "of these, customers who came back so far",
    "n_reached": "journeys seen to reach the stage",
    "n_open": "of these, journeys still under way",
    "flag": "what to know before using the number; empty where there is nothing",
    "group_column": "column that journeys are grouped by",
    "group": "value of that column at a journey's first event",
    "n_journeys": "journeys begun",
    "people_at_least": "customers behind them, a lower bound",
    "differs_p_value": "of the difference in the end from all other groups, corrected for the number of groups",
}
_OF_WIDE = {
    "low": "lower end of the interval of the column before it",
    "high": "upper end of the interval of the column two before it",
}


def wide_groups(overview: Overview) -> pd.DataFrame | None:
    """Return one row per group, one column per measure with its interval; None where journeys are not grouped."""
    import pandas as pd

    if not overview.groups:
        return None
    rows: list[dict[str, Any]] = []
    for column, result in overview.groups.items():
        frame = result.to_frame()
        parts = tally_of(overview).split(column)
        p_values = _p_values(overview, column)
        for (value,), part in parts.items():
            size = _size(overview, column, value, part)
            row: dict[str, Any] = {
                "group_column": column, "group": str(value), "n_journeys": size and size.n_journeys,
                "people_at_least": size and size.n_people,
            }  # fmt: skip
            mine = rows_of(frame[frame[column] == value])
            for one in mine:
                if one["measure"]:
                    name = _wide_name(str(one["measure"]), str(one["horizon"]), str(one["basis"]))
                    row |= {name: one["estimate"], f"{name}_low": one["low"], f"{name}_high": one["high"]}
            row["differs_p_value"] = p_values.get(value, math.nan)
            row["flag"] = "; ".join(dict.fromkeys(str(one["flag"]) for one in mine if one["flag"]))
            rows.append(row)
    whole = pd.DataFrame(rows).astype({"n_journeys": "Int64", "people_at_least": "Int64"})
    last = ["differs_p_value", "flag"]
    return whole[[*(name for name in whole if name not in last), *last]]


def group_sections(overview: Overview) -> list[Section]:
    """Return a section for every group column: share converted and days, groups beside each other, and what differs."""
    return [Section(f"By {short_name(column)}", _group_parts(overview, column)) for column in overview.groups]


def column_meanings(frames: Sequence[pd.DataFrame]) -> pd.DataFrame:
    """Return what every column of some tables holds: column, meaning."""
    import pandas as pd

    names = dict.fromkeys(str(name) for frame in frames for name in frame)
    return pd.DataFrame([(name, _meaning(name)) for name in names], columns=["column", "meaning"])


def _group_parts(overview: Overview, column: str) -> list[Part]:
    by_value: dict[Any, list[Row]] = {}
    for row in rows_of(overview.groups[column].to_frame()):
        by_value.setdefault(row[column], []).append(row)
    if len(by_value) > LONGEST_TABLE:
        return [Words(f"{len(by_value):,} groups: they stand in groups.csv.")]
    differs, parts = _against_the_rest(overview, column), tally_of(overview).split(column)
    told = dict.fromkeys(row["horizon"] for mine in by_value.values() for row in mine)
    horizons = [one for one in told if one not in ("", SO_FAR, IN_THE_END)]
    rows, dots = [], []
    for value, mine in by_value.items():
        name = short_name(str(value))
        size = _size(overview, column, value, parts[value,])
        cells = [name, LEFT_OUT if size is None else f"{size.n_journeys:,}"]
        cells += [_cell(mine, "converted", horizon, "log") for horizon in horizons]
        cells += [_cell(mine, "converted", IN_THE_END, "model"), _cell(mine, "median_days", IN_THE_END, "model")]
        other = differs.get(value)
        cells += ["", ""] if other is None else [points(other), chance(other["p_value_corrected"])]
        cells.append(_notes(mine))
        rows.append(cells)
        dots.append(_dot(name, mine))
    within = [f"converted within {length_words(duration_us(one, 'horizon'))}" for one in horizons]
    columns = [short_name(column), "journeys", *within, "expected in the end", "median days, if so"]
    columns += ["differs from the rest, points", "p", "note"]
    table = Table(f"Conversion by {short_name(column)}", columns, rows)
    caption = f"Expected in the end, by {short_name(column)}"
    return [table, Dots(caption, "% of those who come in", dots, from_zero=False)]


def _size(overview: Overview, column: str, value: Any, part: Tally) -> Tally | None:
    """Return the part of the tally that a group is, None where its size is not to be told."""
    hidden = overview.few is not None and (overview.few.log or value in overview.few.groups[column].size)
    return None if hidden else part


def _dot(name: str, rows: list[Row]) -> Dot:
    found = rows_of(rows, measure="converted", horizon=IN_THE_END)
    if not found:
        return Dot(name, math.nan, math.nan, math.nan, _notes(rows))
    return share_dot(name, found[0])


def _notes(rows: list[Row]) -> str:
    return notes_of(*(str(row["flag"]) for row in rows))


def _cell(rows: list[Row], measure: str, horizon: str, basis: str) -> str:
    found = rows_of(rows, measure=measure, horizon=horizon, basis=basis)
    if not found:
        return ""
    return share(found[0]) if measure == "converted" else amount(found[0])


def _p_values(overview: Overview, column: str) -> dict[Any, float]:
    return {value: row["p_value_corrected"] for value, row in _against_the_rest(overview, column).items()}


def _against_the_rest(overview: Overview, column: str) -> dict[Any, Row]:
    """Return by group how its share that converts differs from that of all others; nothing where nobody looked."""
    result = overview.against.get(column)
    if result is None:
        return {}
    return {row[column]: row for row in rows_of(result.to_frame(), measure="reached")}


def _wide_name(measure: str, horizon: str, basis: str) -> str:
    if horizon == IN_THE_END:
        return measure if measure != "converted" else "converted_in_the_end"
    when = "so_far" if horizon == SO_FAR else f"within_{horizon}"
    return f"{measure}_{when}_by_{basis}" if horizon != SO_FAR else f"{measure}_{when}"


def _meaning(name: str) -> str:
    if name in _MEANINGS:
        return _MEANINGS[name]
    for end, words in _OF_WIDE.items():
        if name.endswith(f"_{end}"):
            return words
    for start, words in (
        ("converted_so_far", "share of all journeys converted by the end of the log, undecided ones not accounted for"),
        ("converted_within_", "share converted within that time since entry, undecided journeys accounted for"),
        ("converted_in_the_end", "share expected to convert in the end, by the model"),
        ("median_", "median given conversion, by the model"),
        ("q90_", "what 90 % of the converted stay within, by the model"),
        ("steps", "mean steps given conversion, by the model"),
        ("days", "mean days given conversion, by the model"),
    ):
        if name.startswith(start):
            return words
    return "a column of the log that journeys are grouped by"
