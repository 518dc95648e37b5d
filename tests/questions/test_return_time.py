from __future__ import annotations

import math
from functools import cache
from math import comb

import numpy as np
import pandas as pd
import pytest
from club_log import club_fit
from scipy import stats
from simulated import log_end, simulate
from small_chains import column, ids_of_distinct_buckets, log_of_paths, one, ruin

import journeys as jn
from journeys.questions.return_time import ReturnTimeResult

ERGODIC = ["a01", "a02", "a03", "a04", "a05", "a06", "a07", "a09"]


def square(names: list[str], p: np.ndarray) -> pd.DataFrame:
    return pd.DataFrame(p, index=names, columns=names)


def stationary(p: np.ndarray) -> np.ndarray:
    """Solve pi P = pi, sum 1, by least squares."""
    n = len(p)
    return np.linalg.lstsq(np.vstack([p.T - np.eye(n), np.ones(n)]), np.r_[np.zeros(n), 1.0], rcond=None)[0]


@pytest.mark.parametrize("start", ERGODIC)
def test_recurrence_of_ergodic_chains(reference, start: str) -> None:
    """Kemeny and Snell 1960, Grinstead and Snell 1997, Kac 1947, Feller vol. 1 1968, Prais 1955, Craig and Sendi
    2002; exact fractions and R markovchain 0.9.1; the source of each stands in tests/reference/ergodic.json.
    """
    case = reference("ergodic", start)
    given, expected, close = case["input"], case["expected"], case["tolerance"]
    names, p = given["states"], np.array(given["P"], float)
    result = jn.return_time(jn.JourneyFit.from_matrix(square(names, p)))
    frame = result.to_frame()
    assert frame.state.unique().tolist() == names
    assert column(result, "estimate", "state", names, measure="probability").tolist() == [1.0] * len(names)
    mean = column(result, "estimate", "state", names, measure="mean")
    assert mean == pytest.approx(expected["mean_recurrence"], **close)
    assert 1 / mean == pytest.approx(expected["stationary"], **close)
    spread = column(result, "estimate", "state", names, measure="sd")
    # The diagonal of the variance matrix is that of the return time (conventions of the reference).
    assert spread**2 == pytest.approx(np.diag(np.array(expected["first_passage_variance"])), rel=1e-8, abs=1e-9)
    assert column(result, "estimate", "state", names, measure="mean_unconditional") == pytest.approx(mean)
    assert (frame.flag == "").all()


@pytest.mark.parametrize("start", ERGODIC)
def test_quantiles_of_the_first_return(reference, start: str) -> None:
    """First-passage probabilities of steps 1 to 12 from the first state to itself (same sources)."""
    case = reference("ergodic", start)
    given, expected = case["input"], case["expected"]
    within = np.cumsum(np.array(expected["first_passage_pmf_from_first_state"])[:, 0])
    result = jn.return_time(jn.JourneyFit.from_matrix(square(given["states"], np.array(given["P"], float))))
    for measure, level in (("median", 0.5), ("q90", 0.9)):
        told = one(result, state=given["states"][0], measure=measure)
        if within[-1] > level + 1e-9:
            assert told == 1 + np.argmax(within > level - 1e-12)
        else:
            assert told > 12


def test_ehrenfest_urns() -> None:
    """Kac, Amer. Math. Monthly 54 (1947) 369-391: mean recurrence 2^n / C(n, i), here with ten balls."""
    n = 10
    p = np.zeros((n + 1, n + 1))
    i = np.arange(n)
    p[i, i + 1] = 1 - i / n
    p[i + 1, i] = (i + 1) / n
    names = [f"{k} balls" for k in range(n + 1)]
    result = jn.return_time(jn.JourneyFit.from_matrix(square(names, p)))
    wanted = [2**n / comb(n, k) for k in range(n + 1)]
    assert column(result, "estimate", "state", names, measure="mean") == pytest.approx(wanted, rel=1e-9)


