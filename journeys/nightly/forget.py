"""Taking the records of some customers out of a ledger; what is added up already cannot be taken out of sums."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.errors import LogError, RulesError, StoreError
from journeys.intake.arrays import from_texts
from journeys.intake.id_key import VARIABLE as ID_KEY
from journeys.intake.id_key import IdKey
from journeys.intake.identity import bucket_major, bucket_of_major, customer_keys
from journeys.intake.rows import Rows
from journeys.nightly.fresh import key_at_hand
from journeys.nightly.ledger import Draft, Ledger, opened
from journeys.nightly.lock import held
from journeys.nightly.manifest import Manifest, Stored
from journeys.tally.spill import BUCKETS_PER_PART
from journeys.tally.worker import Kept


@dataclass(frozen=True)
class Forgotten:
    """What was taken out of a ledger.

    Attributes
    ----------
    n_ids, n_records, n_rows : int
        Distinct ids asked for, customers' records and rows in waiting taken out.
    generation : int
        The generation without them.
    n_tallies : int
        Kept counts that their moves are still added up in.
    """

    n_ids: int
    n_records: int
    n_rows: int
    generation: int
    n_tallies: int

    def summary(self) -> str:
        """Return in words what is gone, and what the sums still hold."""
        return (
            f"{self.n_records:,} of {self.n_ids:,} customers had a record, which is gone, and {self.n_rows:,} rows in "
            f"waiting with them (generation {self.generation}).\n"
            "Still there: their moves and journeys up to now, added up with those of others in the ledger's sums and "
            f"in {self.n_tallies:,} kept counts, which hold no id and no key, but small counts can single people out; "
            "the summaries published so far; and their rows in the log itself. Take them out of the log and run "
            "`journeys nightly` with --rebuild to take them out of the sums too. If they come again, they are new "
            "customers.\n"
        )


def forget(ids: Path, folder: Path) -> Forgotten:
    """Take the records and waiting rows of some customers out of a ledger.

    Parameters
    ----------
    ids : Path
        Text file, one id a line.
    folder : Path
        The ledger.

    Returns
    -------
    Forgotten

    Raises
    ------
    LogError
        If there are no ids, or they are not of the ledger's kind.
    RulesError
        If the ledger's ids went through another key.
    StoreError
        If there is no ledger, or it is damaged.
    LockedError
        If a run holds it.
    """
    wanted = _read_ids(ids)
    if not folder.is_dir():
        msg = f"{folder}: no such folder; wanted a ledger"
        raise StoreError(msg)
    with held(folder):
        ledger = opened(folder)
        if ledger.manifest is None or ledger.manifest.learned is None:
            msg = f"{folder} holds no ledger yet; nothing is known of anybody"
            raise StoreError(msg)
        if key_at_hand() != ledger.manifest.id_key:
            msg = f"{ID_KEY}: the ids of {folder} went through another key, or none; set it as it was"
            raise RulesError(msg)
        keys = _keys(wanted, ledger.manifest)
        draft = Draft(ledger)
        try:
            after, n_records, n_rows = _without(ledger, draft, ledger.manifest, keys)
            ledger = draft.commit(after)
        except BaseException:
            draft.drop()
            raise
        ledger.clean()
        return Forgotten(len(set(wanted)), n_records, n_rows, after.number, len(after.generations))


def _without(
    ledger: Ledger, draft: Draft, manifest: Manifest, keys: NDArray[np.uint64]
) -> tuple[Manifest, int, int]:
    """Write the parts that change without some customers."""
    parts, n_records = dict(manifest.parts), 0
    for number in np.unique(bucket_of_major(keys) // BUCKETS_PER_PART).tolist():
        kept = ledger.part(number)
        gone = None if kept is None else np.isin(kept.carried.key, keys)
        if kept is not None and gone is not None and gone.any():
            n_records += int(gone.sum())
            parts[str(number)] = draft.part(number, Kept(kept.carried.take(~gone), kept.tables))
    rows = ledger.held()
    waiting, n_rows = _rows_without(rows, keys)
    stored: Stored | None = manifest.held
    if n_rows:
        stored = None if waiting is None else draft.held(waiting)
    return replace(manifest, number=manifest.number + 1, parts=parts, held=stored), n_records, n_rows


def _rows_without(rows: Rows | None, keys: NDArray[np.uint64]) -> tuple[Rows | None, int]:
    if rows is None:
        return None, 0
    gone = np.isin(rows.key, keys)
    return (None if gone.all() else rows.take(~gone)), int(gone.sum())


def _read_ids(path: Path) -> list[str]:
    try:
        ids = [line for line in path.read_text(encoding="utf-8-sig").splitlines() if line]
    except UnicodeDecodeError:
        raise LogError(f"{path}: not text in UTF-8; wanted one customer id a line") from None
    if not ids:
        raise LogError(f"{path} holds no ids; wanted one customer id a line")
    return ids


def _keys(ids: Sequence[str], manifest: Manifest) -> NDArray[np.uint64]:
    """Return the keys that the ledger knows customers by."""
    kind = None if manifest.learned is None else manifest.learned["rows"]["customer_kind"]
    array = from_texts(list(ids))
    if kind == "integer":
        try:
            array = pa.array([int(one) for one in ids], pa.int64())
        except (ValueError, pa.ArrowInvalid, OverflowError):
            raise LogError("an id is no whole number, but the ledger's customers have whole numbers") from None
    keys, _ = customer_keys(array, kind, IdKey.from_environment())
    return np.unique(bucket_major(keys))
