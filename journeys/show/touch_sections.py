"""Sections about what was touched on the way and what single moves do."""

from __future__ import annotations

import math

from journeys.markup import short_name
from journeys.questions.few_people import is_hidden
from journeys.questions.overview import CREDITED, Overview
from journeys.show.conversion_sections import share_dot
from journeys.show.parts import Dots, Lines, Section, Table, Words
from journeys.show.rows import change, points, rows_of, share, tally_of
from journeys.show.state_sections import MOST_DOTS
from journeys.show.words import outcome_words, percent

# The moves told on a page: those that would do most for conversion.
MOST_MOVES = 12


def touchpoints(overview: Overview) -> list[Section]:
    """Return who passed each touchpoint, and what it may be credited with; nothing where none are named."""
    touched, credited = overview.touched, overview.credited
    if touched is None or credited is None:
        return []
    shares, frame = rows_of(credited.to_frame()), rows_of(touched.to_frame())
    rows = []
    for row in frame:
        name = str(row["touchpoint"])
        mine = {one["rule"]: share(one) for one in rows_of(shares, touchpoint=name)}
        held = "" if math.isnan(row["order_held"]) else f"{row['order_held']:.0f} of 100"
        told = (share(row), percent(row["share_in_log"]) or share(row) * is_hidden(row["flag"]), held)
        rows.append((short_name(name), *told, *(mine.get(rule, "") for rule in CREDITED), row["flag"]))
    lead = [
        Words(
            f"Of those who convert, {share(row)} passed {short_name(str(row['touchpoint']))} by the model, "
            f"{percent(row['share_in_log'])} by the log."
        )
        for row in frame
        if not is_hidden(row["flag"])
    ][:1]
    columns = ["touchpoint", "passed here, by the model", "by the log", "stayed ahead of the next"]
    heads = [*columns, *(f"credit, {rule}" for rule in CREDITED), "note"]
    table = Table("Of those who convert, who passed here, and what adds up", heads, rows)
    dots = [share_dot(short_name(str(row["touchpoint"])), row) for row in frame]
    unit = "% of those who convert: an upper limit of what could be lost"
    picture = [Dots("Passed here, by the model", unit, dots)] if len(dots) <= MOST_DOTS else []
    cautions = Lines(list(dict.fromkeys((*touched.cautions, *credited.cautions))))
    return [Section("Touchpoints", [*lead, table, *picture, cautions])]


def one_point_more(overview: Overview) -> list[Section]:
    """Return what it would do if one move alone were one point likelier; nothing for large chains."""
    if overview.shifts is None:
        return []
    frame = rows_of(overview.shifts.to_frame())
    told = [row for row in rows_of(frame, measure="reached") if not is_hidden(row["flag"])][:MOST_MOVES]
    if not told or not math.isfinite(told[0]["estimate"]):
        return []
    rules = tally_of(overview).rules
    rows, dots = [], []
    for row in told:
        state, after = short_name(str(row["state"])), outcome_words(str(row["next_state"]), rules)
        days = rows_of(frame, state=str(row["state"]), next_state=str(row["next_state"]), measure="days")[0]
        rows.append((state, after, points(row), change(days), row["flag"]))
        dots.append(share_dot(f"{state} → {after}", row))
    first = f"One point more of the moves from {rows[0][0]} to {rows[0][1]} would change conversion the most"
    lead = Words(f"{first}: by {rows[0][2]} points.")
    columns = ["more moves from", "to", "conversion, points", "mean days, if so", "note"]
    table = Table("If one move alone were one point likelier, the largest effects", columns, rows, n_keys=2)
    picture = Dots("Change of conversion", "points of conversion", dots)
    return [Section("What one point more would do", [lead, table, picture, Lines(overview.shifts.cautions)])]
