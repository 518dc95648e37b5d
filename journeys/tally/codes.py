"""Codes of states while a log streams by."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from journeys.errors import LogError
from journeys.kernels.records import FIRST_OUTCOME
from journeys.tally.keys import MOST_CODES


class StateCodes:
    """Codes of lapsed, open and the outcomes, fixed by the rules, then of the states as they turn up."""

    def __init__(self, outcomes: tuple[str, ...], reserved: tuple[str, ...] = ()) -> None:
        self.names: list[str] = ["lapsed", "open", *outcomes]
        self._first_state = FIRST_OUTCOME + len(outcomes)
        self._code = {name: code for code, name in enumerate(self.names)}
        self._of_event = np.empty(0, np.int32)
        self._seen: set[str] = set()
        for name in reserved:
            self._add(name)

    @property
    def states(self) -> list[str]:
        """States in the order of their codes."""
        return self.names[self._first_state :]

    @property
    def seen(self) -> list[str]:
        """States that have turned up, in alphabetical order; a reserved one may not have."""
        return sorted(name for name in self.states if name in self._seen)

    def resume(self, states: Sequence[str], seen: Sequence[str]) -> None:
        """Go on with the states of an earlier count, in the order of their codes, and those that had turned up."""
        for name in states:
            if name not in self._code:
                self._add(name)
        self._seen.update(seen)

    def code(self, name: str) -> int:
        """Return the code of a name that has one."""
        return self._code[name]

    def of_events(self, targets: Sequence[str | None]) -> NDArray[np.int32]:
        """Return the code of each raw event, given the name it is mapped to (None: dropped, code -1)."""
        new = targets[len(self._of_event) :]
        if new:
            # States that turn up together get their codes in alphabetical order, which mostly saves a sort at the end.
            for name in sorted({name for name in new if name is not None} - self._code.keys()):
                self._add(name)
            self._seen.update(name for name in new if name is not None)
            codes = [-1 if name is None else self._code[name] for name in new]
            self._of_event = np.concatenate([self._of_event, np.array(codes, np.int32)])
        return self._of_event

    def _add(self, name: str) -> None:
        if len(self.names) >= MOST_CODES:
            msg = (
                f"more than {MOST_CODES:,} different states; wanted names of what people do: if the events hold "
                "ids or addresses, map them to a few names with `states` and `unmapped`"
            )
            raise LogError(msg)
        self._code[name] = len(self.names)
        self.names.append(name)
