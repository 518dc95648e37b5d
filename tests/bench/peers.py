"""The questions of the tally put to other engines, each as a process of its own with two threads.

    python tests/bench/peers.py duckdb bare LOG

"bare" counts every event with the one that follows it for the same customer, and sums the time between: the least
that any reading of journeys needs. Rows may stand in any order. "table" makes the very table of moves that the tally
keeps, its lapses and open ends included, and writes it; "enum" is "bare" with the events made numbers first;
"ordered" trusts the file to be in time order, which "bare" does not; "read" only reads the three columns.

Prints one line of JSON: groups, seconds_inside (imports excluded), and n, dwell_us and a digest of the answer, over
all pairs and over those that start from a state. Of several ways to write a question the fastest found is kept.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import math
import os
import sys
import tempfile
import time
from collections.abc import Callable, Iterable
from pathlib import Path

THREADS = 2
COLUMNS = ("customer", "time", "event")
OUTCOMES = ("joined", "declined")
SILENCE_US = 30 * 86_400_000_000
N_BUCKETS = 200
# As the tally bins: 219 steps of 5 % from silence/43,200 to the silence.
FIRST_US, STEPS = SILENCE_US / 43_200, 219
LOG_RATIO = math.log(43_200) / STEPS

Pair = tuple[str, str, int, int]
Answer = Iterable[Pair]


def digest(pairs: Answer) -> dict[str, int | str]:
    """Return how many, how long and a digest of pairs (event, next, n, dwell in microseconds)."""
    known = sorted((str(event), str(following), int(n), int(us)) for event, following, n, us in pairs)
    text = "\n".join(f"{event} {following} {n} {us}" for event, following, n, us in known)
    return {
        "groups": len(known),
        "n": sum(pair[2] for pair in known),
        "dwell_us": sum(pair[3] for pair in known),
        "digest": hashlib.blake2b(text.encode(), digest_size=8).hexdigest(),
    }


def told(pairs: Answer) -> dict[str, dict[str, int | str]]:
    """Return the digest of all pairs, and of those that are moves: they start from a state."""
    known = list(pairs)
    return {"pairs": digest(known), "moves": digest(pair for pair in known if pair[0] not in OUTCOMES)}


def duckdb_bare(log: str, event: str = "event", kinds: bool = False) -> Answer:
    """Pairs by `lead` over each customer's rows in order of time."""
    import duckdb

    with duckdb.connect() as con:
        con.execute(f"set threads = {THREADS}")
        if kinds:
            con.execute(f"create type kind as enum (select distinct event from read_parquet('{log}') order by event)")
        return con.execute(
            f"""select event, next, count(*), sum(until - epoch_us(time))
            from (select time, event, lead(event) over rows_of as next, epoch_us(lead(time) over rows_of) as until
                  from (select customer, time, {event} as event from read_parquet('{log}'))
                  window rows_of as (partition by customer order by time))
            where next is not null group by all"""
        ).fetchall()


def duckdb_enum(log: str) -> Answer:
    """Pairs, events as numbers: less memory, for one more reading of that column."""
    return duckdb_bare(log, "event::kind", kinds=True)


def duckdb_table(log: str) -> Answer:
    """The moves table of the tally, silent moves as lapses, ends of the log as lapsed or open."""
    import duckdb

    outcomes = ", ".join(f"'{name}'" for name in OUTCOMES)
    with tempfile.TemporaryDirectory() as folder, duckdb.connect() as con:
        moves = Path(folder, "moves.parquet")
        con.execute(f"set threads = {THREADS}")
        con.execute(
            f"""copy (
                with followed as (
                    select customer, event as state, lead(event) over rows_of as next, epoch_us(time) as t,
                           epoch_us(lead(time) over rows_of) as until
                    from read_parquet('{log}') window rows_of as (partition by customer order by time)),
                ended as (select epoch_us(max(time)) as as_of from read_parquet('{log}')),
                moves as (
                    select customer, state,
                           case when next is null then as_of - t else until - t end as us,
                           case when next is null then if(us >= {SILENCE_US}, 'lapsed', 'open')
                                when us > {SILENCE_US} then 'lapsed' else next end as next
                    from followed, ended where state not in ({outcomes}))
                select (hash(customer) % {N_BUCKETS})::utinyint as bucket, state, next,
                       least({STEPS}, greatest(0, ceil(ln(greatest(us, 1) / {FIRST_US}) / {LOG_RATIO})))::utinyint
                       as bin,
                       count(*) as n, sum(least(us, {SILENCE_US}))::bigint as dwell_us
                from moves group by all
            ) to '{moves}' (format parquet)"""
        )
        return con.execute(
            f"select state, next, sum(n), sum(dwell_us), count(*) from read_parquet('{moves}') group by all"
        ).fetchall()


