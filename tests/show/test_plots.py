"""Pictures: what stands on the axes, and that the numbers drawn are those of the answer."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Iterator

import matplotlib
import numpy as np
import pandas as pd
import pytest
import simulated

matplotlib.use("Agg")

from club_log import club_fit, club_tally, overview_of, small_log  # noqa: E402
from matplotlib import pyplot as plt  # noqa: E402
from matplotlib.axes import Axes  # noqa: E402
from matplotlib.collections import LineCollection, PolyCollection  # noqa: E402
from matplotlib.colors import to_rgb  # noqa: E402
from scipy import stats  # noqa: E402

import journeys as jn  # noqa: E402
from journeys.questions.passage_curve import passage_curve  # noqa: E402
from journeys.show import axes, plots  # noqa: E402


@pytest.fixture(autouse=True)
def _closed() -> Iterator[None]:
    yield
    plt.close("all")


def line(ax: Axes, label: str) -> np.ndarray:
    (found,) = [one for one in ax.lines if one.get_label() == label]
    return np.asarray(found.get_xydata())


def test_curve_in_time() -> None:
    curve = passage_curve(club_fit())
    ax = plots.passage_curve(curve)
    assert ax.get_xlabel() == "time from entry (days)"
    assert ax.get_ylabel() == "joined, % of all who start"
    drawn = line(ax, "by the chain")
    np.testing.assert_allclose(drawn[:, 1], 100 * curve.at(drawn[:, 0]))
    assert drawn[0].tolist() == [0.0, 0.0]
    assert drawn[-1, 0] == pytest.approx(curve.to_frame()["time"].iloc[-1])
    log, observed = line(ax, "by the log alone"), curve.observed()
    shown = observed[observed["time"] <= drawn[-1, 0]]
    np.testing.assert_allclose(log[1:], np.column_stack([shown["time"], 100 * shown["estimate"]]))
    (band,) = [one for one in ax.collections if isinstance(one, PolyCollection)]
    assert band.get_label() == "95 % interval at each time"
    low = curve.to_frame([drawn[60, 0]])["low"][0] * 100
    assert any(np.isclose(point, [drawn[60, 0], low]).all() for point in band.get_paths()[0].vertices)
    half = curve.given_reached().quantile(0.5).iloc[0]
    (mark,) = [one for one in ax.lines if one.get_marker() == "^"]
    assert mark.get_xydata()[0].tolist() == [half["estimate"], 0.0]
    told = f"{half['estimate']:.3g} ({half['low']:.3g}–{half['high']:.3g})"
    assert ax.texts[0].get_text() == f"half of those who reach it: {told}"


def test_curve_in_steps_on_given_axes() -> None:
    _, ax = plt.subplots()
    curve = passage_curve(club_fit(), clock="steps", given=True)
    assert plots.passage_curve(curve, ax=ax, linewidth=3.0) is ax
    assert ax.get_xlabel() == "steps from entry"
    assert ax.get_ylabel() == "joined, % of those who reach it"
    (drawn,) = [one for one in ax.lines if one.get_label() == "by the chain"]
    assert drawn.get_drawstyle() == "steps-post"
    assert drawn.get_linewidth() == 3.0
    assert not [one for one in ax.lines if one.get_label() == "by the log alone"]
    with pytest.raises(ValueError, match="the log has a curve of its own only for"):
        plots.passage_curve(curve, log=True)


def test_curve_without_log_or_band() -> None:
    curve = passage_curve(club_fit())
    assert "by the log alone" not in [one.get_label() for one in plots.passage_curve(curve, log=False).lines]
    chain = pd.DataFrame([[0.4, 0.6]], index=["a"], columns=["won", "lost"])
    known = passage_curve(jn.JourneyFit.from_matrix(chain, {"a": stats.expon()}), "won", unit="hours")
    ax = plots.passage_curve(known)
    assert ax.get_xlabel() == "time from entry (hours)"
    assert not [one for one in ax.collections if isinstance(one, PolyCollection)]
    assert ax.texts[0].get_text() == "half of those who reach it: 16.6"


def test_a_curve_that_never_comes() -> None:
    chain = pd.DataFrame([[0.0, 0.0, 1.0], [0.0, 0.0, 1.0]], index=["a", "b"], columns=["a", "b", "won"])
    ax = plots.passage_curve(passage_curve(jn.JourneyFit.from_matrix(chain), "b", "a", "steps"))
    assert not ax.texts
    assert line(ax, "by the chain")[:, 1].max() == 0


def test_intervals_by_state() -> None:
    answer = jn.first_passage(club_fit(), clock="time")
    ax = plots.intervals(answer, "mean")
    frame = answer.to_frame().query("measure == 'mean'")
    assert [one.get_text() for one in ax.get_yticklabels()] == frame["start_state"].tolist()
    assert ax.get_xlabel() == "mean (days), with 95 % interval"
    (dots,) = ax.lines
    np.testing.assert_allclose(dots.get_xdata(), frame["estimate"])
    assert dots.get_ydata()[0] > dots.get_ydata()[-1], "the first row stands on top"
    (bars,) = [one for one in ax.collections if isinstance(one, LineCollection)]
    ends = np.array([segment[:, 0] for segment in bars.get_segments()])
    np.testing.assert_allclose(ends, frame[["low", "high"]])
    with pytest.raises(ValueError, match="measure='days' is not in this answer"):
        plots.intervals(answer, "days")


def test_shares_are_in_percent() -> None:
    answer = jn.outcomes(club_fit())
    ax = plots.intervals(answer, color="#000000")
    assert ax.get_xlabel() == "probability (%), with 95 % interval"
    np.testing.assert_allclose(ax.lines[0].get_xdata(), 100 * answer.to_frame()["estimate"])
    assert ax.lines[0].get_color() == "#000000"
    with pytest.raises(ValueError, match="this answer has no measures to choose from"):
        plots.intervals(answer, "mean")


def test_infinite_numbers_stand_in_words() -> None:
    ax = plots.intervals(jn.first_passage(club_fit(), clock="time"), "mean_unconditional")
    assert {one.get_text() for one in ax.texts} == {"infinite: some never do"}
    assert len(ax.texts) == 9
    assert not ax.lines
    assert not len(ax.get_xticks())


def test_flagged_numbers_are_hollow() -> None:
    answer = jn.outcomes(club_fit())
    answer.flag[1] = "too few"
    try:
        ax = plots.intervals(answer)
    finally:
        answer.flag[1] = ""
    plain, hollow = ax.lines
    assert hollow.get_xdata().tolist() == [100 * answer.to_frame()["estimate"][1]]
    assert hollow.get_markerfacecolor() == "white"
    assert hollow.get_color() == plain.get_color()
    assert [one.get_text() for one in ax.get_legend().get_texts()] == ["see its flag"]


def told(ax: Axes) -> list[str]:
    return [one.get_text() for one in ax.get_yticklabels()]


def test_by_group_one_dot_each() -> None:
    answer = jn.first_passage(club_fit(), "joined", "time", by="district", method="linearised")
    ax = plots.intervals(answer, "mean", start="price_page")
    frame = answer.to_frame().query("measure == 'mean' and start_state == 'price_page'")
    assert told(ax) == ["Harbour", "Northfield", "Old Mill", "Station"]
    np.testing.assert_allclose(ax.lines[0].get_xdata(), frame["estimate"])
    assert ax.get_xlabel() == "mean from price_page (days), with 95 % interval"
    shares = plots.intervals(answer)
    assert shares.get_xlabel() == "probability (%), with 95 % interval"
    entry = answer.to_frame().query("measure == 'probability' and start_state == 'entry'")
    np.testing.assert_allclose(shares.lines[0].get_xdata(), 100 * entry["estimate"])
    with pytest.raises(ValueError, match="start='basement' is not in this answer; wanted one of 'entry'"):
        plots.intervals(answer, start="basement")
    with pytest.raises(ValueError, match="horizon='30d': this answer has no horizons to choose from"):
        plots.intervals(answer, horizon="30d")


def test_by_group_and_outcome() -> None:
    assert told(plots.intervals(jn.outcomes(club_fit(), by="district")))[:4] == [
        "Harbour · joined",
        "Harbour · declined",
        "Harbour · lapsed",
        "Northfield · joined",
    ]


def test_young_cohorts_are_hollow_or_stand_in_words() -> None:
    answer = jn.time_to_convert(club_fit(), by="cohort", horizons=["30d", "60d"])
    frame = answer.to_frame()
    ax = plots.intervals(answer, "converted", horizon="30d")
    log = frame[(frame["horizon"] == "30d") & (frame["basis"] == "log")]
    assert told(ax) == [*log["cohort"], "2025-04"]
    few, log = log.iloc[0], log.iloc[1:]
    assert (few["cohort"], few["flag"]) == ("2024-09", "too few")
    young = (log["flag"] != "").to_numpy()
    assert ax.get_xlabel() == "converted within 30d by the log (%), with 95 % interval"
    solid, hollow = ax.lines
    np.testing.assert_allclose(solid.get_xdata(), 100 * log["estimate"][~young])
    np.testing.assert_allclose(hollow.get_xdata(), 100 * log["estimate"][young])
    assert "29 of 30d followed" in log["flag"].tolist()
    assert [one.get_text() for one in ax.texts] == ["too few", "followed for 29 days, no longer than the silence"]
    in_the_end = plots.intervals(answer)
    assert in_the_end.get_xlabel() == "converted in the end (%), with 95 % interval"
    assert plots.intervals(answer, "days").get_xlabel() == "mean days, with 95 % interval"


def test_several_group_columns() -> None:
    fit = jn.JourneyModel().fit(club_fit().tally.where(district=["Harbour", "Station"], cohort=["2024-10", "2024-11"]))
    names = told(plots.intervals(jn.time_to_convert(fit, by=["district", "cohort"])))
    assert names == ["Harbour · 2024-10", "Harbour · 2024-11", "Station · 2024-10", "Station · 2024-11"]


def test_all_horizons_without_groups_and_one() -> None:
    answer = jn.time_to_convert(club_fit(), horizons=["30d"])
    ax = plots.intervals(answer)
    assert told(ax) == ["so far, log", "30d, log", "30d, model", "in the end, model"]
    assert told(plots.intervals(answer, horizon="30d")) == ["log", "model"]
    assert ax.get_xlabel() == "converted (%), with 95 % interval"


def test_differences_have_a_line_at_zero() -> None:
    answer = jn.compare(club_fit(), by="district", within="30d")
    ax = plots.intervals(answer, "reached within 30d")
    frame = answer.to_frame().query("measure == 'reached within 30d'")
    zero, dots = ax.lines
    assert list(zero.get_xdata()) == [0.0, 0.0]
    np.testing.assert_allclose(dots.get_xdata(), 100 * frame["estimate"])
    assert told(ax) == frame["district"].tolist()
    assert ax.get_xlabel() == "difference in reached within 30d (points), with 95 % interval"
    days = plots.intervals(answer, "days")
    assert days.get_xlabel() == "difference in mean days, with 95 % interval"
    means = answer.to_frame().query("measure == 'days'")
    np.testing.assert_allclose(days.lines[1].get_xdata(), means["estimate"])


def test_names_from_the_data_cannot_steer() -> None:
    chain = pd.DataFrame([[0.4, 0.6]], index=["a\nb"], columns=["won\x1b", "lost"])
    fit = jn.JourneyFit.from_matrix(chain, {"a\nb": stats.expon()})
    ax = plots.intervals(jn.outcomes(fit))
    assert [one.get_text() for one in ax.get_yticklabels()][2] == "a b, won "
    assert plots.passage_curve(passage_curve(fit, "won\x1b", "a\nb")).get_ylabel() == "won , % of all who start"


def test_the_pair_of_colours_stays_apart_in_grey() -> None:
    """Dark blue and orange differ in lightness, so they do without colour too; weights of ITU-R BT.709."""
    light = [float(np.dot([0.2126, 0.7152, 0.0722], to_rgb(one))) for one in (axes.BLUE, axes.ORANGE)]
    assert abs(light[0] - light[1]) > 0.2


def test_matplotlib_is_loaded_when_the_first_picture_is_drawn() -> None:
    code = (
        "import sys, journeys as jn, pandas as pd; assert 'matplotlib' not in sys.modules; "
        "chain = pd.DataFrame([[0.6, 0.4]], index=['basket'], columns=['joined', 'left']); "
        "answer = jn.outcomes(jn.JourneyFit.from_matrix(chain)); assert 'matplotlib' not in sys.modules; "
        "import matplotlib; matplotlib.use('Agg'); jn.plots.intervals(answer)"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def estimates(frame: pd.DataFrame, factor: float = 100.0) -> np.ndarray:
    return factor * frame["estimate"].to_numpy(dtype=float)


def test_one_picture_for_every_answer() -> None:
    """Each is drawn by the function named as its question, and shows the numbers that a reader asks for first."""
    fit = club_fit()
    days = jn.first_passage(fit, clock="time", method="linearised")
    passed = jn.removal(fit, touchpoints=["poster", "search"])
    by_log = "measure == 'of_stage_before' and basis == 'log'"
    answers = {
        "outcomes": (jn.outcomes(fit), "start_state == 'entry'", 100.0, "probability (%)"),
        "first_passage": (days, "measure == 'median'", 1.0, "median (days)"),
        "return_time": (jn.return_time(fit, method="linearised"), "measure == 'probability'", 100.0, "probability (%)"),
        "time_to_convert": (jn.time_to_convert(fit), "measure == 'converted'", 100.0, "converted (%)"),
        "comeback": (jn.comeback(club_tally()), "measure == 'returned'", 100.0, "returned (%)"),
        "stages": (jn.stages(fit), by_log, 100.0, "of stage before by the log (%)"),
        "removal": (passed, "estimate == estimate", 100.0, "conversions that"),
        "compare": (jn.compare(fit, by="district"), "measure == 'reached'", 100.0, "difference in reached (points)"),
    }
    for name, (answer, which, factor, said) in answers.items():
        ax = getattr(plots, name)(answer)
        mine = answer.to_frame().query(which)
        assert ax.get_xlabel().startswith(said)
        np.testing.assert_allclose(ax.lines[-1].get_xdata(), estimates(mine, factor))
        plt.close("all")
    assert set(plots.__all__) >= set(answers)


def test_a_picture_of_one_question_refuses_the_answer_to_another() -> None:
    with pytest.raises(TypeError, match="got OutcomesResult; wanted StagesResult, or plots.intervals for any answer"):
        plots.stages(jn.outcomes(club_fit()))


def test_the_moves_that_matter_most_come_first_in_points() -> None:
    answer = jn.sensitivity(club_fit())
    ax = plots.sensitivity(answer, most=5)
    mine = answer.to_frame().query("measure == 'reached'").head(5)
    zero, dots = ax.lines
    assert list(zero.get_xdata()) == [0.0, 0.0]
    np.testing.assert_allclose(dots.get_xdata(), estimates(mine))
    assert told(ax)[0] == "price_page, basket"
    assert ax.get_xlabel().startswith("difference in reached (points)")
    with pytest.raises(ValueError, match="measure='money' is not in this answer"):
        plots.sensitivity(answer, "money")


def test_moves_out_of_one_state() -> None:
    answer = club_fit().moves()
    ax = plots.moves(answer, "basket")
    mine = answer.to_frame().query("state == 'basket' and estimate > 0")
    assert told(ax) == mine["next_state"].tolist()
    np.testing.assert_allclose(ax.lines[0].get_xdata(), estimates(mine))
    assert ax.get_xlabel() == "moves out of basket (%), with 95 % interval"
    with pytest.raises(ValueError, match="state='cellar' is not in this answer; wanted one of 'entry', 'basket'"):
        plots.moves(answer, "cellar")


def test_the_matrix_is_a_table_with_intervals() -> None:
    fit = club_fit()
    ax = plots.matrix(fit.moves())
    written: dict[tuple[int, int], list[str]] = {}
    for text in ax.texts:
        x, y = text.get_position()
        written.setdefault((round(x), round(y)), []).append(text.get_text())
    columns, rows = ([one.get_text() for one in labels] for labels in (ax.get_xticklabels(), ax.get_yticklabels()))
    assert rows[::-1] == ["entry", *fit.states]
    for state in ("basket", "search"):
        for name in columns:
            share = fit.matrix.loc[state, name]
            cell = written[columns.index(name), rows.index(state)]
            assert cell[0] == ("·" if share == 0 else f"{100 * share:.1f}")
            assert len(cell) == (1 if share == 0 else 2)
    with pytest.raises(ValueError, match="is by district; wanted moves without groups"):
        plots.matrix(fit.moves(by="district"))


def test_flagged_moves_of_the_matrix_stand_in_brackets() -> None:
    ax = plots.matrix(overview_of(small_log(9)).matrix)
    assert any(text.get_text().startswith("[") for text in ax.texts)
    assert ax.get_xlabel().endswith("in brackets: see its flag")


def test_too_wide_a_matrix_is_refused() -> None:
    names = [f"s{i}" for i in range(30)]
    chain = pd.DataFrame(np.eye(30, 31, 1), index=names, columns=[*names, "won"])
    with pytest.raises(ValueError, match=r"has 31 states; wanted up to 25, or plots\.moves\(result, state\) of one"):
        plots.matrix(jn.JourneyFit.from_matrix(chain).moves())


def test_log_and_model_can_be_told_apart() -> None:
    answer = jn.stages(club_fit())
    both = plots.intervals(answer, "reached")
    assert told(both)[:2] == ["entry, log", "entry, model"]
    assert told(plots.stages(answer, "reached", "model"))[0] == "entry"
    with pytest.raises(ValueError, match="basis='guess' is not in this answer; wanted one of 'log', 'model'"):
        plots.stages(answer, basis="guess")


def test_credit_and_money_have_their_pictures() -> None:
    log = small_log().assign(fee=lambda frame: np.where(frame["what"] == "joined", 30.0, 0.0))
    fit = overview_of(log, value="fee", touchpoints=["visit", "look"]).fit
    assert plots.credit(jn.credit(fit)).get_xlabel().startswith("share of the conversions (%)")
    money = plots.worth(jn.worth(fit))
    assert money.get_xlabel() == "value per journey, with 95 % interval"
    assert plots.worth(jn.worth(fit), "largest_customer_share").get_xlabel().startswith("largest customer share (%)")


def test_long_names_are_cut_where_they_are_drawn() -> None:
    chain = pd.DataFrame([[0.4, 0.6]], index=["w" * 10_000], columns=["won", "lost"])
    fit = jn.JourneyFit.from_matrix(chain)
    names = told(plots.intervals(jn.outcomes(fit)))
    assert max(map(len, names)) < 80
    assert "(10,000 characters, " in names[2]


def test_numbers_about_touchpoints_say_what_they_are() -> None:
    chain = pd.DataFrame(
        [[0.0, 0.5, 0.3, 0.2], [0.2, 0.0, 0.5, 0.3]], index=["poster", "search"],
        columns=["poster", "search", "joined", "left"],
    )  # fmt: skip
    fit = jn.JourneyFit.from_matrix(chain)
    said = {
        how: plots.intervals(jn.removal(fit, "joined", how=how)).get_xlabel() for how in ("stop", "divert", "pass")
    }
    assert said["stop"].startswith("conversions that passed here (%)")
    assert said["divert"].startswith("conversions lost (%)")
    assert said["pass"].startswith("steps saved")
    credit = plots.intervals(jn.credit(fit, "joined", basis="model"))
    assert credit.get_xlabel().startswith("share of the conversions (%)")
    assert [label.get_text() for label in credit.get_yticklabels()] == ["poster", "search", "none of them"]


def groups_fit(n_groups: int) -> jn.JourneyFit:
    log = simulated.simulate(400, 2.5, np.random.default_rng(3))
    log["team"] = log["customer"] % n_groups
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"], silence="30d", by="team", cohort="month",
        log_start=simulated.LOG_START, as_of=simulated.log_end(2.5),
    )  # fmt: skip
    return jn.JourneyModel().fit(jn.tally(log, rules))


def test_a_curve_for_each_group() -> None:
    curves = jn.passage_curve(groups_fit(3), by="team")
    ax = plots.passage_curve(curves, log=True)
    for i, name in enumerate("012"):
        drawn = line(ax, name)
        np.testing.assert_allclose(drawn[:, 1], 100 * curves.at(drawn[:, 0])[i])
    assert len({one.get_color() for one in ax.lines if one.get_label() in ("0", "1", "2")}) == 3
    assert len([one for one in ax.collections if isinstance(one, PolyCollection)]) == 3
    assert len(ax.lines) == 6
    legend = ax.get_legend()
    assert legend is not None
    assert [one.get_text() for one in legend.get_texts()] == ["0", "1", "2"]
    steps = plots.passage_curve(jn.passage_curve(groups_fit(3), clock="steps", by="team"))
    assert {one.get_drawstyle() for one in steps.lines} == {"steps-post"}


def test_a_group_without_a_curve_is_named() -> None:
    legend = plots.passage_curve(jn.passage_curve(groups_fit(2), by="cohort")).get_legend()
    assert legend is not None
    assert legend.get_texts()[-1].get_text() == "2024-03: followed for 15 days, no longer than the silence"


def test_too_many_curves() -> None:
    with pytest.raises(ValueError, match="got 7 groups of team; wanted at most 6 in one picture"):
        plots.passage_curve(jn.passage_curve(groups_fit(7), clock="steps", by="team"))
