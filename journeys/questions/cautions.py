"""What to keep in mind beside an answer, in plain words, for summaries and reports alike."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence

ASSOCIATION = (
    "This is association, not cause: whoever comes by a touchpoint differs from whoever does not. A reminder sent "
    "only to full baskets always scores high."
)
UNRECORDED = "Touches that nobody recorded get nothing."
UPPER_LIMIT = (
    "A removal effect is the share of those who convert that passed here: an upper limit of what could be lost, since "
    "some would have come another way. Effects do not add up to 1; credit does."
)
OTHER_END = (
    "Letting others take over is the other end of the range: it may be negative, where those who go elsewhere convert "
    "more often."
)
SKIPPED = "Skipping a touchpoint leaves the share that converts as it is; only steps and time change."
EVEN_SPLIT = "An even split is a convention: it says who was there, not who brought it about."
ONE_TAKES_ALL = (
    "First and last are conventions too: one touchpoint is given all of a conversion, and the others nothing."
)
HEAVY_TAIL = (
    "Means of money rest on few: where one customer holds much of the value, the next log may say something else."
)
ONE_AT_A_TIME = (
    "Each row changes one move alone and takes the mass from journeys that ended without converting; whatever makes "
    "a move likelier in earnest brings other people too."
)
RARER_EXIT = "A rarer exit is not better service."
STAFF = "Touchpoints that are named staff are employment data."


def told(cautions: Sequence[str], width: int = 100) -> str:
    """Return cautions as lines of text, one paragraph each.

    Parameters
    ----------
    cautions : sequence of str
        Sentences of this module.
    width : int
        Longest line.

    Returns
    -------
    str

    Examples
    --------
    >>> print(told([UNRECORDED, RARER_EXIT]))
    Touches that nobody recorded get nothing.
    A rarer exit is not better service.
    """
    return "\n".join(textwrap.fill(text, width) for text in cautions)
