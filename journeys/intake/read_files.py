"""Files of a log: which there are, in what order, and their batches."""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from urllib.parse import unquote

import pyarrow as pa
import pyarrow.parquet as pq

from journeys.errors import LogError
from journeys.intake.faults import UNREADABLE, no_memory
from journeys.intake.read_csv import csv_batches, csv_schema
from journeys.intake.read_parquet import parquet_batches

KINDS = {
    ".parquet": "Parquet", ".pq": "Parquet",
    ".csv": "CSV", ".csv.gz": "CSV", ".tsv": "TSV", ".tsv.gz": "TSV",
    ".arrow": "Arrow", ".feather": "Arrow", ".ipc": "Arrow",
}  # fmt: skip
_HIVE_NULL = "__HIVE_DEFAULT_PARTITION__"
_WANTED = f"wanted one of {', '.join(KINDS)}"


@dataclass(frozen=True, slots=True)
class LogFile:
    """One file of a log.

    Attributes
    ----------
    path : Path
    kind : str
        Parquet, CSV, TSV or Arrow.
    partition : tuple of (str, str or None)
        Columns that its folders give, `key=value`.
    """

    path: Path
    kind: str
    partition: tuple[tuple[str, str | None], ...] = ()


def find_files(source: str | os.PathLike[str] | Sequence[str | os.PathLike[str]]) -> list[LogFile]:
    """Files of a path, a folder or a list of paths, in the order in which their rows count.

    Parameters
    ----------
    source : path or sequence of paths
        A folder is read with all below it, by path; names that start with "." or "_" are passed over. A list
        is read by file name.

    Returns
    -------
    list of LogFile

    Raises
    ------
    LogError
        If there is none, one is missing, or they are of several kinds.
    """
    if isinstance(source, str | os.PathLike):
        path = _path(source)
        if path.is_dir():
            return _one_kind(_in_folder(path), str(path))
        paths = [path]
    else:
        paths = sorted((_path(item) for item in source), key=lambda item: (item.name, item.as_posix()))
        if not paths:
            raise LogError("the list of files is empty; wanted at least one path")
    for path in paths:
        if path.is_dir():
            raise LogError(f"{path} is a folder in a list of files; give a folder by itself")
        if not path.exists():
            raise LogError(f"{path}: no such file")
        if not path.is_file():
            raise LogError(f"{path} is a pipe or a device; wanted a file, since a log is read twice")
    _check_once(paths, "the list of files names")
    return _one_kind([LogFile(path, _kind(path)) for path in paths], "the list of files")


def file_schema(file: LogFile, text: Sequence[str]) -> pa.Schema:
    """Columns of a file, partition columns not included.

    Parameters
    ----------
    file : LogFile
    text : sequence of str
        Columns that a CSV file is to be read as text in.

    Returns
    -------
    pyarrow.Schema

    Raises
    ------
    LogError
        If the file is empty or damaged.
    """
    try:
        if file.kind == "Parquet":
            schema = pq.read_schema(file.path)
        elif file.kind == "Arrow":
            schema = _open_arrow(file.path).schema
        else:
            schema = csv_schema(file.path, text)
        # Raises here, not later, where names of columns or of time zones are no text.
        _ = schema.names, [kind.tz for kind in schema.types if pa.types.is_timestamp(kind)]
    except LogError:
        raise
    except UNREADABLE as fault:
        raise LogError(_damaged(file, fault)) from None
    return schema


def file_batches(
    file: LogFile, columns: Sequence[str], text: Sequence[str], ids: Sequence[str] = ()
) -> Iterator[pa.RecordBatch]:
    """Batches of some columns of a file.

    Parameters
    ----------
    file : LogFile
    columns : sequence of str
        All of them in the file.
    text : sequence of str
        Columns that hold names: read as text from CSV, as dictionaries from Parquet.
    ids : sequence of str
        Columns of names that may be numbers: read as text from CSV if they have leading zeros.

    Yields
    ------
    pyarrow.RecordBatch

    Raises
    ------
    LogError
        If the file is damaged, or a CSV column changes kind.
    """
    if file.kind in ("CSV", "TSV"):
        yield from csv_batches(file.path, columns, text, ids)
        return
    is_parquet = file.kind == "Parquet"
    batches = parquet_batches(file.path, columns, text) if is_parquet else _arrow_batches(file, columns)
    while True:
        try:
            batch = next(batches, None)
        except LogError:
            raise
        except UNREADABLE as fault:
            raise LogError(_damaged(file, fault)) from None
        if batch is None:
            return
        yield batch


def partition_types(files: Sequence[LogFile]) -> dict[str, pa.DataType]:
    """Types of the columns that folders give: int64 where every value is a plain whole number, else text.

    Parameters
    ----------
    files : sequence of LogFile

    Returns
    -------
    dict of str to pyarrow.DataType

    Raises
    ------
    LogError
        If the files lie under different keys.
    """
    keys = {tuple(key for key, _ in file.partition) for file in files}
    if len(keys) > 1:
        raise LogError("files lie under folders with different keys (key=value); give those with the same")
    types = {}
    for place, key in enumerate(next(iter(keys), ())):
        values = {file.partition[place][1] for file in files} - {None}
        types[key] = pa.int64() if all(value and _is_plain_int(value) for value in values) else pa.string()
    return types


