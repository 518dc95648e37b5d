from __future__ import annotations

import hashlib
import pickle
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import journeys as jn
from journeys.errors import JourneysError, RulesError, StoreError
from journeys.intake.id_key import VARIABLE, IdKey
from journeys.intake.identity import customer_keys
from journeys.tally.store import HEAD

SECRET, OTHER = "one secret of the tests, 32 bytes or more", "another secret of the tests, as long as that"


def by_hand(value: int | str, secret: str) -> int:
    """RFC 7693 by way of the standard library, id by id."""
    data = value.to_bytes(8, "little", signed=True) if isinstance(value, int) else value.encode()
    person = b"number" if isinstance(value, int) else b"text"
    return int.from_bytes(hashlib.blake2b(data, digest_size=8, key=secret.encode(), person=person).digest(), "little")


def test_each_id_goes_through_the_keyed_hash():
    key = IdKey(SECRET)
    for ids in ([3, -4, 3, 2**63 - 1, -(2**63)], ["3", "Zoë", "", "x" * 500, "3"]):
        keys, kind = customer_keys(pa.array(ids), None, key)
        assert kind == ("integer" if isinstance(ids[0], int) else "text")
        assert [k for k, one in zip(keys.tolist(), ids, strict=True) if one != ""] == [
            by_hand(one, SECRET) for one in ids if one != ""
        ]
        assert not (keys == customer_keys(pa.array(ids))[0]).any()
        assert not (keys == customer_keys(pa.array(ids), None, IdKey(OTHER))[0]).any()


def test_the_same_in_every_encoding():
    key, texts = IdKey(SECRET), ["a", "b", None, "a"]
    expected = [by_hand(one, SECRET) for one in ("a", "b", "a")]
    kinds = (pa.string(), pa.large_string(), pa.string_view(), pa.binary(), pa.large_binary())
    arrays = [pa.array(texts, pa.string()).cast(kind) for kind in kinds]
    arrays += [pa.array(texts).dictionary_encode(), pa.array(["x", *texts]).slice(1)]
    for array in arrays:
        keys, _ = customer_keys(array, None, key)
        assert keys[[0, 1, 3]].tolist() == expected, array.type
    for kind in (pa.int8(), pa.uint32(), pa.float64(), pa.decimal128(20, 0)):
        for array in (pa.array([7, None, 9], kind), pa.array([7, None, 9], kind).dictionary_encode()):
            keys, _ = customer_keys(array, None, key)
            assert keys[[0, 2]].tolist() == [by_hand(7, SECRET), by_hand(9, SECRET)]
    assert len(customer_keys(pa.array([], pa.string()), None, key)[0]) == 0


def test_a_secret_of_any_length_and_none_that_can_be_guessed(monkeypatch: pytest.MonkeyPatch):
    long = "x" * 65
    assert IdKey(long).fingerprint != IdKey("x" * 64).fingerprint
    assert IdKey(f" {SECRET}\n").fingerprint == IdKey(SECRET).fingerprint
    for short in ("", "  ", "x" * 31):
        monkeypatch.setenv(VARIABLE, short)
        with pytest.raises(RulesError, match="JOURNEYS_ID_KEY holds .* bytes; wanted at least 32 .* or not to be set"):
            IdKey.from_environment()
        with pytest.raises(RulesError, match="JOURNEYS_ID_KEY"):
            jn.tally(FRAME, RULES)
    monkeypatch.delenv(VARIABLE)
    assert IdKey.from_environment() is None


def test_the_secret_is_shown_nowhere():
    key = IdKey(SECRET)
    assert SECRET not in repr(key) + str(key) + key.fingerprint
    assert pickle.loads(pickle.dumps(key)).fingerprint == key.fingerprint  # it travels to workers
    assert not hasattr(key, "__dict__")


RULES = jn.JourneyRules("who", "when", "what", converted="joined", silence="3d", by="who_kind", as_of="2025-03-01",
                        log_start="2025-01-01")  # fmt: skip


def log_of(first: int) -> pd.DataFrame:
    rng = np.random.default_rng(first)
    who = first + rng.integers(0, 150, 3_000)
    when = pd.Timestamp("2025-01-01", tz="UTC") + pd.to_timedelta(np.sort(rng.integers(0, 58 * 86_400, 3_000)), "s")
    what = rng.choice(["visit", "price", "joined"], 3_000, p=[0.5, 0.4, 0.1])
    return pd.DataFrame({"who": who, "when": when, "what": what, "who_kind": np.where(who % 2, "odd", "even")})


