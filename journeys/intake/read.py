"""The one gate for event logs: whatever holds the rows, batches of Arrow columns come out."""

from __future__ import annotations

import itertools
import os
import sys
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

import pyarrow as pa

from journeys.errors import LogError
from journeys.intake.database import DatabaseLog
from journeys.intake.read_files import find_files
from journeys.intake.sources import FileSource, LogSource, PandasSource, StreamSource, TableSource

__all__ = ["LogSource", "open_log"]

_WANTED = (
    "wanted the path of a Parquet, CSV or Arrow file or of a folder of them, a data frame, an Arrow table or "
    "reader, an iterator of record batches, or a DatabaseLog"
)
# What database drivers call the method that gives a result as a reader of record batches.
_CURSOR_METHODS = ("fetch_record_batch", "to_arrow_reader")


def open_log(
    source: Any, columns: Sequence[str], *, text: Sequence[str] = (), ids: Sequence[str] = ()
) -> LogSource:
    """Log behind whatever the caller holds.

    Parameters
    ----------
    source : path, sequence of paths, data frame, Arrow data, iterator of record batches, cursor or DatabaseLog
        Parquet, CSV or Arrow files or a folder of them; a TOML file with a table `[database]`; pandas frame;
        anything with `__arrow_c_stream__` (polars frames, duckdb relations, Arrow tables and readers); an
        iterator of record batches; an object with `fetch_record_batch`.
    columns : sequence of str
        Columns it must have.
    text : sequence of str
        Those of them that hold names: a CSV file is not to guess that "007" is a number there.
    ids : sequence of str
        Those that hold names which may be whole numbers, such as the customer's id: in a CSV file they are
        text all the same where they are written with leading zeros.

    Returns
    -------
    LogSource

    Raises
    ------
    TypeError
        If it is nothing of the kind.
    LogError
        If it cannot be read or lacks a column.

    Examples
    --------
    >>> import pandas as pd
    >>> log = open_log(pd.DataFrame({"who": [1, 2], "what": ["visit", "visit"], "notes": ["", ""]}), ["who"])
    >>> log.describe(), [batch.to_pydict() for batch in log.batches(["who"])]
    ('pandas frame, 2 rows', [{'who': [1, 2]}])
    """
    log = _source(source, tuple(text), tuple(ids))
    log.check(columns)
    log.needed = tuple(columns)
    return log


def _source(source: Any, text: tuple[str, ...], ids: tuple[str, ...]) -> LogSource:
    """Pick the adapter for what the caller holds."""
    if isinstance(source, LogSource):
        return source
    if isinstance(source, str | os.PathLike):
        if Path(source).suffix == ".toml":
            return DatabaseLog.from_toml(source)
        return FileSource(find_files(source), text, ids, Path(source).name)
    if _all_are(source, str | os.PathLike):
        return FileSource(find_files(source), text, ids, Path(source[0]).name)
    if _is_pandas_frame(source):
        return PandasSource(source)
    if isinstance(source, pa.RecordBatch):
        return TableSource(pa.Table.from_batches([source]), "Arrow record batch")
    if isinstance(source, pa.Table):
        return TableSource(source, "Arrow table")
    return _stream(source)


def _is_pandas_frame(source: Any) -> bool:
    """Return whether it is a pandas frame; where pandas was never imported, nothing is."""
    pandas = sys.modules.get("pandas")
    return pandas is not None and isinstance(source, pandas.DataFrame)


def _stream(source: Any) -> LogSource:
    """Pick the adapter for what gives batches."""
    module, name = type(source).__module__.partition(".")[0], type(source).__name__
    if name == "LazyFrame":
        raise TypeError(f"got a {module} LazyFrame; call .collect() on it, or .sink_parquet(path)")
    unnamed = f"got a {name}, which has no rows with named columns; {_WANTED}"
    if module == "pandas":
        raise TypeError(unnamed)
    if hasattr(source, "__arrow_c_stream__"):
        try:
            reader = pa.RecordBatchReader.from_stream(source)
        except (pa.ArrowInvalid, pa.ArrowTypeError, TypeError):
            raise TypeError(unnamed) from None
        if module == "polars":
            return TableSource(reader.read_all(), "polars frame")
        return StreamSource(reader.schema, reader, f"{module} {name}")
    for method in _CURSOR_METHODS:
        if hasattr(source, method):
            reader = getattr(source, method)()
            return StreamSource(reader.schema, reader, f"{module} {name}")
    if isinstance(source, Iterable) and not isinstance(source, str | bytes | dict):
        return _batch_iterator(source, name)
    raise TypeError(f"got a {name}; {_WANTED}" + _hint(source))


def _all_are(source: Any, kind: Any) -> bool:
    """Return whether it is a list of at least one thing, all of a kind."""
    return isinstance(source, list | tuple) and bool(source) and all(isinstance(one, kind) for one in source)


def _batch_iterator(source: Any, name: str) -> LogSource:
    """Adapter for an iterator, whose first item tells the columns."""
    if _all_are(source, pa.RecordBatch):
        if all(batch.schema == source[0].schema for batch in source):
            return TableSource(pa.Table.from_batches(source), "list of record batches")
        return StreamSource(source[0].schema, iter(source), "list of record batches")
    batches = iter(source)
    first = next(batches, None)
    if first is None:
        raise LogError(f"the {name} is empty; wanted at least one record batch, which may have no rows")
    if not isinstance(first, pa.RecordBatch):
        raise TypeError(f"got a {name} of {type(first).__name__}; {_WANTED}" + _hint(source))
    return StreamSource(first.schema, itertools.chain([first], batches), f"{name} of record batches")


def _hint(source: Any) -> str:
    """Return what to do with rows in plain Python."""
    return "; make it a frame: pandas.DataFrame(rows)" if isinstance(source, dict | list | tuple) else ""
