"""Checks of journey rules: each setting in one canonical form, all faults gathered before any is told."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from typing import Any

from journeys.checks import (
    SECOND_US,
    Duration,
    duration_text,
    duration_us,
    instant_text,
    instant_us,
    one_of,
)
from journeys.intake import group_checks
from journeys.intake.frozen import FrozenMap

RESERVED = ("entry", "lapsed", "open", "unknown")
LIMITS = {"unreadable": 0.01, "late": 0.001}
# In place of a list of touchpoints: every state.
ALL = "all"
# What a journey has touched is kept as the bits of one whole number.
MOST_TOUCHPOINTS = 63
_ROLES = ("customer", "time", "event", "sequence", "ended_before", "value")


class NotGiven:
    """Type of the value that stands for a setting left out where None means something else."""

    def __repr__(self) -> str:
        """Show it in signatures."""
        return "<not given>"


NOT_GIVEN = NotGiven()


def canonical(raw: Mapping[str, Any]) -> tuple[dict[str, Any], list[str]]:
    """Canonical settings, and what is wrong with them.

    Parameters
    ----------
    raw : mapping
        Every setting of `JourneyRules` by name, as the caller gave it.

    Returns
    -------
    settings : dict
        Complete only if there are no problems.
    problems : list of str
        One line each: which setting, what it got, what was wanted, how to mend it.
    """
    problems: list[str] = []
    settings: dict[str, Any] = {}
    for name, check in _CHECKS.items():
        try:
            settings[name] = check(raw[name], name)
        except (TypeError, ValueError) as fault:
            problems.append(str(fault))
    if not problems:
        settings = group_checks.completed(settings)
        problems = [*_role_faults(settings), *_name_faults(settings), *_time_faults(settings)]
        problems += [*group_checks.group_faults(settings), *group_checks.state_faults(settings)]
    return settings, problems


def _column(value: object, name: str) -> str:
    """Name of a column."""
    if not isinstance(value, str) or not value:
        raise TypeError(f'{name}: got {value!r}; wanted the name of a column, such as {name}="{name}"')
    return _utf8(value, name)


def _event(value: object, name: str) -> str:
    """Name of an event or state; whole numbers are taken as the text a log's numbers are read as."""
    if isinstance(value, int) and not isinstance(value, bool):
        value = str(value)
    if not isinstance(value, str) or not value:
        raise TypeError(f"{name}: got {value!r}; wanted the name of an event or state, as text")
    return _utf8(value, name)


def _utf8(value: str, name: str) -> str:
    """Text that can be written to a file."""
    try:
        value.encode()
    except UnicodeEncodeError:
        raise ValueError(f"{name}: got {value!r}; wanted text that can be written as UTF-8") from None
    return value


def _events(value: object, name: str) -> tuple[str, ...]:
    """One event or several, each once."""
    if isinstance(value, str | int):
        value = (value,)
    if isinstance(value, Mapping) or not isinstance(value, Iterable):
        raise TypeError(f'{name}: got {value!r}; wanted the name of an event or a list of them, {name}=["…"]')
    names = tuple(_event(item, name) for item in value)
    if twice := sorted({item for item in names if names.count(item) > 1}):
        raise ValueError(f"{name}: got {twice[0]!r} twice; wanted each event once: take one out")
    return names


def _touchpoints(value: object, name: str) -> tuple[str, ...] | str:
    """States by name, or all of them."""
    if value == ALL:
        return ALL
    names = _events(value, name)
    if len(names) > MOST_TOUCHPOINTS:
        raise ValueError(f"{name}: got {len(names)} states; wanted at most {MOST_TOUCHPOINTS}: name fewer")
    return names


