"""What intake hands to the tally: blocks of kept rows as plain arrays, and the codes of their events."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class Rows:
    """Block of kept rows, one array element per row, in input order.

    Attributes
    ----------
    key : ndarray of uint64, shape (n_rows,)
        Customer key, bucket-major (`identity.bucket_major`): sorting by it puts buckets side by side.
    time : ndarray of int64, shape (n_rows,)
        Microseconds since 1970-01-01 UTC.
    event : ndarray of int32, shape (n_rows,)
        Code of the event as written in the log (`EventCodes.names`), before `states` maps it.
    row : ndarray of int64, shape (n_rows,)
        Number of the row in the whole input, from 0.
    sequence : ndarray of int64, shape (n_rows,), or None
        Order among rows of a customer at the same time; a missing one is the largest int64.
    ended : ndarray of bool, shape (n_rows,), or None
        The `ended_before` column.
    by : ndarray of int32, shape (n_rows,), or None
        Code of the values in the group columns (`groups.GroupCodes`).
    value : ndarray of int64, shape (n_rows,), or None
        What the event is worth, in millionths; 0 where it is missing.

    Examples
    --------
    >>> rows = Rows(np.array([7, 8], "u8"), np.array([0, 5]), np.array([0, 0], "i4"), np.array([0, 1]))
    >>> len(rows), rows.take(np.array([1])).time.tolist()
    (2, [5])
    """

    key: NDArray[np.uint64]
    time: NDArray[np.int64]
    event: NDArray[np.int32]
    row: NDArray[np.int64]
    sequence: NDArray[np.int64] | None = None
    ended: NDArray[np.bool_] | None = None
    by: NDArray[np.int32] | None = None
    value: NDArray[np.int64] | None = None

    def __len__(self) -> int:
        """Return the number of rows."""
        return len(self.key)

    def take(self, index: NDArray[np.intp] | NDArray[np.bool_] | slice) -> Rows:
        """Rows at the given positions.

        Parameters
        ----------
        index : ndarray of int or bool, or slice

        Returns
        -------
        Rows
        """
        columns = {name: None if column is None else column[index] for name, column in self.columns().items()}
        return Rows(**columns)  # type: ignore[arg-type]

    def columns(self) -> dict[str, NDArray[Any] | None]:
        """Return the arrays by name."""
        return {field.name: getattr(self, field.name) for field in fields(self)}


def concat_rows(blocks: Sequence[Rows]) -> Rows:
    """Several blocks as one, in the order given.

    Parameters
    ----------
    blocks : sequence of Rows
        At least one; all with the same optional arrays.

    Returns
    -------
    Rows

    Examples
    --------
    >>> one = Rows(np.array([7], "u8"), np.array([0]), np.array([0], "i4"), np.array([0]))
    >>> len(concat_rows([one, one]))
    2
    """
    if len(blocks) == 1:
        return blocks[0]
    joined = {
        name: None if column is None else np.concatenate([getattr(block, name) for block in blocks])
        for name, column in blocks[0].columns().items()
    }
    return Rows(**joined)  # type: ignore[arg-type]


@dataclass(slots=True)
class EventCodes:
    """Growing list of the events of a log, each with its code.

    Attributes
    ----------
    names : list of str
        Events as written in the log, in order of first appearance; the code is the position.

    Examples
    --------
    >>> codes = EventCodes()
    >>> codes.encode(["visit", "basket", "visit"]).tolist(), codes.names
    ([0, 1, 0], ['visit', 'basket'])
    """

    names: list[str] = field(default_factory=list)
    _codes: dict[str, int] = field(default_factory=dict, repr=False)

    def __post_init__(self) -> None:
        """Give the names that are there at the start their codes."""
        self._codes = {name: code for code, name in enumerate(self.names)}

    def known(self, names: Sequence[str]) -> NDArray[np.int32] | None:
        """Codes of the given names, or None where one is new.

        Parameters
        ----------
        names : sequence of str

        Returns
        -------
        ndarray of int32, shape (n_names,), or None

        Examples
        --------
        >>> EventCodes(["visit", "basket"]).known(["basket"]).tolist()
        [1]
        """
        codes = [self._codes.get(name, -1) for name in names]
        return None if -1 in codes else np.array(codes, dtype=np.int32)

    def encode(self, names: Sequence[str]) -> NDArray[np.int32]:
        """Codes of the given names, new ones being added at the end.

        Parameters
        ----------
        names : sequence of str
            Distinct names, not one per row: this is a loop.

        Returns
        -------
        ndarray of int32, shape (n_names,)
        """
        codes = np.empty(len(names), dtype=np.int32)
        for position, name in enumerate(names):
            code = self._codes.setdefault(name, len(self._codes))
            if code == len(self.names):
                self.names.append(name)
            codes[position] = code
        return codes
