"""One run of the nightly job: lock, read, count what is new on top of what there is, swap, publish."""

from __future__ import annotations

import datetime as dt
import time
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from typing import Any

from journeys.checks import instant_text
from journeys.errors import LimitError
from journeys.intake.findings import Findings
from journeys.kernels.compiled import is_built
from journeys.nightly import disk
from journeys.nightly.alarms import begun, look, watch_of
from journeys.nightly.fresh import begun_anew, fingerprint, refuse_changes, rules_checksum
from journeys.nightly.inputs import FolderInputs, Input, InputLog, Inputs
from journeys.nightly.job import Job
from journeys.nightly.ledger import Draft, Ledger, opened, without_old
from journeys.nightly.lock import held
from journeys.nightly.manifest import Counted, Generation, Manifest, Watched
from journeys.nightly.publish import Answers, Publication, answers_of, is_published, publish
from journeys.nightly.times import Reach, reach_of
from journeys.tally.resumed import ResumedPass
from journeys.tally.spill import Spill
from journeys.tally.weeks import Watch


@dataclass(frozen=True)
class Night:
    """What a run has done.

    Attributes
    ----------
    generation : int
        The newest of the ledger; 0 where there is none.
    new_inputs : tuple of str
        Inputs that were counted, or would be.
    n_rows, n_too_late, n_waiting : int
        New rows read, those of them that came too late, and rows that wait.
    as_of : str or None
        Up to when the ledger counts.
    publication : Publication or None
        What was published; None where nothing was.
    dry_run : bool
        Nothing was written.
    alarms : list of dict
        The change alarms that tripped.
    """

    generation: int
    new_inputs: tuple[str, ...] = ()
    n_rows: int = 0
    n_too_late: int = 0
    n_waiting: int = 0
    as_of: str | None = None
    publication: Publication | None = None
    dry_run: bool = False
    alarms: list[dict[str, Any]] = field(default_factory=list)


def run_night(job: Job, *, rebuild: bool = False, dry_run: bool = False, now_us: int | None = None) -> Night:
    """Count what is new, and publish.

    Parameters
    ----------
    job : Job
        What to do.
    rebuild : bool
        Count all inputs anew, in place of what the ledger holds.
    dry_run : bool
        Only say what would be counted; nothing is written.
    now_us : int, optional
        The present; default: the clock of this computer.

    Returns
    -------
    Night
        Where nothing is new and the newest generation was published, only its number.

    Raises
    ------
    JourneysError
        If the ledger is held or damaged, an input has changed, the rules or the key of ids are others, the log cannot
        be read, or a quality limit is broken. The ledger is then as it was.
    OSError
        If the disk is full or a folder cannot be written in. The ledger is then as it was, or the new one.
    """
    now = time.time_ns() // 1_000 if now_us is None else now_us
    key = fingerprint(job)
    if dry_run:
        return _tried(job, opened(job.ledger), key, rebuild, now)
    disk.make_folder(job.ledger)
    with held(job.ledger):
        ledger = begun_anew(job) if rebuild else opened(job.ledger)
        inputs = FolderInputs(job.log)
        new = _new_inputs(job, ledger, inputs, key)
        if not new:
            return _again(job, ledger)
        return _counted(job, ledger, inputs, new, key, now)


def _new_inputs(job: Job, ledger: Ledger, inputs: Inputs, key: str | None) -> list[Input]:
    if ledger.manifest is not None:
        refuse_changes(job, ledger.manifest, key)
        ledger.check_newest()
    return inputs.new(ledger.counted)


def _tried(job: Job, ledger: Ledger, key: str | None, rebuild: bool, now_us: int) -> Night:
    """Say what a run would count."""
    ledger = Ledger(job.ledger, None) if rebuild else ledger
    inputs = FolderInputs(job.log)
    new = _new_inputs(job, ledger, inputs, key)
    number = 0 if ledger.manifest is None else ledger.manifest.number
    if not new:
        return Night(number, dry_run=True)
    log = inputs.open(new, job.rules)
    reach = reach_of(log, job.rules, ledger.manifest, job.lateness_us, now_us)
    pass_ = ResumedPass(log, job.rules, reach.span, ledger.learned, compiled=False)
    with Spill() as spill:
        waiting = _dealt(pass_, spill, ledger, reach, now_us)
    _check_limits(job, pass_)
    return Night(
        number, tuple(one.name for one in new), pass_.n_new_rows, pass_.n_too_late, waiting, _as_of(reach), dry_run=True
    )


def _dealt(pass_: ResumedPass, spill: Spill, ledger: Ledger, reach: Reach, now_us: int) -> int:
    """Deal out the rows of a night, and return how many wait."""
    rows = pass_.deal(
        spill, ledger.held(), late_before_us=reach.late_before_us, until_us=reach.span.as_of_us, now_us=now_us
    )
    return 0 if rows is None else len(rows)


def _counted(job: Job, ledger: Ledger, inputs: Inputs, new: list[Input], key: str | None, now_us: int) -> Night:
    """Count the new inputs into a new generation, and publish it."""
    log = inputs.open(new, job.rules)
    reach = reach_of(log, job.rules, ledger.manifest, job.lateness_us, now_us)
    draft = Draft(ledger)
    # The answers are worked out while the ledger is written; they are published when it stands.
    with ThreadPoolExecutor(1) as beside:
        try:
            ledger, night, answers = _drafted(job, ledger, draft, (log, inputs, new), reach, key, now_us, beside)
        except BaseException:
            draft.drop()
            raise
        ledger.clean()
        if answers is None or ledger.manifest is None or ledger.manifest.newest is None:
            return night
        return replace(night, publication=publish(job, ledger.manifest.newest, answers.result()))