def _silence(value: object, name: str) -> str | None:
    """Duration or None, which must be said."""
    if value is NOT_GIVEN:
        raise ValueError(
            'silence: not given; wanted the time after which a quiet customer counts as lapsed: '
            'silence="30d", or silence=None ("none" in TOML) if nobody ever lapses'
        )
    if value is None or (isinstance(value, str) and value.strip().lower() == "none"):
        return None
    silence = _duration(value, name)
    if duration_us(silence, name) < SECOND_US:
        raise ValueError(f"silence: got {value!r}; wanted at least one second")
    return silence


def _duration(value: Any, name: str) -> str:
    """Duration in its shortest text."""
    return duration_text(duration_us(value, name))


def _durations(value: object, name: str) -> tuple[str, ...]:
    """Durations, shortest first, each once."""
    items: Iterable[Duration] = (value,) if isinstance(value, str) else value  # type: ignore[assignment]
    if isinstance(value, Mapping) or not isinstance(items, Iterable):
        raise TypeError(f'{name}: got {value!r}; wanted a list of durations, such as {name}=["7d", "30d"]')
    return tuple(duration_text(us) for us in sorted({duration_us(item, name) for item in items}))


def _instant(value: Any, name: str) -> str:
    """Instant in its shortest text."""
    return instant_text(instant_us(value, name))


def _states(value: object, name: str) -> FrozenMap[str | None] | None:
    """Event to state; None, or false as in TOML, drops the event."""
    if value is None:
        return None
    if not isinstance(value, Mapping):
        raise TypeError(f'{name}: got {value!r}; wanted a mapping from event to state, {{"event": "state"}}')
    pairs = [
        (_event(k, name), None if v is None or v is False else _event(v, f"{name}[{k!r}]"))
        for k, v in value.items()
    ]
    return FrozenMap(pairs)


def _exclude(value: object, name: str) -> FrozenMap[tuple[str | int | bool, ...]]:
    """Column to the values that leave a row out."""
    if not isinstance(value, Mapping):
        raise TypeError(f'{name}: got {value!r}; wanted a mapping, {{"column": ["value", …]}}')
    pairs = []
    for column, given in value.items():
        items = [given] if isinstance(given, str | int) else given
        if isinstance(items, Mapping) or not isinstance(items, Iterable):
            raise TypeError(f"{name}[{column!r}]: got {given!r}; wanted a value or a list of values")
        items = list(items)
        if not items or not all(isinstance(item, str | int) for item in items):
            raise TypeError(f"{name}[{column!r}]: got {given!r}; wanted texts, whole numbers or true/false")
        values = {(type(item).__name__, item) for item in items}
        if len({kind for kind, _ in values}) > 1:
            raise TypeError(f"{name}[{column!r}]: got {given!r}; wanted values all of one kind")
        clean = tuple(_utf8(i, f"{name}[{column!r}]") if isinstance(i, str) else i for _, i in sorted(values))
        pairs.append((_column(column, name), clean))
    return FrozenMap(pairs)


def _limits(value: object, name: str) -> FrozenMap[float]:
    """Shares of rows above which nothing is published."""
    if not isinstance(value, Mapping):
        raise TypeError(f'{name}: got {value!r}; wanted a mapping, {{"unreadable": 0.01}}')
    limits = dict(LIMITS)
    for key, share in value.items():
        one_of(key, list(LIMITS), name)
        if isinstance(share, bool) or not isinstance(share, int | float) or not 0 <= share <= 1:
            raise ValueError(f"{name}[{key!r}]: got {share!r}; wanted a share of rows between 0 and 1")
        limits[key] = float(share)
    return FrozenMap(limits)


def _flag(value: object, name: str) -> bool:
    """Yes or no."""
    if not isinstance(value, bool):
        raise TypeError(f"{name}: got {value!r}; wanted True or False")
    return value


def _choice(*choices: str) -> Callable[[Any, str], str]:
    """Check for one of a few words."""
    return lambda value, name: one_of(value, choices, name)


def _maybe(check: Callable[[Any, str], str]) -> Callable[[Any, str], str | None]:
    """Check that also takes None."""
    return lambda value, name: None if value is None else check(value, name)


