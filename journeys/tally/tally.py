"""The tally: what one pass over the log leaves behind. Small, additive, without a customer id."""

from __future__ import annotations

import json
import os
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from hashlib import blake2b
from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.checks import instant_text
from journeys.intake.findings import Findings
from journeys.intake.rule_checks import ALL
from journeys.intake.rules import JourneyRules
from journeys.kernels.records import FIRST_OUTCOME, LAPSED, OPEN
from journeys.markup import facts
from journeys.tally.accumulate import Columns
from journeys.tally.groups import Group, gathered, picked
from journeys.tally.parts import added, of_groups
from journeys.tally.spans import Span, longest_followed_us
from journeys.tally.tables import TABLES

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
    moves, contexts, entries, journeys, gaps, stages, touches, touch_sets, customers : mapping of str to ndarray
        The tables, one array per column, sorted by their keys; states and outcomes as positions in `labels`,
        groups as positions in `groups`, sets of touchpoints as bits, the lowest for the first of `touchpoints`. A
        table that the rules do not ask for has no rows.
    record : Findings
        What was left out or looked odd.
    groups : tuple of tuple
        Values of the columns `rules.by`, one tuple per group of journeys; empty where they are not grouped.
    order : int
        How many of the last states moves are told apart by.
    part : bool
        The tally holds some of the groups of another (see `where`).
    id_key : str, optional
        Fingerprint of the secret that the customers' ids were hashed with; None where there was none.

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
    contexts: Columns
    entries: Columns
    journeys: Columns
    gaps: Columns
    stages: Columns
    touches: Columns
    touch_sets: Columns
    customers: Columns
    record: Findings
    groups: tuple[Group, ...] = ()
    part: bool = False
    order: int = 1
    id_key: str | None = None

    @property
    def labels(self) -> tuple[str, ...]:
        """Names of the codes in the tables: lapsed, open, the outcomes, the states."""
        return ("lapsed", "open", *self.rules.outcomes, *self.states)

    @property
    def first_state(self) -> int:
        """Position of the first state in `labels`."""
        return FIRST_OUTCOME + len(self.rules.outcomes)

    @property
    def touchpoints(self) -> tuple[str, ...]:
        """The states whose touches are counted, in the order of the bits of a set."""
        return self.states if self.rules.touchpoints == ALL else self.rules.named_touchpoints

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

    @property
    def span(self) -> Span:
        """Start and end of the log."""
        return Span(self.log_start_us, self.as_of_us, self.whole_days)

    @property
    def days_followed(self) -> float:
        """For how many days the longest followed of the journeys were followed (to the end of their period)."""
        return longest_followed_us(self.rules, self.groups, self.span) / 86_400e6

    def table(self, name: str) -> pd.DataFrame:
        """Return one table with names in place of codes and exact sums in microseconds, of values in millionths.

        Parameters
        ----------
        name : {"moves", "contexts", "entries", "journeys", "gaps", "stages", "touches", "touch_sets", "customers"}
            Which table.

        Returns
        -------
        DataFrame
            One row per key.

        Notes
        -----
        "touches" has a row for each touchpoint (and one for "none of them") under the outcome, the bin of the elapsed
        time, whether the entry is sure, and how many distinct touchpoints the journey has touched: in how many
        journeys it is one of them (n), the first, the last, and what these journeys are worth. "touch_sets", for up to
        15 touchpoints, has the same for each set of them. Journeys cut at the end of a period stand in neither, since
        what they had touched until then is not known; in "journeys" their steps and value are 0.

        Raises
        ------
        ValueError
            If there is no table of that name.
        """
        from journeys.tally.named import named_table

        return named_table(self, name)

    @cached_property
    def checksum(self) -> str:
        """Hexadecimal digest of the tables, the rules and the span; equal tallies have equal checksums."""
        head = [
            self.rules.to_dict(), self.states, self.log_start_us, self.as_of_us, self.whole_days, self.n_rows,
            self.groups, self.part, self.order,
            # Only where there is one: who sets none shall get the same numbers as ever.
            *([self.id_key] if self.id_key else []),
        ]  # fmt: skip
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
            If rules, span, order, kind of times or the key of the ids differ.
        """
        return added(self, other) if isinstance(other, Tally) else NotImplemented

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
        return self if keep.all() else of_groups(self, np.flatnonzero(keep))

    def split(self, by: str | Sequence[str]) -> dict[Group, Tally]:
        """Return a part of the tally for every combination of values in some of its group columns.

        Parameters
        ----------
        by : str or sequence of str
            Among `rules.by`.

        Returns
        -------
        dict of tuple to Tally
            In the order of the values.

        Raises
        ------
        ValueError
            If a column is not one that journeys are grouped by.
        """
        names = (by,) if isinstance(by, str) else tuple(by)
        return {values: of_groups(self, index) for values, index in gathered(self.groups, self.rules.by, names).items()}

    def rest(self, by: str | Sequence[str], values: Group) -> Tally:
        """Return the part of the tally that `split` does not give for `values`."""
        names = (by,) if isinstance(by, str) else tuple(by)
        found = gathered(self.groups, self.rules.by, names)
        others = [index for group, index in found.items() if group != values]
        return of_groups(self, np.sort(np.concatenate(others)))

    def shareable(self, min_customers: int = 10) -> pd.DataFrame:
        """Return counts that can be handed on (see `journeys.tally.shareable.shareable`)."""
        from journeys.tally.shareable import shareable

        return shareable(self, min_customers)

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
        ended = ", ".join(f"{n:,} {name}" for name, n in self._n_by_ending().items())
        return (
            f"{self.n_rows:,} rows {self._span()}: {self.n_journeys:,} journeys of {self.n_people:,} people through "
            f"{len(self.states)} states; {ended}"
        )

    def _span(self) -> str:
        first, last = (instant_text(us)[: len("2025-06-30")] for us in (self.log_start_us, self.as_of_us))
        return f"from {first} to {last}"

    def _n_by_ending(self) -> dict[str, int]:
        outcome, n = self.journeys["outcome"], self.journeys["n"]
        ended, lapsed = outcome != OPEN, outcome == LAPSED
        parts = {"ended in an outcome": ended & ~lapsed, "lapsed": lapsed, "open": ~ended}
        return {name: int(n[mask].sum()) for name, mask in parts.items()}

    def __repr__(self) -> str:
        """Return one line."""
        return f"<Tally: {self.summary()}>"

    def _repr_html_(self) -> str:
        ended = {name: f"{n:,}" for name, n in self._n_by_ending().items()}
        told = {"rows": f"{self.n_rows:,}", "people": f"{self.n_people:,}", "journeys": f"{self.n_journeys:,}"}
        return facts(f"Tally: {self._span()}", {**told, "states": f"{len(self.states):,}", **ended})


def _timestamp(us: int) -> pd.Timestamp:
    import pandas as pd

    return pd.Timestamp(us, unit="us", tz="UTC")
