"""The summary of the main job as text, and the files it is published in."""

from __future__ import annotations

import os
import textwrap
from collections.abc import Callable
from functools import partial
from pathlib import Path

from journeys.files import written_together
from journeys.questions.overview import Overview
from journeys.results import printable, text_table
from journeys.show.conversion_sections import opening
from journeys.show.group_tables import column_meanings, wide_groups
from journeys.show.html.page import summary_html
from journeys.show.page import summary_markdown
from journeys.show.rows import (
    check_rows,
    comeback_lines,
    count,
    horizon_rows,
    left_out_words,
    rows_of,
    share,
    span_words,
    tally_of,
    time_lines,
)
from journeys.show.sections import sections
from journeys.show.stage_table import stage_rows
from journeys.show.tables import write_csv, write_parquet


def summary_text(overview: Overview) -> str:
    """Return what the command prints: the headline, the span of the log, and the lines between the two shares."""
    rows, notes = [], []
    for row in rows_of(overview.reconciliation()):
        rows.append((row["line"], count(row), share(row, row["note"])))
        notes.append(f"\n    {row['note']}" if row["note"] else "")
    told = "\n".join(line + note for line, note in zip(text_table(rows, right=[1]).split("\n"), notes, strict=True))
    soon = [("", "by the log", "by the model"), *(row[:3] for row in horizon_rows(overview))]
    parts = [
        f"{printable(opening(overview))}\n{span_words(overview)}",
        told,
        f"Converted, of journeys whose start was seen\n{text_table(soon, width=0)}",
        "\n".join(_wrapped(line) for line in (*time_lines(overview), *comeback_lines(overview))),
    ]
    if overview.funnel is not None:
        stages = [("", "reached", "of the stage before", "median days"), *(row[:4] for row in stage_rows(overview))]
        parts.append(f"Stages, in this order\n{text_table(stages, width=0)}")
    parts.append(f"Whether to believe the model\n{text_table(check_rows(overview))}")
    if left_out := left_out_words(overview):
        parts.append(_wrapped(left_out))
    return "\n\n".join(parts) + "\n"


def _wrapped(line: str) -> str:
    return textwrap.fill(printable(line), 100, subsequent_indent="  ")


def write_summary(overview: Overview, folder: str | os.PathLike[str], *, keep_tally: bool = False) -> list[Path]:
    """Write summary.parquet, .csv, .md, .html and columns.csv into a folder, all of them whole or none.

    Where journeys are grouped, groups.csv too: one wide row per group. columns.csv says what the columns hold.

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
    frame, groups = overview.to_frame(), wide_groups(overview)
    told = sections(overview)
    texts = {"summary.md": summary_markdown(overview, told), "summary.html": summary_html(overview, told)}
    meanings = column_meanings([frame] if groups is None else [frame, groups])
    writers: dict[str, Callable[[Path], object]] = {
        "summary.parquet": lambda part: write_parquet(frame, part),
        "summary.csv": lambda part: write_csv(frame, part),
        **{name: partial(_write_text, text) for name, text in texts.items()},
        "columns.csv": lambda part: write_csv(meanings, part),
    }
    if groups is not None:
        writers["groups.csv"] = lambda part: write_csv(groups, part)
    if keep_tally:
        writers["tally.parquet"] = tally_of(overview).save
    place.mkdir(parents=True, exist_ok=True)
    with written_together([place / name for name in writers]) as parts:
        for write, part in zip(writers.values(), parts, strict=True):
            write(part)
    return [place / name for name in writers]


def _write_text(text: str, path: Path) -> None:
    # Half of a pair, which a log can hold in a name, is no text for a file.
    path.write_bytes(text.encode("utf-8", "replace"))