def test_king_on_a_board(reference) -> None:
    """Aldous and Fill, Reversible Markov Chains and Random Walks on Graphs, 2002: 2 |E| / degree (a08)."""
    case = reference("ergodic", "a08")
    board = case["input"]["board"]
    row, place = np.divmod(np.arange(board**2), board)
    near = np.maximum(abs(row[:, None] - row), abs(place[:, None] - place)) == 1
    names = [f"{r}-{c}" for r, c in zip(row, place, strict=True)]
    fit = jn.JourneyFit.from_matrix(square(names, near / near.sum(axis=1, keepdims=True)))
    result = jn.return_time(fit, ["0-0", "0-3", "4-4"])
    wanted = [case["expected"][f"mean_recurrence_{where}"] for where in ("corner", "edge", "inner")]
    assert column(result, "estimate", "state", ["0-0", "0-3", "4-4"], measure="mean") == pytest.approx(wanted)


def test_time_of_a_chain_without_outcomes(reference) -> None:
    """Ross, Introduction to Probability Models, ch. 7 (section recalled from memory); Pyke 1961; exact fractions
    (c01): the diagonal there is the recurrence.
    """
    case = reference("semi_markov", "c01")
    given, expected, close = case["input"], case["expected"], case["tolerance"]
    names = given["states"]
    dwell = {name: stats.expon(scale=mean) for name, mean in zip(names, given["mean_sojourn"], strict=True)}
    fit = jn.JourneyFit.from_matrix(square(names, np.array(given["P"], float)), dwell=dwell)
    result = jn.return_time(fit, clock="time")
    means = np.diag(np.array(expected["mean_first_passage_time"]))
    assert column(result, "estimate", "state", names, measure="mean") == pytest.approx(means, **close)
    spread = column(result, "estimate", "state", names, measure="sd")
    assert spread**2 == pytest.approx(np.diag(np.array(expected["variance_first_passage_time"])), **close)
    hours = jn.return_time(fit, clock="time", unit="hours")
    assert column(hours, "estimate", "state", names, measure="q90") == pytest.approx(
        24 * column(result, "estimate", "state", names, measure="q90")
    )


def test_alternating_renewal() -> None:
    """Cox, Renewal Theory, 1962, ch. 7: up with rate 1/4, down with rate 2; the return time is hypoexponential:
    mean 4.5, variance 16.25, share back within t: 1 - (2 e^(-t/4) - e^(-2t) / 4) / 1.75.
    """
    fit = jn.JourneyFit.from_matrix(
        square(["up", "down"], np.array([[0.0, 1.0], [1.0, 0.0]])),
        dwell={"up": stats.expon(scale=4.0), "down": stats.expon(scale=0.5)},
    )
    result = jn.return_time(fit, "up", "time")
    assert one(result, measure="mean") == pytest.approx(4.5, rel=1e-12)
    assert one(result, measure="sd") == pytest.approx(math.sqrt(16.25), rel=1e-12)
    for measure, level in (("median", 0.5), ("q90", 0.9)):
        t = one(result, measure=measure)
        assert 1 - (2 * math.exp(-t / 4) - math.exp(-2 * t) / 4) / 1.75 == pytest.approx(level, abs=2e-4)


@pytest.mark.parametrize("z", [1, 3, 6])
def test_ruin(z: int) -> None:
    """Feller, vol. 1, 3rd ed. 1968, XIV.2, fair game to 8: from z + 1 back to z with 1 - 1/(8 - z), and so on."""
    a = 8
    result = jn.return_time(jn.JourneyFit.from_matrix(ruin(0.5, a)), str(z))
    up, down = (1 - 1 / (a - z)) / 2, (1 - 1 / z) / 2
    assert one(result, measure="probability") == pytest.approx(up + down, rel=1e-12)
    # Duration given that the near end is met (Stern, Math. Magazine 48 (1975) 200-203), at distance 1 of d.
    mean = (up * (1 + ((a - z) ** 2 - (a - z - 1) ** 2) / 3) + down * (1 + (z**2 - (z - 1) ** 2) / 3)) / (up + down)
    assert one(result, measure="mean") == pytest.approx(mean, rel=1e-12)
    assert one(result, measure="mean_unconditional") == math.inf
    assert one(result, "flag", measure="mean_unconditional") == "infinite: some never do"


