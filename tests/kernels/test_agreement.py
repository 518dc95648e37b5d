from __future__ import annotations

import numpy as np
import pytest

from journeys.kernels.agreement import against_matrix


def test_specified_matrix(reference) -> None:
    """Kullback, Kupperman and Ku, Technometrics 4 (1962) 573-608; own formula (reference e04)."""
    case = reference("agreement", "e04")
    found = against_matrix(np.array(case["input"]["counts"], float), np.array(case["input"]["P0"], float))
    expected = case["expected"]["test"]
    assert found.df == expected["df"]
    for name, value in {"X2": found.x2, "G2": found.g2, "p_X2": found.p_x2, "p_G2": found.p_g2}.items():
        assert value == pytest.approx(expected[name], **case["tolerance"]), name


def test_a_move_ruled_out_gives_an_infinite_statistic() -> None:
    found = against_matrix(np.array([[5.0, 1.0]]), np.array([[1.0, 0.0]]))
    assert (found.x2, found.g2, found.p_x2, found.p_g2) == (np.inf, np.inf, 0.0, 0.0)


def test_possible_moves_alone_make_the_degrees_of_freedom() -> None:
    counts = np.array([[6.0, 4.0, 0.0], [0.0, 0.0, 0.0], [0.0, 7.0, 0.0]])
    matrix = np.array([[0.6, 0.4, 0.0], [0.2, 0.4, 0.4], [0.0, 1.0, 0.0]])
    found = against_matrix(counts, matrix)
    assert found.df == 1
    assert found.x2 == pytest.approx(0.0, abs=1e-12)
    assert found.p_x2 == pytest.approx(1.0)


def test_nothing_left_to_test() -> None:
    found = against_matrix(np.array([[0.0, 7.0]]), np.array([[0.0, 1.0]]))
    assert (found.df, found.x2, found.p_x2, found.p_g2) == (0, 0.0, 1.0, 1.0)


def test_zero_counts_add_to_pearson_and_not_to_the_likelihood_ratio() -> None:
    found = against_matrix(np.array([[0.0, 10.0]]), np.array([[0.5, 0.5]]))
    assert found.x2 == pytest.approx(10.0)
    assert found.g2 == pytest.approx(20.0 * np.log(2.0))


def test_shapes_must_agree() -> None:
    with pytest.raises(ValueError, match=r"counts have the shape \(1, 2\), the matrix \(2, 2\)"):
        against_matrix(np.ones((1, 2)), np.ones((2, 2)))
