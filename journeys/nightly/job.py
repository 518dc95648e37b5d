"""What a nightly job is to do, from its TOML file: every key checked, everything that is wrong told at once."""

from __future__ import annotations

import difflib
import os
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from journeys.checks import duration_us
from journeys.errors import RulesError
from journeys.intake.rules import JourneyRules
from journeys.intake.settings import read_toml
from journeys.questions.summarise import MIN_CUSTOMERS, few_limit

# The keys of a job file, and of its table of alarms; the first four must be given.
KEYS = ("log", "rules", "ledger", "out", "lateness", "id_key", "identity", "horizons", "min_customers", "alarms")
ALARM_KEYS = ("within", "at_least", "weeks")
DEFAULTS: dict[str, Any] = {"lateness": "none", "id_key": "required", "min_customers": MIN_CUSTOMERS}
ALARM_DEFAULTS: dict[str, Any] = {"at_least": "1 point", "weeks": 8}
REQUIRED, NONE = "required", "none"
_NEEDED = 4
_FEWEST_WEEKS, _MOST_WEEKS = 2, 104


@dataclass(frozen=True)
class Alarms:
    """What counts as a change.

    Attributes
    ----------
    within_us : int
        Time within which journeys of a week are to convert, and stays to be left, to be compared.
    at_least : float
        Smallest difference of two shares that trips an alarm.
    weeks : int
        For how many weeks the span before a week reaches back.
    """

    within_us: int
    at_least: float
    weeks: int


@dataclass(frozen=True)
class Job:
    """A nightly job.

    Attributes
    ----------
    log, ledger, out : Path
        Folders of the inputs (or a TOML file with a table `[database]`), of the ledger, and of what is published.
    rules : JourneyRules
        How the log is read.
    lateness_us : int
        For how long the newest rows wait for late ones.
    id_key : {"required", "none"}
        Whether ids have to go through a key.
    identity : Path or None
        Table of people first seen under another id.
    horizons : tuple of str
        For the summary.
    min_customers : int
        What is published tells nothing of fewer people; 0 leaves nothing out.
    alarms : Alarms or None
        None: changes are not looked for.
    """

    log: Path
    rules: JourneyRules
    ledger: Path
    out: Path
    lateness_us: int = 0
    id_key: str = REQUIRED
    identity: Path | None = None
    horizons: tuple[str, ...] = ()
    min_customers: int = MIN_CUSTOMERS
    alarms: Alarms | None = None

    @classmethod
    def from_toml(cls, path: str | Path) -> Job:
        """Return the job that a TOML file describes; its paths start from the file's own folder.

        Parameters
        ----------
        path : str or Path

        Returns
        -------
        Job

        Raises
        ------
        RulesError
            If the file cannot be read, or anything it says is wrong.
        """
        file = Path(path)
        settings = read_toml(file, "job file")
        problems = _unknown(settings, KEYS, "")
        problems += [f'{key}: not given; wanted a path, such as {key} = "{key}"' for key in KEYS[:_NEEDED]
                     if key not in settings]  # fmt: skip
        read = _Reader({**DEFAULTS, **settings}, problems)
        paths = {key: file.parent / read(key, _text) for key in KEYS[:_NEEDED] if key in settings}
        lateness, id_key = read("lateness", _lateness), read("id_key", _id_key)
        horizons, alarms = read("horizons", _horizons), read("alarms", _alarms)
        least = read("min_customers", few_limit)
        identity = file.parent / read("identity", _text) if "identity" in settings else None
        problems += _place_faults(paths)
        if problems:
            raise RulesError("\n".join(f"job file {file}: {problem}" for problem in problems))
        rules = JourneyRules.from_toml(paths.pop("rules"))
        return cls(
            **paths, rules=rules, lateness_us=lateness, id_key=id_key, identity=identity, horizons=horizons,
            min_customers=least, alarms=alarms,
        )


class _Reader:
    """Reads settings one by one and notes what is wrong with each."""

    def __init__(self, settings: Mapping[str, Any], problems: list[str]) -> None:
        self._settings, self._problems = settings, problems

    def __call__(self, key: str, check: Callable[[Any, str], Any]) -> Any:
        """Return a setting as checked, or as good as empty where it is wrong."""
        try:
            return check(self._settings.get(key), key)
        except (TypeError, ValueError) as fault:
            self._problems.append(str(fault))
            return ""


