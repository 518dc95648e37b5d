"""Sections on whether to believe a summary: what it leans on, what its flags mean, and what was checked."""

from __future__ import annotations

import math

from journeys.markup import short_name
from journeys.questions.overview import Overview
from journeys.show.parts import Lines, Part, Section, Table
from journeys.show.rows import left_out_words, parts_of, rows_of, tally_of
from journeys.show.state_sections import FROM_STATE, WIDEST_MATRIX
from journeys.show.words import FLAG_MEANINGS, chance, length_words, percent

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


def beliefs(overview: Overview) -> Section:
    """Return what the answers lean on, what flags mean, and the checks, where the overview carries them."""
    tally, plain = tally_of(overview), overview.plain
    silence = tally.rules.silence_us
    notes = []
    if silence is not None:
        ratio = tally.days / (silence / 86_400e6)
        shaky = "; under one and a half, times are shaky." if ratio < 1.5 else "."
        notes.append(f"The log is {ratio:.1f} silences of {length_words(silence)} long{shaky}")
    if math.isfinite(plain.n_sure):
        notes.append(f"The start of {percent(plain.n_sure / plain.n_journeys)} of the journeys was seen.")
    if left_out := left_out_words(overview):
        notes.append(left_out)
    again = tally.record.n("began_after_outcome")
    if again > OFTEN_AGAIN * plain.n_journeys:
        notes.append(
            f"{percent(again / plain.n_journeys)} of the journeys began after an outcome of the same person: "
            "shares here are of journeys, not of people (after_outcome in the rules)."
        )
    notes += _flag_lines(overview)
    return Section("Whether to believe it", [Lines(notes), *_checks(overview)])


def cautions() -> Section:
    """Return what to keep in mind with all of it."""
    return Section("Cautions", [Lines(CAUTIONS)])


def _checks(overview: Overview) -> list[Part]:
    """Return the table of checks: what was looked at, what came of it, and what to do."""
    rows = []
    for row in rows_of(overview.checks.to_frame()):
        name = f"{row['check_name']} ({short_name(row['about'])})" if row["about"] else str(row["check_name"])
        p_value = chance(row["p_value_corrected"])
        rows.append((name, str(row["verdict"]), str(row["compared"]), p_value, str(row["advice"])))
    columns = ["check", "verdict", "compared", "p, corrected", "what to do"]
    return [Table("Checks of the model", columns, rows, ours=("what to do",))]


def _flag_lines(overview: Overview) -> list[str]:
    """Return what each flag on this page means, and which states it comes from."""
    shown = [overview.conversion.flag, overview.endings.flag]
    shown += [part.flag for part in (overview.back, overview.touched) if part is not None]
    if len(overview.fit.states) <= WIDEST_MATRIX:
        # What was never seen is a dot on this page, without a note.
        shown.append(overview.matrix.flag[overview.matrix.estimates.value > 0])
    seen = {part for flags in shown for flag in flags for part in parts_of(flag)}
    for passage in (overview.steps, overview.days):
        told = passage.keys.measure.isin(FROM_STATE)
        seen |= {part for flag in passage.flag[told] for part in parts_of(flag)}
    lines = []
    for text, meaning in FLAG_MEANINGS.items():
        if text in seen:
            names = ", ".join(short_name(name) for name, flag in overview.fit.row_flags.items() if flag == text)
            lines.append(f"{text}{f' ({names})' if names else ''}: {meaning}.")
    return lines