def _is_plain_int(text: str) -> bool:
    """Return whether text is how a whole number of int64 is written."""
    digits = text.removeprefix("-")
    return digits.isascii() and digits.isdigit() and str(int(text)) == text and abs(int(text)) < 2**63


def _in_folder(folder: Path) -> list[LogFile]:
    """Files below a folder, by path."""
    paths = sorted(_below(folder), key=lambda item: item.relative_to(folder).parts)
    if not paths:
        raise LogError(f"folder {folder} holds no file to read; {_WANTED}")
    _check_once(paths, f"folder {folder} holds")
    return [LogFile(path, _kind(path), _partition(path.relative_to(folder).parts[:-1])) for path in paths]


def _below(folder: Path) -> Iterator[Path]:
    """Files in a folder and its folders; whatever else is there, and not hidden, is refused, never passed over."""
    try:
        entries = [_path(entry) for entry in folder.iterdir() if not entry.name.startswith((".", "_"))]
    except OSError as fault:
        raise LogError(f"folder {folder}: {fault.strerror or 'cannot be read'}") from None
    for entry in entries:
        if entry.is_file():
            yield entry
        elif entry.is_dir() and not entry.is_symlink():
            yield from _below(entry)
        else:
            kind = "a link to a folder, or to nothing" if entry.is_symlink() else "a pipe or a device"
            raise LogError(f"{entry} is {kind}; wanted files: take it out, or give a list of files")


def _partition(folders: Sequence[str]) -> tuple[tuple[str, str | None], ...]:
    """Columns that folders give by their names."""
    pairs = [folder.partition("=") for folder in folders if "=" in folder]
    return tuple((unquote(key), None if value == _HIVE_NULL else unquote(value)) for key, _, value in pairs)


def _path(source: str | os.PathLike[str]) -> Path:
    """Path that Arrow can open."""
    text = os.fspath(source)
    if not text:
        raise LogError("the path of the log is empty; wanted the path of a file or a folder")
    try:
        text.encode()
        Path(text).exists()
    except ValueError:
        raise LogError(f"{text!r}: the name is not UTF-8, so the file cannot be opened; rename it") from None
    except OSError as fault:
        raise LogError(f"{text[:200]}: {fault.strerror}") from None
    return Path(text)


def _check_once(paths: Sequence[Path], what: str) -> None:
    """Raise if two paths lead to one file."""
    seen: dict[tuple[int, int], Path] = {}
    for path in paths:
        status = path.stat()
        key = status.st_dev, status.st_ino
        if key in seen:
            raise LogError(f"{what} a file twice ({seen[key]}, {path}); its rows would count twice: take one out")
        seen[key] = path


def _one_kind(files: list[LogFile], where: str) -> list[LogFile]:
    """Files, if they are all of one kind."""
    kinds = sorted({file.kind for file in files})
    if len(kinds) > 1:
        raise LogError(f"{where} holds files of several kinds ({', '.join(kinds)}); give those of one kind")
    return files


def _kind(path: Path) -> str:
    """Kind of a file by the end of its name."""
    name = path.name.lower()
    for suffix, kind in KINDS.items():
        if name.endswith(suffix):
            return kind
    raise LogError(f"{path}: files ending in {path.suffix or 'nothing'!r} are not read; {_WANTED}")


def _open_arrow(path: Path, options: Any = None) -> Any:
    """Reader of an Arrow file in either of its two forms."""
    with path.open("rb") as file:
        is_file = file.read(6) == b"ARROW1"
    source = pa.memory_map(str(path)) if path.stat().st_size else pa.BufferReader(b"")
    return (pa.ipc.open_file if is_file else pa.ipc.open_stream)(source, options=options)


def _arrow_batches(file: LogFile, columns: Sequence[str]) -> Iterator[pa.RecordBatch]:
    """Batches of an Arrow file or stream."""
    names = _open_arrow(file.path).schema.names
    options = pa.ipc.IpcReadOptions(included_fields=[names.index(column) for column in columns])
    reader = _open_arrow(file.path, options)
    if isinstance(reader, pa.ipc.RecordBatchFileReader):
        batches: Iterator[pa.RecordBatch] = map(reader.get_batch, range(reader.num_record_batches))
    else:
        batches = iter(reader)
    for batch in batches:
        # Unlike Parquet's, its offsets and codes are taken as they stand: wrong ones would lead out of the file.
        batch.validate(full=True)
        yield batch


def _damaged(file: LogFile, fault: Exception) -> str:
    """Say what is wrong with a file, without the cells that Arrow's own messages quote."""
    if isinstance(fault, MemoryError):
        return no_memory(file.path)
    return f"{file.path}: not a whole {file.kind} file ({type(fault).__name__}); write it again"
