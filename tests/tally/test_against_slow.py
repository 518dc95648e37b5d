"""The tally against the slow, obvious reading of the same rules: all tables and findings, to the last unit.

`JOURNEYS_SLOW_LOGS` sets how many seeded logs are read (1,500 if it is not set).
"""

from __future__ import annotations

import os
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from typing import Any
from unittest.mock import patch

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from random_logs import RandomLog, logs, random_log
from slow_rules import SlowTally, read_log

from journeys.intake import batches, identity
from journeys.intake.rules import JourneyRules
from journeys.kernels.bins import dwell_edges, elapsed_edges
from journeys.kernels.compiled import is_built
from journeys.tally import count_log, order
from journeys.tally.groups import period_names

N_LOGS = int(os.environ.get("JOURNEYS_SLOW_LOGS", "1500"))
N_SHARES = 6

Table = dict[Any, tuple[int, ...]]

FINDING_CODES = (
    "excluded",
    "missing_customer",
    "missing_time",
    "missing_event",
    "before_log_start",
    "after_as_of",
    "unmapped_event",
    "duplicate",
    "ended_before",
    "after_outcome",
    "before_opener",
    "repeated_outcome",
    "outcome_without_states",
    "first_visit_of_unsure_journey",
    "missing_value",
)


@cache
def bucket_of(customer: int | str) -> int:
    """Return the bucket of one customer."""
    keys, _ = identity.customer_keys(pa.array([customer]))
    return int(identity.bucket_of(keys)[0])


def bin_from(edges: np.ndarray | None) -> Callable[[int], int]:
    """Return the bin of a duration: how many upper edges lie below it."""
    if edges is None:
        return lambda duration: -1  # a log of dates: the slow reading counts days itself
    upper = [int(edge) for edge in edges]
    return lambda duration: sum(edge < duration for edge in upper)


@cache
def bins(
    silence_us: int | None, whole_days: bool, horizons_us: tuple[int, ...]
) -> tuple[Callable[[int], int], Callable[[int], int]]:
    """Return the bins of dwell and of elapsed time, each duration worked out once."""
    dwell = bin_from(dwell_edges(silence_us, whole_days))
    elapsed = bin_from(elapsed_edges(silence_us, whole_days, horizons_us))
    return cache(dwell), cache(elapsed)


def slow_tally(log: RandomLog, memory: int = 1) -> SlowTally:
    """Return the slow reading of a log."""
    settings = dict(log.slow)
    horizons_us = settings.pop("horizons_us", ())
    dwell_bin, elapsed_bin = bins(settings["silence_us"], settings["whole_days"], horizons_us)
    return read_log(
        log.rows, **settings, bucket_of=bucket_of, dwell_bin=dwell_bin, elapsed_bin=elapsed_bin, memory=memory
    )


def source_of(log: RandomLog, chunk: int) -> pd.DataFrame | pa.RecordBatchReader:
    """Return the log as one frame, or as a stream of batches of `chunk` rows."""
    if not chunk:
        return log.frame
    table = pa.Table.from_pandas(log.frame, preserve_index=False)
    return pa.RecordBatchReader.from_batches(table.schema, table.to_batches(max_chunksize=chunk))


def keyed(table: pd.DataFrame, keys: list[str], sums: list[str], by: tuple[Any, ...] = ()) -> Table:
    """Return a table as key → sums, all plain Python values; where journeys are grouped, the group comes last."""
    columns = [table[name].tolist() for name in (*keys, *sums)]
    if by:
        columns.insert(len(keys), groups(table, *by))
        keys = [*keys, "group"]
    rows = list(zip(*columns, strict=True))
    result = {row[: len(keys)]: row[len(keys) :] for row in rows}
    assert len(result) == len(rows), "keys are not unique"
    return result


def groups(table: pd.DataFrame, by: tuple[str, ...], periods: tuple[str, ...]) -> list[tuple[Any, ...]]:
    """Return the group of each row: the values in the order of `by`, then the number of the period."""
    parts = [table[name].tolist() for name in by if name != "period"]
    period = [0] * len(table)
    if "period" in by:
        period = [periods.index(name) for name in table["period"]]
    return list(zip(*parts, period, strict=True))


@dataclass(frozen=True)
class How:
    """The way a log is counted, which must not matter: batches of so many rows, chunks, workers, compiled loops."""

    batch: int = 0
    chunk: int = 1 << 16
    n_workers: int = 2
    compiled: bool = False
    memory: int = 1