FRAME = log_of(0)


def under(secret: str | None, frame: pd.DataFrame, monkeypatch: pytest.MonkeyPatch) -> jn.Tally:
    monkeypatch.delenv(VARIABLE, raising=False) if secret is None else monkeypatch.setenv(VARIABLE, secret)
    return jn.tally(frame, RULES)


def test_the_same_counts_in_other_buckets(monkeypatch: pytest.MonkeyPatch):
    plain, keyed = (under(secret, FRAME, monkeypatch) for secret in (None, SECRET))
    assert keyed == under(SECRET, FRAME.sample(frac=1, random_state=1).sort_values("when", kind="stable"), monkeypatch)
    assert keyed != plain
    assert (plain.id_key, keyed.id_key) == (None, IdKey(SECRET).fingerprint)
    for name in ("moves", "journeys", "entries"):
        mine, theirs = (tally.table(name).drop(columns="bucket") for tally in (plain, keyed))
        by = [column for column in mine if column not in ("n", "dwell", "steps", "steps_squared", "elapsed")]
        together = [frame.groupby(by, observed=True)["n"].sum() for frame in (mine, theirs)]
        pd.testing.assert_series_equal(*together)
    matrices = [jn.JourneyModel().fit(tally).matrix for tally in (plain, keyed)]
    pd.testing.assert_frame_equal(*matrices, rtol=1e-9)


def test_different_secrets_are_never_added_nor_compared(monkeypatch: pytest.MonkeyPatch):
    tallies = {secret: under(secret, FRAME, monkeypatch) for secret in (None, SECRET, OTHER)}
    for mine, theirs in ((None, SECRET), (SECRET, None), (SECRET, OTHER)):
        more = under(theirs, log_of(1_000), monkeypatch)
        with pytest.raises(JourneysError, match="different JOURNEYS_ID_KEY cannot be added") as told:
            tallies[mine] + more
        assert SECRET not in str(told.value)
        fits = [jn.JourneyModel().fit(tallies[secret]) for secret in (mine, theirs)]
        with pytest.raises(JourneysError, match="different JOURNEYS_ID_KEY cannot be compared"):
            jn.compare(*fits)
    both = tallies[SECRET] + under(SECRET, log_of(1_000), monkeypatch)
    assert both == under(SECRET, pd.concat([FRAME, log_of(1_000)]).sort_values("when", kind="stable"), monkeypatch)
    assert both.where(who_kind="odd").id_key == both.id_key == tallies[SECRET].id_key
    assert len(jn.compare(jn.JourneyModel().fit(both), by="who_kind").to_frame())


def test_the_file_keeps_the_fingerprint_and_not_the_secret(monkeypatch: pytest.MonkeyPatch, tmp_path: Path):
    keyed = under(SECRET, FRAME, monkeypatch)
    keyed.save(tmp_path / "tally.parquet")
    monkeypatch.delenv(VARIABLE)  # reading asks for no secret
    again = jn.Tally.load(tmp_path / "tally.parquet")
    assert again == keyed
    assert again.id_key == keyed.id_key
    table = pq.read_table(tmp_path / "tally.parquet")
    assert SECRET.encode() not in (tmp_path / "tally.parquet").read_bytes()
    for other in (f'"{IdKey(OTHER).fingerprint}"', "null"):
        head = table.schema.metadata[HEAD].replace(f'"{keyed.id_key}"'.encode(), other.encode())
        assert head != table.schema.metadata[HEAD]
        pq.write_table(table.replace_schema_metadata({HEAD: head}), tmp_path / "forged.parquet")
        with pytest.raises(StoreError, match="is damaged"):
            jn.Tally.load(tmp_path / "forged.parquet")
    jn.JourneyModel().fit(keyed).save(tmp_path / "fit.parquet")
    assert jn.JourneyFit.load(tmp_path / "fit.parquet").tally.id_key == keyed.id_key


def test_without_a_secret_the_checksum_is_that_of_the_counts_alone(monkeypatch: pytest.MonkeyPatch):
    plain = under(None, FRAME, monkeypatch)
    assert replace(plain, id_key="0" * 16).checksum != plain.checksum
