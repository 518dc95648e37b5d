"""One fit per group of journeys."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass

from journeys.errors import JourneysWarning, LogError
from journeys.models.fit import JourneyFit
from journeys.models.group_stack import group_parts, stacks
from journeys.models.model import JourneyModel, fault_of
from journeys.models.what_if import WhatIf
from journeys.tally.groups import Group
from journeys.tally.tally import Tally


@dataclass(frozen=True, eq=False)
class GroupFit:
    """The fit of one group.

    Attributes
    ----------
    values : tuple
        Values of the columns grouped by.
    tally : Tally
        The part of the tally that the group makes up.
    fit : JourneyFit or None
        None where the group cannot carry one.
    why : str
        Why not.
    """

    values: Group
    tally: Tally
    fit: JourneyFit | None
    why: str = ""


def group_fits(fit: JourneyFit, by: str | Sequence[str]) -> list[GroupFit]:
    """Return a fit for every combination of values in some of the group columns, by the same model.

    Parameters
    ----------
    fit : JourneyFit
        A fit to a tally of journeys grouped by at least those columns.
    by : str or sequence of str
        Names of the columns.

    Returns
    -------
    list of GroupFit
        In the order of the values. What would be a warning of a single fit is only told by its row flags; a
        group without a single outcome is fitted.

    Raises
    ------
    LogError
        If the fit is a known chain or a what-if.
    ValueError
        If a column is not one that journeys are grouped by.
    """
    tally = grouped_tally(fit)
    names = (by,) if isinstance(by, str) else tuple(by)
    model = model_of(fit)
    parts = group_parts(tally, names, model.order)
    tallies = list(tally.split(names).values())
    fits: dict[int, JourneyFit] = {}
    for stack in stacks(tally, parts, model):
        fits |= {g: stack.part(i, tallies[g]) for i, g in enumerate(stack.groups.tolist())}
    return [GroupFit(parts.values[g], tallies[g], fits.get(g), why) for g, why in enumerate(parts.why)]


def model_of(fit: JourneyFit) -> JourneyModel:
    """Return the model that a fit was made by."""
    return JourneyModel(order=fit.nodes.order, open_moves=fit.open_moves)


def grouped_tally(fit: JourneyFit) -> Tally:
    """Return the tally behind a fit whose groups are asked for; a LogError if there is none."""
    if fit.tally is None:
        msg = "by: this chain was given, not fitted to a log, so it has no groups; fit a tally with `by` in its rules"
        raise LogError(msg)
    if isinstance(fit, WhatIf):
        # the groups would be fitted as they were counted, without the change
        msg = "by: a what-if has no groups; wanted the fit it came from, or a what-if of the fit of one group"
        raise LogError(msg)
    return fit.tally


def rest_fit(fit: JourneyFit, by: str | Sequence[str], without: Group) -> GroupFit:
    """Return the fit of all journeys but those of one group.

    Parameters
    ----------
    fit, by
        As in `group_fits`.
    without : tuple
        Values of the group left out.

    Returns
    -------
    GroupFit
    """
    tally = grouped_tally(fit)
    part = tally.rest(by, without)
    fault = fault_of(part)
    if fault is not None:
        return GroupFit(without, part, None, fault.briefly)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", JourneysWarning)
        # of the spread of times no comparison is made
        return GroupFit(without, part, model_of(fit).fit_whatever(part, n_moments=2))
