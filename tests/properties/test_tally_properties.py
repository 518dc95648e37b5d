"""What must not change a tally, and what changes it in a known way, on random logs."""

from __future__ import annotations

import tempfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from random_logs import DAY_US, RandomLog, as_text, logs

import journeys as jn
from journeys.intake import identity

TABLES = ("moves", "entries", "journeys", "customers")

quick = settings(max_examples=40, deadline=None,
                 suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large])


def arrow(frame: pd.DataFrame) -> pa.Table:
    return pa.Table.from_pandas(frame, preserve_index=False)


def rules_of(log: RandomLog) -> jn.JourneyRules:
    return jn.JourneyRules(**log.rules)


def counts(tally: jn.Tally) -> dict[tuple[str, str], int]:
    """Return the findings without their row numbers; whether all times are midnights is no sum over parts."""
    frame = tally.findings.query("code != 'midnight_times'")
    return dict(zip(zip(frame["code"], frame["column"], strict=True), frame["n"], strict=True))


def same(one: jn.Tally, other: jn.Tally, *, rows: bool = True) -> None:
    """Hold two tallies against each other: every table, every finding; row numbers too unless told not to."""
    assert one == other
    assert one.n_rows == other.n_rows
    for name in TABLES:
        pd.testing.assert_frame_equal(one.table(name), other.table(name))
    if rows:
        pd.testing.assert_frame_equal(one.findings, other.findings)
    else:
        assert counts(one) == counts(other)


@contextmanager
def folder() -> Iterator[Path]:
    with tempfile.TemporaryDirectory() as name:
        yield Path(name)


@quick
@given(log=logs(), data=st.data())
def test_splitting_the_stream_anywhere(log: RandomLog, data: st.DataObject) -> None:
    table = arrow(log.frame)
    cuts = sorted(data.draw(st.lists(st.integers(0, table.num_rows), max_size=6)))
    batches = [
        batch
        for start, end in zip([0, *cuts], [*cuts, table.num_rows], strict=True)
        for batch in (table.slice(start, end - start).to_batches() or [pa.RecordBatch.from_pylist([], table.schema)])
    ]
    reader = pa.RecordBatchReader.from_batches(table.schema, batches)
    whole = jn.tally(log.frame, rules_of(log))
    same(jn.tally(reader, rules_of(log)), whole)
    same(jn.tally(iter(batches), rules_of(log)), whole)


@quick
@given(log=logs())
def test_pandas_parquet_and_arrow_are_one_log(log: RandomLog) -> None:
    rules, table = rules_of(log), arrow(log.frame)
    whole = jn.tally(log.frame, rules)
    same(jn.tally(table, rules), whole)
    same(jn.tally(table.to_reader(max_chunksize=3), rules), whole)
    with folder() as here:
        pq.write_table(table, here / "log.parquet", row_group_size=4)
        same(jn.tally(here / "log.parquet", rules), whole)
        with pa.ipc.new_file(here / "log.arrow", table.schema) as writer:
            writer.write_table(table, max_chunksize=5)
        same(jn.tally(here / "log.arrow", rules), whole)


@quick
@given(log=logs(), data=st.data())
def test_order_of_customers_does_not_matter(log: RandomLog, data: st.DataObject) -> None:
    """Rows of other customers may come before, between or after; only a customer's own order counts."""
    frame = log.frame
    code = pd.factorize(frame["customer"])[0]
    shuffled = data.draw(st.permutations(range(len(frame))))
    order = np.array(shuffled, dtype=int)
    for each in np.unique(code):
        # The places that this customer's rows have got, filled in the rows' own order.
        mine = np.flatnonzero(code[order] == each)
        order[mine] = np.sort(order[mine])
    moved = frame.iloc[order].reset_index(drop=True)
    same(jn.tally(moved, rules_of(log)), jn.tally(frame, rules_of(log)), rows=False)


@quick
@given(log=logs(), data=st.data())
def test_folder_of_parts_is_read_by_name(log: RandomLog, data: st.DataObject) -> None:
    """Rows dealt out to files: the folder is the files one after the other, however the list was ordered."""
    table, rules = arrow(log.frame), rules_of(log)
    n_files = data.draw(st.integers(1, 4))
    dealt = np.array([data.draw(st.integers(0, n_files - 1)) for _ in range(table.num_rows)])
    parts = [table.filter(pa.array(dealt == part)) for part in range(n_files)]
    with folder() as here:
        for part in data.draw(st.permutations(range(n_files))):
            pq.write_table(parts[part], here / f"part-{part}.parquet")
        whole = jn.tally(pa.concat_tables(parts), rules)
        same(jn.tally(here, rules), whole)
        paths = [here / f"part-{part}.parquet" for part in range(n_files)]
        same(jn.tally(paths, rules), whole)
        if not has_ties(log):
            permuted = [str(paths[part]) for part in data.draw(st.permutations(range(n_files)))]
            same(jn.tally(permuted, rules), whole, rows=False)
            same(jn.tally(table, rules), whole, rows=False)


