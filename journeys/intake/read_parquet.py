"""Parquet files: batches of rows, and what the files note of their pieces."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from journeys.errors import LogError
from journeys.intake.arrays import from_numpy
from journeys.intake.faults import UNREADABLE

ROWS_AT_ONCE = 1 << 19
# What a column of a row group may unpack to: a batch of it is in memory at once. A file of a few kB can say more.
MOST_BYTES = 256 << 20
MOST_BYTES_PER_ROW = 256


def parquet_batches(path: Path, columns: Sequence[str], text: Sequence[str]) -> Iterator[pa.RecordBatch]:
    """Batches across row groups; names come as dictionaries, as most files store them.

    Parameters
    ----------
    path : Path
    columns, text : sequence of str
        Columns to read, and those of all columns that hold names.

    Yields
    ------
    pyarrow.RecordBatch

    Raises
    ------
    LogError
        If a column of a row group unpacks to more than 256 MiB and 256 bytes a row.
    """
    schema = pq.read_schema(path)
    kinds = (pa.string(), pa.large_string())
    names = [name for name in text if name in columns and schema.field(name).type in kinds]
    with pq.ParquetFile(path, read_dictionary=names) as parquet:
        _check_sizes(path, parquet.metadata, columns)
        n_rows = 0
        # A few row groups at a time: asked for all of them, Arrow would hold the whole file.
        for groups in _together(parquet.metadata):
            for batch in parquet.iter_batches(batch_size=ROWS_AT_ONCE, row_groups=groups, columns=list(columns)):
                for column in batch.columns:
                    # Arrow takes the codes of a damaged dictionary as they stand.
                    if pa.types.is_dictionary(column.type):
                        column.validate(full=True)
                n_rows += batch.num_rows
                yield batch
        if n_rows != parquet.metadata.num_rows:
            # Where columns differ in length, Arrow stops with the shortest.
            told = f"{n_rows:,} rows instead of {parquet.metadata.num_rows:,}"
            raise LogError(f"{path}: not a whole Parquet file ({told}); write it again")


def _check_sizes(path: Path, metadata: pq.FileMetaData, columns: Sequence[str]) -> None:
    """Raise if a piece that has to be read would unpack to something enormous."""
    for number in range(metadata.num_row_groups):
        group = metadata.row_group(number)
        most = MOST_BYTES + MOST_BYTES_PER_ROW * group.num_rows
        if group.total_byte_size <= most:
            continue
        for place in range(group.num_columns):
            chunk = group.column(place)
            if chunk.path_in_schema in columns and chunk.total_uncompressed_size > most:
                raise LogError(
                    f"{path}: column {chunk.path_in_schema!r} unpacks to {chunk.total_uncompressed_size:,} bytes in "
                    f"{group.num_rows:,} rows (row group {number}); wanted at most {most:,}: ids and names of events "
                    "are short, and row groups of a million rows are large enough"
                )


def _together(metadata: pq.FileMetaData) -> Iterator[list[int]]:
    """Numbers of neighbouring row groups that make up a batch."""
    groups: list[int] = []
    n_rows = 0
    for number in range(metadata.num_row_groups):
        n = metadata.row_group(number).num_rows
        if groups and n_rows + n > ROWS_AT_ONCE:
            yield groups
            groups, n_rows = [], 0
        groups.append(number)
        n_rows += n
    if groups:
        yield groups


@dataclass(frozen=True, slots=True)
class Ranges:
    """What the row groups of Parquet files say of one column.

    Attributes
    ----------
    first, last : pyarrow.Array, shape (n_groups,)
        Smallest and largest value of each group that has any.
    n : list of int, length n_groups
        Values that are there.
    n_rows : int
        Rows of all groups.
    """

    first: pa.Array
    last: pa.Array
    n: list[int]
    n_rows: int


def column_ranges(paths: Sequence[Path], column: str) -> Ranges | None:
    """Ranges of a column of times or dates, without reading it; None where the files do not tell.

    Parameters
    ----------
    paths : sequence of Path
    column : str

    Returns
    -------
    Ranges or None
    """
    first, last, n, n_rows, kind = [], [], [], 0, None
    for path in paths:
        metadata = pq.read_metadata(path)
        field = metadata.schema.to_arrow_schema().field(column)
        if kind not in (None, field.type) or not _tells_ranges(field.type) or not _are_sound(path, column):
            return None
        kind = field.type
        place = _place(metadata, column)
        for number in range(metadata.num_row_groups):
            group = metadata.row_group(number)
            found = group.column(place).statistics
            n_rows += group.num_rows
            if found is None or not found.has_null_count or (found.num_values and not found.has_min_max):
                return None
            if found.num_values:
                first.append(found.min_raw)
                last.append(found.max_raw)
                n.append(found.num_values)
    if kind is None:
        return None
    return Ranges(from_numpy(np.array(first, np.int64), kind), from_numpy(np.array(last, np.int64), kind), n, n_rows)


def _are_sound(path: Path, column: str) -> bool:
    """Return whether a row of each group can be read: asked for the notes of a damaged one, Arrow ends the process."""
    try:
        with pq.ParquetFile(path) as parquet:
            for number in range(parquet.num_row_groups):
                next(parquet.iter_batches(batch_size=1, row_groups=[number], columns=[column]), None)
    except UNREADABLE:
        # Reading the rows will say what is wrong.
        return False
    return True


def _place(metadata: pq.FileMetaData, column: str) -> int:
    """Return where a column stands; parts of nested columns may have the same name."""
    return next(i for i in range(metadata.num_columns) if metadata.schema.column(i).path == column)


def _tells_ranges(kind: pa.DataType) -> bool:
    """Return whether the statistics of such a column come as values of its own type."""
    return bool(pa.types.is_date32(kind) or (pa.types.is_timestamp(kind) and kind.unit in ("ms", "us")))
