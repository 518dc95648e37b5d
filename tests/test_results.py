"""What every answer has in common, held against all questions on the demo log and on a known chain."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from functools import cache

import numpy as np
import pandas as pd
import pytest
from club_log import club_fit, club_tally, small_log

import journeys as jn
from journeys.markup import escaped
from journeys.questions.moves import moves
from journeys.results import (
    CELL,
    KNOWN,
    LOG,
    LOGIT,
    DrawnEstimates,
    Estimates,
    JoinedEstimates,
    Result,
    printable,
    text_table,
)

Question = Callable[..., Result]


def days_passage(fit: jn.JourneyFit, **options: float) -> Result:
    return jn.first_passage(fit, clock="time", **options)  # type: ignore[arg-type]


def linear_passage(fit: jn.JourneyFit, **options: float) -> Result:
    return jn.first_passage(fit, clock="time", method="linearised", **options)  # type: ignore[arg-type]


def recurrence(fit: jn.JourneyFit, **options: float) -> Result:
    return jn.return_time(fit, restart=True, **options)  # type: ignore[arg-type]


QUESTIONS: dict[str, tuple[Question, list[str], list[str]]] = {
    "moves": (moves, ["state", "next_state"], ["n_moves", "n_effective"]),
    "outcomes": (jn.outcomes, ["start_state", "outcome"], ["n_effective"]),
    "steps": (jn.first_passage, ["start_state", "measure"], ["n_effective", "n_undefined"]),
    "days": (days_passage, ["start_state", "measure"], ["n_effective", "n_undefined"]),
    "linearised": (linear_passage, ["start_state", "measure"], ["n_effective", "n_undefined"]),
    "returns": (jn.return_time, ["state", "measure"], ["n_effective", "n_undefined"]),
    "recurrence": (recurrence, ["state", "measure"], ["n_effective", "n_undefined"]),
    "time_to_convert": (jn.time_to_convert, ["measure", "horizon", "basis"], []),
}
NUMBERS = ["estimate", "std_error", "low", "high", "confidence_level"]
NAMES = list(QUESTIONS)
CHAIN_NAMES = [name for name in NAMES if name != "time_to_convert"]
PASSAGES = ["steps", "days", "linearised"]


@cache
def answer(name: str) -> Result:
    return QUESTIONS[name][0](club_fit())


@cache
def known_chain() -> jn.JourneyFit:
    frame = pd.DataFrame(
        [[0.0, 0.5, 0.5, 0.0], [0.2, 0.0, 0.4, 0.4]], index=["a", "b"], columns=["a", "b", "won", "lost"]
    )
    return jn.JourneyFit.from_matrix(frame, dwell={"a": 1.0, "b": 2.0})


def on_chain(name: str, fit: jn.JourneyFit, to: str) -> Result:
    """Ask a question of a known chain, which says nothing of what counts as converted."""
    return QUESTIONS[name][0](fit, **({"to": to} if name in PASSAGES else {}))


# --- shape ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", NAMES)
def test_columns_are_the_keys_then_the_numbers_then_counts_and_flag(name: str) -> None:
    _, keys, counts = QUESTIONS[name]
    frame = answer(name).to_frame()
    assert list(frame) == [*keys, *NUMBERS, *counts, "flag"]
    assert not frame.duplicated(keys).any()
    assert not frame[keys].isna().any(axis=None)
    assert all(frame[column].dtype == float for column in NUMBERS)
    assert frame.flag.map(type).eq(str).all()


@pytest.mark.parametrize("name", CHAIN_NAMES)
def test_shape_is_the_same_for_a_known_chain(name: str) -> None:
    _, keys, counts = QUESTIONS[name]
    frame = on_chain(name, known_chain(), "won").to_frame()
    assert list(frame) == [*keys, *NUMBERS, *counts, "flag"]


@pytest.mark.parametrize("name", NAMES)
def test_index_is_plain_and_the_frame_the_callers_own(name: str) -> None:
    frame = answer(name).to_frame()
    assert frame.index.equals(pd.RangeIndex(len(frame)))
    frame["estimate"] = -1.0
    frame["flag"] = "mine"
    assert (answer(name).to_frame().estimate != -1.0).all()


def test_every_question_has_rows_for_entry_and_every_state() -> None:
    fit = club_fit()
    starts = ["entry", *fit.states]
    assert answer("moves").to_frame().state.unique().tolist() == starts
    assert answer("returns").to_frame().state.unique().tolist() == list(fit.states)
    for name in ("outcomes", *PASSAGES):
        assert answer(name).to_frame().start_state.unique().tolist() == starts
    assert answer("outcomes").to_frame().outcome.unique().tolist() == list(fit.outcomes)


# --- intervals --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("level", [0.5, 0.8, 0.95, 0.999])
@pytest.mark.parametrize("name", NAMES)
def test_estimates_lie_within_their_intervals(name: str, level: float) -> None:
    frame = QUESTIONS[name][0](club_fit(), confidence_level=level).to_frame()
    finite = np.isfinite(frame[["estimate", "low", "high"]]).all(axis=1)
    assert finite.sum() > 5
    assert (frame.low <= frame.estimate)[finite].all()
    assert (frame.estimate <= frame.high)[finite].all()
    assert (frame.confidence_level == level).all()


@pytest.mark.parametrize("name", NAMES)
def test_unflagged_numbers_have_both_bounds_apart(name: str) -> None:
    frame = answer(name).to_frame()
    plain = frame[frame.flag == ""]
    assert len(plain) > 5
    # With restart everybody comes back: no doubt about that.
    sure = (plain.estimate == 1) & (plain.std_error == 0)
    assert not sure.any() or name == "recurrence"
    assert (plain.low[sure] == 1).all()
    # The bounds of a whole number are whole, and may be that number.
    whole = plain.get("measure", plain.flag).isin(["median", "q90", "median_steps", "q90_steps"])
    assert (plain.low <= plain.estimate)[whole].all()
    assert (plain.estimate <= plain.high)[whole].all()
    rest = ~(whole | sure)
    assert (plain.low < plain.estimate)[rest].all()
    assert (plain.estimate < plain.high)[rest].all()
    assert (plain.std_error > 0)[~sure].all()


@pytest.mark.parametrize("name", NAMES)
def test_another_level_needs_no_other_computation(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    result = answer(name)
    fresh = QUESTIONS[name][0](club_fit(), confidence_level=0.8).to_frame()

    def refuse(*_: object, **__: object) -> None:
        raise AssertionError("computed again")

    for place in (
        "questions.outcomes.stepped",
        "questions.first_passage.stepped",
        "questions.first_passage.timed",
        "questions.linear.often_visited",
        "questions.bootstrap.Refitter",
        "questions.return_time.quantiles_of_moves",
        "questions.linear.variance_from_buckets",
        "questions.moves.variance_from_buckets",
        "questions.within.variance_from_buckets",
        "questions.within.fit_stays",
    ):
        monkeypatch.setattr(f"journeys.{place}", refuse)
    with pytest.raises(AssertionError, match="computed again"):
        QUESTIONS[name][0](club_fit())
    narrow, wide = result.confidence_interval(0.8), result.confidence_interval(0.95)
    keys = QUESTIONS[name][1]
    assert list(narrow) == [*keys, "low", "high", "confidence_level"]
    pd.testing.assert_frame_equal(narrow, fresh[list(narrow)])
    pd.testing.assert_frame_equal(wide, result.to_frame()[list(wide)])
    both = narrow[["low", "high"]].notna().all(axis=1)
    assert both.sum() > 5
    assert (wide.low <= narrow.low)[both].all()
    assert (narrow.high <= wide.high)[both].all()
    two_sided = both & (wide.low > 0) & (wide.high < 1)
    assert ((wide.low < narrow.low) & (narrow.high < wide.high))[two_sided].all()


@pytest.mark.parametrize("name", NAMES)
def test_default_interval_is_at_95_whatever_the_frame_shows(name: str) -> None:
    shown = QUESTIONS[name][0](club_fit(), confidence_level=0.6)
    pd.testing.assert_frame_equal(shown.confidence_interval(), answer(name).confidence_interval(0.95))


@pytest.mark.parametrize("level", [0, 1, -0.5, 95, float("nan")])
@pytest.mark.parametrize("name", ["moves", "time_to_convert"])
def test_wrong_level_is_refused(name: str, level: float) -> None:
    with pytest.raises(ValueError, match=r"confidence_level: got .*; wanted a share between 0 and 1"):
        answer(name).confidence_interval(level)
    with pytest.raises(ValueError, match=r"confidence_level: got .*; wanted a share between 0 and 1"):
        QUESTIONS[name][0](club_fit(), confidence_level=level)


@pytest.mark.parametrize("level", ["0.95", None, True])
def test_level_of_another_type_is_refused(level: object) -> None:
    with pytest.raises(TypeError, match="confidence_level: got"):
        answer("outcomes").confidence_interval(level)  # type: ignore[arg-type]


def test_few_events_have_one_exact_bound() -> None:
    frame = answer("moves").to_frame()
    never = frame[(frame.n_moves == 0) & ~frame.next_state.isin(["lapsed"])]
    assert len(never) > 10
    assert never.flag.str.contains("too few").all()
    assert (never.low == 0).all()
    # The rule of three, exactly: nothing in n trials leaves 1 - 0.05^(1/n).
    assert never.high.to_numpy() == pytest.approx(1 - 0.05 ** (1 / never.n_effective.to_numpy()), rel=1e-9)
    eighty = answer("moves").confidence_interval(0.8).loc[never.index]
    assert (eighty.high < never.high).all()


def test_near_certainty_has_a_lower_bound_only() -> None:
    rules = jn.JourneyRules("who", "when", "what", converted=["joined"], churned=["declined"], silence="30d",
                            complete_history=True)  # fmt: skip
    frame = moves(jn.JourneyModel().fit(jn.tally(small_log(), rules))).to_frame()
    (entry,) = frame[(frame.state == "entry") & (frame.next_state == "visit")].to_dict("records")
    assert entry["estimate"] == entry["high"] == 1.0
    assert entry["low"] == pytest.approx(0.05 ** (1 / entry["n_effective"]), rel=1e-9)
    assert "too few" in entry["flag"]


def test_times_with_few_events_have_no_bounds() -> None:
    rules = jn.JourneyRules("who", "when", "what", converted=["joined"], churned=["declined"], silence="30d",
                            complete_history=True)  # fmt: skip
    fit = jn.JourneyModel().fit(jn.tally(small_log(9), rules))
    frame = jn.first_passage(fit, clock="time").to_frame()
    mean = frame[(frame.start_state == "entry") & (frame.measure == "mean")].iloc[0]
    assert mean.estimate == pytest.approx(2.0, abs=0.05)
    assert np.isnan(mean.low)
    assert np.isnan(mean.high)
    assert "too few" in mean.flag


def test_bounds_by_scale() -> None:
    estimates = Estimates(
        value=np.array([0.3, 5.0, 0.3, 0.0, 1.0, 7.0, np.inf]),
        std_error=np.array([0.05, 0.5, 0.05, 0.0, 0.0, 0.0, 0.0]),
        df=np.full(7, np.inf),
        scale=np.array([LOGIT, LOG, CELL, CELL, CELL, KNOWN, KNOWN], dtype=object),
        n_effective=np.array([84.0, 84.0, 84.0, 10.0, 10.0, np.nan, np.nan]),
        few=np.array([False, False, False, True, True, False, False]),
    )
    low, high = estimates.bounds(0.95)
    z = 1.959963984540054
    odds = 0.3 / 0.7 * np.exp(np.array([-1, 1]) * z * 0.05 / 0.21)
    assert [low[0], high[0]] == pytest.approx(odds / (1 + odds))
    assert [low[1], high[1]] == pytest.approx(5.0 * np.exp(np.array([-1, 1]) * z * 0.1))
    assert low[2] < 0.3 < high[2]
    assert [low[3], high[3]] == pytest.approx([0.0, 1 - 0.05**0.1])
    assert [low[4], high[4]] == pytest.approx([0.05**0.1, 1.0])
    assert low[5] == high[5] == 7.0
    assert np.isnan([low[6], high[6]]).all()


def test_spread_far_beyond_the_number_gives_an_endless_interval_and_no_warning() -> None:
    one = np.ones(1)
    estimates = Estimates(one, 1e4 * one, 5 * one, np.array([LOG], dtype=object), one, np.array([False]))
    low, high = estimates.bounds(0.95)
    assert low[0] == 0.0
    assert high[0] == np.inf


def test_estimates_of_several_kinds_together_keep_their_bounds() -> None:
    """Bounds of draws, of a scale and of an exact count, joined, reordered, and in another unit."""
    n = 3
    scale, few = np.array([LOG, LOG, CELL], dtype=object), np.array([False, True, True])
    value, std_error = np.array([2.0, 3.0, 0.0]), np.array([0.2, 0.3, 0.0])
    plain = Estimates(value, std_error, np.full(n, 50.0), scale, np.full(n, 9.0), few)
    draws = np.linspace(0.5, 1.5, 1999)[:, None] * plain.value
    drawn = DrawnEstimates(**vars(plain), draws=draws, accelerations=None)
    whole = Estimates.joined([plain, drawn])
    assert isinstance(whole, JoinedEstimates)
    assert type(Estimates.joined([plain, plain])) is Estimates
    low, high = whole.bounds(0.9)
    np.testing.assert_array_equal(low[:n], plain.bounds(0.9)[0])
    assert [low[n], high[n]] == pytest.approx([2 * 0.55, 2 * 1.45], abs=1e-3)
    assert np.isnan([low[n + 1], high[n + 1]]).all()  # too few: no draws make up for that
    assert [low[n + 2], high[n + 2]] == pytest.approx([0.0, 1 - 0.1 ** (1 / 9)])
    order = np.array([3, 0, 5, 4])
    for moved, index in ((whole.take(order), order), (whole.take(order).take(np.array([2, 0])), order[[2, 0]])):
        np.testing.assert_array_equal(moved.bounds(0.9), np.array(whole.bounds(0.9))[:, index])
        np.testing.assert_array_equal(moved.value, whole.value[index])
    mask = whole.take(np.arange(2 * n) % 2 == 1)
    np.testing.assert_array_equal(mask.bounds(0.8), np.array(whole.bounds(0.8))[:, [1, 3, 5]])
    weeks = Estimates.joined([plain.take(np.array([0])), drawn.take(np.array([0]))]).times(1 / 7)
    days = whole.take(np.array([0, 3]))
    np.testing.assert_allclose(np.array(weeks.bounds(0.95)) * 7, days.bounds(0.95), rtol=1e-12)
    np.testing.assert_allclose(weeks.std_error * 7, days.std_error, rtol=1e-12)


def test_bounds_by_corrected_draws() -> None:
    rng = np.random.default_rng(2)
    draws = rng.gamma(2.0, size=(1999, 2))
    one = Estimates(np.full(2, 2.0), np.ones(2), np.full(2, 50.0), np.full(2, LOG, dtype=object), np.ones(2),
                    np.zeros(2, bool))  # fmt: skip
    found = DrawnEstimates(**vars(one), draws=draws, accelerations=np.array([0.0, 0.1]))
    low, high = found.bounds(0.95)
    assert (low < 2.0).all()
    assert (high > 2.0).all()
    swapped = found.take(np.array([1, 0]))
    assert swapped.bounds(0.95)[0].tolist() == low[::-1].tolist()


# --- known chains, sameness, frozenness -------------------------------------------------------------------


@pytest.mark.parametrize("name", CHAIN_NAMES)
def test_known_chains_have_no_uncertainty(name: str) -> None:
    frame = on_chain(name, known_chain(), "won").to_frame()
    finite = np.isfinite(frame.estimate)
    assert finite.sum() >= 6
    assert (frame.std_error[finite] == 0).all()
    assert (frame.low == frame.estimate)[finite].all()
    assert (frame.high == frame.estimate)[finite].all()
    assert not frame.flag.str.contains("too few").any()


@pytest.mark.parametrize("name", NAMES)
def test_asked_again_the_answer_is_the_same_to_the_bit(name: str) -> None:
    again = QUESTIONS[name][0](club_fit())
    pd.testing.assert_frame_equal(answer(name).to_frame(), again.to_frame(), check_exact=True)


@pytest.mark.parametrize("name", NAMES)
def test_results_are_frozen(name: str) -> None:
    result = answer(name)
    for field in dataclasses.fields(result):
        with pytest.raises(dataclasses.FrozenInstanceError, match=f"cannot assign to field '{field.name}'"):
            setattr(result, field.name, None)
    with pytest.raises(dataclasses.FrozenInstanceError, match="cannot assign to field 'value'"):
        result.estimates.value = np.zeros(1)  # type: ignore[misc]


# --- how they show ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", NAMES)
def test_repr_is_one_short_line(name: str) -> None:
    result = answer(name)
    rows = len(result.to_frame())
    assert repr(result) == f"<{type(result).__name__}: {rows} rows at 95 % confidence>"


def test_repr_tells_the_level_as_it_is() -> None:
    assert "99.9 % confidence" in repr(jn.outcomes(club_fit(), confidence_level=0.999))


@pytest.mark.parametrize("name", NAMES)
def test_summary_is_a_title_a_head_and_one_line_per_row(name: str) -> None:
    result = answer(name)
    title, head, *rows = result.summary().split("\n")
    assert title == f"{result.title}, intervals at 95 %"
    assert head.split() == [column for column in result.to_frame() if column != "confidence_level"]
    assert len(rows) == len(result.to_frame())
    assert "nan" not in result.summary()


def hostile_chain() -> jn.JourneyFit:
    names = ["<script>alert(1)</script>", "two\nlines\x1b[2J"]
    return jn.JourneyFit.from_matrix(pd.DataFrame([[0.0, 1.0]], index=names[:1], columns=names))


@pytest.mark.parametrize("name", CHAIN_NAMES)
def test_html_is_escaped_and_text_cannot_steer_a_terminal(name: str) -> None:
    result = on_chain(name, hostile_chain(), "two\nlines\x1b[2J")
    html = result._repr_html_()
    assert "<script" not in html
    assert "&lt;script&gt;" in html
    assert html.count("<table") == 1
    assert "\x1b" not in result.summary()
    assert len(result.summary().split("\n")) == len(result.to_frame()) + 2


def test_notebooks_show_a_captioned_table_with_its_cautions() -> None:
    answer = jn.sensitivity(club_fit())
    html = answer._repr_html_()
    assert "<caption" in html
    assert "What one point more would do, intervals at 95 %" in html
    assert html.count('scope="col"') == answer.to_frame().shape[1] - 1, "the level stands in the caption"
    assert html.count("<tr>") == 61, "a head and the first sixty rows"
    assert f"{len(answer.to_frame()) - 60} more rows: .to_frame() holds them all." in html
    assert all(escaped(caution) in html for caution in answer.cautions)
    assert "nan" not in html


def test_every_thing_shown_in_a_notebook_is_a_table_whose_names_are_text() -> None:
    fit = hostile_chain()
    overview = jn.summarise(club_fit())
    shown = [fit, jn.audit(club_tally()), club_tally(), overview, jn.passage_curve(club_fit()), club_fit()]
    for thing in shown:
        html = thing._repr_html_()
        assert html.count("<table") >= 1
        assert html.count("<caption") == html.count("<table")
        assert html.count("<div") == html.count("</div")
    assert "<script" not in fit._repr_html_()
    assert "12,923" in club_tally()._repr_html_()


def test_long_names_are_cut_and_infinite_numbers_shown_in_notebooks() -> None:
    chain = pd.DataFrame([[0.5, 0.5]], index=["w" * 10_000], columns=["won", "lost"])
    html = jn.first_passage(jn.JourneyFit.from_matrix(chain), "won")._repr_html_()
    assert len(html) < 20_000
    assert "(10,000 characters, " in html
    assert "∞" in html


@pytest.mark.parametrize(
    ("text", "shown"),
    [("plain", "plain"), ("a\tb\r\n", "a b  "), ("\x1b[31m", " [31m"), ("\u202ex", " x"), ("🚲", "🚲")],
)
def test_printable(text: str, shown: str) -> None:
    assert printable(text) == shown


def test_text_table_wraps_its_last_column_and_no_other() -> None:
    text = text_table([["n", "why"], ["12", "one two three four five six seven"]], right=[0], width=28)
    assert text.split("\n") == ["   n  why", "  12  one two three four", "      five six seven"]
    assert text_table([["a", "one two three four five six seven"]], width=0) == "  a  one two three four five six seven"
    assert text_table([]) == ""