def _unknown(settings: Mapping[str, Any], known: tuple[str, ...], where: str) -> list[str]:
    """Say of each key that there is no such setting what comes closest."""
    problems = []
    for key in settings:
        if key not in known:
            close = difflib.get_close_matches(key, known, n=1)
            hint = f"did you mean {close[0]!r}?" if close else f"there are {', '.join(known)}"
            problems.append(f"{key!r} is no setting of {where or 'a job'}; {hint}")
    return problems


def _text(value: Any, key: str) -> str:
    if not isinstance(value, str) or not value or "\0" in value:
        msg = f'{key}: got {value!r}; wanted a path, such as {key} = "{key}"'
        raise ValueError(msg)
    return value


def _lateness(value: Any, key: str) -> int:
    return 0 if value == NONE else duration_us(value, key)


def _id_key(value: Any, key: str) -> str:
    if value not in (REQUIRED, NONE):
        msg = f'{key}: got {value!r}; wanted "{REQUIRED}", or "{NONE}" where ids may lie in the ledger unprotected'
        raise ValueError(msg)
    return str(value)


def _horizons(value: Any, key: str) -> tuple[str, ...]:
    if value is None:
        return ()
    if not isinstance(value, list):
        msg = f'{key}: got {value!r}; wanted a list of durations, such as {key} = ["14d", "60d"]'
        raise TypeError(msg)
    for one in value:
        duration_us(one, key)
    return tuple(value)


def _alarms(value: Any, key: str) -> Alarms | None:
    if value is None:
        return None
    if not isinstance(value, Mapping):
        msg = f'{key}: got {value!r}; wanted a table: [alarms] and below it within = "14d"'
        raise TypeError(msg)
    problems = _unknown(value, ALARM_KEYS, "the alarms")
    settings = {**ALARM_DEFAULTS, **value}
    if "within" not in settings:
        problems.append('alarms.within: not given; wanted a duration, such as within = "14d"')
    read = _Reader(settings, problems)
    within = read("within", lambda value, _: duration_us(value, "alarms.within")) if "within" in settings else 0
    found = Alarms(within, read("at_least", _points), read("weeks", _weeks))
    if problems:
        raise ValueError("\n".join(problems))
    return found


def _points(value: Any, _: str) -> float:
    found = re.fullmatch(r"(\d+(?:\.\d+)?) points?", value) if isinstance(value, str) else None
    if found is None or not 0 < float(found[1]) < 100:
        msg = f'alarms.at_least: got {value!r}; wanted a difference of two shares in points, such as "1 point"'
        raise ValueError(msg)
    return float(found[1]) / 100


def _weeks(value: Any, _: str) -> int:
    if isinstance(value, bool) or not isinstance(value, int) or not _FEWEST_WEEKS <= value <= _MOST_WEEKS:
        msg = f"alarms.weeks: got {value!r}; wanted a whole number of weeks from {_FEWEST_WEEKS} to {_MOST_WEEKS}"
        raise ValueError(msg)
    return value


def _place_faults(paths: Mapping[str, Path]) -> list[str]:
    """Say where a folder would be taken for another, links followed, or something else stands in its place.

    What is published must not be read as a log, nor a ledger be cleared away with what was published.
    """
    faults = [fault for key in ("ledger", "out") if key in paths and (fault := _in_the_way(key, paths[key]))]
    folders = {key: Path(os.path.realpath(paths[key])) for key in ("log", "ledger", "out") if key in paths}
    for inner, outer in (("ledger", "log"), ("out", "log"), ("out", "ledger"), ("ledger", "out"), ("log", "ledger")):
        if inner in folders and outer in folders and folders[inner].is_relative_to(folders[outer]):
            faults.append(f"{inner}: {paths[inner]} lies in the folder of {outer}; wanted folders of their own")
    return faults


def _in_the_way(key: str, path: Path) -> str | None:
    """Say what is there in the place of a folder, a link to nothing included."""
    try:
        if path.is_dir() or not os.path.lexists(path):
            return None
    except OSError as fault:
        return f"{key}: {str(path)[:200]}: {fault.strerror}"
    return f"{key}: {path} is no folder; wanted a folder, or a path where there is nothing yet"
