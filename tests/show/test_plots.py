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

from club_log import club_fit  # noqa: E402
from matplotlib import pyplot as plt  # noqa: E402
from matplotlib.axes import Axes  # noqa: E402
from matplotlib.collections import LineCollection, PolyCollection  # noqa: E402
from matplotlib.colors import to_rgb  # noqa: E402
from scipy import stats  # noqa: E402

import journeys as jn  # noqa: E402
from journeys.questions.passage_curve import passage_curve  # noqa: E402
from journeys.show import palette, plots  # noqa: E402


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
    light = [float(np.dot([0.2126, 0.7152, 0.0722], to_rgb(one))) for one in (palette.BLUE, palette.ORANGE)]
    assert abs(light[0] - light[1]) > 0.2


def test_matplotlib_is_loaded_when_the_first_picture_is_drawn() -> None:
    code = (
        "import sys, journeys as jn, pandas as pd; assert 'matplotlib' not in sys.modules; "
        "chain = pd.DataFrame([[0.6, 0.4]], index=['basket'], columns=['joined', 'left']); "
        "answer = jn.outcomes(jn.JourneyFit.from_matrix(chain)); assert 'matplotlib' not in sys.modules; "
        "import matplotlib; matplotlib.use('Agg'); jn.plots.intervals(answer)"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


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
