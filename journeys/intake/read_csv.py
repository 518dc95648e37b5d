"""CSV logs, read block by block; what is wrong with one is told by row and column, never by what it holds."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path

import pyarrow as pa
import pyarrow.csv

from journeys.errors import LogError
from journeys.intake.faults import UNREADABLE, no_memory

# Types are those of the first block: a large one sees more. No row may be longer.
BLOCK_BYTES = 16 << 20
# Each column takes memory of its own, wanted or not.
MOST_COLUMNS = 10_000
_LONGEST_HEAD = 1 << 20


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
        If it is empty or not CSV, or its line of names is too long.
    """
    try:
        _check_head(path)
        return _schema(path, text, None)
    except LogError:
        raise
    except UNREADABLE as fault:
        raise LogError(_fault(path, text, None, {}, fault)) from None


def csv_batches(
    path: Path, columns: Sequence[str], text: Sequence[str], ids: Sequence[str] = ()
) -> Iterator[pa.RecordBatch]:
    """Batches of some columns of a CSV file, types being those of the first block.

    Parameters
    ----------
    path : Path
    columns : sequence of str
        All of them in the file.
    text : sequence of str
        Columns to read as text.
    ids : sequence of str
        Columns of numbers that only name something: read as text where one begins with a zero.

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
        schema = _schema(path, text, columns)
        # Times without a fraction are inferred as seconds; later ones may have one.
        for field in schema:
            if pa.types.is_timestamp(field.type) and field.type.unit == "s":
                types[field.name] = pa.timestamp("us", field.type.tz)
        numbered = {name for name in ids if name in columns and schema.field(name).type == pa.int64()}
        written = _Written(path, numbered)
        with _open(path, text, columns, types | dict.fromkeys(numbered, pa.string())) as reader:
            for batch in reader:
                yield written.read(batch)
    except LogError:
        raise
    except UNREADABLE as fault:
        raise LogError(_fault(path, text, columns, types, fault)) from None


def _schema(path: Path, text: Sequence[str], columns: Sequence[str] | None) -> pa.Schema:
    """Columns as the first block shows them; the reader, which holds what it read ahead, is let go of on return."""
    with _open(path, text, columns) as reader:
        return reader.schema


class _Written:
    """Columns of ids as they are written: whole numbers, unless the first rows have leading zeros."""

    def __init__(self, path: Path, numbered: set[str]) -> None:
        self._path, self._numbered, self._n_rows = path, numbered, 0

    def read(self, batch: pa.RecordBatch) -> pa.RecordBatch:
        """Turn the ids of a batch into numbers where they are."""
        import pyarrow.compute as pc

        for name in sorted(self._numbered):
            place = batch.schema.get_field_index(name)
            ids = pc.utf8_trim_whitespace(batch.column(place))
            zeros = _leading_zeros(ids)
            if zeros.true_count and not self._n_rows:
                # "007" is not "7": the whole column is text.
                self._numbered.discard(name)
                continue
            if zeros.true_count:
                row = self._n_rows + zeros.index(True).as_py() + 2
                msg = (
                    f"{self._path}: row {row} (the line of names is row 1), column {name!r}, has a leading zero, and "
                    "the rows far above have none; numbers or text? write the log as Parquet, where it is told"
                )
                raise LogError(msg)
            batch = batch.set_column(place, name, ids.cast(pa.int64()))
        self._n_rows += batch.num_rows
        return batch


def _leading_zeros(ids: pa.StringArray) -> pa.BooleanArray:
    """Mark ids such as 007, 0x7 or -0."""
    import pyarrow.compute as pc

    longer = pc.greater(pc.binary_length(ids), 1)
    return pc.or_(pc.and_(pc.starts_with(ids, "0"), longer), pc.starts_with(ids, "-0"))


def _check_head(path: Path) -> None:
    """Raise if the line of names is beyond all measure."""
    with pa.input_stream(str(path), compression="detect") as stream:
        head = b""
        while not head and (piece := stream.read(_LONGEST_HEAD)):
            head = piece.lstrip(b"\r\n")
        line = re.split(rb"[\r\n]", head, maxsplit=1)[0]
        # What was read may have begun in the middle of line breaks: then a little more belongs to the line.
        if len(line) == len(head) and stream.read(1):
            raise LogError(f"{path}: the line of column names is longer than {_LONGEST_HEAD:,} bytes; wanted a log")
    n = line.count(_separator(path).encode()) + 1
    if n > MOST_COLUMNS:
        raise LogError(f"{path}: there are {n:,} columns; wanted at most {MOST_COLUMNS:,}: leave out those not needed")


def _separator(path: Path) -> str:
    """Tab or comma, as the file's name says."""
    return "\t" if ".tsv" in path.name.lower() else ","


def _open(
    path: Path,
    text: Sequence[str],
    columns: Sequence[str] | None,
    types: Mapping[str, pa.DataType] | None = None,
    threads: bool = True,
) -> pa.csv.CSVStreamingReader:
    """Streaming reader; the separator follows from the file's name."""
    convert = pa.csv.ConvertOptions(
        column_types={**dict.fromkeys(text, pa.string()), **(types or {})},
        strings_can_be_null=True,
        include_columns=None if columns is None else list(columns),
    )
    parse = pa.csv.ParseOptions(
        delimiter=_separator(path),
        # Quoted cells may hold line breaks; left out, such a row would be read as two.
        newlines_in_values=True,
    )
    read = pa.csv.ReadOptions(block_size=BLOCK_BYTES, use_threads=threads)
    return pa.csv.open_csv(pa.input_stream(str(path), compression="detect"), read, parse, convert)


def _fault(
    path: Path,
    text: Sequence[str],
    columns: Sequence[str] | None,
    types: Mapping[str, pa.DataType],
    fault: Exception,
) -> str:
    """Say what is wrong; row numbers are known to a reader without threads only, so read once more."""
    if isinstance(fault, MemoryError):
        return no_memory(path)
    told = str(fault)
    if "CSV" in told and "Empty CSV" not in told:
        try:
            with _open(path, text, columns, types, threads=False) as reader:
                for _ in reader:
                    pass
        except UNREADABLE as again:
            told = str(again)
    row = re.search(r"Row #(\d+)", told)
    where = f"row {row[1]} (the line of names is row 1)" if row else "a row"
    if "Empty CSV" in told:
        return f"{path}: the file is empty; wanted a line of column names and rows below"
    if "straddl" in told:
        return (
            f"{path}: a row is longer than {BLOCK_BYTES >> 20} MiB; wanted a line per event: look for a quote that is "
            "never closed, or for line breaks that are missing"
        )
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
    except (*UNREADABLE, IndexError):
        return f"number {place + 1}"