def test_geometric_returns() -> None:
    """Feller, vol. 1, 3rd ed. 1968, VI.8: wet to wet with 1/2, else dry days of mean 4."""
    fit = jn.JourneyFit.from_matrix(square(["wet", "dry"], np.array([[0.5, 0.5], [0.25, 0.75]])))
    result = jn.return_time(fit, "wet")
    dry = stats.geom(0.25)
    assert one(result, measure="mean") == pytest.approx(0.5 + 0.5 * (1 + dry.mean()))
    square_mean = 0.5 + 0.5 * (dry.var() + (1 + dry.mean()) ** 2)
    assert one(result, measure="sd") == pytest.approx(math.sqrt(square_mean - 3.0**2))
    assert one(result, measure="median") == 1
    assert one(result, measure="q90") == 1 + dry.ppf(0.8)


CHAIN = pd.DataFrame(
    [[0.1, 0.3, 0.2, 0.4, 0.0], [0.2, 0.0, 0.3, 0.1, 0.4], [0.0, 0.0, 0.0, 1.0, 0.0]],
    index=["price", "basket", "help"], columns=["price", "basket", "help", "left", "joined"],
)  # fmt: skip
DWELL = {"price": stats.expon(scale=3.0), "basket": stats.uniform(1, 2), "help": stats.gamma(2.0)}


@pytest.mark.parametrize("clock", ["steps", "time"])
@pytest.mark.parametrize("state", ["price", "basket"])
def test_return_is_passage_through_a_chain_split_by_hand(state: str, clock: str) -> None:
    split = CHAIN.rename(columns={state: "back"})
    fit = jn.JourneyFit.from_matrix(split, dwell=DWELL, entry=state)
    passage = jn.first_passage(fit, "back", clock)
    result = jn.return_time(jn.JourneyFit.from_matrix(CHAIN, dwell=DWELL), state, clock)
    for measure in ("probability", "median", "q90", "mean", "sd", "mean_unconditional"):
        assert one(result, measure=measure) == pytest.approx(one(passage, start_state=state, measure=measure), rel=1e-6)


def test_restart_is_one_over_the_stationary_share() -> None:
    """Kemeny and Snell 1960, ch. V: 1/pi of the chain in which each move into an outcome leads to entry."""
    entry = {"price": 0.7, "help": 0.3}
    fit = jn.JourneyFit.from_matrix(CHAIN, entry=entry)
    p = np.zeros((4, 4))
    p[0, 1:] = [0.7, 0.0, 0.3]
    p[1:, 1:] = CHAIN.iloc[:, :3]
    p[1:, 0] = CHAIN[["left", "joined"]].sum(axis=1)
    result = jn.return_time(fit, restart=True)
    wanted = 1 / stationary(p)[1:]
    for measure in ("mean", "mean_unconditional"):
        assert column(result, "estimate", "state", list(CHAIN.index), measure=measure) == pytest.approx(wanted)
    assert column(result, "estimate", "state", list(CHAIN.index), measure="probability").tolist() == [1.0] * 3
    assert (result.to_frame().flag == "").all()


def test_restart_of_a_fitted_chain_is_length_over_visits() -> None:
    """Steps of a journey over visits to the state in it (D0 / N0c), both asked otherwise."""
    fit = club_fit()
    result = jn.return_time(fit, restart=True, method="linearised")
    length = one(jn.first_passage(fit, fit.outcomes, method="linearised"), start_state="entry", measure="mean")
    inner = fit.matrix.reindex(columns=["entry", *fit.states], fill_value=0.0).to_numpy()
    visits = np.linalg.inv(np.eye(len(inner)) - inner)[0, 1:]
    assert column(result, "estimate", "state", list(fit.states), measure="mean") == pytest.approx(length / visits)
    alone = jn.return_time(fit, method="linearised")
    back = 1 - 1 / np.linalg.inv(np.eye(len(inner)) - inner).diagonal()[1:]
    assert column(alone, "estimate", "state", list(fit.states), measure="probability") == pytest.approx(back)


def test_restart_changes_nothing_without_outcomes() -> None:
    fit = jn.JourneyFit.from_matrix(square(["wet", "dry"], np.array([[0.5, 0.5], [0.25, 0.75]])))
    pd.testing.assert_frame_equal(jn.return_time(fit).to_frame(), jn.return_time(fit, restart=True).to_frame())


