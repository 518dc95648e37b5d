"""What is carried from night to night, as bytes and back: tables of whole numbers, one Arrow stream after another."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import fields
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.errors import StoreError
from journeys.intake.arrays import from_numpy
from journeys.intake.rows import Rows
from journeys.kernels.records import Carried
from journeys.tally.accumulate import Keyed
from journeys.tally.worker import Kept

Table = dict[str, NDArray[Any]]

_NAME, _KINDS = b"table", b"kinds"
_CARRIED, _ROWS = "carried", "rows"
_SUM, _MORE = "sum ", "more "
# Kinds of numbers that a table may have, by the names that `_packed` gives them.
_KINDS_OF_NUMBER = {np.dtype(kind).str: np.dtype(kind) for kind in ("?", *np.typecodes["AllInteger"])}


def kept_bytes(kept: Kept) -> pa.Buffer:
    """Return what is kept of a part as bytes."""
    tables: dict[str, Table] = {_CARRIED: {name: getattr(kept.carried, name) for name in kept.carried.names}}
    for name, table in kept.tables.items():
        tables[name] = {
            "key": table.key,
            **{_SUM + column: values for column, values in table.sums.items()},
            **{_MORE + column: values for column, values in table.more.items()},
        }
    return _packed(tables)


def kept_from(data: bytes) -> Kept:
    """Return what was kept of a part; the customers' records are a copy that can be changed.

    Raises
    ------
    StoreError
        If the bytes hold something else.
    """
    with _as_written():
        tables = _unpacked(data)
        known = {field.name for field in fields(Carried)}
        columns = tables.pop(_CARRIED)
        if not set(columns) <= known:
            msg = f"the ledger's records have columns that this program does not know: {sorted(set(columns) - known)}"
            raise StoreError(msg)
        keyed = {name: Keyed(table["key"], _those(table, _SUM), _those(table, _MORE)) for name, table in tables.items()}
        own = {name: values if values.flags.writeable else values.copy() for name, values in columns.items()}
        return Kept(Carried(**own), keyed)


def rows_bytes(rows: Rows) -> pa.Buffer:
    """Return rows that wait as bytes."""
    return _packed({_ROWS: {name: values for name, values in rows.columns().items() if values is not None}})


def rows_from(data: bytes) -> Rows:
    """Return rows that have waited.

    Raises
    ------
    StoreError
        If the bytes hold something else.
    """
    with _as_written():
        return Rows(**_unpacked(data)[_ROWS])


@contextmanager
def _as_written() -> Iterator[None]:
    """Raise a StoreError where bytes are not those of tables, or not of the tables wanted."""
    try:
        yield
    except (pa.ArrowException, OSError, LookupError, TypeError, ValueError, AttributeError, StopIteration):
        # Arrow's own words may quote what it read.
        msg = (
            "a file of the ledger holds something else than records and sums, though its checksum fits; put the ledger "
            "back from a copy, or count all inputs anew with --rebuild"
        )
        raise StoreError(msg) from None


def _those(table: Table, prefix: str) -> Table:
    return {name.removeprefix(prefix): values for name, values in table.items() if name.startswith(prefix)}


def _packed(tables: Mapping[str, Table]) -> pa.Buffer:
    """Return tables as bytes, each column in the fewest bytes that hold it."""
    sink = pa.BufferOutputStream()
    for name, table in tables.items():
        kinds = {column: values.dtype.str for column, values in table.items()}
        narrow = {column: _narrow(values) for column, values in table.items()}
        arrays = [from_numpy(values, pa.from_numpy_dtype(values.dtype)) for values in narrow.values()]
        about = {_NAME: name, _KINDS: json.dumps(kinds)}
        batch = pa.record_batch(arrays, names=list(narrow)).replace_schema_metadata(about)
        with pa.ipc.new_stream(sink, batch.schema) as writer:
            writer.write_batch(batch)
    return sink.getvalue()


def _narrow(values: NDArray[Any]) -> NDArray[Any]:
    """Return whole numbers in the fewest bytes that hold them; flags as whole bytes, so that no bits are copied."""
    if values.dtype == np.bool_:
        return values.view(np.uint8)
    least, most = (0, 0) if not len(values) else (int(values.min()), int(values.max()))
    kinds = (np.uint8, np.uint16, np.uint32) if least >= 0 else (np.int8, np.int16, np.int32)
    for kind in kinds:
        if np.iinfo(kind).min <= least and most <= np.iinfo(kind).max:
            return values.astype(kind, copy=False)
    return values


def _unpacked(data: bytes) -> dict[str, Table]:
    """Return the tables; columns may lie in `data` itself, and then cannot be changed."""
    source, tables = pa.BufferReader(data), {}
    while source.tell() < len(data):
        with pa.ipc.open_stream(source) as reader:
            name, kinds = reader.schema.metadata[_NAME].decode(), json.loads(reader.schema.metadata[_KINDS])
            batch = reader.read_next_batch()
            batch.validate(full=True)
            tables[name] = {
                column: array.to_numpy(zero_copy_only=True).astype(_KINDS_OF_NUMBER[kinds[column]], copy=False)
                for column, array in zip(batch.schema.names, batch.columns, strict=True)
            }
            # The end of one stream is where the next begins.
            for _ in reader:
                pass
    return tables
