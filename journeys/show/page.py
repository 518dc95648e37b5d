"""The whole summary as a page of Markdown."""

from __future__ import annotations

import math
from collections.abc import Collection, Sequence
from importlib.metadata import version

from journeys.questions.overview import CREDITED, Overview
from journeys.questions.time_to_convert import IN_THE_END
from journeys.show.group_tables import group_sections
from journeys.show.rows import (
    amount,
    comeback_lines,
    count,
    horizon_rows,
    notes_of,
    parts_of,
    rows_of,
    share,
    span_words,
    tally_of,
    time_lines,
    whole_amount,
)
from journeys.show.stage_table import stage_rows
from journeys.show.tables import markdown_table, markdown_text
from journeys.show.words import (
    FLAG_MEANINGS,
    UNDECIDED,
    length_words,
    listed,
    outcome_words,
    percent,
)
from journeys.tally.tally import Tally

# A matrix wider than this is no longer read as a table; it stands in the Parquet and CSV files.
WIDEST_MATRIX = 12

# More journeys than this begun after an outcome, and readers should know.
OFTEN_AGAIN = 0.05

_FROM_STATE = ("probability", "median", "mean")

CAUTIONS = (
    "These numbers describe what went together in this log. They do not say what would happen if something were "
    "changed: people who pass a step differ from those who do not.",
    "Where customers of several kinds are mixed, the share that converts stays right, but mean steps and days can be "
    "off by a tenth or more.",
    "A log that starts at launch, with no earlier customers, shifts the share that converts by up to a point.",
    "A journey counted as lost is one that fell silent; some of these people may come back later.",
    "The counts behind this page are nearly as personal as the log. Keep what the law where you work allows, and "
    "leave decisions about persons to those licensed to take them.",
)


def opening(overview: Overview) -> str:
    """Return the headline: plain count, undecided, and what is expected in the end, in one sentence."""
    plain, rules = overview.plain, tally_of(overview).rules
    end = rows_of(overview.conversion.to_frame(), measure="converted", horizon=IN_THE_END)[0]
    verb = listed(rules.converted)
    return (
        f"{verb} so far {plain.n_converted:,} of {plain.n_journeys:,} journeys of {plain.n_people:,} people, "
        f"{percent(plain.n_converted / plain.n_journeys)}; {plain.n_undecided:,} undecided yet; expected in the end "
        f"{share(end, end['flag'])}"
    )


def summary_markdown(overview: Overview) -> str:
    """Return the whole summary as Markdown.

    Parameters
    ----------
    overview : Overview
        From `journeys.summarise`.

    Returns
    -------
    str
        A page that begins with the headline and ends with the rules it was made by.
    """
    tally = tally_of(overview)
    parts = [
        f"# How many {markdown_text(listed(tally.rules.converted))}, and how soon",
        f"**{markdown_text(opening(overview))}.**",
        span_words(overview),
        "## Why the expected share is not the plain one",
        _reconciliation(overview),
        "## How long it takes",
        _horizons(overview),
        _lines(time_lines(overview)),
        *_section("## Stages", _stages(overview)),
        *_section("## Touchpoints", _touchpoints(overview)),
        "## Where journeys end",
        _endings(overview),
        _lines(comeback_lines(overview)),
        "## From each state",
        _by_state(overview),
        "## What comes next",
        _matrix(overview),
        *(part for title, table in group_sections(overview) for part in (title, table)),
        "## The log",
        _findings(tally),
        "## Whether to believe it",
        _beliefs(overview),
        _checks(overview),
        "## Cautions",
        "\n".join(f"- {caution}" for caution in CAUTIONS),
        "## Made by",
        f"journeys {version('journeys')}, tally {tally.checksum}, with these rules:",
        f"```toml\n{tally.rules.to_toml().strip()}\n```",
    ]
    return "\n\n".join(part for part in parts if part) + "\n"


def _table(rows: Sequence[Sequence[str]], columns: list[str], ours: Collection[str] = ()) -> str:
    import pandas as pd

    return markdown_table(pd.DataFrame(rows, columns=columns), ours)


def _reconciliation(overview: Overview) -> str:
    rows = [
        (row["line"], count(row), share(row, row["note"]), row["note"]) for row in rows_of(overview.reconciliation())
    ]
    return _table(rows, ["what", "journeys", "share", "why"])


def _horizons(overview: Overview) -> str:
    return _table(horizon_rows(overview), ["since entry", "converted, by the log", "by the model", "note"])


def _lines(lines: Sequence[str]) -> str:
    return "\n".join(f"- {markdown_text(line)}" for line in lines)


def _section(title: str, table: str) -> tuple[str, ...]:
    return (title, table) if table else ()


def _stages(overview: Overview) -> str:
    rows = stage_rows(overview)
    return _table(rows, ["stage", "reached", "of the stage before", "median days between", "the rest"]) if rows else ""


def _touchpoints(overview: Overview) -> str:
    touched, credited = overview.touched, overview.credited
    if touched is None or credited is None:
        return ""
    shares = credited.to_frame()
    rows = []
    for row in rows_of(touched.to_frame()):
        name = str(row["touchpoint"])
        mine = {one["rule"]: share(one) for one in rows_of(shares, touchpoint=name)}
        held = "" if math.isnan(row["order_held"]) else f"{row['order_held']:.0f} of 100"
        told = (share(row), percent(row["share_in_log"]), held)
        rows.append((name, *told, *(mine.get(rule, "") for rule in CREDITED), row["flag"]))
    columns = ["touchpoint", "passed here, by the model", "by the log", "stayed ahead of the next"]
    table = _table(rows, [*columns, *(f"credit, {rule}" for rule in CREDITED), "note"])
    return f"{table}\n\n{_lines(list(dict.fromkeys((*touched.cautions, *credited.cautions))))}"


