"""One run of the nightly job: lock, read, count what is new on top of what there is, swap, publish."""

from __future__ import annotations

import datetime as dt
import time
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from dataclasses import asdict, dataclass, field, replace
from typing import Any

from journeys.checks import instant_text
from journeys.errors import LimitError
from journeys.intake.findings import Findings
from journeys.intake.people import People
from journeys.intake.rows import Rows
from journeys.kernels.compiled import is_built
from journeys.nightly import disk
from journeys.nightly.alarms import begun, look, watch_of
from journeys.nightly.fresh import begun_anew, fingerprint, inputs_of, refuse_changes, refuse_twice, rules_checksum
from journeys.nightly.inputs import Input, InputLog, Inputs
from journeys.nightly.job import Job
from journeys.nightly.ledger import Draft, Ledger, opened, without_old
from journeys.nightly.lock import held
from journeys.nightly.manifest import Counted, Generation, Manifest, Stored, Watched
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
    if dry_run and not job.ledger.is_dir():
        return _tried(job, Ledger(job.ledger, None), key, now)
    disk.make_folder(job.ledger)
    with held(job.ledger):
        ledger = begun_anew(job) if rebuild else opened(job.ledger)
        if dry_run:
            return _tried(job, ledger, key, now)
        inputs = inputs_of(job, ledger)
        new = _new_inputs(job, ledger, inputs, key)
        before = _made_good(job, ledger, check=not new)
        night = _counted(job, ledger, Source(inputs, new), key, now) if new else None
        if night is None:
            return before
        return replace(night, alarms=[*before.alarms, *night.alarms])


@dataclass(frozen=True)
class Source:
    """The new inputs of a night."""

    inputs: Inputs
    new: list[Input]

    def counted(self, log: InputLog, number: int) -> list[Counted]:
        """Return what a ledger notes of them, once the log that they make up was read."""
        return [Counted(**asdict(one), n_rows=log.rows_of[one.name], generation=number) for one in self.new]


def _new_inputs(job: Job, ledger: Ledger, inputs: Inputs, key: str | None) -> list[Input]:
    if ledger.manifest is not None:
        refuse_changes(job, ledger.manifest, key)
        ledger.check_newest()
    return inputs.new(ledger.counted)


def _tried(job: Job, ledger: Ledger, key: str | None, now_us: int) -> Night:
    """Say what a run would count."""
    inputs = inputs_of(job, ledger)
    new = _new_inputs(job, ledger, inputs, key)
    number = 0 if ledger.manifest is None else ledger.manifest.number
    if not new:
        return Night(number, dry_run=True)
    source, people = Source(inputs, new), People.here(job.identity)
    with inputs.open(new, job.rules) as log:
        reach = _reach(job, ledger, log, now_us)
        if reach is None:
            return Night(number, dry_run=True)
        pass_ = ResumedPass(log, job.rules, reach.span, ledger.learned, compiled=False, people=people)
        with Spill() as spill:
            _dealt(job, ledger, source, log, pass_, spill, reach, now_us)
    return replace(_told(number, new, pass_, reach), dry_run=True)


def _reach(job: Job, ledger: Ledger, log: InputLog, now_us: int) -> Reach | None:
    """Return from when to when a night counts; None where all there is was there the night before, and still waits."""
    reach = reach_of(log, job.rules, ledger.manifest, job.lateness_us, now_us)
    log.up_to(reach.span.as_of_us)
    before = ledger.manifest
    if log.again is None or before is None or reach.counted_before_us != before.counted_before_us:
        return reach
    n_new, n_waiting = (sum(batch.num_rows for batch in rows.batches([job.rules.time])) for rows in (log, log.again))
    return None if not n_new and before.n_waiting_rows in (None, n_waiting) else reach


def _dealt(
    job: Job, ledger: Ledger, source: Source, log: InputLog, pass_: ResumedPass, spill: Spill, reach: Reach, now_us: int
) -> tuple[Rows | None, list[Counted]]:
    """Deal out a night's rows, unless they break a limit; return those that wait, and what is noted of the inputs."""
    waiting = pass_.deal(
        spill, ledger.held(), late_before_us=reach.late_before_us, until_us=reach.span.as_of_us, now_us=now_us,
        again=log.again,
    )  # fmt: skip
    counted = source.counted(log, ledger.next_number)
    # Told before the limits: rows that come a second time are late, too.
    refuse_twice(counted, ledger.counted)
    _check_limits(job, pass_)
    source.inputs.confirm(source.new)
    return waiting, counted


def _told(number: int, new: list[Input], pass_: ResumedPass, reach: Reach) -> Night:
    names = tuple(one.name for one in new)
    return Night(number, names, pass_.n_new_rows, pass_.n_too_late, pass_.n_waiting, _as_of(reach))


