"""Sections about the states: stages in their order, what becomes of journeys from each state, and the moves between."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import replace

from journeys.checks import duration_us
from journeys.markup import short_name
from journeys.questions.few_people import is_hidden
from journeys.questions.overview import Overview
from journeys.questions.stage_rows import CONVERTED
from journeys.questions.time_to_convert import IN_THE_END, SO_FAR
from journeys.show.conversion_sections import share_dot
from journeys.show.parts import Dots, Lines, Section, Table, Words
from journeys.show.rows import Row, amount, comeback_lines, notes_of, rows_of, share, tally_of, whole_amount
from journeys.show.stage_table import stage_rows
from journeys.show.words import length_words, outcome_words, percent

# A matrix wider than this is no longer read as a table; it stands in the Parquet and CSV files.
WIDEST_MATRIX = 12
# With more states than these a table is a list to look things up in, and a picture says nothing.
MOST_DOTS = 30
FROM_STATE = ("probability", "median", "mean")


def stages(overview: Overview) -> list[Section]:
    """Return how far journeys get through the stages of the rules; nothing where none are named."""
    if overview.funnel is None:
        return []
    frame = rows_of(overview.funnel.to_frame(), basis="log")
    columns = ["stage", "reached", "of the stage before", "median days between", "the rest"]
    table = Table("Stages in this order, by the log", columns, stage_rows(overview))
    dots = [share_dot(short_name(str(row["stage"])), row) for row in rows_of(frame, measure="of_stage_before")]
    picture = Dots("Of those who reached the stage before", "% of the stage before, by the log", dots)
    whole = rows_of(frame, stage=CONVERTED, measure="reached")
    lead = [Words(f"{share(row)} pass all stages in this order and convert." )for row in whole
            if share(row) and not is_hidden(row["flag"])]  # fmt: skip
    return [Section("Stages", [*lead, table, picture])]


def from_each_state(overview: Overview) -> Section:
    """Return how likely, and how soon, conversion is from entry and from every state (first passage)."""
    by_state = [
        {(row["start_state"], row["measure"]): row for row in rows_of(result.to_frame())}
        for result in (overview.steps, overview.days)
    ]
    rows, dots = [], []
    for state in ("entry", *overview.fit.states):
        chance, step, most = (by_state[0][state, name] for name in FROM_STATE)
        _, day, mean = (by_state[1][state, name] for name in FROM_STATE)
        notes = notes_of(*(row["flag"] for row in (chance, step, most, day, mean)))
        name = short_name(state)
        rows.append((name, share(chance), whole_amount(step), amount(most), amount(day), amount(mean), notes))
        dots.append(share_dot(name, chance))
    chances = rows_of(list(by_state[0].values()), measure="probability")[1:]
    told = [row for row in chances if not is_hidden(row["flag"])]
    likely = max(told, key=lambda row: row["estimate"], default=None)
    lead = f"Conversion is likeliest from {short_name(likely['start_state'])}: {share(likely)}." if likely else ""
    columns = ["from", "converts in the end", "median steps, if so", "mean steps", "median days, if so", "mean days"]
    table = Table("Conversion from entry and from every state, by the model", [*columns, "note"], rows)
    picture = [Dots("Converts in the end, from each state", "% of those who are there", dots)]
    shown = picture if len(dots) <= MOST_DOTS else []
    return Section("From each state", [*([Words(lead)] if lead else []), table, *shown])


def endings_from_each_state(overview: Overview) -> Section:
    """Return the probability of every outcome from entry and from every state."""
    by_state: dict[str, dict[str, Row]] = {}
    for row in rows_of(overview.endings.to_frame()):
        by_state.setdefault(row["start_state"], {})[row["outcome"]] = row
    outcomes, rules = list(by_state["entry"]), tally_of(overview).rules
    rows = []
    for state, mine in by_state.items():
        rows.append((short_name(state), *(share(mine[name]) for name in outcomes), notes_of(*_flags(mine.values()))))
    names = [outcome_words(name, rules) for name in outcomes]
    table = Table("Probability of each ending, by the model", ["from", *names, "note"], rows)
    return Section("Where journeys end, from each state", [table])


def what_comes_next(overview: Overview) -> Section:
    """Return the matrix of moves with an interval on each."""
    title, nodes = "What comes next", overview.fit.nodes
    if len(nodes.states) > WIDEST_MATRIX:
        words = "The moves between so many states stand in summary.csv and summary.parquet (section moves)."
        return Section(title, [Words(words)])
    rules = tally_of(overview).rules
    cells = {
        (row["state"], row["next_state"]): "·" if row["estimate"] == 0 else share(row, row["flag"]).replace(" %", "")
        for row in rows_of(overview.matrix.to_frame())
    }
    after = nodes.labels[1:]
    rows = [
        (short_name(state), *(cells.get((state, name), "") for name in after))
        for state in nodes.labels[: nodes.n_rows]
    ]
    columns = ["from", *(outcome_words(name, rules) for name in after)]
    words = "Percent of moves out of each state, with intervals; · stands for never seen."
    return Section(title, [Words(words), Table("Moves out of each state, in percent", columns, rows)])


def who_comes_back(overview: Overview) -> list[Section]:
    """Return who begins another journey after one has ended, and how soon; nothing where nobody can."""
    lines = comeback_lines(overview)
    if overview.back is None or not lines:
        return []
    frame, rules = rows_of(overview.back.to_frame()), tally_of(overview).rules
    horizons = [one for one in dict.fromkeys(row["horizon"] for row in frame) if one not in (SO_FAR, IN_THE_END)]
    rows, dots = [], []
    for after in dict.fromkeys(row["after"] for row in frame):
        mine = {row["horizon"]: row for row in rows_of(frame, after=after, measure="returned")}
        half = rows_of(frame, after=after, measure="median_days")
        if is_hidden(mine[SO_FAR]["flag"]) or not mine[SO_FAR]["n_absences"]:
            continue
        name, absences = outcome_words(after, rules), f"{mine[SO_FAR]['n_absences']:,.0f}"
        told = (percent(mine[SO_FAR]["estimate"]), *(share(mine[one]) for one in horizons))
        notes = notes_of(*_flags(mine.values()), *(row["flag"] for row in half))
        rows.append((name, absences, *told, amount(half[0]) if half else "", notes))
        dots += [share_dot(f"{length_words(duration_us(one, 'horizon'))}, {name}", mine[one]) for one in horizons]
    if len(rows) == 1:
        # whom it is about stands in the table above
        dots = [replace(dot, label=dot.label.split(",")[0]) for dot in dots]
    within = [f"within {length_words(duration_us(one, 'horizon'))}" for one in horizons]
    columns = ["after", "journeys ended so", "back so far", *within, "median days away", "note"]
    table = Table("Who came back, by how the journey before ended", columns, rows)
    picture = Dots("Back within a time of their last event", "% of those who had gone", dots)
    return [Section("Who comes back", [Lines(lines), table, *([picture] if dots else [])])]


def _flags(rows: Iterable[Row]) -> list[str]:
    return [row["flag"] for row in rows if not math.isnan(row["estimate"]) or is_hidden(row["flag"])]
