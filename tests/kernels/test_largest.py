"""The chance of the largest of several differences."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from journeys.kernels.largest import largest_of


def test_one_difference_is_a_normal_test() -> None:
    pulls = np.random.default_rng(3).normal(size=(200, 1))
    std_error = np.sqrt(200 / 199 * (pulls**2).sum())
    z, p = largest_of(np.array([1.5 * std_error]), pulls, np.random.default_rng(1), 20_000)
    assert z == pytest.approx([1.5])
    assert p == pytest.approx(2 * stats.norm.sf(1.5), abs=0.01)


def test_independent_differences_multiply() -> None:
    """Sidak, J. Amer. Statist. Assoc. 62 (1967) 626-633: of k independent ones 1 - (1 - p)^k."""
    pulls = np.kron(np.eye(4), np.ones((50, 1)))
    z, p = largest_of(np.full(4, -2.0) * np.sqrt(200 / 199 * 50), pulls, np.random.default_rng(2), 20_000)
    assert z == pytest.approx(np.full(4, -2.0))
    assert p == pytest.approx(1 - (1 - 2 * stats.norm.sf(2.0)) ** 4, abs=0.01)


def test_no_uncertainty_says_nothing() -> None:
    z, p = largest_of(np.array([0.3]), np.zeros((200, 1)), np.random.default_rng(1))
    assert (z.tolist(), p) == ([0.0], 1.0)


def test_the_same_chance_gives_the_same_number() -> None:
    pulls = np.random.default_rng(3).normal(size=(200, 5))
    found = [largest_of(np.full(5, 20.0), pulls, np.random.default_rng(4))[1] for _ in range(2)]
    assert found[0] == found[1]
