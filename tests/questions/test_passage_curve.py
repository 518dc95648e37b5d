"""The curve of those who have reached a target: reference laws, the fitted process, bands, and what is refused."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
from club_log import club_fit
from scipy import stats
from small_chains import ABSORBING, START, known_chain, log_of_paths

import journeys as jn
from journeys.kernels.sojourn import fit_stays
from journeys.models.fit import JourneyFit
from journeys.questions.curve_result import NEVER_THAT_MANY, NO_BAND
from journeys.questions.elapsed import elapsed
from journeys.questions.linear import TOO_FEW
from journeys.questions.outcomes import UNREACHABLE
from journeys.questions.passage_curve import passage_curve
from journeys.questions.quantiles import NOT_IN_REACH
from journeys.questions.solved_curve import SolvedTime
from journeys.questions.walks import walk_to

DAYS = np.array([0.2, 1.0, 5.0, 20.0, 60.0, 150.0])


def semi_markov(case: dict[str, Any]) -> tuple[JourneyFit, list[str]]:
    """Return a case of tests/reference/semi_markov.json with its distributions, and its outcomes."""
    given = case["input"]
    outcomes = given["absorbing"]
    frame = pd.DataFrame(np.array(given["P"], float), index=given["states"], columns=given["states"])
    dwell = {name: stats.expon(scale=1 / one["rate"]) for name, one in given["sojourn"].items()}
    return JourneyFit.from_matrix(frame.drop(index=outcomes), dwell, given["start"]), outcomes


# Each case of the reference files states its source.
@pytest.mark.parametrize("start", ["c02", "c03", "c05", "c06"])
def test_reference_laws_in_time(start: str, reference: Callable[[str, str], dict[str, Any]]) -> None:
    case = reference("semi_markov", start)
    fit, outcomes = semi_markov(case)
    expected = case["expected"]
    for to, told in expected.get("cumulative_incidence", {"win": expected.get("cdf")}).items():
        curve = passage_curve(fit, to)
        np.testing.assert_allclose(curve.at([float(t) for t in told]), list(told.values()), atol=1e-4)
        assert curve.at(np.inf) == pytest.approx(curve.probability)
    whole = passage_curve(fit, outcomes).quantile([float(p) for p in expected["quantiles"]])
    np.testing.assert_allclose(whole["estimate"], list(expected["quantiles"].values()), rtol=1e-3)
    assert (whole["low"] == whole["estimate"]).all()


@pytest.mark.parametrize("start", ABSORBING)
def test_reference_laws_in_steps(start: str, reference: Callable[[str, str], dict[str, Any]]) -> None:
    case = reference("absorbing", start)
    fit, _, outcomes = known_chain(case)
    expected = case["expected"]
    begin = expected["distribution_from"]
    curve = passage_curve(fit, outcomes, begin, "steps")
    told = expected["cdf_steps"]
    np.testing.assert_allclose(curve.at([float(n) for n in told]), list(told.values()), atol=1e-9)
    split = expected["cumulative_incidence_steps"]
    for i, to in enumerate(outcomes):
        found = passage_curve(fit, to, begin, "steps").at([float(n) for n in split])
        np.testing.assert_allclose(found, [row[i] for row in split.values()], atol=1e-9)


@pytest.mark.parametrize("clock", ["steps", "time"])
@pytest.mark.parametrize("start", ["entry", "poster", "basket"])
def test_its_mean_and_limit_are_those_of_first_passage(clock: str, start: str) -> None:
    fit = club_fit()
    frame = jn.first_passage(fit, None, clock).to_frame().query("start_state == @start").set_index("measure")
    curve = passage_curve(fit, start=start, clock=clock)
    assert curve.at(np.inf) == pytest.approx(frame.loc["probability", "estimate"])
    given = curve.given_reached()
    if clock == "steps":
        mean = (1 - given.at(np.arange(400))).sum()
    else:
        points = np.concatenate([[0.0], np.geomspace(1e-4, 3000, 40_000)])
        left = 1 - given.at(points)
        mean = float(((left[1:] + left[:-1]) / 2 * np.diff(points)).sum())
    assert mean == pytest.approx(frame.loc["mean", "estimate"], rel=2e-4)
    # in the end the band is that of the probability
    row = curve.to_frame([1e5]).iloc[0]
    linear = jn.first_passage(fit, None, clock, **_linear()).to_frame().query("start_state == @start")
    told = linear.set_index("measure").loc["probability"]
    assert row["std_error"] == pytest.approx(told["std_error"], rel=2e-3)


def _linear() -> dict[str, Any]:
    """Ask for the linearised interval where the question has others."""
    import inspect

    return {"method": "linearised"} if "method" in inspect.signature(jn.first_passage).parameters else {}


def small_fit(n: int, rng: np.random.Generator, **rules: Any) -> JourneyFit:
    """Return a fit to random paths over two states, half of them undecided when the log ends."""
    paths, days = [], []
    for _ in range(n):
        path, at = ["a" if rng.random() < 0.6 else "b"], [float(rng.integers(0, 40))]
        while rng.random() < 0.75:
            path.append(str(rng.choice(["a", "b", "won", "lost"], p=[0.3, 0.4, 0.2, 0.1])))
            at.append(at[-1] + float(rng.exponential(3)))
            if path[-1] in ("won", "lost"):
                break
        paths.append(path)
        days.append(at)
    told = {"silence": "20d"} | rules
    asked = jn.JourneyRules("customer", "time", "event", converted="won", churned="lost", complete_history=True,
                            as_of=str(START + pd.Timedelta(days=70)), **told)  # fmt: skip
    return jn.JourneyModel().fit(jn.tally(log_of_paths(paths, range(n), days), asked))


def simulated_share(fit: JourneyFit, to: str, times: np.ndarray, rng: np.random.Generator, n: int) -> np.ndarray:
    """Walk through the cells of a fit, each stay as long as its bin's straight line says, and count who arrived."""
    kept = fit.fitted_stays
    assert kept is not None
    stays, found = kept.stays, kept.found
    lapsing = np.flatnonzero(found.survivor_move >= 0)
    state = np.concatenate([stays.state, lapsing])
    target = np.concatenate([stays.target, np.full(len(lapsing), stays.survivor_target or 0)])
    q = np.concatenate([found.q, found.survival_end[lapsing]])
    low = np.concatenate([stays.lower[stays.bin], np.full(len(lapsing), stays.survivor_dwell)])
    high = np.concatenate([stays.upper[stays.bin], np.full(len(lapsing), stays.survivor_dwell)])
    tau = np.concatenate([found.tau, np.full(len(lapsing), stays.survivor_dwell)])
    goal, at, elapsed_days = fit.nodes.labels.index(to), np.zeros(n, np.int64), np.zeros(n)
    arrived = np.full(n, np.inf)
    live = np.arange(n)
    while len(live):
        for i in np.unique(at[live]):
            mine, cells = live[at[live] == i], np.flatnonzero(state == i)
            drawn = cells[rng.choice(len(cells), len(mine), p=q[cells] / q[cells].sum())]
            # rejection from the line through the bin, or a triangle at its end
            u, v = rng.random(len(mine)), rng.random(len(mine))
            width = high[drawn] - low[drawn]
            tilt = np.divide(6 * (tau[drawn] - (low[drawn] + high[drawn]) / 2), width, out=np.zeros(len(mine)),
                             where=width > 0)  # fmt: skip
            slope = np.minimum(np.abs(tilt), 1.0)
            y = np.where(rng.random(len(mine)) < slope, np.maximum(u, v), u)
            y = np.where(tilt < 0, 1 - y, y)
            leg = np.where(tilt > 0, 3 * (high[drawn] - tau[drawn]), 3 * (tau[drawn] - low[drawn]))
            steep = np.abs(tilt) > 1
            dwell = np.where(steep, np.where(tilt > 0, high[drawn] - leg * (1 - y), low[drawn] + leg * y),
                             low[drawn] + width * y)  # fmt: skip
            elapsed_days[mine] += 0.0 if i == 0 else dwell
            at[mine] = target[drawn]
        arrived[live[at[live] == goal]] = elapsed_days[live[at[live] == goal]]
        live = live[at[live] < fit.nodes.n_rows]
    return (arrived[:, None] <= times).mean(axis=0)


