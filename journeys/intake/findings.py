"""Faults and oddities of a log: counted by kind, with a few row numbers, never with what the cells hold."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pandas as pd

N_ROWS_SHOWN = 10

# Every kind of finding in the order in which it is told: what happened, and how to mend it.
MESSAGES = {
    "excluded": "left out because `exclude` says so",
    "missing_customer": "left out: no customer id; find out where the id gets lost, or exclude these rows",
    "missing_time": "left out: no time; repair the time column where the log is written",
    "missing_event": "left out: no event name; name these events where the log is written",
    "out_of_range_time": "left out: the time lies outside the years 1 to 9999; check the unit of the times",
    "before_log_start": "left out: earlier than log_start; set log_start earlier to count them",
    "after_as_of": "left out: later than as_of; set as_of later to count them",
    "too_late": "left out: older than what the ledger had counted by then; a longer `lateness` waits for such rows",
    "unmapped_event": "left out: `states` and `unmapped` drop this event; name it in `states` to count it",
    "duplicate": 'equal to an earlier row in every column read; duplicates="drop" counts each once',
    "ended_before": "left out: the customer had ended before the log begins, says the ended_before column",
    "after_outcome": 'left out: after the customer\'s first outcome; after_outcome="reopen" counts them',
    "before_opener": "left out: before the first state that may open a journey (`opens`)",
    "repeated_outcome": "the same outcome again within same_outcome_within: counted once",
    "outcome_without_states": "an outcome with nothing before it: a journey of one event; are events lost?",
    "began_after_outcome": "a journey begun after an outcome of the same customer; "
    'after_outcome="stop" leaves such rows out',
    "first_visit_of_unsure_journey": "first visit of a journey whose start was not seen: its length is "
    "unknown, so its move is not counted",
    "tied_times": "same customer and time as the row before: ordered as they came in; `sequence` orders them",
    "relinked": "the row bears an old id of a person in the identity table: counted as that person's",
    "late_link": "rows of the identity table that came after rows of their old id were counted: rebuild to mend it",
    "naive_times": "time without a zone, read as UTC; write times with their zone if they are local",
    "later_than_now": "the time lies in the future; check that clock, or set as_of to leave the rows out",
    "midnight_times": "every time is a midnight; if only days were recorded, pass a column of dates",
    "missing_sequence": "no sequence number: put after the numbered rows of the same customer and time",
    "missing_ended_before": "no value in the ended_before column: read as not ended",
    "missing_value": "no finite number in the value column: counted as worth 0",
    "sub_microsecond": "time finer than a microsecond: cut to whole microseconds",
}
UNREADABLE = ("missing_customer", "missing_time", "missing_event", "out_of_range_time")
_ORDER = {code: place for place, code in enumerate(MESSAGES)}


@dataclass(frozen=True, slots=True)
class _Count:
    """Number of rows of one kind, and the smallest row numbers."""

    n: int
    rows: tuple[int, ...]

    def __add__(self, other: _Count) -> _Count:
        return _Count(self.n + other.n, tuple(sorted(self.rows + other.rows)[:N_ROWS_SHOWN]))


class Findings:
    """Growing account of what was found in a log, by code and column.

    Examples
    --------
    >>> findings = Findings()
    >>> findings.add("missing_time", "happened", np.array([5, 3]))
    >>> findings.add("naive_times", "happened", 100)
    >>> findings.n("missing_time"), findings.to_frame()["rows"].tolist()
    (2, [[3, 5], []])
    """

    __slots__ = ("_counts",)

    def __init__(self) -> None:
        self._counts: dict[tuple[str, str], _Count] = {}

    def add(
        self, code: str, column: str, rows: NDArray[np.int64] | int | np.integer, *, n: int | None = None
    ) -> None:
        """Count rows of one kind; nothing is added where there are none.

        Parameters
        ----------
        code : str
            One of `MESSAGES`.
        column : str
            Column the finding is about.
        rows : ndarray of int64, or int
            Row numbers in the whole input, in any order; or only how many rows there are.
        n : int, optional
            Number of rows, where `rows` names only some of them.

        Raises
        ------
        ValueError
            If the code is unknown.
        """
        if code not in MESSAGES:
            raise ValueError(f"code: got {code!r}; wanted one of {', '.join(MESSAGES)}")
        few = rows if isinstance(rows, np.ndarray) else np.empty(0, dtype=np.int64)
        count = n if n is not None else len(rows) if isinstance(rows, np.ndarray) else int(rows)
        if count == 0:
            return
        if len(few) > N_ROWS_SHOWN:
            few = np.partition(few, N_ROWS_SHOWN)[:N_ROWS_SHOWN]
        new = _Count(count, tuple(sorted(few.tolist())))
        self._counts[code, column] = self._counts.get((code, column), _Count(0, ())) + new

    def n(self, code: str) -> int:
        """Count of the rows of one kind, over all columns.

        Parameters
        ----------
        code : str

        Returns
        -------
        int
        """
        return sum(count.n for (each, _), count in self._counts.items() if each == code)

    @property
    def n_unreadable(self) -> int:
        """Rows without a readable customer, time or event; what `limits` is about."""
        return sum(self.n(code) for code in UNREADABLE)

    def __add__(self, other: Findings) -> Findings:
        """Both accounts together; row numbers must be of the same input."""
        both = Findings()
        for part in (self, other):
            for key, count in part._counts.items():
                both._counts[key] = both._counts.get(key, _Count(0, ())) + count
        return both

    def __eq__(self, other: object) -> bool:
        """Return whether both hold the same counts and rows."""
        return isinstance(other, Findings) and self._counts == other._counts

    __hash__ = None  # type: ignore[assignment]

    def __repr__(self) -> str:
        """Write the counts in one line."""
        return f"Findings({', '.join(f'{code} {count.n}' for (code, _), count in self._sorted())})"

    def to_frame(self) -> pd.DataFrame:
        """Table of the findings.

        Returns
        -------
        pandas.DataFrame
            Columns code, column, n (rows), rows (the smallest row numbers, at most 10, from 0), message.
        """
        import pandas as pd

        records = [(*key, count.n, list(count.rows), MESSAGES[key[0]]) for key, count in self._sorted()]
        frame = pd.DataFrame.from_records(records, columns=["code", "column", "n", "rows", "message"])
        return frame.astype({"code": str, "column": str, "n": "int64", "rows": object, "message": str})

    def to_dict(self) -> dict[str, Any]:
        """Plain values that JSON can hold.

        Returns
        -------
        dict
        """
        return {
            "findings": [
                {"code": code, "column": column, "n": count.n, "rows": list(count.rows)}
                for (code, column), count in self._sorted()
            ]
        }

    @classmethod
    def from_dict(cls, stored: Mapping[str, Any]) -> Findings:
        """Account that `to_dict` wrote.

        Parameters
        ----------
        stored : mapping

        Returns
        -------
        Findings

        Raises
        ------
        ValueError
            If a code is unknown.
        """
        findings = cls()
        for item in stored["findings"]:
            rows = np.asarray(item["rows"], dtype=np.int64)
            findings.add(item["code"], item["column"], rows, n=int(item["n"]))
        return findings

    def _sorted(self) -> list[tuple[tuple[str, str], _Count]]:
        """Sort in the order of the table of messages."""
        return sorted(self._counts.items(), key=lambda item: (_ORDER[item[0][0]], item[0][1]))
