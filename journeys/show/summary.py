"""The summary of the main job as text, and as the files it is published in."""

from __future__ import annotations

import math
import os
from collections.abc import Collection, Hashable, Mapping, Sequence
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Any

from journeys.checks import duration_us
from journeys.files import written_together
from journeys.questions.overview import Overview
from journeys.questions.time_to_convert import IN_THE_END, SO_FAR
from journeys.results import printable, text_table
from journeys.show.tables import markdown_table, markdown_text, write_csv, write_parquet
from journeys.show.words import (
    FLAG_MEANINGS,
    UNDECIDED,
    amount_with_interval,
    length_words,
    listed,
    outcome_words,
    percent,
    share_with_interval,
)
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    import pandas as pd

# A matrix wider than this is no longer read as a table; it stands in the Parquet and CSV files.
WIDEST_MATRIX = 12

# More journeys than this begun after an outcome, and readers should know.
OFTEN_AGAIN = 0.05

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
    plain, rules = overview.plain, _tally(overview).rules
    end = _rows(overview.conversion.to_frame(), measure="converted", horizon=IN_THE_END)[0]
    verb = listed(rules.converted)
    return (
        f"{verb} so far {plain.n_converted:,} of {plain.n_journeys:,} journeys of {plain.n_people:,} people, "
        f"{percent(plain.n_converted / plain.n_journeys)}; {plain.n_undecided:,} undecided yet; expected in the end "
        f"{_share(end, end['flag'])}"
    )


