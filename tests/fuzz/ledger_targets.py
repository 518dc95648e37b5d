"""Fuzzed too: the files of a ledger, and the file that describes a nightly job.

A file of a ledger bears its checksum in the manifest, and the manifest its own, so that damage is told before anything
is read; `test_damage.py` and `study_damage.py` turn bits over to see that. Here the checksums fit whatever was done, as
if somebody had signed the damage: what is then read must still have the form of a ledger, or be refused.
"""

from __future__ import annotations

import functools
import json
import shutil
import sys
from pathlib import Path
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from cut_off import without_summaries  # noqa: E402
from ledgers import files_of, invented, make_job, quick_folder, write_night  # noqa: E402
from target import READ, REFUSED, Target  # noqa: E402

from journeys.errors import JourneysError  # noqa: E402
from journeys.nightly import disk  # noqa: E402
from journeys.nightly.job import Job  # noqa: E402
from journeys.nightly.ledger import opened  # noqa: E402
from journeys.nightly.night import run_night  # noqa: E402
from journeys.nightly.state import kept_bytes, kept_from, rows_bytes, rows_from  # noqa: E402

MANIFEST = "manifest.json"
JOB_TOML = """
log = "events"
rules = "rules.toml"
ledger = "ledger"   # a comment
out = "out"
lateness = "6h"
id_key = "none"
horizons = ["14d", "60d"]
min_customers = 10

[alarms]
within = "2d"
at_least = "1.5 points"
weeks = 8
"""


@functools.cache
def sound() -> dict[str, bytes]:
    """Give the files of a ledger of two nights, whose rules have groups, stages and values."""
    rules = {"by": ["district"], "value": "amount", "stages": ["price", "basket"], "touchpoints": "all"}
    with quick_folder() as root, without_summaries():
        job = make_job(root, rules, alarms={"within": "2d"})
        for day, rows in enumerate(invented(2, 12, 8, n_people=4)[:12:6]):
            write_night(job, day, rows)
            run_night(job)
        return files_of(job.ledger)


def of_kind(start: str) -> list[bytes]:
    return [data for name, data in sound().items() if name.startswith(start)]


def same(one: Any, other: Any) -> bool:
    """Tell whether two tables of columns are equal, in kind too."""
    return one.keys() == other.keys() and all(
        values.dtype == other[name].dtype and np.array_equal(values, other[name]) for name, values in one.items()
    )


def check_part(path: Path) -> str:
    try:
        kept = kept_from(path.read_bytes())
    except JourneysError:
        return REFUSED
    again = kept_from(kept_bytes(kept).to_pybytes())
    assert kept.carried.names == again.carried.names
    for name in kept.carried.names:
        assert same({name: getattr(kept.carried, name)}, {name: getattr(again.carried, name)}), "other records"
    assert kept.tables.keys() == again.tables.keys()
    for name, table in kept.tables.items():
        other = again.tables[name]
        assert same({"key": table.key, **table.sums, **table.more}, {"key": other.key, **other.sums, **other.more})
        assert len({len(values) for values in (table.key, *table.sums.values(), *table.more.values())}) == 1
    return READ


def check_held(path: Path) -> str:
    try:
        rows = rows_from(path.read_bytes())
    except JourneysError:
        return REFUSED
    columns = {name: values for name, values in rows.columns().items() if values is not None}
    again = {name: values for name, values in rows_from(rows_bytes(rows).to_pybytes()).columns().items()
             if values is not None}  # fmt: skip
    assert same(columns, again), "other rows when written and read"
    return READ


def signed(data: bytes) -> bytes:
    """Give a manifest the checksum that fits what it says, if it says anything."""
    try:
        body = json.dumps(json.loads(data)["ledger"], sort_keys=True)
    except (ValueError, KeyError, TypeError, RecursionError):
        return data
    return f'{{"checksum": "{disk.digest(body.encode())}",\n"ledger": {body}}}\n'.encode()


def check_manifest(path: Path) -> str:
    """Put a manifest into a sound ledger, as it is and with its checksum put right, and read all that it names."""
    folder, data = path.parent / "ledger", path.read_bytes()
    folder.mkdir()
    try:
        for name, there in sound().items():
            (folder / name).write_bytes(there)
        (folder / MANIFEST).write_bytes(data)
        outcome = all_of(folder)
        assert outcome == REFUSED or data == signed(data), "damage that was not told"
        (folder / MANIFEST).write_bytes(signed(data))
        return all_of(folder)
    finally:
        shutil.rmtree(folder)


def all_of(folder: Path) -> str:
    """Read everything in a ledger."""
    try:
        ledger = opened(folder)
        ledger.check()
        manifest = ledger.manifest
        assert manifest is not None
        for number in filter(str.isdigit, manifest.parts):
            ledger.part(int(number))
        ledger.held()
        for one in manifest.generations:
            ledger.tally(one)
    except JourneysError:
        return REFUSED
    return READ


def check_stored_tally(path: Path) -> str:
    """Put counts into a ledger in the place of the newest, and ask for them."""
    folder = path.parent / "ledger"
    folder.mkdir()
    try:
        for name, there in sound().items():
            (folder / name).write_bytes(there)
        newest = opened(folder).manifest.newest  # type: ignore[union-attr]
        (folder / newest.tally.file).write_bytes(path.read_bytes())  # type: ignore[union-attr]
        outcome = all_of(folder)
        assert outcome == REFUSED or path.read_bytes() == of_kind("tally")[-1], "damage that was not told"
        return outcome
    finally:
        shutil.rmtree(folder)


def check_job(path: Path) -> str:
    """Read a job, and where it can be read say what its night would count; nothing may be written."""
    root = path.parent / "here"
    root.mkdir()
    try:
        job = make_job(root)
        write_night(job, 0, invented(2, 1, 8, n_people=4)[0])
        (root / "job.toml").write_bytes(path.read_bytes())
        before = sorted(root.rglob("*"))
        try:
            run_night(Job.from_toml(root / "job.toml"), dry_run=True)
        except JourneysError:
            return REFUSED
        finally:
            assert sorted(root.rglob("*")) == before, "a file left behind"
        return READ
    finally:
        shutil.rmtree(root)


LEDGER_TARGETS: dict[str, Target] = {
    "part": Target(".arrow", lambda _: of_kind("part"), check_part),
    "held": Target(".arrow", lambda _: of_kind("held"), check_held),
    "manifest": Target(".json", lambda _: of_kind("manifest"), check_manifest),
    "stored": Target(".parquet", lambda _: of_kind("tally")[-1:], check_stored_tally),
    "job": Target(".toml", lambda _: [JOB_TOML.encode(), JOB_TOML.partition("\n[")[0].encode()], check_job),
}
