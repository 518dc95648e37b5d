"""Moves that too few people made, and those that would tell of them."""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import IntArray, distinct
from journeys.kernels.small_cells import Line, buckets_of, not_shown
from journeys.models.fit import JourneyFit
from journeys.models.memory import chain_of
from journeys.models.stays import move_stays
from journeys.tally.tally import Tally


def few_moves(
    fit: JourneyFit, tally: Tally, outcomes: frozenset[str], least: int
) -> tuple[frozenset[str], frozenset[tuple[str, str]]]:
    """Return the states that too few people have left, and the moves that are not shown.

    Parameters
    ----------
    fit, tally
        The chain, and what it was fitted to.
    outcomes : set of str
        Those whose counts are not shown.
    least : int
        Fewer people than this are few.
    """
    nodes = fit.nodes
    row, column, bucket, n_buckets = _moves(fit, tally)
    moves, cell = distinct(row * nodes.n_nodes + column, nodes.n_rows * nodes.n_nodes)
    seen = buckets_of(cell, bucket, np.ones(len(cell)), (len(moves), n_buckets))
    row, column = moves // nodes.n_nodes, moves % nodes.n_nodes
    here = buckets_of(row[cell], bucket, np.ones(len(cell)), (nodes.n_rows, n_buckets)).sum(axis=1)
    lines = [Line(cells) for _, cells in _lines(row)]
    lines += [Line(cells, nodes.labels[node] not in outcomes) for node, cells in _lines(column)]
    hidden = np.flatnonzero(not_shown(seen, lines, least, here[row] < least))
    labels = nodes.labels
    return (
        frozenset(labels[i] for i in np.flatnonzero(here < least).tolist()),
        frozenset((labels[i], labels[j]) for i, j in zip(row[hidden].tolist(), column[hidden].tolist(), strict=True)),
    )


def _moves(fit: JourneyFit, tally: Tally) -> tuple[IntArray, IntArray, IntArray, int]:
    """Return state, target and bucket of all completed moves."""
    held = fit.fitted_stays
    if held is None:
        stays, by_bucket = move_stays(tally, chain_of(tally, fit.nodes.order), censored=True)
    else:
        stays, by_bucket = held.stays, held.by_bucket
    left = by_bucket.survivor_state
    gone = np.full(len(left), -1 if stays.survivor_target is None else stays.survivor_target)
    return (
        np.concatenate([stays.state[by_bucket.cell], left]),
        np.concatenate([stays.target[by_bucket.cell], gone]),
        np.concatenate([by_bucket.bucket, by_bucket.survivor_bucket]),
        by_bucket.n_buckets,
    )


def _lines(of: IntArray) -> list[tuple[int, IntArray]]:
    """Return the positions of each number."""
    order = np.argsort(of, kind="stable")
    found, first = np.unique(of[order], return_index=True)
    return list(zip(found.tolist(), np.split(order, first[1:]), strict=True))
