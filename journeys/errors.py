"""The errors and warnings of the package: one small tree, so that one `except` can catch them all.

Wrong arguments of single functions raise plain `ValueError` or `TypeError`; what is below is for faults
that a person mends in the rules, in the log, or in a stored file.
"""

from __future__ import annotations

import os
import sys
import warnings
from pathlib import Path

_PACKAGE = f"{Path(__file__).parent}{os.sep}"


class JourneysError(Exception):
    """Base of every error the package raises by name.

    Examples
    --------
    >>> issubclass(RulesError, JourneysError) and issubclass(RulesError, ValueError)
    True
    """


class RulesError(JourneysError, ValueError):
    """The rules a log is to be read by are wrong or contradict each other (exit code 2)."""


class LogError(JourneysError, ValueError):
    """The log cannot carry what is asked of it (exit code 1)."""


class StoreError(JourneysError, ValueError):
    """A stored tally is damaged, of another format version, or not a tally at all (exit code 1)."""


class LimitError(JourneysError):
    """The log broke a quality limit of its rules; nothing was published (exit code 3)."""


class JourneysWarning(UserWarning):
    """Base of every warning the package gives by name."""


class EndNotSeenWarning(JourneysWarning):
    """The log ends before the slowest moves could be seen, so part of an answer rests on few data."""


class ShortLogWarning(JourneysWarning):
    """The log is too short for the silence of its rules: little or nothing in it is decided."""


class DeadEndWarning(JourneysWarning):
    """Some states lead to no outcome at all."""


def warn(message: str, kind: type[JourneysWarning]) -> None:
    """Warn at the line outside of the package that led here, however many calls lie between: that one can be mended.

    Parameters
    ----------
    message : str
        What happened, and what to do.
    kind : type
        The named warning.
    """
    depth, frame = 1, sys._getframe(1)
    while frame.f_back is not None and frame.f_code.co_filename.startswith(_PACKAGE):
        depth, frame = depth + 1, frame.f_back
    warnings.warn(message, kind, stacklevel=depth + 1)
