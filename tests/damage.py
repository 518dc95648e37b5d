"""Bits that turn over in a ledger, and inputs that are cut short: what a night makes of them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from ledgers import files_of, newest_tally

from journeys.errors import JourneysError
from journeys.nightly.job import Job
from journeys.nightly.night import run_night
from journeys.nightly.then_and_now import tally_of_ledger


def flip(path: Path, rng: np.random.Generator) -> tuple[str, int]:
    """Turn over one bit of a file, and return where."""
    data = bytearray(path.read_bytes())
    at = int(rng.integers(len(data)))
    data[at] ^= 1 << int(rng.integers(8))
    path.write_bytes(data)
    return path.name, at


def told(job: Job, number: int) -> str | None:
    """Run a night, and read the generations kept; return the error, None where there is none."""
    try:
        run_night(job)
        for one in (number, None):
            tally_of_ledger(job.ledger, one)
        newest_tally(job)
    except JourneysError as error:
        return str(error)
    return None


def flip_any(job: Job, rng: np.random.Generator, number: int) -> tuple[str, int, str | None]:
    """Turn over one bit of any file of a ledger, run a night, put everything back; return where, and what was told."""
    before = files_of(job.ledger)
    sizes = np.array([len(data) for data in before.values()])
    name = list(before)[int(rng.choice(len(sizes), p=sizes / sizes.sum()))] if rng.random() < 0.5 else (
        list(before)[int(rng.integers(len(before)))]
    )  # fmt: skip
    where = flip(job.ledger / name, rng)
    answer = told(job, number)
    for path in job.ledger.iterdir():
        if path.name != "lock":
            path.unlink()
    for name, data in before.items():
        (job.ledger / name).write_bytes(data)
    return (*where, answer)