@pytest.mark.parametrize("rules", [{}, {"repeats": "merge"}, {"silence": None}])
@pytest.mark.filterwarnings("ignore::journeys.errors.JourneysWarning")
def test_the_fitted_process_simulated(rules: dict[str, Any]) -> None:
    fit = small_fit(150, np.random.default_rng(11), **rules)
    n, times = 60_000, np.array([0.05, 0.5, 2.0, 6.0, 15.0, 40.0])
    share = simulated_share(fit, "won", times, np.random.default_rng(12), n)
    found = passage_curve(fit, "won").at(times)
    assert np.all(np.abs(share - found) < 4.5 * np.sqrt(found * (1 - found) / n) + 1e-4)


def test_dates_are_whole_days() -> None:
    rng = np.random.default_rng(13)
    paths, days = [], []
    for _ in range(200):
        path, at = ["a"], [int(rng.integers(0, 40))]
        while rng.random() < 0.7:
            path.append(str(rng.choice(["a", "b", "won"], p=[0.3, 0.4, 0.3])))
            at.append(at[-1] + int(rng.integers(0, 6)))
            if path[-1] == "won":
                break
        paths.append(path)
        days.append(at)
    log = log_of_paths(paths, range(200), days)
    log["time"] = log["time"].dt.date
    rules = jn.JourneyRules("customer", "time", "event", converted="won", silence="20d", complete_history=True,
                            as_of="2025-03-20")  # fmt: skip
    fit = jn.JourneyModel().fit(jn.tally(log, rules))
    assert fit.tally is not None
    assert fit.tally.whole_days
    curve = passage_curve(fit)
    share = simulated_share(fit, "won", np.arange(12.0), np.random.default_rng(1), 60_000)
    np.testing.assert_allclose(curve.at(np.arange(12)), share, atol=4.5 * np.sqrt(0.25 / 60_000))
    np.testing.assert_array_equal(curve.at([3.0, 3.9]), curve.at([3, 3]))
    frame = curve.to_frame()
    assert np.array_equal(frame["time"], np.round(frame["time"]))
    row = curve.given_reached().quantile(0.5).iloc[0]
    assert all(float(row[name]).is_integer() for name in ("estimate", "low", "high"))
    here = curve.given_reached().at([row["estimate"] - 1, row["estimate"]])
    assert here[0] < 0.5 <= here[1]


