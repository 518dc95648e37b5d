"""What a kind of input is: how sound ones are made, and what must hold whatever has become of them.

A check takes a file and says "read" or "refused". It raises whatever else happens: that is a fault of the package.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

READ, REFUSED = "read", "refused"


@dataclass(frozen=True)
class Target:
    """One kind of input.

    Attributes
    ----------
    suffix : str
        How the names of such files end.
    seeds : callable
        Gives sound input, given an empty folder.
    check : callable
        Gives "read" or "refused" for a file, given a sound one's bytes too.
    """

    suffix: str
    seeds: Callable[[Path], list[bytes]]
    check: Callable[[Path], str]
