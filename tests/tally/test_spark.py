from __future__ import annotations

import os
import shutil
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from random_logs import random_log

import journeys as jn
from journeys.errors import JourneysError, LogError, RulesError
from journeys.intake.id_key import VARIABLE

REPO = Path(jn.__file__).parent.parent
DEMO = REPO / "demo_data"
# What Python says of sockets that the engine leaves to be collected.
pytestmark = [
    pytest.mark.optional,
    pytest.mark.filterwarnings("ignore::ResourceWarning"),
    pytest.mark.filterwarnings("ignore:PySpark does not yet fully support pandas:FutureWarning"),
    pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning"),
]


@pytest.fixture(scope="module")
def spark() -> Iterator[Any]:
    sql = pytest.importorskip("pyspark.sql", reason="optional engine missing: pyspark")
    if shutil.which("java") is None:
        pytest.skip("optional engine missing: java (apt-get install default-jre-headless)")
    paths = os.pathsep.join([str(REPO), *filter(None, [os.environ.get("PYTHONPATH")])])
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("PYTHONPATH", paths)
        patch.setenv("PYSPARK_PYTHON", sys.executable)
        builder = sql.SparkSession.builder.master("local[2]").appName("journeys-tests")
        for name, value in {
            "spark.ui.enabled": "false", "spark.sql.shuffle.partitions": "3", "spark.driver.bindAddress": "127.0.0.1",
            "spark.driver.host": "127.0.0.1", "spark.sql.files.maxPartitionBytes": "150k",
            "spark.sql.files.openCostInBytes": "0", "spark.sql.session.timeZone": "Asia/Tokyo",
            "spark.sql.execution.arrow.maxRecordsPerBatch": "3000", "spark.sql.adaptive.enabled": "false",
        }.items():  # fmt: skip
            builder = builder.config(name, value)
        session = builder.getOrCreate()
        session.sparkContext.setLogLevel("OFF")
        yield session
        session.stop()


@pytest.fixture
def frame_of(spark: Any, tmp_path: Path) -> Callable[[pa.Table], Any]:
    """Write a log to a file of many parts and let the engine read it."""

    def read(table: pa.Table, rows_per_part: int = 4_000) -> Any:
        path = tmp_path / "log.parquet"
        as_us = {"coerce_timestamps": "us", "allow_truncated_timestamps": True}
        pq.write_table(table, path, row_group_size=rows_per_part, **as_us)
        return spark.read.parquet(str(path))

    return read


def counts(tally: jn.Tally) -> pd.DataFrame:
    return tally.findings.drop(columns="rows")


def assert_same(tally: jn.Tally, expected: jn.Tally) -> None:
    assert tally == expected
    pd.testing.assert_frame_equal(counts(tally), counts(expected))
    assert not any(tally.findings["rows"])


MORE: list[dict[str, Any]] = [
    {},
    {"touchpoints": ["poster", "newsletter", "search", "friend"], "value": "worth", "split_at": ["2024-09-15"],
     "by": ["came_after"], "cohort": None},
    {"touchpoints": "all", "repeats": "merge", "by": (), "cohort": None, "opens": ["poster", "search"],
     "after_outcome": "stop", "complete_history": True, "stages": ()},
    {"by": (), "cohort": None, "stages": (), "duplicates": "keep"},
]  # fmt: skip


@pytest.mark.parametrize("settings", MORE)
def test_same_tally_on_the_clubs_log(settings: dict[str, Any], frame_of: Callable[..., Any]):
    table = pq.read_table(DEMO / "club_log.parquet")
    table = table.slice(0, 15_000) if settings else table
    worth = np.random.default_rng(3).normal(20, 30, len(table)).round(2)
    table = table.append_column("worth", pa.array(worth).cast(pa.decimal128(12, 2)))
    rules = jn.JourneyRules.from_toml(DEMO / "rules.toml").to_dict() | settings
    rules = jn.JourneyRules.from_dict(rules)
    frame = frame_of(table)
    assert frame.rdd.getNumPartitions() > 1
    assert_same(jn.tally_spark(frame, rules), jn.tally(table, rules))


@pytest.mark.parametrize("seed", range(4))
def test_same_tally_on_random_logs(seed: int, frame_of: Callable[..., Any]):
    log = random_log(np.random.default_rng([15, seed]), n_rows=300)
    table = pa.Table.from_pandas(log.frame, preserve_index=False)
    rules = jn.JourneyRules(**log.rules)
    assert_same(jn.tally_spark(frame_of(table, 50), rules), jn.tally(table, rules))


