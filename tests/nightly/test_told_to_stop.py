"""A night that is told to stop, or killed, while it publishes: the ledger stands, and the next run makes it good."""

from __future__ import annotations

import json
import signal
from pathlib import Path
from typing import Any

import pytest
from ledgers import files_of, invented, make_job, newest_tally, one_pass, write_night

from journeys.command.main import DONE, main
from journeys.nightly import publish
from journeys.nightly.history import read_history


def test_told_to_stop_while_publishing(
    root: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
):
    job, path = make_job(root), str(root / "job.toml")
    write_night(job, 0, invented(51, 3, 40)[0])
    with monkeypatch.context() as patched:
        patched.setattr(publish, "_put_in_place", lambda *_: signal.raise_signal(signal.SIGTERM))
        assert main(["nightly", path]) == 143
    assert "ERROR stopped by SIGTERM; " in capsys.readouterr().err
    assert [one.name for one in job.out.iterdir()] == ["runs.jsonl"]
    assert json.loads((job.out / "runs.jsonl").read_text())["error"].startswith("stopped by SIGTERM")
    ledger = files_of(job.ledger)
    assert main(["nightly", path]) == DONE
    assert files_of(job.ledger) == ledger
    assert newest_tally(job) == one_pass(job, newest_tally(job))
    assert read_history(job.out / "history.parquet").generation.tolist() == [1]


def test_told_to_stop_while_counting(root: Path, monkeypatch: pytest.MonkeyPatch):
    job, path = make_job(root), str(root / "job.toml")
    write_night(job, 0, invented(51, 3, 40)[0])

    def asked_to_stop(*_: Any) -> None:
        signal.raise_signal(signal.SIGINT)

    with monkeypatch.context() as patched:
        patched.setattr("journeys.nightly.ledger.Draft.tally", asked_to_stop)
        assert main(["nightly", path]) == 130
    assert files_of(job.ledger) == {}
    assert main(["nightly", path]) == DONE


def test_what_a_killed_run_has_left_beside_the_history_is_taken_away(root: Path):
    job, path = make_job(root), str(root / "job.toml")
    write_night(job, 0, invented(51, 3, 40)[0])
    (job.out / ".part-left").mkdir(parents=True)
    (job.out / ".history.parquet-left.part").write_bytes(b"half")
    assert main(["nightly", path]) == DONE
    assert [one.name for one in job.out.iterdir() if one.name.startswith(".")] == []
