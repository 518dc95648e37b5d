"""Time to convert: the log's shares by hand and by another program, the model's beside them, and what is refused."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
import pytest
import simulated
from club_log import club_fit

import journeys as jn
from journeys.errors import JourneysWarning
from journeys.questions.linear import TOO_FEW
from journeys.questions.outcomes import UNREACHABLE
from journeys.questions.passage_curve import passage_curve
from journeys.questions.time_to_convert import BETWEEN_BINS, NO_CURVE, TOO_LONG

START = pd.Timestamp("2025-01-01")
LAST_DAY, SILENCE = 100, 30

Journey = tuple[int, str]


def fit_of(journeys: Sequence[Journey]) -> jn.JourneyFit:
    """Return the fit to a log of dates in which each person's one journey ends after some days, lapses or is open."""
    rows = []
    for who, (days, end) in enumerate(journeys):
        began = LAST_DAY - days if end == "open" else 0
        rows.append((who, began, "visit"))
        if end in ("joined", "declined"):
            rows.append((who, began + days, end))
    log = pd.DataFrame(rows, columns=["who", "day", "what"])
    log["when"] = (START + pd.to_timedelta(log.day, unit="D")).dt.date
    rules = jn.JourneyRules(
        "who", "when", "what", converted="joined", churned="declined", silence=f"{SILENCE}d", complete_history=True,
        as_of=(START + pd.Timedelta(days=LAST_DAY)).isoformat(), log_start=START.isoformat(),
    )  # fmt: skip
    return jn.JourneyModel().fit(jn.tally(log, rules))


def rows(fit: jn.JourneyFit, horizons: Sequence[str] | None = None) -> pd.DataFrame:
    return jn.time_to_convert(fit, horizons).to_frame().set_index(["measure", "horizon", "basis"])


def by_log(frame: pd.DataFrame) -> pd.DataFrame:
    """Return the shares within horizons by the log."""
    return frame[frame.index.get_level_values("basis") == "log"].iloc[1:]


# --- the log's shares -------------------------------------------------------------------------------------

TEN: list[Journey] = [(1, "joined"), (3, "joined"), (1, "declined"), (4, "declined"), (2, "open"), (5, "open")]
TEN += [(0, "lapsed")] * 4


def test_ten_journeys_by_hand() -> None:
    # Day 1: 10 at risk, two end. Day 3: 7 at risk, after one open left; a lapse is seen on day 30.
    frame = rows(fit_of(TEN * 5), ["1h", "1d", "2d", "3d", "29d"])
    assert by_log(frame).estimate.tolist() == pytest.approx([0, 0.1, 0.1, 0.1 + 0.8 / 7, 0.1 + 0.8 / 7], abs=1e-12)
    assert frame.estimate["converted", "so far", "log"] == pytest.approx(0.2)


def test_against_cumulative_incidence_of_statsmodels() -> None:
    """statsmodels 0.15.0, duration.survfunc.CumIncidenceRight, other ends competing."""
    from statsmodels.duration.survfunc import CumIncidenceRight

    rng = np.random.default_rng(11)
    days = np.minimum(rng.geometric(0.08, 600), SILENCE)
    end = np.where(days == SILENCE, 3, rng.integers(1, 3, 600))
    seen = rng.integers(5, 2 * SILENCE, 600)
    status, time = np.where(days <= seen, end, 0), np.minimum(days, seen)
    names = np.array(["open", "joined", "declined", "lapsed"])
    with np.errstate(divide="ignore", invalid="ignore"):  # on the last day all that are left lapse
        outside = CumIncidenceRight(time, status)
    horizons = [f"{day}d" for day in outside.times if day < SILENCE]
    ours = by_log(rows(fit_of(list(zip(time.tolist(), names[status].tolist(), strict=True))), horizons))
    assert ours.estimate.to_numpy() == pytest.approx(outside.cinc[0][: len(horizons)], abs=1e-12)
    # Buckets of customers against its own variance: alike but for chance.
    assert (ours.std_error / outside.cinc_se[0][: len(horizons)]).median() == pytest.approx(1, abs=0.15)


