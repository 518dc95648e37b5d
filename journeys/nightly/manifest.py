"""The manifest: what a ledger holds, which files that stands in, and their checksums. Replaced whole, by one rename."""

from __future__ import annotations

import functools
import json
import re
from collections.abc import Iterator
from dataclasses import asdict, dataclass, field, is_dataclass
from pathlib import Path
from types import NoneType, UnionType
from typing import Any, get_args, get_origin, get_type_hints

from journeys.errors import StoreError
from journeys.nightly import disk

NAME = "manifest.json"
FORMAT_VERSION = 3
# What a ledger calls its files: no path, which could lead out of the folder.
_FILE_NAME = re.compile(r"(part|held|tally)-[\w.-]+")


@dataclass(frozen=True)
class Stored:
    """A file of the ledger: its name, which its checksum is part of, how many bytes, and the checksum."""

    file: str
    size: int
    checksum: str


@dataclass(frozen=True)
class Counted:
    """An input that has been counted: what tells whether it is still the same, and in which generation it came in.

    Of a night of a query the checksum is that of its text, `since_us` the watermark, size and time are 0.
    """

    name: str
    size: int
    changed_ns: int
    checksum: str
    n_rows: int
    generation: int
    kind: str = "file"
    since_us: int | None = None


@dataclass(frozen=True)
class Generation:
    """What was known after one night.

    Attributes
    ----------
    number : int
        From 1, rising.
    run : str
        When the run that made it began, UTC.
    rules : str
        Checksum of the rules it was read by.
    as_of_us : int
        Up to when the log was read.
    n_rows, n_too_late : int
        Rows read, and rows left out because they came too late, since the ledger's start.
    tally : Stored
        The counts.
    alarms : list of dict
        The change alarms that tripped.
    rebuilt : int
        The generation in which the ledger was last begun anew.
    """

    number: int
    run: str
    rules: str
    as_of_us: int
    n_rows: int
    n_too_late: int
    tally: Stored
    alarms: list[dict[str, Any]] = field(default_factory=list)
    rebuilt: int = 1


@dataclass(frozen=True)
class Watched:
    """What a ledger knows of the weeks.

    Attributes
    ----------
    within_us : int
        Time within which things are followed.
    from_us : int
        Weeks that begin earlier were not followed from their beginning.
    shares, events : int
        The last week looked at for changed shares and for events; -1 where none was.
    by_week : dict of str to dict of str to int
        How often each event came in each week.
    buckets : dict of str to dict of str to str
        In which buckets of customers it came in each week, as bits of a hexadecimal number.
    """

    within_us: int
    from_us: int
    shares: int = -1
    events: int = -1
    by_week: dict[str, dict[str, int]] = field(default_factory=dict)
    buckets: dict[str, dict[str, str]] = field(default_factory=dict)


@dataclass(frozen=True)
class Manifest:
    """What a ledger holds.

    Attributes
    ----------
    number : int
        Of the newest generation.
    rules : dict
        As `JourneyRules.to_dict` gives them.
    lateness_us : int
        For how long the newest rows wait.
    id_key : str or None
        Fingerprint of the key that ids went through; None where there was none.
    log_start_us, newest_us : int or None
        First time of the log, and latest time seen that does not lie in the future; None before there was any.
    counted_before_us : int or None
        Rows earlier than this have been counted; new ones are too late.
    learned : dict or None
        See `tally.resumed`.
    inputs : list of Counted
        All inputs so far.
    parts : dict of str to Stored
        Customers' records and sums by part.
    held : Stored or None
        Rows that wait.
    generations : list of Generation
        Those kept, rising; empty before there was anything to count.
    watched : Watched or None
        What the change alarms know of the weeks; None where there are none.
    rebuilt : int
        The generation in which the ledger was last begun anew.
    """

    number: int
    rules: dict[str, Any]
    lateness_us: int
    id_key: str | None
    log_start_us: int | None = None
    newest_us: int | None = None
    counted_before_us: int | None = None
    learned: dict[str, Any] | None = None
    inputs: list[Counted] = field(default_factory=list)
    parts: dict[str, Stored] = field(default_factory=dict)
    held: Stored | None = None
    generations: list[Generation] = field(default_factory=list)
    watched: Watched | None = None
    rebuilt: int = 1

    @property
    def files(self) -> Iterator[Stored]:
        """All files the ledger consists of, beside the manifest itself."""
        yield from self.parts.values()
        yield from (one.tally for one in self.generations)
        if self.held is not None:
            yield self.held

    @property
    def n_waiting_rows(self) -> int | None:
        """Rows that the newest generation read and that are to be read anew; None where there is no generation."""
        if self.newest is None or self.learned is None:
            return None
        return self.newest.n_rows - int(self.learned["rows"]["n_rows"])

    @property
    def newest(self) -> Generation | None:
        """The generation published last."""
        return self.generations[-1] if self.generations else None

    def to_bytes(self) -> bytes:
        """Return the one text that stands for it, its own checksum in front."""
        body = json.dumps(asdict(self) | {"format_version": FORMAT_VERSION}, sort_keys=True)
        return f'{{"checksum": "{disk.digest(body.encode())}",\n"ledger": {body}}}\n'.encode()


