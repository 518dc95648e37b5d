"""The identity table: people first seen under another id, and since when that is known."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.checks import MIN_TIME_US
from journeys.errors import LogError
from journeys.intake.arrays import is_missing, plain
from journeys.intake.findings import Findings
from journeys.intake.id_key import IdKey
from journeys.intake.identity import customer_keys
from journeys.intake.read import LogSource, open_log
from journeys.intake.times import TimeReader

OLD, ID, SINCE = COLUMNS = ("old", "id", "since")
Keys = NDArray[np.uint64]


@dataclass(frozen=True, slots=True, eq=False)
class Links:
    """Old ids and the people they belong to, by key; 32 bytes for each.

    Attributes
    ----------
    old : ndarray of uint64, shape (n_links,)
        Keys of old ids, rising.
    person : ndarray of uint64, shape (n_links,)
        Key of the person at the end of the chain of links.
    since_us : ndarray of int64, shape (n_links,)
        When the link became known, in microseconds since 1970 UTC.
    row : ndarray of int64, shape (n_links,)
        Its row in the table.
    kind : {"integer", "text"}
        Kind of the ids.
    """

    old: Keys
    person: Keys
    since_us: NDArray[np.int64]
    row: NDArray[np.int64]
    kind: str

    def __len__(self) -> int:
        """Return the number of old ids."""
        return len(self.old)

    def are_old(self, keys: Keys) -> NDArray[np.bool_] | None:
        """Mark the keys of old ids; None if there are none.

        Parameters
        ----------
        keys : ndarray of uint64, shape (n_rows,)

        Returns
        -------
        ndarray of bool, shape (n_rows,), or None
        """
        there = self.old[self._places(keys)] == keys
        return there if there.any() else None

    def people(self, keys: Keys) -> Keys:
        """Put the person's key in the place of that of an old id.

        Parameters
        ----------
        keys : ndarray of uint64, shape (n_rows,)

        Returns
        -------
        ndarray of uint64, shape (n_rows,)
        """
        place = self._places(keys)
        return np.where(self.old[place] == keys, self.person[place], keys)

    def late(self, watermark_us: int, counted: Keys | None = None) -> Findings:
        """Links that came after rows of their old id were counted: what only counting again can mend.

        Parameters
        ----------
        watermark_us : int
            Up to when rows were counted, in microseconds since 1970 UTC.
        counted : ndarray of uint64, shape (n_people,), optional
            Keys, as `identity.customer_keys` gives them, of the people counted so far. With them it is known
            which old ids were counted as people of their own, whatever `since` says; without them every link
            known only after the watermark is taken for late.

        Returns
        -------
        Findings
            Code "late_link", with the rows of the identity table.

        Examples
        --------
        >>> import pandas as pd
        >>> table = pd.DataFrame({"old": [8, 9], "id": [1, 1], "since": pd.to_datetime(["2025-01-01", "2025-03-01"])})
        >>> links = read_links(table)
        >>> late = links.late(1_738_368_000_000_000)
        >>> late.to_frame()[["code", "n", "rows"]].values.tolist()
        [['late_link', 1, [1]]]
        """
        late = self.since_us > watermark_us if counted is None else np.isin(self.old, counted)
        findings = Findings()
        findings.add("late_link", OLD, self.row[late])
        return findings

    def _places(self, keys: Keys) -> NDArray[np.intp]:
        """Where each key stands among the old ones, if it is there."""
        return np.minimum(np.searchsorted(self.old, keys), len(self.old) - 1)


def read_links(source: Any, id_key: IdKey | None = None) -> Links:
    """Links of an identity table, chains followed to their ends.

    Parameters
    ----------
    source : log
        Anything `open_log` takes, with the columns `old` (an id that rows bear), `id` (the person's, or another
        old one) and `since` (a time; empty: known from the beginning).
    id_key : IdKey, optional
        Secret of the hash that the log's ids go through.

    Returns
    -------
    Links

    Raises
    ------
    LogError
        If an id is missing, one old id is linked to two, links go in a circle, or ids are of two kinds.

    Examples
    --------
    >>> import pandas as pd, pyarrow as pa
    >>> table = pd.DataFrame({"old": ["app-7", "web-3"], "id": ["web-3", "ann"], "since": pd.NaT})
    >>> links = read_links(table)
    >>> keys, _ = customer_keys(pa.array(["app-7", "web-3", "ann", "bea"]))
    >>> bool((links.people(keys) == keys[[2, 2, 2, 3]]).all())
    True
    """
    old, person, since_us, kind = _columns(open_log(source, COLUMNS, ids=(OLD, "id")), id_key)
    row = np.arange(len(old))
    # A link of an id to itself says nothing; of equal links the first known counts.
    order = np.lexsort((row, since_us, old))
    order = order[(old != person)[order]]
    first = np.ones(len(order), dtype=bool)
    first[1:] = old[order][1:] != old[order][:-1]
    _check_one_person(old[order], person[order], row[order], first)
    order = order[first]
    old, person = old[order], person[order]
    return Links(old, _ends(old, person, row[order]), since_us[order], row[order], kind or "integer")


def _columns(log: LogSource, id_key: IdKey | None) -> tuple[Keys, Keys, NDArray[np.int64], str | None]:
    """Read the table as keys and times."""
    times, kind, n_rows = TimeReader(SINCE), None, 0
    parts: list[tuple[Keys, Keys, NDArray[np.int64]]] = []
    for batch in log.batches(COLUMNS):
        found = []
        for name in (OLD, ID):
            array = plain(batch.column(name))
            missing = is_missing(array)
            if missing is not None:
                where = n_rows + int(np.argmax(missing))
                raise LogError(f"identity table: row {where} has no {name!r}; wanted both ids in every row")
            keys, kind = customer_keys(array, kind, id_key)
            found.append(keys)
        when = times.read(batch.column(SINCE))
        parts.append((found[0], found[1], np.where(when.usable(), when.us, MIN_TIME_US)))
        n_rows += batch.num_rows
    if not parts:
        empty = np.zeros(0, dtype=np.uint64)
        return empty, empty, np.zeros(0, dtype=np.int64), None
    old, person, since = (np.concatenate(column) for column in zip(*parts, strict=True))
    return old, person, since, kind


def _check_one_person(old: Keys, person: Keys, row: NDArray[np.int64], first: NDArray[np.bool_]) -> None:
    """Raise if an old id is linked to two others; links come sorted by old id."""
    other = ~first
    other[1:] &= person[1:] != person[:-1]
    if other.any():
        at = int(np.argmax(other))
        raise LogError(
            f"identity table: rows {row[at - 1]} and {row[at]} link the same old id to two people; keep one of them"
        )


def _ends(old: Keys, person: Keys, row: NDArray[np.int64]) -> Keys:
    """Follow every chain of links to its end, all at once, the distance doubling each time."""
    if not len(old):
        return person
    step = np.minimum(np.searchsorted(old, person), len(old) - 1)
    # The last link of a chain stays where it is.
    step = np.where(old[step] == person, step, np.arange(len(old)))
    for _ in range(len(old).bit_length()):
        step = step[step]
    last = person[step]
    circles = np.isin(last, old)
    if circles.any():
        raise LogError(
            f"identity table: the links of row {row[int(np.argmax(circles))]} go in a circle; "
            "wanted each chain to end in an id that is no old one"
        )
    return last
