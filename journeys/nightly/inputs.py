"""Where a night's rows come from: what is new, whether what was counted is still the same, and a log of the new ones.

A kind of input lists what there is and opens some of it; a ledger counts each input once, under its name.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Iterator, Mapping, Sequence
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass, replace
from pathlib import Path

import pyarrow as pa

from journeys.errors import JourneysError, LogError, RulesError
from journeys.intake.read import LogSource
from journeys.intake.read_files import LogFile, find_files
from journeys.intake.rules import JourneyRules
from journeys.intake.sources import FileSource
from journeys.nightly import disk
from journeys.nightly.manifest import Counted

FILE, QUERY = "file", "query"


class InputError(JourneysError):
    """An input that was counted is no longer what it was, or one is not whole (exit code 1)."""


@dataclass(frozen=True)
class Input:
    """Something to count once: see `Counted`."""

    name: str
    size: int = 0
    changed_ns: int = 0
    checksum: str = ""
    kind: str = FILE
    since_us: int | None = None


class InputLog(LogSource):
    """A log that knows how many rows came from each input when it was last read to its end.

    Attributes
    ----------
    rows_of : dict of str to int
        By the name of the input.
    again : LogSource or None
        Rows that are read now, and anew the next night, since they are too young to be counted; None: there are none,
        the ledger itself keeps what waits.
    """

    rows_of: dict[str, int]
    again: LogSource | None = None

    def up_to(self, as_of_us: int) -> None:
        """Set apart what the next night will read anew."""


class Inputs(ABC):
    """A kind of input."""

    @abstractmethod
    def new(self, counted: Mapping[str, Counted]) -> list[Input]:
        """Return what has not been counted yet, in the order in which it counts.

        Raises
        ------
        InputError
            If something that was counted has changed since.
        """

    @abstractmethod
    def open(self, inputs: Sequence[Input], rules: JourneyRules) -> AbstractContextManager[InputLog]:
        """Give the log that some inputs, at least one, make up one after another."""

    @abstractmethod
    def confirm(self, inputs: Sequence[Input]) -> None:
        """Raise an InputError if one of them has changed while it was read."""

    @abstractmethod
    def missing(self, counted: Mapping[str, Counted]) -> list[str]:
        """Return the names of what was counted and is no longer there."""


class FolderInputs(Inputs):
    """Files below a folder, such as one for each day: Parquet, CSV or Arrow, by path.

    A file that was counted and is as large, and was last changed, as it was then, is taken to be the same; where the
    time differs, its checksum decides.
    """

    def __init__(self, folder: Path) -> None:
        if not folder.is_dir():
            raise LogError(f"{folder}: no such folder; wanted one that holds the log's files (`log` in the job file)")
        self._folder = folder

    def new(self, counted: Mapping[str, Counted]) -> list[Input]:
        """Return the files that have not been counted yet, by path, with their checksums."""
        refuse_other_kind(counted, FILE, f"the files of {self._folder}")
        found = []
        for name, file in self._files().items():
            there = _seen(name, file.path)
            before = counted.get(name)
            if before is None:
                _check_end(file)
                found.append(replace(there, checksum=disk.digest_of_file(file.path)))
            elif not _is_same(there, before, file.path):
                raise InputError(_changed(file.path, before, there))
        return found

    @contextmanager
    def open(self, inputs: Sequence[Input], rules: JourneyRules) -> Iterator[InputLog]:
        """Give the log of some files."""
        files = self._files()
        mine = {one.name: files[one.name] for one in inputs}
        log = _FileLog(mine, (rules.event,), rules.id_columns, str(self._folder))
        log.check(rules.columns)
        yield log

    def confirm(self, inputs: Sequence[Input]) -> None:
        """Raise an InputError if a file has another size or time than when its checksum was taken."""
        for one in inputs:
            there = _seen(one.name, self._folder / one.name)
            if (there.size, there.changed_ns) != (one.size, one.changed_ns):
                msg = f"{self._folder / one.name} was changed while it was read; run again when it has been written"
                raise InputError(msg)

    def missing(self, counted: Mapping[str, Counted]) -> list[str]:
        """Return files that are gone."""
        return sorted({name for name, one in counted.items() if one.kind == FILE} - set(self._files()))

    def _files(self) -> dict[str, LogFile]:
        files = find_files(self._folder)
        return {file.path.relative_to(self._folder).as_posix(): file for file in files}


class _FileLog(FileSource, InputLog):
    """Files, their rows counted as they are read."""

    def __init__(self, files: dict[str, LogFile], text: tuple[str, ...], ids: tuple[str, ...], where: str) -> None:
        super().__init__(list(files.values()), text, ids, where)
        self._name_of = {file.path: name for name, file in files.items()}
        self.rows_of = {}

    def _read_file(self, file: LogFile, columns: list[str]) -> Iterator[pa.RecordBatch]:
        name = self._name_of[file.path]
        self.rows_of[name] = 0
        for batch in super()._read_file(file, columns):
            self.rows_of[name] += batch.num_rows
            yield batch


def refuse_other_kind(counted: Mapping[str, Counted], kind: str, now: str) -> None:
    """Raise a RulesError if a ledger has counted inputs of another kind: what they have in common would count twice."""
    if other := next((one.name for one in counted.values() if one.kind != kind), None):
        msg = f"log: {now} now, but the ledger has counted {other}; put `log` back, or count all anew with --rebuild"
        raise RulesError(msg)


def _seen(name: str, path: Path) -> Input:
    try:
        there = path.stat()
    except FileNotFoundError:
        raise InputError(f"{path} went away while it was read; run again") from None
    return Input(name, there.st_size, there.st_mtime_ns)


def _is_same(there: Input, before: Counted, path: Path) -> bool:
    if there.size != before.size:
        return False
    return there.changed_ns == before.changed_ns or disk.digest_of_file(path) == before.checksum


def _changed(path: Path, before: Counted, there: Input) -> str:
    was, now = f"{before.size:,} bytes", f"{there.size:,} bytes"
    return (
        f"{path} has changed since it was counted ({was} then, {now if now != was else 'as many others'} now); a "
        "ledger counts an input once: put the old file back and give what is new as a file of its own, or count all "
        "inputs anew with --rebuild"
    )


def _check_end(file: LogFile) -> None:
    """Raise if a text file does not end with its last line: nothing else tells that it was cut off."""
    if file.kind not in ("CSV", "TSV") or file.path.name.lower().endswith(".gz"):
        return
    with file.path.open("rb") as text:
        size = text.seek(0, 2)
        text.seek(max(size - 1, 0))
        last = text.read(1)
    if last not in (b"\n", b"\r"):
        msg = f"{file.path}: the last line does not end, so the file may have been cut off; write it again"
        raise InputError(msg)
