"""A log that stands in a database: a query, run when it is read, its rows streamed."""

from __future__ import annotations

import os
import re
from collections.abc import Iterator
from functools import cached_property
from hashlib import blake2b
from pathlib import Path
from typing import TYPE_CHECKING, Any, Self

import pyarrow as pa

from journeys import checks
from journeys.checks import MIN_TIME_US, Instant, instant_text, instant_us
from journeys.errors import RulesError
from journeys.intake.database_columns import decoded, expression
from journeys.intake.database_engines import DRIVERS, connected, schema_of, stream
from journeys.intake.settings import read_toml
from journeys.intake.sources import LogSource

if TYPE_CHECKING:
    from collections.abc import Mapping

_NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")


class DatabaseLog(LogSource):
    """An event log that a query of a database gives.

    Parameters
    ----------
    query : str
        A SELECT with the columns of the rules. `$1` in it stands for the watermark, as in `WHERE happened > $1`.
    connection : str
        Name of the environment variable that holds the connection: a URI or key=value text for PostgreSQL, the
        path of the file for duckdb. The connection itself is never taken as an argument, kept or shown.
    driver : {"postgresql", "duckdb"}
        Each is an extra: `pip install 'journeys[postgresql]'`.
    since : str, datetime, date or Timestamp, optional
        The watermark; left out, the year 1, so that `$1` lets everything pass. No zone: UTC.
    batch_rows : int
        Rows that PostgreSQL is asked for at a time; at no time are many more than those in memory.

    Raises
    ------
    RulesError
        If query, connection or driver are not of that kind, or there is a watermark and no `$1` to compare with it.
    ValueError, TypeError
        If `since` is no instant, or `batch_rows` no whole number from 1.

    Notes
    -----
    The query runs once for each `batches`, as part of another query that selects the columns needed; `journeys.tally`
    keeps them in a temporary file, so that both of its looks see the same rows. Reading changes nothing in the
    database. Times without a zone are UTC, in comparisons with the watermark too.

    Examples
    --------
    >>> log = DatabaseLog("SELECT member, happened, event FROM visits WHERE happened > $1", "CLUB_DB", "postgresql")
    >>> log.resumed("2025-06-30")
    <DatabaseLog: postgresql query (connection from CLUB_DB), since 2025-06-30>
    """

    one_shot = True

    def __init__(
        self,
        query: str,
        connection: str,
        driver: str = "postgresql",
        *,
        since: Instant | None = None,
        batch_rows: int = 1 << 16,
    ) -> None:
        if faults := [*_query_faults(query, since), *_connection_faults(connection), *_driver_faults(driver)]:
            raise RulesError("\n".join(faults))
        self._since_us = None if since is None else instant_us(since, "since")
        self._batch_rows = checks.whole(batch_rows, "batch_rows", 1)
        self._query = query.strip().rstrip(";").rstrip()
        self._connection, self._driver = connection, driver
        self.kind = f"{driver} query (connection from {connection})"

    @classmethod
    def from_settings(cls, settings: Mapping[str, Any], folder: str | os.PathLike[str] = ".") -> Self:
        """Log that the table `[database]` of a settings file describes.

        Parameters
        ----------
        settings : mapping
            `query` or `query_file`, `driver`, `connection_from` (the name of an environment variable), and, if wanted,
            `since` and `batch_rows`.
        folder : path
            Where a relative `query_file` is looked for.

        Returns
        -------
        DatabaseLog

        Raises
        ------
        RulesError
            Naming every key that is unknown, missing or wrong.

        Examples
        --------
        >>> DatabaseLog.from_settings({"query": "SELECT * FROM visits", "driver": "duckdb", "connection_from": "CLUB"})
        <DatabaseLog: duckdb query (connection from CLUB)>
        """
        faults = [f"'{name}' is no setting of a database; {_KEYS_WANTED}" for name in settings if name not in _KEYS]
        needed = ("driver", "connection_from")
        faults += [f"{name}: not given; {_KEYS_WANTED}" for name in needed if name not in settings]
        if ("query" in settings) == ("query_file" in settings):
            faults.append("query: wanted either query or query_file")
        if faults:
            raise RulesError("\n".join(faults))
        query = settings["query"] if "query" in settings else _query_in(settings["query_file"], Path(folder))
        more = {name: settings[name] for name in ("since", "batch_rows") if name in settings}
        try:
            return cls(query, settings["connection_from"], settings["driver"], **more)
        except (TypeError, ValueError) as fault:
            raise RulesError(str(fault)) from None

    @classmethod
    def from_toml(cls, path: str | os.PathLike[str]) -> Self:
        """Log that a TOML file with a table `[database]` describes.

        Parameters
        ----------
        path : path

        Returns
        -------
        DatabaseLog

        Raises
        ------
        RulesError
            If the file cannot be read, or what it says is wrong.
        """
        file = Path(path)
        settings = read_toml(file, "settings file")
        if list(settings) != ["database"] or not isinstance(settings["database"], dict):
            raise RulesError(f"settings file {file}: wanted one table, [database], to read a log by; {_KEYS_WANTED}")
        try:
            return cls.from_settings(settings["database"], file.parent)
        except RulesError as fault:
            raise RulesError(f"settings file {file}: {fault}") from None

    def resumed(self, since: Instant | None) -> Self:
        """Return the same log from another watermark on.

        Parameters
        ----------
        since : str, datetime, date, Timestamp or None

        Returns
        -------
        DatabaseLog

        Raises
        ------
        RulesError
            If the query has no `$1` to compare with it.
        """
        return type(self)(self._query, self._connection, self._driver, since=since, batch_rows=self._batch_rows)

    def for_manifest(self) -> dict[str, str | None]:
        """Return what may be written down of the log: where it comes from, never how to get in.

        Returns
        -------
        dict
            kind, driver, connection_from, query_checksum, since.
        """
        return {
            "kind": "database",
            "driver": self._driver,
            "connection_from": self._connection,
            "query_checksum": blake2b(self._query.encode(), digest_size=16).hexdigest(),
            "since": None if self._since_us is None else instant_text(self._since_us),
        }

    @property
    def names(self) -> list[str]:
        """Columns of the query."""
        return list(self._schema.names)

    @cached_property
    def _schema(self) -> pa.Schema:
        with connected(self._driver, self._connection) as cursor:
            return schema_of(cursor, self._query, self._bound_us)

    @property
    def _bound_us(self) -> int | None:
        """What `$1` stands for; None where the query has none."""
        if not _takes_watermark(self._query):
            return None
        return MIN_TIME_US if self._since_us is None else self._since_us

    def _read(self, columns: list[str]) -> Iterator[pa.RecordBatch]:
        """Run the query for some of its columns."""
        fields = [self._schema.field(name) for name in columns]
        wanted = [expression(field) for field in fields]
        with connected(self._driver, self._connection) as cursor:
            for batch in stream(cursor, self._driver, self._query, wanted, self._bound_us, self._batch_rows):
                arrays = [decoded(array, field) for array, field in zip(batch.columns, fields, strict=True)]
                yield pa.RecordBatch.from_arrays(arrays, names=columns)

    def __repr__(self) -> str:
        """Return one line, without the query, which may hold names, and without the connection."""
        since = "" if self._since_us is None else f", since {instant_text(self._since_us)}"
        return f"<DatabaseLog: {self.kind}{since}>"