@pytest.mark.parametrize("whole", [False, True])
def test_the_influence_is_the_derivative(whole: bool) -> None:
    """One bucket's stays counted a little more often, dwells held: the curve moves as its influence says."""
    fit = club_fit() if not whole else whole_day_fit()
    times = DAYS if not whole else np.floor(DAYS)
    kept = fit.fitted_stays
    assert kept is not None
    walk = walk_to(fit, None)
    curve = passage_curve(fit)
    influence = curve._solved.influence(times)
    assert influence is not None
    for bucket in (0, 7):
        ends = []
        for change in (1e-4, -1e-4):
            mine = kept.by_bucket.bucket == bucket
            more = np.bincount(kept.by_bucket.cell[mine], kept.by_bucket.n[mine], len(kept.stays.n)) * change
            still = kept.by_bucket.open_bucket == bucket
            stays = replace(
                kept.stays, n=kept.stays.n + more, total=kept.stays.total + more * kept.found.tau,
                open_n=kept.stays.open_n + change * np.where(still, kept.by_bucket.open_n, 0.0),
                survivor_n=kept.stays.survivor_n + change * np.bincount(
                    kept.by_bucket.survivor_state[kept.by_bucket.survivor_bucket == bucket],
                    kept.by_bucket.survivor_n[kept.by_bucket.survivor_bucket == bucket], kept.stays.n_states),
            )  # fmt: skip
            found = fit_stays(stays, kept.found.open_weight)
            other = replace(fit, probability=found.probability, mean=found.mean, second=found.second,
                            fitted_stays=replace(kept, stays=stays, found=found))  # fmt: skip
            it = elapsed(other, walk)
            assert it is not None
            ends.append(SolvedTime(it, 0).at(times))
        moved = (ends[0] - ends[1]) / 2e-4
        np.testing.assert_allclose(influence[bucket], moved, atol=0.01 * np.abs(influence).max())


