"""The solvers of a walk: tiny, huge and badly scaled numbers against closed forms, large chains, iteration, refusal."""

from __future__ import annotations

from decimal import Decimal, localcontext
from itertools import pairwise
from math import comb

import numpy as np
import pytest

from journeys.errors import LogError
from journeys.kernels import solvers
from journeys.kernels.absorption import Passage, passage
from journeys.kernels.graph import classify
from journeys.kernels.ordering import all_at_once, plan
from journeys.kernels.reduction import eliminate, reduce
from journeys.kernels.solvers import Exact, Iteration, solver
from journeys.kernels.visits import often_visited

BIASED = 0.4545  # r = q/p is about 1.2, r ** 1000 about 1e79


def walk(i: np.ndarray, j: np.ndarray, p: np.ndarray, n: int, n_nodes: int, targets: list[int]) -> Passage:
    """First passage in steps."""
    return passage(n, n_nodes, i, j, p, p, p, np.isin(np.arange(n_nodes), targets))


def ruin(p: float, a: int, stay: float = 0.0) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Moves of the classical ruin: state z - 1 holds capital z, node a - 1 is ruin, node a the other end."""
    z = np.arange(1, a)
    move = 1.0 - stay
    state = np.tile(z - 1, 3)
    target = np.concatenate([np.where(z == 1, a - 1, z - 2), np.where(z == a - 1, a, z), z - 1])
    chance = np.repeat([move * (1 - p), move * p, stay], a - 1)
    used = chance > 0
    return state[used], target[used], chance[used]


def ruin_truth(p: float, a: int, starts: list[int]) -> np.ndarray:
    """Probability of reaching a from z, duration, duration given a is reached: rows by start.

    Feller I, 3rd ed., XIV.2 (2.4) and XIV.3 (3.4); duration given the end: F. Stern, Mathematics Magazine 48 (1975)
    200-203, W. A. Beyer and M. S. Waterman, Mathematics Magazine 50 (1977) 42-45 (recalled from memory).
    """
    with localcontext() as context:
        context.prec = 250
        up, down = Decimal(p), Decimal(1.0 - p)
        r, drift = down / up, down - up

        def half(x: int) -> Decimal:
            return x * (1 + r**x) / (r**x - 1)

        rows = []
        for z in starts:
            win = (1 - r**z) / (1 - r**a)
            rows.append([float(x) for x in (win, z / drift - a / drift * win, (half(a) - half(z)) / drift)])
    return np.array(rows)


@pytest.mark.parametrize("stay", [0.0, 0.999, 1 - 1e-9])
@pytest.mark.parametrize("p", [BIASED, 0.4, 0.6, 1 / 3])
@pytest.mark.parametrize("a", [60, 1001])
def test_biased_ruin(p: float, stay: float, a: int) -> None:
    """Feller I, 3rd ed., ch. XIV; closed forms, see `ruin_truth`. Down to 1e-300 with p = 1/3."""
    starts = [1, 2, a // 2, a - 1]
    truth = ruin_truth(p, a, starts)
    moves = ruin(p, a, stay)
    at = np.array(starts) - 1
    win, over = (walk(*moves, a - 1, a + 1, end) for end in ([a], [a - 1, a]))
    move = 1.0 - stay
    told = ~win.doubtful[at]
    assert told.all() or p == 1 / 3
    np.testing.assert_allclose(win.probability[at][told], truth[told, 0], rtol=3e-12)
    np.testing.assert_allclose(win.mean_given[at][told] * move, truth[told, 2], rtol=3e-12)
    assert not over.doubtful.any()
    np.testing.assert_allclose(over.mean_given[at] * move, truth[:, 1], rtol=3e-12)
    assert over.certain.all()
    assert (win.probability[at][~told] < 1e-289).all()


def test_probability_down_to_1e_80_has_its_digits() -> None:
    """Feller I, 3rd ed., XIV.2 (2.4), 1,000 states: from capital 1 it is won once in about 1e80 games."""
    found = walk(*ruin(BIASED, 1001), 1000, 1002, [1001])
    truth = ruin_truth(BIASED, 1001, [1])[0, 0]
    assert 1e-81 < truth < 1e-79
    assert found.probability[0] == pytest.approx(truth, rel=1e-12)
    assert not found.doubtful.any()


@pytest.mark.parametrize("a", [100, 1000])
def test_long_wait_below_a_wall(a: int) -> None:
    """Birth and death: E(k to k + 1) = 1/p + (q/p) E(k - 1 to k). S. Karlin and H. M. Taylor, A First Course in
    Stochastic Processes, 2nd ed. 1975, ch. 4 (recalled from memory). The wait is nearly exponential: sd = mean.
    """
    z = np.arange(a)
    p = np.repeat([BIASED, 1 - BIASED], a)
    found = walk(np.tile(z, 2), np.concatenate([z + 1, np.maximum(z - 1, 0)]), p, a, a + 1, [a])
    up, down, step, total = Decimal(BIASED), Decimal(1 - BIASED), Decimal(0), Decimal(0)
    for _ in range(a):
        step = (1 + down * step) / up
        total += step
    assert found.certain.all()
    assert found.mean_given[0] == pytest.approx(float(total), rel=1e-11)
    assert found.sd_given[0] == pytest.approx(float(total), rel=1e-5 if a == 100 else 1e-11)
    assert not found.doubtful.any()


@pytest.mark.parametrize("most_dense", [0, 500])
def test_rare_way_out_of_a_busy_class(monkeypatch, most_dense: int) -> None:
    """Two states change places for ever but for two ways out of 1e-30 and 3e-30: shares 1/4 and 3/4."""
    monkeypatch.setattr(solvers, "_DENSE", most_dense)
    monkeypatch.setattr(solvers, "_THIN", 0)
    i, j = np.array([0, 0, 1, 1]), np.array([1, 2, 0, 3])
    found = walk(i, j, np.array([1.0, 1e-30, 1.0, 3e-30]), 2, 4, [2])
    np.testing.assert_allclose(found.probability, [0.25, 0.25], rtol=1e-15)
    np.testing.assert_allclose(found.mean_given, [5e29, 5e29], rtol=1e-14)
    np.testing.assert_allclose(found.sd_given, [5e29, 5e29], rtol=1e-13)


@pytest.mark.parametrize("n", [10, 100])
def test_ehrenfest_urns(n: int) -> None:
    """E(k to k + 1) = sum of C(n, j) for j <= k over C(n - 1, k). J. L. Palacios, Journal of Applied Probability 30
    (1993) 472-476 (recalled from memory); for n = 100 about 1e30.
    """
    k = np.arange(n)
    i, j = np.concatenate([k, k[1:]]), np.concatenate([k + 1, k[1:] - 1])
    p = np.concatenate([(n - k) / n, k[1:] / n])
    found = walk(i, j, p, n, n + 1, [n])
    for start in (0, n // 2, n - 1):
        steps = [Decimal(sum(comb(n, x) for x in range(at + 1))) / comb(n - 1, at) for at in range(start, n)]
        assert found.mean_given[start] == pytest.approx(float(sum(steps)), rel=1e-12)


@pytest.mark.parametrize("n", [30, 800])
def test_coupon_collector(n: int) -> None:
    """Feller I, 3rd ed., IX.3 (3.3): sums of independent geometric waits."""
    k = np.arange(n)
    p = np.concatenate([k / n, (n - k) / n])
    used = p > 0
    i, j = np.tile(k, 2)[used], np.concatenate([k, k + 1])[used]
    found = walk(i, j, p[used], n, n + 1, [n])
    assert found.mean_given[0] == pytest.approx(sum(n / (n - x) for x in range(n)), rel=1e-12)
    variance = sum((x / n) / ((n - x) / n) ** 2 for x in range(n))
    assert found.sd_given[0] == pytest.approx(np.sqrt(variance), rel=1e-11)


@pytest.mark.parametrize("stay", [0.5, 0.999, 1 - 1e-9, 1 - 2.0**-50])
def test_geometric_wait(stay: float) -> None:
    """Geometric law: mean 1/q, variance (1 - q)/q**2 (Feller I, 3rd ed., XI.2)."""
    leave = 1.0 - stay
    found = walk(np.array([0, 0]), np.array([0, 1]), np.array([stay, leave]), 1, 2, [1])
    assert found.mean_given[0] == pytest.approx(1 / leave, rel=1e-15)
    assert found.sd_given[0] == pytest.approx(np.sqrt(stay) / leave, rel=1e-14)


def test_a_small_spread_keeps_its_digits() -> None:
    """A thousand moves that take a day but for 1e-6 of spread in each: sd is 1e-6 times the root of 1,000."""
    k = np.arange(1000)
    one = np.ones(1000)
    found = passage(1000, 1001, k, k + 1, one, one, one + 1e-12, np.arange(1001) == 1000)
    own = (1.0 + 1e-12) - 1.0
    assert found.sd_given[0] == pytest.approx(np.sqrt(1000 * own), rel=1e-9)
    assert found.mean_given[0] == 1000.0


def test_what_no_float_can_hold_is_told() -> None:
    """1e-400 from state 0, 1e-200 from state 1."""
    i, j = np.array([0, 0, 1, 1]), np.array([1, 3, 2, 3])
    p = np.array([1e-200, 1.0, 1e-200, 1.0])
    found = walk(i, j, p, 2, 4, [2])
    assert found.probability.tolist() == [0.0, 1e-200]
    assert found.doubtful.tolist() == [True, False]
    assert not walk(i, j, p, 2, 4, [3]).doubtful.any()


def random_chain(rng: np.random.Generator, n: int, near: int, moves: int = 4):
    """Moves within a distance of each state, and out of all of them."""
    i = np.repeat(np.arange(n), moves)
    j = np.clip(i + rng.integers(-near, near + 1, len(i)), 0, n - 1)
    keys = np.unique(i * n + j)
    i, j = keys // n, keys % n
    weight = rng.exponential(size=len(i))
    excess = rng.uniform(0.01, 0.2, n)
    return i, j, weight / np.bincount(i, weight, n)[i] * (1 - excess)[i], excess


def hubs_and_spokes(n: int) -> tuple[np.ndarray, np.ndarray]:
    at = np.arange(1, n)
    return np.concatenate([at, 0 * at]), np.concatenate([0 * at, at])


@pytest.mark.parametrize("kind", ["band", "anywhere", "tree", "star"])
def test_sparse_road_is_the_full_one(monkeypatch, kind: str) -> None:
    rng = np.random.default_rng(5)
    n = 700
    i, j, p, excess = random_chain(rng, n, 10 if kind == "band" else n)
    if kind in ("tree", "star"):
        up = np.arange(1, n)
        i, j = hubs_and_spokes(n) if kind == "star" else (np.r_[up, (up - 1) // 2], np.r_[(up - 1) // 2, up])
        p = 0.9 / np.bincount(i, minlength=n)[i]
        excess = np.full(n, 0.1)
    monkeypatch.setattr("journeys.kernels.ordering._EASY", 20_000)
    order = plan(n, i, j)
    found = reduce(order, i, j, p, excess)
    full = np.eye(n) * 0.0
    full[i, j] = -p
    np.fill_diagonal(full, 0.0)
    np.fill_diagonal(full, excess - full.sum(axis=1))
    right = rng.random((n, 40))
    np.testing.assert_allclose(found.solve(right), np.linalg.solve(full, right), rtol=1e-11)
    np.testing.assert_allclose(found.solve(right, transposed=True), np.linalg.solve(full.T, right), rtol=1e-11)
    np.testing.assert_allclose(found.solve(right[:, 0]), found.solve(right)[:, 0], rtol=1e-12)
    if kind in ("tree", "star"):
        assert order.entries < 80 * n


@pytest.mark.parametrize("n", [1, 31, 33, 129, 200])
def test_full_road_against_numpy(n: int) -> None:
    rng = np.random.default_rng(n)
    p = rng.random((n, n))
    excess = rng.random(n)
    i, j = np.nonzero(p)
    found = reduce(all_at_once(n), i, j, p[i, j], excess)
    matrix = -(p - np.diag(np.diag(p)))
    np.fill_diagonal(matrix, excess - matrix.sum(axis=1))
    right = rng.random((n, 3))
    np.testing.assert_allclose(found.solve(right), np.linalg.solve(matrix, right), rtol=1e-10)
    np.testing.assert_allclose(found.solve(right, transposed=True), np.linalg.solve(matrix.T, right), rtol=1e-10)


def test_the_predicted_fill_is_an_upper_bound() -> None:
    """Against elimination played through on sets, state by state, in the same order."""
    i, j, p, excess = random_chain(np.random.default_rng(2), 300, 8)
    order = plan(300, i, j)
    near = [set() for _ in range(300)]
    for a, b in zip(i, j, strict=True):
        if a != b:
            near[a].add(int(b))
            near[b].add(int(a))
    filled = 0
    for k in order.order.tolist():
        filled += 1 + 2 * len(near[k])
        for other in near[k]:
            near[other] |= near[k] - {other}
            near[other].discard(k)
    kept = sum(
        f.lower.size + f.below.size + f.right.size for f in reduce(order, i, j, p, excess).factors
    )
    assert filled <= order.entries == kept
    assert all(a.stop == b.start for a, b in pairwise(order.blocks))


def test_elimination_keeps_row_sums() -> None:
    """What leaves the states that are left stays the same, with what is out taken as passed through."""
    rng = np.random.default_rng(8)
    p = rng.random((50, 50))
    np.fill_diagonal(p, 0.0)
    excess = rng.random(50)
    size = p.sum(axis=1) + excess
    p, excess = p / size[:, None], excess / size
    front, left = p.copy(), excess.copy()
    eliminate(front, left, 45)
    # the diagonal of what is left holds returns, the rest of the row what goes on
    np.testing.assert_allclose(front[45:, 45:].sum(axis=1) + left[45:], 1.0, rtol=1e-13)


def test_iteration_agrees_with_elimination(monkeypatch) -> None:
    i, j, p, excess = random_chain(np.random.default_rng(3), 800, 800)
    right = np.random.default_rng(4).random((800, 3))
    exact = solver(800, i, j, p, excess)
    assert isinstance(exact, Exact)
    assert not exact.error_of(right[:, 0], right[:, 0]).any()
    monkeypatch.setattr(solvers, "_MOST_ENTRIES", 1000)
    found = solver(800, i, j, p, excess)
    assert isinstance(found, Iteration)
    x = found.solve(right)
    truth = exact.solve(right)
    np.testing.assert_allclose(x, truth, rtol=1e-7)
    for k in range(3):
        bound = found.error_of(x[:, k], right[:, k])
        assert (np.abs(x[:, k] - truth[:, k]) <= bound).all()
        assert bound.max() < 1e-6
    np.testing.assert_allclose(found.solve(right, transposed=True), exact.solve(right, transposed=True), rtol=1e-7)
    assert found.solve(np.zeros(800)).tolist() == [0.0] * 800


def test_iteration_tells_what_it_cannot_vouch_for(monkeypatch) -> None:
    """A probability of 1e-24 is below what a residual says anything about; 1/2 is not."""
    monkeypatch.setattr(solvers, "_DENSE", 0)
    monkeypatch.setattr(solvers, "_THIN", 0)
    monkeypatch.setattr(solvers, "_MOST_ENTRIES", 0)
    found = walk(*ruin(0.3, 70), 69, 71, [70])
    assert found.doubtful[0]
    assert not found.doubtful[-1]
    assert found.probability[-1] == pytest.approx(ruin_truth(0.3, 70, [69])[0, 0], rel=1e-6)


def test_refusal_says_what_to_do(monkeypatch) -> None:
    monkeypatch.setattr(solvers, "_MOST_ENTRIES", 1000)
    monkeypatch.setattr(solvers, "_ROUNDS", 20)
    wanted = r"of 999 states with 1,996 moves .* hold 0 million numbers .at most 0 million .* `states` or `unmapped`"
    with pytest.raises(LogError, match=wanted):
        walk(*ruin(0.5, 1000), 999, 1001, [1000])


@pytest.mark.parametrize("least", [0.0, 0.01, 0.2, 0.6])
@pytest.mark.parametrize("seed", range(6))
def test_often_visited_is_a_passage_to_each(monkeypatch, seed: int, least: float) -> None:
    """The slow road: each state asked about as a target of its own; chains with classes that are never left."""
    monkeypatch.setattr("journeys.kernels.visits._AT_ONCE", 2)
    rng = np.random.default_rng(seed)
    m, n_nodes = 9, 11
    here = rng.random((m, n_nodes)) < 0.2
    here[7:] = False
    here[7, 8] = here[8, 7] = here[0, 10] = True
    here[np.arange(m), np.where(here.any(axis=1), np.argmax(here, axis=1), np.arange(m))] = True
    i, j = np.nonzero(here)
    weight = rng.exponential(size=len(i))
    p = weight / np.bincount(i, weight, m)[i]
    asked = rng.random(m) < 0.5
    asked[7] = True
    slow = np.zeros(m, dtype=bool)
    for one in np.flatnonzero(asked):
        slow |= walk(i, j, p, m, n_nodes, [one]).probability > least
    classes = classify(n_nodes, i, j, np.arange(n_nodes) >= m)
    assert often_visited(m, i, j, p, classes, asked, least).tolist() == slow.tolist()
