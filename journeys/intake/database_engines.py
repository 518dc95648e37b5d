"""Databases by way of ADBC: a connection, a query streamed in batches, faults told without secrets."""

from __future__ import annotations

import importlib
import os
import re
from collections.abc import Iterator, Sequence
from contextlib import ExitStack, closing, contextmanager
from typing import Any

import numpy as np
import pyarrow as pa

from journeys.errors import JourneysError, LogError, RulesError
from journeys.intake.arrays import from_numpy

DRIVERS = ("postgresql", "duckdb")
_MODULES = {"postgresql": "adbc_driver_postgresql", "duckdb": "adbc_driver_duckdb"}
_EXAMPLES = {"postgresql": "postgresql://reader@localhost/club", "duckdb": "/var/lib/club/club.duckdb"}
# What a driver's message may hold, and what is said in its place: the message itself may quote the connection.
_REASONS = (
    ('missing "="|invalid (connection option|percent|URI|port)|forbidden value', "the connection is not written right"),
    ("password|authentication|pg_hba", "user or password were refused"),
    ("refused|No such file or directory|unreachable", "nothing answers there"),
    ("translate host name|Name or service", "the host is not known"),
    ("[Tt]imeout|timed out", "no answer in time"),
    ("role .* does not exist", "there is no such user"),
    ("does not exist", "there is no such database"),
    ("too many|starting up|shutting down", "the server takes no more connections just now"),
    ("lock|different configuration", "the file is open elsewhere for writing"),
    ("not a valid DuckDB|version number", "the file is no database of this version of duckdb"),
)


@contextmanager
def connected(driver: str, variable: str) -> Iterator[Any]:
    """Give a cursor of the database that an environment variable names, for reading only.

    Parameters
    ----------
    driver : {"postgresql", "duckdb"}
    variable : str
        Name of the environment variable that holds the connection.

    Yields
    ------
    cursor
        As PEP 249 and ADBC have it, in one transaction; naive times in it are UTC.

    Raises
    ------
    JourneysError
        If the extra is not installed.
    RulesError
        If the variable is not set.
    LogError
        If there is no connection to be had.
    """
    where = os.environ.get(variable, "").strip()
    if not where:
        raise RulesError(
            f"environment variable {variable} is not set; wanted the connection of the {driver} database there, "
            f"such as {_EXAMPLES[driver]}"
        )
    with ExitStack() as stack:
        try:
            connection = stack.enter_context(closing(_connect(driver, where)))
            cursor = stack.enter_context(closing(connection.cursor()))
            if driver == "postgresql":
                cursor.execute("SET TRANSACTION READ ONLY")
            cursor.execute("SET TimeZone = 'UTC'")
        except _faults() as fault:
            raise LogError(
                f"no connection to the {driver} database that {variable} names: {_reason(str(fault))}"
            ) from None
        yield cursor


def _connect(driver: str, where: str) -> Any:
    """Open a connection; the drivers come with an extra."""
    try:
        dbapi = importlib.import_module("adbc_driver_manager.dbapi")
        module = importlib.import_module(_MODULES[driver])
    except ImportError:
        raise JourneysError(f"reading from {driver} needs an extra: pip install 'journeys[{driver}]'") from None
    if driver == "postgresql":
        return importlib.import_module("adbc_driver_postgresql.dbapi").connect(where)
    options = {"path": where, "access_mode": "READ_ONLY"}
    return dbapi.connect(driver=module.driver_path(), entrypoint="duckdb_adbc_init", db_kwargs=options)


def schema_of(cursor: Any, query: str, since_us: int | None) -> pa.Schema:
    """Columns of a query, none of its rows read.

    Parameters
    ----------
    cursor : cursor
    query : str
    since_us : int or None
        What `$1` stands for; None where the query has none.

    Returns
    -------
    pyarrow.Schema

    Raises
    ------
    LogError
        If the database refuses the query.
    """
    try:
        cursor.execute(f"SELECT * FROM (\n{query}\n) AS log LIMIT 0", _parameters(since_us))
        with cursor.fetch_record_batch() as reader:
            return reader.schema
    except _faults() as fault:
        raise LogError(f"the database refuses the query: {_first_line(str(fault))}") from None


def stream(
    cursor: Any, driver: str, query: str, expressions: Sequence[str], since_us: int | None, batch_rows: int
) -> Iterator[pa.RecordBatch]:
    """Batches of a query.

    Parameters
    ----------
    cursor : cursor
    driver : {"postgresql", "duckdb"}
    query : str
    expressions : sequence of str
        What to select from it.
    since_us : int or None
    batch_rows : int
        Rows that PostgreSQL is asked for at a time.

    Yields
    ------
    pyarrow.RecordBatch

    Raises
    ------
    LogError
        If the database stops.
    """
    sql = f"SELECT {', '.join(expressions)} FROM (\n{query}\n) AS log"
    try:
        if driver == "postgresql":
            yield from _fetched(cursor, sql, since_us, batch_rows)
        else:
            cursor.execute(sql, _parameters(since_us))
            with cursor.fetch_record_batch() as reader:
                yield from reader
    except _faults() as fault:
        # The message may quote the cell that the database stopped at.
        kind = getattr(fault, "sqlstate", None) or next(iter(re.findall(r"\b[A-Z][A-Za-z ]* Error\b", str(fault))), "")
        raise LogError(
            f"the database stopped while the query ran{f' ({kind})' if kind else ''}; run the query there to see why"
        ) from None


def _fetched(cursor: Any, sql: str, since_us: int | None, batch_rows: int) -> Iterator[pa.RecordBatch]:
    """Read by a cursor in the server: with a parameter the driver would hold the whole result in memory."""
    cursor.execute(f"DECLARE journeys_log NO SCROLL CURSOR FOR {sql}", _parameters(since_us))
    cursor.adbc_statement.set_options(**{"adbc.postgresql.use_copy": "false"})
    n_rows = 1
    while n_rows:
        n_rows = 0
        cursor.execute(f"FETCH FORWARD {batch_rows} FROM journeys_log")
        with cursor.fetch_record_batch() as reader:
            for batch in reader:
                n_rows += batch.num_rows
                yield batch


def _parameters(since_us: int | None) -> pa.RecordBatch | None:
    """Return the watermark as the one parameter."""
    if since_us is None:
        return None
    return pa.RecordBatch.from_arrays([from_numpy(np.array([since_us]), pa.timestamp("us"))], names=["since"])


def _faults() -> tuple[type[Exception], ...]:
    """Return what drivers raise; where none is installed, nothing."""
    try:
        return (importlib.import_module("adbc_driver_manager.dbapi").Error, pa.ArrowException, OSError)
    except ImportError:
        return ()


def _reason(message: str) -> str:
    """Say why there is no connection, in words that hold nothing of it."""
    return next((words for pattern, words in _REASONS if re.search(pattern, message)), "the driver refuses it")


def _first_line(message: str) -> str:
    """Return what the database itself says about a query that it has not begun to run."""
    told = re.sub(r"^.*?(ERROR:|Error:)\s*", "", message.splitlines()[0] if message else "")
    return told.strip() or "it does not say why"
