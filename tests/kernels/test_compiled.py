"""The compiled loop: built where a C compiler is, and refused clearly where it is not."""

from __future__ import annotations

import shutil
import sysconfig
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest

from journeys.intake import identity
from journeys.intake.rules import JourneyRules
from journeys.kernels import compiled
from journeys.kernels.held import Held, apart
from journeys.tally import count_log
from journeys.tally.order import by_customer

RULES = JourneyRules("member", "happened", "event", converted=["joined"], silence="30d", complete_history=True)
LOG = pd.DataFrame(
    {
        "member": [1, 1, 2],
        "event": ["visit", "joined", "visit"],
        "happened": pd.to_datetime(["2025-01-01", "2025-01-02", "2025-03-01"], utc=True),
    }
)


def test_it_is_built_where_a_compiler_is() -> None:
    # An editable install builds it beside its source.
    headers = Path(sysconfig.get_path("include")) / "Python.h"
    if shutil.which("cc") and headers.exists():
        assert compiled.is_built()


def test_struct_has_the_fields_of_the_c_file() -> None:
    source = (Path(compiled.__file__).parent / "_walk.c").read_text(encoding="utf-8")
    before = source[: source.index("} Walk;")]
    found = []
    for line in before[before.rindex("typedef struct {") :].splitlines()[1:]:
        text = line.strip()
        if text and not text.startswith(("/*", "*")):
            found += [part.split()[-1].lstrip("*") for part in text.rstrip(";").split(",")]
    assert found == [name for name, _ in compiled._Walk._fields_]


def test_records_are_laid_out_as_in_the_c_file() -> None:
    """The short names of the C file are those of the columns, in the same order and of the same size."""
    long = {"start": "journey_start", "visit": "visit_start", "first": "first_code", "events": "n_events"}
    source = (Path(compiled.__file__).parent / "_walk.c").read_text(encoding="utf-8")
    inside = source[: source.index("} Record;")].rpartition("typedef struct {")[2]
    kinds = {"int64_t": np.int64, "int32_t": np.int32, "uint8_t": np.bool_}
    laid_out = [
        (long.get(name.strip(), name.strip()), np.dtype(kinds[line.split()[0]]))
        for line in filter(None, map(str.strip, inside.split(";")))
        for name in line.split(maxsplit=1)[1].split(",")
    ]
    assert compiled.RECORD.names is not None
    assert laid_out == [(name, compiled.RECORD[name]) for name in compiled.RECORD.names]


def test_without_it_the_answer_is_the_same_and_asking_for_it_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    whole = count_log(LOG, RULES)
    monkeypatch.setattr(compiled, "_library", lambda: None)
    assert count_log(LOG, RULES) == whole
    with pytest.raises(ImportError, match="compiled loop is not built"):
        count_log(LOG, RULES, compiled=True)


def test_keys_are_the_same_with_and_without_it(monkeypatch: pytest.MonkeyPatch) -> None:
    if not compiled.is_built():
        pytest.skip("optional engine missing: the compiled loop")
    rng = np.random.default_rng(8)
    numbers = pa.array(rng.integers(-(2**62), 2**62, 5_000))
    letters = np.array(list("abcé漢\0 "))
    texts = pa.array(["".join(rng.choice(letters, size)) for size in rng.integers(0, 40, 5_000)])
    even = pa.array([f"{number:016x}" for number in rng.integers(0, 2**62, 5_000)])
    columns = (numbers, texts, texts[7:], even, texts.cast(pa.large_string()))
    with_it = [identity.bucket_major(identity.customer_keys(column)[0]) for column in columns]
    monkeypatch.setattr(compiled, "_library", lambda: None)
    without = [identity.bucket_major(identity.customer_keys(column)[0]) for column in columns]
    for one, two in zip(with_it, without, strict=True):
        np.testing.assert_array_equal(one, two)


def test_orders_and_sums_are_the_same_with_and_without_it(monkeypatch: pytest.MonkeyPatch) -> None:
    """Also of customers who share the leading bits of their keys, and come in the wrong order then."""
    if not compiled.is_built():
        pytest.skip("optional engine missing: the compiled loop")
    rng = np.random.default_rng(9)
    key = rng.integers(0, 2**64, 200, np.uint64)[rng.integers(0, 200, 3_000)]
    alike = key.copy()
    alike[::2] ^= np.uint64(1)
    expected = [np.argsort(one, kind="stable") for one in (key, alike)]
    assert compiled.sorted_positions(alike, 12) is None
    start = np.flatnonzero(np.diff(key[expected[0]], prepend=np.uint64(0)))
    values = rng.integers(-(2**40), 2**40, 3_000)
    sums = np.add.reduceat(values[expected[0]], start)
    for _ in ("with it", "without"):
        for one, order in zip((key, alike), expected, strict=True):
            np.testing.assert_array_equal(by_customer(one), order)
        np.testing.assert_array_equal(compiled.group_sums(values, expected[0], start), sums)
        monkeypatch.setattr(compiled, "_library", lambda: None)


def test_new_records_join_the_others_in_the_order_of_their_keys() -> None:
    if not compiled.is_built():
        pytest.skip("optional engine missing: the compiled loop")
    rng = np.random.default_rng(10)
    keys = rng.permutation(np.arange(5_000, dtype=np.uint64) * np.uint64(3))
    held = Held()
    for part in np.split(keys, [1, 2, 900, 950, 951, 2_000, 4_999]):
        held.new.make_room(len(part))
        held.new.key[: len(part)] = np.sort(part)
        held.new.record["time"][: len(part)] = np.sort(part).astype(np.int64) + 7
        held.new.n = len(part)
        held.settle()
        assert held.new.n == 0
    records = held.carried([])
    np.testing.assert_array_equal(records.key, np.sort(keys))
    np.testing.assert_array_equal(records.time, np.sort(keys).astype(np.int64) + 7)
    again = Held.of(apart(records)).carried(["visit_start"])
    np.testing.assert_array_equal(again.visit_start, records.time)
