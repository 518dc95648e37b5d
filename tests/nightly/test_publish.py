"""What a night publishes, what the ledger still knows of earlier publications, and what is forgotten."""

from __future__ import annotations

import json
import shutil
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from ledgers import files_of, invented, make_job, newest_tally, one_pass, quick_folder, write_night

from journeys.command.main import DONE, USAGE, main
from journeys.errors import LogError, RulesError, StoreError
from journeys.intake.identity import bucket_major, customer_keys
from journeys.nightly.forget import forget
from journeys.nightly.history import COLUMNS, read_history
from journeys.nightly.job import Job
from journeys.nightly.ledger import Ledger, opened
from journeys.nightly.night import run_night
from journeys.nightly.then_and_now import _lines, _Side, tally_of_ledger, then_and_now
from journeys.questions.plain_count import PlainCount
from journeys.tally.tally import Tally


def two_districts(rows: pd.DataFrame) -> pd.DataFrame:
    """Return rows of two groups: each more takes a fit of its own."""
    return rows.assign(district=rows.district.replace("Hill", "Harbour"))


@pytest.fixture(scope="module")
def kept() -> Iterator[Job]:
    """A ledger that has published four times: too early, twice in January, once in February."""
    with quick_folder() as root, pytest.MonkeyPatch.context() as patched:
        patched.delenv("JOURNEYS_ID_KEY", raising=False)
        job = make_job(root, {"by": ["district"]}, horizons=["2d"])
        nights = [two_districts(rows) for rows in invented(21, 36, 60, n_people=300)]
        for day, last in ((0, 3), (3, 20), (20, 24), (24, 36)):
            for one in range(day, last):
                write_night(job, one, nights[one])
            run_night(job)
        yield job


@pytest.fixture
def job(kept: Job, root: Path) -> Job:
    """Return a copy of it to change."""
    shutil.copytree(kept.ledger.parent, root / "copy", symlinks=True)
    return Job.from_toml(root / "copy" / "job.toml")


def test_dated_folders_and_a_stable_latest(kept: Job):
    folders = [path.name for path in sorted(kept.out.iterdir()) if path.is_dir() and path.name != "latest"]
    assert [name[10:] for name in folders] == ["-000001", "-000002", "-000003", "-000004"]
    assert folders[0][:10] == "2025-01-08"
    assert (kept.out / "latest").resolve().name == folders[-1]
    assert {path.name for path in (kept.out / "latest").iterdir()} == {
        "summary.parquet", "summary.csv", "summary.md", "summary.html", "columns.csv", "groups.csv", "run.json",
    }  # fmt: skip
    stamp = json.loads((kept.out / "latest" / "run.json").read_text())
    newest = opened(kept.ledger).manifest.newest  # type: ignore[union-attr]
    assert newest is not None
    assert (stamp["generation"], stamp["run"], stamp["rules"]) == (4, newest.run, newest.rules)
    assert stamp["tally"] == newest.tally.checksum


def test_counts_only_until_the_log_is_longer_than_the_silence(kept: Job):
    first = next(path for path in sorted(kept.out.iterdir()) if path.name.endswith("-000001"))
    assert {path.name for path in first.iterdir()} == {"summary.md", "counts.json", "run.json"}
    counts = json.loads((first / "counts.json").read_text())
    assert counts["n_journeys"] > counts["n_converted"] > 0
    assert "Counts only: " in (first / "summary.md").read_text()


