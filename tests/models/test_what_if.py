"""What-if chains: the same as the changed matrix given, influence by refits, limits and refusals."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from club_log import club_fit, club_states
from scipy import stats
from small_chains import one

import journeys as jn
from journeys.errors import LogError
from journeys.kernels.sojourn import fit_stays
from journeys.models.fit import JourneyFit
from journeys.questions.elapsed import elapsed
from journeys.questions.solved_curve import SolvedTime
from journeys.questions.walks import walk_to

DAYS = np.array([0.5, 3.0, 10.0, 40.0, 200.0])
BETTER = ("basket", "joined", 0.05)


def chain(dwell=None) -> JourneyFit:
    frame = pd.DataFrame(
        [[0.0, 0.4, 0.1, 0.3, 0.2], [0.2, 0.0, 0.4, 0.1, 0.3]],
        index=["visit", "basket"],
        columns=["visit", "basket", "joined", "declined", "quiet"],
    )
    return replace(JourneyFit.from_matrix(frame, dwell=dwell), converted=("joined",))


def rebuilt(fit: JourneyFit, dwell=None) -> JourneyFit:
    """Return a known chain from the matrix of a fit."""
    entry = {name: float(p) for name, p in fit.matrix.loc["entry"].items() if p > 0}
    made = JourneyFit.from_matrix(fit.matrix.drop(index="entry"), dwell=dwell, entry=entry)
    return replace(made, converted=fit.converted)


@pytest.mark.parametrize(
    ("state", "after", "change"),
    [("visit", "basket", 0.1), ("visit", "joined", 0.5), ("basket", "visit", -0.2), ("visit", "visit", 0.05)],
)
def test_the_same_as_the_changed_matrix(state: str, after: str, change: float) -> None:
    dwell = {"visit": 2.0, "basket": stats.expon(scale=3.0)}
    before = chain(dwell)
    fit = before.with_move(state, after, change)
    by_hand = before.matrix.copy()
    losing = by_hand.loc[state, ["declined", "quiet"]]
    by_hand.loc[state, ["declined", "quiet"]] = losing * (1 - change / losing.sum())
    by_hand.loc[state, after] += change
    np.testing.assert_allclose(fit.matrix, by_hand, atol=1e-15)
    assert fit.matrix.sum(axis=1).to_numpy() == pytest.approx(1.0, abs=1e-15)
    other = rebuilt(fit, dwell)
    for ask in (
        jn.outcomes,
        jn.removal,
        lambda one_: jn.credit(one_, basis="model"),
        jn.sensitivity,
        lambda one_: jn.first_passage(one_, clock="time"),
        lambda one_: jn.first_passage(one_),
        lambda one_: jn.return_time(one_),
    ):
        found, expected = ask(fit).to_frame(), ask(other).to_frame()
        keys = [name for name in found if found[name].dtype != float and name not in ("flag", "order_held")]
        found, expected = (
            frame.sort_values(keys, ignore_index=True).select_dtypes("number") for frame in (found, expected)
        )
        pd.testing.assert_frame_equal(found, expected, check_exact=False, atol=1e-10)


def test_a_curve_of_a_known_chain() -> None:
    """Every dwell is given as a distribution, which the change keeps: the curve is that of the changed matrix."""
    dwell = {"visit": stats.gamma(2.0), "basket": stats.expon(scale=3.0)}
    fit = chain(dwell).with_move("visit", "basket", 0.2)
    expected = jn.passage_curve(rebuilt(fit, dwell), "joined").at([1, 5, 20])
    assert jn.passage_curve(fit, "joined").at([1, 5, 20]) == pytest.approx(expected, abs=1e-9)
    # a move that was never made takes the dwell that all moves of its state share
    new = chain(dwell).with_move("basket", "basket", 0.2)
    expected = jn.passage_curve(rebuilt(new, dwell), "joined").at([1, 5, 20])
    assert jn.passage_curve(new, "joined").at([1, 5, 20]) == pytest.approx(expected, abs=1e-9)


def test_mean_dwells_stay() -> None:
    fit = club_fit()
    other = fit.with_move("basket", "joined", 0.05)
    used = fit.probability > 0
    np.testing.assert_array_equal(fit.move_target, other.move_target)
    for name in ("mean", "second"):
        before = getattr(fit, name)[used] / fit.probability[used]
        assert getattr(other, name)[used] / other.probability[used] == pytest.approx(before, rel=1e-12)


def without_move(fit: JourneyFit, state: str, after: str) -> bool:
    return bool(fit.matrix.loc[state, after] == 0)


def test_a_new_move_has_the_mean_dwell_of_its_state() -> None:
    fit = club_fit()
    assert without_move(fit, "basket", "poster")
    other = fit.with_move("basket", "poster", 0.03)
    row = fit.nodes.labels.index("basket")
    at = np.flatnonzero((other.move_state == row) & (other.move_target == fit.nodes.labels.index("poster")))
    mine = fit.move_state == row
    for name in ("mean", "second"):
        each = float(getattr(other, name)[at][0] / 0.03)
        assert each == pytest.approx(float(getattr(fit, name)[mine].sum()), rel=1e-12)
    assert other.n_moves[at].tolist() == [0.0]
    assert other.row_flags == {"basket": "what-if: a move never seen, with the dwell of the other moves"}
    np.testing.assert_allclose(other.matrix.sum(axis=1), 1.0, atol=1e-12)
    assert (np.diff(other.move_state * other.nodes.n_nodes + other.move_target) > 0).all()


@pytest.mark.parametrize(
    ("state", "after", "change"),
    [
        ("basket", "joined", 0.05),
        ("search", "price_page", -0.04),
        ("basket", "poster", 0.03),
        ("search", "basket", 0.15),
    ],
)
def test_influence_by_differences(state: str, after: str, change: float) -> None:
    """The same change made in the fit with a little more or less of one bucket: the chain rule, move by move."""
    fit = club_fit()
    pulls = fit.influence
    told = fit.with_move(state, after, change).influence
    assert pulls is not None
    assert told is not None
    names = ("probability", "mean", "second")
    for bucket in (0, 57, 131):
        ends = []
        for step in (0.01, -0.01):
            moved = {name: getattr(fit, name) + step * getattr(pulls, name)[bucket] for name in names}
            ends.append(replace(fit, **moved).with_move(state, after, change))
        for name in names:
            found = (getattr(ends[0], name) - getattr(ends[1], name)) / 0.02
            assert np.abs(found).max() > 0
            np.testing.assert_allclose(getattr(told, name)[bucket], found, atol=1e-6 * np.abs(found).max())
    np.testing.assert_allclose(told.probability.sum(axis=1), pulls.probability.sum(axis=1), atol=1e-14)


def test_every_question_has_intervals() -> None:
    fit = club_fit().with_move("basket", "joined", 0.05)
    for result in (
        jn.outcomes(fit),
        fit.moves(),
        jn.first_passage(fit, method="linearised"),
        jn.return_time(fit, method="linearised"),
        jn.removal(fit, touchpoints=club_states()),
        jn.removal(fit, how="divert", touchpoints=club_states()),
        jn.credit(fit, basis="model", touchpoints=club_states()),
        jn.sensitivity(fit),
    ):
        frame = result.to_frame()
        shown = frame[
            np.isfinite(frame["estimate"]) & ~frame["flag"].str.contains("too few") & (frame["std_error"] > 0)
        ]
        assert len(shown) > 5
        assert (shown["low"] <= shown["estimate"]).all()
        assert (shown["estimate"] <= shown["high"]).all()
        assert frame["flag"].str.contains("what-if").any()


def counted_otherwise(fit: JourneyFit, more: np.ndarray, still: np.ndarray, kept: np.ndarray) -> JourneyFit:
    """Return the fit to so many more stays in each cell, open stays and stays that lapsed; mean dwells held."""
    old = fit.fitted_stays
    assert old is not None
    stays = replace(
        old.stays, n=old.stays.n + more, total=old.stays.total + more * old.found.tau,
        open_n=old.stays.open_n + still, survivor_n=old.stays.survivor_n + kept,
    )  # fmt: skip
    found = fit_stays(stays, old.found.open_weight)
    return replace(fit, probability=found.probability, mean=found.mean, second=found.second,
                   fitted_stays=replace(old, stays=stays, found=found))  # fmt: skip


def more_of_a_bucket(fit: JourneyFit, bucket: int, step: float) -> JourneyFit:
    """Return the fit in which the stays of one bucket count a little more."""
    old = fit.fitted_stays
    assert old is not None
    split = old.by_bucket
    mine, lapsed = split.bucket == bucket, split.survivor_bucket == bucket
    return counted_otherwise(
        fit,
        step * np.bincount(split.cell[mine], split.n[mine], len(old.stays.n)),
        step * np.where(split.open_bucket == bucket, split.open_n, 0.0),
        step * np.bincount(split.survivor_state[lapsed], split.survivor_n[lapsed], old.stays.n_states),
    )


@pytest.mark.parametrize("change", [BETTER, ("search", "price_page", -0.04)])
def test_a_curve_of_a_fit(change: tuple[str, str, float]) -> None:
    """With all stays ended, more of the one move and fewer of those it is taken from are just that many more stays."""
    fit = jn.JourneyModel(open_moves="ignored").fit(club_fit().tally)
    kept = fit.fitted_stays
    assert kept is not None
    assert not len(kept.stays.open_n)
    other = fit.with_move(*change)
    ratio = (other.probability / fit.probability)[kept.move] - 1.0
    lapsed = kept.found.survivor_move
    by_hand = counted_otherwise(
        fit, kept.stays.n * ratio[kept.found.cell_move], np.zeros(0),
        np.where(lapsed >= 0, kept.stays.survivor_n * ratio[lapsed], 0.0),
    )  # fmt: skip
    np.testing.assert_allclose(by_hand.probability, other.probability, atol=1e-12)
    told, expected, before = (jn.passage_curve(one_, start=change[0]).at(DAYS) for one_ in (other, by_hand, fit))
    np.testing.assert_allclose(told, expected, atol=1e-9)
    assert np.abs(told - before).max() > 1e-3


@pytest.mark.parametrize(
    "changes",
    [
        [BETTER],
        [("search", "price_page", -0.04)],
        [("basket", "poster", 0.03)],
        [("basket", "poster", 0.03), ("basket", "poster", 0.02), ("basket", "joined", 0.04)],
    ],
)
def test_the_band_of_a_curve(changes: list[tuple[str, str, float]]) -> None:
    """The same changes made in the fit with a little more or less of one bucket."""

    def changed(fit: JourneyFit) -> JourneyFit:
        for change in changes:
            fit = fit.with_move(*change)
        return fit

    fit = changed(club_fit())
    told = jn.passage_curve(fit)._solved.influence(DAYS)
    assert told is not None
    for bucket in (0, 131):
        ends = []
        for step in (1e-4, -1e-4):
            it = elapsed(changed(more_of_a_bucket(club_fit(), bucket, step)), walk_to(fit, None))
            assert it is not None
            ends.append(SolvedTime(it, 0).at(DAYS))
        found = (ends[0] - ends[1]) / 2e-4
        np.testing.assert_allclose(told[bucket], found, atol=0.005 * np.abs(found).max())


@pytest.mark.parametrize("change", [BETTER, ("basket", "poster", 0.03)])
def test_the_curve_agrees_with_the_other_answers(change: tuple[str, str, float]) -> None:
    fit = club_fit().with_move(*change)
    curve = jn.passage_curve(fit)
    answer = jn.first_passage(fit, clock="time")
    assert curve.at(np.inf) == pytest.approx(one(answer, start_state="entry", measure="probability"), rel=1e-9)
    points = curve.given_reached()._solved.curve
    mean = np.trapezoid(1.0 - points.reached / curve.probability, points.time)
    assert mean == pytest.approx(one(answer, start_state="entry", measure="mean"), rel=1e-4)
    median = one(answer, start_state="entry", measure="median")
    assert curve.given_reached().at(median) == pytest.approx(0.5, abs=1e-4)
    low, high = (one(answer, name, start_state="entry", measure="median") for name in ("low", "high"))
    assert low < median < high


def test_time_to_convert_tells_the_model_only() -> None:
    fit = club_fit().with_move(*BETTER)
    answer = jn.time_to_convert(fit, ["30d"])
    assert set(answer.keys["basis"]) == {"model"}
    assert one(answer, horizon="30d") == pytest.approx(float(jn.passage_curve(fit).at(30)))
    assert np.isfinite(answer.to_frame()[["estimate", "low", "high"]].to_numpy()).all()
    curve = jn.passage_curve(fit)
    assert not curve.has_observed
    with pytest.raises(ValueError, match="and a fit to a log, unchanged"):
        curve.observed()


def test_nothing_is_drawn_again() -> None:
    fit = club_fit().with_move(*BETTER)
    for ask in (jn.first_passage, jn.return_time):
        assert ask(fit).method == "linearised"
        expected = ask(fit, method="linearised").to_frame()
        pd.testing.assert_frame_equal(ask(fit).to_frame(), expected)
        for asked in ({"method": "percentile"}, {"method": "bca"}, {"n_resamples": 399}):
            name, value = next(iter(asked.items()))
            told = f'{name}="{value}"' if isinstance(value, str) else f"{name}={value}"
            with pytest.raises(LogError, match=f'{told}: this chain was changed .*wanted method="linearised"'):
                ask(fit, **asked)
    known = chain().with_move("visit", "joined", 0.1)
    assert jn.first_passage(known, method="bca").to_frame()["std_error"].fillna(0.0).eq(0.0).all()


def test_compared_with_what_it_came_from() -> None:
    fit = club_fit()
    told = jn.compare(fit, fit.with_move("basket", "joined", 0.05))
    gain = one(told, measure="reached")
    apart = [
        one(jn.outcomes(x), start_state="entry", outcome="joined")
        for x in (fit, fit.with_move("basket", "joined", 0.05))
    ]
    assert gain == pytest.approx(apart[1] - apart[0], rel=1e-9)
    # the same people on both sides: the difference is far surer than either
    assert one(told, "std_error", measure="reached") < 0.2 * one(
        jn.outcomes(fit), "std_error", start_state="entry", outcome="joined"
    )


def test_there_and_back() -> None:
    fit = club_fit()
    back = fit.with_move("basket", "joined", 0.05).with_move("basket", "joined", -0.05)
    np.testing.assert_allclose(back.probability, fit.probability, atol=1e-15)
    np.testing.assert_allclose(back.mean, fit.mean, rtol=1e-12)
    assert fit.influence is not None
    assert back.influence is not None
    for name in ("probability", "mean", "second"):
        np.testing.assert_allclose(getattr(back.influence, name), getattr(fit.influence, name), atol=1e-12)
    for told, expected in zip(
        jn.passage_curve(back).estimates(DAYS), jn.passage_curve(fit).estimates(DAYS), strict=True
    ):
        if not isinstance(told, np.ndarray):
            np.testing.assert_allclose(told.bounds(0.95), expected.bounds(0.95), rtol=1e-9)
    assert fit.row_flags == {}
    assert fit.with_move("basket", "joined", 0.0).probability.tolist() == fit.probability.tolist()


def test_a_move_that_was_taken_away_comes_back_with_the_dwell_of_the_others() -> None:
    fit = club_fit()
    p = float(fit.matrix.loc["basket", "joined"])
    gone = fit.with_move("basket", "joined", -p)
    assert jn.passage_curve(gone, "joined", start="basket").at(1) < jn.passage_curve(fit, start="basket").at(1)
    back = gone.with_move("basket", "joined", p)
    assert "never seen" in back.row_flags["basket"]
    mean = jn.first_passage(back, "joined", "time")
    points = jn.passage_curve(back, "joined", start="basket")._solved.curve
    told = np.trapezoid(1.0 - points.reached / points.limit, points.time)
    assert told == pytest.approx(one(mean, start_state="basket", measure="mean"), rel=1e-4)


def test_it_says_that_it_is_a_what_if() -> None:
    fit = club_fit().with_move("basket", "joined", 0.05).with_move("search", "price_page", -0.02)
    told = repr(fit)
    assert told.endswith("journeys, what-if: 'basket' to 'joined' +0.05, 'search' to 'price_page' -0.02>")
    assert fit.row_flags == {"basket": "what-if", "search": "what-if"}
    assert fit.changes == (("basket", "joined", 0.05), ("search", "price_page", -0.02))
    assert fit.fitted_stays is None
    moves = fit.moves()
    assert one(moves, "flag", state="basket", next_state="joined") == "what-if"
    assert one(moves, "flag", state="newsletter", next_state="price_page") == ""


def test_limits() -> None:
    fit = chain()
    wanted = (
        r"change: got 0\.6 for 'visit' to 'joined'; wanted -0\.1 to 0\.5: the move has 0\.1, the outcomes that give"
    )
    with pytest.raises(ValueError, match=wanted):
        fit.with_move("visit", "joined", 0.6)
    with pytest.raises(ValueError, match=r"change: got -0\.2 for 'visit' to 'joined'"):
        fit.with_move("visit", "joined", -0.2)
    most = fit.with_move("visit", "joined", 0.5)
    assert most.matrix.loc["visit"].tolist() == [0.0, 0.4, 0.6, 0.0, 0.0]
    none = fit.with_move("visit", "joined", -0.1)
    assert none.matrix.loc["visit"].tolist() == pytest.approx([0.0, 0.4, 0.0, 0.36, 0.24], abs=1e-15)
    # what is gone takes nothing and leaves no trace in the other answers
    assert one(jn.outcomes(none), start_state="visit", outcome="joined") == pytest.approx(0.4 * 0.4 / 0.92, rel=1e-12)
    with pytest.raises(
        ValueError, match=r"change: got 0\.1 for 'entry' to 'basket'; wanted 0 to 0: 'entry' has no move"
    ):
        fit.with_move("entry", "basket", 0.1)


def test_refusals(tmp_path) -> None:
    fit = chain()
    with pytest.raises(ValueError, match="state: 'shop' is not in this chain; wanted one of 'entry', 'visit'"):
        fit.with_move("shop", "joined", 0.1)
    with pytest.raises(ValueError, match="next_state: 'entry' is not in this chain"):
        fit.with_move("visit", "entry", 0.1)
    with pytest.raises(TypeError, match="change: got 'more'"):
        fit.with_move("visit", "joined", "more")
    with pytest.raises(ValueError, match="change: got nan"):
        fit.with_move("visit", "joined", float("nan"))
    with pytest.raises(ValueError, match="taken_from: got 'joined'; wanted outcomes among 'declined', 'quiet'"):
        fit.with_move("visit", "joined", 0.1, taken_from="joined")
    with pytest.raises(ValueError, match="taken_from: got nothing"):
        fit.with_move("visit", "joined", 0.1, taken_from=[])
    with pytest.raises(
        ValueError, match="taken_from is missing: this chain does not say which outcomes are conversions"
    ):
        replace(fit, converted=()).with_move("visit", "joined", 0.1)
    with pytest.raises(ValueError, match="a what-if is not kept in a file"):
        fit.with_move("visit", "joined", 0.1).save(tmp_path / "fit.parquet")
    other = club_fit().with_move("basket", "joined", 0.05)
    with pytest.raises(LogError, match="changed by hand, so the log's counts do not go with it"):
        jn.summarise(other)
    with pytest.raises(LogError, match="by: a what-if has no groups"):
        jn.removal(other, by="cohort")
    with pytest.raises(
        LogError, match="this chain was changed after it was fitted, so its stays cannot be drawn again"
    ):
        jn.removal(other, method="bootstrap")