def test_fitted_chain_walked_by_chance() -> None:
    """From the price page of the club's fitted chain, 40,000 walks with restart, until they are back there."""
    fit = club_fit()
    rows, start = fit.nodes.n_rows, fit.nodes.labels.index("price_page")
    frame, inner = (
        jn.return_time(fit, "price_page", restart=again, method="linearised").to_frame().set_index("measure").estimate
        for again in (True, False)
    )
    matrix = np.zeros((rows, rows))
    np.add.at(matrix, (fit.move_state, np.where(fit.move_target < rows, fit.move_target, 0)), fit.probability)
    ways, rng = matrix.cumsum(axis=1), np.random.default_rng(4)
    ways[:, -1] = 1.0
    at, steps, ended = np.full(40_000, start), np.zeros(40_000, int), np.zeros(40_000, bool)
    moving = np.arange(len(at))
    while moving.size:
        at[moving] = (rng.random(len(moving))[:, None] >= ways[at[moving]]).sum(axis=1)
        steps[moving] += 1
        ended[moving] |= at[moving] == 0
        moving = moving[at[moving] != start]
    assert frame["mean"] == pytest.approx(steps.mean(), abs=4 * steps.std() / 200)
    assert frame["sd"] == pytest.approx(steps.std(), rel=0.05)
    within = steps[~ended]
    share = len(within) / len(steps)
    assert inner["probability"] == pytest.approx(share, abs=4 * math.sqrt(share / len(steps)))
    assert inner["mean"] == pytest.approx(within.mean(), abs=4 * within.std() / math.sqrt(len(within)))
    error = 4 * math.sqrt(0.25 / len(within))
    assert np.mean(within <= inner["median"]) > 0.5 - error
    assert np.mean(within <= inner["median"] - 1) < 0.5 + error


# --- uncertainty ------------------------------------------------------------------------------------------


@cache
def simulated_fit() -> jn.JourneyFit:
    rules = jn.JourneyRules("customer", "time", "event", converted=["joined"], silence="30d",
                            log_start="2024-01-01", as_of=log_end(4))  # fmt: skip
    return jn.JourneyModel().fit(jn.tally(simulate(2_000, 4, np.random.default_rng(21)), rules))


def by_row(result: ReturnTimeResult) -> pd.DataFrame:
    return result.to_frame().set_index(["state", "measure"])


@pytest.mark.parametrize(("clock", "restart"), [("steps", False), ("steps", True), ("time", False)])
@pytest.mark.parametrize("which", ["club", "simulated"])
def test_standard_errors_of_bootstrap_and_linearised_are_close(which: str, clock: str, restart: bool) -> None:
    """Within a fifth of each other where the linearised one rests on 20 degrees of freedom."""
    fit = club_fit() if which == "club" else simulated_fit()
    drawn = by_row(jn.return_time(fit, clock=clock, restart=restart))
    linear = by_row(jn.return_time(fit, clock=clock, restart=restart, method="linearised"))
    resampled = ~drawn.index.get_level_values("measure").isin(["median", "q90"])
    plain = resampled & (linear.flag == "") & (linear.std_error > 0)
    assert plain.sum() > 10
    ratio = drawn.std_error[plain] / linear.std_error[plain]
    assert ratio.between(1 / 1.2, 1.2).all(), ratio
    pd.testing.assert_frame_equal(drawn[~resampled], linear[~resampled])


def test_every_method_and_level() -> None:
    fit = simulated_fit()
    frames = {}
    for method in ("bootstrap", "percentile", "bca", "linearised"):
        result = jn.return_time(fit, ["basket", "poster"], method=method, rng=2)
        frames[method] = by_row(result)
        assert result.method == method
        assert (result.resamples is None) == (method == "linearised")
        fresh = jn.return_time(fit, ["basket", "poster"], method=method, rng=2, confidence_level=0.8)
        pd.testing.assert_frame_equal(result.confidence_interval(0.8), fresh.confidence_interval(0.8))
    linear = frames["linearised"]
    rows = [(state, measure) for state in ("basket", "poster") for measure in ("probability", "mean", "sd")]
    half = (linear.high - linear.low)[rows] / 2
    for frame in frames.values():
        assert ((frame.low - linear.low)[rows].abs() < 0.4 * half).all()
        assert ((frame.high - linear.high)[rows].abs() < 0.4 * half).all()


def test_one_state_alone_is_told_as_among_all() -> None:
    fit = simulated_fit()
    everything, alone = by_row(jn.return_time(fit)), by_row(jn.return_time(fit, "basket"))
    pd.testing.assert_frame_equal(everything.loc[["basket"]], alone)
    two = jn.return_time(fit, ["newsletter", "basket", "newsletter"]).to_frame()
    assert two.state.unique().tolist() == ["newsletter", "basket"]
    assert len(two) == 12


