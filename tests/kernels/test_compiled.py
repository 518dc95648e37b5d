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
from journeys.tally import count_log

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
