"""What is carried from night to night, as bytes and back: tables of whole numbers, one Arrow stream after another."""

from __future__ import annotations

import json
from collections.abc import Mapping
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
from journeys.tally.passes import Kept

Table = dict[str, NDArray[Any]]

_NAME, _FLAGS = b"table", b"flags"
_CARRIED, _ROWS = "carried", "rows"
_SUM, _MORE = "sum ", "more "


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
    tables = _unpacked(data)
    known = {field.name for field in fields(Carried)}
    columns = tables.pop(_CARRIED)
    if not set(columns) <= known:
        msg = f"the ledger's records have columns that this program does not know: {sorted(set(columns) - known)}"
        raise StoreError(msg)
    keyed = {name: Keyed(table["key"], _those(table, _SUM), _those(table, _MORE)) for name, table in tables.items()}
    return Kept(Carried(**{name: values.copy() for name, values in columns.items()}), keyed)


def rows_bytes(rows: Rows) -> pa.Buffer:
    """Return rows that wait as bytes."""
    return _packed({_ROWS: {name: values for name, values in rows.columns().items() if values is not None}})


def rows_from(data: bytes) -> Rows:
    """Return rows that have waited."""
    return Rows(**_unpacked(data)[_ROWS])


def _those(table: Table, prefix: str) -> Table:
    return {name.removeprefix(prefix): values for name, values in table.items() if name.startswith(prefix)}


def _packed(tables: Mapping[str, Table]) -> pa.Buffer:
    sink = pa.BufferOutputStream()
    for name, table in tables.items():
        # Flags as whole bytes: no copying of bits on the way in or out.
        flags = [key for key, values in table.items() if values.dtype == np.bool_]
        plain = {key: values.view(np.uint8) if values.dtype == np.bool_ else values for key, values in table.items()}
        arrays = [from_numpy(values, pa.from_numpy_dtype(values.dtype)) for values in plain.values()]
        batch = pa.record_batch(arrays, names=list(plain)).replace_schema_metadata(
            {_NAME: name, _FLAGS: json.dumps(flags)}
        )
        with pa.ipc.new_stream(sink, batch.schema) as writer:
            writer.write_batch(batch)
    return sink.getvalue()


def _unpacked(data: bytes) -> dict[str, Table]:
    """Return the tables; their columns lie in `data` itself and cannot be changed."""
    source, tables = pa.BufferReader(data), {}
    while source.tell() < len(data):
        with pa.ipc.open_stream(source) as reader:
            name, flags = reader.schema.metadata[_NAME].decode(), json.loads(reader.schema.metadata[_FLAGS])
            batch = reader.read_next_batch()
            tables[name] = {
                column: values.view(np.bool_) if column in flags else values
                for column, values in zip(batch.schema.names, (_numbers(one) for one in batch.columns), strict=True)
            }
            _to_the_end(reader)
    return tables


def _numbers(array: pa.Array) -> NDArray[Any]:
    return array.to_numpy(zero_copy_only=True)  # type: ignore[no-any-return]


def _to_the_end(reader: Any) -> None:
    for _ in reader:
        pass
