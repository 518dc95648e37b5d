"""Removal effects and even splits against brute force, identities, closed forms and differences."""

from __future__ import annotations

from collections.abc import Iterable
from itertools import combinations, product
from math import factorial

import numpy as np
import pytest

from journeys.kernels.absorption import passage
from journeys.kernels.arrays import BoolArray, FloatArray
from journeys.kernels.removal import Removed, diverted, passed, road, stopped
from journeys.kernels.shapley import equal_split

SEEDS = range(4)
N, ENDS = 6, 3  # entry and five states; the first end is the target


def random_chain(seed: int, n: int = N) -> FloatArray:
    """Return a matrix of entry and states by these and the ends, with loops and gaps; nothing leads into entry."""
    rng = np.random.default_rng([20, seed])
    p = rng.dirichlet(np.ones(n + ENDS), n) * (rng.random((n, n + ENDS)) < 0.7)
    p[:, 0], p[0, n:] = 0.0, 0.0
    p[:, -1] += np.where(np.arange(n) > 0, 0.1, 0.0)
    p[0, 1] += 0.1
    p[-1, n] += 0.1  # the target is always in reach
    p[0, n - 1] += 0.1
    return p / p.sum(axis=1, keepdims=True)


def target_of(p: FloatArray) -> BoolArray:
    return np.arange(p.shape[1]) == len(p)


def moves_of(p: FloatArray) -> tuple[np.ndarray, np.ndarray, FloatArray]:
    state, target = np.nonzero(p)
    return state, target, p[state, target]


def way_of(p: FloatArray, mean: FloatArray | None = None):
    state, target, prob = moves_of(p)
    return road(len(p), p.shape[1], state, target, prob, prob if mean is None else mean, target_of(p))


def singles(players: Iterable[int]) -> list[np.ndarray]:
    """Return players of one state each."""
    return [np.array([player]) for player in players]


def reach(p: FloatArray) -> float:
    """Return the probability of the target from entry by one dense solve of least squares (also where singular)."""
    n = len(p)
    system, right = np.eye(n) - p[:, :n], p[:, n]
    return float((np.linalg.pinv(system) @ right)[0])


def lost(p: FloatArray, group: tuple[int, ...]) -> FloatArray:
    """Return the chain in which arrivals at some states go to the last end."""
    p = p.copy()
    p[:, -1] += p[:, list(group)].sum(axis=1)
    p[:, list(group)] = 0.0
    return p


GROUPS = [(1,), (2,), (3,), (4,), (5,), (1, 3), (2, 4, 5), (1, 2, 3, 4, 5)]
ARRAYS = [np.array(group) for group in GROUPS]


@pytest.mark.parametrize("seed", SEEDS)
def test_stopping_is_sending_arrivals_to_a_losing_end(seed: int) -> None:
    """Brute force: redirect and solve again, for single states and groups."""
    p = random_chain(seed)
    before = reach(p)
    expected = [1.0 - reach(lost(p, group)) / before for group in GROUPS]
    assert stopped(way_of(p), ARRAYS).effect == pytest.approx(expected, abs=1e-12)


def touched_shares(p: FloatArray) -> dict[frozenset[int], float]:
    """Return the probability of reaching the target having touched exactly each set of states.

    The slow road: the chain of (state, set touched so far), solved whole.
    """
    n = len(p)
    sets = [frozenset(c) for k in range(n) for c in combinations(range(1, n), k)]
    nodes = [(state, done) for state, done in product(range(n), sets) if state == 0 or state in done]
    place = {node: i for i, node in enumerate(nodes)}
    matrix = np.zeros((len(nodes), len(nodes)))
    for (state, done), i in place.items():
        for after in range(1, n):
            matrix[i, place[(after, done | {after})]] += p[state, after]
    visits = np.linalg.solve(np.eye(len(nodes)) - matrix.T, np.eye(len(nodes))[place[(0, frozenset())]])
    found: dict[frozenset[int], float] = {}
    for (state, done), i in place.items():
        found[done] = found.get(done, 0.0) + float(visits[i]) * p[state, n]
    return found