def polars_bare(log: str, in_order: bool = False) -> Answer:
    """Pairs by `shift` over customers, after a sort by time; streaming, the fastest of what polars offers."""
    os.environ["POLARS_MAX_THREADS"] = str(THREADS)
    import polars as pl

    rows = pl.scan_parquet(log).select(*COLUMNS)
    after = {name: pl.col(name).shift(-1) for name in COLUMNS}
    if in_order and rows.collect_schema()["customer"].is_integer():
        # Whole numbers are sorted faster than they are grouped.
        rows = rows.sort("customer", maintain_order=True)
        same = after["customer"] == pl.col("customer")
        rows = rows.select("event", next=after["event"], gap=after["time"] - pl.col("time"), same=same).filter("same")
    else:
        rows = rows if in_order else rows.sort("time")
        after = {name: shifted.over("customer") for name, shifted in after.items()}
        rows = rows.select("event", next=after["event"], gap=after["time"] - pl.col("time")).drop_nulls()
    pairs = rows.group_by("event", "next").agg(n=pl.len(), us=pl.col("gap").dt.total_microseconds().sum())
    return pairs.collect(engine="streaming").rows()


def polars_ordered(log: str) -> Answer:
    """Pairs, trusting the file to be in time order."""
    return polars_bare(log, in_order=True)


def pandas_bare(log: str) -> Answer:
    """Pairs by `groupby.shift`, after a sort by time; faster than sorting by customer."""
    import pandas as pd
    import pyarrow as pa
    import pyarrow.parquet as pq

    pa.set_cpu_count(THREADS)
    frame = pq.read_table(log, columns=list(COLUMNS), read_dictionary=["event"]).to_pandas()
    frame = frame.sort_values("time", kind="stable")
    after = frame.groupby("customer", sort=False)[["event", "time"]].shift(-1)
    there = after["time"].notna()
    gap = (after["time"] - frame["time"])[there].astype("timedelta64[us]").astype("int64")
    pairs = pd.DataFrame({"event": frame["event"][there], "next": after["event"][there], "us": gap})
    sums = pairs.groupby(["event", "next"], observed=True)["us"].agg(["size", "sum"])
    return [(*names, n, us) for names, n, us in sums.itertuples()]


def pyarrow_read(log: str) -> Answer:
    """Nothing but the reading, piece by piece."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    pa.set_cpu_count(THREADS)
    rows = 0
    with pq.ParquetFile(log, read_dictionary=["event"]) as parquet:
        for number in range(parquet.metadata.num_row_groups):
            rows += parquet.read_row_group(number, columns=list(COLUMNS)).num_rows
    return [("read", "", rows, 0)]


QUESTIONS: dict[tuple[str, str], Callable[[str], Answer]] = {
    ("duckdb", "bare"): duckdb_bare,
    ("duckdb", "enum"): duckdb_enum,
    ("duckdb", "table"): duckdb_table,
    ("polars", "bare"): polars_bare,
    ("polars", "ordered"): polars_ordered,
    ("pandas", "bare"): pandas_bare,
    ("pyarrow", "read"): pyarrow_read,
}


def main() -> int:
    """Answer one question and print what came of it."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("peer", choices=sorted({peer for peer, _ in QUESTIONS}))
    parser.add_argument("question", choices=sorted({question for _, question in QUESTIONS}))
    parser.add_argument("log", type=Path)
    asked = parser.parse_args()
    if (asked.peer, asked.question) not in QUESTIONS:
        parser.error(f"{asked.peer} is not asked {asked.question!r}")
    os.environ["POLARS_MAX_THREADS"] = str(THREADS)
    __import__(asked.peer)
    began = time.perf_counter()
    answer = list(QUESTIONS[asked.peer, asked.question](str(asked.log)))
    seconds = time.perf_counter() - began
    pairs = [(row[0], row[1], row[2], row[3]) for row in answer]
    # The table has finer keys than pairs: its own last column says how many rows each pair has.
    rows = sum(row[4] if len(row) > 4 else 1 for row in answer)
    print(json.dumps({"rows": rows, "seconds_inside": round(seconds, 3), **told(pairs)}))
    return 0


if __name__ == "__main__":
    sys.exit(main())
