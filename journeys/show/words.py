"""Numbers and names in words: shares in percent with their interval, lapses and open journeys in plain terms."""

from __future__ import annotations

import math
import re

from journeys.checks import duration_text
from journeys.intake.rules import JourneyRules
from journeys.markup import short_name
from journeys.models.fit import NO_WAY_OUT
from journeys.models.model import COMPLETED_ONLY, END_NOT_SEEN, ENOUGH_AT_END, FEW_AT_END
from journeys.questions.comeback import NONE_SEEN, NOT_FOLLOWED, STILL_SILENCE
from journeys.questions.linear import DOUBTFUL, TOO_FEW
from journeys.questions.outcomes import UNREACHABLE
from journeys.questions.time_to_convert import BETWEEN_BINS, NO_CURVE, TOO_LONG
from journeys.questions.touch_shares import DIFFER, TOO_SHORT
from journeys.questions.within import NO_UPPER_END

UNDECIDED = "undecided yet"

# What the flags that a reader of the summary meets say, in the order in which they are told.
FLAG_MEANINGS = {
    TOO_FEW: "too few events, or no spread in them, for an interval; a share has one exact bound in its place",
    UNREACHABLE: "no way there was seen",
    BETWEEN_BINS: "counts are kept in bins of time, and this time lies within one; name it in `horizons` to be exact",
    TOO_LONG: "nobody was followed that long, so the share is a lower bound",
    NOT_FOLLOWED: "nobody was watched for that long after they had gone, so the share is a lower bound",
    STILL_SILENCE: "who lapses is away for longer than the silence, whatever happens",
    NONE_SEEN: "no journey ended in that way",
    NO_UPPER_END: "the curve levels off within its interval, so the time has no upper bound",
    NO_CURVE: "the chain has too many states for a curve of time; ask first_passage for means",
    DOUBTFUL: "the number is too small or too large for the computer to tell it from nothing",
    DIFFER: "the chain does not bear out what the journeys show: trust the log's share, and not the model's effect",
    TOO_SHORT: "too many conversions of the chain lie beyond what the log has seen to compare the two",
    END_NOT_SEEN: "no stay there was followed as long as the silence (or merged visits may last longer than any that "
    "was followed), so the share that goes quiet is an upper bound",
    FEW_AT_END: f"fewer than {ENOUGH_AT_END} stays there were followed as long as the silence",
    COMPLETED_ONLY: "the longest stay there is still open, so only completed moves count; a silence would mend it",
    NO_WAY_OUT: "taken as never left",
}


def chance(p_value: float) -> str:
    """Return a p-value in two figures, blank where there is none; below a thousandth nobody needs more."""
    if math.isnan(p_value):
        return ""
    return "under 0.001" if p_value < 0.001 else f"{p_value:.2g}"


def percent(share: float) -> str:
    """Return a share in percent: one digit after the point, more where it is tiny.

    Examples
    --------
    >>> percent(0.142), percent(0.0004), percent(float("nan"))
    ('14.2 %', '0.04 %', '')
    """
    return f"{_scaled(share)} %" if math.isfinite(share) else ""


def share_with_interval(estimate: float, low: float, high: float, flag: str = "") -> str:
    """Return a share with its interval, or with the one bound it has.

    Examples
    --------
    >>> share_with_interval(0.142, 0.134, 0.151)
    '14.2 % (13.4–15.1)'
    >>> share_with_interval(0.0, 0.0, 0.031, "too few")
    '0.0 % (under 3.1)'
    """
    if not math.isfinite(estimate):
        return ""
    if not (math.isfinite(low) and math.isfinite(high)):
        return percent(estimate)
    if TOO_FEW in flag:
        return f"{percent(estimate)} ({f'under {_scaled(high)}' if estimate <= 0.5 else f'over {_scaled(low)}'})"
    return f"{percent(estimate)} ({_scaled(low)}–{_scaled(high)})"


def amount_with_interval(estimate: float, low: float, high: float) -> str:
    """Return a number of steps or days with its interval.

    Examples
    --------
    >>> amount_with_interval(7.271, 7.19, 7.35), amount_with_interval(float("inf"), float("nan"), float("nan"))
    ('7.27 (7.19–7.35)', 'some never do')
    """
    if math.isinf(estimate):
        return "some never do"
    if math.isnan(estimate):
        return ""
    digits = 0 if estimate >= 100 else 1 if estimate >= 10 else 2
    if not (math.isfinite(low) and math.isfinite(high)):
        return f"{estimate:,.{digits}f}"
    return f"{estimate:,.{digits}f} ({low:,.{digits}f}–{high:,.{digits}f})"


def outcome_words(outcome: str, rules: JourneyRules) -> str:
    """Return an outcome or state as readers call it: a lapse is a silence, the others go by their own names."""
    if outcome != "lapsed" or rules.silence_us is None:
        return short_name(outcome)
    return f"quiet for over {length_words(rules.silence_us)}"


def length_words(microseconds: int) -> str:
    """Return a duration in words.

    Examples
    --------
    >>> length_words(30 * 86_400_000_000), length_words(3_600_000_000)
    ('30 days', '1 hour')
    """
    text = duration_text(microseconds)
    names = {
        "d": "day",
        "h": "hour",
        "min": "minute",
        "s": "second",
        "ms": "millisecond",
        "us": "microsecond",
    }
    match = re.fullmatch(r"(\d+)([a-z]+)", text)
    if match is None:
        return text
    n, unit = int(match[1]), names[match[2]]
    return f"{n} {unit}" + ("" if n == 1 else "s")


def listed(names: tuple[str, ...]) -> str:
    """Return names joined for a sentence.

    Examples
    --------
    >>> listed(("joined", "bought", "gave"))
    'joined, bought or gave'
    """
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " or " + names[-1]


def _scaled(share: float) -> str:
    value = 100 * share
    if value == 0 or abs(value) >= 0.1:
        return f"{value:.1f}"
    return f"{value:.{-math.floor(math.log10(abs(value)))}f}"