def is_ledger(path: str | Path) -> bool:
    """Tell whether a path is a ledger."""
    return (Path(path) / NAME).is_file()


def read_manifest(folder: Path) -> Manifest | None:
    """Return a ledger's manifest, None where there is none.

    Raises
    ------
    StoreError
        If it is damaged or of another format version.
    OSError
        If it cannot be read.
    """
    path = folder / NAME
    try:
        data = disk.read(path)
    except FileNotFoundError:
        return None
    try:
        body = json.loads(data)["ledger"]
        version = body.pop("format_version")
        found = _from_dict(body) if version == FORMAT_VERSION else None
    except (KeyError, TypeError, ValueError, AttributeError, RecursionError):
        raise StoreError(damaged(path)) from None
    if found is None:
        msg = f"{path} has format version {version}, this program reads {FORMAT_VERSION}; count anew with --rebuild"
        raise StoreError(msg)
    # One ledger has one text: a change of any byte shows.
    if found.to_bytes() != data:
        raise StoreError(damaged(path))
    return found


def damaged(path: Path) -> str:
    """Say that a file of a ledger is not what was written."""
    return (
        f"{path} is damaged (its checksum does not fit); put the ledger back from a copy, or count all inputs anew "
        "with --rebuild"
    )


def _from_dict(body: dict[str, Any]) -> Manifest:
    if not _has_form(body, Manifest):
        raise ValueError(NAME)
    found = Manifest(
        **body
        | {
            "held": None if body["held"] is None else Stored(**body["held"]),
            "watched": None if body["watched"] is None else Watched(**body["watched"]),
            "inputs": [Counted(**one) for one in body["inputs"]],
            "parts": {number: Stored(**one) for number, one in body["parts"].items()},
            "generations": [Generation(**one | {"tally": Stored(**one["tally"])}) for one in body["generations"]],
        }
    )
    if not all(_FILE_NAME.fullmatch(stored.file) for stored in found.files):
        raise ValueError(NAME)
    return found


def _has_form(value: Any, kind: Any) -> bool:
    """Tell whether a value read from JSON is what an annotation says, a dataclass being a dict of its fields."""
    if kind is Any:
        return True
    if isinstance(kind, type) and is_dataclass(kind):
        hints = _hints(kind)
        return isinstance(value, dict) and value.keys() == hints.keys() and all(
            _has_form(value[name], hint) for name, hint in hints.items()
        )  # fmt: skip
    if get_origin(kind) is UnionType:
        return any(_has_form(value, one) for one in get_args(kind))
    if get_origin(kind) is list:
        return isinstance(value, list) and all(_has_form(one, get_args(kind)[0]) for one in value)
    if get_origin(kind) is dict:
        return isinstance(value, dict) and all(_has_form(one, get_args(kind)[1]) for one in value.values())
    # A truth value is no number.
    return type(value) is kind or (value is None and kind is NoneType)


@functools.cache
def _hints(kind: Any) -> dict[str, Any]:
    return get_type_hints(kind)
