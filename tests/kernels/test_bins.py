"""Bins of durations: the quick way to a bin against a plain search."""

from __future__ import annotations

import numpy as np
import pytest

from journeys.kernels.bins import DAY_US, LONGEST_US, bin_of, dwell_edges, elapsed_edges


@pytest.mark.parametrize("silence", [None, 1, 1_000_000, 30 * DAY_US, 50 * 365 * DAY_US])
@pytest.mark.parametrize("edges_of", [dwell_edges, elapsed_edges])
def test_bins_are_those_of_a_search(silence, edges_of):
    edges = edges_of(silence)
    rng = np.random.default_rng(4)
    powers = 2 ** np.arange(59)
    durations = np.concatenate([
        rng.integers(0, LONGEST_US, 20_000), np.exp(rng.uniform(0, np.log(LONGEST_US), 20_000)).astype(np.int64),
        edges - 1, edges, edges + 1, powers - 1, powers, [-7, 0, LONGEST_US],
    ])  # fmt: skip
    durations = durations[durations <= LONGEST_US]
    assert (bin_of(durations, edges) == np.searchsorted(edges, durations)).all()
