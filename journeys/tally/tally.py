"""The tally: what one pass over the log leaves behind. Small, additive, without a customer id."""

from __future__ import annotations

import json
import os
from dataclasses import dataclass, replace
from functools import cached_property
from hashlib import blake2b
from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.checks import instant_text
from journeys.errors import JourneysError
from journeys.intake.findings import Findings
from journeys.intake.rules import JourneyRules
from journeys.kernels.records import FIRST_OUTCOME, LAPSED, OPEN
from journeys.tally.accumulate import Columns, add_up, exact_limbs
from journeys.tally.groups import Group, merged_groups, picked
from journeys.tally.tables import (
    CODED,
    FLAGS,
    KEYS,
    NARROW,
    SUMS,
    TABLES,
    join_key,
    split_key,
)

if TYPE_CHECKING:
    from typing import Self

    import pandas as pd

@dataclass(frozen=True, eq=False)
class Tally:
    """Counts and sums of one event log, read by `rules`; made by `journeys.tally`.

    Parameters
    ----------
    rules : JourneyRules
        How the log was read.
    states : tuple of str
        The states seen, in alphabetical order.
    log_start_us, as_of_us : int
        The span of the log, microseconds UTC.
    whole_days : bool
        True where the log holds dates without a time.
    n_rows : int
        Rows read, whatever became of them.
    moves, entries, journeys, gaps, stages, customers : mapping of str to ndarray
        The tables, one array per column, sorted by their keys; states and outcomes as positions in `labels`,
        groups as positions in `groups`.
    record : Findings
        What was left out or looked odd.
    groups : tuple of tuple
        Values of the columns `rules.by`, one tuple per group of journeys; empty where they are not grouped.
    part : bool
        The tally holds some of the groups of another (see `where`).

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.tally.count import count_log
    >>> days = pd.to_datetime(["2025-01-01", "2025-01-02", "2025-03-01"], utc=True)
    >>> log = pd.DataFrame({"member": [1, 1, 2], "event": ["visit", "joined", "visit"], "happened": days})
    >>> tally = count_log(log, JourneyRules("member", "happened", "event", converted="joined", silence="30d"))
    >>> tally.states, tally.n_people, tally.n_journeys
    (('visit',), 2, 2)
    """

    rules: JourneyRules
    states: tuple[str, ...]
    log_start_us: int
    as_of_us: int
    whole_days: bool
    n_rows: int
    moves: Columns
    entries: Columns
    journeys: Columns
    gaps: Columns
    stages: Columns
    customers: Columns
    record: Findings
    groups: tuple[Group, ...] = ()
    part: bool = False

    @property
    def labels(self) -> tuple[str, ...]:
        """Names of the codes in the tables: lapsed, open, the outcomes, the states."""
        return ("lapsed", "open", *self.rules.outcomes, *self.states)

    @property
    def first_state(self) -> int:
        """Position of the first state in `labels`."""
        return FIRST_OUTCOME + len(self.rules.outcomes)

    @property
    def findings(self) -> pd.DataFrame:
        """Rows left out and oddities: code, column, n, rows (up to 10 row numbers), message."""
        return self.record.to_frame()

    @property
    def n_people(self) -> int:
        """Customers with at least one journey; in a part of a tally, how many there are at least."""
        return int(self.customers["people"].sum())

    @property
    def n_journeys(self) -> int:
        """Journeys begun, sure and unsure."""
        return int(self.journeys["n"].sum())

    @property
    def as_of(self) -> pd.Timestamp:
        """The moment the log is read at."""
        return _timestamp(self.as_of_us)

    @property
    def log_start(self) -> pd.Timestamp:
        """The moment the log starts."""
        return _timestamp(self.log_start_us)

    @property
    def days(self) -> float:
        """Length of the log in days."""
        return (self.as_of_us - self.log_start_us) / 86_400e6

    def table(self, name: str) -> pd.DataFrame:
        """Return one table with names in place of codes and exact sums in microseconds.

        Parameters
        ----------
        name : {"moves", "entries", "journeys", "gaps", "stages", "customers"}
            Which table.

        Returns
        -------
        DataFrame
            One row per key.

        Raises
        ------
        ValueError
            If there is no table of that name.
        """
        import pandas as pd

        if name not in TABLES:
            msg = f"table {name!r} is not known; wanted one of {', '.join(TABLES)}"
            raise ValueError(msg)
        columns: Columns = getattr(self, name)
        labels = np.array(self.labels, dtype=object)
        frame: dict[str, Any] = {}
        for column, values in columns.items():
            if column.endswith("_high"):
                total = column.removesuffix("_high")
                frame[total] = pd.Series(exact_limbs(columns, total), dtype=object)
            elif column.endswith("_low"):
                continue
            elif column in CODED:
                named = labels[values]
                frame[column] = np.where(values == 0, "entry", named) if column == "stage" else named
            elif column == "group":
                for i, name_of_part in enumerate(self.rules.by):
                    frame[name_of_part] = np.array([group[i] for group in self.groups], dtype=object)[values]
            else:
                frame[column] = values.astype(bool) if column in FLAGS else values
        return pd.DataFrame(frame)

    @cached_property
    def checksum(self) -> str:
        """Hexadecimal digest of the tables, the rules and the span; equal tallies have equal checksums."""
        head = [
            self.rules.to_dict(),
            self.states,
            self.log_start_us,
            self.as_of_us,
            self.whole_days,
            self.n_rows,
            self.groups,
            self.part,
        ]
        digest = blake2b(json.dumps(head, sort_keys=True).encode(), digest_size=16)
        for table in TABLES:
            for name, column in getattr(self, table).items():
                digest.update(name.encode())
                plain = np.ascontiguousarray(column, column.dtype.newbyteorder("<"))
                digest.update(plain.view(np.uint8).data)
        return digest.hexdigest()

    def __eq__(self, other: object) -> bool:
        """Tell whether the counts, the rules and the span are the same (findings' row numbers aside)."""
        return self.checksum == other.checksum if isinstance(other, Tally) else NotImplemented

    def __hash__(self) -> int:
        """Hash by the checksum."""
        return hash(self.checksum)

    def __add__(self, other: Tally) -> Tally:
        """Add the tally of other customers, read by the same rules over the same span.

        Raises
        ------
        JourneysError
            If rules, span or kind of times differ.
        """
        if not isinstance(other, Tally):
            return NotImplemented
        for what, mine, theirs in (
            ("rules", self.rules, other.rules),
            ("parts of the groups", self.part, other.part),
            ("as_of", self.as_of, other.as_of),
            ("log_start", self.log_start, other.log_start),
            ("kind of times (dates or moments)", *self._kinds_of_times(other)),
        ):
            if mine != theirs:
                msg = (
                    f"tallies with different {what} cannot be added"
                    + ("" if what == "rules" else f" ({mine} and {theirs})")
                    + "; give both parts the same rules with as_of and log_start set"
                )
                raise JourneysError(msg)
        states = tuple(sorted({*self.states, *other.states}))
        groups, here_at, there_at = merged_groups(self.groups, other.groups)
        here, there = self._recoded(states, here_at), other._recoded(states, there_at)
        people = {
            name: np.maximum(a, b) if name == "largest_events" else a + b
            for (name, a), b in zip(self.customers.items(), other.customers.values(), strict=True)
        }
        people["bucket"] = self.customers["bucket"]
        tables: dict[str, Any] = {name: _added(name, here[name], there[name]) for name in KEYS}
        return replace(
            self,
            states=states,
            whole_days=self._kinds_of_times(other)[0],
            n_rows=self.n_rows + other.n_rows,
            record=self.record + other.record,
            customers=people,
            groups=groups,
            **tables,
        )

    def _kinds_of_times(self, other: Tally) -> tuple[bool, bool]:
        """Return whether each holds dates; one without a journey may have seen no time, and goes with the other."""
        known = [one.whole_days for one in (self, other) if one.n_journeys]
        if len(known) == 2:
            return known[0], known[1]
        kind = known[0] if known else self.whole_days or other.whole_days
        return kind, kind

    def where(self, **conditions: Any) -> Self:
        """Return the part of the tally that some groups of journeys make up.

        Parameters
        ----------
        **conditions
            By the name of a group column: a value, a list of values, or a pair (low, high), both included,
            None for no bound. A group has to meet all of them.

        Returns
        -------
        Tally
            Every question takes it. Of its customers only a lower bound is known.

        Raises
        ------
        ValueError
            If a column is not one of `rules.by`, a value never occurs, or nothing is left.
        TypeError
            If a bound is of another kind than the values.

        Examples
        --------
        >>> import pandas as pd
        >>> from journeys.tally.count import count_log
        >>> log = pd.DataFrame({"member": [1, 2], "event": "visit", "country": ["NL", "BE"],
        ...                     "happened": pd.to_datetime(["2025-01-01", "2025-03-01"], utc=True)})
        >>> tally = count_log(log, JourneyRules("member", "happened", "event", silence="30d", by="country"))
        >>> tally.where(country="NL").n_journeys
        1
        """
        keep = picked(self.groups, self.rules.by, conditions)
        if not keep.any():
            msg = f"no group of journeys meets {conditions}; wanted conditions that some group meets"
            raise ValueError(msg)
        if keep.all():
            return self
        place = np.cumsum(keep) - 1
        tables: dict[str, Any] = {}
        for name in KEYS:
            table: Columns = getattr(self, name)
            mine = keep[table["group"]]
            tables[name] = {column: values[mine] for column, values in table.items()}
            tables[name]["group"] = place[tables[name]["group"]].astype(NARROW["group"])
        customers = {name: np.zeros_like(values) for name, values in self.customers.items()}
        customers["bucket"] = self.customers["bucket"]
        customers["people"][np.unique(tables["journeys"]["bucket"])] = 1
        groups = tuple(group for group, kept in zip(self.groups, keep.tolist(), strict=True) if kept)
        return replace(self, groups=groups, part=True, customers=customers, **tables)

    def _recoded(self, states: tuple[str, ...], group: np.ndarray) -> dict[str, Columns]:
        """Return the keyed tables with codes of the longer lists of states and groups."""
        new = np.arange(len(self.labels))
        place = {name: self.first_state + i for i, name in enumerate(states)}
        new[self.first_state :] = [place[name] for name in self.states]
        return {
            name: {
                column: (group[values] if column == "group" else new[values]).astype(NARROW[column])
                if column in CODED or column == "group"
                else values
                for column, values in getattr(self, name).items()
            }
            for name in KEYS
        }

    def save(self, path: str | os.PathLike[str]) -> None:
        """Write the tally to one Parquet file (see `journeys.tally.store.save`)."""
        from journeys.tally.store import save

        save(self, path)

    @classmethod
    def load(cls, path: str | os.PathLike[str]) -> Self:
        """Read a tally back (see `journeys.tally.store.load`)."""
        from journeys.tally.store import load

        return load(path)  # type: ignore[return-value]

    def summary(self) -> str:
        """Return the size of the tally in words."""
        ended = self.journeys["outcome"] != OPEN
        lapsed = self.journeys["outcome"] == LAPSED
        n = self.journeys["n"]
        first, last = (instant_text(us)[: len("2025-06-30")] for us in (self.log_start_us, self.as_of_us))
        return (
            f"{self.n_rows:,} rows from {first} to {last}: "
            f"{self.n_journeys:,} journeys of {self.n_people:,} people through {len(self.states)} states; "
            f"{int(n[ended & ~lapsed].sum()):,} ended in an outcome, {int(n[lapsed].sum()):,} lapsed, "
            f"{int(n[~ended].sum()):,} open"
        )

    def __repr__(self) -> str:
        """Return one line."""
        return f"<Tally: {self.summary()}>"

    def _repr_html_(self) -> str:
        return f"<p>Tally: {self.summary()}</p>"


def _timestamp(us: int) -> pd.Timestamp:
    import pandas as pd

    return pd.Timestamp(us, unit="us", tz="UTC")


def _added(name: str, mine: Columns, theirs: Columns) -> Columns:
    (key, more), (other_key, other_more) = join_key(name, mine), join_key(name, theirs)
    sums = {column: np.concatenate([mine[column], theirs[column]]) for column in SUMS[name]}
    both = {part: np.concatenate([more[part], other_more[part]]) for part in more}
    return split_key(name, *add_up(np.concatenate([key, other_key]), sums, both))
