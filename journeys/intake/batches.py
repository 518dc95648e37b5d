"""Record batches between the gate and its readers: are the columns there, are the sizes handy."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Iterator, Sequence

import pyarrow as pa

from journeys.errors import LogError
from journeys.intake.read_parquet import ROWS_AT_ONCE

_FEW_ROWS = 1 << 16


def check_columns(there: Sequence[str], wanted: Sequence[str], kind: str) -> None:
    """Raise if a wanted column is not there, or is there twice.

    Parameters
    ----------
    there, wanted : sequence of str
    kind : str
        What has the columns, for the message.

    Raises
    ------
    LogError
    """
    for name in wanted:
        if name not in there:
            close = difflib.get_close_matches(name, there, n=3, cutoff=0.5)
            listed = [repr(each) for each in [*close, *(each for each in there if each not in close)]]
            more = f" and {len(listed) - 20} more" if len(listed) > 20 else ""
            names = ", ".join(listed[:20]) or "none"
            raise LogError(f"{kind} has no column {name!r}; there are {names}{more}")
        if (n := list(there).count(name)) > 1:
            raise LogError(f"{kind} has {n} columns called {name!r}; rename all but one")


def resized(batches: Iterable[pa.RecordBatch]) -> Iterator[pa.RecordBatch]:
    """Batches of a handy size: large ones sliced, small neighbours of one schema put together.

    Parameters
    ----------
    batches : iterable of pyarrow.RecordBatch

    Yields
    ------
    pyarrow.RecordBatch
        With at least one row and at most 2**19.

    Examples
    --------
    >>> few = [pa.record_batch({"who": [number]}) for number in range(3)]
    >>> [batch.num_rows for batch in resized(few)]
    [3]
    """
    small: list[pa.RecordBatch] = []
    n_small = 0
    for batch in batches:
        full = batch.num_rows >= _FEW_ROWS or n_small >= _FEW_ROWS
        if small and (full or batch.schema != small[0].schema):
            yield from _together(small)
            small, n_small = [], 0
        if batch.num_rows >= _FEW_ROWS:
            for start in range(0, batch.num_rows, ROWS_AT_ONCE):
                yield batch.slice(start, ROWS_AT_ONCE)
        elif batch.num_rows:
            small.append(batch)
            n_small += batch.num_rows
    yield from _together(small)


def _together(small: list[pa.RecordBatch]) -> list[pa.RecordBatch]:
    """One batch of several, or the same ones where Arrow cannot join their dictionaries."""
    if len(small) < 2:
        return small
    try:
        return [pa.concat_batches(small)]
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError):
        return small
