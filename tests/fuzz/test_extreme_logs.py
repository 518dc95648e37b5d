"""Logs at the ends of what there can be: each gives the numbers of the slow reading, or one clear error."""

from __future__ import annotations

import datetime as dt
import os
from bisect import bisect_left
from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from slow_rules import read_log

import journeys as jn
from journeys.errors import LogError, RulesError, StoreError
from journeys.intake.groups import cohort_calendar
from journeys.intake.identity import bucket_of, customer_keys
from journeys.kernels.bins import dwell_edges, elapsed_edges

DAY_US = 86_400_000_000
HOUR_US = DAY_US // 24
START_US = 1_735_689_600_000_000  # 2025-01-01
FIRST_US, LAST_US = -62_135_596_800_000_000, 253_402_300_799_999_999  # the years 1 to 9999


def rules(**more: Any) -> jn.JourneyRules:
    settings = {"converted": "joined", "churned": "declined", "silence": "2d"} | more
    return jn.JourneyRules("who", "when", "what", **settings)


def table_of(who: Any, when: Any, what: Any, **more: Any) -> pa.Table:
    return pa.table({"who": who, "when": pa.array(when, pa.timestamp("us", "UTC")), "what": what, **more})


def hold(who: list[Any], when: list[int], what: list[str], source: Any = None) -> jn.Tally:
    """Hold moves and journeys against the slow reading; return the tally."""
    read = rules()
    edges = [each.tolist() for each in (dwell_edges(read.silence_us, False), elapsed_edges(read.silence_us, False, ()))]
    keys = dict(zip(who, bucket_of(customer_keys(pa.array(who))[0]).tolist(), strict=True))
    slow = read_log(
        [(*row, None, False, {}) for row in zip(who, when, what, strict=True)],
        converted=["joined"], churned=["declined"], silence_us=read.silence_us, as_of_us=max(when),
        log_start_us=min(when), bucket_of=keys.__getitem__,
        dwell_bin=lambda us: bisect_left(edges[0], us), elapsed_bin=lambda us: bisect_left(edges[1], us),
    )  # fmt: skip
    tally = jn.tally(table_of(who, when, what) if source is None else source, read)
    found = {
        (row.bucket, row.state, row.next, row.bin, row.busy): (row.n, row.dwell)
        for row in tally.table("moves").itertuples()
    }
    assert found == slow.moves
    found = {
        (row.bucket, row.state, row.outcome, row.bin, row.sure): (row.n, row.steps, row.steps_squared, row.elapsed)
        for row in tally.table("journeys").itertuples()
    }
    assert found == slow.journeys
    return tally


def spread(n: int, step_us: int = HOUR_US) -> list[int]:
    return (START_US + step_us * np.arange(n)).tolist()


def events(n: int, seed: int = 1) -> list[str]:
    return np.random.default_rng(seed).choice(["visit", "price", "joined", "declined"], n).tolist()


def test_one_customer_has_all_rows() -> None:
    assert hold(["a"] * 4_000, spread(4_000), events(4_000)).n_people == 1


def test_every_row_is_a_new_customer() -> None:
    assert hold(list(range(4_000)), spread(4_000, 60_000_000), events(4_000)).n_people == 4_000


def test_one_state() -> None:
    who = [i % 7 for i in range(700)]
    assert hold(who, spread(700, 7 * HOUR_US), ["visit"] * 700).states == ("visit",)


def test_five_thousand_states() -> None:
    n = 15_000
    names = [f"s{i % 5_000:04}" for i in range(n)]
    assert len(hold([i % 11 for i in range(n)], spread(n, 60_000_000), names).states) == 5_000


def test_more_states_than_can_be_told_apart() -> None:
    n = 66_000
    with pytest.raises(LogError, match="more than 65,536 different states"):
        jn.tally(table_of([1] * n, spread(n), [f"s{i}" for i in range(n)]), rules())


def test_all_times_equal() -> None:
    who = [i % 5 for i in range(500)]
    assert hold(who, [START_US] * 500, events(500)).days == 0


def test_first_and_last_years() -> None:
    when = [FIRST_US, FIRST_US + 1, FIRST_US + DAY_US, START_US, LAST_US - 1, LAST_US]
    read = rules(log_start="0001-01-01", as_of="9999-12-31T23:59:59.999999Z")
    tally = jn.tally(table_of([1, 2, 1, 1, 2, 1], when, ["visit", "visit", "joined", "visit", "visit", "visit"]), read)
    held = hold([1, 2, 1, 1, 2, 1], when, ["visit", "visit", "joined", "visit", "visit", "visit"])
    pd.testing.assert_frame_equal(tally.table("moves"), held.table("moves"))
    assert (str(tally.log_start)[:10], str(tally.as_of)[:10]) == ("0001-01-01", "9999-12-31")