_CHECKS: dict[str, Callable[[Any, str], Any]] = {
    "customer": _column,
    "time": _column,
    "event": _column,
    "converted": _events,
    "churned": _events,
    "silence": _silence,
    "after_outcome": _choice("reopen", "stop"),
    "same_outcome_within": _duration,
    "states": _states,
    "unmapped": _event,
    "repeats": _choice("keep", "merge"),
    "sequence": _maybe(_column),
    "duplicates": _choice("keep", "drop"),
    "exclude": _exclude,
    "as_of": _maybe(_instant),
    "log_start": _maybe(_instant),
    "complete_history": _flag,
    "ended_before": _maybe(_column),
    "horizons": _durations,
    "opens": _events,
    "by": group_checks.columns,
    "cohort": group_checks.cohort,
    "timezone": group_checks.timezone,
    "split_at": group_checks.instants,
    "stages": _events,
    "touchpoints": _touchpoints,
    "value": _maybe(_column),
    "limits": _limits,
}


def _role_faults(s: Mapping[str, Any]) -> list[str]:
    """One column in two roles."""
    seen: dict[str, str] = {}
    faults = []
    for role in _ROLES:
        column = s[role]
        if column is not None and column in seen:
            faults.append(f"{role}: got column {column!r}, which is {seen[column]} already; wanted another")
        elif column is not None:
            seen[column] = role
    return faults


def _name_faults(s: Mapping[str, Any]) -> list[str]:
    """Names that contradict each other or that the package keeps for itself."""
    states: Mapping[str, str | None] = s["states"] or {}
    outcomes = s["converted"] + s["churned"]
    reserved = ", ".join(RESERVED)
    faults = [
        f"churned: got {name!r}, which is in converted too; wanted it in one of them"
        for name in s["churned"]
        if name in s["converted"]
    ]
    faults += [
        f"{role}: got {name!r}, a name with a meaning of its own ({reserved}); wanted another: "
        f'states = {{"{name}" = "{name} (event)"}} and that name here'
        for role in ("converted", "churned")
        for name in s[role]
        if name in RESERVED
    ]
    faults += [
        f"states: got {event!r} → {state!r}, a name with a meaning of its own ({reserved}); wanted another"
        for event, state in states.items()
        if state in RESERVED
    ]
    faults += [
        f"states: got {name!r} → {states[name]!r}, but {name!r} is an outcome, and outcomes are named after "
        f"mapping; take {name!r} out of states, or name what it is mapped to as the outcome"
        for name in outcomes
        if name in states and states[name] != name
    ]
    return faults + _unmapped_faults(s, reserved)


def _unmapped_faults(s: Mapping[str, Any], reserved: str) -> list[str]:
    """Where events without an entry in `states` are to go."""
    target = s["unmapped"]
    if target == "keep":
        return []
    if s["states"] is None:
        return [f'unmapped: got {target!r} without states; wanted states={{"event": "state"}} too, or "keep"']
    if target in s["converted"] + s["churned"]:
        return [f"unmapped: got {target!r}, an outcome: any unknown event would end a journey; name a state"]
    if target in RESERVED:
        return [f"unmapped: got {target!r}, a name with a meaning of its own ({reserved}); wanted another"]
    return []


def _time_faults(s: Mapping[str, Any]) -> list[str]:
    """Dates in the wrong order, and stories that stop where nobody can know that they had not before."""
    faults = []
    if s["as_of"] is not None and s["log_start"] is not None:
        start, end = instant_us(s["log_start"], "log_start"), instant_us(s["as_of"], "as_of")
        if start >= end:
            faults.append(f"log_start: got {s['log_start']}, not before as_of, {s['as_of']}; make it earlier")
    if s["after_outcome"] == "stop" and not s["complete_history"] and s["ended_before"] is None:
        faults.append(
            'after_outcome: got "stop", but a log that starts mid-history cannot know who had already ended; '
            "wanted complete_history=True or ended_before=<column> beside it"
        )
    return faults
