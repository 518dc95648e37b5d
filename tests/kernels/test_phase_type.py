"""Steps to a target: closed forms, the two ways of counting, and derivatives against differences."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from journeys.kernels import phase_type
from journeys.kernels.phase_type import Steps


def walk_of(p: np.ndarray, target: int) -> Steps:
    """Return the steps of a chain, states by all nodes."""
    state, to = np.nonzero(p)
    return Steps(*p.shape, state, to, p[state, to], np.arange(p.shape[1]) == target)


def random_walk(rng: np.random.Generator, n: int = 5) -> Steps:
    p = rng.random((n, n + 2)) * (rng.random((n, n + 2)) < 0.7)
    p[:, n + 1] += 0.05
    return walk_of(p / p.sum(axis=1, keepdims=True), n)


# W. Feller, An Introduction to Probability Theory and Its Applications, vol. 1, 3rd ed., Wiley 1968, section VI.8
# (recalled from memory): waiting for the r-th success.
@pytest.mark.parametrize(("r", "p"), [(1, 0.3), (3, 0.3), (2, 0.001)])
def test_negative_binomial(r: int, p: float) -> None:
    matrix = np.zeros((r, r + 1))
    matrix[range(r), range(r)], matrix[range(r), range(1, r + 1)] = 1 - p, p
    walk = walk_of(matrix, r)
    law = stats.nbinom(r, p)
    n = np.array([0, 1, 5, 40, 3000, 100_000])
    np.testing.assert_allclose(walk.reached_from(0, n), law.cdf(n - r), atol=1e-10)
    levels = np.array([0.1, 0.5, 0.9, 0.999])
    found, between = walk.quantiles(np.tile(levels, (r, 1)))
    assert found[0].tolist() == (law.ppf(levels) + r).tolist()
    assert np.ceil(between[0]).tolist() == found[0].tolist()


def test_a_level_met_exactly_counts_as_met() -> None:
    walk = walk_of(np.array([[0.5, 0.5]]), 1)
    assert walk.quantiles(np.array([[0.5, 0.75, 0.875]]))[0].tolist() == [[1.0, 2.0, 3.0]]


def test_very_slow_chains_are_exact() -> None:
    """Half the walks stay 2**40 steps: only squaring gets there."""
    stay = 0.5 ** (1 / 2.0**40)
    walk = walk_of(np.array([[stay, 1 - stay]]), 1)
    found = walk.quantiles(np.array([[0.5]]))[0][0, 0]
    assert found == pytest.approx(np.ceil(np.log(0.5) / np.log1p(-(1 - stay))), rel=1e-3)
    assert walk.quantiles(np.array([[1.5]]))[0][0, 0] == np.inf


def test_targets_and_unasked_levels() -> None:
    walk = Steps(2, 3, np.array([0, 1]), np.array([1, 2]), np.ones(2), np.array([False, True, False]))
    assert walk.quantiles(np.array([[0.5, np.nan], [0.5, 0.5]]))[0].tolist()[1] == [0.0, 0.0]
    assert np.isnan(walk.quantiles(np.array([[0.5, np.nan], [0.5, 0.5]]))[0][0, 1])
    assert walk.reached_from(1, np.array([0, 3])).tolist() == [1.0, 1.0]
    assert walk.reached_within(2).tolist() == [[0.0, 1.0], [1.0, 1.0], [1.0, 1.0]]


def test_small_and_large_chains_are_counted_alike(monkeypatch: pytest.MonkeyPatch) -> None:
    walk = random_walk(np.random.default_rng(1))
    steps = np.array([0, 1, 2, 7, 30])
    levels = walk.reached_within(4000)[-1][:, None] * np.array([0.5, 0.9])
    plain = [walk.reached_from(0, steps), *walk.quantiles(levels), walk.gradients(np.array([0, 2]), np.array([4, 7]))]
    monkeypatch.setattr(phase_type, "DENSE", 2)
    again = Steps(walk.n_states, walk.n_nodes, walk.state, walk.target, walk.p, walk.is_target)
    thin = [again.reached_from(0, steps), *again.quantiles(levels), again.gradients(np.array([0, 2]), np.array([4, 7]))]
    for one, other in zip(plain, thin, strict=True):
        np.testing.assert_allclose(one, other, atol=1e-12)


def test_large_chains_have_a_last_step(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(phase_type, "DENSE", 0)
    monkeypatch.setattr(phase_type, "LONGEST", 50)
    walk = walk_of(np.array([[0.99, 0.01]]), 1)
    assert walk.quantiles(np.array([[0.9]]))[0][0, 0] == np.inf
    assert np.isnan(walk.reached_from(0, np.array([10, 51]))).tolist() == [False, True]


def test_gradients_against_differences() -> None:
    rng = np.random.default_rng(2)
    walk = random_walk(rng)
    starts, steps = np.array([0, 0, 3, 1]), np.array([1, 9, 4, 0])
    found = walk.gradients(starts, steps)
    for move in range(len(walk.p)):
        ends = []
        for change in (1e-6, -1e-6):
            p = walk.p.copy()
            p[move] += change
            other = Steps(walk.n_states, walk.n_nodes, walk.state, walk.target, p, walk.is_target)
            ends.append([other.reached_from(s, np.array([n]))[0] for s, n in zip(starts, steps, strict=True)])
        np.testing.assert_allclose(found[:, move], (np.array(ends[0]) - ends[1]) / 2e-6, atol=1e-7)


def test_simulated_walks_agree() -> None:
    rng = np.random.default_rng(4)
    walk = random_walk(rng)
    m = walk.n_states
    cumulative = np.zeros((m, walk.n_nodes))
    cumulative[walk.state, walk.target] = walk.p
    cumulative = cumulative.cumsum(axis=1)
    n, at = 20_000, np.zeros(20_000, np.int64)
    first = np.full(n, np.inf)
    for step in range(1, 60):
        live = at < m
        drawn = (rng.random(n)[:, None] >= cumulative[np.where(live, at, 0)]).sum(axis=1)
        at = np.where(live, np.minimum(drawn, walk.n_nodes - 1), at)
        first[live & (at == m)] = step
    asked = np.array([1, 2, 5, 12, 40])
    share = (first[:, None] <= asked).mean(axis=0)
    exact = walk.reached_from(0, asked)
    assert np.all(np.abs(share - exact) < 4.5 * np.sqrt(exact * (1 - exact) / n) + 1e-12)
