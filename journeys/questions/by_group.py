"""A question asked of every group of journeys, the answers in one table."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import fields, replace
from typing import Any, TypeVar

import numpy as np

from journeys.errors import LogError
from journeys.kernels.arrays import IntArray
from journeys.models.fit import JourneyFit, NotInChainError
from journeys.models.group_fits import group_fits, grouped_tally, model_of
from journeys.models.group_stack import Stack, group_parts, stacks
from journeys.results import KNOWN, Estimates, Result
from journeys.tally.groups import Group

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
        Of the kind that `ask` gives. A group that cannot carry a fit, or never sees a state that is asked about,
        is one row without a number, whose flag says why.

    Raises
    ------
    LogError
        If no group can carry a fit, or the fit is a known chain.
    ValueError
        If a column is not one that journeys are grouped by.
    """
    names = [by] if isinstance(by, str) else list(by)
    found = group_fits(fit, names)
    why, blocks = [one.why for one in found], []
    for g, one in enumerate(found):
        if one.fit is not None:
            try:
                answer = ask(one.fit)
            except NotInChainError as error:
                why[g] = error.briefly
            else:
                blocks.append((answer, np.full(len(answer.keys), g)))
    return _one_under_another(names, [one.values for one in found], why, blocks)


def by_stack(fit: JourneyFit, by: str | Sequence[str], ask: Callable[[Stack], tuple[R, IntArray]]) -> R:
    """Do the same for a question that can be asked of many groups in one go.

    Parameters
    ----------
    fit, by
        As in `by_group`.
    ask : callable
        From the fits of several groups to their answers, and which group of the stack each row is about. It is
        about probabilities: what the buckets pull at times is not there.
    """
    names = [by] if isinstance(by, str) else list(by)
    tally = grouped_tally(fit)
    model = model_of(fit)
    parts = group_parts(tally, names, model.order)
    blocks = []
    for stack in stacks(tally, parts, model, n_moments=1):
        answer, group = ask(stack)
        blocks.append((answer, stack.groups[group]))
    return _one_under_another(names, parts.values, parts.why, blocks)


def _one_under_another(
    names: list[str], values: Sequence[Group], why: Sequence[str], blocks: list[tuple[R, IntArray]]
) -> R:
    """Return answers as one, group by group; `blocks` say to which group each of their rows belongs."""
    import pandas as pd

    if not blocks:
        msg = (
            f"by: no group of {', '.join(names)} can carry a fit ({'; '.join(dict.fromkeys(why))}); wanted larger "
            "groups or a longer log"
        )
        raise LogError(msg)
    first = blocks[0][0]
    blocks = blocks + [(_blank(first, text), np.full(1, g)) for g, text in enumerate(why) if text]
    answers, group = [answer for answer, _ in blocks], np.concatenate([of for _, of in blocks])
    order = np.argsort(group, kind="stable")
    columns = pd.DataFrame(list(values), columns=names).iloc[group].reset_index(drop=True)
    keys = pd.concat([columns, pd.concat([answer.keys for answer in answers], ignore_index=True)], axis=1)
    extra: dict[str, Any] = {}
    for name in (f.name for f in fields(first) if f.name in _BY_ROW):
        held = [getattr(answer, name) for answer in answers]
        extra[name] = None if any(one is None for one in held) else np.concatenate(held, axis=1)[:, order]
    return replace(
        first,
        keys=keys.iloc[order].reset_index(drop=True),
        estimates=Estimates.joined([answer.estimates for answer in answers]).take(order),
        flag=np.concatenate([answer.flag for answer in answers])[order],
        counts={name: np.concatenate([answer.counts[name] for answer in answers])[order] for name in first.counts},
        **extra,
    )


def _blank(like: R, why: str) -> R:
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
        flag=np.array([why], dtype=object),
        counts={name: np.zeros(1, values.dtype) for name, values in like.counts.items()},
        **extra,
    )
