"""Files that are there whole or not at all."""

from __future__ import annotations

import errno
import os
import tempfile
from collections.abc import Iterator, Sequence
from contextlib import ExitStack, contextmanager
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

    Raises
    ------
    OSError
        If the folder is missing or may not be written in, or `path` is itself a folder, a pipe or a device.

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
    if target.is_dir():
        # Told before the work is done, and before a file beside it has been replaced.
        raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR), str(target))
    try:
        str(target).encode()
    except UnicodeEncodeError:
        # Arrow, which writes most of them, takes no other names.
        raise OSError(errno.EILSEQ, "the name is not UTF-8", str(target)) from None
    if target.exists() and not target.is_file():
        # A pipe, or a device such as /dev/null, would be replaced by a file.
        raise FileExistsError(errno.EEXIST, "is a pipe or a device, not a file", str(target))
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


@contextmanager
def written_together(paths: Sequence[str | os.PathLike[str]]) -> Iterator[list[Path]]:
    """Give a temporary path for each of several files; all are renamed when the block ends without an error.

    Parameters
    ----------
    paths : sequence of str or path-like
        Where the files shall stand.

    Yields
    ------
    list of pathlib.Path
        Where to write, in the order of `paths`.

    Raises
    ------
    OSError
        As in `written_whole`.
    """
    with ExitStack() as parts:
        yield [parts.enter_context(written_whole(path)) for path in paths]