def test_history_grows_by_a_row_for_each_run_and_group(kept: Job):
    history = read_history(kept.out / "history.parquet")
    assert list(history) == list(COLUMNS)
    assert history.groupby("generation").size().tolist() == [1, 3, 3, 3]
    assert history[history.generation == 4].group.tolist() == ["", "Harbour", "Station"]
    last = history[history.generation == 4].iloc[0]
    summary = pd.read_parquet(kept.out / "latest" / "summary.parquet")
    row = summary[(summary.measure == "converted") & (summary.horizon == "in the end")].iloc[0]
    assert (last.expected, last.expected_low, last.expected_high) == (row.estimate, row.low, row.high)
    assert last.expected_low < last.expected < last.expected_high
    tally = newest_tally(kept)
    assert (last.n_people, last.n_journeys) == (tally.n_people, tally.n_journeys)
    assert history[(history.generation == 4) & (history.by != "")].n_journeys.sum() == tally.n_journeys
    early = history[history.generation == 1].iloc[0]
    assert np.isnan(early.expected)
    assert early.flag


def test_a_damaged_history_is_told(job: Job):
    (job.out / "history.parquet").write_bytes(b"PAR1 and no more")
    (job.out / "latest" / "run.json").unlink()
    with pytest.raises(StoreError, match="history.parquet is not a whole table of headline numbers"):
        run_night(job)


def test_what_was_not_published_is_published_by_the_next_run(job: Job):
    want = files_of(job.out / "latest")
    shutil.rmtree((job.out / "latest").resolve())
    (job.out / ".part-left").mkdir()
    done = run_night(job)
    assert done.new_inputs == ()
    assert done.publication is not None
    assert files_of(job.out / "latest") == want
    assert len(read_history(job.out / "history.parquet")) == 10
    assert not (job.out / ".part-left").exists()
    assert run_night(job).publication is None


def test_a_night_first_publishes_what_the_one_before_could_not(job: Job):
    (job.out / "latest" / "run.json").unlink()
    history = read_history(job.out / "history.parquet")
    history[history.generation < 4].to_parquet(job.out / "history.parquet", index=False)
    rows = two_districts(invented(23, 37, 60, n_people=300)[36])
    write_night(job, 41, rows)
    assert run_night(job).generation == 5
    assert read_history(job.out / "history.parquet").groupby("generation").size().tolist() == [1, 3, 3, 3, 3]


def test_then_and_now(kept: Job, root: Path, capsys: pytest.CaptureFixture[str]):
    manifest = opened(kept.ledger).manifest
    assert manifest is not None
    assert [one.number for one in manifest.generations] == [3, 4]
    found = then_and_now(kept.ledger, 3)
    lines = found.lines.set_index("line")
    history = read_history(kept.out / "history.parquet")
    then, now = (history[(history.generation == n) & (history.by == "")].iloc[0] for n in (3, 4))
    assert lines.loc["journeys", ["then", "now"]].tolist() == [then.n_journeys, now.n_journeys]
    expected = lines.loc["expected to convert in the end"]
    assert expected[["then", "then_low", "then_high"]].tolist() == [
        then.expected, then.expected_low, then.expected_high,
    ]  # fmt: skip
    assert expected.difference == now.expected - then.expected
    decided = (now.n_journeys - now.n_undecided) - (then.n_journeys - then.n_undecided)
    assert f"{decided:,} journeys have been decided since" in found.summary()
    assert main(["summary", str(kept.ledger), "--generation", "3", "--out", str(root / "then")]) == DONE
    out = capsys.readouterr().out
    assert out.startswith(found.summary())
    kept_then = next(path for path in kept.out.iterdir() if path.name.endswith("-000003"))
    for name in ("summary.md", "summary.csv"):
        assert (root / "then" / name).exists()
    assert pd.read_parquet(root / "then" / "summary.parquet").estimate.iloc[0] == (
        pd.read_parquet(kept_then / "summary.parquet").estimate.iloc[0]
    )


