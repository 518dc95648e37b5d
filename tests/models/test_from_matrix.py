from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from small_chains import ABSORBING, known_chain, ruin

import journeys as jn
from journeys.errors import DeadEndWarning

STATES = ["price", "basket"]
COLUMNS = ["price", "basket", "joined", "left"]


def chain(cells: list[list[float]] | None = None, index: list[str] | None = None,
          columns: list[str] | None = None) -> pd.DataFrame:
    cells = [[0.0, 0.5, 0.0, 0.5], [0.25, 0.0, 0.5, 0.25]] if cells is None else cells
    return pd.DataFrame(cells, index=index or STATES, columns=columns or COLUMNS)


@pytest.mark.parametrize("start", ABSORBING)
def test_reference_chains_come_back_as_they_were_given(reference, start: str) -> None:
    """Absorbing chains of Kemeny and Snell 1960, Feller vol. 1, Grinstead and Snell 1997 and others; the
    source of each stands in tests/reference/absorbing.json (b01-b10, b14-b16).
    """
    case = reference("absorbing", start)
    fit, states, ends = known_chain(case)
    given = pd.DataFrame(case["input"]["P"], index=case["input"]["states"], columns=case["input"]["states"])
    assert fit.states == tuple(states)
    assert fit.outcomes == tuple(ends)
    assert fit.converted == (tuple(ends) if len(ends) == 1 else ())
    found = fit.matrix.loc[states, [*states, *ends]].to_numpy()
    assert found == pytest.approx(given.loc[states, [*states, *ends]].to_numpy(float), abs=1e-15)
    assert fit.matrix.loc["entry", states[0]] == 1.0
    assert fit.matrix.sum(axis=1).to_numpy() == pytest.approx(1.0, abs=1e-15)
    assert not fit.classes.dead_end.any()


def test_thousand_states() -> None:
    """The fair walk of Feller vol. 1, ch. XIV, with 999 states and two outcomes (b12)."""
    fit = jn.JourneyFit.from_matrix(ruin(0.5, 1000), entry="500")
    assert len(fit.states) == 999
    assert fit.outcomes == ("0", "1000")
    assert len(fit.move_state) == 2 * 999 + 1
    assert repr(fit) == "<JourneyFit: 999 states, 2 outcomes, known chain>"
    listed = fit.moves().to_frame()
    assert len(listed) == 2 * 999 + 1, "only moves that happen are listed in a large chain"


def test_no_uncertainty() -> None:
    fit = jn.JourneyFit.from_matrix(chain(), dwell={"price": 3.0})
    assert fit.tally is None
    assert fit.influence is None
    frame = fit.moves().to_frame()
    assert (frame["std_error"] == 0).all()
    assert (frame["low"] == frame["estimate"]).all()
    assert (frame["high"] == frame["estimate"]).all()
    assert frame["n_moves"].isna().all()
    assert (frame["flag"] == "").all()
    assert len(frame) == 3 * 4


def test_columns_in_any_order_and_without_states_nothing_moves_to() -> None:
    plain = jn.JourneyFit.from_matrix(chain())
    moved = jn.JourneyFit.from_matrix(chain()[["left", "basket", "price", "joined"]])
    pd.testing.assert_frame_equal(plain.matrix, moved.matrix[plain.matrix.columns])
    short = chain([[0.5, 0.0, 0.5], [0.0, 1.0, 0.0]], columns=["basket", "joined", "left"])
    assert jn.JourneyFit.from_matrix(short).matrix["price"].tolist() == [1.0, 0.0, 0.0]


def test_entry() -> None:
    first = jn.JourneyFit.from_matrix(chain())
    assert first.matrix.loc["entry"].tolist() == [1.0, 0.0, 0.0, 0.0]
    second = jn.JourneyFit.from_matrix(chain(), entry="basket")
    assert second.matrix.loc["entry"].tolist() == [0.0, 1.0, 0.0, 0.0]
    mixed = jn.JourneyFit.from_matrix(chain(), entry={"basket": 0.25, "price": 0.75})
    assert mixed.matrix.loc["entry"].tolist() == [0.75, 0.25, 0.0, 0.0]


