from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from club_log import club_fit
from small_chains import ABSORBING, column, known_chain, one, ruin

import journeys as jn
from journeys.kernels.absorption import passage
from journeys.questions.linear import passage_spread, probability_spread


@pytest.mark.parametrize("start", ABSORBING)
def test_absorbing_chains(reference, start: str) -> None:
    """Kemeny and Snell 1960, Feller vol. 1, Grinstead and Snell 1997 and others; exact fractions and
    R markovchain 0.9.1; the source of each chain stands in tests/reference/absorbing.json (b01-b10, b14-b16).
    """
    case = reference("absorbing", start)
    fit, states, ends = known_chain(case)
    result = jn.outcomes(fit)
    expected = np.array(case["expected"]["absorption_probability"])
    for place, end in enumerate(ends):
        found = column(result, "estimate", "start_state", ["entry", *states], outcome=end)
        assert found == pytest.approx([expected[0, place], *expected[:, place]], **case["tolerance"])
    frame = result.to_frame()
    assert frame.groupby("start_state")["estimate"].sum().to_numpy() == pytest.approx(1.0, abs=1e-12)
    assert (frame["std_error"] == 0).all()
    assert (frame["low"] == frame["estimate"]).all()
    assert (frame["high"] == frame["estimate"]).all()
    # b16: from the states in which tails has come, HHH cannot win any more.
    never = frame["estimate"] == 0
    assert (frame.loc[never, "flag"] == "cannot be reached").all()
    assert (frame.loc[~never, "flag"] == "").all()


@pytest.mark.parametrize("row", [0, 1, 2, 3, 5, 6, 7, 8, 9])
def test_classical_ruin(reference, row: int) -> None:
    """Feller, vol. 1, 3rd ed. 1968, XIV.2, table 1 (recalled from memory); closed forms (b11).

    The row with 10,000 states is held against the kernel, in tests/kernels/test_absorption.py.
    """
    case = reference("absorbing", "b11")
    expected = case["expected"]["rows"][row]
    result = jn.outcomes(jn.JourneyFit.from_matrix(ruin(expected["p"], expected["a"])))
    start, top = str(expected["z"]), str(expected["a"])
    assert one(result, start_state=start, outcome="0") == pytest.approx(expected["ruin"], **case["tolerance"])
    assert one(result, start_state=start, outcome=top) == pytest.approx(expected["success"], **case["tolerance"])


def test_fair_ruin_among_a_thousand(reference) -> None:
    """Feller, vol. 1, 3rd ed. 1968, ch. XIV; closed forms confirmed by 80-digit solves (b12)."""
    case = reference("absorbing", "b12")
    result = jn.outcomes(jn.JourneyFit.from_matrix(ruin(0.5, 1000)))
    rows = case["expected"]["rows"]
    starts = [str(row["z"]) for row in rows]
    for end, key in (("0", "ruin"), ("1000", "win")):
        found = column(result, "estimate", "start_state", starts, outcome=end)
        assert found == pytest.approx([row[key] for row in rows], **case["tolerance"])


def test_entry_is_the_mixture_of_the_states_it_leads_to(reference) -> None:
    fit, states, ends = known_chain(reference("absorbing", "b10"))
    shares = {"s": 0.2, "b": 0.5, "c": 0.3}
    mixed = jn.JourneyFit.from_matrix(fit.matrix.loc[states, [*states, *ends]], entry=shares)
    plain = jn.outcomes(fit)
    for end in ends:
        parts = column(plain, "estimate", "start_state", shares, outcome=end)
        found = one(jn.outcomes(mixed), start_state="entry", outcome=end)
        assert found == pytest.approx(np.dot(list(shares.values()), parts), rel=1e-12)


def test_walks_that_never_end_are_missing_from_the_sum() -> None:
    frame = pd.DataFrame(
        [[0.0, 0.5, 0.5], [0.0, 1.0, 0.0]], index=["basket", "asleep"], columns=["basket", "asleep", "joined"]
    )
    result = jn.outcomes(jn.JourneyFit.from_matrix(frame))
    assert one(result, start_state="basket", outcome="joined") == 0.5
    assert one(result, start_state="asleep", outcome="joined") == 0.0
    assert one(result, "flag", start_state="asleep", outcome="joined") == "cannot be reached"


