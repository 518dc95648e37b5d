from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from journeys.intake.findings import MESSAGES, Findings

rows = st.lists(st.integers(0, 10**12), unique=True, max_size=40)


def found(numbers, code="missing_time"):
    findings = Findings()
    findings.add(code, "when", np.array(numbers, dtype=np.int64))
    return findings


@given(rows, rows)
def test_merging_is_adding_at_once(one, two):
    merged = found(one) + found(two)
    assert merged.n("missing_time") == len(one) + len(two)
    frame = merged.to_frame()
    assert frame["rows"].tolist() == ([sorted(one + two)[:10]] if one or two else [])
    assert merged == found(one + two)
    assert merged == found(two) + found(one)


@given(rows)
def test_json_round_trip(numbers):
    findings = found(numbers)
    findings.add("naive_times", "when", 1_000)
    assert Findings.from_dict(json.loads(json.dumps(findings.to_dict()))) == findings


def test_frame():
    findings = found([7, 3])
    findings.add("excluded", "staff", np.array([5]))
    findings.add("missing_event", "what", np.array([], dtype=np.int64))
    findings.add("tied_times", "when", np.int64(12))
    frame = findings.to_frame()
    assert frame.columns.tolist() == ["code", "column", "n", "rows", "message"]
    assert frame["code"].tolist() == ["excluded", "missing_time", "tied_times"]
    assert frame["n"].tolist() == [1, 2, 12]
    assert frame["rows"].tolist() == [[5], [3, 7], []]
    assert frame["message"].tolist() == [MESSAGES[code] for code in frame["code"]]
    assert repr(findings) == "Findings(excluded 1, missing_time 2, tied_times 12)"


def test_empty_frame_has_the_same_columns_and_types():
    pd.testing.assert_series_equal(Findings().to_frame().dtypes, found([1]).to_frame().dtypes)


def test_unknown_code():
    with pytest.raises(ValueError, match="code: got 'oops'; wanted one of excluded"):
        Findings().add("oops", "when", 1)


def test_sum_leaves_the_parts_alone():
    one = found([1])
    one + found([2])
    assert one.n("missing_time") == 1