def has_ties(log: RandomLog) -> bool:
    """Tell whether the order of rows within some moment matters."""
    return bool(log.frame.duplicated(["customer", "time"]).any())


@quick
@given(log=logs(), data=st.data())
def test_tallies_of_disjoint_customers_add_up(log: RandomLog, data: st.DataObject) -> None:
    table, rules = arrow(log.frame), rules_of(log)
    code = pd.factorize(log.frame["customer"])[0]
    n_parts = data.draw(st.integers(1, 3))
    part_of = np.array([data.draw(st.integers(0, n_parts - 1)) for _ in range(code.max() + 2)])
    part = part_of[code]
    tallies = [jn.tally(table.filter(pa.array(part == one)), rules) for one in range(n_parts)]
    added = tallies[0]
    for other in tallies[1:]:
        added = added + other
    whole = jn.tally(table, rules)
    same(added, whole, rows=False)
    backwards = tallies[-1]
    for other in tallies[-2::-1]:
        backwards = backwards + other
    same(backwards, whole, rows=False)


def fit_or_refusal(frame: pd.DataFrame, rules: dict[str, Any]) -> tuple[jn.JourneyFit | None, str]:
    """Return the fit, or the first words of why there is none."""
    try:
        return jn.JourneyModel().fit(jn.tally(frame, jn.JourneyRules(**rules))), ""
    except jn.errors.LogError as error:
        return None, str(error)[:15]


def answers(fit: jn.JourneyFit) -> pd.DataFrame:
    """Return point estimates: where journeys end, and how soon the conversions come."""
    ends = jn.outcomes(fit).to_frame().rename(columns={"outcome": "of"})
    frames = [ends, *(jn.first_passage(fit, clock=clock, method="linearised").to_frame()
                      .rename(columns={"measure": "of"})
                      .assign(of=lambda frame, clock=clock: clock + " " + frame["of"]) for clock in ("steps", "time"))]
    return pd.concat(frames).set_index(["start_state", "of"])[["estimate"]].sort_index()


@quick
@given(log=logs(), data=st.data())
@pytest.mark.filterwarnings("ignore::journeys.errors.JourneysWarning")
def test_relabelling_states_permutes_the_matrix(log: RandomLog, data: st.DataObject) -> None:
    named = ("states", "unmapped", "opens", "stages", "touchpoints")
    rules = {key: value for key, value in log.rules.items() if key not in named}
    ends = {*rules["converted"], *rules["churned"]}
    names = sorted({str(name) for name in log.frame["event"].dropna() if name} - ends)
    ranks = data.draw(st.permutations(range(len(names))))
    new = {name: f"{rank:02d} formerly {name}" for name, rank in zip(names, ranks, strict=True)}
    renamed = log.frame.assign(event=log.frame["event"].astype(object).map(lambda name: new.get(name, name)))
    first, last = jn.tally(log.frame, jn.JourneyRules(**rules)), jn.tally(renamed, jn.JourneyRules(**rules))
    assert counts(first) == counts(last)
    for table in TABLES:
        before, after = first.table(table), last.table(table)
        for key in {"state", "next", "outcome"} & set(before):
            before[key] = before[key].map(lambda name: new.get(name, name))
        keys = [key for key in ("bucket", "state", "next", "outcome", "bin", "busy", "sure") if key in before]
        before, after = (part.sort_values(keys, ignore_index=True) for part in (before, after))
        pd.testing.assert_frame_equal(before, after)
    fit, refusal = fit_or_refusal(log.frame, rules)
    other, other_refusal = fit_or_refusal(renamed, rules)
    assert refusal == other_refusal
    if fit is not None and other is not None:
        moved = fit.matrix.rename(index=new, columns=new)
        pd.testing.assert_frame_equal(other.matrix, moved.loc[other.matrix.index, other.matrix.columns], rtol=1e-12)
        moved_answers = answers(fit).rename(index=new, level="start_state").sort_index()
        pd.testing.assert_frame_equal(answers(other), moved_answers, rtol=1e-9, atol=1e-12)


def renamed_customers(frame: pd.DataFrame) -> pd.Series:
    """Return other ids, one for one: of whole numbers the bits turned over and rotated, of text a longer text."""
    ids = frame["customer"]
    if pd.api.types.is_integer_dtype(ids.dtype):
        return ids.map(lambda one: one if pd.isna(one) else rotated(int(one))).astype(ids.dtype)
    return ids.map(lambda one: one if pd.isna(one) else f"{one} the other")


def rotated(number: int) -> int:
    bits = ~number % 2**64
    bits = (bits << 1 | bits >> 63) % 2**64
    return bits - 2**64 if bits >= 2**63 else bits


