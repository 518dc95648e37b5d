"""The road for logs out of order: rows go to temporary files by customer, each file is sorted on its own."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from pathlib import Path
from types import TracebackType
from typing import BinaryIO

import numpy as np

from journeys.intake.identity import bucket_of_major
from journeys.intake.rows import Rows
from journeys.tally.tables import N_BUCKETS

# Files, each with the customers of a few neighbouring buckets.
N_PARTS = 50
BUCKETS_PER_PART = N_BUCKETS // N_PARTS
_KINDS = {
    "key": "u8", "time": "i8", "event": "i4", "row": "i8", "sequence": "i8", "ended": "?", "by": "i4", "value": "i8",
}  # fmt: skip


class Spill:
    """Rows on disk in parts by bucket of customers; a context manager that cleans up after itself."""

    def __init__(self) -> None:
        self._folder = tempfile.TemporaryDirectory(prefix="journeys-")
        self._files: dict[int, BinaryIO] = {}
        self._held: list[str] = []
        self._record = np.dtype([])

    def add(self, rows: Rows) -> None:
        """Write a block of rows to the parts its customers belong to."""
        if not len(rows):
            return
        self._held = [name for name, column in rows.columns().items() if column is not None]
        self._record = np.dtype([(name, _KINDS[name]) for name in self._held])
        part = bucket_of_major(rows.key) // BUCKETS_PER_PART
        order = np.argsort(part, kind="stable")
        record = np.zeros(len(rows), self._record)
        for name in self._held:
            record[name] = getattr(rows, name)[order]
        present, begin = np.unique(part[order], return_index=True)
        for number, piece in zip(present.tolist(), np.split(record, begin[1:]), strict=True):
            if number not in self._files:
                self._files[number] = (Path(self._folder.name) / f"part-{number}").open("wb")
            piece.tofile(self._files[number])

    @property
    def numbers(self) -> set[int]:
        """Parts that hold rows."""
        return set(self._files)

    def parts(self, first: int, last: int) -> Iterator[Rows]:
        """Give the rows of the parts from `first` up to `last`, all rows of a customer in one part."""
        for number in sorted(self._files.keys() & set(range(first, last))):
            handle = self._files[number]
            handle.close()
            record = np.fromfile(handle.name, self._record)
            Path(handle.name).unlink()
            columns = {name: record[name].copy() for name in self._held}
            del record
            yield Rows(**columns)

    def __enter__(self) -> Spill:
        """Start."""
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Remove the temporary files."""
        for handle in self._files.values():
            handle.close()
        self._folder.cleanup()