def test_flags_of_horizons() -> None:
    fit = fit_of([(1, "joined")] * 20 + [(20, "open")] * 20 + [(0, "lapsed")] * 30)
    flag = by_log(rows(fit, ["1d", "36h"])).flag
    assert flag.tolist() == ["", BETWEEN_BINS]
    rules = jn.JourneyRules("who", "when", "what", converted="joined", silence=None, complete_history=True,
                            as_of="2025-03-01")  # fmt: skip
    times = pd.to_datetime(["2025-01-01", "2025-01-02"] * 20 + ["2025-01-29"] * 20, utc=True)
    log = pd.DataFrame({"who": [*np.repeat(np.arange(20), 2), *range(20, 40)], "when": times})
    log["what"] = ["visit", "joined"] * 20 + ["visit"] * 20
    with pytest.warns(JourneysWarning, match="longest stay in visit is still open"):
        fit = jn.JourneyModel().fit(jn.tally(log, rules))
    frame = by_log(rows(fit, ["1d", "30d", "60d"]))
    assert frame.flag.tolist() == ["", "", TOO_LONG]
    assert frame.estimate["converted", "60d", "log"] == frame.estimate["converted", "30d", "log"]


# --- the model's beside them ------------------------------------------------------------------------------


def test_rows_and_their_order() -> None:
    keys = jn.time_to_convert(club_fit(), ["30d", "7d", "7d"]).keys
    assert keys.values.tolist() == [
        ["converted", "so far", "log"],
        ["converted", "7d", "log"],
        ["converted", "7d", "model"],
        ["converted", "30d", "log"],
        ["converted", "30d", "model"],
        *([name, "in the end", "model"] for name in ("converted", "median_steps", "q90_steps", "steps")),
        *([name, "in the end", "model"] for name in ("median_days", "q90_days", "days")),
    ]


def test_the_models_rows_are_those_of_the_questions_it_asks() -> None:
    fit = club_fit()
    frame = rows(fit, ["7d", "30d", "12h"])
    curve = passage_curve(fit).to_frame([0.5, 7, 30])
    mine = frame.loc[[("converted", one, "model") for one in ("12h", "7d", "30d")]]
    columns = ["estimate", "std_error", "low", "high", "flag"]
    pd.testing.assert_frame_equal(mine[columns].reset_index(drop=True), curve[columns])
    for clock, unit in (("steps", "steps"), ("time", "days")):
        passage = jn.first_passage(fit, clock=clock, method="linearised").to_frame()
        passage = passage[passage.start_state == "entry"].set_index("measure")
        for measure, name in (("median", f"median_{unit}"), ("q90", f"q90_{unit}"), ("mean", unit)):
            ours = frame.loc[(name, "in the end", "model")]
            assert ours[columns].tolist() == passage.loc[measure, columns].tolist()


def test_model_and_log_are_one_where_journeys_have_one_state() -> None:
    """With one visit and then an end the chain of whole days is the Aalen-Johansen estimate itself."""
    frame = rows(fit_of(TEN * 5), [f"{day}d" for day in (1, 2, 3, 10)])[1:9]
    log, model = frame.estimate[::2], frame.estimate[1::2]
    assert log.index.get_level_values("basis").unique() == ["log"]
    assert model.to_numpy() == pytest.approx(log.to_numpy(), abs=1e-9)
    assert frame.std_error[1::2].to_numpy() == pytest.approx(frame.std_error[::2].to_numpy(), rel=1e-6)