def test_then_and_now_tell_nothing_of_few_people(kept: Job, root: Path, capsys: pytest.CaptureFixture[str]):
    whole = then_and_now(kept.ledger, 3, 0)
    numbers = ["then", "then_low", "then_high", "now", "now_low", "now_high", "difference"]
    assert whole.lines.set_index("line")[["then", "now"]].notna().all(axis=None)
    # All there are, are too few: only how many rows were read is told.
    none = then_and_now(kept.ledger, 3, 200)
    hidden = none.lines.set_index("line").drop(index="rows read")
    assert hidden[numbers].isna().all(axis=None)
    assert set(hidden.flag) == {"hidden: fewer than 200 people here or beside it"}
    told = [f"{n:,.0f}" for n in whole.lines.then[1:5]] + ["journeys have begun since"]
    assert [n in none.summary().split("\n\n", 1)[1] for n in told] == [False] * 4 + [True]
    words = ["summary", str(kept.ledger), "--generation", "3", "--min-customers", "200", "--out", str(root / "few")]
    assert main(words) == DONE
    assert capsys.readouterr().out.startswith(none.summary())


@pytest.mark.parametrize(
    ("change", "kept_back"),
    [
        ((40, 60, 30, 20), []), ((3, 60, 30, 20), ["people"]), ((0, 60, 30, -5), []),
        ((40, 60, 4, 20), ["converted so far"]), ((40, 60, 36, 20), ["converted so far"]),
        ((40, 60, 5, 55), ["converted so far", "undecided yet"]), ((40, 9, 0, -40), ["journeys", "undecided yet"]),
    ],
    ids=str,
)  # fmt: skip
def test_then_is_not_told_where_the_difference_is_of_few_people(change: tuple[int, ...], kept_back: list[str]):
    """Changes of people, journeys, conversions and those undecided: neither these nor what they leave are few."""
    was = (300, 500, 200, 120)
    then, now = (
        _Side(5_000, PlainCount(n_people=p, n_journeys=j, n_sure=j, n_undecided=u, n_converted=c, n_by_outcome={}),
              (0.4, 0.3, 0.5), expected_hidden=False)
        for p, j, c, u in (was, [a + b for a, b in zip(was, change, strict=True)])
    )  # fmt: skip
    lines = _lines(then, now, 10).set_index("line")
    hidden = lines[lines.flag != ""]
    assert sorted(hidden.index) == kept_back
    assert hidden[["then", "difference"]].isna().all(axis=None)
    assert lines.now.notna().all()
    assert lines.then[~lines.index.isin(kept_back)].notna().all()


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["--generation", "2"], r"--generation 2: is not kept; there are 3 \(2025-01-2"),
        (["--generation", "x"], "argument --generation: invalid int value"),
    ],
)
def test_generations_that_are_not_kept(
    kept: Job, root: Path, words: list[str], told: str, capsys: pytest.CaptureFixture[str]
):
    assert main(["summary", str(kept.ledger), *words, "--out", str(root / "x")]) == USAGE
    assert pd.Series([capsys.readouterr().err]).str.contains(told).all()


def test_a_generation_of_something_else(kept: Job, root: Path, capsys: pytest.CaptureFixture[str]):
    assert main(["summary", str(kept.log), "--generation", "2", "--out", str(root / "x")]) == USAGE
    assert "is no ledger; wanted the folder that `nightly` keeps" in capsys.readouterr().err


def test_why_they_differ_names_a_rebuild_and_late_rows(job: Job, published: list[object]):
    job = make_job(job.ledger.parent, {"by": ["district"], "limits": {"late": 1.0}})
    rows = invented(22, 1, 50)[0]
    write_night(job, 40, rows)
    # Nothing settled has changed, but the run is counted.
    run_night(job)
    assert f"{len(rows):,} rows have come too late since and are in neither number" in (
        then_and_now(job.ledger, 3).summary()
    )
    run_night(job, rebuild=True)
    assert "all inputs were counted anew in generation 6" in then_and_now(job.ledger, 3).summary()
    assert newest_tally(job) == one_pass(job, newest_tally(job))


