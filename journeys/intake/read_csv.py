"""CSV logs, read block by block; what is wrong with one is told by row and column, never by what it holds."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path

import pyarrow as pa
import pyarrow.csv as pc

from journeys.errors import LogError

# Types are those of the first block: a large one sees more.
BLOCK_BYTES = 16 << 20


def csv_schema(path: Path, text: Sequence[str]) -> pa.Schema:
    """Columns of a CSV file, as its first block shows them.

    Parameters
    ----------
    path : Path
        Ending in .csv or .tsv, perhaps with .gz behind.
    text : sequence of str
        Columns to read as text.

    Returns
    -------
    pyarrow.Schema

    Raises
    ------
    LogError
        If it is empty or not CSV.
    """
    try:
        with _open(path, text, None) as reader:
            return reader.schema
    except (pa.ArrowInvalid, OSError) as fault:
        raise LogError(_fault(path, text, None, {}, fault)) from None


def csv_batches(path: Path, columns: Sequence[str], text: Sequence[str]) -> Iterator[pa.RecordBatch]:
    """Batches of some columns of a CSV file, types being those of the first block.

    Parameters
    ----------
    path : Path
    columns : sequence of str
        All of them in the file.
    text : sequence of str
        Columns to read as text.

    Yields
    ------
    pyarrow.RecordBatch

    Raises
    ------
    LogError
        If a row is malformed, or a column changes kind.
    """
    types: dict[str, pa.DataType] = {}
    try:
        with _open(path, text, columns) as reader:
            # Times without a fraction are inferred as seconds; later ones may have one.
            for field in reader.schema:
                if pa.types.is_timestamp(field.type) and field.type.unit == "s":
                    types[field.name] = pa.timestamp("us", field.type.tz)
        with _open(path, text, columns, types) as reader:
            yield from reader
    except (pa.ArrowInvalid, OSError) as fault:
        raise LogError(_fault(path, text, columns, types, fault)) from None


def _open(
    path: Path,
    text: Sequence[str],
    columns: Sequence[str] | None,
    types: Mapping[str, pa.DataType] | None = None,
    threads: bool = True,
) -> pc.CSVStreamingReader:
    """Streaming reader; the separator follows from the file's name."""
    convert = pc.ConvertOptions(
        column_types={**dict.fromkeys(text, pa.string()), **(types or {})},
        strings_can_be_null=True,
        include_columns=None if columns is None else list(columns),
    )
    parse = pc.ParseOptions(
        delimiter="\t" if ".tsv" in path.name.lower() else ",",
        # Quoted cells may hold line breaks; left out, such a row would be read as two.
        newlines_in_values=True,
    )
    read = pc.ReadOptions(block_size=BLOCK_BYTES, use_threads=threads)
    return pc.open_csv(pa.input_stream(str(path), compression="detect"), read, parse, convert)


def _fault(
    path: Path,
    text: Sequence[str],
    columns: Sequence[str] | None,
    types: Mapping[str, pa.DataType],
    fault: Exception,
) -> str:
    """Say what is wrong; row numbers are known to a reader without threads only, so read once more."""
    told = str(fault)
    if "CSV" in told and "Empty CSV" not in told:
        try:
            with _open(path, text, columns, types, threads=False) as reader:
                for _ in reader:
                    pass
        except (pa.ArrowInvalid, OSError) as again:
            told = str(again)
    row = re.search(r"Row #(\d+)", told)
    where = f"row {row[1]} (the line of names is row 1)" if row else "a row"
    if "Empty CSV" in told:
        return f"{path}: the file is empty; wanted a line of column names and rows below"
    if width := re.search(r"Expected (\d+) columns, got (\d+)", told):
        return (
            f"{path}: {where} has {width[2]} values, wanted {width[1]}; mend the row, "
            "or put values that hold the separator in quotes"
        )
    if change := re.search(r"In CSV column #(\d+).*conversion error to ([a-z]+\d*)", told):
        return (
            f"{path}: {where}, column {_name_of(path, int(change[1]))}, is not {change[2]} as the rows "
            "before it are; write the whole column in one form, or the log as Parquet"
        )
    return f"{path}: not readable as CSV; wanted UTF-8 text with one line of column names and rows below"


def _name_of(path: Path, place: int) -> str:
    """Name of a column by its place."""
    try:
        with _open(path, (), None) as reader:
            return repr(reader.schema.names[place])
    except (pa.ArrowInvalid, OSError, IndexError):
        return f"number {place + 1}"