# --- what is missing is said ------------------------------------------------------------------------------


def test_never_back_and_no_dwell() -> None:
    fit = jn.JourneyFit.from_matrix(CHAIN, dwell={"price": 3.0, "basket": 1.0, "help": 1.0})
    result = jn.return_time(fit, clock="time")
    assert one(result, state="help", measure="probability") == 0.0
    for measure in ("probability", "median", "q90", "mean", "sd"):
        assert one(result, "flag", state="help", measure=measure) == "never comes back"
    assert math.isnan(one(result, state="help", measure="mean"))
    assert one(result, state="help", measure="mean_unconditional") == math.inf
    assert one(result, "flag", state="help", measure="mean_unconditional") == "never comes back"
    assert one(result, "flag", state="price", measure="sd") == "no spread given"
    nothing = jn.return_time(jn.JourneyFit.from_matrix(CHAIN), "price", "time")
    assert one(nothing, "flag", measure="mean") == "no dwell given"
    assert one(nothing, measure="mean_unconditional") == math.inf


def test_staying_for_good_is_no_coming_back() -> None:
    paths = [("visit", "look"), ("visit", "look"), ("visit", "visit", "joined")]
    frame = log_of_paths(paths, ids_of_distinct_buckets(3), [(1, 2), (1, 2), (1, 2, 3)])
    rules = jn.JourneyRules("customer", "time", "event", converted=["joined"], silence=None, complete_history=True)
    with pytest.warns(jn.errors.DeadEndWarning), pytest.warns(jn.errors.JourneysWarning, match="completed moves"):
        fit = jn.JourneyModel().fit(jn.tally(frame, rules))
    for method in ("bootstrap", "linearised"):
        result = jn.return_time(fit, "look", method=method)
        assert one(result, measure="probability") == 0.0
        assert "never comes back" in one(result, "flag", measure="probability")
        assert "no move out was seen" in one(result, "flag", measure="probability")
        assert math.isnan(one(result, measure="mean"))


def test_a_trap_elsewhere_keeps_some_from_coming_back() -> None:
    p = np.array([[0.0, 0.5, 0.5], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
    result = jn.return_time(jn.JourneyFit.from_matrix(square(["a", "b", "trap"], p)))
    assert one(result, state="a", measure="probability") == 0.5
    assert one(result, state="a", measure="mean") == 2.0
    assert one(result, state="a", measure="mean_unconditional") == math.inf
    assert one(result, state="trap", measure="mean_unconditional") == 1.0


def test_refusals(monkeypatch: pytest.MonkeyPatch) -> None:
    fit = jn.JourneyFit.from_matrix(CHAIN)
    with pytest.raises(ValueError, match="restart: got True with clock='time'; the time between two journeys"):
        jn.return_time(fit, clock="time", restart=True)
    with pytest.raises(ValueError, match="state: got 'joined'; wanted one or more of 'price', 'basket', 'help'"):
        jn.return_time(fit, "joined")
    with pytest.raises(ValueError, match="state: got 'entry'; wanted"):
        jn.return_time(fit, ["price", "entry"])
    with pytest.raises(ValueError, match="state: got none; wanted"):
        jn.return_time(fit, [])
    with pytest.raises(ValueError, match="clock: got 'days'"):
        jn.return_time(fit, clock="days")
    with pytest.raises(ValueError, match="unit: got 'months'"):
        jn.return_time(fit, clock="time", unit="months")
    with pytest.raises(ValueError, match="confidence_level: got 95"):
        jn.return_time(fit, confidence_level=95)
    with pytest.raises(ValueError, match="method: got 'normal'"):
        jn.return_time(fit, method="normal")
    with pytest.raises(ValueError, match="n_resamples: got 500; wanted at least 1,999"):
        jn.return_time(fit, method="bca", n_resamples=500)
    monkeypatch.setattr("journeys.questions.return_time.MOST_STATES", 2)
    with pytest.raises(ValueError, match="state: got none of 3 states; wanted some named"):
        jn.return_time(fit)
    assert len(jn.return_time(fit, "price").to_frame()) == 6
