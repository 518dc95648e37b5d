"""A ledger on disk: read what it holds, write the next generation beside it, and swap the manifest."""

from __future__ import annotations

import contextlib
import logging
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from threading import Lock
from typing import Any

from journeys.errors import StoreError
from journeys.intake.rows import Rows
from journeys.nightly import disk
from journeys.nightly.lock import NAME as LOCK
from journeys.nightly.manifest import NAME as MANIFEST
from journeys.nightly.manifest import Counted, Generation, Manifest, Stored, damaged, read_manifest
from journeys.nightly.state import kept_bytes, kept_from, rows_bytes, rows_from
from journeys.tally.store import load
from journeys.tally.tally import Tally
from journeys.tally.worker import Kept

logger = logging.getLogger("journeys")

# The last generation of a month is told by the month it was read up to.
_MONTH = len("2025-06")


class Ledger:
    """A ledger's folder and what its manifest says.

    Parameters
    ----------
    folder : Path
        Where it is; made by `begun`.
    manifest : Manifest or None
        None: nothing has been counted yet.
    replaced : Manifest or None
        The one that a ledger begun anew is to take the place of.
    next_number : int
        The number that the next generation gets.
    """

    def __init__(
        self, folder: Path, manifest: Manifest | None, replaced: Manifest | None = None, next_number: int = 1
    ) -> None:
        self.folder, self.manifest, self.replaced = folder, manifest, replaced
        self.next_number = next_number if manifest is None else manifest.number + 1

    @property
    def learned(self) -> dict[str, Any] | None:
        """What earlier nights have learned of the log."""
        return None if self.manifest is None else self.manifest.learned

    @property
    def counted(self) -> dict[str, Counted]:
        """The inputs counted so far, by name."""
        return {} if self.manifest is None else {one.name: one for one in self.manifest.inputs}

    @property
    def old_generations(self) -> list[Generation]:
        """The whole ones among the generations of the ledger that this one takes the place of."""
        return [] if self.replaced is None else [one for one in self.replaced.generations if self._is_whole(one.tally)]

    def part(self, number: int) -> Kept | None:
        """Return what is kept of a part, None where there is nothing."""
        stored = None if self.manifest is None else self.manifest.parts.get(str(number))
        return None if stored is None else self._read(stored, kept_from)

    def held(self) -> Rows | None:
        """Return the rows that wait."""
        stored = None if self.manifest is None else self.manifest.held
        return None if stored is None else self._read(stored, rows_from)

    def tally(self, generation: Generation) -> Tally:
        """Return the counts of a generation."""
        path = self.folder / generation.tally.file
        if not self._is_whole(generation.tally):
            raise StoreError(damaged(path))
        return load(path)

    def check(self) -> None:
        """Raise a StoreError if any file is not what was written."""
        for stored in () if self.manifest is None else self.manifest.files:
            if not self._is_whole(stored):
                raise StoreError(damaged(self.folder / stored.file))

    def check_newest(self) -> None:
        """Raise a StoreError if the newest counts are not what was written: a night leaves them unread."""
        newest = None if self.manifest is None else self.manifest.newest
        if newest is not None and not self._is_whole(newest.tally):
            raise StoreError(damaged(self.folder / newest.tally.file))

    def clean(self) -> None:
        """Take away what runs that were cut off have left, and what the manifest no longer names."""
        named = {MANIFEST, LOCK, *(stored.file for stored in (self.manifest.files if self.manifest else ()))}
        for path in disk.files_in(self.folder):
            if path.name not in named and _is_ours(path.name):
                try:
                    disk.remove(path)
                except OSError as fault:
                    # Nothing depends on it; the next night tries again.
                    logger.warning("%s: could not be removed: %s", path, fault.strerror)

    def _is_whole(self, stored: Stored) -> bool:
        path = self.folder / stored.file
        try:
            return path.stat().st_size == stored.size and disk.digest_of_file(path) == stored.checksum
        except FileNotFoundError:
            return False

    def _read(self, stored: Stored, made: Callable[[bytes], Any]) -> Any:
        path = self.folder / stored.file
        try:
            data = disk.read(path)
        except FileNotFoundError:
            raise StoreError(damaged(path)) from None
        if disk.digest(data) != stored.checksum:
            raise StoreError(damaged(path))
        return made(data)