_KEYS = ("query", "query_file", "driver", "connection_from", "since", "batch_rows")
_KEYS_WANTED = f"there are {', '.join(_KEYS)}"


def _takes_watermark(query: str) -> bool:
    """Tell whether the query has a place for the watermark."""
    return re.search(r"\$1\b", query) is not None


def _query_faults(query: str, since: Instant | None) -> list[str]:
    if not isinstance(query, str) or not query.strip():
        return ["query: wanted a SELECT as text"]
    if since is not None and not _takes_watermark(query):
        return ["since: the query has no $1 to compare with it; wanted one such as WHERE happened > $1"]
    return []


def _connection_faults(connection: str) -> list[str]:
    if isinstance(connection, str) and _NAME.fullmatch(connection):
        return []
    # What was given is not repeated: it may be the connection itself.
    return [
        "connection: wanted the name of an environment variable that holds the connection, such as CLUB_DB; "
        "the connection itself belongs in no file and no code"
    ]


def _driver_faults(driver: str) -> list[str]:
    return [] if driver in DRIVERS else [f"driver: got {driver!r}; wanted one of {', '.join(map(repr, DRIVERS))}"]


def _query_in(name: Any, folder: Path) -> str:
    """Read the file of a query."""
    if not isinstance(name, str):
        raise RulesError(f"query_file: got {name!r}; wanted the path of a file with the query")
    try:
        return (folder / name).read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as fault:
        why = getattr(fault, "strerror", None) or "it is not UTF-8 text"
        raise RulesError(f"query_file: {folder / name}: {why}") from None