@pytest.mark.parametrize("cohort", ["day", "week", "month"])
@pytest.mark.parametrize("timezone", ["UTC", "Asia/Tokyo", "America/New_York"])
def test_cohorts_at_both_ends_of_the_calendar(cohort: str, timezone: str) -> None:
    starts, names = cohort_calendar(cohort, timezone, FIRST_US, FIRST_US + 40 * DAY_US)
    assert starts[0] <= FIRST_US
    assert (np.diff(starts) > 0).all()
    assert names[0] == ("0001-01" if cohort == "month" else "0001-01-01")
    starts, names = cohort_calendar(cohort, timezone, LAST_US - 40 * DAY_US, LAST_US)
    assert starts[0] <= LAST_US - 40 * DAY_US
    assert starts[-1] <= LAST_US
    # 9999-12-31 is a Friday.
    assert names[-1] == {"day": "9999-12-31", "week": "9999-12-27", "month": "9999-12"}[cohort]


def test_nanoseconds_and_times_out_of_range() -> None:
    ns = pa.array([START_US * 1_000 + 999, START_US * 1_000 + 1_000, None], pa.timestamp("ns", "UTC"))
    tally = jn.tally(pa.table({"who": [1, 1, 1], "when": ns, "what": ["visit", "joined", "visit"]}), rules())
    assert tally.findings.groupby("code").n.sum()[["missing_time", "sub_microsecond"]].tolist() == [1, 1]
    assert int(tally.table("moves").query("next == 'joined'").dwell.iloc[0]) == 1
    seconds = pa.array([START_US // 1_000_000, 2**62, -(2**62)], pa.timestamp("s", "UTC"))
    tally = jn.tally(pa.table({"who": [1, 1, 1], "when": seconds, "what": ["visit"] * 3}), rules())
    assert tally.findings.set_index("code").n["out_of_range_time"] == 2


@pytest.mark.parametrize(
    "kind", [pa.decimal32(9, 8), pa.decimal64(18, 17), pa.decimal128(38, 37), pa.decimal256(76, 75), pa.float64()]
)
def test_values_of_every_width(kind: pa.DataType) -> None:
    paid = pa.array([9.5, -9.9999999, None], pa.float64()) if kind == pa.float64() else pa.array(
        [Decimal("9.5"), Decimal("-9.9999999"), None], kind)  # fmt: skip
    log = table_of([1, 2, 3], spread(3), ["visit"] * 3, paid=paid)
    assert sorted(jn.tally(log, rules(value="paid")).table("journeys").value) == [-10_000_000, 0, 9_500_000]


def test_infinite_and_enormous_values() -> None:
    log = table_of([1, 1, 2], spread(3), ["visit"] * 3, paid=[float("inf"), -9e12, 9e12])
    tally = jn.tally(log, rules(value="paid"))
    assert sorted(tally.table("journeys").value) == [-9 * 10**18, 9 * 10**18]
    assert tally.findings.set_index("code").n["missing_value"] == 1
    for paid in ([9e12, 9e12, 0.0], [1e13, 0.0, 0.0]):
        with pytest.raises(LogError, match="9,000,000,000,000"):
            jn.tally(table_of([1, 1, 1], spread(3), ["visit"] * 3, paid=paid), rules(value="paid"))


@pytest.mark.parametrize("column", ["who", "when", "what"])
def test_nulls_everywhere(column: str) -> None:
    log = table_of([1, 2], spread(2), ["visit", "visit"])
    place = log.schema.get_field_index(column)
    for nulls in (pa.nulls(2), pa.nulls(2, log.schema.field(column).type)):
        broken = log.set_column(place, column, nulls)
        if column == "when":
            with pytest.raises(LogError, match="no usable time"):
                jn.tally(broken, rules())
        else:
            tally = jn.tally(broken, rules())
            assert (tally.n_journeys, tally.record.n_unreadable, tally.n_rows) == (0, 2, 2)


def undone(key: int) -> int:
    """Return the whole number that a key belongs to: the finaliser of splitmix64 backwards."""
    mask = 2**64 - 1

    def unshifted(value: int, by: int) -> int:
        out = value
        for _ in range(64 // by):
            out = value ^ (out >> by)
        return out

    key = unshifted(key, 31) * pow(0x94D049BB133111EB, -1, 2**64) & mask
    key = unshifted(key, 27) * pow(0xBF58476D1CE4E5B9, -1, 2**64) & mask
    key = unshifted(key, 30)
    return key - 2**64 if key >= 2**63 else key


def test_ids_chosen_so_that_their_keys_begin_alike() -> None:
    ids = [undone((0x1234 << 48) + 200 * i) for i in range(3_000)]
    keys, _ = customer_keys(pa.array(ids))
    assert len(np.unique(keys)) == 3_000
    assert len(np.unique(keys >> np.uint64(40))) == 1
    assert len(np.unique(bucket_of(keys))) == 1
    when = spread(3_000, 1_000_000) + [at + DAY_US for at in spread(3_000, 1_000_000)]
    assert hold(ids * 2, when, ["visit"] * 3_000 + ["joined"] * 3_000).n_people == 3_000


def test_groups_of_many_columns_with_many_values_stay_apart() -> None:
    # Six columns of 4,096 values: the product of their numbers is 2**72.
    n = 4_096
    wide = {f"g{j}": np.concatenate([np.arange(n), np.zeros(64, int)]) for j in range(1, 6)}
    wide["g0"] = np.concatenate([np.zeros(n, int), np.arange(64)])
    log = table_of(np.arange(n + 64), [START_US] * (n + 64), ["visit"] * (n + 64), **wide)
    tally = jn.tally(log, rules(by=sorted(wide), complete_history=True))
    assert len(tally.groups) == n + 63


def test_bytes_that_are_no_text_are_refused_not_gathered() -> None:
    log = table_of([1, 2], spread(2), pa.array([b"\xe9", b"\xe8"], pa.binary()))
    with pytest.raises(LogError, match="not UTF-8"):
        jn.tally(log, rules())


def test_empty_and_duplicate_files(tmp_path: Path) -> None:
    log = table_of([1, 2], spread(2), ["visit", "visit"])
    pq.write_table(log, tmp_path / "a.parquet")
    pq.write_table(log.slice(0, 0), tmp_path / "b.parquet")
    assert jn.tally(tmp_path, rules()) == jn.tally(log, rules())
    (tmp_path / "c.parquet").symlink_to(tmp_path / "a.parquet")
    with pytest.raises(LogError, match="holds a file twice"):
        jn.tally(tmp_path, rules())
    (tmp_path / "c.parquet").unlink()
    (tmp_path / "c.parquet").touch()
    with pytest.raises(LogError, match="not a whole Parquet file"):
        jn.tally(tmp_path, rules())


@pytest.mark.parametrize("target", [".", "..", "/", "nowhere"])
def test_links_in_a_folder_are_refused_not_passed_over(tmp_path: Path, target: str) -> None:
    folder = tmp_path / "logs"
    folder.mkdir()
    pq.write_table(table_of([1], spread(1), ["visit"]), folder / "a.parquet")
    (folder / "more").symlink_to(target)
    with pytest.raises(LogError, match="more is a link to a folder, or to nothing"):
        jn.tally(folder, rules())


def test_a_link_to_a_file_elsewhere_is_read(tmp_path: Path) -> None:
    folder = tmp_path / "logs"
    folder.mkdir()
    pq.write_table(table_of([1], spread(1), ["visit"]), tmp_path / "a.parquet")
    (folder / "b.parquet").symlink_to(tmp_path / "a.parquet")
    assert jn.tally(folder, rules()).n_rows == 1


def test_pipes_are_refused(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "log.csv")
    for source in (tmp_path, tmp_path / "log.csv"):
        with pytest.raises(LogError, match="pipe or a device"):
            jn.tally(source, rules())


@pytest.mark.parametrize(
    ("name", "told"),
    [("odd\udcff.parquet", "not UTF-8"), ("", "empty"), ("a" * 300 + ".csv", "too long"), ("\0.csv", "no such file")],
)
def test_names_that_no_file_should_have(tmp_path: Path, name: str, told: str) -> None:
    source = str(tmp_path / name) if name else name
    with pytest.raises(LogError, match=told):
        jn.tally(source, rules())


def test_ids_with_leading_zeros_stay_apart(tmp_path: Path) -> None:
    log = tmp_path / "log.csv"
    log.write_text("who,when,what,area\n007,2025-01-01T00:00:00Z,visit,01\n7,2025-01-02T00:00:00Z,joined,1\n")
    tally = jn.tally(log, rules(by="area"))
    assert tally.n_people == 2
    assert tally.groups == (("01",), ("1",))
    text = pa.array(["007", "7"])
    when = [START_US, START_US + DAY_US]
    assert tally == jn.tally(table_of(text, when, ["visit", "joined"], area=pa.array(["01", "1"])), rules(by="area"))


def test_leading_zeros_that_come_late_are_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("journeys.intake.read_csv.BLOCK_BYTES", 400)
    lines = [f"{10 + i},2025-01-01T00:00:{i:02}Z,visit" for i in range(50)]
    log = tmp_path / "log.csv"
    log.write_text("\n".join(["who,when,what", *lines, "007,2025-01-02T00:00:00Z,visit"]))
    with pytest.raises(LogError, match="row 52 .*column 'who', has a leading zero"):
        jn.tally(log, rules())
    log.write_text("\n".join(["who,when,what", "007,2025-01-02T00:00:00Z,visit", *lines]))
    assert jn.tally(log, rules()).n_people == 51


def test_whole_numbers_in_csv_are_the_same_customers_as_in_parquet(tmp_path: Path) -> None:
    (tmp_path / "log.csv").write_text("who,when,what\n 7,2025-01-01T00:00:00Z,visit\n-12,2025-01-02T00:00:00Z,visit\n")
    held = jn.tally(table_of([7, -12], [START_US, START_US + DAY_US], ["visit", "visit"]), rules())
    assert jn.tally(tmp_path / "log.csv", rules()) == held


def test_what_parquet_notes_of_its_times_must_be_true(tmp_path: Path) -> None:
    path = tmp_path / "log.parquet"
    when = [START_US + 1, START_US + DAY_US]
    pq.write_table(table_of([1, 2], when, ["visit", "visit"]), path)
    data = path.read_bytes()
    last = when[1].to_bytes(8, "little")
    place = data.rindex(last)
    path.write_bytes(data[:place] + (when[1] + DAY_US).to_bytes(8, "little") + data[place + 8 :])
    again = data.rindex(last, 0, place)
    if path.read_bytes()[again : again + 8] == last and data.count(last) > 2:
        # Older readers' notes stand beside the newer ones.
        moved = bytearray(path.read_bytes())
        moved[again : again + 8] = (when[1] + DAY_US).to_bytes(8, "little")
        path.write_bytes(bytes(moved))
    with pytest.raises(LogError, match="smallest and largest times"):
        jn.tally(path, rules())


def test_instants_outside_the_calendar_are_refused() -> None:
    for text in ("0001-01-01T00:00:00+05:00", "9999-12-31T23:00:00-05:00"):
        with pytest.raises(RulesError, match="not within the years 1 to 9999"):
            rules(as_of=text)
    assert rules(as_of=dt.date.max).as_of == "9999-12-31"


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("a = " + "[" * 100_000, "deeper"),
        ("a = " + "9" * 5_000, "not TOML"),
        ("[a" + ".a" * 100_000 + "]", "deeper"),
        ("#" * (5 << 20), "longer than 4 MiB"),
        ("a = '\x00'", "not TOML"),
        ('customer="a"\ntime="b"\nevent="c"\nsilence="1d"\nexclude={d=[[1]]}', "wanted texts, whole numbers"),
        ('customer="a"\ntime="b"\nevent="c"\nsilence="' + "9" * 5_000 + 'd"', "a text of 5,001 characters"),
    ],
)
def test_rules_files_that_would_take_for_ever(tmp_path: Path, text: str, told: str) -> None:
    (tmp_path / "rules.toml").write_text(text)
    with pytest.raises(RulesError, match=told) as caught:
        jn.JourneyRules.from_toml(tmp_path / "rules.toml")
    assert "\n" not in str(caught.value)


def test_dotted_decorations_in_rules_are_no_fault(tmp_path: Path) -> None:
    (tmp_path / "rules.toml").write_text("# " + "." * 300 + "\n" + rules(states={"a" + ".b" * 200: "c"}).to_toml())
    assert jn.JourneyRules.from_toml(tmp_path / "rules.toml").states == {"a" + ".b" * 200: "c"}


@pytest.mark.parametrize("head", [b"[]", b"[" * 100_000, b"null", b"\xff", b'{"format_version": 4}'])
def test_heads_of_stores_that_are_nonsense(tmp_path: Path, head: bytes) -> None:
    for key, load in ((b"journeys", jn.Tally.load), (b"journeys fit", jn.JourneyFit.load)):
        pq.write_table(pa.table({"table": ["moves"]}).replace_schema_metadata({key: head}), tmp_path / "x")
        with pytest.raises(StoreError):
            load(tmp_path / "x")


def test_a_fit_whose_choices_were_changed_is_refused(tmp_path: Path) -> None:
    when = [START_US + i * 5 * HOUR_US for i in range(60)]
    tally = jn.tally(table_of([i % 9 for i in range(60)], when, events(60)), rules(complete_history=True))
    jn.JourneyModel().fit(tally).save(tmp_path / "fit")
    table = pq.read_table(tmp_path / "fit")
    metadata = {key: value.replace(b"censored", b"ignored") for key, value in table.schema.metadata.items()}
    assert metadata != table.schema.metadata
    pq.write_table(table.replace_schema_metadata(metadata), tmp_path / "fit")
    with pytest.raises(StoreError, match="checksum does not fit"):
        jn.JourneyFit.load(tmp_path / "fit")


def test_devices_are_not_replaced(tmp_path: Path) -> None:
    tally = jn.tally(table_of([1], spread(1), ["visit"]), rules())
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(OSError, match="pipe or a device"):
        tally.save(tmp_path / "pipe")
    assert [path.name for path in tmp_path.iterdir()] == ["pipe"]