@quick
@given(log=logs())
@pytest.mark.filterwarnings("ignore::journeys.errors.JourneysWarning")
def test_renaming_customers_changes_no_estimate(log: RandomLog) -> None:
    frame = log.frame.assign(customer=renamed_customers(log.frame))
    fit, refusal = fit_or_refusal(log.frame, log.rules)
    other, other_refusal = fit_or_refusal(frame, log.rules)
    assert refusal == other_refusal
    if fit is not None and other is not None:
        pd.testing.assert_frame_equal(fit.matrix, other.matrix, rtol=1e-12, atol=1e-14)
        pd.testing.assert_frame_equal(answers(fit), answers(other), rtol=1e-10, atol=1e-12)
        pd.testing.assert_frame_equal(
            fit.moves().to_frame()[["state", "next_state", "n_moves"]],
            other.moves().to_frame()[["state", "next_state", "n_moves"]],
        )


@quick
@given(log=logs(), days=st.integers(-4_000, 300))
def test_shifting_all_times_by_whole_days(log: RandomLog, days: int) -> None:
    """Where no group is bound to the calendar."""
    dates = log.slow["whole_days"]
    settings = {key: value for key, value in log.rules.items() if key not in ("cohort", "timezone", "split_at", "by")}
    settings["by"] = [name for name in log.rules.get("by", ()) if name not in ("cohort", "period")]
    step, times = timedelta(days=days), log.frame["time"]
    moved = times.map(lambda day: day + step, na_action="ignore") if dates else times + pd.Timedelta(step)
    rules = settings | {
        key: as_text(log.slow[f"{key}_us"] + days * DAY_US, dates) for key in ("log_start", "as_of")
    }
    first = jn.tally(log.frame, jn.JourneyRules(**settings))
    later = jn.tally(log.frame.assign(time=moved), jn.JourneyRules(**rules))
    for name in TABLES:
        pd.testing.assert_frame_equal(first.table(name), later.table(name))
    pd.testing.assert_frame_equal(first.findings, later.findings)
    assert later.as_of - first.as_of == pd.Timedelta(days=days)


@quick
@given(log=logs())
def test_round_trip_through_a_file(log: RandomLog) -> None:
    tally = jn.tally(log.frame, rules_of(log))
    with folder() as here:
        tally.save(here / "tally.parquet")
        back = jn.Tally.load(here / "tally.parquet")
    same(back, tally)
    assert back.rules == tally.rules
    same(back + empty_like(log), tally, rows=False)


def empty_like(log: RandomLog) -> jn.Tally:
    """Return the tally of no rows, read by the same rules."""
    nothing = jn.tally(arrow(log.frame).slice(0, 0), rules_of(log))
    assert nothing.n_rows == nothing.n_people == 0
    return nothing


def secret_texts(rng: np.random.Generator, n: int) -> list[str]:
    letters = np.array(list("abcdefghijklmnopqrstuvwxyz0123456789"))
    return ["".join(rng.choice(letters, 12)) for _ in range(n)]


def secret_numbers(rng: np.random.Generator, n: int) -> list[int]:
    return rng.integers(2**40, 2**62, n).tolist()


@pytest.mark.parametrize("ids", [secret_texts, secret_numbers])
def test_no_customer_id_in_the_file(ids: Callable[[np.random.Generator, int], list[Any]], tmp_path: Path) -> None:
    """Neither an id nor its hash stands in a saved tally, compressed or not, as bytes or as digits."""
    rng = np.random.default_rng(8)
    who = np.array(ids(rng, 50), dtype=object)
    n = 600
    frame = pd.DataFrame({
        "customer": pd.Series(who[rng.integers(0, 50, n)]).infer_objects(),
        "time": pd.Timestamp("2025-01-01", tz="UTC") + pd.to_timedelta(np.sort(rng.integers(0, 200, n)), unit="D"),
        "event": rng.choice(["visit", "price", "joined", "joined"], n),
    })
    rules = jn.JourneyRules("customer", "time", "event", converted="joined", silence="10d", complete_history=True)
    tally = jn.tally(frame, rules)
    assert {"duplicate", "repeated_outcome", "tied_times"} & set(tally.findings["code"]), "findings have rows to tell"
    tally.save(tmp_path / "tally.parquet")
    table = pq.read_table(tmp_path / "tally.parquet")
    pq.write_table(table, tmp_path / "plain.parquet", compression="none", use_dictionary=False)
    held = (tmp_path / "tally.parquet").read_bytes() + (tmp_path / "plain.parquet").read_bytes()
    keys, _ = identity.customer_keys(pa.array(who.tolist()))
    for one, key, major in zip(who, keys, identity.bucket_major(keys), strict=True):
        for secret in (one, int(key), int(major)):
            assert str(secret).encode() not in held
            if isinstance(secret, int):
                assert secret.to_bytes(8, "little", signed=secret < 0) not in held
    assert b"joined" in held, "what the file does hold can be found this way"