def whole_day_fit() -> JourneyFit:
    rng = np.random.default_rng(17)
    rows = []
    for who in range(300):
        day = int(rng.integers(0, 60))
        for event in ("a", "b", "won" if rng.random() < 0.5 else "a"):
            rows.append((who, (START + pd.Timedelta(days=day)).date(), event))
            day += int(rng.integers(0, 9))
    log = pd.DataFrame(rows, columns=["customer", "time", "event"]).sort_values("time", kind="stable")
    rules = jn.JourneyRules("customer", "time", "event", converted="won", silence="20d", complete_history=True,
                            as_of="2025-03-25")  # fmt: skip
    return jn.JourneyModel().fit(jn.tally(log, rules))


@pytest.mark.parametrize("clock", ["steps", "time"])
def test_frames_levels_and_words(clock: str) -> None:
    curve = passage_curve(club_fit(), clock=clock)
    frame = curve.to_frame()
    assert list(frame.columns) == [clock, "estimate", "std_error", "low", "high", "confidence_level", "flag"]
    assert 20 <= len(frame) <= 61
    assert frame["estimate"].is_monotonic_increasing
    inside = frame[frame["flag"] == ""]
    assert ((inside["low"] < inside["estimate"]) & (inside["estimate"] < inside["high"])).all()
    wide, narrow = curve.confidence_interval(0.99), curve.confidence_interval(0.5)
    assert (wide["high"] - wide["low"] >= narrow["high"] - narrow["low"]).all()
    given = curve.given_reached()
    assert given.given
    assert given._solved is curve._solved
    np.testing.assert_allclose(given.of_all().to_frame()["estimate"], frame["estimate"])
    np.testing.assert_allclose(given.at(frame[clock]) * curve.probability, curve.at(frame[clock]))
    assert "\n" not in repr(curve)
    assert clock[:4] in repr(curve) or "days" in repr(curve)
    assert "<table" in curve._repr_html_()
    text = curve.summary()
    assert "13.5 % reach it in the end" in text
    assert ("each number of steps by itself" if clock == "steps" else "each time by itself") in text


def test_defective_quantiles() -> None:
    curve = passage_curve(club_fit())
    frame = curve.quantile([0.05, 0.5])
    assert curve.at(frame["estimate"][0]) == pytest.approx(0.05, abs=1e-4)
    assert frame["low"][0] < frame["estimate"][0] < frame["high"][0]
    assert np.isinf(frame["estimate"][1])
    assert frame["flag"].tolist() == ["", NEVER_THAT_MANY]
    steps = passage_curve(club_fit(), clock="steps").quantile([0.05, 0.5])
    assert steps["estimate"].tolist()[1] == np.inf
    assert steps["estimate"][0].is_integer()
    # just below the limit the band has no end above
    edge = curve.quantile(curve.probability * 0.999)
    assert edge["high"][0] > edge["estimate"][0]


def test_units() -> None:
    days, hours = passage_curve(club_fit()), passage_curve(club_fit(), unit="hours")
    np.testing.assert_allclose(hours.at(24 * DAYS), days.at(DAYS))
    np.testing.assert_allclose(hours.to_frame()["time"], 24 * days.to_frame()["time"])
    one, other = (curve.given_reached().quantile(0.5).iloc[0] for curve in (days, hours))
    for name in ("estimate", "std_error", "low", "high"):
        assert other[name] == pytest.approx(24 * one[name])


