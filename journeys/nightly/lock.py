"""One run at a time: a lock on a ledger that the system lets go of when its holder ends, however that comes."""

from __future__ import annotations

import contextlib
import datetime as dt
import importlib
import os
import platform
from collections.abc import Iterator
from pathlib import Path
from typing import IO

from journeys.errors import JourneysError, StoreError

NAME = "lock"


class LockedError(JourneysError):
    """Another run holds the ledger (exit code 1)."""


@contextlib.contextmanager
def held(folder: Path) -> Iterator[None]:
    """Hold a ledger while the block runs.

    Parameters
    ----------
    folder : Path
        The ledger, which is there.

    Raises
    ------
    LockedError
        Naming who holds it.
    StoreError
        If the lock is a link, which would have something else written over.
    """
    path = folder / NAME
    if path.is_symlink():
        raise StoreError(f"{path} is a link; wanted a ledger whose files are its own: take the link away")
    with path.open("a+", encoding="utf-8") as file:
        try:
            _lock(file)
        except OSError:
            file.seek(0)
            who = file.read(200).strip() or "somebody who has not said who it is"
            msg = f"{folder}: the ledger is held by {who}; wait until that run has ended, then run again"
            raise LockedError(msg) from None
        file.truncate(0)
        now = dt.datetime.now(dt.UTC).isoformat(timespec="seconds")
        file.write(f"process {os.getpid()} on {platform.node()} since {now}")
        file.flush()
        try:
            yield
        finally:
            with contextlib.suppress(OSError):
                file.truncate(0)


def _lock(file: IO[str]) -> None:
    """Lock a file until it is closed, or raise OSError."""
    try:
        fcntl = importlib.import_module("fcntl")
    except ImportError:
        msvcrt = importlib.import_module("msvcrt")
        # A byte far beyond what is written, so that others can read who holds it.
        file.seek(1 << 20)
        msvcrt.locking(file.fileno(), msvcrt.LK_NBLCK, 1)
        return
    fcntl.flock(file.fileno(), fcntl.LOCK_EX | fcntl.LOCK_NB)