def test_refusals() -> None:
    square = pd.DataFrame([[0.5, 0.5], [1.0, 0.0]], index=["a", "b"], columns=["a", "b"])
    chain = jn.JourneyFit.from_matrix(square)
    with pytest.raises(ValueError, match="this chain has no outcomes; ask first_passage to a state instead"):
        jn.outcomes(chain)
    joined = jn.JourneyFit.from_matrix(pd.DataFrame([[0.5, 0.5]], index=["a"], columns=["a", "joined"]))
    with pytest.raises(ValueError, match="confidence_level: got 95; wanted a share between 0 and 1"):
        jn.outcomes(joined, confidence_level=95)
    with pytest.raises(TypeError, match="confidence_level: got 'high'"):
        jn.outcomes(joined, confidence_level="high")
    with pytest.raises(ValueError, match="confidence_level: got 1.0"):
        jn.outcomes(joined).confidence_interval(1.0)


def test_what_no_float_can_hold_is_not_called_unreachable() -> None:
    frame = pd.DataFrame(
        [[0.0, 1e-200, 0.0, 1.0], [0.0, 0.0, 1e-200, 1.0]], index=["a", "b"], columns=["a", "b", "won", "lost"]
    )
    result = jn.outcomes(jn.JourneyFit.from_matrix(frame))
    assert one(result, start_state="b", outcome="won") == 1e-200
    assert one(result, "flag", start_state="b", outcome="won") == ""
    assert one(result, "flag", start_state="a", outcome="won") == "too extreme to compute"


@pytest.mark.parametrize("to", ["joined", None])
@pytest.mark.parametrize("steps", [True, False])
def test_spreads_are_those_of_the_derivatives_start_by_start(steps: bool, to: str | None) -> None:
    """The slow road: a derivative by every move from each start, times the influence of each bucket."""
    fit = club_fit()
    pulls, p = fit.influence, fit.probability
    assert pulls is not None
    mean, second = (p, p) if steps else (fit.mean, fit.second)
    target = fit.target_mask(fit.outcomes if to is None else to)
    found = passage(fit.nodes.n_rows, fit.nodes.n_nodes, fit.move_state, fit.move_target, p, mean, second, target)
    spreads = passage_spread(fit, found, steps=steps)
    parts = [pulls.probability] * 3 if steps else [pulls.probability, pulls.mean, pulls.second]
    for name, (std_error, df) in spreads.items():
        for start in range(fit.nodes.n_rows):
            influence = sum(part @ by for part, by in zip(parts, found.gradients(start)[name], strict=True))
            g = len(influence)
            if name == "probability" and found.certain[start]:
                assert std_error[start] == 0.0
            else:
                assert std_error[start] == pytest.approx(np.sqrt(g / (g - 1) * np.sum(influence**2)), rel=1e-9)
                assert 1 <= df[start] <= g - 1
    if to is not None:
        np.testing.assert_array_equal(probability_spread(fit, found), spreads["probability"])
        shown = column(jn.outcomes(fit), "std_error", "start_state", fit.nodes.labels[: fit.nodes.n_rows], outcome=to)
        np.testing.assert_allclose(shown, spreads["probability"][0], rtol=1e-12)


def test_a_known_chain_has_no_spread() -> None:
    fit = jn.JourneyFit.from_matrix(pd.DataFrame([[0.5, 0.5]], index=["a"], columns=["a", "joined"]))
    p = fit.probability
    found = passage(2, 3, fit.move_state, fit.move_target, p, p, p, fit.target_mask("joined"))
    for std_error, df in passage_spread(fit, found, steps=True).values():
        assert std_error.tolist() == [0.0, 0.0]
        assert df.tolist() == [np.inf, np.inf]
