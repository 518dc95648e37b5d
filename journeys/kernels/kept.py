"""What was worked out of a chain and may be asked for again: the last few answers, within bounds of memory."""

from __future__ import annotations

from collections.abc import Callable, Hashable
from typing import TypeVar, cast

T = TypeVar("T")

ROOM = 8_000_000  # numbers held in all


class Kept:
    """A few answers, each by its key; those not asked for the longest make room for new ones.

    Parameters
    ----------
    room : int
        How many numbers may be held in all.

    Notes
    -----
    An answer must be the same whenever it is worked out, so that it makes no difference whether it was kept. It must
    not lead back to the owner of what is kept, or neither would be let go.

    Examples
    --------
    >>> kept = Kept(room=10)
    >>> kept.get("a", lambda: [1.0], len), kept.get("a", lambda: [2.0], len)
    ([1.0], [1.0])
    """

    def __init__(self, room: int = ROOM) -> None:
        """Hold nothing yet."""
        self._room = room
        self._held: dict[Hashable, tuple[object, int]] = {}

    def get(self, key: Hashable, make: Callable[[], T], size: Callable[[T], int]) -> T:
        """Return the answer of a key, worked out unless it is held.

        Parameters
        ----------
        key : hashable
            All that the answer depends on, but for the owner.
        make : callable
            Works it out.
        size : callable
            How many numbers it holds, or will hold; one that is larger than all the room is not kept.
        """
        held = self._held.pop(key, None)
        if held is None:
            made = make()
            held = (made, size(made))
        if held[1] > self._room:
            return cast("T", held[0])
        self._held[key] = held
        while sum(n for _, n in self._held.values()) > self._room:
            del self._held[next(iter(self._held))]
        return cast("T", held[0])
