"""What a reader of files can raise where a file is damaged, or larger than it looks."""

from __future__ import annotations

import os

import pyarrow as pa

# Arrow's own faults, names that are not UTF-8, sizes that no integer holds, and what does not fit in memory.
UNREADABLE = (pa.ArrowException, OSError, ValueError, OverflowError, MemoryError)


def no_memory(path: str | os.PathLike[str]) -> str:
    """Say that a piece of a file did not fit in memory.

    Parameters
    ----------
    path : str or path-like

    Returns
    -------
    str

    Examples
    --------
    >>> no_memory("log.parquet")
    'log.parquet: a piece of it takes more memory than there is; write it again in smaller pieces'
    """
    return f"{os.fspath(path)}: a piece of it takes more memory than there is; write it again in smaller pieces"