@pytest.mark.parametrize("seed", SEEDS)
def test_identities_of_who_touched_what(seed: int) -> None:
    """The effect is the share of conversions that touch the state; effects sum to the mean number of distinct states
    touched; the Shapley value is the even split over them, and sums to 1 less the conversions that touch none.
    """
    p = random_chain(seed)
    way, shares, total = way_of(p), touched_shares(p), reach(p)
    single = stopped(way, ARRAYS[:5]).effect
    for state in range(1, N):
        touching = sum(share for done, share in shares.items() if state in done)
        assert single[state - 1] == pytest.approx(touching / total, abs=1e-12)
    assert single.sum() == pytest.approx(sum(len(done) * x for done, x in shares.items()) / total, abs=1e-12)
    for players in ([1, 2, 3, 4, 5], [2, 4], [3]):
        split, _ = equal_split(way, singles(players))
        for i, player in enumerate(players):
            expected = sum(x / len(done & set(players)) for done, x in shares.items() if player in done)
            assert split[i] == pytest.approx(expected / total, abs=1e-12)
        none = sum(x for done, x in shares.items() if not done & set(players))
        assert split[-1] == pytest.approx(none / total, abs=1e-12)
        assert split.sum() == pytest.approx(1.0, abs=1e-12)
    # A player of several states is touched with any of them.
    split, _ = equal_split(way, PAIRS[:2])
    split_by_hand = [0.0, 0.0, 0.0]
    for done, x in shares.items():
        touched = [i for i, states in enumerate(PAIRS[:2]) if done & set(states.tolist())]
        for i in touched or [2]:
            split_by_hand[i] += x / max(len(touched), 1) / total
    assert split.tolist() == pytest.approx(split_by_hand, abs=1e-12)


@pytest.mark.parametrize("seed", SEEDS)
def test_the_split_is_the_shapley_value_by_all_subsets(seed: int) -> None:
    """L. S. Shapley 1953, the definition: every subset by hand, each worth one solve."""
    p, players = random_chain(seed), (1, 2, 4, 5)
    worth = {
        frozenset(kept): reach(lost(p, tuple(set(players) - set(kept))))
        for size in range(len(players) + 1)
        for kept in combinations(players, size)
    }
    split, _ = equal_split(way_of(p), singles(players))
    k = len(players)
    for i, player in enumerate(players):
        value = 0.0
        for kept, before in worth.items():
            if player not in kept:
                weight = factorial(len(kept)) * factorial(k - len(kept) - 1) / factorial(k)
                value += weight * (worth[kept | {player}] - before)
        assert split[i] == pytest.approx(value / reach(p), abs=1e-12)


@pytest.mark.parametrize("seed", SEEDS)
def test_diverting_is_dividing_the_rows(seed: int) -> None:
    """Brute force: rows divided by 1 - P(i, C), a row left empty to a losing end, and solved again."""
    p = random_chain(seed)
    expected = []
    for group in GROUPS:
        q = p.copy()
        q[:, list(group)] = 0.0
        left = q.sum(axis=1)
        q = np.divide(q, left[:, None], out=np.zeros_like(q), where=left[:, None] > 1e-15)
        q[left <= 1e-15, -1] = 1.0
        expected.append(1.0 - reach(q) / reach(p))
    assert diverted(way_of(p), ARRAYS).effect == pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize("seed", SEEDS)
def test_passing_is_the_stochastic_complement(seed: int) -> None:
    """C. D. Meyer, SIAM Review 31 (1989) 240-272: conversion stays, and the mean given conversion falls by this."""
    p = random_chain(seed)
    state, target, prob = moves_of(p)
    before = passage(N, N + ENDS, state, target, prob, prob, prob, target_of(p))
    amount = passed(way_of(p), ARRAYS[:-1], steps=True).effect
    for group, less in zip(GROUPS[:-1], amount, strict=True):
        gone = list(group)
        kept = [i for i in range(N + ENDS) if i not in group]
        rows = [i for i in range(N) if i not in group]
        inner = np.linalg.solve(np.eye(len(gone)) - p[np.ix_(gone, gone)], p[np.ix_(gone, kept)])
        q = p[np.ix_(rows, kept)] + p[np.ix_(rows, gone)] @ inner
        s, t, x = moves_of(q)
        after = passage(len(q), q.shape[1], s, t, x, x, x, target_of(q))
        assert after.probability[0] == pytest.approx(before.probability[0], rel=1e-12)
        assert before.mean_given[0] - after.mean_given[0] == pytest.approx(less, abs=1e-11)


