"""A database as a night's input: its query, asked for what is later than the ledger counts."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.errors import RulesError
from journeys.intake.database import DatabaseLog
from journeys.intake.read import LogSource
from journeys.intake.rules import JourneyRules
from journeys.intake.times import TimeReader
from journeys.nightly.inputs import QUERY, Input, InputLog, Inputs, refuse_other_kind
from journeys.nightly.manifest import Counted


class QueryInputs(Inputs):
    """A query whose `$1` stands for the moment up to which the ledger counts.

    Rows that wait are not kept: they are later than that moment, so the next night's query gives them anew.

    Parameters
    ----------
    settings : Path
        TOML file with a table `[database]`.
    counted_before_us : int or None
        Rows from here on are asked for; None: all.
    number : int
        Of the generation to come.
    """

    def __init__(self, settings: Path, counted_before_us: int | None, number: int) -> None:
        log = DatabaseLog.from_toml(settings)
        self._since_us = None if counted_before_us is None else counted_before_us - 1
        try:
            later = log.resumed(np.datetime64(0 if self._since_us is None else self._since_us, "us").item())
        except RulesError as fault:
            msg = f"{settings}: a ledger asks each night for what is new: {fault}"
            raise RulesError(msg) from None
        self._log = log if self._since_us is None else later
        self._settings, self._number = settings, number
        self._checksum = str(log.for_manifest()["query_checksum"])

    def new(self, counted: Mapping[str, Counted]) -> list[Input]:
        """Return the query of this night.

        Raises
        ------
        RulesError
            If earlier nights were counted by another query.
        """
        refuse_other_kind(counted, QUERY, f"the query of {self._settings}")
        if any(one.checksum != self._checksum for one in counted.values()):
            msg = (
                f"{self._settings}: the query is not the one that the ledger was counted by; put it back as it was, "
                "or count all anew with --rebuild"
            )
            raise RulesError(msg)
        name = f"query, night {self._number}"
        return [Input(name, checksum=self._checksum, kind=QUERY, since_us=self._since_us)]

    @contextmanager
    def open(self, inputs: Sequence[Input], rules: JourneyRules) -> Iterator[InputLog]:
        """Run the query, and give what came of it: a copy in a temporary folder, since it is read more than once."""
        (one,) = inputs
        self._log.check(rules.columns)
        with self._log.spooled(rules.columns) as rows:
            yield _QueryLog(rows, one.name, rules.time)

    def confirm(self, inputs: Sequence[Input]) -> None:
        """Do nothing: what was read was a copy."""

    def missing(self, counted: Mapping[str, Counted]) -> list[str]:
        """Return nothing: whether rows are gone only the database knows."""
        return []


class _QueryLog(InputLog):
    """What a query gave: all of it, and once a moment is set, what is not later."""

    def __init__(self, rows: LogSource, name: str, time: str) -> None:
        self.kind, self._rows, self._time = rows.kind, rows, time
        self._name, self._as_of_us = name, None
        self.rows_of: dict[str, int] = {}

    _as_of_us: int | None

    @property
    def names(self) -> list[str]:
        """Columns of the query."""
        return self._rows.names

    def up_to(self, as_of_us: int) -> None:
        """Set apart what is later than a moment."""
        self._as_of_us = as_of_us
        self.again = _Later(self._rows, self._time, as_of_us)

    def _read(self, columns: list[str]) -> Iterator[pa.RecordBatch]:
        self.rows_of[self._name] = 0
        for batch in _cut(self._rows, columns, self._time, self._as_of_us, later=False):
            self.rows_of[self._name] += batch.num_rows
            yield batch


class _Later(LogSource):
    """Rows later than a moment."""

    def __init__(self, rows: LogSource, time: str, as_of_us: int) -> None:
        self.kind, self._rows, self._time, self._as_of_us = rows.kind, rows, time, as_of_us

    @property
    def names(self) -> list[str]:
        """Columns of the query."""
        return self._rows.names

    def _read(self, columns: list[str]) -> Iterator[pa.RecordBatch]:
        return _cut(self._rows, columns, self._time, self._as_of_us, later=True)


def _cut(
    rows: LogSource, columns: list[str], time: str, as_of_us: int | None, *, later: bool
) -> Iterator[pa.RecordBatch]:
    """Give the rows later than a moment, or all others: among them those without a usable time."""
    reader = TimeReader(time)
    for batch in rows.batches([*columns, time]):
        if as_of_us is not None:
            times = reader.read(batch.column(time))
            young: NDArray[np.bool_] = times.usable() & (times.us > as_of_us)
            batch = batch.filter(pa.array(young if later else ~young))
        if batch.num_rows:
            yield batch.select(columns)
