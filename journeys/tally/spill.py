"""The road for logs out of order: rows go to temporary files by customer, each file is sorted on its own."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from pathlib import Path
from types import TracebackType

import numpy as np

from journeys.intake.rows import Rows

N_PARTS = 64
_PART_SHIFT = np.uint64(58)
_RECORD = np.dtype([("key", "u8"), ("time", "i8"), ("event", "i4"), ("row", "i8"), ("sequence", "i8"), ("ended", "?")])


class Spill:
    """Rows on disk in parts by the leading bits of the customer's key; a context manager that cleans up."""

    def __init__(self) -> None:
        self._folder = tempfile.TemporaryDirectory(prefix="journeys-")
        self._files = [(Path(self._folder.name) / f"part-{part}").open("wb") for part in range(N_PARTS)]
        self._sequence = self._ended = False

    def add(self, rows: Rows) -> None:
        """Write a block of rows to the parts its customers belong to."""
        record = np.empty(len(rows.key), _RECORD)
        for name in ("key", "time", "event", "row"):
            record[name] = getattr(rows, name)
        self._sequence, self._ended = rows.sequence is not None, rows.ended is not None
        record["sequence"] = 0 if rows.sequence is None else rows.sequence
        record["ended"] = False if rows.ended is None else rows.ended
        part = (rows.key >> _PART_SHIFT).astype(np.uint8)
        order = np.argsort(part, kind="stable")
        record = record[order]
        ends = np.searchsorted(part[order], np.arange(N_PARTS), side="right")
        begin = 0
        for handle, end in zip(self._files, ends, strict=True):
            if end > begin:
                record[begin:end].tofile(handle)
            begin = end

    def parts(self) -> Iterator[Rows]:
        """Give each part's rows, all rows of a customer in one part."""
        for handle in self._files:
            handle.close()
            record = np.fromfile(handle.name, _RECORD)
            Path(handle.name).unlink()
            if len(record):
                yield Rows(
                    key=record["key"].copy(),
                    time=record["time"].copy(),
                    event=record["event"].copy(),
                    row=record["row"].copy(),
                    sequence=record["sequence"].copy() if self._sequence else None,
                    ended=record["ended"].copy() if self._ended else None,
                )

    def __enter__(self) -> Spill:
        """Start."""
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Remove the temporary files."""
        for handle in self._files:
            handle.close()
        self._folder.cleanup()
