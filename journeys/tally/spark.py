"""The same count on a Spark cluster: all rows of a customer on one worker, partial tallies added up on the driver."""

from __future__ import annotations

import itertools
import pickle
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import replace
from functools import partial
from typing import TYPE_CHECKING, Any

import pyarrow as pa

from journeys import errors
from journeys.errors import JourneysError
from journeys.intake.batches import check_columns
from journeys.intake.findings import Findings
from journeys.intake.look import Glance, Look, glance
from journeys.intake.people import People
from journeys.intake.rules import JourneyRules
from journeys.intake.sources import StreamSource
from journeys.kernels.compiled import is_built
from journeys.tally.count import checked_order, span_of
from journeys.tally.passes import Pass
from journeys.tally.store import from_bytes, to_bytes
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    from pyspark.sql import Column, DataFrame

_WHERE = "Spark frame"
# What a worker gives back for its part: a glance, a tally, or the fault it met, and for a tally what of its findings
# cannot be added up part by part.
_ANSWER = "kind string, body binary, n_kept long, all_midnight boolean"
_GLANCE, _TALLY = "glance", "tally"
_Work = Callable[[Iterator[pa.RecordBatch]], tuple[str, bytes, int, bool]]


def tally_spark(df: DataFrame, rules: JourneyRules, *, order: int = 1) -> Tally:
    """Return the tally of an event log held by Spark, counted where its rows are.

    Parameters
    ----------
    df : pyspark.sql.DataFrame
        The log. Only the columns that the rules name are read, twice.
    rules : JourneyRules
        What a journey is.
    order : int
        As in `journeys.tally`.

    Returns
    -------
    Tally
        Equal to that of `journeys.tally` on the same rows in the same order.

    Raises
    ------
    LogError
        As `journeys.tally`.
    TypeError
        If `df` is no Spark frame.
    JourneysError
        If the workers do not have this package.

    Notes
    -----
    One look at the time column finds the log's dates. Then rows are dealt out by customer, sorted within each
    partition, and counted there by the code that `journeys.tally` runs; the driver gets one small tally for each
    partition and adds them up. Rows of one customer and time keep the order that the frame has them in, unless
    `sequence` orders them. Findings have the same counts; they name no rows, since a frame of Spark numbers none.
    Workers need this package and pyarrow; the key in JOURNEYS_ID_KEY is the driver's, and is sent to them. An identity
    table is joined in Spark beforehand.

    Examples
    --------
    >>> from pyspark.sql import SparkSession                            # doctest: +SKIP
    >>> spark = SparkSession.builder.getOrCreate()                      # doctest: +SKIP
    >>> tally = tally_spark(spark.read.parquet("s3a://club/visits"), rules)     # doctest: +SKIP
    >>> rules = JourneyRules("member", "happened", "event", silence="30d")
    >>> tally_spark([1, 2], rules)
    Traceback (most recent call last):
    ...
    TypeError: df: got a list; wanted a DataFrame of Spark, or give it to journeys.tally
    """
    if not hasattr(df, "mapInArrow"):
        raise TypeError(f"df: got a {type(df).__name__}; wanted a DataFrame of Spark, or give it to journeys.tally")
    check_columns(df.columns, rules.columns, _WHERE)
    order, people = checked_order(order), People.here()
    look = _look(df, rules)
    make = partial(_pass, rules=rules, look=replace(look, n_later_than_now=0), people=people, order=order)
    parts = _answers(_by_customer(df, rules), partial(_tally_of_part, names=rules.columns, make=make))
    total = _added(from_bytes(part["body"]) for part in parts) or make(iter(())).in_order()
    findings = _without_rows(total.record, leave_out="midnight_times")
    n_kept = sum(part["n_kept"] for part in parts)
    if n_kept > 1 and not look.whole_days and all(part["all_midnight"] for part in parts):
        findings.add("midnight_times", rules.time, n_kept)
    findings.add("later_than_now", rules.time, look.n_later_than_now)
    return replace(total, record=findings, id_key=people.fingerprint)


