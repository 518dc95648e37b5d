"""From the tables of a tally to the stays that the kernel estimates moves from."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, distinct, sum_at
from journeys.kernels.bins import DAY_US, bin_bounds_days, bin_of, dwell_edges, elapsed_edges
from journeys.kernels.records import FIRST_OUTCOME, LAPSED, OPEN
from journeys.kernels.stays import BucketStays, Stays
from journeys.models.memory import Chain, Nodes
from journeys.models.places import Places
from journeys.tally.accumulate import Columns, join_limbs
from journeys.tally.tally import Tally


def live_buckets(tally: Tally) -> IntArray:
    """Return, for each bucket, its place among the non-empty ones, -1 for an empty one."""
    live = tally.customers["people"] > 0
    return np.where(live, np.cumsum(live) - 1, -1)


def move_stays(tally: Tally, chain: Chain, *, censored: bool) -> tuple[Stays, BucketStays]:
    """Return the stays in entry and every state, in all and by bucket.

    Parameters
    ----------
    tally : Tally
        The counts.
    chain : Chain
        Its moves and entries by the states of a chain.
    censored : bool
        Keep open stays, right-censored at the end of the log; False leaves them out.

    Returns
    -------
    stays : Stays
        Row 0 is entry, from sure entries only; its moves take no time.
    by_bucket : BucketStays
        The same stays by non-empty bucket.
    """
    nodes = chain.nodes(tally)
    own, first = _node_of_code(tally, nodes)[None], np.array([0, nodes.n_rows])
    places = Places(own, first, nodes.n_rows, len(nodes.outcomes))
    return placed_stays(tally, chain, places, live_buckets(tally), censored=censored)


def placed_stays(
    tally: Tally, chain: Chain, places: Places, bucket: IntArray, *, censored: bool
) -> tuple[Stays, BucketStays]:
    """Return the stays in the rows of a chain of one or of several groups, in all and by bucket.

    Parameters
    ----------
    tally, chain
        As in `move_stays`.
    places : Places
        The rows.
    bucket : int array
        Number of each bucket; the largest tells how many there are.
    censored : bool
        As in `move_stays`.
    """
    moves, of_move = places.table(chain.moves)
    sure = chain.entries["sure"] == 1
    needed = [name for name in ("group", "bucket", "state", "n") if name in chain.entries]
    entries, of_entry = places.table({name: chain.entries[name][sure] for name in needed})
    lapse_survives = tally.rules.silence_us is not None and tally.rules.repeats == "keep"
    lower, upper, survivor_dwell = _bins(tally, places, moves, of_move, lapse_survives=lapse_survives)
    n_bins, n_sure = len(lower), len(entries["n"])

    is_open = moves["next"] == OPEN
    survives = (moves["next"] == LAPSED) & lapse_survives
    ended = ~is_open & ~survives
    row = places.first[of_move] + places.own_node(of_move, moves["state"])
    whose = bucket[np.concatenate([entries["bucket"], moves["bucket"][ended]])]
    state = np.concatenate([places.first[of_entry], row[ended]])
    own = np.concatenate(
        [places.own_node(of_entry, entries["state"]), places.own_node(of_move[ended], moves["next"][ended])]
    )
    at = np.concatenate([np.zeros(n_sure, np.int64), moves["bin"][ended]])
    n = np.concatenate([entries["n"], moves["n"][ended]]).astype(np.float64)
    total = np.concatenate([np.zeros(n_sure), join_limbs(moves, "dwell")[ended] / DAY_US])
    cells, cell = distinct((state * places.width + own) * n_bins + at, places.n_rows * places.width * n_bins)
    kept = is_open & censored
    cell_state = cells // n_bins // places.width
    stays = Stays(
        n_states=places.n_rows,
        n_targets=places.n_nodes,
        n_bins=n_bins,
        state=cell_state,
        target=places.node(cell_state, cells // n_bins % places.width),
        bin=cells % n_bins,
        n=sum_at(cell, n, len(cells)),
        total=sum_at(cell, total, len(cells)),
        lower=lower,
        upper=upper,
        open_state=row[kept],
        open_bin=moves["bin"][kept],
        open_n=moves["n"][kept].astype(np.float64),
        survivor_n=sum_at(row[survives], moves["n"][survives], places.n_rows),
        survivor_target=None if tally.rules.silence_us is None else places.n_nodes - 1,
        survivor_dwell=survivor_dwell,
    )
    by_bucket = BucketStays(
        n_buckets=int(bucket.max()) + 1,
        bucket=whose,
        cell=cell,
        n=n,
        total=total,
        open_bucket=bucket[moves["bucket"][kept]],
        open_state=stays.open_state,
        open_bin=stays.open_bin,
        open_n=stays.open_n,
        survivor_bucket=bucket[moves["bucket"][survives]],
        survivor_state=row[survives],
        survivor_n=moves["n"][survives].astype(np.float64),
    )
    return stays, by_bucket


def _bins(
    tally: Tally, places: Places, moves: Columns, of_move: IntArray, *, lapse_survives: bool
) -> tuple[FloatArray, FloatArray, float | FloatArray]:
    """Return the edges of the bins in days, and the dwell of a stay that outlives the last bin of its group."""
    silence_us = tally.rules.silence_us
    edges = dwell_edges(silence_us, tally.whole_days)
    if silence_us is not None and lapse_survives:
        lower, upper = bin_bounds_days(edges, int(bin_of(np.array([silence_us]), edges)[0]) + 1)
        return lower, upper, float(upper[-1])
    last = np.zeros(len(places.first) - 1, np.int64)
    np.maximum.at(last, of_move, moves["bin"])
    lower, upper = bin_bounds_days(edges, int(last.max()) + 1)
    return lower, upper, float(upper[last[0]]) if len(last) == 1 else np.repeat(upper[last], np.diff(places.first))


def without_open(stays: Stays, by_bucket: BucketStays, rows: np.ndarray) -> tuple[Stays, BucketStays]:
    """Return the same stays with the open ones of some rows (a mask over rows) left out."""
    keep = ~rows[stays.open_state]
    mine = ~rows[by_bucket.open_state]
    return (
        replace(stays, open_state=stays.open_state[keep], open_bin=stays.open_bin[keep], open_n=stays.open_n[keep]),
        replace(
            by_bucket,
            open_bucket=by_bucket.open_bucket[mine],
            open_state=by_bucket.open_state[mine],
            open_bin=by_bucket.open_bin[mine],
            open_n=by_bucket.open_n[mine],
        ),
    )


def journey_stays(tally: Tally) -> tuple[Stays, BucketStays]:
    """Return whole journeys with a sure entry as stays in one state, ended by their outcome or still open.

    Returns
    -------
    stays : Stays
        One state; column c is the outcome with code c + 1 (lapsed is column 1, see `outcome_column`).
    by_bucket : BucketStays
        The same by non-empty bucket.
    """
    table = tally.journeys
    return _one_row(tally, table, "elapsed", outcome_column, table["sure"] == 1, table["outcome"] == OPEN)


def absence_stays(tally: Tally, outcome: int) -> tuple[Stays, BucketStays]:
    """Return absences as stays in one state, ended by coming back or still open.

    Parameters
    ----------
    tally : Tally
        The counts.
    outcome : int
        Code of how the journey before the absence ended: lapsed, or an outcome.

    Returns
    -------
    stays : Stays
        One state; column 1 is coming back. Times are since the customer's last event.
    by_bucket : BucketStays
        The same by non-empty bucket.
    """
    table = tally.gaps
    kind = table["outcome"] == outcome
    return _one_row(tally, table, "away", np.ones_like, kind, table["back"] == 0)


def _one_row(
    tally: Tally,
    table: Columns,
    total: str,
    column: Callable[[IntArray], IntArray],
    mine: BoolArray,
    is_open: BoolArray,
) -> tuple[Stays, BucketStays]:
    """Return some rows of a table binned by elapsed time as stays in one state.

    `total` names the sum of times, `column` turns the outcomes of ended stays into columns, `mine` picks the
    rows and `is_open` says which of them have not ended.
    """
    rules, bucket = tally.rules, live_buckets(tally)
    edges = elapsed_edges(rules.silence_us, tally.whole_days, rules.horizons_us)
    still, ended = mine & is_open, mine & ~is_open
    n_bins = int(table["bin"][mine].max()) + 1 if mine.any() else 1
    lower, upper = bin_bounds_days(edges, n_bins)
    target = column(table["outcome"][ended].astype(np.int64))
    n_targets = FIRST_OUTCOME + len(rules.outcomes) + 1
    cells, cell = distinct(target * n_bins + table["bin"][ended], n_targets * n_bins)
    n: FloatArray = table["n"][ended].astype(np.float64)
    days = join_limbs(table, total)[ended] / DAY_US
    zeros, none = np.zeros(int(still.sum()), np.int64), np.zeros(0, np.int64)
    open_n: FloatArray = table["n"][still].astype(np.float64)
    stays = Stays(
        n_states=1,
        n_targets=n_targets,
        n_bins=n_bins,
        state=np.zeros(len(cells), np.int64),
        target=cells // n_bins,
        bin=cells % n_bins,
        n=sum_at(cell, n, len(cells)),
        total=sum_at(cell, days, len(cells)),
        lower=lower,
        upper=upper,
        open_state=zeros,
        open_bin=table["bin"][still],
        open_n=open_n,
        survivor_n=np.zeros(1),
    )
    by_bucket = BucketStays(
        n_buckets=int(bucket.max()) + 1,
        bucket=bucket[table["bucket"][ended]],
        cell=cell,
        n=n,
        total=days,
        open_bucket=bucket[table["bucket"][still]],
        open_state=zeros,
        open_bin=stays.open_bin,
        open_n=open_n,
        survivor_bucket=none,
        survivor_state=none,
        survivor_n=np.zeros(0),
    )
    return stays, by_bucket


def outcome_column(code: IntArray) -> IntArray:
    """Return the column of `journey_stays` for an outcome's code (column 0 is the journey itself)."""
    return code.astype(np.int64) + 1


def _node_of_code(tally: Tally, nodes: Nodes) -> IntArray:
    """Return the node of each code in the tally's tables; -1 where there is none."""
    place = np.full(tally.first_state + len(nodes.states), -1)
    n_outcomes = len(tally.rules.outcomes)
    place[LAPSED] = nodes.n_nodes - 1 if tally.rules.silence_us is not None else -1
    place[FIRST_OUTCOME : FIRST_OUTCOME + n_outcomes] = nodes.n_rows + np.arange(n_outcomes)
    place[tally.first_state :] = 1 + np.arange(len(nodes.states))
    return place