def _endings(overview: Overview) -> str:
    plain, rules = overview.plain, tally_of(overview).rules
    frame = overview.endings.to_frame()
    rows = []
    for outcome, n in plain.n_by_outcome.items():
        row = rows_of(frame, start_state="entry", outcome=outcome)[0]
        so_far = (f"{n:,}", percent(n / plain.n_journeys))
        rows.append((outcome_words(outcome, rules), *so_far, share(row, row["flag"]), row["flag"]))
    rows.append((UNDECIDED, f"{plain.n_undecided:,}", percent(plain.n_undecided / plain.n_journeys), "", ""))
    rows.append(("all journeys", f"{plain.n_journeys:,}", percent(1.0), "", ""))
    return _table(rows, ["outcome", "journeys so far", "share so far", "expected in the end", "note"])


def _by_state(overview: Overview) -> str:
    steps, days = overview.steps.to_frame(), overview.days.to_frame()
    rows = []
    for state in ("entry", *overview.fit.states):
        chance, step, most = (rows_of(steps, start_state=state, measure=name)[0] for name in _FROM_STATE)
        _, day, mean = (rows_of(days, start_state=state, measure=name)[0] for name in _FROM_STATE)
        notes = notes_of(*(row["flag"] for row in (chance, step, most, day, mean)))
        rows.append((state, share(chance), whole_amount(step), amount(most), amount(day), amount(mean), notes))
    columns = ["from", "converts in the end", "median steps, if so", "mean steps", "median days, if so", "mean days"]
    return _table(rows, [*columns, "note"])


def _matrix(overview: Overview) -> str:
    nodes = overview.fit.nodes
    if len(nodes.states) > WIDEST_MATRIX:
        return "The moves between so many states stand in summary.csv and summary.parquet (section `moves`)."
    frame = overview.matrix.to_frame()
    frame["cell"] = [
        "·" if row["estimate"] == 0 else share(row, row["flag"]).replace(" %", "") for row in rows_of(frame)
    ]
    table = frame.pivot(index="state", columns="next_state", values="cell")
    table = table.reindex(index=list(nodes.labels[: nodes.n_rows]), columns=list(nodes.labels[1:])).fillna("")
    names = [outcome_words(str(name), tally_of(overview).rules) for name in table.columns]
    words = "Percent of moves out of each state, with intervals; · stands for never seen."
    return f"{words}\n\n{markdown_table(table.set_axis(names, axis='columns').reset_index(names='from'))}"


def _findings(tally: Tally) -> str:
    found = rows_of(tally.findings)
    if not found:
        return "Nothing was left out and nothing looked odd."
    rows = [(row["code"], row["column"], f"{row['n']:,}", row["message"]) for row in found]
    return _table(rows, ["finding", "column", "rows", "what it means"], ("finding", "what it means"))


def _beliefs(overview: Overview) -> str:
    tally, plain = tally_of(overview), overview.plain
    silence = tally.rules.silence_us
    notes = []
    if silence is not None:
        ratio = tally.days / (silence / 86_400e6)
        shaky = "; under one and a half, times are shaky." if ratio < 1.5 else "."
        notes.append(f"The log is {ratio:.1f} silences of {length_words(silence)} long{shaky}")
    notes.append(f"The start of {percent(plain.n_sure / plain.n_journeys)} of the journeys was seen.")
    again = tally.record.n("began_after_outcome")
    if again > OFTEN_AGAIN * plain.n_journeys:
        notes.append(
            f"{percent(again / plain.n_journeys)} of the journeys began after an outcome of the same person: "
            "shares here are of journeys, not of people (`after_outcome` in the rules)."
        )
    notes += _flag_lines(overview)
    return "\n".join(f"- {markdown_text(note)}" for note in notes)


def _checks(overview: Overview) -> str:
    rows = []
    for row in rows_of(overview.checks.to_frame()):
        name = f"{row['check_name']} ({row['about']})" if row["about"] else row["check_name"]
        p_value = row["p_value_corrected"]
        p_words = "" if math.isnan(p_value) else f"{p_value:.2g}"
        rows.append((name, row["verdict"], row["compared"], p_words, row["advice"]))
    return _table(rows, ["check", "verdict", "compared", "p, corrected", "what to do"])


def _flag_lines(overview: Overview) -> list[str]:
    """Return what each flag on this page means, and which states it comes from."""
    shown = [overview.conversion.flag, overview.endings.flag]
    shown += [part.flag for part in (overview.back, overview.touched) if part is not None]
    if len(overview.fit.states) <= WIDEST_MATRIX:
        # What was never seen is a dot on this page, without a note.
        shown.append(overview.matrix.flag[overview.matrix.estimates.value > 0])
    seen = {part for flags in shown for flag in flags for part in parts_of(flag)}
    for passage in (overview.steps, overview.days):
        told = passage.keys.measure.isin(_FROM_STATE)
        seen |= {part for flag in passage.flag[told] for part in parts_of(flag)}
    lines = []
    for text, meaning in FLAG_MEANINGS.items():
        if text in seen:
            names = ", ".join(name for name, flag in overview.fit.row_flags.items() if flag == text)
            lines.append(f"{text}{f' ({names})' if names else ''}: {meaning}.")
    return lines
