"""Words in and out of a command: paths as given, answers to standard output, faults as one line."""

from __future__ import annotations

import argparse
import io
import os
import sys
from contextlib import suppress
from pathlib import Path

# Several faults are told at once; the name of a file may be thousands of signs long.
_LONGEST_LINE = 4_000


class PrintError(Exception):
    """Standard output did not take the answer; what was written to files stands."""


def named(path: str) -> str:
    """Return a path that a file can have; an empty one is what a variable of the shell that is not set gives."""
    try:
        path.encode()
    except UnicodeEncodeError:
        msg = "the path is not UTF-8"
        raise argparse.ArgumentTypeError(msg) from None
    if not path or "\0" in path:
        msg = "the path is empty" if not path else "the path holds a zero byte"
        raise argparse.ArgumentTypeError(msg)
    return path


def tell(answer: str) -> None:
    """Print the answer to its end, whatever standard output can hold of it."""
    if sys.stdout is None:  # closed by whoever started the program
        return
    if isinstance(sys.stdout, io.TextIOWrapper):
        # A terminal that lacks a sign shows its number instead.
        sys.stdout.reconfigure(errors="backslashreplace")
    try:
        sys.stdout.write(answer)
        sys.stdout.flush()
    except OSError as error:
        # What is left in the buffer would be written, and fail, once more at the end.
        with Path(os.devnull).open("w") as nowhere, suppress(OSError, ValueError):
            os.dup2(nowhere.fileno(), sys.stdout.fileno())
        msg = f"standard output: {error.strerror}; files named above are whole"
        raise PrintError(msg) from error


def one_line(message: str) -> str:
    """Return a message as one line that does not steer the terminal, whatever a file or a name in it holds."""
    line = "; and ".join(stripped for line in message.splitlines() if (stripped := line.strip()))
    if len(line) > _LONGEST_LINE:
        line = f"{line[: _LONGEST_LINE // 2]} … {line[-_LONGEST_LINE // 2 :]}"
    return "".join(char if char.isprintable() else " " for char in line)