def test_model_and_log_agree_where_the_chain_is_right() -> None:
    rng = np.random.default_rng(12)
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=simulated.CONVERTED, silence="30d", complete_history=True,
        log_start=simulated.LOG_START.isoformat(), as_of=simulated.log_end(6.0).isoformat(),
    )  # fmt: skip
    fit = jn.JourneyModel().fit(jn.tally(simulated.simulate(6_000, 6.0, rng), rules))
    horizons = ["3d", "7d", "14d", "30d", "60d"]
    frame = rows(fit, horizons)
    for horizon in horizons:
        log, model = (frame.loc[("converted", horizon, basis)] for basis in ("log", "model"))
        assert abs(log.estimate - model.estimate) < 3 * log.std_error
        assert model.std_error < log.std_error, "the chain uses more of the log"
    end = frame.estimate["converted", "in the end", "model"]
    assert frame.estimate["converted", "60d", "model"] < end
    assert end == pytest.approx(simulated.truth().conversion, abs=0.01)


def test_median_is_below_mean_is_below_the_90_percent_quantile() -> None:
    end = rows(club_fit()).estimate.xs("in the end", level="horizon").droplevel("basis")
    for unit in ("steps", "days"):
        assert end[f"median_{unit}"] < end[unit] < end[f"q90_{unit}"]


# --- what is odd or refused -------------------------------------------------------------------------------


def test_no_conversion_yet() -> None:
    # The exact upper bound of 0 of 30 at the full 5 %: 1 - .05^(1/30); 20 more were followed for 10 days only.
    fit = fit_of([(2, "declined")] * 10 + [(0, "lapsed")] * 20 + [(10, "open")] * 20)
    frame = rows(fit, ["5d", "20d"])
    log = by_log(frame)
    assert log.high.tolist() == pytest.approx([1 - 0.05 ** (1 / 50), 1 - 0.05 ** (1 / 30)])
    assert (log.flag == TOO_FEW).all()
    assert (frame.estimate.loc["converted"] == 0).all()
    end = frame[frame.index.get_level_values("measure") != "converted"]
    assert end.estimate.isna().all()
    assert (end.flag == UNREACHABLE).all()


def test_too_many_states_for_a_curve_of_time() -> None:
    n = 501
    log = pd.DataFrame({"who": np.repeat(np.arange(n), 2), "what": [w for i in range(n) for w in (f"s{i}", "joined")]})
    log["when"] = pd.Timestamp("2025-01-01T00:00:00Z") + pd.to_timedelta(np.tile([0, 1], n), unit="h")
    rules = jn.JourneyRules("who", "when", "what", converted="joined", silence=None, complete_history=True)
    frame = rows(jn.JourneyModel().fit(jn.tally(log, rules)), ["1h"])
    model = frame.loc[("converted", "1h", "model")]
    assert np.isnan(model.estimate)
    assert model.flag == NO_CURVE
    assert frame.estimate["converted", "1h", "log"] == 1
    assert frame.estimate["converted", "in the end", "model"] == 1


def test_default_horizons_lie_around_the_conversions_seen() -> None:
    frame = rows(fit_of([(1, "joined")] * 30 + [(6, "joined")] * 30 + [(13, "joined")] * 30 + [(0, "lapsed")] * 30))
    assert by_log(frame).index.get_level_values("horizon").tolist() == ["1d", "7d", "14d"]
    assert by_log(frame).estimate.tolist() == pytest.approx([0.25, 0.5, 0.75])


def test_a_chain_without_a_log() -> None:
    chain = pd.DataFrame([[0.5, 0.5]], index=["basket"], columns=["basket", "joined"])
    with pytest.raises(ValueError, match="no time to convert to count; ask first_passage"):
        jn.time_to_convert(jn.JourneyFit.from_matrix(chain))


def test_rules_without_a_conversion() -> None:
    log = pd.DataFrame({"who": [1, 1], "when": pd.to_datetime(["2025-01-01", "2025-01-02"], utc=True)})
    log["what"] = ["visit", "declined"]
    rules = jn.JourneyRules("who", "when", "what", churned="declined", silence=None, complete_history=True)
    with pytest.raises(ValueError, match=r"name no converted outcome; wanted converted=\[\.\.\.\]"):
        jn.time_to_convert(jn.JourneyModel().fit(jn.tally(log, rules)))


def test_wrong_horizons() -> None:
    with pytest.raises(ValueError, match="horizons: got 'soon'"):
        jn.time_to_convert(club_fit(), ["soon"])
