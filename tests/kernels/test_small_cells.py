"""Cells that are not shown: none of few people is left, and no line gives one away."""

from __future__ import annotations

import numpy as np
import pytest

from journeys.kernels.small_cells import Line, buckets_of, is_few, not_shown


@pytest.mark.parametrize("seed", range(40))
def test_no_line_of_a_random_grid_gives_a_cell_away(seed: int) -> None:
    rng = np.random.default_rng(seed)
    shape, least = (int(rng.integers(2, 6)), int(rng.integers(2, 6))), int(rng.integers(2, 9))
    seen = rng.random((shape[0] * shape[1], 40)) < rng.choice([0.0, 0.05, 0.2, 0.6], (shape[0] * shape[1], 1))
    grid = np.arange(len(seen)).reshape(shape)
    lines = [Line(cells) for cells in (*grid, *grid.T)]
    hidden, people = not_shown(seen, lines, least), seen.sum(axis=1)
    assert hidden[(people > 0) & (people < least)].all()
    assert not hidden[people == 0].any()
    for line in lines:
        gone = line.cells[hidden[line.cells]]
        whole = hidden[line.cells].sum() == (people[line.cells] > 0).sum()
        assert not len(gone) or whole or (len(gone) > 1 and not is_few(seen[gone], least))


def test_where_the_total_is_not_shown_one_cell_goes_along() -> None:
    seen = np.ones((3, 20), bool)
    assert not_shown(seen, [Line(np.arange(3), total_known=False)], 5).sum() == 1
    assert not not_shown(seen, [Line(np.arange(3))], 5).any()


def test_cells_of_a_lower_rank_go_along_first() -> None:
    seen = np.arange(30) < np.array([[3], [10], [30]])
    line = [Line(np.arange(3))]
    assert not_shown(seen, line, 5).tolist() == [True, True, False]
    assert not_shown(seen, line, 5, rank=np.array([0, 1, 0])).tolist() == [True, False, True]


def test_nothing_counted_is_nothing_seen() -> None:
    seen = buckets_of(np.array([0, 1, 1]), np.array([4, 4, 5]), np.array([2, 0, 1]), (2, 6))
    assert seen.sum(axis=1).tolist() == [1, 1]
