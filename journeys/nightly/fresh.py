"""Whether a ledger can go on as it was begun, or has to be begun anew: the rules, the key of ids, the inputs."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from hashlib import blake2b

from journeys.errors import LogError, RulesError, StoreError
from journeys.intake.id_key import VARIABLE as ID_KEY
from journeys.intake.id_key import IdKey
from journeys.intake.rules import JourneyRules
from journeys.nightly import disk
from journeys.nightly.inputs import FILE, FolderInputs, InputError, Inputs
from journeys.nightly.job import NONE, Job
from journeys.nightly.ledger import Ledger
from journeys.nightly.manifest import Counted, Manifest, read_manifest
from journeys.nightly.queries import QueryInputs

# Rules that say nothing of how rows are counted.
_FREE = ("limits", "as_of")
# Rules that map events: free for events never seen.
_MAPPING = ("states", "unmapped")
_TALLY_NAME = re.compile(r"tally-(\d{6,})")


def fingerprint(job: Job) -> str | None:
    """Return what tells the key of ids from any other; None where the job does without.

    Raises
    ------
    RulesError
        If there is no key and the job does not say so in words.
    """
    key = key_at_hand()
    if key is None and job.id_key != NONE:
        msg = (
            f"{ID_KEY} is not set: without it, whoever holds the ledger can try ids and find out who is in it; set it "
            f'to a long secret, or say in the job file that this is acceptable: id_key = "{NONE}"'
        )
        raise RulesError(msg)
    return key


def key_at_hand() -> str | None:
    """Return the fingerprint of the key that is set; None where there is none."""
    key = IdKey.from_environment()
    return None if key is None else key.fingerprint


def rules_checksum(rules: JourneyRules) -> str:
    """Return a short checksum of rules: equal rules have equal ones."""
    return blake2b(json.dumps(rules.to_dict(), sort_keys=True).encode(), digest_size=6).hexdigest()


def refuse_changes(job: Job, manifest: Manifest, key: str | None) -> None:
    """Raise if a ledger was counted by other rules, or with another key of ids.

    Limits and `as_of` are free, and so is the mapping of events that were never seen.

    Raises
    ------
    RulesError
        Naming what differs.
    """
    if key != manifest.id_key:
        was, now = (f"{'a' if one else 'no'} key" for one in (manifest.id_key, key))
        what = "another key" if key and manifest.id_key else f"{was} then, {now} now"
        msg = (
            f"{ID_KEY}: {job.ledger} was counted with {what}, so that the same customer would count twice; set the key "
            "as it was, or count all inputs anew with --rebuild"
        )
        raise RulesError(msg)
    rules = job.rules.to_dict()
    differ = [name for name in rules if name not in _FREE and rules[name] != manifest.rules.get(name)]
    if differ and set(differ) <= set(_MAPPING) and _maps_alike(job.rules, manifest):
        return
    if differ:
        told = "; ".join(f"{name} was {_short(manifest.rules.get(name))}, is {_short(rules[name])}" for name in differ)
        msg = (
            f"{job.ledger} was counted by other rules: {told}; put them back as they were, or count all inputs anew "
            "with --rebuild"
        )
        raise RulesError(msg)


def inputs_of(job: Job, ledger: Ledger) -> Inputs:
    """Return where a job's rows come from."""
    if job.log.suffix != ".toml":
        return FolderInputs(job.log)
    counted_before = None if ledger.manifest is None else ledger.manifest.counted_before_us
    return QueryInputs(job.log, counted_before, ledger.next_number)


def refuse_twice(new: Sequence[Counted], counted: Mapping[str, Counted]) -> None:
    """Raise if an input is the same as another, under another name: its rows would count twice.

    Raises
    ------
    InputError
        Naming both.
    """
    seen = {one.checksum: one.name for one in counted.values() if one.kind == FILE}
    for one in new:
        if one.kind != FILE:
            continue
        # Days without rows look alike.
        if one.n_rows and one.checksum in seen:
            msg = (
                f"{one.name} is byte for byte {seen[one.checksum]}, which was counted: its rows would count twice; "
                "take it away"
            )
            raise InputError(msg)
        seen[one.checksum] = one.name


def begun_anew(job: Job) -> Ledger:
    """Return an empty ledger that, once written, takes the place of the one in its folder.

    Raises
    ------
    LogError
        If inputs that were counted are no longer there.
    """
    try:
        old = read_manifest(job.ledger)
    except StoreError:
        old = None
    found = [int(name[1]) for path in disk.files_in(job.ledger) if (name := _TALLY_NAME.match(path.name))]
    number = max([*found, 0 if old is None else old.number]) + 1
    if old is not None:
        missing = inputs_of(job, Ledger(job.ledger, None)).missing({one.name: one for one in old.inputs})
        if missing:
            msg = (
                f"--rebuild: {len(missing):,} inputs of the ledger are no longer in {job.log}, such as {missing[0]}; "
                "put them back, or begin another ledger in a folder of its own"
            )
            raise LogError(msg)
    return Ledger(job.ledger, None, old, number)


def _maps_alike(rules: JourneyRules, manifest: Manifest) -> bool:
    """Tell whether rules map every event seen so far as those of the ledger did."""
    before = JourneyRules.from_dict(manifest.rules)
    events = [] if manifest.learned is None else manifest.learned["rows"]["events"]
    return all(rules.target(event) == before.target(event) for event in events)


def _short(value: object) -> str:
    text = json.dumps(value)
    return text if len(text) <= 60 else text[:57] + "..."
