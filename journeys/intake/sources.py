"""The adapters of the gate: one small class for each kind of thing that can hold a log."""

from __future__ import annotations

import tempfile
from abc import ABC, abstractmethod
from collections.abc import Iterator, Sequence
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import pyarrow as pa
import pyarrow.parquet as pq

from journeys.errors import LogError
from journeys.intake.arrays import from_texts
from journeys.intake.batches import check_columns, resized
from journeys.intake.read_files import LogFile, file_batches, file_schema, partition_types
from journeys.intake.read_parquet import ROWS_AT_ONCE, Ranges, column_ranges

if TYPE_CHECKING:
    import pandas as pd


class LogSource(ABC):
    """An event log that can be read in batches.

    Attributes
    ----------
    one_shot : bool
        It can be read only once.
    kind : str
        What it is, for messages.
    needed : tuple of str
        Columns that `open_log` was asked for.
    """

    one_shot = False
    kind = "log"
    needed: tuple[str, ...] = ()

    @property
    @abstractmethod
    def names(self) -> list[str]:
        """Columns there are."""

    @abstractmethod
    def _read(self, columns: list[str]) -> Iterator[pa.RecordBatch]:
        """Batches of any size, of the given columns or more."""

    @property
    def n_rows(self) -> int | None:
        """Number of rows, or None where only reading would tell."""
        return None

    def ranges(self, column: str) -> Ranges | None:
        """Smallest and largest values of a column piece by piece, where they are known without reading it."""
        return None

    def describe(self) -> str:
        """Return in a few words what the log is; no ids, no contents."""
        rows = "" if self.n_rows is None else f", {self.n_rows:,} rows"
        return f"{self.kind}{rows}"

    def batches(self, columns: Sequence[str]) -> Iterator[pa.RecordBatch]:
        """Batches of the given columns, in input order.

        Parameters
        ----------
        columns : sequence of str

        Yields
        ------
        pyarrow.RecordBatch
            At most 2**19 rows each; small neighbours are put together.

        Raises
        ------
        LogError
            If a column is not there, the log is damaged, or it was read before and can be read only once.
        """
        wanted = list(dict.fromkeys(columns))
        self.check(wanted)
        return resized(batch.select(wanted) for batch in self._read(wanted))

    def check(self, columns: Sequence[str]) -> None:
        """Raise if a column is not there.

        Parameters
        ----------
        columns : sequence of str

        Raises
        ------
        LogError
            Naming the columns there are, the closest ones first.
        """
        check_columns(self.names, columns, self.kind)

    @contextmanager
    def spooled(self, columns: Sequence[str] | None = None) -> Iterator[LogSource]:
        """Give the same log as one that can be read again, kept in a temporary folder until the block ends.

        Parameters
        ----------
        columns : sequence of str, optional
            Left out, those that `open_log` was asked for.

        Yields
        ------
        LogSource
        """
        with tempfile.TemporaryDirectory(prefix="journeys-") as folder:
            yield SpoolSource(self, list(columns or self.needed or self.names), Path(folder))


class FileSource(LogSource):
    """Files on disk."""

    def __init__(self, files: list[LogFile], text: tuple[str, ...], ids: tuple[str, ...], where: str) -> None:
        self._files, self._text, self._ids = files, text, ids
        kind = files[0].kind
        self.kind = f"{kind} file {where}" if len(files) == 1 else f"{len(files)} {kind} files"
        self._partition = partition_types(files)
        self._names = self._names_in(files[0])

    @property
    def names(self) -> list[str]:
        """Columns of the first file, and those its folders give."""
        return self._names

    @property
    def n_rows(self) -> int | None:
        """Number of rows, which Parquet files say at their ends."""
        if self._files[0].kind != "Parquet":
            return None
        return sum(int(pq.read_metadata(file.path).num_rows) for file in self._files)

    def ranges(self, column: str) -> Ranges | None:
        """Say what Parquet files note of their row groups."""
        if self._files[0].kind != "Parquet" or column in self._partition:
            return None
        return column_ranges([file.path for file in self._files], column)

    def _names_in(self, file: LogFile) -> list[str]:
        """Columns of one file; a folder's value goes before a column of the same name."""
        inner = file_schema(file, self._text).names
        return [name for name in inner if name not in self._partition] + list(self._partition)

    def _read(self, columns: list[str]) -> Iterator[pa.RecordBatch]:
        """Batches file by file."""
        for file in self._files:
            yield from self._read_file(file, columns)

    def _read_file(self, file: LogFile, columns: list[str]) -> Iterator[pa.RecordBatch]:
        """Batches of one file."""
        check_columns(self._names_in(file), columns, f"{file.kind} file {file.path}")
        inner = [name for name in columns if name not in self._partition]
        # A row count is all that a file need give if its folders say the rest: read any column then.
        read = inner or file_schema(file, self._text).names[:1]
        for batch in file_batches(file, read, self._text, self._ids):
            yield self._with_partition(batch, file)

    def _with_partition(self, batch: pa.RecordBatch, file: LogFile) -> pa.RecordBatch:
        """Batch with the columns that the file's folders give."""
        arrays = dict(zip(batch.schema.names, batch.columns, strict=True))
        for key, value in file.partition:
            typed = from_texts([value]).cast(self._partition[key])
            arrays[key] = pa.repeat(typed[0], batch.num_rows)
        return pa.RecordBatch.from_arrays(list(arrays.values()), names=list(arrays))


