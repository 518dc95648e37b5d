"""Which change alarms tell of too few people: they trip all the same, but their numbers are not shown."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray
from journeys.questions.week_changes import CONVERTED
from journeys.tally.weeks import JOURNEY, STAY

# What an alarm that is not shown leaves out.
NUMBERS = ("before", "now", "difference", "low", "high", "p_value_corrected")


@dataclass(frozen=True, eq=False)
class Behind:
    """Who is behind the shares that are compared for a week.

    Attributes
    ----------
    table : mapping of str to ndarray
        Columns bucket, state, next, flag, week and n of `tally.weeks`.
    names : sequence of str
        What the codes of states stand for.
    sides : tuple of two ndarray of bool
        Rows of the weeks before, and of the week.
    keep : mapping of (column, group) to ndarray of bool
        Rows of all journeys, of ("", ""), and of each group.
    least : int
        Fewer people than this are few; counted by buckets of customers, a lower bound.
    """

    table: Mapping[str, NDArray[Any]]
    names: Sequence[str]
    sides: tuple[BoolArray, BoolArray]
    keep: Mapping[tuple[str, str], BoolArray]
    least: int

    def few(self, tripped: Sequence[Mapping[Any, Any]]) -> list[bool]:
        """Tell of each share that tripped whether too few people are behind it, or behind what is left beside it.

        Neither those who went that way nor those who did not may be few, before or now, in the group or in all others
        together; and of the moves out of a state those that are not told may not be, since the others are.
        """
        if self.least < 2:
            return [False] * len(tripped)
        found = [self._fewest(one) < self.least for one in tripped]
        for state in {(one["by"], one["group"], one["state"]) for one in tripped if one["measure"] != CONVERTED}:
            mine = [i for i, one in enumerate(tripped) if one["measure"] != CONVERTED
                    and (one["by"], one["group"], one["state"]) == state]  # fmt: skip
            told = sorted((i for i in mine if not found[i]), key=lambda i: self._made([tripped[i]]))
            while told and self._made([tripped[i] for i in told], told=False) < self.least:
                found[told.pop(0)] = True
        return found

    def _fewest(self, one: Mapping[Any, Any]) -> float:
        """Return the smallest number of people behind a part of a share, infinite where every part is of nobody."""
        keep = self.keep[one["by"], one["group"]]
        rows, went = self._of(one), self._went([one])
        groups = [keep, ~keep] if one["by"] else [keep]
        return min(self._people(rows & group & way) for group in groups for way in (went, ~went))

    def _made(self, moves: Sequence[Mapping[Any, Any]], *, told: bool = True) -> float:
        """Return how many people made one of some moves out of a state, or one that is not among them."""
        one, went = moves[0], self._went(moves)
        return self._people(self._of(one) & self.keep[one["by"], one["group"]] & (went if told else ~went))

    def _of(self, one: Mapping[Any, Any]) -> BoolArray:
        if one["measure"] == CONVERTED:
            return np.asarray(self.table["flag"] == JOURNEY)
        return np.asarray((self.table["flag"] == STAY) & (self.table["state"] == self.names.index(one["state"])))

    def _went(self, told: Sequence[Mapping[Any, Any]]) -> BoolArray:
        codes = [1 if one["measure"] == CONVERTED else self.names.index(one["next_state"]) for one in told]
        return np.isin(self.table["next"], codes)

    def _people(self, rows: BoolArray) -> float:
        """Return the smaller number of people of both sides; nobody tells of nobody."""
        seen = (len(np.unique(self.table["bucket"][rows & side & (self.table["n"] > 0)])) for side in self.sides)
        return min((float(n) for n in seen if n), default=np.inf)


def not_told(alarm: Mapping[str, Any], what: str, least: int) -> dict[str, Any]:
    """Return an alarm without its numbers; `what` says which it is."""
    said = f"{what} has changed; the numbers are left out: fewer than {least} people here or beside it"
    return {**alarm, **{name: None for name in NUMBERS if name in alarm}, "said": said}
