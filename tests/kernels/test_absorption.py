from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from journeys.kernels import absorption, solvers
from journeys.kernels.absorption import Passage, passage

CHAINS = [f"b{x:02d}" for x in (1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 14, 15, 16)]


def walk_in_steps(p: np.ndarray, n_states: int, targets: list[int]) -> Passage:
    """First passage in steps of a matrix of states by nodes."""
    i, j = np.nonzero(p)
    q = p[i, j]
    mask = np.isin(np.arange(p.shape[1]), targets)
    return passage(n_states, p.shape[1], i, j, q, q, q, mask)


def ruin(p: float, a: int) -> np.ndarray:
    """Rows: capital 1 to a - 1; columns: the same, then 0 and a."""
    matrix = np.zeros((a - 1, a + 1))
    z = np.arange(1, a)
    matrix[z - 1, np.where(z == 1, a - 1, z - 2)] += 1 - p
    matrix[z - 1, np.where(z == a - 1, a, z)] += p
    return matrix


@pytest.mark.parametrize("start", CHAINS)
def test_absorbing_chains(reference, start: str) -> None:
    """Kemeny and Snell 1960, Feller vol. 1, Grinstead and Snell 1997 and others; exact fractions and
    R markovchain 0.9.1; the source of each chain stands in tests/reference/absorbing.json (b01-b10, b14-b16).
    """
    case = reference("absorbing", start)
    given, expected, close = case["input"], case["expected"], case["tolerance"]
    names = given["states"]
    transient, absorbing = expected["transient_order"], expected["absorbing_order"]
    order = [names.index(x) for x in transient + absorbing]
    p = np.array(given["P"], dtype=float)[np.ix_(order[: len(transient)], order)]
    m = len(transient)

    over = walk_in_steps(p, m, list(range(m, m + len(absorbing))))
    assert over.certain.all()
    assert over.probability.tolist() == [1.0] * m
    assert over.mean_given == pytest.approx(expected["mean_steps"], **close)
    assert over.sd_given**2 == pytest.approx(expected["variance_steps"], **close)
    for column, name in enumerate(absorbing):
        one = walk_in_steps(p, m, [m + column])
        share = [row[column] for row in expected["absorption_probability"]]
        assert one.probability == pytest.approx(share, **close)
        means, variances = (
            np.array([np.nan if x is None else x for x in expected[f"conditional_{what}_steps"][name]])
            for what in ("mean", "variance")
        )
        assert one.mean_given == pytest.approx(means, nan_ok=True, **close)
        assert one.sd_given**2 == pytest.approx(variances, nan_ok=True, **close)


@pytest.mark.parametrize("row", range(10))
def test_classical_ruin(reference, row: int) -> None:
    """Feller, vol. 1, 3rd ed. 1968, XIV.2, table 1 (recalled from memory); closed forms (b11)."""
    case = reference("absorbing", "b11")
    expected, close = case["expected"]["rows"][row], case["tolerance"]
    z, a = expected["z"], expected["a"]
    p = ruin(expected["p"], a)
    assert walk_in_steps(p, a - 1, [a - 1]).probability[z - 1] == pytest.approx(expected["ruin"], **close)
    assert walk_in_steps(p, a - 1, [a]).probability[z - 1] == pytest.approx(expected["success"], **close)
    over = walk_in_steps(p, a - 1, [a - 1, a])
    assert over.mean_given[z - 1] == pytest.approx(expected["duration"], **close)


@pytest.mark.parametrize("most_dense", [0, 1000])
def test_fair_ruin_among_a_thousand(reference, monkeypatch, most_dense: int) -> None:
    """Feller, vol. 1, ch. XIV; Stern, Math. Magazine 48 (1975) 200-203; closed forms (b12)."""
    monkeypatch.setattr(solvers, "_DENSE", most_dense)
    case = reference("absorbing", "b12")
    p, close = ruin(0.5, 1000), case["tolerance"]
    lose, win, over = (walk_in_steps(p, 999, end) for end in ([999], [1000], [999, 1000]))
    for row in case["expected"]["rows"]:
        i = row["z"] - 1
        assert lose.probability[i] == pytest.approx(row["ruin"], **close)
        assert win.probability[i] == pytest.approx(row["win"], **close)
        assert over.mean_given[i] == pytest.approx(row["duration"], **close)
        assert over.sd_given[i] ** 2 == pytest.approx(row["variance"], **close)
        assert win.mean_given[i] == pytest.approx(row["duration_given_win"], **close)
        assert lose.mean_given[i] == pytest.approx(row["duration_given_ruin"], **close)


