from __future__ import annotations

import numpy as np
import pytest

from journeys.kernels.graph import (
    can_reach,
    class_periods,
    classify,
    closed_classes,
    reachable_from,
    strong_classes,
)


def random_graph(rng: np.random.Generator, n: int, share: float):
    return np.nonzero(rng.random((n, n)) < share)


def closure(n: int, src: np.ndarray, dst: np.ndarray) -> np.ndarray:
    """Slow and plain: which nodes lead to which, in any number of moves, 0 among them."""
    lead = np.eye(n, dtype=bool)
    lead[src, dst] = True
    for _ in range(n):
        lead = lead | (lead.astype(int) @ lead.astype(int) > 0)
    return lead


@pytest.mark.parametrize("seed", range(12))
def test_reachability_and_classes_equal_the_closure(seed: int) -> None:
    rng = np.random.default_rng(seed)
    n = int(rng.integers(2, 15))
    src, dst = random_graph(rng, n, rng.choice([0.05, 0.1, 0.2]))
    lead = closure(n, src, dst)
    mask = rng.random(n) < 0.3
    np.testing.assert_array_equal(can_reach(n, src, dst, mask), (lead & mask).any(axis=1))
    np.testing.assert_array_equal(reachable_from(n, src, dst, mask), (lead & mask[:, None]).any(axis=0))
    class_of = strong_classes(n, src, dst)
    np.testing.assert_array_equal(class_of[:, None] == class_of, lead & lead.T)
    closed = closed_classes(src, dst, class_of)[class_of]
    np.testing.assert_array_equal(closed, (lead <= lead.T).all(axis=1))


@pytest.mark.parametrize("seed", range(12))
def test_periods_equal_those_of_the_powers(seed: int) -> None:
    rng = np.random.default_rng(100 + seed)
    n = int(rng.integers(2, 8))
    src, dst = random_graph(rng, n, 1.4 / n)
    adjacent = np.zeros((n, n), dtype=int)
    adjacent[src, dst] = 1
    back = np.zeros(n, dtype=int)
    power = np.eye(n, dtype=int)
    for length in range(1, 6 * n):
        power = np.minimum(power @ adjacent, 1)
        back = np.where(np.diag(power) > 0, np.gcd(back, length), back)
    class_of = strong_classes(n, src, dst)
    np.testing.assert_array_equal(class_periods(src, dst, class_of)[class_of], back)


def test_period_two_of_the_ehrenfest_urn() -> None:
    """Grinstead and Snell, Introduction to Probability, section 11.5; period 2 (reference a02)."""
    up = np.arange(4)
    src, dst = np.concatenate([up, up + 1]), np.concatenate([up + 1, up])
    found = classify(5, src, dst, np.zeros(5, dtype=bool))
    assert set(found.period.tolist()) == {2}
    assert found.is_recurrent.all()
    assert not found.dead_end.any()


def test_a_self_loop_makes_a_ring_aperiodic() -> None:
    ring = np.arange(6)
    class_of = np.zeros(6, dtype=np.int64)
    assert class_periods(ring, (ring + 1) % 6, class_of).tolist() == [6]
    assert class_periods(np.append(ring, 2), np.append((ring + 1) % 6, 2), class_of).tolist() == [1]


def test_states_never_left_are_dead_ends_and_transient_ones_are_not() -> None:
    # 0 -> 1 -> outcome 3, 0 -> 2, and 2 is never left
    found = classify(4, np.array([0, 1, 0]), np.array([1, 3, 2]), np.arange(4) == 3)
    assert found.is_recurrent.tolist() == [False, False, True, True]
    assert found.dead_end.tolist() == [False, False, True, False]
    assert found.period.tolist() == [0, 0, 0, 1]


def test_no_moves_and_no_starts() -> None:
    none = np.zeros(0, dtype=np.int64)
    assert reachable_from(3, none, none, np.zeros(3, dtype=bool)).tolist() == [False] * 3
    assert can_reach(3, none, none, np.arange(3) == 1).tolist() == [False, True, False]