def test_dwell_moments_of_moves() -> None:
    fit = jn.JourneyFit.from_matrix(
        chain(), dwell={"price": stats.expon(scale=2.0), "basket": 4.0, ("basket", "left"): stats.uniform(1, 2)}
    )
    labels = np.array(fit.nodes.labels, dtype=object)
    moves = {
        (labels[i], labels[j]): (mean / p, square / p)
        for i, j, p, mean, square in zip(fit.move_state, fit.move_target, fit.probability, fit.mean, fit.second,
                                         strict=True)
    }
    assert moves["entry", "price"] == (0.0, 0.0)
    assert moves["price", "left"] == pytest.approx((2.0, 8.0))
    assert moves["basket", "left"] == pytest.approx((2.0, 4.0 + 1 / 3))
    assert moves["basket", "joined"][0] == pytest.approx(4.0)
    assert math.isnan(moves["basket", "joined"][1]), "a mean alone says nothing of the spread"


def test_rows_within_rounding_are_made_to_sum_to_one() -> None:
    third = round(1 / 3, 10)
    fit = jn.JourneyFit.from_matrix(chain([[0.0, third, third, third], [0.25, 0.25, 0.25, 0.25]]))
    assert fit.matrix.sum(axis=1).to_numpy() == pytest.approx(1.0, abs=1e-15)


def test_square_chain_has_no_outcomes_and_no_dead_ends() -> None:
    fit = jn.JourneyFit.from_matrix(chain([[0.0, 1.0], [1.0, 0.0]], columns=STATES))
    assert fit.outcomes == ()
    assert fit.classes.period[1:].tolist() == [2, 2]
    assert not fit.classes.dead_end.any()


def test_lapsed_is_an_outcome_like_any_other() -> None:
    fit = jn.JourneyFit.from_matrix(chain(columns=["price", "basket", "joined", "lapsed"]))
    assert fit.outcomes == ("joined", "lapsed")


@pytest.mark.parametrize(
    ("cells", "index", "columns", "match"),
    [
        (None, ["price", "price"], None, "frame: 'price' stands twice in the index; wanted each name once"),
        (None, None, ["price", "basket", "left", "left"], "frame: 'left' stands twice in the columns"),
        (None, ["entry", "basket"], None, "frame: 'entry' is a name the chain keeps for itself; wanted another"),
        (None, ["lapsed", "basket"], None, "frame: 'lapsed' is a name the chain keeps for itself"),
        (None, None, ["price", "basket", "open", "left"], "frame: 'open' is a name the chain keeps for itself"),
        (None, None, ["price", "basket", "unknown", "left"], "frame: 'unknown' is a name the chain keeps"),
        ([[0.0, 0.5, 0.0, 0.5], [0.25, 0.0, 0.5, 0.2]], None, None,
         r"frame: the row of 'basket' sums to 0\.95; wanted rows that sum to 1 \(add an outcome for what is missing\)"),
        ([[0.0, 1.5, -0.5, 0.0], [0.25, 0.0, 0.5, 0.25]], None, None,
         "frame: 'price' to 'basket' is 1.5; wanted probabilities from 0 to 1"),
        ([[0.0, 0.5, -0.5, 1.0], [0.25, 0.0, 0.5, 0.25]], None, None, "frame: 'price' to 'joined' is -0.5"),
        ([[0.0, math.nan, 0.0, 1.0], [0.25, 0.0, 0.5, 0.25]], None, None, "frame: 'price' to 'basket' is nan"),
        ([[0.0, math.inf, 0.0, 1.0], [0.25, 0.0, 0.5, 0.25]], None, None, "frame: 'price' to 'basket' is inf"),
        ([[0.0, 0.0, 0.0, 0.0], [0.25, 0.0, 0.5, 0.25]], None, None, "frame: the row of 'price' sums to 0;"),
        ([["half", "half", 0, 0], [0.25, 0.0, 0.5, 0.25]], None, None,
         "frame: not all cells are numbers; wanted probabilities"),
    ],
)
def test_refused_frames(cells, index, columns, match: str) -> None:
    with pytest.raises(ValueError, match=match):
        jn.JourneyFit.from_matrix(chain(cells, index, columns))