@pytest.mark.parametrize("row", range(4))
def test_success_runs(reference, row: int) -> None:
    """Feller, vol. 1, 3rd ed. 1968, XIII.7 (7.7); closed form and exact chain (b13)."""
    case = reference("absorbing", "b13")
    expected, close = case["expected"]["rows"][row], case["tolerance"]
    r, p = expected["r"], float(Fraction(expected["p"]))
    matrix = np.zeros((r, r + 1))
    matrix[:, 0] += 1 - p
    matrix[np.arange(r), np.arange(1, r + 1)] += p
    found = walk_in_steps(matrix, r, [r])
    assert found.mean_given[0] == pytest.approx(expected["mean"], **close)
    assert found.sd_given[0] ** 2 == pytest.approx(expected["variance"], **close)


def random_moves(rng: np.random.Generator, m: int, n_nodes: int, share: float = 0.7):
    """Moves with free moments; dwell has a spread of its own in each."""
    i, j = np.nonzero(rng.random((m, n_nodes)) < share)
    weight = rng.exponential(size=len(i))
    p = weight / np.bincount(i, weights=weight, minlength=m)[i]
    dwell = rng.exponential(3.0, size=len(i))
    return i, j, p, p * dwell, p * dwell**2 * (1 + rng.random(len(i)))


def test_time_against_plain_matrices() -> None:
    rng = np.random.default_rng(1)
    i, j, p, mean, second = random_moves(rng, 5, 8)
    found = passage(5, 8, i, j, p, mean, second, np.arange(8) == 6)
    full = [np.zeros((5, 8)) for _ in range(3)]
    for matrix, value in zip(full, (p, mean, second), strict=True):
        matrix[i, j] = value
    n = np.linalg.inv(np.eye(5) - full[0][:, :5])
    h = n @ full[0][:, 6]
    g = n @ (full[1][:, :5] @ h + full[1][:, 6])
    s = n @ (full[2][:, :5] @ h + full[2][:, 6] + 2 * full[1][:, :5] @ g)
    np.testing.assert_allclose(found.probability, h)
    np.testing.assert_allclose(found.first_moment, g)
    np.testing.assert_allclose(found.second_moment, s)
    np.testing.assert_allclose(found.sd_given, np.sqrt(s / h - (g / h) ** 2))


@pytest.mark.parametrize("target", [[6], [5, 7], [2], [1, 6]])
@pytest.mark.parametrize("start", [0, 3])
def test_gradients_against_differences(target: list[int], start: int) -> None:
    rng = np.random.default_rng(7)
    i, j, *moments = random_moves(rng, 5, 8, share=0.85)
    mask = np.isin(np.arange(8), target)
    # where it is certain the probability is held at 1, and a move alone cannot change
    assert not passage(5, 8, i, j, *moments, mask).certain[~mask[:5]].any()

    def answers(values: list[np.ndarray]) -> np.ndarray:
        found = passage(5, 8, i, j, *values, mask)
        return np.array([found.probability[start], found.mean_given[start], found.sd_given[start]])

    exact = passage(5, 8, i, j, *moments, mask).gradients(start)
    for which in range(3):
        differences = []
        for move in range(len(i)):
            step = 1e-5 * max(1.0, moments[which][move])
            up, down = [x.copy() for x in moments], [x.copy() for x in moments]
            up[which][move] += step
            down[which][move] -= step
            differences.append((answers(up) - answers(down)) / (2 * step))
        for k, measure in enumerate(("probability", "mean_given", "sd_given")):
            slow = np.array(differences)[:, k]
            scale = 1e-6 * np.abs(slow).max() + 1e-9
            np.testing.assert_allclose(exact[measure][which], slow, rtol=1e-6, atol=scale)