def test_the_log_has_a_curve_of_its_own() -> None:
    fit = club_fit()
    curve = passage_curve(fit)
    frame = curve.observed()
    weeks = passage_curve(fit, unit="weeks").observed()
    np.testing.assert_allclose(weeks["time"] * 7, frame["time"])
    told = jn.time_to_convert(fit, ["7d", "30d"]).to_frame().query("measure == 'converted' and basis == 'log'")
    told = told.set_index("horizon")["estimate"]
    for days in (7, 30):
        row = frame[np.isclose(frame["time"], days)]
        assert row["estimate"].item() == pytest.approx(told[f"{days}d"])
    assert frame["n_at_risk"].is_monotonic_decreasing
    for other in (curve.given_reached(), passage_curve(fit, "declined"), passage_curve(fit, start="poster"),
                  passage_curve(fit, clock="steps")):  # fmt: skip
        assert not other.has_observed
        with pytest.raises(ValueError, match="the log has a curve of its own only for"):
            other.observed()


def test_at_the_edges() -> None:
    curve = passage_curve(club_fit(), "poster")
    begin = club_fit().matrix.loc["entry", "poster"]
    assert curve.at(0) == pytest.approx(begin)
    assert curve.to_frame([0.0])["estimate"][0] == pytest.approx(begin)
    assert passage_curve(club_fit()).at(0) == 0
    assert passage_curve(club_fit()).at([[1.0, 2.0]]).shape == (1, 2)
    frame = passage_curve(club_fit()).to_frame([1e-9])
    assert frame["flag"].tolist() == [TOO_FEW]
    assert frame["low"][0] == 0


def test_a_target_out_of_reach() -> None:
    chain = pd.DataFrame([[0.0, 0.0, 1.0], [0.0, 0.0, 1.0]], index=["a", "b"], columns=["a", "b", "won"])
    fit = JourneyFit.from_matrix(chain, dwell={"a": stats.expon(), "b": stats.expon()})
    for clock in ("steps", "time"):
        curve = passage_curve(fit, "b", "a", clock)
        assert curve.at([0, 5]).tolist() == [0.0, 0.0]
        assert np.isnan(curve.given_reached().at([5])).all()
        assert curve.to_frame()["flag"].tolist() == [UNREACHABLE]
        assert UNREACHABLE in curve.quantile(0.5)["flag"][0]
        assert "0.0 % reach it" in curve.summary()


