"""Elapsed time to a target: closed forms, dwells of whole days, bins, and what must not matter."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from journeys.kernels.dwell_grid import BinnedDwell, GivenDwell
from journeys.kernels.grids import Grids, points_for
from journeys.kernels.renewal import Curve, Renewal, curve, lattice_curve

NO, NONE = np.zeros(0, np.int64), np.zeros(0)
TIMES = np.geomspace(1e-4, 200.0, 400)


def chain(cells: list[tuple[int, int, float]], n_states: int, n_nodes: int, mass, target: int) -> Renewal:
    state, to, p = (np.array(column) for column in zip(*cells, strict=True))
    return Renewal(n_states, n_nodes, state, to, p > 0, np.arange(n_nodes) == target, mass)


def solved(walk: Renewal, top: float, start: int = 0, limit: float = 1.0, moves: float = 10.0) -> Curve:
    return curve(list(Grids(walk).scales(top, points_for(moves))), start, 0.0, limit)


def given(cells: list[tuple[int, int, float]], dwell: list[object]) -> GivenDwell:
    """Return the dwells of moves with one distribution a state."""
    p, which = np.array([cell[2] for cell in cells]), np.array([cell[0] for cell in cells])
    return GivenDwell(p, which, [one.cdf for one in dwell])


# W. Feller, An Introduction to Probability Theory and Its Applications, vol. 2, 2nd ed., Wiley 1971, section I.3:
# the sum of n exponentials of one rate is gamma distributed (recalled from memory).
@pytest.mark.parametrize("n", [1, 3, 8])
def test_erlang(n: int) -> None:
    cells = [(i, i + 1, 1.0) for i in range(n)]
    walk = chain(cells, n, n + 1, given(cells, [stats.expon(scale=2.0)] * n).mass, n)
    found = solved(walk, 20 * (2 * n + 6 * 2 * np.sqrt(n)))
    np.testing.assert_allclose(found.at(TIMES), stats.gamma(n, scale=2.0).cdf(TIMES), atol=1e-4)
    levels = np.array([0.01, 0.5, 0.9, 0.99])
    np.testing.assert_allclose(found.inverse(levels), stats.gamma(n, scale=2.0).ppf(levels), rtol=5e-4)


# M. F. Neuts, Matrix-Geometric Solutions in Stochastic Models, Johns Hopkins 1981, chapter 2: the hypoexponential law
# with rates 1, 2, 5 (partial fractions).
def test_hypoexponential_of_very_unlike_rates() -> None:
    for rates in ([1.0, 2.0, 5.0], [0.1, 10.0, 1000.0]):
        cells = [(i, i + 1, 1.0) for i in range(3)]
        walk = chain(cells, 3, 4, given(cells, [stats.expon(scale=1 / rate) for rate in rates]).mass, 3)
        weight = [np.prod([b / (b - a) for b in rates if b != a]) for a in rates]
        exact = 1 - sum(w * np.exp(-a * TIMES) for w, a in zip(weight, rates, strict=True))
        moments = sum(1 / a for a in rates) + 6 * np.sqrt(sum(1 / a**2 for a in rates))
        np.testing.assert_allclose(solved(walk, 20 * moments).at(TIMES), exact, atol=1e-4)


# W. Feller, vol. 2 (as above), section XIV.7 (recalled from memory): a geometric sum of exponentials is exponential.
@pytest.mark.parametrize("again", [0.6, 0.99])
def test_geometric_sum_of_exponentials(again: float) -> None:
    cells = [(0, 0, again), (0, 1, 1 - again)]
    walk = chain(cells, 1, 2, given(cells, [stats.expon(scale=1 / 3)]).mass, 1)
    mean = 1 / 3 / (1 - again)
    found = solved(walk, 140 * mean, moves=1 / (1 - again))
    np.testing.assert_allclose(found.at(TIMES), stats.expon(scale=mean).cdf(TIMES), atol=1e-4)


def test_competing_exponentials() -> None:
    """Constant hazards 0.6 and 1.4: the share that went one way is .3 (1 - exp(-2 t))."""
    cells = [(0, 1, 0.3), (0, 2, 0.7)]
    walk = chain(cells, 1, 3, given(cells, [stats.expon(scale=0.5)]).mass, 1)
    found = solved(walk, 70.0, limit=0.3)
    np.testing.assert_allclose(found.at(TIMES), 0.3 * -np.expm1(-2 * TIMES), atol=1e-4)
    assert found.at(np.array([1e9]))[0] == 0.3
    assert np.isinf(found.inverse(np.array([0.31]))[0])


def test_geometric_on_a_lattice_is_exact() -> None:
    """Each day a share of .2 leaves: the days are geometric."""
    masses = BinnedDwell(2, np.array([0, 1]), np.array([1, 1]), np.array([0.8, 0.2]), np.ones(2),
                         np.arange(2.0), np.arange(2.0), NO, NONE, NONE)  # fmt: skip
    walk = chain([(0, 0, 0.8), (0, 1, 0.2)], 1, 2, masses.mass, 1)
    found = lattice_curve(walk.solve(1.0, 512), 0, 1.0)
    days = np.arange(200)
    np.testing.assert_allclose(found.at(days.astype(float)), 1 - 0.8**days, atol=1e-7)
    np.testing.assert_allclose(found.at(days + 0.999), 1 - 0.8**days, atol=1e-7)
    assert np.ceil(found.inverse(np.array([0.5, 0.9]))).tolist() == [4.0, 11.0]


def test_whole_days_against_brute_convolution() -> None:
    """A random chain in whole days, against the sum over all numbers of moves, convolution by convolution."""
    rng = np.random.default_rng(3)
    n, days, bins = 3, 60, 7
    cells = [(i, j) for i in range(n) for j in range(n + 2)]
    q = rng.random((len(cells), bins)) * (rng.random((len(cells), bins)) < 0.4)
    for i in range(n):
        mine = [k for k, cell in enumerate(cells) if cell[0] == i]
        q[mine] /= q[mine].sum()
    move, at = np.nonzero(q)
    masses = BinnedDwell(len(cells), move, at, q[move, at], at.astype(float), np.arange(float(bins)),
                         np.arange(float(bins)), NO, NONE, NONE)  # fmt: skip
    walk = chain([(i, j, q[k].sum()) for k, (i, j) in enumerate(cells)], n, n + 2, masses.mass, n)
    found = walk.solve(1.0, 2 * days).cdf[:days].T
    kernel = np.zeros((n, n + 2, days))
    for k, (i, j) in enumerate(cells):
        kernel[i, j, :bins] = q[k]
    density, total = np.zeros((n, days)), np.zeros((n, days))
    place = np.zeros((n, n, days))
    place[range(n), range(n), 0] = 1.0
    for _ in range(400):
        step, more = np.zeros_like(place), np.zeros((n, days))
        for s in range(n):
            for i in range(n):
                if place[s, i].max() < 1e-18:
                    continue
                more[s] += np.convolve(place[s, i], kernel[i, n])[:days]
                for j in range(n):
                    step[s, j] += np.convolve(place[s, i], kernel[i, j])[:days]
        density, place = density + more, step
    total = density.cumsum(axis=1)
    np.testing.assert_allclose(found, total, atol=1e-7)


def test_numbers_of_the_states_do_not_matter() -> None:
    rng = np.random.default_rng(5)
    n = 4
    p = rng.random((n, n + 1)) / (n + 1)
    p /= p.sum(axis=1, keepdims=True) * 1.1
    scale = rng.uniform(0.1, 3.0, n)

    def curves(order: np.ndarray) -> Curve:
        where = np.append(np.argsort(order), n)
        cells = [(int(where[i]), int(where[j]), float(p[i, j])) for i in range(n) for j in range(n + 1)]
        dwell = [stats.expon(scale=scale[i]) for i in order]
        walk = chain(cells, n, n + 1, given(cells, dwell).mass, n)
        return solved(walk, 400.0, start=int(where[0]), limit=0.9)

    plain, mixed = curves(np.arange(n)), curves(np.array([2, 0, 3, 1]))
    np.testing.assert_allclose(plain.at(TIMES), mixed.at(TIMES), atol=1e-10)


def test_two_moves_between_the_same_nodes_add_up() -> None:
    cells = [(0, 1, 0.3), (0, 1, 0.7)]
    dwell = [stats.expon(scale=1.0), stats.expon(scale=3.0)]
    masses = GivenDwell(np.array([0.3, 0.7]), np.array([0, 1]), [one.cdf for one in dwell])
    found = solved(chain(cells, 1, 2, masses.mass, 1), 400.0)
    exact = 0.3 * dwell[0].cdf(TIMES) + 0.7 * dwell[1].cdf(TIMES)
    np.testing.assert_allclose(found.at(TIMES), exact, atol=1e-4)


@pytest.mark.parametrize("dt", [0.003, 0.05, 0.7, 11.0])
def test_mass_keeps_its_sum_and_mean(dt: float) -> None:
    """Bins narrow and wide beside the grid, lines that slope and triangles at either end."""
    lower, upper = np.array([0.0, 0.5, 0.6, 2.0]), np.array([0.5, 0.6, 2.0, 5.0])
    tau = np.array([[0.02, 0.55, 1.2, 4.9], [0.3, 0.5001, 1.9, 3.0]])
    q = np.array([[0.1, 0.2, 0.3, 0.2], [0.4, 0.1, 0.2, 0.3]])
    masses = BinnedDwell(2, np.repeat([0, 1], 4), np.tile(np.arange(4), 2), q.ravel(), tau.ravel(), lower, upper,
                         np.array([0]), np.array([5.0]), np.array([0.2]))  # fmt: skip
    found = masses.mass(dt, int(6 / dt) + 3)
    assert found.min() > -1e-12
    np.testing.assert_allclose(found.sum(axis=0), 1.0, atol=1e-9)
    mean = (q * tau).sum(axis=1) + [1.0, 0.0]
    np.testing.assert_allclose((dt * np.arange(len(found))) @ found, mean, atol=1e-9)


def test_binned_lognormal_chain_against_the_distribution_itself() -> None:
    """Two lognormal dwells in 5 % bins with exact means, against the same chain with the distribution given."""
    law = stats.lognorm(1.2, scale=1.0)
    upper = 0.001 * 1.05 ** np.arange(280)
    lower = np.concatenate([[0.0], upper[:-1]])
    q = law.cdf(upper) - law.cdf(lower)
    z = (np.log(np.maximum(np.append(0.0, upper), 1e-300)) - 1.2**2) / 1.2
    tau = np.exp(1.2**2 / 2) * np.diff(stats.norm.cdf(z)) / np.maximum(q, 1e-300)
    some = q > 1e-14
    bins = np.flatnonzero(some)
    masses = BinnedDwell(2, np.repeat([0, 1], len(bins)), np.tile(bins, 2), np.tile(q[some], 2),
                         np.tile(np.clip(tau, lower, upper)[some], 2), lower, upper, NO, NONE, NONE)  # fmt: skip
    cells = [(0, 1, 1.0), (1, 2, 1.0)]
    binned = solved(chain(cells, 2, 3, masses.mass, 2), 1000.0)
    exact = solved(chain(cells, 2, 3, given(cells, [law, law]).mass, 2), 1000.0)
    np.testing.assert_allclose(binned.at(TIMES), exact.at(TIMES), atol=5e-5)


def test_what_cannot_reach_the_target_is_left_out() -> None:
    """A dead end that is never left would make the system singular."""
    cells = [(0, 1, 0.5), (0, 2, 0.5), (1, 1, 1.0)]
    masses = GivenDwell(np.array([0.5, 0.5, 1.0]), np.array([0, 0, -1]), [stats.expon().cdf])
    walk = chain(cells, 2, 3, masses.mass, 2)
    assert walk.open_states.tolist() == [0]
    np.testing.assert_allclose(solved(walk, 100.0, limit=0.5).at(TIMES), 0.5 * stats.expon.cdf(TIMES), atol=1e-4)


def test_visits_from_one_state_are_those_from_all() -> None:
    rng = np.random.default_rng(8)
    cells = [(i, j, 0.2) for i in range(3) for j in range(4)]
    walk = chain(cells, 3, 4, given(cells, [stats.expon(scale=s) for s in rng.uniform(0.5, 2, 3)]).mass, 3)
    scale = walk.solve(0.05, 256)
    np.testing.assert_allclose(scale.all_visits()[:, 1], scale.visits(1), atol=1e-12)
    # what is visited and then leaves for the target is what reaches it
    row, column, values = walk.kernel(0.05, 256)
    direct = np.zeros((len(values), 3), complex)
    direct[:, row[column == 3]] = values[:, column == 3]
    np.testing.assert_allclose((scale.visits(1) * direct).sum(axis=1), scale.reach[:, 1], atol=1e-12)