def test_days_passed_are_the_days_spent_there() -> None:
    """Without any dwell in the state, the mean days given conversion are less by just that."""
    p = random_chain(3)
    state, target, prob = moves_of(p)
    mean = prob * np.random.default_rng(5).uniform(0.1, 9, len(prob))
    amount = passed(way_of(p, mean), ARRAYS, steps=False).effect
    full = passage(N, N + ENDS, state, target, prob, mean, mean, target_of(p)).mean_given[0]
    for group, less in zip(GROUPS, amount, strict=True):
        still = np.where(np.isin(state, group), 0.0, mean)
        found = passage(N, N + ENDS, state, target, prob, still, still, target_of(p)).mean_given[0]
        assert full - found == pytest.approx(less, abs=1e-11)


def differences(seed: int, ask, part: str) -> tuple[FloatArray, FloatArray]:
    """Return derivatives by every move, told and by central differences, of shape (n_answers, n_moves)."""
    p = random_chain(seed)
    state, target, prob = moves_of(p)
    mean = prob * np.random.default_rng(seed).uniform(0.1, 9, len(prob))
    args, step = (len(p), p.shape[1], state, target), 1e-6

    def at(shift: FloatArray) -> Removed:
        by_p, by_mean = (shift, 0.0) if part == "by_p" else (0.0, shift)
        return ask(road(*args, prob + by_p, mean + by_mean, target_of(p)))

    found = [(at(step * one).effect - at(-step * one).effect) / (2 * step) for one in np.eye(len(prob))]
    return getattr(at(np.zeros(len(prob))), part), np.stack(found, axis=1)


PAIRS = [np.array([1, 4]), np.array([2]), np.array([5, 3])]
ASKS = {
    "stop": (lambda way: stopped(way, ARRAYS), "by_p"),
    "divert": (lambda way: diverted(way, ARRAYS[:-1]), "by_p"),
    "pass, days": (lambda way: passed(way, ARRAYS, steps=False), "by_p"),
    "pass, days, by mean": (lambda way: passed(way, ARRAYS, steps=False), "by_mean"),
    "split": (lambda way: Removed(*equal_split(way, singles([1, 2, 3, 5])), np.zeros(0)), "by_p"),
    "split among pairs": (lambda way: Removed(*equal_split(way, PAIRS), np.zeros(0)), "by_p"),
    "split over all": (lambda way: Removed(*equal_split(way, singles(range(1, N))), np.zeros(0)), "by_p"),
}


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize("name", ASKS)
def test_derivatives_by_differences(seed: int, name: str) -> None:
    told, found = differences(seed, *ASKS[name])
    assert told.shape == found.shape
    assert np.abs(found).max() > 0.01
    np.testing.assert_allclose(told, found, atol=3e-8)


@pytest.mark.parametrize("seed", SEEDS)
def test_derivative_of_steps_passed(seed: int) -> None:
    """The mean of a move in steps is its probability: both change together."""
    p = random_chain(seed)
    state, target, prob = moves_of(p)
    told = passed(way_of(p), ARRAYS, steps=True)
    assert (told.by_mean == 0).all()
    for move, one in enumerate(np.eye(len(prob))):
        ends = [
            passed(road(N, N + ENDS, state, target, x, x, target_of(p)), ARRAYS, steps=True).effect
            for x in (prob + 1e-6 * one, prob - 1e-6 * one)
        ]
        np.testing.assert_allclose(told.by_p[:, move], (ends[0] - ends[1]) / 2e-6, atol=3e-8)


