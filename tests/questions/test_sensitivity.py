"""What one point more would do: changed chains solved again, closed forms, differences, spread, coverage."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from club_log import club_fit
from simulated import log_end, simulate, truth
from small_chains import one

import journeys as jn
from journeys.kernels.absorption import passage
from journeys.kernels.sensitivity import Shift, shifted

SEEDS = range(4)
N, ENDS = 6, 3


def random_moves(seed: int):
    rng = np.random.default_rng([30, seed])
    p = rng.dirichlet(np.ones(N + ENDS), N) * (rng.random((N, N + ENDS)) < 0.8)
    p[:, 0] = 0.0
    p[:, -1] += 0.05
    p[:, N] += 0.02
    p /= p.sum(axis=1, keepdims=True)
    state, target = np.nonzero(p)
    prob = p[state, target]
    return state, target, prob, prob * rng.uniform(0.1, 6, len(prob)), rng


def answers(state, target, p, mean) -> tuple[float, float]:
    found = passage(N, N + ENDS, state, target, p, mean, mean, np.arange(N + ENDS) == N)
    return float(found.probability[0]), float(found.mean_given[0])


def brute(state, target, p, mean, move: int, by: float) -> np.ndarray:
    """Return the changes when the move is made likelier and the chain solved again; its mean dwell stays."""
    q, m = p.copy(), mean.copy()
    q[move] += by
    m[move] = q[move] * mean[move] / p[move]
    return np.subtract(answers(state, target, q, m), answers(state, target, p, mean))


@pytest.mark.parametrize("steps", [True, False])
@pytest.mark.parametrize("seed", SEEDS)
def test_exact_changes_and_their_derivatives(seed: int, steps: bool) -> None:
    """Every shift against the chain solved again, its derivative and its change in any direction by differences."""
    state, target, p, mean, rng = random_moves(seed)
    mean = p if steps else mean
    move = np.flatnonzero(target <= N)
    by = rng.uniform(0.002, 0.03, len(move))
    d_p = rng.normal(size=(2, len(p))) * p
    d_mean = d_p if steps else rng.normal(size=(2, len(p))) * mean
    d_by = rng.normal(size=(2, len(move))) * by
    found = shifted(N, N + ENDS, state, target, p, mean, np.arange(N + ENDS) == N, Shift(move, by, d_by), d_p, d_mean)
    whole = np.array([brute(state, target, p, mean, *one_) for one_ in zip(move, by, strict=True)])
    assert found.reached == pytest.approx(whole[:, 0], abs=1e-14)
    assert found.given == pytest.approx(whole[:, 1], abs=1e-12)
    small = np.array([brute(state, target, p, mean, m, 1e-6) - brute(state, target, p, mean, m, -1e-6) for m in move])
    assert found.slope_reached == pytest.approx(small[:, 0] / 2e-6, abs=1e-8)
    assert found.slope_given == pytest.approx(small[:, 1] / 2e-6, abs=1e-7)
    for b in range(2):
        ends = [
            np.array([
                brute(state, target, p + e * d_p[b], mean + e * d_mean[b], m, by[i] + e * d_by[b, i])
                for i, m in enumerate(move)
            ])
            for e in (1e-6, -1e-6)
        ]  # fmt: skip
        change = (ends[0] - ends[1]) / 2e-6
        np.testing.assert_allclose(found.d_reached[b], change[:, 0], atol=1e-8)
        np.testing.assert_allclose(found.d_given[b], change[:, 1], atol=1e-7)


def chain(**more: float) -> jn.JourneyFit:
    lost = more.get("lost", 0.4)
    frame = pd.DataFrame(
        [[0.0, 0.5, 0.1, 0.4], [0.2, 0.0, 0.8 - lost, lost]],
        index=["visit", "basket"],
        columns=["visit", "basket", "joined", "left"],
    )
    return jn.JourneyFit.from_matrix(frame, dwell={"visit": 2.0, "basket": 1.0})


def test_closed_form() -> None:
    """By hand: N = (I - P)^-1 of two states; the finite move h_0 + d nu_i h_j / (1 - d N_ji)."""
    result = jn.sensitivity(chain(), "joined")
    det = 1 - 0.5 * 0.2
    visits = np.array([[1.0, 0.5], [0.2, 1.0]]) / det
    h = visits @ [0.1, 0.4]
    found = {
        (a, b): one(result, state=a, next_state=b, measure="reached") for a, b in zip(*moves_told(result), strict=True)
    }
    assert found["visit", "joined"] == pytest.approx(0.01 * visits[0, 0], rel=1e-12)
    expected = 0.01 * visits[0, 0] * h[1] / (1 - 0.01 * visits[1, 0])
    assert found["visit", "basket"] == pytest.approx(expected, rel=1e-12)
    assert found["basket", "joined"] == pytest.approx(0.01 * visits[0, 1], rel=1e-12)
    slope = one(result, "derivative", state="visit", next_state="basket", measure="reached")
    assert slope == pytest.approx(visits[0, 0] * h[1], rel=1e-12)
    assert (result.to_frame()["change"] == 0.01).all()


def moves_told(result) -> tuple[list[str], list[str]]:
    frame = result.to_frame()
    frame = frame[frame["measure"] == "reached"]
    return frame["state"].tolist(), frame["next_state"].tolist()


def test_it_is_what_the_what_if_says() -> None:
    """Every row against a chain with the move changed: the same three numbers."""
    for fit, to, given in ((club_fit(), None, None), (chain(), "joined", "left")):
        frame = jn.sensitivity(fit, to).to_frame()
        before = [
            values(fit, to, clock, name)
            for clock, name in (("steps", "probability"), ("steps", "mean"), ("time", "mean"))
        ]
        for (state, after), rows in list(frame.groupby(["state", "next_state"], sort=False))[:12]:
            other = fit.with_move(state, after, rows["change"].iloc[0], taken_from=given)
            now = [
                values(other, to, clock, name)
                for clock, name in (("steps", "probability"), ("steps", "mean"), ("time", "mean"))
            ]
            assert rows["measure"].tolist() == ["reached", "steps", "days"]
            assert rows["estimate"].tolist() == pytest.approx(np.subtract(now, before).tolist(), abs=1e-11)


def values(fit: jn.JourneyFit, to: str | None, clock: str, measure: str) -> float:
    result = jn.first_passage(fit, to, clock, method="linearised")
    return float(one(result, start_state="entry", measure=measure))


def test_intervals_are_those_of_the_comparison() -> None:
    """The difference of two fits is compared bucket by bucket: the same standard errors from other code."""
    fit = club_fit()
    frame = jn.sensitivity(fit).to_frame()
    for (state, after), rows in list(frame.groupby(["state", "next_state"], sort=False))[:4]:
        told = jn.compare(fit, fit.with_move(state, after, 0.01)).to_frame()
        assert rows["estimate"].tolist() == pytest.approx(told["estimate"].tolist(), rel=1e-7)
        assert rows["std_error"].tolist() == pytest.approx(told["std_error"].tolist(), rel=1e-7)


def test_rows_of_the_club() -> None:
    fit = club_fit()
    frame = jn.sensitivity(fit).to_frame()
    reached = frame[frame["measure"] == "reached"]
    assert reached["estimate"].is_monotonic_decreasing
    assert (reached["estimate"] > 0).all()
    assert ((frame["low"] < frame["estimate"]) & (frame["estimate"] < frame["high"])).all()
    assert not set(frame["next_state"]) & {"lapsed", "declined"}
    assert "joined" in set(frame["next_state"])
    pairs = set(zip(reached["state"], reached["next_state"], strict=True))
    seen = fit.moves().to_frame()
    seen = seen[(seen["n_moves"] > 0) & seen["next_state"].isin([*fit.states, "joined"]) & (seen["state"] != "entry")]
    assert pairs == set(zip(seen["state"], seen["next_state"], strict=True))


def test_less_than_a_point_to_take() -> None:
    result = jn.sensitivity(chain(lost=0.004), "joined")
    rows = result.to_frame()
    mine = rows["state"] == "basket"
    assert rows.loc[mine, "change"].tolist() == pytest.approx([0.004] * mine.sum(), rel=1e-12)
    assert (rows.loc[mine, "flag"] == "less than one point to take").all()
    assert (rows.loc[~mine, "flag"] == "").all()
    whole = chain(lost=0.004).with_move("basket", "joined", 0.004, taken_from="left")
    gain = values(whole, "joined", "steps", "probability") - values(chain(lost=0.004), "joined", "steps", "probability")
    assert one(result, state="basket", next_state="joined", measure="reached") == pytest.approx(gain, rel=1e-10)
    # nothing at all to take: not listed
    assert set(jn.sensitivity(chain(lost=0.0), "joined").to_frame()["state"]) == {"visit"}


def test_all_there_is_to_take_is_uncertain_too() -> None:
    """A state that loses 0.4 %: the spread accounts for how much there is, as the comparison of fits does."""
    rows = []
    for who in range(1500):
        start = pd.Timestamp("2025-01-01T08:00:00Z") + pd.Timedelta(minutes=90 * who)
        end = "declined" if who % 250 == 0 else "joined"
        middle = ["basket"] if who % 3 else []
        path = ["visit", *middle, end if middle else ("joined" if who % 2 else "declined")]
        rows += [(who, start + pd.Timedelta(hours=step), event) for step, event in enumerate(path)]
    log = pd.DataFrame(rows, columns=["who", "when", "what"]).sort_values("when", kind="stable")
    rules = jn.JourneyRules(
        "who", "when", "what", converted=["joined"], churned=["declined"], silence=None, complete_history=True
    )
    fit = jn.JourneyModel().fit(jn.tally(log, rules))
    result = jn.sensitivity(fit)
    share = fit.matrix.loc["basket", "declined"]
    assert 0 < share < 0.01
    assert one(result, "change", state="basket", next_state="joined", measure="reached") == share
    # nobody would be lost in the basket any more: the gain is what was lost there, with the spread of that share
    lost = jn.outcomes(fit)
    moved = fit.with_move("basket", "joined", share)
    gain = one(jn.outcomes(moved), start_state="entry", outcome="joined") - one(
        lost, start_state="entry", outcome="joined"
    )
    assert one(result, state="basket", next_state="joined", measure="reached") == pytest.approx(gain, rel=1e-9)
    cell = fit.moves().to_frame().set_index(["state", "next_state"]).loc[("basket", "declined")]
    told = one(result, "std_error", state="basket", next_state="joined", measure="reached")
    visits = fit.matrix.loc["visit", "basket"]
    spread = np.sqrt(cell["estimate"] * (1 - cell["estimate"]) / cell["n_effective"]) * visits
    assert told == pytest.approx(spread, rel=0.1)


def test_coverage_on_simulated_logs() -> None:
    """Nominal 95 %, 40 logs of 700 customers, every move: changes of conversion and of steps."""
    matrix = truth().matrix
    shares = {name: float(x) for name, x in matrix.loc["entry"].items() if x > 0}
    known = jn.JourneyFit.from_matrix(matrix.drop(index="entry"), entry=shares)
    keys = ["state", "next_state", "measure"]
    expected = jn.sensitivity(known, "joined").to_frame().set_index(keys)["estimate"]
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"], silence="30d", log_start="2024-01-01", as_of=str(log_end(4))
    )
    inside = []
    for seed in range(40):
        log = simulate(700, 4, np.random.default_rng([79, seed]), first_arrivals="steady state from -8W")
        frame = jn.sensitivity(jn.JourneyModel().fit(jn.tally(log, rules))).to_frame().set_index(keys)
        frame = frame[frame.index.get_level_values("measure") != "days"]
        truths = expected.reindex(frame.index)
        inside.append(((frame["low"] <= truths) & (truths <= frame["high"])).to_numpy())
    assert 0.92 <= np.mean(np.concatenate(inside)) <= 0.98


def test_without_dwell_days_are_blank() -> None:
    frame = pd.DataFrame([[0.5, 0.3, 0.2]], index=["basket"], columns=["basket", "joined", "declined"])
    told = jn.sensitivity(jn.JourneyFit.from_matrix(frame), "joined").to_frame()
    days = told["measure"] == "days"
    assert told.loc[days, "estimate"].isna().all()
    assert (told.loc[days, "flag"] == "no dwell given").all()
    assert (told.loc[~days, "flag"] == "").all()


def test_out_of_reach_and_refusals() -> None:
    frame = pd.DataFrame([[0.5, 0.5, 0.0]], index=["visit"], columns=["visit", "left", "joined"])
    told = jn.sensitivity(jn.JourneyFit.from_matrix(frame), "joined").to_frame()
    assert told["next_state"].unique().tolist() == ["visit"]
    assert told.loc[told["measure"] == "reached", "estimate"].tolist() == [0.0]
    assert told.loc[told["measure"] != "reached", "estimate"].isna().all()
    assert (told["flag"] == "cannot be reached").all()
    with pytest.raises(ValueError, match="confidence_level: got 95"):
        jn.sensitivity(club_fit(), confidence_level=95)
    names = [f"s{i}" for i in range(501)]
    rows = np.zeros((501, 502))
    rows[:, 501] = 1.0
    wide = jn.JourneyFit.from_matrix(pd.DataFrame(rows, index=names, columns=[*names, "joined"]))
    with pytest.raises(ValueError, match="the chain has 501 states; every pair of them is looked at, for up to 500"):
        jn.sensitivity(wide)


def test_summary_ends_with_what_to_keep_in_mind() -> None:
    told = " ".join(jn.sensitivity(chain(), "joined").summary().split())
    assert "changes one move alone" in told
    assert told.endswith("A rarer exit is not better service.")
