"""Removal effects through the public function: reference chains, a clustered variance, redraws, coverage."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from club_log import club_fit, club_states
from simulated import log_end, simulate, truth
from small_chains import column, ids_of_distinct_buckets, known_chain, log_of_paths, one

import journeys as jn
from journeys.errors import LogError
from journeys.kernels.removal import road, stopped
from journeys.kernels.resampling import Refitter, bucket_weights
from journeys.questions.removal import _parts
from journeys.questions.touchpoints import asked

CASES = ["g01", "g02", "g03", "g04"]


def reference_fit(case) -> tuple[jn.JourneyFit, list[str]]:
    given = case["input"]
    case = {"input": {**given, "absorbing": [given["win"], given["lose"]]}, "expected": case["expected"]}
    fit, states, _ = known_chain(case)
    return fit, states


def two_ways(**more: float) -> pd.DataFrame:
    """Return visit to basket or mail, each of which may lead to joined or left; mail comes with a loop if asked."""
    again = more.get("again", 0.0)
    return pd.DataFrame(
        [[0.0, 0.5, 0.3, 0.2, 0.0], [0.0, 0.0, 0.0, 0.6, 0.4], [0.0, again, 0.0, 0.5 - again, 0.5]],
        index=["visit", "basket", "mail"],
        columns=["visit", "basket", "mail", "joined", "left"],
    )


@pytest.mark.parametrize("start", CASES)
def test_reference_chains(reference, start: str) -> None:
    """Kemeny and Snell 1960, ch. III; C. D. Meyer, SIAM Review 31 (1989) 240-272 (g01-g04): invented chains in exact
    rational arithmetic, every removal solved for directly and by the identity.
    """
    case = reference("removal", start)
    expected, close = case["expected"], case["tolerance"]
    fit, states = reference_fit(case)
    win = case["input"]["win"]
    stop = jn.removal(fit, win)
    wanted = [expected["removal_to_lose"][name]["removal_effect"] for name in states]
    assert column(stop, "estimate", "touchpoint", states) == pytest.approx(wanted, **close)
    others = expected["redistribute_proportionally"]
    divert = jn.removal(fit, win, list(others), how="divert")
    wanted = [others[name]["effect"] for name in others]
    assert column(divert, "estimate", "touchpoint", others) == pytest.approx(wanted, **close)
    skipped = expected["skip_stochastic_complement"]
    before = one(jn.first_passage(fit, [win, case["input"]["lose"]]), start_state="entry", measure="mean")
    less = jn.removal(fit, [win, case["input"]["lose"]], list(skipped), how="pass")
    for name in skipped:
        after = before - one(less, touchpoint=name, measure="steps")
        # the reference starts in the first state, which is one step from entry
        numerator, _, denominator = skipped[name]["mean_steps_after"].partition("/")
        assert after - 1 == pytest.approx(int(numerator) / int(denominator or 1), **close)
    frame = stop.to_frame()
    assert frame["estimate"].is_monotonic_decreasing
    assert (frame["std_error"] == 0).all()
    assert (frame["low"] == frame["estimate"]).all()
    assert frame["order_held"].isna().all()


def test_only_route_and_no_route(reference) -> None:
    """g03: removed state is the only route, effect exactly 1; another contributes exactly nothing."""
    fit, _ = reference_fit(reference("removal", "g03"))
    result = jn.removal(fit, "win")
    assert one(result, touchpoint="gate") == 1.0
    assert one(result, touchpoint="D") == 0.0
    assert one(result, "flag", touchpoint="D") == "on no way to the target"
    assert one(result, "flag", touchpoint="gate") == ""


def test_groups_of_touchpoints() -> None:
    fit = jn.JourneyFit.from_matrix(two_ways(again=0.2))
    result = jn.removal(fit, "joined", ["mail", ("basket", "mail"), "basket"])
    direct = 0.2 / one(jn.outcomes(fit), start_state="entry", outcome="joined")
    assert one(result, touchpoint="basket + mail") == pytest.approx(1 - direct, rel=1e-12)
    assert result.to_frame()["touchpoint"].tolist() == ["basket + mail", "basket", "mail"]


def test_eight_customers(reference) -> None:
    """B. Efron, The Jackknife, the Bootstrap and Other Resampling Plans, SIAM 1982, ch. 6; exact rational arithmetic on
    invented paths (h05): removal effects with clustered standard errors by infinitesimal jackknife.
    """
    case = reference("ratio_variance", "h05")
    expected, close, paths = case["expected"], case["tolerance"], case["input"]["paths"]
    log = log_of_paths(paths, ids_of_distinct_buckets(8), [np.arange(len(path)) * 1.7 for path in paths])
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["win"], churned=["lose"], silence=None, complete_history=True
    )
    result = jn.removal(jn.JourneyModel().fit(jn.tally(log, rules)))
    for name in ("A", "B"):
        assert one(result, touchpoint=name) == pytest.approx(expected["estimates"][f"removal_{name}"], **close)
        error = expected["se_cluster_n_over_n_minus_1"][f"removal_{name}"]
        assert one(result, "std_error", touchpoint=name) == pytest.approx(error, **close)
        assert one(result, "flag", touchpoint=name) == "too few"
    # all conversions touch s: one exact bound, three of three
    assert one(result, touchpoint="s") == 1.0
    assert one(result, "low", touchpoint="s") == pytest.approx(0.05 ** (1 / 3), rel=1e-12)
    assert one(result, "high", touchpoint="s") == 1.0


@pytest.mark.parametrize("how", ["stop", "divert"])
def test_order_by_influences_is_the_order_by_full_refits(how: str) -> None:
    """The same redraws, each fitted anew: counts differ by a few where two touchpoints are close."""
    fit = club_fit()
    linear = jn.removal(fit, how=how, touchpoints=club_states(), n_redraws=200, rng=4).to_frame()
    refitted = jn.removal(fit, how=how, touchpoints=club_states(), n_redraws=200, rng=4, method="bootstrap").to_frame()
    assert linear["touchpoint"].tolist() == refitted["touchpoint"].tolist()
    assert np.abs(linear["order_held"] - refitted["order_held"]).max() <= 6
    # with 200 redraws a standard error has a noise of 5 %
    assert refitted["std_error"].to_numpy() == pytest.approx(linear["std_error"].to_numpy(), rel=0.2)
    assert linear["order_held"].isna().tolist() == [False] * 7 + [True]


def test_order_of_two_that_are_close() -> None:
    """Steps saved by newsletter and search differ by less than a standard error: the order is not held always, and by
    how often is the same by influences and by refits but for noise.
    """
    fit = club_fit()
    held = []
    for method in ("linearised", "bootstrap"):
        found = jn.removal(fit, how="pass", touchpoints=club_states(), n_redraws=300, rng=9, method=method)
        frame = found.to_frame()
        frame = frame[frame["measure"] == "steps"].reset_index(drop=True)
        assert frame["touchpoint"].tolist()[1:3] == ["newsletter", "search"]
        held.append(frame["order_held"][1])
    assert 150 < held[0] < 290
    assert abs(held[0] - held[1]) < 15


def test_redraws_one_by_one_are_near_the_linear_ones() -> None:
    """Each redraw of the effects by influences is that of a full refit, to a small part of the spread."""
    fit = club_fit()
    it = asked(fit, None, None)
    assert fit.influence is not None
    assert fit.fitted_stays is not None
    weights = bucket_weights(len(fit.influence.probability), 25, np.random.default_rng(3))
    (part,) = _parts(fit, it, "stop")
    linear = part.effect + (weights - 1) @ part.influence
    refitter = Refitter(fit.fitted_stays, fit.move_state, fit.move_target, fit.nodes.n_nodes, steps=True)
    refits = refitter.refit(weights).probability
    args = (fit.nodes.n_rows, fit.nodes.n_nodes, refitter.state, refitter.target)
    full = [
        stopped(road(*args, refits[:, b], refits[:, b], fit.target_mask(None)), it.groups, derive=False).effect
        for b in range(25)
    ]
    spread = linear.std(axis=0)
    assert (np.abs(linear - full).max(axis=0) < 0.25 * spread).all()


def test_chance_is_the_tallys_or_given() -> None:
    fit = club_fit()

    def held(**more) -> list[float]:
        return jn.removal(fit, how="pass", **more).to_frame()["order_held"].dropna().tolist()

    assert held() == held()
    assert held(rng=1) == held(rng=np.random.default_rng(1))
    assert held(rng=1) != held(rng=2)


def test_numbers_of_the_club() -> None:
    fit = club_fit()
    stop = jn.removal(fit, touchpoints=club_states()).to_frame()
    assert ((stop["low"] < stop["estimate"]) & (stop["estimate"] < stop["high"])).all()
    assert set(stop["flag"]) == {"", "log and model differ"}
    divert = jn.removal(fit, how="divert", touchpoints=club_states()).to_frame().set_index("touchpoint")
    # whoever is not diverted is lost: stopping takes more
    assert (stop.set_index("touchpoint")["estimate"] > divert.loc[stop["touchpoint"], "estimate"]).all()
    assert divert["estimate"].min() < 0
    skip = jn.removal(fit, how="pass", touchpoints=club_states()).to_frame()
    assert skip.columns.tolist()[:3] == ["touchpoint", "measure", "estimate"]
    assert (skip["estimate"] > 0).all()
    steps = skip.loc[skip["measure"] == "steps", "estimate"].sum()
    # every step given conversion is a visit to one of them, or the last one
    mean = one(jn.first_passage(fit, method="linearised"), start_state="entry", measure="mean")
    assert steps == pytest.approx(mean - 1, rel=1e-12)
    days = skip.loc[skip["measure"] == "days", "estimate"].sum()
    mean = one(jn.first_passage(fit, clock="time", method="linearised"), start_state="entry", measure="mean")
    assert days == pytest.approx(mean, rel=1e-12)


def test_coverage_of_effects_on_simulated_logs() -> None:
    """Nominal 95 %, 60 logs of 700 customers with five effects each: the noise of the share is under 2 points."""
    known = jn.removal(jn.JourneyFit.from_matrix(known_states(), entry=entry_shares()), "joined").to_frame()
    expected = known.set_index("touchpoint")["estimate"]
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"], silence="30d", log_start="2024-01-01", as_of=str(log_end(4))
    )
    inside, wide = [], []
    for seed in range(60):
        log = simulate(700, 4, np.random.default_rng([77, seed]), first_arrivals="steady state from -8W")
        frame = jn.removal(jn.JourneyModel().fit(jn.tally(log, rules)), n_redraws=1).to_frame()
        truths = expected.loc[frame["touchpoint"]].to_numpy()
        inside.append((frame["low"].to_numpy() <= truths) & (truths <= frame["high"].to_numpy()))
        wide.append((frame["high"] - frame["low"]).to_numpy())
        assert not frame["flag"].str.contains("too few").any()
    assert 0.90 <= np.mean(inside) <= 0.985
    assert 0.05 < np.mean(wide) < 0.4


def known_states() -> pd.DataFrame:
    matrix = truth().matrix
    return matrix.drop(index="entry")


def entry_shares() -> dict[str, float]:
    row = truth().matrix.loc["entry"]
    return {name: float(share) for name, share in row.items() if share > 0}


def grouped_fit() -> jn.JourneyFit:
    """Return the fit to a log in which a third converts, in two countries of which one is tiny."""
    rows = []
    for who in range(120):
        country = "NL" if who % 60 else "BE"
        start = pd.Timestamp("2025-01-01T08:00:00Z") + pd.Timedelta(days=(who * 7) % 160, minutes=who)
        path = ["visit", "look"] if who % 2 else ["visit", "mail", "look"]
        path += [("joined", "declined", "look")[who % 3]]
        rows += [(who, start + pd.Timedelta(days=day), event, country) for day, event in enumerate(path)]
    frame = pd.DataFrame(rows, columns=["who", "when", "what", "country"]).sort_values("when", kind="stable")
    rules = jn.JourneyRules(
        "who", "when", "what", converted=["joined"], churned=["declined"], silence="30d", by=["country"],
        complete_history=True,
    )  # fmt: skip
    return jn.JourneyModel().fit(jn.tally(frame, rules))


def test_one_block_per_group() -> None:
    fit = grouped_fit()
    frame = jn.removal(fit, by="country").to_frame()
    assert frame.columns.tolist()[:3] == ["country", "touchpoint", "estimate"]
    assert frame["country"].tolist() == ["BE"] * 3 + ["NL"] * 3
    assert fit.tally is not None
    alone = jn.removal(jn.JourneyModel().fit(fit.tally.where(country=["NL"]))).to_frame()
    mine = frame[frame["country"] == "NL"].drop(columns="country").reset_index(drop=True)
    pd.testing.assert_frame_equal(mine, alone)


def test_a_target_out_of_reach_has_no_effects() -> None:
    frame = two_ways().assign(never=0.0)
    fit = jn.JourneyFit.from_matrix(frame)
    for how in ("stop", "pass", "divert"):
        result = jn.removal(fit, "never", how=how).to_frame()
        assert result["estimate"].isna().all()
        assert (result["flag"] == "cannot be reached").all()


def test_days_without_dwell_are_blank() -> None:
    fit = jn.JourneyFit.from_matrix(two_ways(), dwell={"basket": 2.0, ("mail", "joined"): 3.0, ("mail", "left"): 1.0})
    result = jn.removal(fit, "joined", how="pass")
    assert one(result, touchpoint="basket", measure="days") == pytest.approx(2.0 * 0.3 / 0.65, rel=1e-12)
    assert one(result, touchpoint="mail", measure="days") == pytest.approx(3.0 * 0.15 / 0.65, rel=1e-12)
    assert np.isnan(one(result, touchpoint="visit", measure="days"))
    assert one(result, "flag", touchpoint="visit", measure="days") == "no dwell given"
    assert one(result, "flag", touchpoint="visit", measure="steps") == ""


def test_summary_ends_with_what_to_keep_in_mind() -> None:
    fit = jn.JourneyFit.from_matrix(two_ways())
    text = jn.removal(fit, "joined").summary()
    assert text.startswith("Removal effects")
    told = " ".join(text.split())
    assert "association, not cause" in told
    assert "an upper limit of what could be lost" in told
    assert told.endswith("Touchpoints that are named staff are employment data.")
    assert "may be negative" in " ".join(jn.removal(fit, "joined", how="divert").summary().split())
    assert "normalis" not in text


def test_refusals() -> None:
    fit = jn.JourneyFit.from_matrix(two_ways())
    with pytest.raises(ValueError, match="how: got 'skip'; wanted one of 'stop', 'pass', 'divert'"):
        jn.removal(fit, "joined", how="skip")
    with pytest.raises(ValueError, match="method: got 'exact'"):
        jn.removal(fit, "joined", method="exact")
    with pytest.raises(ValueError, match="n_redraws: got 10; wanted a whole number from 20"):
        jn.removal(fit, "joined", method="bootstrap", n_redraws=10)
    with pytest.raises(ValueError, match="rng: got 'dice'"):
        jn.removal(fit, "joined", rng="dice")
    with pytest.raises(
        ValueError, match="touchpoints: 'banner' is not a state of this chain; wanted names among 'visit'"
    ):
        jn.removal(fit, "joined", ["banner"])
    with pytest.raises(ValueError, match="touchpoints: 'mail' is in `to` itself"):
        jn.removal(fit, "mail", ["mail"])
    with pytest.raises(ValueError, match="touchpoints: 'mail' stands there twice"):
        jn.removal(fit, "joined", ["mail", "mail"])
    with pytest.raises(ValueError, match="touchpoints: 'mail' stands there twice"):
        jn.removal(fit, "joined", [("mail", "mail")])
    with pytest.raises(ValueError, match="touchpoints: none is left"):
        jn.removal(fit, "joined", [])
    with pytest.raises(TypeError, match="touchpoints: got 3 among them; wanted the name of a state, or several"):
        jn.removal(fit, "joined", ["mail", 3])
    with pytest.raises(TypeError, match="touchpoints: got 3; wanted names of states"):
        jn.removal(fit, "joined", 3)
    with pytest.raises(LogError, match="by: this chain was given, not fitted to a log"):
        jn.removal(fit, "joined", by="country")
    many = [f"s{i}" for i in range(501)]
    rows = np.zeros((501, 502))
    rows[:, 501] = 1.0
    wide = jn.JourneyFit.from_matrix(pd.DataFrame(rows, index=many, columns=[*many, "joined"]))
    with pytest.raises(ValueError, match="touchpoints: the chain has 501 states; wanted those of interest named"):
        jn.removal(wide)
    assert one(jn.removal(wide, touchpoints="s0"), touchpoint="s0") == 1.0
