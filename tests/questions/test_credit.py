"""Credit for conversions by the model: reference values, identities, coverage and refusals."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from club_log import club_fit, club_states
from simulated import log_end, simulate, truth
from small_chains import column, known_chain, one

import journeys as jn


@pytest.mark.parametrize("start", ["g01", "g02", "g03", "g04"])
def test_reference_chains(reference, start: str) -> None:
    """L. S. Shapley, in Contributions to the Theory of Games II, Princeton 1953 (g01-g04): all subsets in exact
    rational arithmetic; players are the states but the first, what is not theirs is won without them.
    """
    case = reference("removal", start)
    given, expected = case["input"], case["expected"]
    fit, _, _ = known_chain({"input": {**given, "absorbing": [given["win"], given["lose"]]}, "expected": expected})
    values, total = expected["shapley"]["shapley"], expected["win_probability_from"][given["start"]]
    result = jn.credit(fit, given["win"], basis="model", touchpoints=list(values))
    found = column(result, "estimate", "touchpoint", values)
    assert found * total == pytest.approx(list(values.values()), **case["tolerance"])
    numerator, _, denominator = expected["shapley"]["value_empty_set_exact"].partition("/")
    none = one(result, touchpoint="none of them")
    assert none * total == pytest.approx(int(numerator) / int(denominator or 1), **case["tolerance"])
    frame = result.to_frame()
    assert frame["estimate"].sum() == pytest.approx(1.0, abs=1e-12)
    assert frame.columns.tolist()[:4] == ["touchpoint", "rule", "basis", "estimate"]
    assert (frame["rule"] == "even").all()
    assert (frame["std_error"] == 0).all()


def test_the_rest_is_what_nobody_touched() -> None:
    """The row for none is the conversion left when all named touchpoints are stopped together."""
    fit = club_fit()
    names = ["basket", "newsletter", "friend_invitation"]
    result = jn.credit(fit, basis="model", touchpoints=["newsletter", "friend_invitation"])
    both = one(
        jn.removal(fit, touchpoints=[("newsletter", "friend_invitation")]), touchpoint="newsletter + friend_invitation"
    )
    assert one(result, touchpoint="none of them") == pytest.approx(1 - both, rel=1e-12)
    # one alone gets all that its removal takes, with the same spread
    alone = jn.credit(fit, basis="model", touchpoints="basket").to_frame()
    effect = jn.removal(fit, touchpoints="basket").to_frame()
    for name in ("estimate", "std_error", "low", "high"):
        assert alone.loc[0, name] == pytest.approx(effect.loc[0, name], rel=1e-9)
    assert alone["std_error"].tolist() == pytest.approx([alone.loc[0, "std_error"]] * 2, rel=1e-9)
    # a share is at most the removal effect, at least a k-th of it
    some = column(jn.credit(fit, basis="model", touchpoints=names), "estimate", "touchpoint", names)
    most = column(jn.removal(fit, touchpoints=names), "estimate", "touchpoint", names)
    assert (some < most).all()
    assert (some > most / 3).all()


def test_spread_is_that_of_refits() -> None:
    """Delete-a-group jackknife on the club's log, twenty groups of ten buckets each (J. Shao, D. Tu, The Jackknife
    and Bootstrap, Springer 1995, section 2.3): the linearised standard errors lie near.
    """
    from journeys.kernels.removal import road
    from journeys.kernels.resampling import Refitter
    from journeys.kernels.shapley import equal_split

    fit = club_fit()
    assert fit.fitted_stays is not None
    refitter = Refitter(fit.fitted_stays, fit.move_state, fit.move_target, fit.nodes.n_nodes, steps=True)
    buckets = fit.fitted_stays.by_bucket.n_buckets
    without = np.array([(np.arange(buckets) % 20 != k).astype(float) for k in range(20)])
    refits = refitter.refit(without).probability
    shape, players = (
        (fit.nodes.n_rows, fit.nodes.n_nodes, refitter.state, refitter.target),
        [np.array([row]) for row in range(1, fit.nodes.n_rows)],
    )
    splits = np.array(
        [equal_split(road(*shape, p, p, fit.target_mask(None)), players, derive=False)[0] for p in refits.T]
    )
    jackknife = np.sqrt(19 / 20 * ((splits - splits.mean(axis=0)) ** 2).sum(axis=0))
    told = jn.credit(fit, basis="model", touchpoints=club_states()).to_frame()["std_error"].to_numpy()
    # a standard error from twenty groups has a noise of 16 %
    assert np.abs(jackknife[:-1] / told[:-1] - 1).max() < 0.5
    assert np.abs(np.mean(jackknife[:-1] / told[:-1]) - 1) < 0.2


def test_coverage_on_simulated_logs() -> None:
    """Nominal 95 %, 40 logs of 700 customers with five shares each."""
    matrix = truth().matrix
    shares = {name: float(x) for name, x in matrix.loc["entry"].items() if x > 0}
    known = jn.JourneyFit.from_matrix(matrix.drop(index="entry"), entry=shares)
    expected = jn.credit(known, "joined", basis="model").to_frame().set_index("touchpoint")["estimate"]
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"], silence="30d", log_start="2024-01-01", as_of=str(log_end(4))
    )
    inside = []
    for seed in range(40):
        log = simulate(700, 4, np.random.default_rng([78, seed]), first_arrivals="steady state from -8W")
        frame = jn.credit(jn.JourneyModel().fit(jn.tally(log, rules)), basis="model").to_frame().iloc[:-1]
        truths = expected.loc[frame["touchpoint"]].to_numpy()
        inside.append((frame["low"].to_numpy() <= truths) & (truths <= frame["high"].to_numpy()))
    assert 0.89 <= np.mean(inside) <= 0.99


def test_conversions_that_were_few_are_flagged() -> None:
    frame = jn.credit(club_fit(), basis="model").to_frame().set_index("touchpoint")
    # never seen to join without a touch: one bound
    assert frame.loc["none of them", "estimate"] == 0
    assert frame.loc["none of them", "flag"] == "too few"
    assert 0 < frame.loc["none of them", "high"] < 0.005


def test_out_of_reach() -> None:
    frame = pd.DataFrame([[0.5, 0.5, 0.0]], index=["visit"], columns=["visit", "left", "joined"])
    told = jn.credit(jn.JourneyFit.from_matrix(frame), "joined", basis="model").to_frame()
    assert told["estimate"].isna().all()
    assert (told["flag"] == "cannot be reached").all()


def test_summary_ends_with_what_to_keep_in_mind() -> None:
    told = " ".join(jn.credit(club_fit(), basis="model").summary().split())
    assert "association, not cause" in told
    assert "An even split is a convention" in told


def test_refusals() -> None:
    names = [f"s{i}" for i in range(16)]
    rows = np.zeros((16, 17))
    rows[:, 16] = 1.0
    fit = jn.JourneyFit.from_matrix(pd.DataFrame(rows, index=names, columns=[*names, "joined"]))
    with pytest.raises(ValueError, match="touchpoints: 16 states; wanted at most 15 named"):
        jn.credit(fit, basis="model")
    assert jn.credit(fit, basis="model", touchpoints=names[:15]).to_frame()["estimate"].sum() == 1.0
    with pytest.raises(ValueError, match="rule: got 'U-shaped'; wanted one of 'even', 'first', 'last'"):
        jn.credit(fit, rule="U-shaped")
    with pytest.raises(ValueError, match="basis: got 'diary'; wanted one of 'log', 'model'"):
        jn.credit(fit, basis="diary")
    with pytest.raises(TypeError, match="touchpoints: got .* among them; wanted the name of a state"):
        jn.credit(fit, basis="model", touchpoints=[("s0", "s1")])