def _counted(job: Job, ledger: Ledger, source: Source, key: str | None, now_us: int) -> Night | None:
    """Count the new inputs into a new generation, and publish it; None where there is nothing new in them."""
    draft = Draft(ledger)
    # The answers are worked out while the ledger is written; they are published when it stands.
    with ThreadPoolExecutor(1) as beside, source.inputs.open(source.new, job.rules) as log:
        reach = _reach(job, ledger, log, now_us)
        if reach is None:
            ledger.check()
            return None
        try:
            after, night, answers = _drafted(job, ledger, draft, source, log, reach, beside, now_us)
            ledger = draft.commit(replace(after, id_key=key))
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
    source: Source,
    log: InputLog,
    reach: Reach,
    beside: Executor,
    now_us: int,
) -> tuple[Manifest, Night, Future[Answers] | None]:
    """Write the next generation, all but its manifest; its answers are worked out beside."""
    number = ledger.next_number
    watched, watch = _watch(job, ledger, reach)
    people = People.here(job.identity)
    pass_ = ResumedPass(log, job.rules, reach.span, ledger.learned, compiled=is_built(), people=people, watch=watch)
    parts, tally, answers = {} if ledger.manifest is None else dict(ledger.manifest.parts), None, None
    with Spill() as spill:
        waiting, counted = _dealt(job, ledger, source, log, pass_, spill, reach, now_us)
        if _as_of(reach) is not None:
            tally = pass_.count(
                spill, ledger.part, lambda part, kept: parts.__setitem__(str(part), draft.part(part, kept))
            )
            answers = beside.submit(answers_of, job, tally)
    before = ledger.manifest or Manifest(number, {}, 0, None, rebuilt=number, generations=ledger.old_generations)
    after = replace(
        before, number=number, rules=job.rules.to_dict(), lateness_us=job.lateness_us, learned=pass_.learned(),
        log_start_us=reach.span.log_start_us, newest_us=reach.newest_us, counted_before_us=reach.counted_before_us,
        inputs=[*before.inputs, *counted], parts=parts, held=None if waiting is None else draft.held(waiting),
    )  # fmt: skip
    night = _told(number, source.new, pass_, reach)
    if tally is None:
        return after, night, None
    alarms: list[dict[str, Any]] = []
    if job.alarms is not None and watched is not None and watch is not None:
        watched, alarms = look(
            pass_, watch, watched, job.alarms, job.rules, reach.span, job.min_customers
        )
    newest = _generation(job, after, pass_, reach, draft.tally(number, tally), alarms, now_us)
    return without_old(replace(after, watched=watched), newest), replace(night, alarms=alarms), answers


def _generation(
    job: Job,
    after: Manifest,
    pass_: ResumedPass,
    reach: Reach,
    stored: Stored,
    alarms: list[dict[str, Any]],
    now_us: int,
) -> Generation:
    learned = pass_.learned()
    n_too_late = Findings.from_dict(learned["rows"]["findings"]).n("too_late")
    run = dt.datetime.fromtimestamp(now_us / 1e6, dt.UTC).isoformat(timespec="seconds")
    return Generation(
        after.number, run, rules_checksum(job.rules), reach.span.as_of_us, pass_.n_rows, n_too_late, stored, alarms,
        after.rebuilt,
    )  # fmt: skip


def _watch(job: Job, ledger: Ledger, reach: Reach) -> tuple[Watched | None, Watch | None]:
    """Return what is known of the weeks, and what the night counts by week; nothing where no alarms are asked for."""
    if job.alarms is None or _as_of(reach) is None:
        return None, None
    before = None if ledger.manifest is None else ledger.manifest.watched
    events = [] if ledger.learned is None else ledger.learned["counted_events"]
    watched = begun(before, job.alarms, job.rules, reach.span, reach.late_before_us, events)
    return watched, watch_of(watched, job.alarms, job.rules, reach.span)


def _made_good(job: Job, ledger: Ledger, *, check: bool) -> Night:
    """Publish the newest generation if a run was cut off before it could; `check` looks at all files of the ledger."""
    if check:
        ledger.check()
        ledger.clean()
    manifest = ledger.manifest
    if manifest is None:
        return Night(0)
    newest = manifest.newest
    if newest is None or is_published(job.out, newest):
        return Night(manifest.number)
    publication = publish(job, newest, answers_of(job, ledger.tally(newest)))
    as_of = instant_text(newest.as_of_us)
    return Night(manifest.number, publication=publication, as_of=as_of, alarms=newest.alarms)


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

