"""The table of stages in words: how many got so far, how soon, where the rest went."""

from __future__ import annotations

from journeys.markup import LEFT_OUT, short_name
from journeys.questions.few_people import is_hidden
from journeys.questions.overview import Overview
from journeys.show.rows import amount, rows_of, share, tally_of
from journeys.show.words import UNDECIDED, outcome_words, percent


def stage_rows(overview: Overview) -> list[tuple[str, str, str, str, str]]:
    """Return stage, share that reached it, share of the stage before, median days between, where the rest went.

    By the log, undecided journeys accounted for; empty where no stages are named.
    """
    if overview.funnel is None:
        return []
    rows = rows_of(overview.funnel.to_frame(), basis="log")
    told = []
    for stage in dict.fromkeys(row["stage"] for row in rows):
        mine = rows_of(rows, stage=stage)
        names = ("reached", "of_stage_before", "median_days")
        reached, before, days = (next(iter(rows_of(mine, measure=name)), None) for name in names)
        went = [
            f"{_name(str(row['outcome']), overview)} {percent(row['estimate']) or LEFT_OUT}"
            for row in rows_of(mine, measure="went")
            if row["estimate"] > 0 or is_hidden(row["flag"])
        ]
        told.append((
            short_name(str(stage)),
            share(reached) if reached else "",
            share(before) if before else "",
            amount(days) if days else "",
            ", ".join(went),
        ))  # fmt: skip
    return told


def _name(outcome: str, overview: Overview) -> str:
    return UNDECIDED if outcome == "undecided" else outcome_words(outcome, tally_of(overview).rules)