def test_sparse_and_dense_roads_agree(monkeypatch) -> None:
    p = ruin(0.48, 90)
    i, j = np.nonzero(p)
    values, mask = (p[i, j], 2 * p[i, j], 5 * p[i, j]), np.arange(91) == 90
    found = []
    for most_dense in (1000, 0):
        monkeypatch.setattr(solvers, "_DENSE", most_dense)
        monkeypatch.setattr(solvers, "_THIN", 1)
        found.append(passage(89, 91, i, j, *values, mask).gradients(40))
    for measure, parts in found[0].items():
        for one, two in zip(parts, found[1][measure], strict=True):
            np.testing.assert_allclose(two, one, rtol=1e-9, atol=1e-9 * np.abs(one).max())


def test_gradients_in_steps_are_the_three_added() -> None:
    rng = np.random.default_rng(3)
    i, j, p, _, _ = random_moves(rng, 4, 6)
    mask = np.arange(6) == 5
    exact = passage(4, 6, i, j, p, p, p, mask).gradients(0)
    for measure, value in (("mean_given", "mean_given"), ("sd_given", "sd_given")):
        for move in range(len(p)):
            ends = []
            for sign in (1, -1):
                q = p.copy()
                q[move] += sign * 1e-6
                ends.append(getattr(passage(4, 6, i, j, q, q, q, mask), value)[0])
            slow = (ends[0] - ends[1]) / 2e-6
            assert sum(x[move] for x in exact[measure]) == pytest.approx(slow, rel=1e-6, abs=1e-7)


def test_reachability_is_decided_on_the_graph() -> None:
    # 0 -> 1 or 2; 1 <-> 3 for ever; 2 -> outcome 5 for sure; 4 -> outcome 6 only
    i = np.array([0, 0, 1, 3, 2, 4])
    j = np.array([1, 2, 3, 1, 5, 6])
    p = np.array([0.3, 0.7, 1.0, 1.0, 1.0, 1.0])
    found = passage(5, 7, i, j, p, p, p, np.arange(7) == 5)
    assert found.probability.tolist() == [0.7, 0.0, 1.0, 0.0, 0.0]
    assert found.certain.tolist() == [False, False, True, False, False]
    np.testing.assert_array_equal(found.mean_given, [2.0, np.nan, 1.0, np.nan, np.nan])
    np.testing.assert_array_equal(found.sd_given, [0.0, np.nan, 0.0, np.nan, np.nan])
    away = found.gradients(1)
    assert [x.sum() for x in away["probability"]] == [0.0, 0.0, 0.0]
    assert np.isnan(away["mean_given"][0]).all()
    assert np.isnan(found.gradients(2)["sd_given"][0]).all()


def test_a_state_as_target_is_not_left_again() -> None:
    i, j = np.array([0, 1, 1]), np.array([1, 0, 2])
    p = np.array([1.0, 0.5, 0.5])
    found = passage(2, 3, i, j, p, 4 * p, 20 * p, np.arange(3) == 1)
    assert found.probability.tolist() == [1.0, 1.0]
    assert found.certain.all()
    assert found.mean_given.tolist() == [4.0, 0.0]
    assert found.sd_given.tolist() == [2.0, 0.0]
    assert [x.tolist() for x in found.gradients(1)["mean_given"]] == [[0.0] * 3] * 3


def test_a_row_that_loses_walks_is_not_certain() -> None:
    i, j, p = np.array([0]), np.array([1]), np.array([0.8])
    found = passage(1, 2, i, j, p, p, p, np.arange(2) == 1)
    assert found.probability.tolist() == [0.8]
    assert not found.certain[0]


def test_no_target_that_can_be_reached() -> None:
    i, j, p = np.array([0]), np.array([1]), np.array([1.0])
    found = passage(1, 3, i, j, p, p, p, np.arange(3) == 2)
    assert found.probability.tolist() == [0.0]
    assert np.isnan(found.mean_given[0])


def test_relabelling_states_changes_nothing() -> None:
    rng = np.random.default_rng(11)
    i, j, p, mean, second = random_moves(rng, 6, 8)
    new = np.concatenate([rng.permutation(6), [6, 7]])
    one = passage(6, 8, i, j, p, mean, second, np.arange(8) == 7)
    two = passage(6, 8, new[i], new[j], p, mean, second, np.arange(8) == 7)
    for name in ("probability", "mean_given", "sd_given"):
        np.testing.assert_allclose(getattr(two, name)[new[:6]], getattr(one, name), rtol=1e-12)


