"""One table of ways to hold a log, all of which give the same tally."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import journeys as jn

RULES = jn.JourneyRules("who", "when", "what", converted=["joined"], churned=["left"], silence="3d", by="place",
                        touchpoints=["visit"], value="worth", stages=["visit", "price"], sequence="number")  # fmt: skip
EVENTS = ["visit", "price", "Café ☕", "joined", "left"]


def log_of(text_ids: bool) -> pa.Table:
    """A log in order of time, of whole seconds, so that every unit can hold it."""
    rng, n = np.random.default_rng(5), 4_000
    who = rng.integers(0, 120, n)
    when = np.sort(rng.integers(0, 40 * 86_400, n)) + 1_735_689_600
    return pa.table({
        "notes": pa.nulls(n),
        "who": pa.array([f"member-{number:03d}" for number in who] if text_ids else who),
        "when": pa.array(when * 1_000_000).cast(pa.timestamp("us", "UTC")),
        "what": pa.array(rng.choice(EVENTS, n, p=[0.4, 0.3, 0.1, 0.1, 0.1])),
        "place": pa.array(rng.choice(["Harbour", "Station", None], n, p=[0.5, 0.4, 0.1])),
        "worth": pa.array(rng.integers(-500, 5_000, n)),
        "number": pa.array(rng.integers(0, 3, n).astype(np.int32)),
    })  # fmt: skip


LOGS = {kind: log_of(kind == "text ids") for kind in ("number ids", "text ids")}
EXPECTED = {kind: jn.tally(log, RULES) for kind, log in LOGS.items()}
Way = Callable[[pa.Table], Any]


def recast(**kinds: pa.DataType) -> Way:
    def change(log: pa.Table) -> pa.Table:
        for name, kind in kinds.items():
            log = log.set_column(log.schema.get_field_index(name), name, log[name].cast(kind))
        return log

    return change


def texts_as(kind: pa.DataType) -> Way:
    def change(log: pa.Table) -> pa.Table:
        names = [field.name for field in log.schema if field.type == pa.string()]
        return recast(**dict.fromkeys(names, kind))(log)

    return change


def coded(index: pa.DataType, values: pa.DataType = pa.string()) -> Way:  # noqa: B008 - immutable
    """Put dictionaries in the place of the text columns that have few values."""

    def change(log: pa.Table) -> pa.Table:
        for name in ("what", "place"):
            array = log[name].combine_chunks().dictionary_encode()
            array = pa.DictionaryArray.from_arrays(array.indices.cast(index), array.dictionary.cast(values))
            log = log.set_column(log.schema.get_field_index(name), name, array)
        return log

    return change


def run_ends(log: pa.Table) -> pa.Table:
    import pyarrow.compute as pc

    array = pc.run_end_encode(log["what"].combine_chunks())
    return log.set_column(log.schema.get_field_index("what"), "what", array)


def coded_times(log: pa.Table) -> pa.Table:
    array = log["when"].combine_chunks().dictionary_encode()
    return log.set_column(log.schema.get_field_index("when"), "when", array)


def pieces(log: pa.Table) -> list[pa.RecordBatch]:
    """Batches of odd sizes, some without rows."""
    cuts = [0, 1, 1, 900, 2_500, 2_500, log.num_rows]
    return [log.slice(a, b - a).combine_chunks().to_batches()[0] if b > a else pa.RecordBatch.from_pylist(
        [], schema=log.schema) for a, b in zip(cuts, cuts[1:], strict=False)]  # fmt: skip


def batches_of_many_types(log: pa.Table) -> Any:
    """An iterator whose columns change the way they are written from batch to batch."""
    for place, change in enumerate((texts_as(pa.string()), coded(pa.int8()), texts_as(pa.string_view()))):
        yield from change(log.slice(place * 1_400, 1_400)).combine_chunks().to_batches()


class Stream:
    """Something that only knows the Arrow stream interface."""

    def __init__(self, log: pa.Table) -> None:
        self._log = log

    def __arrow_c_stream__(self, requested_schema: Any = None) -> Any:
        return self._log.__arrow_c_stream__(requested_schema)


class Cursor:
    """As database drivers have it."""

    def __init__(self, log: pa.Table) -> None:
        self._log = log

    def fetch_record_batch(self) -> pa.RecordBatchReader:
        return self._log.to_reader(max_chunksize=777)


UNITS = ("s", "ms", "us", "ns")
ZONES = ("UTC", "Europe/Amsterdam", "+05:30", None)
WAYS: dict[str, Way] = {
    "as it is": lambda log: log,
    **{f"{unit}, zone {zone}": recast(when=pa.timestamp(unit, zone)) for unit in UNITS for zone in ZONES},
    **{f"text as {kind}": texts_as(kind) for kind in (pa.large_string(), pa.string_view(), pa.binary())},
    **{f"dictionary by {index}": coded(index) for index in (
        pa.int8(), pa.int16(), pa.int32(), pa.int64(), pa.uint8(), pa.uint16(), pa.uint32(), pa.uint64())},
    "dictionary of large_string": coded(pa.int16(), pa.large_string()),
    "dictionary of string_view": coded(pa.uint32(), pa.string_view()),
    "run ends": run_ends,
    "dictionary of times": coded_times,
    "worth as decimal": recast(worth=pa.decimal128(25, 2)),
    "worth as float": recast(worth=pa.float32()),
    "number as int8": recast(number=pa.int8()),
    "columns in another order": lambda log: log.select(log.column_names[::-1]),
    "chunks": lambda log: pa.concat_tables([log.slice(0, 13), log.slice(13)]),
    "pandas": lambda log: log.to_pandas(),
    "pandas, Arrow types": lambda log: log.to_pandas(types_mapper=pd.ArrowDtype),
    "pandas, categories": lambda log: log.to_pandas().astype({"what": "category", "place": "category"}),
    "pandas, an index": lambda log: log.to_pandas().set_index(["place", "when"]),
    "list of batches": pieces,
    "iterator of batches": lambda log: iter(pieces(log)),
    "iterator of batches of many types": batches_of_many_types,
    "reader": lambda log: log.to_reader(max_chunksize=501),
    "stream": Stream,
    "cursor": Cursor,
}  # fmt: skip


@pytest.mark.parametrize("ids", LOGS)
@pytest.mark.parametrize("way", WAYS)
def test_however_it_is_held(way: str, ids: str):
    tally = jn.tally(WAYS[way](LOGS[ids]), RULES)
    assert tally == EXPECTED[ids]
    expected = EXPECTED[ids].findings
    found = tally.findings
    assert ("naive_times" in set(found["code"])) == way.endswith("zone None")
    pd.testing.assert_frame_equal(found[found["code"] != "naive_times"].reset_index(drop=True), expected)


WIDTHS = [pa.int16(), pa.int32(), pa.uint8(), pa.uint64(), pa.float64(), pa.decimal128(20, 0)]


@pytest.mark.parametrize("kind", WIDTHS, ids=str)
def test_number_ids_of_any_width(kind: pa.DataType):
    log = LOGS["number ids"]
    assert jn.tally(recast(who=kind)(log), RULES) == EXPECTED["number ids"]


@pytest.mark.parametrize("ids", LOGS)
@pytest.mark.parametrize("kind", ["parquet", "csv", "csv.gz", "tsv", "arrow", "feather", "folder", "hive", "list"])
def test_files(kind: str, ids: str, tmp_path: Path):
    log = LOGS[ids]
    path: Any = tmp_path / f"log.{kind}"
    if kind == "parquet":
        pq.write_table(log, path, row_group_size=600)
    elif kind in ("csv", "csv.gz", "tsv"):
        log.to_pandas().to_csv(path, index=False, sep="\t" if kind == "tsv" else ",")
    elif kind in ("arrow", "feather"):
        with pa.ipc.new_file(str(path), log.schema) as writer:
            writer.write_table(log, max_chunksize=700)
    else:
        halves = {"part=1": log.slice(0, 1_500), "part=2": log.slice(1_500)}
        for name, half in halves.items():
            folder = path / (name if kind == "hive" else "")
            folder.mkdir(parents=True, exist_ok=True)
            pq.write_table(half, folder / f"rows-{name[-1]}.parquet")
        path = sorted(path.rglob("*.parquet"), reverse=True) if kind == "list" else path
    assert jn.tally(path, RULES) == EXPECTED[ids]


@pytest.mark.optional
@pytest.mark.parametrize("ids", LOGS)
def test_polars(ids: str):
    polars = pytest.importorskip("polars", reason="optional engine missing: polars")
    frame = polars.from_arrow(LOGS[ids])
    what = polars.col("what")
    for way in (frame, frame.with_columns(what.cast(polars.Categorical)), frame.with_columns(what.cast(
        polars.Enum(EVENTS))), frame.with_columns(polars.col("when").dt.convert_time_zone("Asia/Tokyo")),
        frame.with_columns(polars.col("when").dt.cast_time_unit("ns")), frame.rechunk()):  # fmt: skip
        assert jn.tally(way, RULES) == EXPECTED[ids]


@pytest.mark.optional
@pytest.mark.filterwarnings("ignore:Arrow output on a DB-API result makes an extra copy")
@pytest.mark.parametrize("ids", LOGS)
def test_duckdb(ids: str, tmp_path: Path):
    duckdb = pytest.importorskip("duckdb", reason="optional engine missing: duckdb")
    log = LOGS[ids]
    with duckdb.connect(tmp_path / "log.duckdb") as connection:
        connection.execute("CREATE TABLE visits AS SELECT * FROM log")
        connection.execute("CREATE TYPE kind AS ENUM ('visit', 'price', 'Café ☕', 'joined', 'left')")
        assert jn.tally(connection.table("visits"), RULES) == EXPECTED[ids]
        as_enum = connection.sql("SELECT * REPLACE (CAST(what AS kind) AS what) FROM visits")
        assert jn.tally(as_enum, RULES) == EXPECTED[ids]
        assert jn.tally(connection.execute("SELECT * FROM visits"), RULES) == EXPECTED[ids]
    dbapi = pytest.importorskip("adbc_driver_duckdb.dbapi", reason="optional engine missing: adbc-driver-manager")
    with dbapi.connect(str(tmp_path / "log.duckdb")) as connection, connection.cursor() as cursor:
        cursor.execute("SELECT * FROM visits")
        assert jn.tally(cursor, RULES) == EXPECTED[ids]
    assert len(log) == 4_000
