"""A tally on disk: one Parquet file, its head (format, rules, span, checksum) in the file's metadata."""

from __future__ import annotations

import json
import os
from concurrent.futures import ThreadPoolExecutor
from hashlib import blake2b
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from journeys.errors import JourneysError, StoreError
from journeys.files import written_whole
from journeys.intake.arrays import from_numpy, from_texts, numbers
from journeys.intake.faults import UNREADABLE
from journeys.intake.findings import Findings
from journeys.intake.rules import JourneyRules
from journeys.tally.tables import NARROW, TABLES, customer_sums, parts_of, sums_of
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    from journeys.tally.accumulate import Columns

FORMAT_VERSION = 5
HEAD = b"journeys"
# Rows of a table written at once.
_ROWS_AT_ONCE = 1 << 18


def columns_of(table: str, rules: JourneyRules, order: int) -> tuple[str, ...]:
    """Return the columns of a table in their order."""
    valued = rules.value is not None
    if table == "customers":
        return ("bucket", *customer_sums(valued=valued))
    return (*parts_of(table, grouped=bool(rules.by), order=order), *sums_of(table, valued=valued))


def save(tally: Tally, path: str | os.PathLike[str], more: dict[bytes, bytes] | None = None) -> None:
    """Write a tally to one Parquet file, whole or not at all.

    Parameters
    ----------
    tally : Tally
        What to keep.
    path : str or path-like
        Where.
    more : dict of bytes to bytes, optional
        Further entries of the file's metadata.

    Notes
    -----
    All tables stand in one file. A row of it is a piece of a table, the column `table` telling which, and every other
    column has a list there with a value for each row of the piece; where a table lacks a column there is no list.
    """
    with written_whole(path) as part:
        _write(tally, part, more or {})


def to_bytes(tally: Tally) -> bytes:
    """Return what `save` would write to a file.

    Parameters
    ----------
    tally : Tally

    Returns
    -------
    bytes
    """
    sink = pa.BufferOutputStream()
    _write(tally, sink, {})
    return sink.getvalue().to_pybytes()  # type: ignore[no-any-return]


def _write(tally: Tally, sink: Any, more: dict[bytes, bytes]) -> None:
    """Write head and tables."""
    head = {
        "format_version": FORMAT_VERSION,
        "rules": tally.rules.to_dict(),
        "states": tally.states,
        "log_start_us": tally.log_start_us,
        "as_of_us": tally.as_of_us,
        "whole_days": tally.whole_days,
        "n_rows": tally.n_rows,
        "groups": tally.groups,
        "part": tally.part,
        "order": tally.order,
        "id_key": tally.id_key,
        "findings": tally.record.to_dict(),
    }
    schema = _schema(tally.rules, tally.order)
    # The checksum is taken while the tables are written: the head goes into the end of the file. Arrow's own copy of
    # the schema is left out, for it would hide what is added there.
    with (
        ThreadPoolExecutor(1) as other,
        pq.ParquetWriter(sink, schema, store_schema=False, write_statistics=False, **_encodings(schema)) as writer,
    ):
        checksum = other.submit(_checksum, tally)
        for name in TABLES:
            held = getattr(tally, name)
            for begin in range(0, max(len(held["bucket"]), 1), _ROWS_AT_ONCE):
                piece = {column: values[begin : begin + _ROWS_AT_ONCE] for column, values in held.items()}
                writer.write_table(_as_arrow(name, piece, schema))
        head["checksum"] = checksum.result()
        writer.add_key_value_metadata({HEAD: json.dumps(head).encode(), **more})


def _schema(rules: JourneyRules, order: int) -> pa.Schema:
    """Return the columns of all tables, each with the type that is enough for it."""
    every = dict.fromkeys(column for table in TABLES for column in columns_of(table, rules, order))
    narrow = {name: pa.from_numpy_dtype(kind) for name, kind in NARROW.items()}
    # Without a null in any list, none has to be looked for.
    kinds = {name: pa.field("element", narrow.get(name, pa.int64()), nullable=False) for name in every}
    return pa.schema([("table", pa.string()), *((name, pa.list_(kind)) for name, kind in kinds.items())])


def _encodings(schema: pa.Schema) -> dict[str, Any]:
    """Return how each column is written: in what takes least time, which also takes little room."""
    paths = {field.name: f"{field.name}.list.element" for field in schema if field.name != "table"}
    # Dictionaries pay where a value runs on for many rows. Numbers are split into their first, second, … bytes, most of
    # which are all the same; a flag is a single bit anyway.
    runs = ("bucket", "state")
    flags = [field.name for field in schema if field.name in paths and pa.types.is_boolean(field.type.value_type)]
    split = [path for name, path in paths.items() if name not in runs and name not in flags]
    return {
        "compression": "zstd",
        "compression_level": 1,
        "use_dictionary": ["table", *(paths[name] for name in runs)],
        "column_encoding": dict.fromkeys(split, "BYTE_STREAM_SPLIT"),
    }


