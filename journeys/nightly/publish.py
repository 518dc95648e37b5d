"""What a generation gives to readers: a summary in a dated folder, a row of history, and a stable place for the latest.

Every step can be done again: a run that is cut off here is made good by the next, with the same files.
"""

from __future__ import annotations

import contextlib
import json
import math
import os
import shutil
import tempfile
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from journeys.checks import instant_text
from journeys.errors import LogError
from journeys.files import written_whole
from journeys.markup import count_text
from journeys.models.model import JourneyModel
from journeys.nightly.history import history_rows, write_history
from journeys.nightly.job import Job
from journeys.nightly.manifest import Generation
from journeys.questions.few_people import few_in_counts
from journeys.questions.hidden import shown_counts
from journeys.questions.overview import Overview
from journeys.questions.plain_count import PlainCount, plain_count
from journeys.questions.summarise import summarise
from journeys.show.summary import summary_text, write_summary
from journeys.tally.tally import Tally

STAMP = "run.json"
LATEST = "latest"
HISTORY = "history.parquet"
_DAY = len("2025-06-30")


@dataclass(frozen=True)
class Publication:
    """What was published.

    Attributes
    ----------
    folder : Path
        Where.
    text : str
        The summary to read.
    counts_only : str or None
        Why there are counts and no estimates; None where there are both.
    headline : dict
        The row of history for all customers together.
    alarms : list of dict
        The change alarms that tripped.
    """

    folder: Path
    text: str
    counts_only: str | None
    headline: dict[str, Any]
    alarms: list[dict[str, Any]]


@dataclass(frozen=True, eq=False)
class Answers:
    """What counts say: a summary, or why there are counts only."""

    tally: Tally
    overview: Overview | None
    counts_only: str | None


def is_published(out: Path, generation: Generation) -> bool:
    """Tell whether a generation is what a folder of publications has as its latest."""
    try:
        stamp = json.loads((out / LATEST / STAMP).read_text(encoding="utf-8"))
        return bool(stamp == json.loads(json.dumps(_stamp(generation))))
    except (OSError, ValueError):
        return False


def answers_of(job: Job, tally: Tally) -> Answers:
    """Return the summary of counts, with the horizons of a job, or why they cannot carry one yet."""
    try:
        fit = JourneyModel().fit(tally)
        return Answers(tally, summarise(fit, job.horizons or None, min_customers=job.min_customers), None)
    except LogError as fault:
        return Answers(tally, None, str(fault))


def publish(job: Job, generation: Generation, answers: Answers) -> Publication:
    """Write what a generation says.

    Parameters
    ----------
    job : Job
        Where to.
    generation : Generation
        What it is stamped with.
    answers : Answers
        What its counts say.

    Returns
    -------
    Publication

    Raises
    ------
    OSError
        If the folder cannot be written in.
    """
    tally, overview, why = answers.tally, answers.overview, answers.counts_only
    few = few_in_counts(tally, job.min_customers) if job.min_customers > 1 else None
    plain = plain_count(tally) if few is None else shown_counts(plain_count(tally), few)
    text = _counts_text(tally, plain, why or "") if overview is None else summary_text(overview)
    job.out.mkdir(parents=True, exist_ok=True)
    name = f"{instant_text(generation.as_of_us)[:_DAY]}-{generation.number:06d}"
    part = Path(tempfile.mkdtemp(prefix=".part-", dir=job.out))
    try:
        if overview is None:
            _write_counts(part, text, plain)
        else:
            write_summary(overview, part)
        (part / STAMP).write_text(json.dumps(_stamp(generation), indent=1) + "\n", encoding="utf-8")
        part.chmod(0o777 & ~_umask())
        _put_in_place(part, job.out / name)
    except BaseException:
        shutil.rmtree(part, ignore_errors=True)
        raise
    rows = history_rows(generation, tally, plain, overview, why, few)
    write_history(job.out / HISTORY, rows, generation.number)
    _point(job.out, name)
    _clear(job.out)
    return Publication(job.out / name, text, why, rows[0], generation.alarms)


def _stamp(generation: Generation) -> dict[str, Any]:
    """Return what tells a publication from any other."""
    stamp = asdict(generation)
    stamp["tally"] = generation.tally.checksum
    return {"generation": stamp.pop("number"), **stamp, "as_of": instant_text(generation.as_of_us)}


def _counts_text(tally: Tally, plain: PlainCount, why: str) -> str:
    rows = [
        ("people", plain.n_people), ("journeys", plain.n_journeys), ("start seen", plain.n_sure),
        ("undecided yet", plain.n_undecided), *((f"ended: {name}", n) for name, n in plain.n_by_outcome.items()),
    ]  # fmt: skip
    width = max(len(name) for name, _ in rows)
    lines = "\n".join(f"{name:<{width}}  {count_text(n):>12}" for name, n in rows)
    said = tally.summary() if math.isfinite(sum([*plain.n_by_outcome.values(), plain.n_undecided])) else "Counts"
    return f"{said}\n\n{lines}\n\nCounts only: {why}\n"


def _write_counts(folder: Path, text: str, plain: PlainCount) -> None:
    counts = {name: n for name, n in asdict(plain).items() if name != "n_by_outcome"} | {"ended": plain.n_by_outcome}
    (folder / "summary.md").write_text(text, encoding="utf-8")
    (folder / "counts.json").write_text(json.dumps(_nulls(counts), indent=1) + "\n", encoding="utf-8")


def _nulls(counts: dict[str, Any]) -> dict[str, Any]:
    """Return counts for machines: null for those that are left out."""
    return {
        name: _nulls(n) if isinstance(n, dict) else None if math.isnan(n) else n for name, n in counts.items()
    }


def _put_in_place(part: Path, target: Path) -> None:
    """Give a folder its name; one that is there was left by a run that got no further, and says the same."""
    if _is_real_folder(target):
        shutil.rmtree(target)
    else:
        target.unlink(missing_ok=True)
    part.rename(target)


def _point(out: Path, name: str) -> None:
    """Make `latest` lead to a dated folder."""
    link, part = out / LATEST, out / f".{LATEST}-part"
    part.unlink(missing_ok=True)
    if not _is_real_folder(link) and _is_linked(part, name):
        part.replace(link)
        return
    # Where links are not to be had, or were lost in copying, the files are copied, each of them whole, the stamp last.
    link.mkdir(exist_ok=True)
    for path in sorted((out / name).iterdir(), key=lambda path: path.name == STAMP):
        with written_whole(link / path.name) as copy:
            shutil.copyfile(path, copy)


def _is_real_folder(path: Path) -> bool:
    return path.is_dir() and not path.is_symlink()


def _is_linked(path: Path, name: str) -> bool:
    """Make a link to a folder beside it, and tell whether that could be done."""
    try:
        path.symlink_to(name, target_is_directory=True)
    except OSError:
        return False
    return True


def _clear(out: Path) -> None:
    """Take away what runs that were cut off have left."""
    for path in out.glob(".part-*"):
        with contextlib.suppress(OSError):
            shutil.rmtree(path)
    for path in out.glob(f".{HISTORY}-*.part"):
        with contextlib.suppress(OSError):
            path.unlink()


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
