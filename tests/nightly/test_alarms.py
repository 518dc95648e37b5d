"""Change alarms: what is counted by week, what trips, and what does not."""

from __future__ import annotations

import json
from collections import Counter
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from ledgers import DAY_US, START, invented, make_job, newest_tally, one_pass, write_night

from journeys.command.main import ALARM, DONE, main
from journeys.intake.identity import bucket_major, bucket_of_major, customer_keys
from journeys.nightly.alarms import LEVEL
from journeys.nightly.few_alarms import NUMBERS, Behind
from journeys.nightly.job import Job
from journeys.nightly.ledger import opened
from journeys.nightly.manifest import Generation
from journeys.nightly.night import Night, run_night
from journeys.questions.week_changes import CONVERTED, event_changes, week_changes
from journeys.tally.resumed import ResumedPass
from journeys.tally.tally import Tally
from journeys.tally.weeks import JOURNEY, STAY

Published = list[tuple[Generation, Tally]]
WEEK_US = 7 * DAY_US
N_FEW = 40
GROUPED = {"by": ["district"], "cohort": "month", "repeats": "merge"}


@pytest.fixture
def by_week(monkeypatch: pytest.MonkeyPatch) -> list[tuple[dict[str, Any], list[str], Any]]:
    """Tables by week of each night."""
    seen: list[tuple[dict[str, Any], list[str], Any]] = []
    real = ResumedPass.count

    def count(self: ResumedPass, *arguments: Any) -> Tally:
        tally = real(self, *arguments)
        if self.watch is not None:
            seen.append(self.named_weeks())
        return tally

    monkeypatch.setattr(ResumedPass, "count", count)
    return seen


