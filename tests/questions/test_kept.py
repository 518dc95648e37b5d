"""What is kept with a fit for the next question: it changes no answer, has bounds, and does not keep the fit alive."""

from __future__ import annotations

import gc
import weakref
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from club_log import club_fit

import journeys as jn
from journeys.kernels.kept import Kept

HALVES = [0.02, 0.5, 6.9, 7.0, 14.0, 59.9, 60.1, 400.0]


@pytest.fixture(scope="module")
def fit() -> jn.JourneyFit:
    return club_fit()


@pytest.mark.parametrize("day", HALVES)
def test_a_share_is_the_same_alone_and_among_others(fit: jn.JourneyFit, day: float) -> None:
    """One time needs fewer grids than the whole curve: it has to be the same number to the last bit."""
    whole = jn.passage_curve(replace(fit))
    whole.to_frame()
    alone = jn.passage_curve(replace(fit))
    assert alone.at([day])[0] == whole.at([day])[0] == whole.at(HALVES)[HALVES.index(day)]
    pd.testing.assert_frame_equal(alone.to_frame([day]), whole.to_frame([day]), check_exact=True)


def test_answers_do_not_depend_on_what_was_asked_before(fit: jn.JourneyFit) -> None:
    questions = {
        "quantiles": lambda fit: jn.first_passage(fit, clock="time", method="linearised").to_frame(),
        "curve": lambda fit: jn.passage_curve(fit).to_frame(),
        "table": lambda fit: jn.time_to_convert(fit).to_frame(),
        "outcomes": lambda fit: jn.outcomes(fit).to_frame(),
        "another target": lambda fit: jn.passage_curve(fit, "basket").to_frame(),
    }
    fresh = {name: ask(replace(fit)) for name, ask in questions.items()}
    for order in (list(questions), list(reversed(questions))):
        asked = replace(fit)
        for name in order:
            pd.testing.assert_frame_equal(questions[name](asked), fresh[name], check_exact=True)


def test_what_is_kept_has_bounds() -> None:
    kept, made = Kept(room=10), []

    def ask(key: str, n: int) -> None:
        kept.get(key, lambda: made.append(key) or np.zeros(n), len)

    for key, n in (("a", 4), ("b", 4), ("a", 4), ("c", 4), ("a", 4), ("b", 4), ("large", 11), ("large", 11), ("b", 4)):
        ask(key, n)
    # "b" had not been asked for the longest when "c" needed room; what is too large is made each time
    assert made == ["a", "b", "c", "b", "large", "large"]


def test_a_fit_that_is_not_needed_is_let_go_at_once(fit: jn.JourneyFit) -> None:
    """Hundreds of groups are fitted one after another: what each has kept may not wait for a search for circles."""
    once = replace(fit)
    jn.passage_curve(once).to_frame()
    jn.first_passage(once, clock="time", method="linearised")
    gone = weakref.ref(once)
    gc.disable()
    try:
        del once
        assert gone() is None
    finally:
        gc.enable()
