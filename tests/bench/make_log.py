"""An invented log of any size for the benchmarks: rows in time order, grouped by customer, or shuffled.

    python tests/bench/make_log.py --rows 20000000 --customers 1000000 --ids integer --out log.parquet

Customers are drawn evenly, events from twelve states and two outcomes; written row group by row group, so that
memory stays small at any size.
"""

from __future__ import annotations

import argparse
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

DAY_US = 86_400_000_000
STATES = [f"state_{i:02d}" for i in range(12)]
OUTCOMES = ["joined", "declined"]
GROUP_ROWS = 1_000_000


def ids(customers: np.ndarray, kind: str) -> pa.Array:
    """Return customer ids: whole numbers, or 16 characters of text."""
    if kind == "integer":
        return pa.array(customers.astype(np.int64) * 7919 + 13)
    scattered = customers.astype(np.uint64) * np.uint64(0x9E3779B97F4A7C15)
    digits = np.frombuffer(b"0123456789abcdef", np.uint8)
    nibbles = (scattered[:, None] >> np.arange(60, -1, -4, dtype=np.uint64)) & np.uint64(15)
    data = digits[nibbles].tobytes()
    offsets = np.arange(len(customers) + 1, dtype=np.int32) * 16
    return pa.StringArray.from_buffers(len(customers), pa.py_buffer(offsets), pa.py_buffer(data))


def batch(
    rng: np.random.Generator, n: int, first_us: int, last_us: int, customers: tuple[int, int], kind: str
) -> pa.Table:
    """Return `n` rows in time order between two instants, of the customers numbered from one to another."""
    times = np.sort(rng.integers(first_us, last_us, n))
    who = rng.integers(*customers, n)
    shares = np.concatenate([np.full(len(STATES), 0.94 / len(STATES)), [0.04, 0.02]])
    events = rng.choice(len(shares), n, p=shares).astype(np.int32)
    names = pa.DictionaryArray.from_arrays(pa.array(events), pa.array(STATES + OUTCOMES))
    return pa.table({"customer": ids(who, kind), "time": pa.array(times, pa.timestamp("us", "UTC")), "event": names})


def write_log(
    path: Path, rows: int, customers: int, kind: str, order: str = "time", seed: int = 1, days: int = 240
) -> None:
    """Write a log of `rows` rows.

    order: "time" (one stream in time order), "customer" (grouped by customer, each in time order) or "none"
    (blocks of time in random order).
    """
    rng = np.random.default_rng(seed)
    start = int(np.datetime64("2025-01-01", "us").astype(np.int64))
    span = days * DAY_US
    blocks = max(1, round(rows / GROUP_ROWS))
    cuts = np.linspace(0, rows, blocks + 1).astype(np.int64)
    edges = start + (np.linspace(0, 1, blocks + 1) * span).astype(np.int64)
    who = np.linspace(0, customers, blocks + 1).astype(np.int64)
    writer: pq.ParquetWriter | None = None
    for block in rng.permutation(blocks) if order == "none" else range(blocks):
        n = int(cuts[block + 1] - cuts[block])
        if order == "customer":
            table = batch(rng, n, start, start + span, (int(who[block]), int(who[block + 1])), kind)
            table = table.sort_by([("customer", "ascending"), ("time", "ascending")])
        else:
            table = batch(rng, n, int(edges[block]), int(edges[block + 1]), (0, customers), kind)
        writer = writer or pq.ParquetWriter(path, table.schema, compression="snappy")
        writer.write_table(table)
    if writer is not None:
        writer.close()


def main() -> None:
    """Read the options and write the log."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--rows", type=int, default=20_000_000)
    parser.add_argument("--customers", type=int, default=1_000_000)
    parser.add_argument("--ids", choices=("integer", "text"), default="integer")
    parser.add_argument("--order", choices=("time", "customer", "none"), default="time")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, required=True)
    options = parser.parse_args()
    write_log(options.out, options.rows, options.customers, options.ids, options.order, options.seed)


if __name__ == "__main__":
    main()
