"""A ledger or an input that is not what it was is told, and never answered from."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from cut_off import without_summaries
from damage import flip_any
from ledgers import files_of, invented, make_job, newest_tally, quick_folder, write_night

from journeys.errors import LogError, StoreError
from journeys.nightly.inputs import InputError
from journeys.nightly.job import Job
from journeys.nightly.ledger import opened
from journeys.nightly.manifest import FORMAT_VERSION
from journeys.nightly.night import run_night


@pytest.fixture(scope="module")
def job() -> Iterator[Job]:
    """A ledger with generations of two months, and a night to come."""
    with quick_folder() as root, without_summaries():
        job = make_job(root)
        nights = invented(2, 34, 8, n_people=4)
        for day in (3, 28, 31):
            write_night(job, day, nights[day])
            run_night(job)
        write_night(job, 33, nights[33])
        yield job


def test_any_bit_turned_over_is_told(job: Job):
    kept = [one.number for one in opened(job.ledger).manifest.generations]  # type: ignore[union-attr]
    assert kept == [1, 3]
    rng = np.random.default_rng(1)
    silent = [found[:2] for _ in range(60) if (found := flip_any(job, rng, kept[0]))[2] is None]
    assert silent == []


def test_a_file_that_is_gone_is_told(job: Job):
    before = files_of(job.ledger)
    for name in before:
        if name != "manifest.json":
            (job.ledger / name).unlink()
            with pytest.raises(StoreError, match="is damaged"):
                opened(job.ledger).check()
            (job.ledger / name).write_bytes(before[name])
    opened(job.ledger).check()


def test_a_manifest_of_another_version(job: Job):
    path = job.ledger / "manifest.json"
    text = path.read_text()
    path.write_text(text.replace(f'"format_version": {FORMAT_VERSION}', '"format_version": 99'))
    told = f"has format version 99, this program reads {FORMAT_VERSION}; count anew with --rebuild"
    with pytest.raises(StoreError, match=told):
        run_night(job)
    path.write_text(text)


def test_a_folder_of_other_things_is_no_ledger(root: Path):
    job = make_job(root)
    write_night(job, 0, invented(2, 1, 8)[0])
    job.ledger.mkdir()
    (job.ledger / "thesis.txt").write_text("mine")
    with pytest.raises(StoreError, match=r"is no ledger: it holds 'thesis.txt'; wanted a folder of its own"):
        run_night(job)
    assert (job.ledger / "thesis.txt").exists()


def test_damaged_ledgers_are_rebuilt(root: Path, published: list[object]):
    job = make_job(root)
    nights = invented(2, 3, 20, n_people=4)
    for day in (0, 1, 2):
        write_night(job, day, nights[day])
        run_night(job)
    want = newest_tally(job)
    for name in files_of(job.ledger):
        (job.ledger / name).write_bytes(b"gone")
    with pytest.raises(StoreError, match="is damaged"):
        run_night(job)
    assert run_night(job, rebuild=True).generation == 4
    assert newest_tally(job) == want
    opened(job.ledger).check()
    assert len(files_of(job.ledger)) == 2 + len(opened(job.ledger).manifest.parts) + 1  # type: ignore[union-attr]


@pytest.mark.parametrize("change", ["longer", "shorter", "as long"])
def test_an_input_that_changed_is_refused(root: Path, published: list[object], change: str):
    job = make_job(root)
    nights = invented(4, 2, 20)
    path = write_night(job, 0, nights[0])
    run_night(job)
    data = path.read_bytes()
    path.write_bytes({"longer": data + b"x", "shorter": data[:-9], "as long": data[:-9] + b"123456789"}[change])
    write_night(job, 1, nights[1])
    before = files_of(job.ledger)
    with pytest.raises(InputError, match=r"day=000/rows.parquet has changed since it was counted .+--rebuild"):
        run_night(job)
    assert files_of(job.ledger) == before
    path.write_bytes(data)
    assert run_night(job).new_inputs == ("day=001/rows.parquet",)


def test_inputs_may_go_when_they_are_counted_but_not_be_counted_anew(root: Path, published: list[object]):
    job = make_job(root)
    nights = invented(4, 2, 20)
    path = write_night(job, 0, nights[0])
    run_night(job)
    shutil.rmtree(path.parent)
    write_night(job, 1, nights[1])
    assert run_night(job).generation == 2
    with pytest.raises(LogError, match=r"1 inputs of the ledger are no longer in .+, such as day=000/rows.parquet"):
        run_night(job, rebuild=True)


def test_the_same_input_under_another_name_is_refused(root: Path, published: list[object]):
    job = make_job(root)
    nights = invented(4, 2, 20)
    write_night(job, 0, nights[0])
    write_night(job, 1, nights[0].iloc[:0])
    run_night(job)
    again, empty = write_night(job, 2, nights[0]), write_night(job, 3, nights[0].iloc[:0])
    with pytest.raises(InputError, match=r"day=002/rows.parquet is byte for byte day=000/rows.parquet, which was"):
        run_night(job)
    again.unlink()
    assert run_night(job).new_inputs == (empty.relative_to(job.log).as_posix(),)


@pytest.mark.parametrize("kind", ["parquet", "csv"])
def test_inputs_cut_short_are_told(root: Path, published: list[object], kind: str):
    job = make_job(root)
    rows = invented(4, 1, 20)[0]
    path = job.log / f"rows.{kind}"
    if kind == "csv":
        rows.to_csv(path, index=False)
    else:
        rows.to_parquet(path, index=False)
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) * 2 // 3])
    with pytest.raises((InputError, LogError), match=r"may have been cut off|not a whole Parquet file"):
        run_night(job)
    assert files_of(job.ledger) == {}
    path.write_bytes(whole)
    assert run_night(job).n_rows == len(rows)


def test_an_input_that_changes_while_it_is_read(root: Path, published: list[object], monkeypatch: pytest.MonkeyPatch):
    from journeys.tally.resumed import ResumedPass

    job = make_job(root)
    path = write_night(job, 0, invented(4, 1, 20)[0])
    real = ResumedPass.deal

    def deal(self: ResumedPass, *args: object, **named: object) -> object:
        found = real(self, *args, **named)  # type: ignore[arg-type]
        path.write_bytes(path.read_bytes() + b" ")
        return found

    monkeypatch.setattr(ResumedPass, "deal", deal)
    with pytest.raises(InputError, match="was changed while it was read; run again"):
        run_night(job)
    assert files_of(job.ledger) == {}