def test_refused_shapes_and_types() -> None:
    with pytest.raises(ValueError, match=r"frame: got shape \(0, 4\); wanted at least one state and one column"):
        jn.JourneyFit.from_matrix(chain().iloc[:0])
    with pytest.raises(TypeError, match="frame: got list; wanted a pandas DataFrame"):
        jn.JourneyFit.from_matrix([[0.5, 0.5]])


@pytest.mark.parametrize(
    ("dwell", "error", "match"),
    [
        (3.0, TypeError, r"dwell: got float; wanted a mapping from state or \(state, next state\) to days"),
        ({"shop": 1.0}, ValueError, r"dwell: 'shop' is neither a state nor a \(state, next state\) with"),
        ({("price", "joined"): 1.0}, ValueError, r"dwell: \('price', 'joined'\) is neither a state nor"),
        ({"joined": 1.0}, ValueError, "dwell: 'joined' is neither a state nor"),
        ({"price": -1.0}, ValueError, "dwell of 'price' to 'basket': got -1.0; wanted days from 0 with a finite mean"),
        ({"price": math.inf}, ValueError, "dwell of 'price' to 'basket': got inf"),
        ({"price": math.nan}, ValueError, "dwell of 'price' to 'basket': got nan"),
        ({"price": "2 days"}, ValueError, "dwell of 'price' to 'basket': got '2 days'; wanted days from 0"),
        ({"price": stats.norm(1.0, 1.0)}, ValueError, "dwell of 'price' to 'basket': got .* wanted days from 0"),
        ({"price": stats.pareto(0.5)}, ValueError, "dwell of 'price' to 'basket': got .* with a finite mean"),
    ],
)
def test_refused_dwells(dwell, error: type[Exception], match: str) -> None:
    with pytest.raises(error, match=match):
        jn.JourneyFit.from_matrix(chain(), dwell=dwell)


@pytest.mark.parametrize(
    ("entry", "error", "match"),
    [
        ("shop", ValueError, "entry: 'shop' is not a state; wanted one of 'price', 'basket'"),
        ("joined", ValueError, "entry: 'joined' is not a state"),
        ({"price": 0.5}, ValueError, r"entry: the probabilities are .*; wanted numbers from 0 that sum to 1"),
        ({"price": 1.5, "basket": -0.5}, ValueError, "entry: the probabilities are .*; wanted numbers from 0"),
        ({"price": math.nan}, ValueError, "entry: the probabilities are .*; wanted numbers from 0"),
        ({"price": "all"}, ValueError, "entry: the probabilities are .*; wanted numbers from 0"),
        (3, TypeError, "entry: got 3; wanted a state or a mapping from state to probability"),
    ],
)
def test_refused_entries(entry, error: type[Exception], match: str) -> None:
    with pytest.raises(error, match=match):
        jn.JourneyFit.from_matrix(chain(), entry=entry)


def test_state_that_leads_nowhere_is_no_row_of_zeros() -> None:
    """A row of zeros is refused; a state that keeps itself is a dead end, found on the graph."""
    asleep = chain([[0.0, 0.5, 0.0, 0.5], [0.0, 1.0, 0.0, 0.0]])
    fit = jn.JourneyFit.from_matrix(asleep)
    assert fit.classes.dead_end.tolist() == [False, False, True, False, False]


def test_no_dead_end_warning_for_a_whole_chain(recwarn) -> None:
    jn.JourneyFit.from_matrix(chain())
    assert not [one for one in recwarn if issubclass(one.category, DeadEndWarning)]
