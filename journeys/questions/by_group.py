"""A question asked of every group of journeys, the answers in one table."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import fields, replace
from typing import Any, TypeVar

import numpy as np

from journeys.errors import LogError
from journeys.models.fit import JourneyFit
from journeys.models.group_fits import GroupFit, group_fits
from journeys.results import KNOWN, Estimates, Result

R = TypeVar("R", bound=Result)

# Fields of a result that hold one column per row of its frame.
_BY_ROW = ("resamples",)


def by_group(fit: JourneyFit, by: str | Sequence[str], ask: Callable[[JourneyFit], R]) -> R:
    """Return the answers of all groups, one under another, the group columns first.

    Parameters
    ----------
    fit : JourneyFit
        A fit to a tally of journeys grouped by at least those columns.
    by : str or sequence of str
        Names of the columns.
    ask : callable
        From a group's fit to its answer.

    Returns
    -------
    Result
        Of the kind that `ask` gives. A group that cannot carry a fit is one row without a number, whose flag
        says why.

    Raises
    ------
    LogError
        If no group can carry a fit, or the fit is a known chain.
    ValueError
        If a column is not one that journeys are grouped by.
    """
    names = [by] if isinstance(by, str) else list(by)
    found = group_fits(fit, names)
    answers = [None if one.fit is None else ask(one.fit) for one in found]
    first = next((answer for answer in answers if answer is not None), None)
    if first is None:
        reasons = "; ".join(dict.fromkeys(one.why for one in found))
        msg = f"by: no group of {', '.join(names)} can carry a fit ({reasons}); wanted larger groups or a longer log"
        raise LogError(msg)
    whole = [_blank(first, one) if answer is None else answer for one, answer in zip(found, answers, strict=True)]
    return _one_under_another(first, names, found, whole)


def _one_under_another(first: R, names: list[str], found: list[GroupFit], answers: list[R]) -> R:
    import pandas as pd

    parts = []
    for one, answer in zip(found, answers, strict=True):
        values = dict(zip(names, one.values, strict=True))
        group = pd.DataFrame({name: [value] * len(answer.keys) for name, value in values.items()})
        parts.append(pd.concat([group, answer.keys.reset_index(drop=True)], axis=1))
    extra: dict[str, Any] = {}
    for name in (f.name for f in fields(first) if f.name in _BY_ROW):
        held = [getattr(answer, name) for answer in answers]
        extra[name] = None if any(one is None for one in held) else np.concatenate(held, axis=1)
    return replace(
        first,
        keys=pd.concat(parts, ignore_index=True),
        estimates=Estimates.joined([answer.estimates for answer in answers]),
        flag=np.concatenate([answer.flag for answer in answers]),
        counts={name: np.concatenate([answer.counts[name] for answer in answers]) for name in first.counts},
        **extra,
    )


def _blank(like: R, group: GroupFit) -> R:
    """Return the answer of a group that cannot carry a fit: one row without a number."""
    nothing = np.full(1, np.nan)
    keys = like.keys.iloc[:1].copy()
    keys.loc[:, :] = ""
    extra: dict[str, Any] = {
        f.name: np.full((len(held), 1), np.nan)
        for f in fields(like)
        if f.name in _BY_ROW and (held := getattr(like, f.name)) is not None
    }
    return replace(
        like,
        keys=keys,
        estimates=Estimates(nothing, nothing, nothing, np.array([KNOWN], dtype=object), nothing, np.zeros(1, bool)),
        flag=np.array([group.why], dtype=object),
        counts={name: np.zeros(1, values.dtype) for name, values in like.counts.items()},
        **extra,
    )
