"""Files that are there whole or not at all."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path


@contextmanager
def written_whole(path: str | os.PathLike[str]) -> Iterator[Path]:
    """Give a temporary path in the same folder; renamed to `path` when the block ends without an error.

    Parameters
    ----------
    path : str or path-like
        Where the file shall stand.

    Yields
    ------
    pathlib.Path
        Where to write.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     with written_whole(Path(folder) / "note.txt") as part:
    ...         _ = part.write_text("kept")
    ...     (Path(folder) / "note.txt").read_text()
    'kept'
    """
    target = Path(path)
    handle, name = tempfile.mkstemp(prefix=f".{target.name[:40]}-", suffix=".part", dir=target.parent)
    os.close(handle)
    part = Path(name)
    try:
        yield part
        # mkstemp makes the file private; a result should have the permissions any new file gets.
        mask = os.umask(0)
        os.umask(mask)
        part.chmod(0o666 & ~mask)
        part.replace(target)
    except BaseException:
        part.unlink(missing_ok=True)
        raise