def test_forgets(job: Job, root: Path, published: list[object], capsys: pytest.CaptureFixture[str]):
    ids = [3, 17, 99]
    (root / "ids.txt").write_text("\n".join(map(str, [*ids, 123_456])) + "\n")
    keys = bucket_major(customer_keys(pa.array(ids))[0])
    before = newest_tally(job)

    def held() -> int:
        ledger = opened(job.ledger)
        return sum(
            int(np.isin(part.carried.key, keys).sum()) for number in range(50) if (part := ledger.part(number))
        )

    assert held() == 3
    old = set(files_of(job.ledger))
    assert main(["forget", str(root / "ids.txt"), "--ledger", str(job.ledger)]) == DONE
    said = capsys.readouterr().out
    assert said.startswith("3 of 4 customers had a record, which is gone")
    assert "added up with those of others in the ledger's sums and in 2 kept counts" in said
    assert held() == 0
    assert len(old - set(files_of(job.ledger))) >= 2
    assert newest_tally(job) == before
    rows = invented(23, 37, 60, n_people=300)[36]
    write_night(job, 41, rows.assign(happened=rows.happened + pd.Timedelta(days=2)))
    run_night(job)
    after = newest_tally(job)
    back = int(np.isin(ids, rows.who).sum())
    assert after.n_people <= before.n_people - 3 + back + (~rows.who.isin(before_people(job))).sum()
    opened(job.ledger).check()


def before_people(job: Job) -> set[int]:
    """Return who was in the log before."""
    return set(pd.concat(pd.read_parquet(path) for path in sorted(job.log.rglob("*.parquet"))[:-1]).who)


@pytest.mark.parametrize(
    ("text", "words"), [("", "holds no ids; wanted one customer id a line"), ("x\n", "an id is no whole number")]
)
def test_ids_that_cannot_be(kept: Job, root: Path, text: str, words: str):
    (root / "ids.txt").write_text(text)
    with pytest.raises(LogError, match=words):
        forget(root / "ids.txt", kept.ledger)


def test_forgets_nobody_without_a_ledger_or_with_another_key(
    kept: Job, root: Path, monkeypatch: pytest.MonkeyPatch
):
    (root / "ids.txt").write_text("1\n")
    with pytest.raises(StoreError, match="no such folder; wanted a ledger"):
        forget(root / "ids.txt", root / "nowhere")
    (root / "empty").mkdir()
    with pytest.raises(StoreError, match="holds no ledger yet"):
        forget(root / "ids.txt", root / "empty")
    monkeypatch.setenv("JOURNEYS_ID_KEY", "another secret of the bicycle club, also kept")
    with pytest.raises(RulesError, match="went through another key, or none"):
        forget(root / "ids.txt", kept.ledger)


def test_a_ledger_does_where_a_log_is_asked_for(kept: Job, root: Path, capsys: pytest.CaptureFixture[str]):
    assert main(["tally", str(kept.ledger), "--out", str(root / "tally.parquet")]) == DONE
    assert Tally.load(root / "tally.parquet") == newest_tally(kept)
    said = []
    for path in (kept.ledger, root / "tally.parquet"):
        capsys.readouterr()
        assert main(["audit", str(path)]) == DONE
        said.append(capsys.readouterr().out)
    assert said[0] == said[1]
    assert "of 300 people" in said[0]


def test_a_night_that_replaces_files_meanwhile_is_no_damage(
    kept: Job, root: Path, monkeypatch: pytest.MonkeyPatch
):
    old = opened(kept.ledger)
    assert old.manifest is not None
    gone = replace(old.manifest.generations[-1].tally, file="tally-000000-gone.parquet")
    newest = replace(old.manifest.generations[-1], tally=gone)
    before = Ledger(kept.ledger, replace(old.manifest, generations=[newest]))
    seen = [before, old]
    monkeypatch.setattr("journeys.nightly.then_and_now.opened", lambda _: seen.pop(0))
    assert tally_of_ledger(kept.ledger) == newest_tally(kept)
    seen = [before, before]
    with pytest.raises(StoreError, match="is damaged"):
        tally_of_ledger(kept.ledger)
    assert seen == []