def summary_text(overview: Overview) -> str:
    """Return what the command prints: the headline, the span of the log, and the lines between the two shares."""
    lines = overview.reconciliation()
    rows, notes = [], []
    for row in _rows(lines):
        rows.append((row["line"], _count(row), _share(row, row["note"])))
        notes.append(f"\n    {row['note']}" if row["note"] else "")
    told = "\n".join(line + note for line, note in zip(text_table(rows, right=[1]).split("\n"), notes, strict=True))
    soon = [(since, share) for since, share, _, _ in _horizon_rows(overview) if since != IN_THE_END]
    return (
        f"{printable(opening(overview))}\n{_span(overview)} {_level(overview)}\n\n"
        f"{told}\n\nConverted, of journeys whose start was seen\n{text_table(soon)}\n"
        + "".join(f"{line}\n" for line in _time_lines(overview))
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
    tally = _tally(overview)
    parts = [
        f"# How many {markdown_text(listed(tally.rules.converted))}, and how soon",
        f"**{markdown_text(opening(overview))}.**",
        f"{_span(overview)} {_level(overview)}",
        "## Why the expected share is not the plain one",
        _reconciliation(overview),
        "## How long it takes",
        _horizons(overview),
        "\n".join(f"- {markdown_text(line)}" for line in _time_lines(overview)),
        "## Where journeys end",
        _endings(overview),
        "## From each state",
        _by_state(overview),
        "## What comes next",
        _matrix(overview),
        "## The log",
        _findings(tally),
        "## Whether to believe it",
        _beliefs(overview),
        "## Cautions",
        "\n".join(f"- {caution}" for caution in CAUTIONS),
        "## Made by",
        f"journeys {version('journeys')}, tally {tally.checksum}, with these rules:",
        f"```toml\n{tally.rules.to_toml().strip()}\n```",
    ]
    return "\n\n".join(part for part in parts if part) + "\n"


def write_summary(overview: Overview, folder: str | os.PathLike[str], *, keep_tally: bool = False) -> list[Path]:
    """Write summary.parquet, summary.csv and summary.md into a folder, all of them whole or none.

    Parameters
    ----------
    overview : Overview
        From `journeys.summarise`.
    folder : str or path-like
        Made where it does not exist.
    keep_tally : bool
        Write the counts too, as tally.parquet.

    Returns
    -------
    list of pathlib.Path
        What was written.

    Raises
    ------
    OSError
        If the folder cannot be made or written in.
    """
    place = Path(folder)
    frame, page = overview.to_frame(), summary_markdown(overview)
    place.mkdir(parents=True, exist_ok=True)
    names = ["summary.parquet", "summary.csv", "summary.md"] + ["tally.parquet"] * keep_tally
    with written_together([place / name for name in names]) as parts:
        write_parquet(frame, parts[0])
        write_csv(frame, parts[1])
        parts[2].write_text(page, encoding="utf-8")
        if keep_tally:
            _tally(overview).save(parts[3])
    return [place / name for name in names]


def _tally(overview: Overview) -> Tally:
    tally = overview.fit.tally
    if tally is None:
        msg = "overview: its fit has no tally; wanted the overview of a fit to a log"
        raise ValueError(msg)
    return tally


def _span(overview: Overview) -> str:
    tally = _tally(overview)
    fine = "%Y-%m-%d" if tally.whole_days else "%Y-%m-%d %H:%M"
    return (
        f"Log from {tally.log_start.strftime(fine)} to {tally.as_of.strftime(fine)} UTC ({tally.days:.0f} days), "
        f"{tally.n_rows:,} rows."
    )


Row = Mapping[Hashable, Any]


def _rows(frame: pd.DataFrame, **keys: str) -> list[dict[Hashable, Any]]:
    """Return the rows with the given keys."""
    for name, value in keys.items():
        frame = frame[frame[name] == value]
    return frame.to_dict("records")


def _table(rows: Sequence[Sequence[str]], columns: list[str], ours: Collection[str] = ()) -> str:
    import pandas as pd

    return markdown_table(pd.DataFrame(rows, columns=columns), ours)


def _share(row: Row, flag: str) -> str:
    return share_with_interval(row["estimate"], row["low"], row["high"], flag)


def _amount(row: Row) -> str:
    return amount_with_interval(row["estimate"], row["low"], row["high"])


def _count(row: Row) -> str:
    return "" if math.isnan(row["n"]) else f"{int(row['n']):,} of {int(row['of']):,}"


def _reconciliation(overview: Overview) -> str:
    rows = [
        (row["line"], _count(row), _share(row, row["note"]), row["note"]) for row in _rows(overview.reconciliation())
    ]
    return _table(rows, ["what", "journeys", "share", "why"])


def _level(overview: Overview) -> str:
    return f"Intervals at {100 * overview.conversion.confidence_level:g} %."


def _horizon_rows(overview: Overview) -> list[tuple[str, str, str, str]]:
    """Return since when, share converted, basis and note, the shares within horizons and in the end."""
    rows = []
    for row in _rows(overview.conversion.to_frame(), measure="converted"):
        if row["horizon"] == SO_FAR:
            continue
        since = row["horizon"]
        if since != IN_THE_END:
            since = f"within {length_words(duration_us(since, 'horizon'))}"
        rows.append((since, _share(row, row["flag"]), f"by the {row['basis']}", row["flag"]))
    return rows


def _horizons(overview: Overview) -> str:
    return _table(_horizon_rows(overview), ["since entry", "converted", "basis", "note"])


def _time_lines(overview: Overview) -> list[str]:
    """Return how many steps and days the converted take, one sentence each."""
    frame = overview.conversion.to_frame()
    told = []
    for measure, words in (("steps", "steps, the converting event counted"), ("days", "days from their first event")):
        row = _rows(frame, measure=measure)[0]
        amount = _amount(row)
        said = f"On average, those who convert take {amount} {words}" if amount else f"Mean {measure}: no answer"
        told.append(said + (f"; {row['flag']}" if row["flag"] else ""))
    return told


def _endings(overview: Overview) -> str:
    plain, rules = overview.plain, _tally(overview).rules
    frame = overview.endings.to_frame()
    rows = []
    for outcome, n in plain.n_by_outcome.items():
        row = _rows(frame, start_state="entry", outcome=outcome)[0]
        so_far = (f"{n:,}", percent(n / plain.n_journeys))
        rows.append((outcome_words(outcome, rules), *so_far, _share(row, row["flag"]), row["flag"]))
    rows.append((UNDECIDED, f"{plain.n_undecided:,}", percent(plain.n_undecided / plain.n_journeys), "", ""))
    rows.append(("all journeys", f"{plain.n_journeys:,}", percent(1.0), "", ""))
    return _table(rows, ["outcome", "journeys so far", "share so far", "expected in the end", "note"])


def _by_state(overview: Overview) -> str:
    steps, days = overview.steps.to_frame(), overview.days.to_frame()
    rows = []
    for state in ("entry", *overview.fit.states):
        share = _rows(steps, start_state=state, measure="probability")[0]
        step = _rows(steps, start_state=state, measure="mean")[0]
        day = _rows(days, start_state=state, measure="mean")[0]
        notes = dict.fromkeys(part for row in (share, step, day) for part in _flags(row["flag"]))
        rows.append((state, _share(share, share["flag"]), _amount(step), _amount(day), "; ".join(notes)))
    return _table(rows, ["from", "converts in the end", "mean steps, if so", "mean days, if so", "note"])


def _matrix(overview: Overview) -> str:
    nodes = overview.fit.nodes
    if len(nodes.states) > WIDEST_MATRIX:
        return "The moves between so many states stand in summary.csv and summary.parquet (section `moves`)."
    frame = overview.matrix.to_frame()
    frame["cell"] = [
        "·" if row["estimate"] == 0 else _share(row, row["flag"]).replace(" %", "") for row in _rows(frame)
    ]
    table = frame.pivot(index="state", columns="next_state", values="cell")
    table = table.reindex(index=list(nodes.labels[: nodes.n_rows]), columns=list(nodes.labels[1:])).fillna("")
    names = [outcome_words(str(name), _tally(overview).rules) for name in table.columns]
    words = "Percent of moves out of each state, with intervals; · stands for never seen."
    return f"{words}\n\n{markdown_table(table.set_axis(names, axis='columns').reset_index(names='from'))}"


def _findings(tally: Tally) -> str:
    found = _rows(tally.findings)
    if not found:
        return "Nothing was left out and nothing looked odd."
    rows = [(row["code"], row["column"], f"{row['n']:,}", row["message"]) for row in found]
    return _table(rows, ["finding", "column", "rows", "what it means"], ("finding", "what it means"))


def _beliefs(overview: Overview) -> str:
    tally, plain = _tally(overview), overview.plain
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


def _flags(flag: str) -> list[str]:
    return flag.split("; ") if flag else []


def _flag_lines(overview: Overview) -> list[str]:
    """Return what each flag on this page means, and which states it comes from."""
    shown = [overview.conversion.flag, overview.endings.flag]
    if len(overview.fit.states) <= WIDEST_MATRIX:
        # What was never seen is a dot on this page, without a note.
        shown.append(overview.matrix.flag[overview.matrix.estimates.value > 0])
    seen = {part for flags in shown for flag in flags for part in _flags(flag)}
    for passage in (overview.steps, overview.days):
        told = passage.keys.measure.isin(["probability", "mean"])
        seen |= {part for flag in passage.flag[told] for part in _flags(flag)}
    lines = []
    for text, meaning in FLAG_MEANINGS.items():
        if text in seen:
            names = ", ".join(name for name, flag in overview.fit.row_flags.items() if flag == text)
            lines.append(f"{text}{f' ({names})' if names else ''}: {meaning}.")
    return lines