class PandasSource(LogSource):
    """A pandas frame, converted piece by piece; the levels of a named index are columns."""

    kind = "pandas frame"

    def __init__(self, frame: pd.DataFrame) -> None:
        self._frame = frame
        self._levels = [name for name in frame.index.names if name is not None]

    @property
    def names(self) -> list[str]:
        """Columns and index levels."""
        return [str(name) for name in [*self._frame.columns, *self._levels]]

    @property
    def n_rows(self) -> int | None:
        """Number of rows."""
        return len(self._frame)

    def _column(self, name: str) -> pd.Series | pd.Index:
        """Column or index level by its name as text."""
        place = self.names.index(name)
        if place < self._frame.shape[1]:
            return self._frame.iloc[:, place]
        levels = [level for level, given in enumerate(self._frame.index.names) if given is not None]
        return self._frame.index.get_level_values(levels[place - self._frame.shape[1]])

    def _read(self, columns: list[str]) -> Iterator[pa.RecordBatch]:
        """Pieces of the frame."""
        series = [self._column(name) for name in columns]
        for start in range(0, len(self._frame), ROWS_AT_ONCE):
            piece = slice(start, start + ROWS_AT_ONCE)
            arrays = [_from_pandas(one[piece], name) for one, name in zip(series, columns, strict=True)]
            yield pa.RecordBatch.from_arrays(arrays, names=columns)


class TableSource(LogSource):
    """An Arrow table or something that becomes one without copying."""

    def __init__(self, table: pa.Table, kind: str) -> None:
        self._table, self.kind = table, kind

    @property
    def names(self) -> list[str]:
        """Columns of the table."""
        return list(self._table.schema.names)

    @property
    def n_rows(self) -> int | None:
        """Number of rows."""
        return int(self._table.num_rows)

    def _read(self, columns: list[str]) -> Iterator[pa.RecordBatch]:
        """Chunks of the table."""
        return iter(self._table.select(columns).to_batches(max_chunksize=ROWS_AT_ONCE))


class StreamSource(LogSource):
    """Record batches that pass by once."""

    one_shot = True

    def __init__(self, schema: pa.Schema, batches: Iterator[pa.RecordBatch], kind: str) -> None:
        self._schema, self._batches, self.kind = schema, batches, kind
        self._was_read = False

    @property
    def names(self) -> list[str]:
        """Columns of the first batch."""
        return list(self._schema.names)

    def _read(self, columns: list[str]) -> Iterator[pa.RecordBatch]:
        """Hand the batches on, once."""
        if self._was_read:
            raise LogError(f"{self.kind} can be read only once, and was; pass a table or a file instead")
        self._was_read = True
        return self._checked(columns)

    def _checked(self, columns: list[str]) -> Iterator[pa.RecordBatch]:
        """Batches, each having the columns."""
        for number, batch in enumerate(self._batches):
            if not isinstance(batch, pa.RecordBatch):
                got = type(batch).__name__
                raise TypeError(f"{self.kind}: item {number} is a {got}; wanted record batches")
            check_columns(batch.schema.names, columns, f"batch {number} of {self.kind}")
            yield batch


class SpoolSource(LogSource):
    """Another log's batches, written to Arrow streams in a folder: a new one wherever the types change."""

    def __init__(self, log: LogSource, columns: list[str], folder: Path) -> None:
        self.kind, self.needed, self._names = log.kind, tuple(columns), columns
        self._paths: list[Path] = []
        self._n_rows = 0
        with ExitStack() as stack:
            writer, schema = None, None
            for batch in log.batches(columns):
                if batch.schema != schema:
                    stack.close()
                    schema = batch.schema
                    self._paths.append(folder / f"{len(self._paths)}.arrows")
                    writer = stack.enter_context(pa.ipc.new_stream(str(self._paths[-1]), schema))
                writer.write_batch(batch)  # type: ignore[union-attr]
                self._n_rows += batch.num_rows

    @property
    def names(self) -> list[str]:
        """Columns that were kept."""
        return self._names

    @property
    def n_rows(self) -> int | None:
        """Number of rows."""
        return self._n_rows

    def _read(self, columns: list[str]) -> Iterator[pa.RecordBatch]:
        """Batches, stream by stream."""
        for path in self._paths:
            with pa.memory_map(str(path)) as file, pa.ipc.open_stream(file) as reader:
                yield from reader


def _from_pandas(values: pd.Series | pd.Index, name: str) -> pa.Array:
    """Arrow array of a piece of a column."""
    try:
        array = pa.array(values, from_pandas=True)
    except (pa.ArrowInvalid, pa.ArrowTypeError, pa.ArrowNotImplementedError):
        raise LogError(
            f"pandas frame: column {name!r} (dtype {values.dtype}) holds values of several kinds, or of "
            "one that Arrow does not know; make it one kind: frame[column].astype(str), or pandas.to_datetime"
        ) from None
    return array.combine_chunks() if isinstance(array, pa.ChunkedArray) else array
