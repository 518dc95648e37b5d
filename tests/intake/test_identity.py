from __future__ import annotations

import decimal

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from journeys.errors import LogError
from journeys.intake import identity
from journeys.intake.identity import (
    bucket_major,
    bucket_of,
    bucket_of_major,
    customer_keys,
    from_bucket_major,
)

MASK = 2**64 - 1


def slow_mix(z: int) -> int:
    z = ((z ^ (z >> 30)) * 0xBF58476D1CE4E5B9) & MASK
    z = ((z ^ (z >> 27)) * 0x94D049BB133111EB) & MASK
    return z ^ (z >> 31)


def slow_text_key(text: bytes) -> int:
    golden = 0x9E3779B97F4A7C15
    total = slow_mix(len(text) ^ golden)
    for place in range(0, len(text), 8):
        word = int.from_bytes(text[place : place + 8], "little")
        total += slow_mix((word + (place // 8 + 1) * golden) & MASK)
    return slow_mix(total & MASK)


def test_splitmix64_published_stream():
    # First three outputs of splitmix64 from seed 0; recalled from memory.
    state = np.array([0x9E3779B97F4A7C15 * step & MASK for step in (1, 2, 3)], dtype=np.uint64)
    assert [hex(value) for value in identity.mix(state).tolist()] == [
        "0xe220a8397b1dcdaf", "0x6e789e6aa1b965f4", "0x6c45d188009454f"
    ]  # fmt: skip


def test_frozen_vectors():
    # Our own: a stored tally must find its customers again under every later version.
    integers, _ = customer_keys(pa.array([0, 1, -1, 2**63 - 1]))
    assert integers.tolist() == [slow_mix(value & MASK) for value in (0, 1, -1, 2**63 - 1)]
    texts, _ = customer_keys(pa.array(["a", "12345678", "123456789", "é" * 300]))
    assert texts.tolist() == FROZEN
    assert texts.tolist() == [slow_text_key(t.encode()) for t in ("a", "12345678", "123456789", "é" * 300)]


FROZEN = [
    15514235301164455778, 16659055505032602985, 8359605864708905679, 14218805041673735986,
]  # fmt: skip


WIDTHS = ["int8", "int16", "int32", "uint8", "uint16", "uint32", "uint64", "float32", "float64"]


@pytest.mark.parametrize("kind", WIDTHS)
def test_integers_of_any_width(kind):
    expected, _ = customer_keys(pa.array([3, 100, 7, 3], pa.int64()))
    keys, found = customer_keys(pa.array(np.array([3, 100, 7, 3], dtype=kind)))
    assert found == "integer"
    np.testing.assert_array_equal(keys, expected)
    encoded, _ = customer_keys(pa.array(np.array([3, 100, 7, 3], dtype=kind)).dictionary_encode())
    np.testing.assert_array_equal(encoded, expected)


def test_integers_with_gaps_and_decimals():
    expected, _ = customer_keys(pa.array([3, -4]))
    with_gap, _ = customer_keys(pa.array([3.0, np.nan, -4.0]))
    np.testing.assert_array_equal(with_gap[[0, 2]], expected)
    three_and_four = [decimal.Decimal(3), None, decimal.Decimal(-4)]
    decimals, _ = customer_keys(pa.array(three_and_four, pa.decimal128(20, 0)))
    np.testing.assert_array_equal(decimals[[0, 2]], expected)


SHORT_TEXTS = ["", "a", "a\0", "seven77", "eight888", "nine99999", "é" * 9]
TEXTS = [*SHORT_TEXTS, "x" * 511, "y" * 512, "z" * 513, "w" * 5000, None]


def text_encodings(values):
    yield pa.array(values, pa.string())
    yield pa.array(values, pa.large_string())
    yield pa.array(values, pa.string_view())
    yield pa.array([v if v is None else v.encode() for v in values], pa.binary())
    yield pa.array([v if v is None else v.encode() for v in values], pa.large_binary())
    yield pa.array(["skip", *values, "skip"]).slice(1, len(values))
    codes = {value: code for code, value in enumerate(values)}
    for index in (pa.int8(), pa.uint32(), pa.int64()):
        yield pa.DictionaryArray.from_arrays(pa.array([codes[v] for v in values], index), pa.array(values))
    views = pa.array([v or "" for v in values], pa.string_view())
    indices = pa.array([None if v is None else codes[v] for v in values], pa.uint32())
    yield pa.DictionaryArray.from_arrays(indices, views)


def test_text_is_the_same_in_every_encoding():
    present = [place for place, text in enumerate(TEXTS) if text is not None]
    expected = [slow_text_key(TEXTS[place].encode()) for place in present]
    assert len(set(expected)) == len(expected)
    for array in text_encodings(TEXTS):
        keys, kind = customer_keys(array)
        assert kind == "text"
        assert keys[present].tolist() == expected, array.type


@given(st.lists(st.text(st.characters(exclude_categories=["Cs"]), max_size=40), min_size=1, max_size=8))
def test_text_against_the_slow_way(texts):
    keys, kind = customer_keys(pa.array(texts))
    if kind is not None:  # all empty: nothing to key
        assert keys.tolist() == [slow_text_key(text.encode()) for text in texts]


def test_fixed_size_ids():
    keys, kind = customer_keys(pa.array([b"0123456789abcdef"], pa.binary(16)))
    assert (kind, keys.tolist()) == ("text", [slow_text_key(b"0123456789abcdef")])


def test_one_huge_id_among_small_ones():
    texts = ["a"] * 1000 + ["h" * 3_000_001]
    keys, _ = customer_keys(pa.array(texts))
    assert keys[-1] == slow_text_key(b"h" * 3_000_001)
    assert len(set(keys.tolist())) == 2


@pytest.mark.parametrize(
    ("array", "message"),
    [
        (pa.array([2**63], pa.uint64()), "above 9223372036854775807; give customers whole numbers"),
        (pa.array([1.5]), "holds numbers with a fraction"),
        (pa.array([1e17]), "too large for double"),
        (pa.array([np.inf]), "too large for double"),
        (pa.array([True]), "is of type bool; give customers whole numbers that fit in int64, or text"),
        (pa.array([decimal.Decimal("1.5")]), "is of type decimal"),
        (pa.array([decimal.Decimal(10**30)]), "whole numbers of over 18 digits"),
        (pa.array([[1]]), "is of type list"),
        (pa.array([0], pa.timestamp("s")), "is of type timestamp"),
    ],
)
def test_refuses(array, message):
    with pytest.raises(LogError, match=message):
        customer_keys(array)


def test_refuses_a_change_of_kind():
    _, kind = customer_keys(pa.array([1]))
    assert customer_keys(pa.array([None, None]), kind)[1] == "integer"
    assert customer_keys(pa.array(["", None]), kind)[1] == "integer"
    with pytest.raises(LogError, match="change from whole numbers to text within the log"):
        customer_keys(pa.array(["a"]), kind)
    with pytest.raises(LogError, match="change from text to whole numbers"):
        customer_keys(pa.array([1]), "text")


@pytest.mark.parametrize(
    "ids",
    [
        pa.array(np.arange(200_000)),
        pa.array(np.arange(200_000) * 200),
        pa.array([f"customer-{number:08d}" for number in range(200_000)]),
        pa.array([f"{number}@a.example" for number in range(200_000)]),
    ],
    ids=["sequential", "multiples of 200", "common prefix", "common suffix"],
)
def test_buckets_are_even(ids):
    keys, _ = customer_keys(ids)
    assert len(np.unique(keys)) == len(ids)
    counts = np.bincount(bucket_of(keys), minlength=200)
    assert stats.chisquare(counts).pvalue > 1e-4


def test_every_bit_of_an_id_changes_half_of_the_key():
    ids = np.arange(2_000, dtype=np.int64) * 7919
    base, _ = customer_keys(pa.array(ids))
    texts = [f"{number:016d}" for number in range(2_000)]
    text_base, _ = customer_keys(pa.array(texts))
    for bit in range(0, 63, 9):
        flipped, _ = customer_keys(pa.array(ids ^ (1 << bit)))
        assert np.bitwise_count(base ^ flipped).mean() == pytest.approx(32, abs=0.6)
    for place in range(16):
        changed = [text[:place] + chr(ord(text[place]) ^ 1) + text[place + 1 :] for text in texts]
        keys, _ = customer_keys(pa.array(changed))
        assert np.bitwise_count(text_base ^ keys).mean() == pytest.approx(32, abs=0.6)


@given(st.lists(st.integers(0, MASK), min_size=1))
def test_bucket_major_keeps_every_key_apart(values):
    keys = np.array([*values, 0, 199, 200, MASK, MASK - 1], dtype=np.uint64)
    major = bucket_major(keys)
    np.testing.assert_array_equal(from_bucket_major(major), keys)
    np.testing.assert_array_equal(bucket_of_major(major), bucket_of(keys))
    assert (np.diff(bucket_of(keys[np.argsort(major)])) >= 0).all()


def test_bucket_major_formula():
    quotient, rest = divmod(2**64, 200)
    for key in (0, 1, 199, 12345, 2**63, MASK):
        expected = key % 200 * quotient + min(key % 200, rest) + key // 200
        assert bucket_major(np.array([key], dtype=np.uint64)).tolist() == [expected]
