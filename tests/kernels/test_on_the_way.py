"""Moves made and states touched by those who reach the target in time: brute force, limits, derivatives."""

from __future__ import annotations

import numpy as np
import pytest

from journeys.kernels.on_the_way import OnTheWay
from journeys.kernels.renewal import Renewal, Scale

DAYS = 12


class OneDayMoves:
    """Dwells of one day, but none in the first state."""

    def __init__(self, state: np.ndarray, p: np.ndarray) -> None:
        self.state, self.p = state, p

    def __call__(self, dt: float, n: int) -> np.ndarray:
        mass = np.zeros((n, len(self.p)))
        mass[np.where(self.state == 0, 0, round(1 / dt)), np.arange(len(self.p))] = self.p
        return mass


def some_chain(seed: int, n: int = 5) -> np.ndarray:
    """Return random moves from n states to the n states, the target and a loss; nothing leads back to the first."""
    p = np.random.default_rng(seed).dirichlet(np.full(n + 2, 0.7), n)
    p[:, 0] = 0.0
    return p / p.sum(axis=1, keepdims=True)


def solved(p: np.ndarray) -> tuple[Scale, Renewal]:
    n = len(p)
    state, target = np.divmod(np.arange(n * (n + 2)), n + 2)
    walk = Renewal(n, n + 2, state, target, p.ravel() > 0, np.arange(n + 2) == n, OneDayMoves(state, p.ravel()))
    return walk.solve(1.0, 64), walk


def all_pairs(n: int) -> tuple[np.ndarray, np.ndarray]:
    return np.repeat(np.arange(n), n + 1), np.tile(np.arange(n + 1), n)


def by_walking(p: np.ndarray, touched: list[int]) -> tuple[float, float, float]:
    """Return, by `DAYS`, the share at the target, their moves, and the share that has touched any of some states."""
    n = len(p)
    now = np.zeros((n, 2))
    now[0, 0] = 1.0
    there = moves = passed = 0.0
    for step in range(DAYS + 1):  # the first move takes no time
        new = np.zeros((n + 2, 2))
        for i in range(n):
            for flag in range(2):
                seen = 1 if i in touched else flag
                new[:, seen] += now[i, flag] * p[i]
        there += new[n].sum()
        moves += (step + 1) * new[n].sum()
        passed += new[n, 1]
        now = new[:n]
    return there, moves, passed


@pytest.mark.parametrize("seed", range(4))
def test_against_walking_day_by_day(seed: int) -> None:
    p = some_chain(seed)
    scale, walk = solved(p)
    row, column = all_pairs(len(p))
    way = OnTheWay(scale, int(walk.place[0]), row, column)
    there, moves, _ = by_walking(p, [])
    assert scale.cdf[DAYS, 0] == pytest.approx(there, abs=1e-8)
    assert scale.summed(way.moves()[0][:, None])[DAYS, 0] == pytest.approx(moves, abs=1e-8)
    for touched in ([2], [1, 3], [0]):
        value, _ = way.touching(np.array(touched))
        assert scale.summed(value[:, None])[DAYS, 0] == pytest.approx(by_walking(p, touched)[2], abs=1e-8)


@pytest.mark.parametrize("what", ["moves", [2], [1, 4]])
def test_what_a_pair_adds_is_the_derivative(what: str | list[int]) -> None:
    """One more chance of a move that takes a day adds what is gained a day later."""
    p = some_chain(9)
    row, column = all_pairs(len(p))

    def summed(p: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        scale, walk = solved(p)
        way = OnTheWay(scale, int(walk.place[0]), row, column)
        value, change = way.moves() if what == "moves" else way.touching(np.array(what))
        return scale.summed(value[:, None])[:, 0], scale.summed(change)

    _, gain = summed(p)
    for pair in range(len(row)):
        i, j, step = row[pair], column[pair], 1e-5
        if not p[i, j] > 0:
            continue
        ends = []
        for change in (-step, step):
            other = p.copy()
            other[i, j] += change
            ends.append(summed(other)[0][DAYS])
        day = DAYS - (0 if i == 0 else 1)
        assert gain[day, pair] == pytest.approx((ends[1] - ends[0]) / (2 * step), rel=1e-5, abs=1e-7)