def _look(df: DataFrame, rules: JourneyRules) -> Look:
    """Find the log's two dates by one pass over its times."""
    work = partial(_glance_of_part, rules=rules, now_us=time.time_ns() // 1_000)
    answers = _answers(_numbered_columns(df, [rules.time]), work)
    found: Iterator[Glance] = (pickle.loads(part["body"]) for part in answers)
    return sum(found, glance((), rules, 0)).look(rules, _WHERE)


def _by_customer(df: DataFrame, rules: JourneyRules) -> DataFrame:
    """Rows of a customer side by side in one partition, in order of time; ties as the frame has them."""
    from pyspark.sql import functions

    names = rules.columns
    columns = [f"column{place}" for place in range(len(names))]
    order = [columns[names.index(name)] for name in (rules.customer, rules.time, rules.sequence) if name is not None]
    # The frame's own order is lost once rows are dealt out.
    numbered = _numbered_columns(df, names, functions.monotonically_increasing_id().alias("place"))
    return numbered.repartition(order[0]).sortWithinPartitions(*order, "place").select(*columns)


def _numbered_columns(df: DataFrame, names: Sequence[str], *more: Column) -> DataFrame:
    """Choose columns and number them: `mapInArrow` cannot bear names with dots or quotes."""
    from pyspark.sql import functions

    quoted = ["`" + name.replace("`", "``") + "`" for name in names]
    return df.select(*(functions.col(name).alias(f"column{place}") for place, name in enumerate(quoted)), *more)


def _answers(df: DataFrame, work: _Work) -> list[Any]:
    """Do some work on every partition and return what came of it, or raise the fault that a worker met."""
    try:
        answers = list(df.mapInArrow(partial(_on_worker, work=work), _ANSWER).collect())
    except Exception as fault:
        if "No module named 'journeys'" in str(fault):
            raise JourneysError(
                "the workers of Spark lack this package; install it where they run, or ship an environment that holds "
                "it (spark.archives)"
            ) from None
        raise
    for answer in answers:
        if answer["kind"] not in (_GLANCE, _TALLY):
            raise getattr(errors, answer["kind"])(answer["body"].decode())
    return answers


def _on_worker(batches: Iterator[pa.RecordBatch], work: _Work) -> Iterator[pa.RecordBatch]:
    """Work on one partition; a fault of the log is an answer too, or it would arrive as a page of traces."""
    first = next(batches, None)
    if first is None:
        return
    try:
        answer = work(itertools.chain([first], batches))
    except JourneysError as fault:
        answer = (type(fault).__name__, str(fault).encode(), 0, False)
    names = ["kind", "body", "n_kept", "all_midnight"]
    yield pa.RecordBatch.from_arrays([pa.array([value]) for value in answer], names=names)


def _glance_of_part(
    batches: Iterator[pa.RecordBatch], rules: JourneyRules, now_us: int
) -> tuple[str, bytes, int, bool]:
    return _GLANCE, pickle.dumps(glance(batches, rules, now_us)), 0, False


def _tally_of_part(
    batches: Iterator[pa.RecordBatch], names: Sequence[str], make: Callable[[Iterator[pa.RecordBatch]], Pass]
) -> tuple[str, bytes, int, bool]:
    count = make(pa.RecordBatch.from_arrays(batch.columns, names=list(names)) for batch in batches)
    tally = count.in_order()
    seen = count.normaliser
    return _TALLY, to_bytes(tally), seen.n_kept, seen.all_midnight


def _pass(
    batches: Iterator[pa.RecordBatch], rules: JourneyRules, look: Look, people: People, order: int
) -> Pass:
    """Return a pass over rows that come by customer, so that none is ever out of order."""
    # Of the schema only the names are looked at.
    log = StreamSource(pa.schema([(name, pa.null()) for name in rules.columns]), batches, _WHERE)
    span = span_of(look, rules)
    return Pass(
        log, rules, look, span, order=order, n_workers=1, compiled=is_built(), progress=False, people=people
    )


def _added(parts: Iterable[Tally]) -> Tally | None:
    """Add up tallies two by two, so that none is copied more often than the logarithm of their number."""
    waiting: list[tuple[int, Tally]] = []
    for tally in parts:
        level, whole = 0, tally
        while waiting and waiting[-1][0] == level:
            level, whole = level + 1, waiting.pop()[1] + whole
        waiting.append((level, whole))
    rest: Sequence[Tally] = [tally for _, tally in reversed(waiting)]
    return sum(rest[1:], rest[0]) if rest else None


def _without_rows(record: Findings, leave_out: str) -> Findings:
    """Return the counts alone: row numbers of a part mean nothing."""
    counts = Findings()
    for found in record.to_dict()["findings"]:
        if found["code"] != leave_out:
            counts.add(found["code"], found["column"], found["n"])
    return counts
