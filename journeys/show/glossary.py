"""How each number of a summary is defined, in a few words, for whoever was sent only the page."""

from __future__ import annotations

from journeys.questions.overview import Overview
from journeys.show.rows import tally_of
from journeys.show.words import UNDECIDED, length_words

_ALWAYS = (
    ("plain count", "conversions so far, of all journeys begun; the undecided count as lost in it"),
    ("journey", "what one customer does from an entry to an outcome; one customer can make several"),
    ("entry", "the first event of a customer who is new, or who comes back after an outcome or a silence"),
    (UNDECIDED, "no outcome so far; kept in the estimates as lasting at least as long as it was seen"),
    (
        "may have begun before the log",
        "the start was not seen for sure; only the others (sure entries) are followed from their first event",
    ),
    ("expected in the end", "the share of those who come in that will have converted once every journey is over"),
    ("by the log", "counted on whole journeys whose start was seen, undecided ones accounted for (Aalen-Johansen)"),
    (
        "by the model",
        "computed from the moves, in which what comes next depends on the present state only; where it differs from "
        "the log by more than the intervals, customers of several kinds are mixed",
    ),
    ("interval", "would hold the true number in so many of 100 such logs; customers, not events, are what varies"),
    ("median, 90 %", "half, or 90 %, of those who convert take at most so many steps or days"),
    ("mean days, mean steps", "of those who convert; a few slow ones pull it up, so it is told after the median"),
    ("steps", "recorded events of the journey, the conversion included; from a state, the moves still to come"),
    ("from each state", "first passage: from being there to conversion, whether at all and how soon"),
    ("hollow dot, note", "something to know before using the number; the note says what"),
)
_SILENT = "no event for longer than this: the journey counts as ended (lapsed) from then on"
_STAGES = (
    "reached, of the stage before",
    "journeys that visit the stages in this order, of all, and of those that reached the one before",
)
_BACK = ("came back", "began another journey after one had ended; those still away are accounted for")
_TOUCHED = (
    ("passed here", "of those who convert, who came by: an upper limit of what could be lost (removal effect)"),
    ("credit", "shares of the conversions that add up to all: split evenly, or all to the first or last touchpoint"),
    ("stayed ahead of the next", "in so many of 100 redraws of the customers"),
)
_SHIFTED = (
    "one point more",
    "0.01 of the moves out of a state, taken from those that end without converting and given to one move",
)
_GROUPED = (
    "differs from the rest: p",
    "how likely so large a difference is between groups that do not differ, corrected for their number",
)


def terms(overview: Overview) -> list[tuple[str, str]]:
    """Return the terms that this summary uses, with their meanings."""
    told = list(_ALWAYS)
    silence = tally_of(overview).rules.silence_us
    if silence is not None:
        told.append((f"quiet for over {length_words(silence)}", _SILENT))
    told += [_BACK] if overview.back is not None else []
    told += [_STAGES] if overview.funnel is not None else []
    told += _TOUCHED if overview.touched is not None else []
    told += [_SHIFTED] if overview.shifts is not None else []
    told += [_GROUPED] if overview.against else []
    return told
