"""Whatever stops a run, the ledger is the old one or the new one, and running again makes it good."""

from __future__ import annotations

import errno
import multiprocessing
import os
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from cut_off import CHANGES, WRITES, CutOffError, Killer, Stage, stopped_at, without_summaries
from ledgers import files_of, quick_folder

from journeys.command.main import FAILED, main
from journeys.nightly import disk
from journeys.nightly.lock import LockedError, held
from journeys.nightly.night import run_night


@pytest.fixture(scope="module")
def stage() -> Iterator[Stage]:
    with quick_folder() as root:
        with without_summaries():
            made = Stage(root)
        yield made


def test_between_every_two_file_operations(stage: Stage):
    stage.again()
    with stopped_at(10_000) as asked, without_summaries():
        run_night(stage.job)
    n_operations = len(asked)
    assert n_operations > 15
    assert set(asked) == set(CHANGES)
    for number in range(n_operations):
        stage.again()
        with without_summaries():
            with stopped_at(number), pytest.raises(CutOffError):
                run_night(stage.job)
            stage.check(published=False)


def test_a_full_disk_leaves_the_ledger_as_it_was(stage: Stage):
    stage.again()
    with stopped_at(10_000, names=WRITES) as asked, without_summaries():
        run_night(stage.job)
    for number in range(len(asked)):
        stage.again()
        with stopped_at(number, names=WRITES, full=True), pytest.raises(OSError, match="No space left") as error:
            run_night(stage.job)
        assert error.value.errno == errno.ENOSPC
        assert files_of(stage.job.ledger) == stage.before


@pytest.mark.parametrize("name", ["write", "save_tally", "rename"])
def test_a_read_only_folder_is_told(
    stage: Stage, name: str, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
):
    def refuse(path: Path, *_: object) -> None:
        raise OSError(errno.EROFS, os.strerror(errno.EROFS), str(path))

    stage.again()
    monkeypatch.setattr(disk, name, refuse)
    assert main(["nightly", str(stage.job.ledger.parent / "job.toml")]) == FAILED
    assert "Read-only file system" in capsys.readouterr().err
    assert files_of(stage.job.ledger) == stage.before


def test_two_runs_at_once(stage: Stage):
    stage.again()
    with held(stage.job.ledger):
        with pytest.raises(LockedError, match=rf"held by process {os.getpid()} on .+ since 20.+; wait until"):
            run_night(stage.job)
        assert files_of(stage.job.ledger) == stage.before
    with without_summaries():
        run_night(stage.job)
    assert (stage.job.ledger / "lock").read_text() == ""


@pytest.fixture(scope="module")
def killer() -> Killer:
    if "forkserver" not in multiprocessing.get_all_start_methods():
        pytest.skip("optional engine missing: processes that can be killed")
    return Killer()


def test_killed_at_any_moment(stage: Stage, killer: Killer):
    rng = np.random.default_rng(0)
    stage.again()
    whole = killer.whole(stage, False)
    n_killed = 0
    for moment in rng.random(6):
        stage.again()
        n_killed += killer.kill(stage, float(moment) * whole, False)
        with without_summaries():
            stage.check(published=False)
    assert n_killed > 2


def test_killed_while_it_publishes(killer: Killer):
    with quick_folder() as root:
        stage = Stage(root, n_people=30)
        stage.again()
        whole = killer.whole(stage, True)
        for share in (0.5, 0.9):
            stage.again()
            killer.kill(stage, share * whole, True)
            stage.check(published=True)
