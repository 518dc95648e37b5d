"""The whole summary as a page of Markdown."""

from __future__ import annotations

from collections.abc import Sequence

from journeys.questions.overview import Overview
from journeys.show.conversion_sections import opening
from journeys.show.parts import Lines, Part, Section, Table, Terms, Verbatim, Words
from journeys.show.rows import span_words
from journeys.show.sections import sections, title
from journeys.show.tables import markdown_table, markdown_text


def summary_markdown(overview: Overview, told: Sequence[Section] | None = None) -> str:
    """Return the whole summary as Markdown.

    Parameters
    ----------
    overview : Overview
        From `journeys.summarise`.
    told : sequence of Section, optional
        Its sections, where they are at hand.

    Returns
    -------
    str
        A page that begins with the headline and ends with the rules it was made by.
    """
    parts = [
        f"# {markdown_text(title(overview))}",
        f"**{markdown_text(opening(overview))}.**",
        span_words(overview),
        *(part for section in told or sections(overview) for part in _section(section)),
    ]
    return "\n\n".join(part for part in parts if part) + "\n"


def _section(section: Section) -> list[str]:
    return [f"## {markdown_text(section.title)}", *map(_part, section.numbers_only.parts)]


def _part(part: Part) -> str:
    import pandas as pd

    match part:
        case Words(text):
            return markdown_text(text)
        case Lines(items):
            return "\n".join(f"- {markdown_text(item)}" for item in items)
        case Terms(items):
            return "\n".join(f"- **{markdown_text(term)}**: {markdown_text(meaning)}" for term, meaning in items)
        case Verbatim(text, language):
            return f"```{language}\n{text}\n```"
        case Table():
            return markdown_table(pd.DataFrame(list(part.rows), columns=list(part.columns)), part.ours)
        case _:
            return ""
