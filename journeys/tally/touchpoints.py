"""Numbers of touchpoints: as they are counted while a log streams by, and as they stand in a finished tally."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from journeys.errors import LogError
from journeys.intake.rule_checks import ALL, MOST_TOUCHPOINTS
from journeys.kernels.arrays import IntArray
from journeys.tally.accumulate import Columns
from journeys.tally.codes import StateCodes
from journeys.tally.tables import MOST_IN_SETS, NARROW

if TYPE_CHECKING:
    from journeys.intake.rules import JourneyRules


@dataclass(frozen=True)
class Places:
    """Where the touchpoints stand in the end: their positions among the labels, and their bits in a set, by number."""

    label: IntArray
    bit: IntArray

    def placed(self, name: str, table: Columns) -> Columns:
        """Return a table of touches with positions among the labels, or bits, in place of the numbers counted by.

        Its rows are not sorted by them.
        """
        if name == "touches":
            return table | {"state": self.label[table["state"]].astype(NARROW["state"])}
        if name == "touch_sets" and len(self.bit) <= MOST_IN_SETS:
            return table | {"set": moved_bits(table["set"], self.bit)}
        return table


class Touchpoints:
    """Gives touchpoints their numbers, from 1: those that are named in their order, all states as they turn up."""

    def __init__(self, rules: JourneyRules) -> None:
        self.any = bool(rules.touchpoints)
        self._all = rules.touchpoints == ALL
        self.names: list[str] = list(rules.named_touchpoints)

    def of_codes(self, codes: StateCodes) -> NDArray[np.int8] | None:
        """Return the number of each code, 0 where it is no touchpoint; None where there are none.

        Raises
        ------
        LogError
            If there are too many states to count the touches of all.
        """
        if not self.any:
            return None
        if self._all:
            known = set(self.names)
            self.names += [name for name in codes.seen if name not in known]
            check_number(self.names)
        number = np.zeros(len(codes.names), np.int8)
        number[[codes.code(name) for name in self.names]] = np.arange(1, len(self.names) + 1)
        return number

    def places(self, codes: StateCodes, label_of_code: IntArray) -> Places:
        """Return where the touchpoints stand in the end."""
        label = np.concatenate([np.zeros(1, np.int64), label_of_code[[codes.code(name) for name in self.names]]])
        bit = np.arange(len(self.names))
        if self._all:
            bit[np.argsort(label[1:])] = np.arange(len(self.names))
        return Places(label, bit)


def check_number(states: Sequence[str]) -> None:
    """Raise if there are too many states to count the touches of all."""
    if len(states) > MOST_TOUCHPOINTS:
        msg = (
            f'touchpoints: got "{ALL}", but there are more than {MOST_TOUCHPOINTS} states; wanted up to '
            f'{MOST_TOUCHPOINTS} of them by name: touchpoints=["…"]'
        )
        raise LogError(msg)


def moved_bits(sets: NDArray[Any], to: IntArray) -> NDArray[Any]:
    """Return sets whose bit i stands at `to[i]`.

    Parameters
    ----------
    sets : ndarray of whole numbers
        Sets, bit i for the i-th touchpoint.
    to : ndarray of int64, shape (n_touchpoints,)
        New places; of a touchpoint in no set any will do.

    Returns
    -------
    ndarray
        Of the same type.

    Examples
    --------
    >>> moved_bits(np.array([0b011, 0b100]), np.array([2, 0, 1])).tolist()
    [5, 2]
    """
    moved = np.zeros(len(sets), np.int64)
    for i, place in enumerate(to.tolist()):
        has = (sets >> sets.dtype.type(i)) & sets.dtype.type(1)
        if has.any():
            moved |= has.astype(np.int64) << place
    return moved.astype(sets.dtype)
