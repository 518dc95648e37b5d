"""A tally on disk: one Parquet file, its head (format, rules, span, checksum) in the file's metadata."""

from __future__ import annotations

import json
import os
from hashlib import blake2b
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from journeys.errors import JourneysError, StoreError
from journeys.files import written_whole
from journeys.intake.arrays import from_numpy, from_texts
from journeys.intake.faults import UNREADABLE
from journeys.intake.findings import Findings
from journeys.intake.rules import JourneyRules
from journeys.tally.tables import NARROW, TABLES, customer_sums, parts_of, sums_of
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    from journeys.tally.accumulate import Columns

FORMAT_VERSION = 4
HEAD = b"journeys"
# Rows of a table written at once: the columns that it lacks take room too.
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
    All tables stand in one file, told apart by the column `table`; a column that a table lacks is null there.
    """
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
        "findings": tally.record.to_dict(),
        "checksum": _checksum(tally),
    }
    schema = _schema(tally.rules, tally.order).with_metadata({HEAD: json.dumps(head).encode(), **(more or {})})
    # Dictionaries pay where a value runs on for many rows; elsewhere they only take time.
    runs = ["table", "bucket", "state"]
    with (
        written_whole(path) as part,
        pq.ParquetWriter(
            part, schema, compression="zstd", compression_level=1, use_dictionary=runs, write_statistics=False
        ) as writer,
    ):
        for name in TABLES:
            held = getattr(tally, name)
            for begin in range(0, max(len(held["bucket"]), 1), _ROWS_AT_ONCE):
                piece = {column: values[begin : begin + _ROWS_AT_ONCE] for column, values in held.items()}
                writer.write_table(_as_arrow(name, piece, schema))


def _schema(rules: JourneyRules, order: int) -> pa.Schema:
    """Return the columns of all tables, each with the type that is enough for it."""
    every = dict.fromkeys(column for table in TABLES for column in columns_of(table, rules, order))
    narrow = {name: pa.from_numpy_dtype(kind) for name, kind in NARROW.items()}
    return pa.schema([("table", pa.string()), *((name, narrow.get(name, pa.int64())) for name in every)])


def _as_arrow(name: str, held: Columns, schema: pa.Schema) -> pa.Table:
    """Return one table of the tally, the columns it lacks null."""
    size = len(held["bucket"])
    columns = {"table": pa.repeat(from_texts([name])[0], size)}
    for field in schema:
        if field.name in held:
            values = held[field.name].astype(NARROW.get(field.name, np.int64), copy=False)
            columns[field.name] = from_numpy(values, field.type)
        elif field.name != "table":
            columns[field.name] = pa.nulls(size, field.type)
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
    try:
        table = pq.read_table(path)
        head = read_head(table.schema, HEAD)
    except FileNotFoundError:
        msg = f"no tally at {os.fspath(path)!r}; wanted a file written by tally.save"
        raise StoreError(msg) from None
    except UNREADABLE:
        msg = (
            f"{os.fspath(path)!r} is not a whole tally; wanted a file written by tally.save: make it again from the log"
        )
        raise StoreError(msg) from None
    if head.get("format_version") != FORMAT_VERSION:
        msg = (
            f"{os.fspath(path)!r} has format version {head.get('format_version')}, this program reads "
            f"{FORMAT_VERSION}; count the log again"
        )
        raise StoreError(msg)
    try:
        tally = _from_parts(table, head)
        whole = _checksum(tally) == head["checksum"]
    except (*UNREADABLE, LookupError, TypeError, AttributeError, JourneysError):
        whole = False
    if not whole:
        msg = f"{os.fspath(path)!r} is damaged (its checksum does not fit); count the log again"
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
    for name in TABLES:
        rows = table.filter(pc.equal(table["table"], name))
        narrow = {} if name == "customers" else NARROW
        held[name] = {
            column: _whole(rows[column]).astype(narrow.get(column, np.int64))
            for column in columns_of(name, rules, head["order"])
        }
    return Tally(
        rules=rules,
        groups=tuple(tuple(group) for group in head["groups"]),
        part=head["part"],
        order=head["order"],
        states=tuple(head["states"]),
        log_start_us=head["log_start_us"],
        as_of_us=head["as_of_us"],
        whole_days=head["whole_days"],
        n_rows=head["n_rows"],
        record=Findings.from_dict(head["findings"]),
        **held,
    )


def _whole(column: pa.ChunkedArray) -> np.ndarray:
    """Return the numbers of a column in which none is missing."""
    if column.null_count:
        raise ValueError
    whole: np.ndarray = column.to_numpy()
    return whole
