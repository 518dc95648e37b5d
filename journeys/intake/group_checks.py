"""Checks of the settings that group journeys: columns, cohorts, periods, and the states a journey may open with."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any
from zoneinfo import ZoneInfo

from journeys.checks import instant_text, instant_us, one_of

COHORT, CAME_AFTER, PERIOD = "cohort", "came_after", "period"
BUILT_IN = (COHORT, CAME_AFTER, PERIOD)
COHORTS = ("day", "week", "month")
# Columns that answers have of their own: a group column of that name could not stand beside them.
OF_ANSWERS = (
    "start_state", "state", "next_state", "stage", "outcome", "after", "touchpoint", "rule", "basis", "measure",
    "horizon", "estimate", "std_error", "low", "high", "confidence_level", "flag", "section", "bucket",
)  # fmt: skip


def columns(value: Any, name: str) -> tuple[str, ...]:
    """Return one column or several, each once."""
    items = [value] if isinstance(value, str) else value
    if isinstance(items, Mapping) or not isinstance(items, Iterable):
        raise TypeError(f'{name}: got {value!r}; wanted the name of a column or a list of them, {name}=["…"]')
    names = tuple(items)
    for one in names:
        if not isinstance(one, str) or not one:
            raise TypeError(f'{name}: got {one!r}; wanted the name of a column, such as {name}=["country"]')
    if twice := sorted({one for one in names if names.count(one) > 1}):
        raise ValueError(f"{name}: got {twice[0]!r} twice; wanted each column once: take one out")
    return names


def cohort(value: Any, name: str) -> str | None:
    """Return the length of a cohort, or None."""
    return None if value is None else one_of(value, COHORTS, name)


def timezone(value: Any, name: str) -> str:
    """Return the name of a time zone."""
    wanted = 'wanted the name of a time zone, such as "Europe/Amsterdam"'
    if not isinstance(value, str) or not value:
        raise TypeError(f"{name}: got {value!r}; {wanted}")
    try:
        ZoneInfo(value)
    except (OSError, ValueError, KeyError):
        raise ValueError(f"{name}: got {value!r}, which this machine does not know; {wanted}") from None
    return value


def instants(value: Any, name: str) -> tuple[str, ...]:
    """Return instants, the earliest first, each once."""
    items = value if isinstance(value, Iterable) and not isinstance(value, str | Mapping) else [value]
    return tuple(instant_text(us) for us in sorted({instant_us(item, name) for item in items}))


def completed(settings: dict[str, Any]) -> dict[str, Any]:
    """Return settings with the built-in columns that others ask for in `by`."""
    by = settings["by"]
    asked = [(COHORT, settings["cohort"] is not None), (PERIOD, bool(settings["split_at"]))]
    return settings | {"by": (*by, *(column for column, wanted in asked if wanted and column not in by))}


def group_faults(s: Mapping[str, Any]) -> list[str]:
    """Return what is wrong between the settings that group."""
    faults = [
        f"by: got {name!r}, which is the {role} column; wanted a column that tells groups of customers apart"
        for role in ("customer", "time", "sequence", "ended_before", "value")
        if (name := s[role]) is not None and name in s["by"]
    ]
    faults += [
        f"by: got {name!r}, which is a column of the answers; wanted another name: rename it in the log"
        for name in s["by"]
        if name in OF_ANSWERS
    ]
    for column, setting, example in ((COHORT, "cohort", '"week"'), (PERIOD, "split_at", '["2026-01-01"]')):
        if column in s["by"] and not s[setting]:
            faults.append(
                f"by: got {column!r}, a built-in column, without {setting}; wanted {setting}={example} beside it "
                "(a column of that name in the log has to be renamed)"
            )
    return faults + _split_faults(s)


def state_faults(s: Mapping[str, Any]) -> list[str]:
    """Return what is wrong with the states that open journeys, are stages or touchpoints."""
    outcomes = s["converted"] + s["churned"]
    faults = [
        f"opens: got {name!r}, an outcome; wanted states (an outcome opens a journey only when nothing else does)"
        for name in s["opens"]
        if name in outcomes
    ]
    faults += [
        f"{setting}: got {name!r}, an outcome; wanted the states before it (outcomes follow by themselves)"
        for setting in ("stages", "touchpoints")
        for name in _named(s[setting])
        if name in outcomes
    ]
    states = s["states"] or {}
    for setting in ("opens", "stages", "touchpoints"):
        faults += [
            f"{setting}: got {name!r}, which `states` maps to {states[name]!r}; wanted the name it is mapped to"
            for name in _named(s[setting])
            if name in states and states[name] != name
        ]
    return faults


def _named(states: tuple[str, ...] | str) -> tuple[str, ...]:
    """Return the states that are named, none where a word stands for all."""
    return () if isinstance(states, str) else states


def _split_faults(s: Mapping[str, Any]) -> list[str]:
    splits = [instant_us(split, "split_at") for split in s["split_at"]]
    faults = []
    start, end = s["log_start"], s["as_of"]
    if splits and start is not None and splits[0] <= instant_us(start, "log_start"):
        faults.append(f"split_at: got {s['split_at'][0]}, not inside the log, which starts at {start}")
    if splits and end is not None and splits[-1] > instant_us(end, "as_of"):
        faults.append(f"split_at: got {s['split_at'][-1]}, not inside the log, which ends at {end}")
    return faults