def slow_conversion(rows: pd.DataFrame, log_start: int, as_of: int, silence: int, within: int) -> Counter[Any]:
    """Count journeys whose start was seen, row by row, by week of their start and whether they converted in time."""
    found: Counter[Any] = Counter()
    rows = rows.assign(us=[time.value // 1_000 for time in rows.happened])
    for _, mine in rows[rows.us <= as_of].groupby("who"):
        start, last, sure, latest_outcome = None, None, False, None
        for us, event in sorted(zip(mine.us, mine.event, strict=True), key=lambda row: row[0]):
            if start is not None and us - last > silence:
                found[(start - log_start_week(log_start)) // WEEK_US, False] += sure
                start = None
            if start is None:
                repeat = latest_outcome is not None and latest_outcome == event and us - last <= DAY_US // 24
                if repeat:
                    last = us
                    continue
                sure = last is not None or us >= log_start + silence
                start = us
            last, latest_outcome = us, None
            if event in ("joined", "left"):
                week = (start - log_start_week(log_start)) // WEEK_US
                found[week, event == "joined" and us - start <= within] += sure
                start, latest_outcome = None, event
        if start is not None:
            found[(start - log_start_week(log_start)) // WEEK_US, False] += sure
    return +found


def log_start_week(log_start: int) -> int:
    """Return when the week of the log's start began: START is a Monday."""
    monday = START.value // 1_000
    return monday + (log_start - monday) // WEEK_US * WEEK_US


@pytest.mark.parametrize("rules", [{}, GROUPED], ids=["plain", "grouped"])
def test_weeks_are_counted_beside_the_same_tally(
    root: Path, published: Published, by_week: list[Any], rules: dict[str, Any]
):
    job = make_job(root, rules, alarms={"within": "2d", "weeks": 104})
    nights = invented(31, 30, 20, n_people=12)
    for day in range(0, len(nights), 3):
        for one in range(day, min(day + 3, len(nights))):
            write_night(job, one, nights[one])
        run_night(job)
    tally = newest_tally(job)
    assert tally == one_pass(job, tally)
    table, _, _ = by_week[-1]
    got: Counter[Any] = Counter()
    for week, flag, won, n in zip(table["week"], table["flag"], table["next"], table["n"], strict=True):
        got[int(week), bool(won)] += int(n) * int(flag == JOURNEY)
    want = slow_conversion(pd.concat(nights), tally.log_start_us, tally.as_of_us, 5 * DAY_US, 2 * DAY_US)
    assert {key: n for key, n in got.items() if key[0] >= 1 and n} == {
        key: n for key, n in want.items() if key[0] >= 1
    }
    stays = tally.moves["n"].sum()
    first_week = int(table["n"][(table["flag"] != JOURNEY)].sum())
    assert 0 < first_week <= stays


def in_few_parts(n: int) -> list[int]:
    """Return ids of customers in 40 of the 200 buckets: a night's time goes with the parts that hold any."""
    keys, _ = customer_keys(pa.array(range(7 * n)))
    return np.flatnonzero(bucket_of_major(bucket_major(keys)) < N_FEW)[:n].tolist()


def changing(seed: int, n_weeks: int, share_after: float, change: int | None) -> list[pd.DataFrame]:
    """Return weeks of a log in which each newcomer visits, sees the price, and joins or leaves within a day.

    From the week `change` on another share joins in one of two districts, prices are no longer seen, and there is a
    quiz.
    """
    rng = np.random.default_rng(seed)
    weeks, people = [], iter(in_few_parts(n_weeks * 240))
    for week in range(n_weeks):
        rows = []
        for _ in range(240):
            who = next(people)
            at = week * WEEK_US + int(rng.integers(0, WEEK_US))
            district = rng.choice(["Harbour", "Hill"])
            after = change is not None and week >= change
            share = share_after if after and district == "Hill" else 0.4
            events = ["visit", "quiz" if after else "price", "joined" if rng.random() < share else "left"]
            rows += [(who, at + i * DAY_US // 3, event, district) for i, event in enumerate(events)]
        frame = pd.DataFrame(rows, columns=["who", "us", "event", "district"]).sort_values("us", kind="stable")
        frame["happened"] = START + pd.to_timedelta(frame.pop("us"), unit="us")
        weeks.append(frame)
    return weeks


def run_weeks(job: Job, weeks: list[pd.DataFrame]) -> list[Night]:
    """Run a night for each week."""
    done = []
    for number, rows in enumerate(weeks):
        write_night(job, number, rows)
        done.append(run_night(job))
    return done


ALARMS = {"within": "2d", "at_least": "5 points", "weeks": 4}


def test_a_change_trips_once_and_is_named(root: Path, published: Published):
    job = make_job(root, {"by": ["district"]}, lateness="1d", alarms=ALARMS)
    nights = run_weeks(job, changing(41, 8, 0.1, 5))
    quiet = [night for night in nights[:6] if night.alarms]
    assert quiet == []
    # The week that changed is over, and followed for two days, in the night after the next week.
    tripped = nights[6].alarms
    shares = {(one["by"], one["group"]) for one in tripped if one["measure"] == CONVERTED}
    assert ("district", "Hill") in shares
    assert ("district", "Harbour") not in shares
    hill = next(one for one in tripped if one["group"] == "Hill" and one["measure"] == CONVERTED)
    assert hill["week"] == "2025-02-10"
    assert hill["low"] < hill["difference"] < hill["high"] < -0.05
    assert hill["p_value_corrected"] < LEVEL
    assert hill["before"] == pytest.approx(0.4, abs=0.08)
    assert hill["now"] == pytest.approx(0.1, abs=0.08)
    assert "week of 2025-02-10 (district Hill): converted within 2d: " in hill["said"]
    events = {(one["state"], one["measure"]) for one in tripped if one["measure"].startswith("event")}
    # Some who came in the week before saw the price in this one.
    assert events == {("quiz", "event new"), ("price", "event halved")}
    moves = {(one["state"], one["next_state"]) for one in tripped if one["measure"] == "move" and not one["by"]}
    assert {("visit", "price"), ("visit", "quiz")} <= moves
    assert all(one["before"] is not None for one in tripped if one["group"] != "Hill")
    again = {(one["state"], one["measure"]) for one in nights[7].alarms if one["measure"].startswith("event")}
    assert again == {("price", "event gone")}
    assert newest_tally(job) == one_pass(job, newest_tally(job))


def test_nothing_trips_where_nothing_changes(root: Path, published: Published):
    job = make_job(root, {"by": ["district"]}, lateness="1d", alarms=ALARMS | {"at_least": "1 point"})
    assert [night.alarms for night in run_weeks(job, changing(43, 8, 0.4, None))] == [[]] * 8


def test_exit_code_4_and_again_by_the_run_that_makes_good(
    root: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
):
    # All people are in 40 buckets: what trips is told without numbers wherever it is told.
    job, path = make_job(root, lateness="1d", alarms=ALARMS, min_customers=N_FEW + 1), str(root / "job.toml")
    weeks = changing(41, 7, 0.1, 5)
    codes = []
    for number, rows in enumerate(weeks):
        write_night(job, number, rows)
        if number in (0, 5, 6):
            codes.append(main(["nightly", path]))
    assert codes == [DONE, DONE, ALARM]
    out = capsys.readouterr().out
    left_out = "has changed; the numbers are left out: fewer than 41 people here or beside it"
    told = [line for line in out.splitlines() if line.startswith("ALARM")]
    assert f"ALARM week of 2025-02-10: event 'quiz' is new {left_out}" in told
    assert all(line.endswith(left_out) for line in told)
    runs = [json.loads(line) for line in (job.out / "runs.jsonl").read_text().splitlines()]
    stamp = json.loads((job.out / "latest" / "run.json").read_text())
    assert runs[-1]["alarms"] == stamp["alarms"]
    assert len(stamp["alarms"]) == len(told)
    assert {one[name] for one in stamp["alarms"] for name in NUMBERS if name in one} == {None}
    assert main(["nightly", path]) == DONE
    (job.out / "latest" / "run.json").unlink()
    assert main(["nightly", path]) == ALARM
    assert main(["nightly", path]) == DONE
    kept = opened(job.ledger).manifest
    assert kept is not None
    assert kept.newest is not None
    assert kept.newest.alarms


def test_alarms_may_be_turned_on_and_off(root: Path, published: Published):
    weeks = changing(45, 9, 0.1, 6)
    job = make_job(root, lateness="1d")
    for number, rows in enumerate(weeks):
        write_night(job, number, rows)
        job = make_job(root, lateness="1d", **({} if number in (0, 1, 8) else {"alarms": ALARMS}))
        night = run_night(job)
        assert bool(night.alarms) == (number == 7), number
    names = {one["state"] for one in published[7][0].alarms if one["measure"] == "event new"}
    assert names == {"quiz"}
    assert opened(job.ledger).manifest.watched is None  # type: ignore[union-attr]
    assert newest_tally(job) == one_pass(job, newest_tally(job))


def test_weeks_long_past_are_let_go(root: Path, published: Published, by_week: list[Any]):
    job = make_job(root, lateness="1d", alarms=ALARMS | {"weeks": 2})
    run_weeks(job, changing(47, 8, 0.4, None))
    table, _, _ = by_week[-1]
    assert set(np.unique(table["week"])) == {4, 5, 6, 7} & set(np.unique(table["week"]))
    assert len(np.unique(table["week"])) <= 4


def test_difference_of_independent_customers_is_that_of_two_shares():
    """With one journey a customer the standard error is the textbook one of two independent shares."""
    rng = np.random.default_rng(5)
    rows: Counter[Any] = Counter()
    for week, share in ((0, 0.3), (1, 0.3), (2, 0.45)):
        for _ in range(4_000):
            rows[int(rng.integers(200)), week, int(rng.random() < share)] += 1
    bucket, week, won = (np.array(column) for column in zip(*rows, strict=True))
    zeros = np.zeros(len(bucket), np.int64)
    table = {"bucket": bucket, "state": zeros, "next": won, "flag": zeros + JOURNEY, "week": week, "group": zeros,
             "n": np.array(list(rows.values()))}  # fmt: skip
    one = week_changes(table, [], range(2), 2).iloc[0]
    spread = np.sqrt(one.before * (1 - one.before) / 8_000 + one.now * (1 - one.now) / 4_000)
    assert one.std_error == pytest.approx(spread, rel=0.2)
    assert one.difference == pytest.approx(0.15, abs=3 * spread)
    assert (one.n_before, one.n_now) == (8_000, 4_000)


def behind(rows: list[tuple[int, int, int, int, int]], least: int) -> Behind:
    """Return who is behind the shares of rows (state, next, week, group, people), each row of people of its own."""
    made = [(bucket, *row[:4]) for row in rows for bucket in range(row[4])]
    bucket, state, next_code, week, group = (np.array(column) for column in zip(*made, strict=True))
    flag = np.where(state == 0, JOURNEY, STAY)
    table = {"bucket": bucket, "state": state, "next": next_code, "flag": flag, "week": week, "group": group,
             "n": np.ones(len(bucket), np.int64)}  # fmt: skip
    keep = {("", ""): np.ones(len(bucket), bool)}
    keep |= {("district", name): group == code for code, name in enumerate(("Hill", "Harbour"))}
    return Behind(table, ["lapsed", "open", "joined", "visit", "price", "quiz"], (week == 0, week == 1), keep, least)


def a_share(measure: str, state: str = "entry", next_state: str = "", group: str = "") -> dict[str, str]:
    by = "district" if group else ""
    return {"measure": measure, "by": by, "group": group, "state": state, "next_state": next_state}


@pytest.mark.parametrize(
    ("joined", "least", "few"),
    [(9, 10, True), (10, 10, False), (0, 10, False), (191, 10, True), (190, 10, False), (1, 1, False), (9, 0, False)],
)
def test_shares_of_few_people_are_not_told(joined: int, least: int, few: bool):
    """Neither those who converted that week, nor those who did not, may be few; of nobody there is nothing to tell."""
    rows = [(0, 1, 0, 0, 60), (0, 0, 0, 0, 90), (0, 1, 1, 0, joined), (0, 0, 1, 0, 200 - joined)]
    # People of one row stand in buckets from 0 on, so that those who joined are among the others, and count anyway.
    assert behind([row for row in rows if row[4]], least).few([a_share(CONVERTED)]) == [few]


def test_a_group_is_not_told_where_all_others_are_few():
    rows = [(0, won, week, 0, 50) for won in (0, 1) for week in (0, 1)]
    others = [(0, won, week, 1, 30) for won in (0, 1) for week in (0, 1)]
    hill = [a_share(CONVERTED, group="Hill")]
    assert behind(rows + others, 10).few(hill) == [False]
    assert behind(rows + [(*row[:4], 4) for row in others], 10).few(hill) == [True]
    assert behind(rows + [(*row[:4], 4) for row in others], 10).few([a_share(CONVERTED)]) == [False]


def test_moves_that_would_tell_of_another_are_not_told():
    """All but one of the moves out of a state tell how many made that one."""
    both = [a_share("move", "visit", "price"), a_share("move", "visit", "quiz")]
    rows = [(3, 4, week, 0, 40) for week in (0, 1)] + [(3, 5, week, 0, 20) for week in (0, 1)]
    assert behind(rows, 10).few(both) == [False, False]
    assert behind([*rows, (3, 2, 1, 0, 4)], 10).few(both) == [False, True]
    assert behind([*rows, (3, 2, 1, 0, 12)], 10).few(both) == [False, False]


def test_few_are_not_compared():
    ones = np.ones(4, np.int64)
    table = {"bucket": np.arange(4), "state": ones, "next": ones, "flag": ones, "week": np.array([0, 0, 1, 1]),
             "group": ones, "n": ones}  # fmt: skip
    assert week_changes(table, [], range(1), 1).empty


@pytest.mark.parametrize(
    ("weeks", "what"),
    [
        ({0: 9, 1: 9, 2: 0}, []), ({0: 10, 1: 10}, ["gone"]), ({0: 49, 1: 49, 2: 10}, []),
        ({0: 50, 1: 50, 2: 25}, ["halved"]), ({0: 50, 1: 50, 2: 26}, []), ({2: 1}, ["new"]), ({-1: 1, 2: 1}, []),
    ],
)  # fmt: skip
def test_events_that_are_new_gone_or_halved(weeks: dict[int, int], what: list[str]):
    assert [one[1] for one in event_changes({"e": weeks}, range(2), 2)] == what
