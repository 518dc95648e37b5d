"""Small ledgers for tests: an invented log that arrives by night, and the job that counts it."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd

from journeys.checks import instant_text
from journeys.intake.frozen import toml_text
from journeys.intake.rules import JourneyRules
from journeys.nightly.job import Job
from journeys.nightly.ledger import opened
from journeys.tally import count_log
from journeys.tally.tally import Tally

START = pd.Timestamp("2025-01-06", tz="UTC")
DAY_US = 86_400_000_000
RULES = {
    "customer": "who", "time": "happened", "event": "event", "converted": ["joined"], "churned": ["left"],
    "silence": "5d",
}  # fmt: skip
EVENTS = ("visit", "visit", "price", "basket", "joined", "left")


def invented(seed: int, n_days: int, a_day: int, lateness_hours: int = 6, n_people: int = 30) -> list[pd.DataFrame]:
    """Return the rows of each night: those that arrive on a day, up to so many hours after they happened."""
    rng = np.random.default_rng(seed)
    n = n_days * a_day
    happened = np.sort(rng.integers(0, n_days * 24 * 60, n))
    frame = pd.DataFrame({
        "who": rng.integers(0, n_people, n),
        "happened": START + pd.to_timedelta(happened, unit="min"),
        "event": rng.choice(EVENTS, n),
        "district": rng.choice(["Harbour", "Station", "Hill"], n),
        "amount": rng.integers(0, 5_000, n) / 100,
    })
    arrived = happened + rng.integers(0, lateness_hours * 60 + 1, n) * (rng.random(n) < 0.3)
    order = np.argsort(arrived, kind="stable")
    night = arrived[order] // (24 * 60)
    return [frame.iloc[order[night == day]].reset_index(drop=True) for day in range(int(night.max()) + 1)]


def write_night(job: Job, day: int, rows: pd.DataFrame) -> Path:
    """Put the rows of a night where the job looks for them."""
    folder = job.log / f"day={day:03d}"
    folder.mkdir(parents=True)
    rows.to_parquet(folder / "rows.parquet", index=False)
    return folder / "rows.parquet"


def make_job(root: Path, rules: dict[str, object] | None = None, **settings: object) -> Job:
    """Write the files of a job below a folder, and return it."""
    root.mkdir(exist_ok=True)
    (root / "events").mkdir(exist_ok=True)
    (root / "rules.toml").write_text(toml_text({**RULES, **(rules or {})}), encoding="utf-8")
    given = {"log": "events", "rules": "rules.toml", "ledger": "ledger", "out": "out", "lateness": "6h",
             "id_key": "none", **settings}  # fmt: skip
    (root / "job.toml").write_text(toml_text(given), encoding="utf-8")
    return Job.from_toml(root / "job.toml")


def newest_tally(job: Job) -> Tally:
    """Return the counts of a ledger's newest generation."""
    ledger = opened(job.ledger)
    assert ledger.manifest is not None
    assert ledger.manifest.newest is not None
    return ledger.tally(ledger.manifest.newest)


def one_pass(job: Job, like: Tally) -> Tally:
    """Return the tally of one pass over all inputs of a job, with the dates and under the rules of another."""
    dates = {"log_start": instant_text(like.log_start_us), "as_of": instant_text(like.as_of_us)}
    tally = count_log(str(job.log), JourneyRules.from_dict(job.rules.to_dict() | dates))
    return replace(tally, rules=like.rules)


def files_of(folder: Path) -> dict[str, bytes]:
    """Return what a folder holds, by name, but for its lock."""
    return {path.name: path.read_bytes() for path in sorted(folder.iterdir()) if path.name != "lock"}


@contextmanager
def quick_folder() -> Iterator[Path]:
    """Give a folder in memory where the system has such a place, since a ledger waits for the disk at every file."""
    memory = Path("/dev/shm")
    with tempfile.TemporaryDirectory(dir=memory if memory.is_dir() else None) as folder:
        yield Path(folder)
