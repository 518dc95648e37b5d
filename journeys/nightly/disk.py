"""Every operation on a ledger's files, each a function of its own: what can fail, fails here."""

from __future__ import annotations

import os
from collections.abc import Iterable
from hashlib import blake2b
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from journeys.tally.tally import Tally

PART = ".part"
_AT_ONCE = 1 << 22


def make_folder(path: Path) -> None:
    """Make a folder, and those above it, where it is not there."""
    path.mkdir(parents=True, exist_ok=True)


def write(path: Path, data: Any) -> None:
    """Write bytes to a file and wait until they are on the disk; a link that stands there is not followed."""
    path.unlink(missing_ok=True)
    with path.open("xb") as file:
        file.write(data)
        file.flush()
        os.fsync(file.fileno())


def save_tally(path: Path, tally: Tally) -> None:
    """Write a tally to a file and wait until it is on the disk."""
    tally.save(path)
    with path.open("rb+") as file:
        os.fsync(file.fileno())


def rename(old: Path, new: Path) -> None:
    """Give a file another name, in place of the file that had it."""
    old.replace(new)


def settle(folder: Path) -> None:
    """Wait until the names in a folder are on the disk."""
    if os.name != "posix":
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def read(path: Path) -> bytes:
    """Return the bytes of a file."""
    return path.read_bytes()


def remove(path: Path) -> None:
    """Take a file away, if it is there."""
    path.unlink(missing_ok=True)


def files_in(folder: Path) -> list[Path]:
    """Return the files of a folder, none where there is no folder."""
    return sorted(path for path in folder.iterdir() if path.is_file()) if folder.is_dir() else []


def digest(data: Any) -> str:
    """Return the checksum of bytes."""
    return blake2b(data, digest_size=16).hexdigest()


def digest_of_file(path: Path) -> str:
    """Return the checksum of a file, read piece by piece."""
    sums = blake2b(digest_size=16)
    for piece in _pieces(path):
        sums.update(piece)
    return sums.hexdigest()


def _pieces(path: Path) -> Iterable[bytes]:
    with path.open("rb") as file:
        while piece := file.read(_AT_ONCE):
            yield piece