COMPILED = st.sampled_from([False, is_built()])
WAYS = st.builds(How, st.integers(0, 7), st.integers(1, 9), st.integers(1, 4), COMPILED, st.integers(1, 3))


def drawn_way(rng: np.random.Generator) -> How:
    """Return a way of counting."""
    batch, chunk, n_workers = (int(rng.integers(low, high)) for low, high in ((0, 8), (1, 10), (1, 5)))
    return How(batch, chunk, n_workers, is_built() and bool(rng.integers(2)), int(rng.integers(1, 4)))


def compare(log: RandomLog, how: How) -> None:
    """Hold every table and every finding of the package against the slow reading."""
    slow = slow_tally(log, how.memory)
    # Batches stay as small as they are given, and so do the pieces that are counted.
    with patch.object(batches, "_FEW_ROWS", 1), patch.object(order, "CHUNK_ROWS", how.chunk):
        tally = count_log(
            source_of(log, how.batch), JourneyRules(**log.rules), order=how.memory, n_workers=how.n_workers,
            compiled=how.compiled,
        )  # fmt: skip
    value = [] if tally.rules.value is None else ["value"]
    by = (tally.rules.by, period_names(tally.rules.splits_us)) if tally.rules.by else ()
    before = [f"previous_{which}" for which in range(1, how.memory)]
    moves = keyed(tally.table("moves"), ["bucket", "state", "next", "bin", "busy", *before], ["n", "dwell"], by)
    assert moves == slow.moves
    before = ["previous", *(f"previous_{which}" for which in range(2, how.memory + 1))]
    assert keyed(tally.table("contexts"), ["bucket", "state", "next", "mature", *before], ["n"], by) == slow.contexts
    entries = keyed(tally.table("entries"), ["bucket", "state", "sure"], ["n"], by)
    assert entries == {key: (n,) for key, n in slow.entries.items()}
    journeys = keyed(
        tally.table("journeys"),
        ["bucket", "state", "outcome", "bin", "sure"],
        ["n", "steps", "steps_squared", "elapsed", *value],
        by,
    )
    assert journeys == slow.journeys
    gaps = keyed(tally.table("gaps"), ["bucket", "outcome", "bin", "back"], ["n", "away"], by)
    assert gaps == slow.gaps
    stages = keyed(tally.table("stages"), ["bucket", "stage", "next", "bin", "sure", "bin_stage"], ["n"], by)
    assert stages == slow.stages
    keys = ["bucket", "state", "outcome", "bin", "sure", "distinct"]
    assert keyed(tally.table("touches"), keys, ["n", "first", "last", *value], by) == slow.touches
    keys = ["bucket", "outcome", "bin", "sure", "set"]
    assert keyed(tally.table("touch_sets"), keys, ["n", *value], by) == slow.touch_sets
    people = tally.table("customers")
    people = people[people["people"] > 0]
    largest = [*value, "largest_value"] if value else []
    customers = keyed(people, ["bucket"], ["people", "j", "jj", "jx", "x", "xx", "largest_events", *largest])
    assert customers == {(bucket,): sums for bucket, sums in slow.customers.items()}
    counted = tally.findings.groupby("code")["n"].sum().to_dict()
    assert {code: counted[code] for code in FINDING_CODES if counted.get(code)} == slow.findings


@pytest.mark.parametrize("share", range(N_SHARES))
def test_seeded_random_logs(share: int) -> None:
    for seed in range(share, N_LOGS, N_SHARES):
        rng = np.random.default_rng([20240927, seed])
        log = random_log(rng)
        how = drawn_way(rng)
        try:
            compare(log, how)
        except AssertionError as fault:
            pytest.fail(f"seed {seed}, {how}, rules {log.rules}, rows {log.rows}\n{fault}")


def test_busy_customers() -> None:
    n_busy = 0
    for seed in range(12):
        log = random_log(np.random.default_rng([77, seed]), n_rows=3_500)
        n_busy += any(busy for *_, busy in slow_tally(log).moves)
        compare(log, How(0 if seed % 2 else 170, 50, 2, is_built() and seed % 4 > 1))
    assert n_busy >= 4


@settings(
    max_examples=150,
    deadline=None,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large],
)
@given(log=logs(), how=WAYS)
def test_drawn_logs(log: RandomLog, how: How) -> None:
    compare(log, how)
