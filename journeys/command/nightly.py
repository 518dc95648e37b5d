"""The commands that keep a ledger: `nightly` and `forget`."""

from __future__ import annotations

import argparse
import datetime as dt
import json
import logging
from pathlib import Path
from typing import TYPE_CHECKING, Any

from journeys.command.stop import StoppedError
from journeys.command.words import named
from journeys.errors import JourneysError

if TYPE_CHECKING:
    from journeys.nightly.job import Job
    from journeys.nightly.night import Night

DONE, ALARM = 0, 4
RUN_LOG = "runs.jsonl"
logger = logging.getLogger("journeys")


def add_nightly(command: argparse.ArgumentParser) -> None:
    """Add the options of `nightly`."""
    command.add_argument("job", metavar="JOB", type=named, help="job file (TOML)")
    command.add_argument("--rebuild", action="store_true", help="count all inputs anew, in place of the ledger")
    command.add_argument("--dry-run", action="store_true", help="say what would be counted; write nothing")
    command.add_argument("--json", action="store_true", help="print for machines")


def add_forget(command: argparse.ArgumentParser) -> None:
    """Add the options of `forget`."""
    command.add_argument("ids", metavar="IDS", type=named, help="text file with one customer id a line")
    command.add_argument("--ledger", metavar="FOLDER", type=named, required=True, help="the ledger to take them out of")


def nightly(options: argparse.Namespace) -> tuple[str, int]:
    """Run the nightly job and say what it did; 4 where a change alarm tripped."""
    from journeys.nightly.job import Job
    from journeys.nightly.night import run_night

    job = Job.from_toml(options.job)
    began = dt.datetime.now(dt.UTC)
    try:
        night = run_night(job, rebuild=options.rebuild, dry_run=options.dry_run)
    except (JourneysError, OSError, StoppedError) as error:
        if not options.dry_run:
            _log_run(job, began, {"error": " ".join(str(error).split())})
        raise
    told = _told(night)
    if not night.dry_run:
        _log_run(job, began, told)
    answer = json.dumps(told, indent=1, allow_nan=False) + "\n" if options.json else _words(night)
    return answer, ALARM if night.alarms else DONE


def forget(options: argparse.Namespace) -> tuple[str, int]:
    """Take customers out of a ledger."""
    from journeys.nightly.forget import forget as take_out

    return take_out(Path(options.ids), Path(options.ledger).absolute()).summary(), DONE


def _told(night: Night) -> dict[str, Any]:
    """Return what a run has done as plain values."""
    told: dict[str, Any] = {
        "generation": night.generation, "dry_run": night.dry_run, "new_inputs": list(night.new_inputs),
        "n_rows": night.n_rows, "n_too_late": night.n_too_late, "n_waiting": night.n_waiting, "as_of": night.as_of,
        "published": None, "headline": None, "counts_only": None, "alarms": night.alarms,
    }  # fmt: skip
    if night.publication is not None:
        one = night.publication
        # A number that is not there is null for machines.
        headline = {name: None if value != value else value for name, value in one.headline.items()}
        told |= {"published": str(one.folder), "headline": headline, "counts_only": one.counts_only}
    return told


def _words(night: Night) -> str:
    """Return what a run has done in words."""
    if not night.new_inputs and night.publication is None:
        return f"Nothing new; generation {night.generation} stands.\n"
    lines = []
    if night.new_inputs:
        would = "would be " if night.dry_run else ""
        lines.append(
            f"{len(night.new_inputs):,} new inputs, {night.n_rows:,} rows, {would}counted"
            + (f" up to {night.as_of}" if night.as_of else ": nothing is settled yet")
            + f"; {night.n_waiting:,} rows wait, {night.n_too_late:,} came too late."
        )
    if night.dry_run:
        lines += [f"  {name}" for name in night.new_inputs]
        return "\n".join([*lines, "Nothing was written."]) + "\n"
    lines += [f"ALARM {alarm['said']}" for alarm in night.alarms]
    if night.publication is None:
        return "\n".join(lines) + "\n"
    lines.append(f"Generation {night.generation} is published in {night.publication.folder}.")
    return "\n".join(lines) + "\n\n" + night.publication.text


def _log_run(job: Job, began: dt.datetime, told: dict[str, Any]) -> None:
    """Add a line to the log of runs beside what is published; a run does not fail for want of it."""
    seconds = round((dt.datetime.now(dt.UTC) - began).total_seconds(), 2)
    line = json.dumps({"began": began.isoformat(timespec="seconds"), "seconds": seconds, **told})
    try:
        job.out.mkdir(parents=True, exist_ok=True)
        with (job.out / RUN_LOG).open("a", encoding="utf-8") as file:
            file.write(line + "\n")
    except OSError as fault:
        logger.warning("%s: the run could not be noted there: %s", job.out / RUN_LOG, fault.strerror)
