"""Numbers and names in words."""

from __future__ import annotations

import math

import pytest

from journeys.intake.rules import JourneyRules
from journeys.show.words import (
    amount_with_interval,
    chance,
    length_words,
    listed,
    outcome_words,
    percent,
    share_with_interval,
)

NAN, INF = math.nan, math.inf
DAY_US = 86_400_000_000


@pytest.mark.parametrize(
    ("share", "words"),
    [
        (0.0, "0.0 %"),
        (1.0, "100.0 %"),
        (0.1365, "13.7 %"),
        (0.001, "0.1 %"),
        (0.00042, "0.04 %"),
        (0.00000123, "0.0001 %"),
        (-0.0004, "-0.04 %"),
        (NAN, ""),
        (INF, ""),
    ],
)
def test_percent(share: float, words: str) -> None:
    assert percent(share) == words


@pytest.mark.parametrize(
    ("numbers", "flag", "words"),
    [
        ((0.142, 0.134, 0.151), "", "14.2 % (13.4–15.1)"),
        ((0.0004, 0.0002, 0.0007), "", "0.04 % (0.02–0.07)"),
        ((0.0, 0.0, 0.031), "too few", "0.0 % (under 3.1)"),
        ((1.0, 0.969, 1.0), "too few; end not seen", "100.0 % (over 96.9)"),
        ((0.5, NAN, NAN), "too few", "50.0 %"),
        ((0.5, 0.2, NAN), "", "50.0 %"),
        ((NAN, NAN, NAN), "cannot be reached", ""),
    ],
)
def test_share_with_interval(numbers: tuple[float, float, float], flag: str, words: str) -> None:
    assert share_with_interval(*numbers, flag) == words


@pytest.mark.parametrize(
    ("numbers", "words"),
    [
        ((7.271, 7.19, 7.354), "7.27 (7.19–7.35)"),
        ((29.36, 28.75, 29.98), "29.4 (28.8–30.0)"),
        ((1234.4, 1180.2, 1290.6), "1,234 (1,180–1,291)"),
        ((1234.4, NAN, NAN), "1,234"),
        ((2.0, NAN, NAN), "2.00"),
        ((INF, NAN, NAN), "some never do"),
        ((NAN, NAN, NAN), ""),
    ],
)
def test_amount_with_interval(numbers: tuple[float, float, float], words: str) -> None:
    assert amount_with_interval(*numbers) == words


@pytest.mark.parametrize(
    ("us", "words"),
    [
        (30 * DAY_US, "30 days"),
        (DAY_US, "1 day"),
        (36 * 3_600_000_000, "36 hours"),
        (90 * 60_000_000, "90 minutes"),
        (1_000_000, "1 second"),
        (1, "1 microsecond"),
    ],
)
def test_length_words(us: int, words: str) -> None:
    assert length_words(us) == words


@pytest.mark.parametrize(("names", "words"), [(("a",), "a"), (("a", "b"), "a or b"), (("a", "b", "c"), "a, b or c")])
def test_listed(names: tuple[str, ...], words: str) -> None:
    assert listed(names) == words


@pytest.mark.parametrize(
    ("silence", "outcome", "words"),
    [
        ("30d", "lapsed", "quiet for over 30 days"),
        ("12h", "lapsed", "quiet for over 12 hours"),
        ("30d", "joined", "joined"),
        (None, "declined", "declined"),
    ],
)
def test_outcome_words(silence: str | None, outcome: str, words: str) -> None:
    rules = JourneyRules("who", "when", "what", converted="joined", churned="declined", silence=silence)
    assert outcome_words(outcome, rules) == words


@pytest.mark.parametrize(("p_value", "said"), [(0.41, "0.41"), (0.0012, "0.0012"), (3e-20, "under 0.001"), (NAN, "")])
def test_chance(p_value: float, said: str) -> None:
    assert chance(p_value) == said
