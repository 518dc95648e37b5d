"""Pictures of touchpoints, single moves, differences and money, one for every answer."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.questions.compare import CompareResult
from journeys.questions.credit import CreditResult
from journeys.questions.removal import RemovalResult
from journeys.questions.sensitivity import SensitivityResult
from journeys.questions.worth import WorthResult
from journeys.show.dots_plot import answer_to, intervals, some_rows

if TYPE_CHECKING:
    from matplotlib.axes import Axes


def removal(result: RemovalResult, measure: str | None = None, ax: Axes | None = None, **kwargs: Any) -> Axes:
    """Draw what would be lost without each touchpoint.

    Parameters
    ----------
    result : RemovalResult
        From `journeys.removal`.
    measure : str, optional
        "steps" or "days", where arrivals pass on; without meaning otherwise.
    ax : matplotlib Axes, optional
        Where to draw; default: a new figure.
    **kwargs
        As in `intervals`.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    TypeError
        If the result answers another question.
    ValueError
        If the answer has no such measure.
    """
    return intervals(answer_to(result, RemovalResult), measure, ax, **kwargs)


def credit(result: CreditResult, ax: Axes | None = None, **kwargs: Any) -> Axes:
    """Draw what each touchpoint may be credited with.

    Parameters
    ----------
    result : CreditResult
        From `journeys.credit`.
    ax : matplotlib Axes, optional
        Where to draw; default: a new figure.
    **kwargs
        As in `intervals`.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    TypeError
        If the result answers another question.
    """
    return intervals(answer_to(result, CreditResult), None, ax, **kwargs)


def sensitivity(
    result: SensitivityResult, measure: str = "reached", most: int = 15, ax: Axes | None = None, **kwargs: Any
) -> Axes:
    """Draw what one point more of a move would do, the largest effects on conversion.

    Parameters
    ----------
    result : SensitivityResult
        From `journeys.sensitivity`.
    measure : str
        "reached", "steps" or "days".
    most : int
        So many moves at most.
    ax : matplotlib Axes, optional
        Where to draw; default: a new figure.
    **kwargs
        As in `intervals`.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    TypeError
        If the result answers another question.
    ValueError
        If the answer has no such measure.
    """
    shown = answer_to(result, SensitivityResult)
    rank = (shown.keys["measure"] == measure).to_numpy()
    return intervals(some_rows(shown, rank & (np.cumsum(rank) <= most)) if rank.any() else shown, measure, ax, **kwargs)


def compare(result: CompareResult, measure: str = "reached", ax: Axes | None = None, **kwargs: Any) -> Axes:
    """Draw differences with a line at zero.

    Parameters
    ----------
    result : CompareResult
        From `journeys.compare`.
    measure : str
        "reached", "steps", "days", or "reached within 30d" and the like.
    ax : matplotlib Axes, optional
        Where to draw; default: a new figure.
    **kwargs
        As in `intervals`.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    TypeError
        If the result answers another question.
    ValueError
        If the answer has no such measure.
    """
    return intervals(answer_to(result, CompareResult), measure, ax, **kwargs)


def worth(result: WorthResult, measure: str = "value_per_journey", ax: Axes | None = None, **kwargs: Any) -> Axes:
    """Draw what journeys are worth, in the unit of the column of values.

    Parameters
    ----------
    result : WorthResult
        From `journeys.worth`.
    measure : str
        "value_per_journey", "value_per_conversion", "total_so_far" or "largest_customer_share".
    ax : matplotlib Axes, optional
        Where to draw; default: a new figure.
    **kwargs
        As in `intervals`.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    TypeError
        If the result answers another question.
    ValueError
        If the answer has no such measure.
    """
    return intervals(answer_to(result, WorthResult), measure, ax, **kwargs)
