"""Runs of the nightly job that are cut off: killed by the system at any moment, or stopped at any file operation."""

from __future__ import annotations

import errno
import multiprocessing
import os
import shutil
import signal
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from threading import Lock
from typing import Any
from unittest.mock import patch

from ledgers import files_of, invented, make_job, newest_tally, one_pass, write_night

from journeys.nightly import disk, night
from journeys.nightly.history import read_history
from journeys.nightly.job import Job
from journeys.nightly.ledger import opened
from journeys.nightly.night import run_night
from journeys.nightly.publish import HISTORY, Publication, is_published

# Operations that change something on the disk.
CHANGES = ("make_folder", "write", "save_tally", "rename", "settle", "remove")
WRITES = ("write", "save_tally")


class CutOffError(BaseException):
    """The process is gone: nothing after this moment reaches the disk."""


@contextmanager
def stopped_at(number: int, *, names: tuple[str, ...] = CHANGES, full: bool = False) -> Iterator[list[str]]:
    """Let file operations work up to a number, and fail from then on; gives the names of those that were asked for.

    With `full` the disk is full: one write fails half-way, and what is removed is removed.
    """
    asked: list[str] = []
    lock = Lock()

    def failing(name: str, real: Callable[..., Any]) -> Callable[..., Any]:
        def operation(*arguments: Any) -> Any:
            with lock:
                asked.append(name)
                mine = len(asked)
            if mine <= number or (full and mine > number + 1):
                return real(*arguments)
            if not full:
                raise CutOffError
            arguments[0].write_bytes(b"half of it")
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), str(arguments[0]))

        return operation

    with patch.multiple(disk, **{name: failing(name, getattr(disk, name)) for name in names}):
        yield asked


@contextmanager
def without_summaries() -> Iterator[list[int]]:
    """Leave out what is published, which takes longer than all else; gives the generations handed over."""
    seen: list[int] = []

    def publish(job: Job, generation: Any, _: Any) -> Publication:
        seen.append(generation.number)
        return Publication(job.out, "", None, {}, generation.alarms)

    stubs = {
        "publish": publish,
        "answers_of": lambda _, tally: tally,
        "is_published": lambda _, generation: generation.number in seen,
    }
    with patch.multiple(night, **stubs):
        yield seen


class Stage:
    """A ledger of two nights, with a third that has come in, and a fourth to come.

    Parameters
    ----------
    root : Path
        An empty folder.
    n_people : int
        In how many customers' names.
    rules : dict, optional
        Rules other than those of all ledgers of the tests.
    """

    def __init__(self, root: Path, n_people: int = 5, rules: dict[str, object] | None = None) -> None:
        self._root, self._spare = root / "work", root / "spare"
        self.job = make_job(self._root, rules)
        self._nights = invented(11, 4, 30, n_people=n_people)
        for day in (0, 1):
            write_night(self.job, day, self._nights[day])
            run_night(self.job)
        self.before = files_of(self.job.ledger)
        write_night(self.job, 2, self._nights[2])
        shutil.copytree(self._root, self._spare, symlinks=True)
        run_night(self.job)
        self.after = newest_tally(self.job)
        self.number = opened(self.job.ledger).manifest.number  # type: ignore[union-attr]

    def again(self) -> None:
        """Put everything back to before the third night."""
        shutil.rmtree(self._root)
        shutil.copytree(self._spare, self._root, symlinks=True)

    def check(self, *, published: bool) -> None:
        """Run again after a run that was cut off: nothing is lost or counted twice, nothing breaks the next night."""
        run_night(self.job)
        manifest = opened(self.job.ledger).manifest
        assert manifest is not None
        assert manifest.number == self.number
        assert newest_tally(self.job) == self.after
        assert {stored.file for stored in manifest.files} | {"manifest.json"} == set(files_of(self.job.ledger))
        if published:
            assert manifest.newest is not None
            assert is_published(self.job.out, manifest.newest)
            assert read_history(self.job.out / HISTORY).generation.tolist() == [1, 2, 3]
            assert not [path for path in self.job.out.iterdir() if path.name.startswith(".")]
        write_night(self.job, 3, self._nights[3])
        run_night(self.job)
        assert newest_tally(self.job) == one_pass(self.job, newest_tally(self.job))


def _night_of(path: str, with_summary: bool) -> None:
    job = Job.from_toml(path)
    if with_summary:
        run_night(job)
    else:
        with without_summaries():
            run_night(job)


class Killer:
    """Starts a night in a process of its own, and kills it when it has worked for so long.

    Moments are seconds of its processors where the system tells them, since a busy machine makes all else late: by the
    clock, most would fall before the night has begun.
    """

    def __init__(self) -> None:
        self._context = multiprocessing.get_context("forkserver")
        # What a night imports on its way is there before it begins, else most moments would fall there.
        self._context.set_forkserver_preload(["cut_off", "pandas", "pyarrow.dataset", "scipy.special", "scipy.linalg"])

    def whole(self, stage: Stage, with_summary: bool) -> float:
        """Return how long a night takes that is left to end."""
        return self._run(stage, None, with_summary)[1]

    def kill(self, stage: Stage, after_s: float, with_summary: bool) -> bool:
        """Kill a night after so many seconds, and tell whether it had not ended."""
        return self._run(stage, after_s, with_summary)[0]

    def _run(self, stage: Stage, after_s: float | None, with_summary: bool) -> tuple[bool, float]:
        words = (str(stage.job.ledger.parent / "job.toml"), with_summary)
        child = self._context.Process(target=_night_of, args=words)
        began, busy = time.monotonic(), 0.0
        child.start()
        while child.is_alive() and (after_s is None or busy < after_s):
            time.sleep(0.002)
            busy = max(busy, _busy(child.pid, time.monotonic() - began))
        alive = child.is_alive()
        if alive and child.pid is not None:
            os.kill(child.pid, signal.SIGKILL)
        child.join()
        return alive, busy


def _busy(process: int | None, by_the_clock: float) -> float:
    """Return the seconds that a process has worked, and by the clock where the system does not tell."""
    try:
        told = Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()
    except OSError:
        return by_the_clock if not Path("/proc/self/stat").exists() else 0.0
    return (int(told[11]) + int(told[12])) / os.sysconf("SC_CLK_TCK")