def contracted(found: Passage, directions: list[np.ndarray], n_states: int) -> dict[str, np.ndarray]:
    """Gradients of every start multiplied with the directions, by answer: (n_directions, n_states)."""
    by_start = [found.gradients(start) for start in range(n_states)]
    return {
        name: np.stack([sum(d @ one[name][k] for k, d in enumerate(directions)) for one in by_start], axis=1)
        for name in ("probability", "mean_given", "sd_given")
    }


@pytest.mark.parametrize("floats", [1, 2**22])
@pytest.mark.parametrize("target", [[6], [5, 7], [2], [1, 6]])
def test_changes_are_gradients_times_directions(monkeypatch, target: list[int], floats: int) -> None:
    monkeypatch.setattr(absorption, "_FLOATS", floats)
    rng = np.random.default_rng(21)
    i, j, *moments = random_moves(rng, 5, 8)
    found = passage(5, 8, i, j, *moments, np.isin(np.arange(8), target))
    directions = [rng.normal(size=(11, len(i))) for _ in range(3)]
    changes = found.changes(*directions)
    for name, slow in contracted(found, directions, 5).items():
        np.testing.assert_allclose(getattr(changes, name), slow, rtol=1e-10, atol=1e-10)
    np.testing.assert_allclose(found.probability_changes(directions[0]), changes.probability, rtol=1e-13, atol=1e-15)
    same = found.changes(directions[0], directions[0], directions[0])
    for name, slow in contracted(found, [directions[0]] * 3, 5).items():
        np.testing.assert_allclose(getattr(same, name), slow, rtol=1e-10, atol=1e-10)


@pytest.mark.parametrize("target", [[6], [2]])
def test_changes_against_differences(target: list[int]) -> None:
    rng = np.random.default_rng(7)
    i, j, *moments = random_moves(rng, 5, 8, share=0.85)
    mask = np.isin(np.arange(8), target)
    directions = [rng.normal(size=(4, len(i))) * x for x in moments]
    changes = passage(5, 8, i, j, *moments, mask).changes(*directions)
    step = 1e-6
    for one in range(4):
        up, down = (
            passage(5, 8, i, j, *(x + sign * step * d[one] for x, d in zip(moments, directions, strict=True)), mask)
            for sign in (1, -1)
        )
        for name in ("probability", "mean_given", "sd_given"):
            slow = (getattr(up, name) - getattr(down, name)) / (2 * step)
            np.testing.assert_allclose(getattr(changes, name)[one], slow, rtol=1e-6, atol=1e-7)


def test_changes_where_an_answer_is_undefined() -> None:
    """The chain of `test_reachability_is_decided_on_the_graph`, with the same conventions as its gradients."""
    i = np.array([0, 0, 1, 3, 2, 4])
    j = np.array([1, 2, 3, 1, 5, 6])
    p = np.array([0.3, 0.7, 1.0, 1.0, 1.0, 1.0])
    found = passage(5, 7, i, j, p, p, p, np.arange(7) == 5)
    one = np.array([[-0.1, 0.1, 0.0, 0.0, 0.0, 0.0]])
    changes = found.changes(one, one, one)
    np.testing.assert_allclose(changes.probability, [[0.1, 0.0, 0.0, 0.0, 0.0]])
    np.testing.assert_allclose(changes.mean_given, [[0.0, np.nan, 0.0, np.nan, np.nan]], atol=1e-15)
    assert np.isnan(changes.sd_given).all()
    arrived = passage(5, 7, i, j, p, p, p, np.arange(7) == 2).changes(one, one, one)
    assert arrived.mean_given[0, 2] == arrived.sd_given[0, 2] == arrived.probability[0, 2] == 0.0


def test_changes_do_not_meet_what_leads_away_unknown() -> None:
    """No dwell is given for the move out of the way: it is no part of the way there."""
    i, j, p = np.array([0, 0, 0]), np.array([0, 1, 2]), np.array([0.5, 0.25, 0.25])
    mean = np.array([0.5, 0.25, np.nan])
    found = passage(1, 3, i, j, p, mean, mean, np.arange(3) == 1)
    assert found.mean_given.tolist() == [2.0]
    one = np.array([[0.1, -0.1, 0.0]])
    changes = found.changes(one, one, one)
    assert np.isfinite(changes.mean_given).all()
    assert np.isfinite(changes.sd_given).all()