def _as_arrow(name: str, held: Columns, schema: pa.Schema) -> pa.Table:
    """Return a piece of one table of the tally as a row of the file."""
    ends = pa.py_buffer(np.array([0, len(held["bucket"])], np.int32))
    columns: dict[str, pa.Array] = {"table": from_texts([name])}
    for field in schema:
        if field.name in held:
            values = from_numpy(held[field.name], field.type.value_type)
            columns[field.name] = pa.Array.from_buffers(field.type, 1, [None, ends], children=[values])
        elif field.name != "table":
            columns[field.name] = pa.nulls(1, field.type)
    return pa.table(columns, schema=schema)


def is_tally(path: str | os.PathLike[str]) -> bool:
    """Tell whether a path is a saved tally (as against an event log)."""
    try:
        return Path(path).is_file() and HEAD in (pq.read_schema(path).metadata or {})
    except UNREADABLE:
        return False


def load(path: str | os.PathLike[str]) -> Tally:
    """Read a saved tally.

    Parameters
    ----------
    path : str or path-like
        A file that `save` has written.

    Returns
    -------
    Tally
        Equal to the one saved.

    Raises
    ------
    StoreError
        If the file is missing, not a tally, of another format version, or damaged.
    """
    return _read(path, repr(os.fspath(path)))


def from_bytes(data: bytes) -> Tally:
    """Return the tally that `to_bytes` made bytes of.

    Parameters
    ----------
    data : bytes

    Returns
    -------
    Tally

    Raises
    ------
    StoreError
        As `load`.
    """
    return _read(pa.BufferReader(data), "what a part of the log came back as")


def _read(source: Any, name: str) -> Tally:
    """Read head and tables."""
    try:
        table = pq.read_table(source)
        head = read_head(table.schema, HEAD)
    except FileNotFoundError:
        msg = f"no tally at {name}; wanted a file written by tally.save"
        raise StoreError(msg) from None
    except UNREADABLE:
        msg = (
            f"{name} is not a whole tally; wanted a file written by tally.save: make it again from the log"
        )
        raise StoreError(msg) from None
    if head.get("format_version") != FORMAT_VERSION:
        msg = (
            f"{name} has format version {head.get('format_version')}, this program reads "
            f"{FORMAT_VERSION}; count the log again"
        )
        raise StoreError(msg)
    try:
        tally = _from_parts(table, head)
        whole = _checksum(tally) == head["checksum"]
    except (*UNREADABLE, LookupError, TypeError, AttributeError, JourneysError):
        whole = False
    if not whole:
        msg = f"{name} is damaged (its checksum does not fit); count the log again"
        raise StoreError(msg)
    return tally


def read_head(schema: pa.Schema, key: bytes) -> dict[str, Any]:
    """Return the head of a file, which stands in its metadata.

    Raises
    ------
    ValueError
        If it is not there, or is not a table of JSON.
    """
    try:
        head = json.loads((schema.metadata or {})[key])
    except (KeyError, RecursionError):
        head = None
    if not isinstance(head, dict):
        raise ValueError
    return head


def _checksum(tally: Tally) -> str:
    """Return the digest of all that is in the file: the tally's own leaves out the findings."""
    findings = json.dumps(tally.record.to_dict(), sort_keys=True)
    return blake2b((tally.checksum + findings).encode(), digest_size=16).hexdigest()


def _from_parts(table: pa.Table, head: dict[str, Any]) -> Tally:
    held: dict[str, Columns] = {}
    rules = JourneyRules.from_dict(head["rules"])
    names = table["table"].to_pylist()
    for name in TABLES:
        pieces = [table.slice(row, 1) for row, of in enumerate(names) if of == name]
        narrow = {} if name == "customers" else NARROW
        held[name] = {
            column: _joined(pieces, column).astype(narrow.get(column, np.int64), copy=False)
            for column in columns_of(name, rules, head["order"])
        }
    return Tally(
        rules=rules,
        groups=tuple(tuple(group) for group in head["groups"]),
        part=head["part"],
        order=head["order"],
        id_key=head["id_key"],
        states=tuple(head["states"]),
        log_start_us=head["log_start_us"],
        as_of_us=head["as_of_us"],
        whole_days=head["whole_days"],
        n_rows=head["n_rows"],
        record=Findings.from_dict(head["findings"]),
        **held,
    )


def _joined(pieces: list[pa.Table], column: str) -> NDArray[Any]:
    """Return the values of a column in all pieces of a table, in which none is missing."""
    lists = [chunk for piece in pieces for chunk in piece[column].chunks]
    if any(one.null_count or one.flatten().null_count for one in lists):
        raise ValueError
    return np.concatenate([numbers(one.flatten()) for one in lists])
