"""The job file, what a ledger refuses, and what it takes."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from ledgers import files_of, invented, make_job, newest_tally, one_pass, write_night

from journeys.command.main import ALARM, DONE, FAILED, LIMITS, USAGE, main
from journeys.errors import LimitError, LogError, RulesError
from journeys.nightly.job import Alarms, Job
from journeys.nightly.ledger import opened
from journeys.nightly.night import run_night


def test_reads_a_job(root: Path):
    job = make_job(root, lateness="90min", horizons=["2d"], alarms={"within": "2d", "at_least": "1.5 points"})
    assert (job.log, job.ledger, job.out) == (root / "events", root / "ledger", root / "out")
    assert job.lateness_us == 90 * 60 * 1_000_000
    assert job.horizons == ("2d",)
    assert job.alarms == Alarms(2 * 86_400_000_000, 0.015, 8)
    assert job.rules.silence == "5d"


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"latenes": "6h"}, "'latenes' is no setting of a job; did you mean 'lateness'?"),
        ({"qqq": 1}, "'qqq' is no setting of a job; there are log, rules, ledger"),
        ({"lateness": "soon"}, "lateness: got 'soon'"),
        ({"lateness": 6}, "lateness: got 6; wanted a duration"),
        ({"id_key": "maybe"}, "id_key: got 'maybe'; wanted \"required\", or \"none\""),
        ({"horizons": "14d"}, "horizons: got '14d'; wanted a list of durations"),
        ({"horizons": ["1 month"]}, "horizons: got '1 month'; months and years have no fixed length"),
        ({"log": ""}, "log: got ''; wanted a path"),
        ({"out": "ledger/out"}, "out: .+ lies in the folder of ledger; wanted folders of their own"),
        ({"ledger": "events/ledger"}, "ledger: .+ lies in the folder of log"),
        ({"alarms": {}}, 'alarms.within: not given; wanted a duration, such as within = "14d"'),
        ({"alarms": {"within": "2d", "atleast": 1}}, "'atleast' is no setting of the alarms; did you mean 'at_least'"),
        ({"alarms": {"within": "2d", "at_least": "1 %"}}, "alarms.at_least: got '1 %'; wanted a difference .+ points"),
        ({"alarms": {"within": "2d", "weeks": 1}}, "alarms.weeks: got 1; wanted a whole number of weeks from 2 to 104"),
    ],
)
def test_wrong_settings_are_told(root: Path, settings: dict[str, Any], words: str):
    with pytest.raises(RulesError, match=words):
        make_job(root, **settings)


def test_everything_wrong_is_told_at_once(root: Path, capsys: pytest.CaptureFixture[str]):
    (root / "job.toml").write_text('lateness = "x"\nledger = "l"\nrule = "r"\n')
    assert main(["nightly", str(root / "job.toml")]) == USAGE
    line = capsys.readouterr().err
    for words in ("'rule' is no setting", "log: not given", "rules: not given", "out: not given", "lateness: got 'x'"):
        assert words in line
    assert line.count("\n") == 1


@pytest.mark.parametrize(("text", "words"), [(None, "No such file"), ("log = [", "not TOML")])
def test_job_files_that_cannot_be_read(root: Path, text: str | None, words: str):
    if text is not None:
        (root / "job.toml").write_text(text)
    with pytest.raises(RulesError, match=words):
        Job.from_toml(root / "job.toml")


def test_ids_need_a_key_or_words(root: Path, published: list[Any], monkeypatch: pytest.MonkeyPatch):
    job = make_job(root, id_key="required")
    write_night(job, 0, invented(1, 1, 20)[0])
    with pytest.raises(RulesError, match="JOURNEYS_ID_KEY is not set: .+ say in the job file .+ id_key = \"none\""):
        run_night(job)
    monkeypatch.setenv("JOURNEYS_ID_KEY", "a long secret of the bicycle club, kept elsewhere")
    assert run_night(job).generation == 1
    assert b"a long secret of the bicycle club, kept elsewhere" not in b"".join(files_of(job.ledger).values())
    monkeypatch.setenv("JOURNEYS_ID_KEY", "another secret of the bicycle club, also kept")
    with pytest.raises(RulesError, match="was counted with another key, so that the same customer would count twice"):
        run_night(job)
    assert run_night(job, rebuild=True).generation == 2


CHANGED = [
    ({"silence": "6d"}, 'silence was "5d", is "6d"'),
    ({"converted": ["joined", "paid"]}, r'converted was \["joined"\], is \["joined", "paid"\]'),
    ({"states": {"visit": "seen"}}, r'states was null, is \{"visit": "seen"\}'),
    ({"by": ["district"]}, r'by was \[\], is \["district"\]'),
]


@pytest.mark.parametrize(("rules", "words"), CHANGED)
def test_other_rules_are_refused(root: Path, published: list[Any], rules: dict[str, Any], words: str):
    job = make_job(root)
    write_night(job, 0, invented(1, 1, 20)[0])
    run_night(job)
    before = files_of(job.ledger)
    job = make_job(root, rules)
    with pytest.raises(RulesError, match=f"was counted by other rules: {words}; put them back .+ --rebuild"):
        run_night(job)
    assert files_of(job.ledger) == before
    run_night(job, rebuild=True)
    assert newest_tally(job) == one_pass(job, newest_tally(job))


def test_limits_and_names_never_seen_need_no_rebuild(root: Path, published: list[Any]):
    nights = invented(1, 2, 40)
    job = make_job(root)
    write_night(job, 0, nights[0])
    run_night(job)
    job = make_job(root, {"limits": {"late": 0.5}, "states": {"look": "visit", "noise": False}})
    nights[1].loc[::3, "event"] = "look"
    nights[1].loc[1::9, "event"] = "noise"
    write_night(job, 1, nights[1])
    run_night(job)
    tally = newest_tally(job)
    assert tally == one_pass(job, tally)
    assert "look" not in tally.states
    assert tally.record.n("unmapped_event") > 0


@pytest.mark.parametrize(("limit", "column"), [("late", "happened"), ("unreadable", "event")])
def test_broken_limits_count_and_publish_nothing(root: Path, published: list[Any], limit: str, column: str):
    nights = invented(1, 2, 40)
    job = make_job(root)
    write_night(job, 0, nights[0])
    run_night(job)
    before = files_of(job.ledger)
    nights[1].loc[:3, column] = None if column == "event" else nights[0].happened.min()
    write_night(job, 1, nights[1])
    words = rf"4 of {len(nights[1])} new rows .+ so nothing was counted or published: .+ raise \[limits\] {limit}"
    with pytest.raises(LimitError, match=words):
        run_night(job)
    assert files_of(job.ledger) == before
    assert run_night(make_job(root, {"limits": {limit: 0.5}})).generation == 2


def test_times_may_not_change_their_kind(root: Path, published: list[Any]):
    nights = invented(1, 2, 20)
    job = make_job(root)
    write_night(job, 0, nights[0])
    run_night(job)
    nights[1]["happened"] = nights[1].happened.dt.date
    write_night(job, 1, nights[1])
    with pytest.raises(LogError, match="changes between dates and timestamps"):
        run_night(job)


def test_the_first_night_with_a_clock_of_1970_is_told(root: Path, published: list[Any]):
    rows = invented(1, 1, 2_000)[0]
    rows.loc[7, "happened"] = pd.Timestamp(0, tz="UTC")
    job = make_job(root)
    write_night(job, 0, rows)
    with pytest.raises(LogError, match=r"1 of \d+ rows lie long before all others.+set log_start="):
        run_night(job)


def test_dates_without_a_time(root: Path, published: list[Any]):
    job = make_job(root, lateness="none")
    for day, rows in enumerate(invented(1, 4, 30, lateness_hours=0)):
        rows["happened"] = rows.happened.dt.date
        write_night(job, day, rows)
        run_night(job)
    tally = newest_tally(job)
    assert tally.whole_days
    assert str(tally.as_of.date()) == "2025-01-08"
    assert tally == one_pass(job, tally)


def test_a_night_that_settles_nothing_only_waits(root: Path, published: list[Any]):
    job = make_job(root, lateness="30d")
    nights = invented(1, 3, 20)[:3]
    # A row from before all that came first: as long as nothing is counted, the log begins with it.
    nights[1].loc[0, "happened"] = nights[0].happened.min() - pd.Timedelta(days=2)
    for day in (0, 1, 2):
        write_night(job, day, nights[day])
        done = run_night(job)
        assert (done.as_of, done.publication, done.generation) == (None, None, day + 1)
    assert done.n_waiting == sum(map(len, nights))
    assert published == []
    job = make_job(root, lateness="1h")
    write_night(job, 3, nights[2].assign(happened=nights[2].happened + np.timedelta64(1, "D")))
    run_night(job)
    tally = newest_tally(job)
    assert tally == one_pass(job, tally)
    assert tally.log_start == nights[1].happened[0]
    assert tally.record.n("before_log_start") == 0


def test_the_last_of_each_month_is_kept(root: Path, published: list[Any]):
    job = make_job(root)
    nights = invented(1, 64, 5)
    for day in range(0, len(nights), 9):
        write_night(job, day, nights[day])
        run_night(job)
    manifest = opened(job.ledger).manifest
    assert manifest is not None
    by_month: dict[str, int] = {}
    for generation, tally in published:
        by_month[str(tally.as_of)[:7]] = generation.number
    assert [one.number for one in manifest.generations] == sorted(by_month.values())
    assert len(by_month) == 3
    assert sum(path.name.startswith("tally-") for path in job.ledger.iterdir()) == 3


def test_only_parts_that_change_are_written(root: Path, published: list[Any]):
    nights = invented(1, 2, 40)
    job = make_job(root)
    write_night(job, 0, nights[0])
    run_night(job)
    before = files_of(job.ledger)
    write_night(job, 1, nights[1][nights[1].who == nights[1].who[0]])
    run_night(job)
    changed = {name for name in files_of(job.ledger) if name.startswith("part-") and name not in before}
    assert len(changed) < len([name for name in before if name.startswith("part-")]) / 3


def test_a_dry_run_writes_nothing(root: Path, published: list[Any], capsys: pytest.CaptureFixture[str]):
    job, path = make_job(root), str(root / "job.toml")
    nights = invented(1, 2, 40)
    write_night(job, 0, nights[0])
    assert main(["nightly", path, "--dry-run"]) == DONE
    assert f"1 new inputs, {len(nights[0])} rows, would be counted up to 2025-01-06" in capsys.readouterr().out
    assert not job.ledger.exists()
    assert not job.out.exists()
    run_night(job)
    before = files_of(job.ledger)
    write_night(job, 1, nights[1])
    assert main(["nightly", path, "--dry-run", "--json"]) == DONE
    told = json.loads(capsys.readouterr().out)
    assert (told["dry_run"], told["new_inputs"], told["n_rows"]) == (True, ["day=001/rows.parquet"], len(nights[1]))
    assert files_of(job.ledger) == before


def test_exit_codes_and_the_log_of_runs(root: Path, published: list[Any], capsys: pytest.CaptureFixture[str]):
    job, path = make_job(root), str(root / "job.toml")
    assert main(["nightly", path]) == FAILED
    assert "holds no file to read" in capsys.readouterr().err
    nights = invented(1, 2, 40)
    write_night(job, 0, nights[0])
    assert main(["nightly", path]) == DONE
    assert main(["nightly", path]) == DONE
    assert "Nothing new; generation 1 stands." in capsys.readouterr().out
    write_night(job, 1, nights[1].assign(event=None))
    assert main(["nightly", path]) == LIMITS
    make_job(root, {"silence": "9d"})
    assert main(["nightly", path]) == USAGE
    lines = [json.loads(line) for line in (job.out / "runs.jsonl").read_text().splitlines()]
    assert [("error" in line, line.get("generation")) for line in lines] == [
        (True, None), (False, 1), (False, 1), (True, None), (True, None),
    ]  # fmt: skip
    assert ALARM == 4