def opened(folder: Path) -> Ledger:
    """Return the ledger in a folder; an empty or missing folder is one in which nothing has been counted.

    Raises
    ------
    StoreError
        If the folder holds other things, or a damaged ledger.
    """
    manifest = read_manifest(folder)
    if manifest is None:
        foreign = [path.name for path in disk.files_in(folder) if path.name != LOCK and not _is_ours(path.name)]
        if foreign:
            msg = f"{folder} is no ledger: it holds {foreign[0]!r}; wanted a folder of its own, new or empty"
            raise StoreError(msg)
    return Ledger(folder, manifest)


class Draft:
    """The next generation while it is written beside the present one.

    Nothing counts until `commit`; where that is not reached, `drop` takes away what was written.
    """

    def __init__(self, ledger: Ledger) -> None:
        self._ledger, self._folder = ledger, ledger.folder
        self._there = {stored.file for stored in (ledger.manifest.files if ledger.manifest else ())}
        # Files that another manifest names are in use until it is replaced.
        self._in_use = {stored.file for stored in (ledger.replaced.files if ledger.replaced else ())}
        self._written: list[Path] = []
        self._lock = Lock()

    def part(self, number: int, kept: Kept) -> Stored:
        """Write what is kept of a part."""
        return self.bytes(f"part-{number:02d}", kept_bytes(kept))

    def held(self, rows: Rows) -> Stored:
        """Write rows that wait."""
        return self.bytes("held", rows_bytes(rows))

    def bytes(self, name: str, data: Any) -> Stored:
        """Write bytes to a file named for them, unless it is there."""
        checksum = disk.digest(data)
        stored = Stored(f"{name}-{checksum}.arrow", memoryview(data).nbytes, checksum)
        if stored.file not in self._there:
            self._put(stored.file, lambda part: disk.write(part, data))
        return stored

    def tally(self, number: int, tally: Tally) -> Stored:
        """Write the counts of a generation."""
        part = self._folder / f"tally-{number:06d}{disk.PART}"
        self._note(part)
        disk.save_tally(part, tally)
        checksum = disk.digest_of_file(part)
        stored = Stored(f"tally-{number:06d}-{checksum}.parquet", part.stat().st_size, checksum)
        self._note(self._folder / stored.file)
        disk.rename(part, self._folder / stored.file)
        return stored

    def commit(self, manifest: Manifest) -> Ledger:
        """Make the new generation the present one, and return the ledger."""
        part = self._folder / (MANIFEST + disk.PART)
        disk.settle(self._folder)
        self._note(part)
        disk.write(part, manifest.to_bytes())
        disk.rename(part, self._folder / MANIFEST)
        self._written = []
        disk.settle(self._folder)
        return Ledger(self._folder, manifest)

    def drop(self) -> None:
        """Take away what was written."""
        for path in self._written:
            with contextlib.suppress(OSError):
                disk.remove(path)

    def _put(self, name: str, write: Callable[[Path], None]) -> None:
        part = self._folder / (name + disk.PART)
        self._note(part)
        write(part)
        self._note(self._folder / name)
        disk.rename(part, self._folder / name)

    def _note(self, path: Path) -> None:
        if path.name not in self._in_use:
            with self._lock:
                self._written.append(path)


def kept_generations(generations: list[Generation], newest: Generation) -> list[Generation]:
    """Return the generations to keep: the newest, and before it the last of each month.

    Parameters
    ----------
    generations : list of Generation
        Those kept so far, rising.
    newest : Generation
        The one just made.
    """
    from journeys.checks import instant_text

    last = {instant_text(one.as_of_us)[:_MONTH]: one for one in [*generations, newest]}
    return sorted({one.number: one for one in last.values()}.values(), key=lambda one: one.number)


def without_old(manifest: Manifest, newest: Generation) -> Manifest:
    """Return a manifest with its newest generation added and older ones of the same month left out."""
    return replace(manifest, generations=kept_generations(manifest.generations, newest))


def _is_ours(name: str) -> bool:
    """Tell whether a name is one that a ledger gives its files."""
    stem = name.lstrip(".")
    return stem.startswith(("part-", "held-", "tally-", MANIFEST))