def test_too_many_steps_for_a_band(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("journeys.questions.solved_curve._STEP_WORK", 1.0)
    frame = passage_curve(club_fit(), clock="steps").to_frame()
    assert set(frame["flag"]) == {NO_BAND}
    assert frame["low"].isna().all()
    assert frame["estimate"].notna().all()


def test_known_chains_keep_their_distributions(tmp_path: Any) -> None:
    frame = pd.DataFrame([[0.2, 0.8], [1.0, 0.0]], index=["a", "b"], columns=["b", "won"])
    dwell = {("a", "b"): stats.gamma(2.0, scale=1.5), ("a", "won"): stats.lognorm(s=1.0, scale=2.0), "b": stats.expon()}
    chain = JourneyFit.from_matrix(frame.reindex(columns=["a", "b", "won"], fill_value=0.0), dwell)
    chain.save(tmp_path / "chain.parquet")
    back = JourneyFit.load(tmp_path / "chain.parquet")
    np.testing.assert_array_equal(passage_curve(chain, "won").at(DAYS), passage_curve(back, "won").at(DAYS))
    histogram = stats.rv_histogram(np.histogram([1.0, 2.0, 2.5], bins=2))
    whole = frame.reindex(columns=["a", "b", "won"], fill_value=0.0)
    other = JourneyFit.from_matrix(whole, dict.fromkeys("ab", histogram))
    assert 0 < passage_curve(other, "won").at(2.0) < 1
    with pytest.raises(jn.errors.StoreError, match="no frozen distribution of scipy.stats"):
        other.save(tmp_path / "other.parquet")


def test_refusals(monkeypatch: pytest.MonkeyPatch) -> None:
    fit = club_fit()
    means = JourneyFit.from_matrix(pd.DataFrame([[1.0]], index=["a"], columns=["won"]), {"a": 2.0})
    for asked, match in (
        (lambda: passage_curve(fit, "nowhere"), "to='nowhere' is not in this chain"),
        (lambda: passage_curve(fit, start="joined"), "start='joined' is no state of this chain"),
        (lambda: passage_curve(fit, "poster", "poster"), "is itself in `to`"),
        (lambda: passage_curve(fit, clock="days"), "clock"),
        (lambda: passage_curve(fit, unit="months"), "unit"),
        (lambda: passage_curve(fit, given=1), "given: got 1; wanted True"),  # type: ignore[arg-type]
        (lambda: passage_curve(fit, confidence_level=95), "confidence_level"),
        (lambda: passage_curve(means, "won"), "no distribution of dwell given for every move on the way"),
        (lambda: passage_curve(fit).at(-1), "wanted times since the start"),
        (lambda: passage_curve(fit).at("soon"), "wanted times since the start"),
        (lambda: passage_curve(fit).quantile(50), "p: got 50; wanted shares between 0 and 1"),
        (lambda: passage_curve(fit).confidence_interval(0), "confidence_level"),
    ):
        with pytest.raises(ValueError, match=match):
            asked()
    assert passage_curve(means, "won", clock="steps").at(2) == 1
    monkeypatch.setattr("journeys.questions.passage_curve.DENSE", 3)
    with pytest.raises(ValueError, match="8 states lead to the target|9 states lead to the target"):
        passage_curve(fit)


def test_rounding_is_no_share() -> None:
    """In the first hour of the demo 2e-15 of all journeys would have joined: that is rounding in the transforms."""
    curve = passage_curve(club_fit(), unit="hours")
    frame = curve.to_frame([0.0, 1.0, 24.0])
    assert frame["estimate"].tolist()[:2] == [0.0, 0.0]
    assert frame["low"].tolist()[:2] == [0.0, 0.0]
    # nobody among so many: an exact bound, no number for the spread
    assert frame["std_error"].tolist()[:2] == [0.0, 0.0]
    assert (frame["high"][:2] > 1e-5).all()
    assert frame["flag"].tolist() == [TOO_FEW, TOO_FEW, ""]
    assert frame["estimate"][2] > 1e-4
    assert curve.given_reached().at([1.0]).tolist() == [0.0]


def test_small_shares_that_are_real_stay() -> None:
    """Nine in ten million of the stays of an exponential law with mean one end within 9e-7."""
    fit = JourneyFit.from_matrix(pd.DataFrame([[1.0]], index=["a"], columns=["won"]), {"a": stats.expon()})
    told = passage_curve(fit, "won", start="a").at([9e-4, 0.01])
    np.testing.assert_allclose(told, stats.expon.cdf([9e-4, 0.01]), rtol=0.01)


def test_more_steps_than_are_walked(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("journeys.kernels.phase_type.DENSE", 1)
    monkeypatch.setattr("journeys.questions.solved_curve.DENSE", 1)
    monkeypatch.setattr("journeys.kernels.phase_type._WALK_WORK", 60.0)
    fit = JourneyFit.from_matrix(pd.DataFrame([[0.99, 0.01]], index=["a"], columns=["a", "won"]))
    curve = passage_curve(fit, "won", start="a", clock="steps")
    frame = curve.to_frame([5, 20, 21, np.inf])
    np.testing.assert_allclose(frame["estimate"][:2], 1 - 0.99 ** np.array([5, 20]))
    assert np.isnan(frame["estimate"][2])
    assert frame["estimate"][3] == 1
    assert frame["flag"].tolist() == ["", "", NOT_IN_REACH, ""]
    # what is shown unasked ends where the walk ends
    assert curve.to_frame()["steps"].tolist() == list(range(1, 21))
    for one in (curve, curve.given_reached()):
        assert one.quantile((0.1, 0.5))["flag"].tolist() == ["", NOT_IN_REACH]
