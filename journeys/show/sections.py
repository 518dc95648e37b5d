"""All of a summary in the order in which it is read; the Markdown and the HTML page show the same sections."""

from __future__ import annotations

from importlib.metadata import version

from journeys.questions.overview import Overview
from journeys.show.belief_sections import beliefs, cautions
from journeys.show.conversion_sections import converted_words, endings, how_long, reconciliation, the_log
from journeys.show.glossary import terms
from journeys.show.group_tables import group_sections
from journeys.show.parts import Section, Terms, Verbatim, Words
from journeys.show.rows import tally_of
from journeys.show.state_sections import (
    endings_from_each_state,
    from_each_state,
    stages,
    what_comes_next,
    who_comes_back,
)
from journeys.show.touch_sections import one_point_more, touchpoints


def title(overview: Overview) -> str:
    """Return what the whole summary is about."""
    return f"How many {converted_words(overview)}, and how soon"


def sections(overview: Overview) -> list[Section]:
    """Return the sections of a summary.

    Parameters
    ----------
    overview : Overview
        From `journeys.summarise`.

    Returns
    -------
    list of Section
        From the plain count to the rules it was made by; what the log or the rules have nothing of is left out.
    """
    return [
        reconciliation(overview),
        the_log(overview),
        endings(overview),
        how_long(overview),
        *stages(overview),
        from_each_state(overview),
        endings_from_each_state(overview),
        what_comes_next(overview),
        *who_comes_back(overview),
        *touchpoints(overview),
        *one_point_more(overview),
        *group_sections(overview),
        beliefs(overview),
        cautions(),
        Section("How each number is defined", [Terms(terms(overview))]),
        _made_by(overview),
    ]


def _made_by(overview: Overview) -> Section:
    tally = tally_of(overview)
    words = f"journeys {version('journeys')}, tally {tally.checksum}, with these rules:"
    return Section("Made by", [Words(words), Verbatim(tally.rules.to_toml().strip(), "toml")])