@pytest.mark.parametrize("seed", SEEDS)
def test_derivative_as_written_for_single_states(seed: int) -> None:
    """The other form of it: RE [nu_i N_jc / N_0c - N_ci N_jc / N_cc + N_ci h_j / h_c - nu_i h_j / h_0]."""
    p = random_chain(seed)
    state, target, _ = moves_of(p)
    visits = np.linalg.inv(np.eye(N) - p[:, :N])
    h = np.append(visits @ p[:, N], [1.0, 0.0, 0.0])
    wide = np.vstack([visits, np.zeros((ENDS, N))])
    found = stopped(way_of(p), ARRAYS[:5])
    for c in range(1, N):
        if not 0 < found.effect[c - 1] < 1:
            continue
        told = visits[0, state] * wide[target, c] / visits[0, c] - visits[c, state] * wide[target, c] / visits[c, c]
        told += visits[c, state] * h[target] / h[c] - visits[0, state] * h[target] / h[0]
        np.testing.assert_allclose(found.by_p[c - 1], found.effect[c - 1] * told, atol=1e-12)


def test_twins_share_what_one_had() -> None:
    """A state split in two, entered by chance: together they are what it was, and each has more than half of it."""
    p = random_chain(1)
    q = np.insert(p, N, p[:, 2] * 0.5, axis=1)
    q[:, 2] *= 0.5
    q = np.insert(q, N, q[2], axis=0)
    one, both = stopped(way_of(p), [np.array([2])]).effect, stopped(way_of(q), [np.array([2, N])]).effect
    assert both == pytest.approx(one, rel=1e-12)
    twins = stopped(way_of(q), [np.array([2]), np.array([N])]).effect
    assert twins[0] == pytest.approx(twins[1], rel=1e-12)
    assert one[0] / 2 < twins[0] < one[0]
    others = [i for i in range(1, N) if i != 2]
    before = stopped(way_of(p), [np.array([i]) for i in others]).effect
    assert stopped(way_of(q), [np.array([i]) for i in others]).effect == pytest.approx(before, rel=1e-12)


def gate() -> FloatArray:
    """Return a chain in which all conversions pass states 1 and 2, none passes 3, and 4 cannot be reached."""
    return np.array(
        [
            [0.0, 1.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
            [0.0, 0.1, 0.3, 0.2, 0.0, 0.0, 0.0, 0.4],
            [0.0, 0.2, 0.0, 0.0, 0.0, 0.7, 0.0, 0.1],
            [0.0, 0.0, 0.0, 0.5, 0.0, 0.0, 0.0, 0.5],
            [0.0, 0.3, 0.0, 0.0, 0.0, 0.7, 0.0, 0.0],
        ]
    )


def test_what_the_graph_decides_is_exact() -> None:
    way = way_of(gate())
    found = stopped(way, [np.array([c]) for c in (1, 2, 3, 4)])
    assert found.effect.tolist() == [1.0, 1.0, 0.0, 0.0]
    assert (found.by_p == 0).all()
    split, by_p = equal_split(way, singles([1, 2, 3, 4]))
    assert split.tolist() == pytest.approx([0.5, 0.5, 0.0, 0.0, 0.0], abs=1e-15)
    assert (split[2:] == 0).all()
    assert (by_p[2:4] == 0).all()
    skipped = passed(way, [np.array([3]), np.array([4])], steps=True)
    assert (skipped.effect == 0).all()
    assert diverted(way, [np.array([1]), np.array([4])]).effect.tolist() == [1.0, 0.0]
    # nobody converts where the others of the dead end go, so sending them elsewhere wins
    assert diverted(way, [np.array([3])]).effect[0] < 0


def test_nothing_to_lose_is_undefined() -> None:
    p = gate()
    p[2, 5], p[2, 7] = 0.0, 0.8
    way = way_of(p)
    assert way.conversion == 0
    groups = [np.array([1])]
    for found in (stopped(way, groups), diverted(way, groups), passed(way, groups, steps=True)):
        assert np.isnan(found.effect).all()
        assert (found.by_p == 0).all()


def test_fifteen_players() -> None:
    """In a row of states each left for the next with one chance, k players before the end: who converts touches all."""
    k = 15
    p = np.zeros((k + 1, k + 1 + ENDS))
    p[np.arange(k + 1), np.arange(1, k + 2)] = 0.9
    p[:, -1] = 0.1
    split, by_p = equal_split(way_of(p), singles(range(1, k + 1)))
    assert split == pytest.approx([1 / k] * k + [0.0], abs=1e-13)
    assert by_p.shape == (k + 1, 2 * (k + 1))
