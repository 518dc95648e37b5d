"""Arrow arrays as numpy and back, straight from their buffers: slices, nulls and bits must not shift anything."""

from __future__ import annotations

import datetime as dt
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from journeys.intake.arrays import from_numpy, from_texts, is_missing, numbers
from journeys.intake.read_parquet import column_ranges

KINDS = [pa.int8(), pa.uint16(), pa.int32(), pa.int64(), pa.uint64(), pa.float32(), pa.float64(), pa.bool_()]
PIECES = [slice(0, 0), slice(0, 40), slice(3, 11), slice(8, 9), slice(13, 40), slice(40, 40)]


@pytest.mark.parametrize("piece", PIECES, ids=str)
@pytest.mark.parametrize("with_nulls", [False, True])
@pytest.mark.parametrize("kind", KINDS, ids=str)
def test_numbers_of_a_slice(kind: pa.DataType, with_nulls: bool, piece: slice) -> None:
    random = np.random.default_rng(11)
    values = random.integers(0, 2 if pa.types.is_boolean(kind) else 100, 40).tolist()
    values = [bool(value) for value in values] if pa.types.is_boolean(kind) else values
    given = [None if with_nulls and random.random() < 0.3 else value for value in values]
    array = pa.array(given, kind)[piece]
    got = numbers(array, missing=1)
    assert got.dtype == np.dtype(kind.to_pandas_dtype())
    assert got.tolist() == [1 if value is None else value for value in given[piece]]
    missing = is_missing(array)
    assert (missing is None) == (None not in given[piece])
    assert missing is None or missing.tolist() == [value is None for value in given[piece]]


def test_numbers_without_a_buffer() -> None:
    assert numbers(pa.array([], pa.int64())).tolist() == []
    assert numbers(pa.nulls(3, pa.int64()), missing=7).tolist() == [7, 7, 7]


@pytest.mark.parametrize("texts", [[], ["a"], [None], ["", "é", None, "long" * 50, "a\0b"] * 5], ids=len)
def test_texts(texts: list[str | None]) -> None:
    array = from_texts(texts)
    array.validate(full=True)
    assert array.equals(pa.array(texts, pa.string()))


@pytest.mark.parametrize("kind", [pa.int64(), pa.date32(), pa.timestamp("ms"), pa.timestamp("us", "UTC")], ids=str)
def test_from_numpy(kind: pa.DataType) -> None:
    width = pa.int32() if pa.types.is_date32(kind) else pa.int64()
    counts = np.arange(10)[::3]
    assert from_numpy(counts, kind).equals(pa.array(counts).cast(width).view(kind))


@pytest.mark.parametrize(
    "kind", [pa.date32(), pa.timestamp("ms"), pa.timestamp("us"), pa.timestamp("us", "Europe/Amsterdam")], ids=str
)
def test_ranges_are_those_of_the_values(kind: pa.DataType, tmp_path: Path) -> None:
    days = [dt.datetime(1969, 12, 30) + dt.timedelta(days=day) for day in range(9)]
    when = pa.array(days, pa.timestamp("us")).cast(kind)
    pq.write_table(pa.table({"when": when}), tmp_path / "log.parquet", row_group_size=4)
    ranges = column_ranges([tmp_path / "log.parquet"], "when")
    assert ranges is not None
    assert ranges.first.equals(when.take(pa.array([0, 4, 8])))
    assert ranges.last.equals(when.take(pa.array([3, 7, 8])))
    assert (ranges.n, ranges.n_rows) == ([4, 4, 1], 9)