def _drafted(
    job: Job,
    ledger: Ledger,
    draft: Draft,
    source: tuple[InputLog, Inputs, list[Input]],
    reach: Reach,
    key: str | None,
    now_us: int,
    beside: Executor,
) -> tuple[Ledger, Night, Future[Answers] | None]:
    """Write the next generation and make it the present one; its answers are worked out beside."""
    log, inputs, new = source
    watched, watch = _watch(job, ledger, reach)
    pass_ = ResumedPass(log, job.rules, reach.span, ledger.learned, compiled=is_built(), watch=watch)
    parts = {} if ledger.manifest is None else dict(ledger.manifest.parts)
    tally = None
    with Spill() as spill:
        waiting = pass_.deal(
            spill, ledger.held(), late_before_us=reach.late_before_us, until_us=reach.span.as_of_us, now_us=now_us
        )
        _check_limits(job, pass_)
        inputs.confirm(new)
        if _as_of(reach) is not None:
            tally = pass_.count(
                spill, ledger.part, lambda number, kept: parts.__setitem__(str(number), draft.part(number, kept))
            )
    number = ledger.next_number
    before = ledger.manifest or Manifest(number, {}, 0, None, rebuilt=number, generations=ledger.old_generations)
    learned = pass_.learned()
    after = replace(
        before, number=number, rules=job.rules.to_dict(), lateness_us=job.lateness_us, id_key=key, learned=learned,
        log_start_us=reach.span.log_start_us, newest_us=reach.newest_us, counted_before_us=reach.counted_before_us,
        inputs=[*before.inputs, *(_record(one, log, number) for one in new)],
        parts=parts, held=None if waiting is None else draft.held(waiting),
    )  # fmt: skip
    alarms: list[dict[str, Any]] = []
    answers = None
    if tally is not None:
        answers = beside.submit(answers_of, job, tally)
        if job.alarms is not None and watched is not None and watch is not None:
            watched, alarms = look(pass_, watch, watched, job.alarms, job.rules, reach.span)
        generation = Generation(
            number, _utc(now_us), rules_checksum(job.rules), reach.span.as_of_us, pass_.n_rows,
            Findings.from_dict(learned["rows"]["findings"]).n("too_late"), draft.tally(number, tally),
            alarms, rebuilt=after.rebuilt,
        )  # fmt: skip
        after = without_old(replace(after, watched=watched), generation)
    night = Night(
        number, tuple(one.name for one in new), pass_.n_new_rows, pass_.n_too_late,
        0 if waiting is None else len(waiting), _as_of(reach), alarms=alarms,
    )  # fmt: skip
    return draft.commit(after), night, answers


def _watch(job: Job, ledger: Ledger, reach: Reach) -> tuple[Watched | None, Watch | None]:
    """Return what is known of the weeks, and what the night counts by week; nothing where no alarms are asked for."""
    if job.alarms is None or _as_of(reach) is None:
        return None, None
    before = None if ledger.manifest is None else ledger.manifest.watched
    events = [] if ledger.learned is None else ledger.learned["counted_events"]
    watched = begun(before, job.alarms, job.rules, reach.span, reach.late_before_us, events)
    return watched, watch_of(watched, job.alarms, job.rules, reach.span)


def _again(job: Job, ledger: Ledger) -> Night:
    """Publish the newest generation if a run was cut off before it could; else do nothing."""
    ledger.check()
    ledger.clean()
    manifest = ledger.manifest
    if manifest is None:
        return Night(0)
    night = Night(manifest.number)
    if manifest.newest is None or is_published(job.out, manifest.newest):
        return night
    publication = publish(job, manifest.newest, answers_of(job, ledger.tally(manifest.newest)))
    return replace(
        night, publication=publication, as_of=instant_text(manifest.newest.as_of_us), alarms=manifest.newest.alarms
    )


def _record(one: Input, log: InputLog, number: int) -> Counted:
    return Counted(one.name, one.size, one.changed_ns, one.checksum, log.rows_of[one.name], number)


def _check_limits(job: Job, pass_: ResumedPass) -> None:
    """Raise a LimitError if too many of a night's rows came too late or could not be read."""
    n = pass_.n_new_rows
    faults = (
        ("late", pass_.n_too_late, "came too late to be counted in order", "a longer `lateness` waits for such rows"),
        ("unreadable", pass_.n_unreadable, "have no readable customer, time or event", "mend the export"),
    )
    for limit, found, what, mend in faults:
        most = job.rules.limits[limit]
        if found > most * n:
            msg = (
                f"{found:,} of {n:,} new rows ({100 * found / n:.2f} %) {what}; the limit is {100 * most:.2f} %, so "
                f"nothing was counted or published: {mend}, or raise [limits] {limit} in the rules"
            )
            raise LimitError(msg)


def _as_of(reach: Reach) -> str | None:
    span = reach.span
    return None if span.as_of_us < span.log_start_us else instant_text(span.as_of_us)


def _utc(us: int) -> str:
    return dt.datetime.fromtimestamp(us / 1e6, dt.UTC).isoformat(timespec="seconds")