def test_times_that_are_all_midnights(frame_of: Callable[..., Any]):
    """What is said of a whole log is not said of a part of it: here all but one customer's times are midnights."""
    days = pd.to_datetime(["2025-01-01", "2025-01-02"] * 20, utc=True).to_series()
    rules = jn.JourneyRules("who", "when", "what", silence="30d")
    for last in ("2025-01-03", "2025-01-03T12:00"):
        days.iloc[-1] = pd.Timestamp(last, tz="UTC")
        table = pa.table({"who": list(range(40)), "when": pa.array(days), "what": ["visit"] * 40})
        tally = jn.tally_spark(frame_of(table), rules)
        assert_same(tally, jn.tally(table, rules))
        assert ("midnight_times" in set(tally.findings["code"])) == (last == "2025-01-03")


def test_keyed_ids(frame_of: Callable[..., Any], monkeypatch: pytest.MonkeyPatch):
    table = pq.read_table(DEMO / "club_log.parquet").slice(0, 5_000)
    rules = jn.JourneyRules.from_toml(DEMO / "rules.toml")
    frame = frame_of(table)
    plain = jn.tally(table, rules)
    monkeypatch.setenv(VARIABLE, "a secret of the tests, long enough")
    keyed = jn.tally_spark(frame, rules)
    assert_same(keyed, jn.tally(table, rules))
    assert keyed != plain
    with pytest.raises(JourneysError, match="different JOURNEYS_ID_KEY"):
        keyed + plain
    monkeypatch.setenv(VARIABLE, "short")
    with pytest.raises(RulesError, match="JOURNEYS_ID_KEY holds 5 bytes"):
        jn.tally_spark(frame, rules)


def test_columns_with_odd_names_and_an_empty_log(frame_of: Callable[..., Any]):
    rules = jn.JourneyRules("the `who`.id", "place", "what", silence="1d", log_start="2025-01-01", as_of="2025-02-01")
    when = pa.array([1_736_000_000_000_000] * 3, pa.timestamp("us", "UTC"))
    table = pa.table({"the `who`.id": [1, 1, 2], "place": when, "what": ["visit", "price", "visit"]})
    assert_same(jn.tally_spark(frame_of(table), rules), jn.tally(table, rules))
    assert_same(jn.tally_spark(frame_of(table[:0]), rules), jn.tally(table[:0], rules))


def test_faults_are_told_in_one_line(frame_of: Callable[..., Any]):
    when = pd.date_range("2025-01-01", periods=3, tz="UTC").as_unit("us")
    table = pa.table({"who": [1, 2, 3], "when": pa.array(when), "what": ["visit", "entry", "visit"]})
    rules = jn.JourneyRules("who", "when", "what", silence="30d")
    for counted in (jn.tally_spark, jn.tally):
        given = frame_of(table) if counted is jn.tally_spark else table
        with pytest.raises(LogError, match="column 'what' holds an event called 'entry'"):
            counted(given, rules)
        with pytest.raises(LogError, match="column 'who' holds numbers, not times"):
            counted(given, jn.JourneyRules("what", "who", "when", silence="30d"))
        with pytest.raises(LogError, match="has no column 'happened'; there are"):
            counted(given, jn.JourneyRules("who", "happened", "what", silence="30d"))
        with pytest.raises(LogError, match="holds no usable time"):
            counted(given, jn.JourneyRules("who", "when", "what", silence="30d", as_of="2024-01-01"))


def test_a_clock_that_was_wrong(frame_of: Callable[..., Any]):
    when = pd.date_range("2025-01-01", periods=2_000, freq="h", tz="UTC").as_unit("us").to_series()
    when.iloc[700] = pd.Timestamp("2033-01-01", tz="UTC")
    table = pa.table({"who": list(range(2_000)), "when": pa.array(when), "what": ["visit"] * 2_000})
    rules = jn.JourneyRules("who", "when", "what", silence="30d")
    with pytest.raises(LogError, match='1 of 2000 rows lie long after all others.*set as_of="2025-03-25') as told:
        jn.tally_spark(frame_of(table), rules)
    with pytest.raises(LogError) as here:
        jn.tally(table, rules)
    assert str(told.value) == str(here.value)
    for as_of in ("2025-03-26", "2034-01-01"):
        rules = jn.JourneyRules("who", "when", "what", silence="30d", as_of=as_of)
        assert_same(jn.tally_spark(frame_of(table), rules), jn.tally(table, rules))


class Lacking:
    """A frame whose workers do not have the package."""

    columns = ["who", "when", "what"]

    def select(self, *columns: Any) -> Lacking:
        return self

    def mapInArrow(self, work: Any, schema: str) -> Lacking:  # noqa: N802
        return self

    def collect(self) -> None:
        raise RuntimeError("pages of traces: ModuleNotFoundError: No module named 'journeys'")


def test_workers_without_the_package(spark: Any):
    with pytest.raises(JourneysError, match="workers of Spark lack this package; install it where they run"):
        jn.tally_spark(Lacking(), jn.JourneyRules("who", "when", "what", silence="30d"))
