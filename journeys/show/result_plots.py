"""One picture for every answer, named as the question is; what most of them need is `intervals`."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from journeys.markup import short_name
from journeys.questions.comeback import ComebackResult
from journeys.questions.first_passage import FirstPassageResult
from journeys.questions.moves import MovesResult
from journeys.questions.outcomes import OutcomesResult
from journeys.questions.return_time import ReturnTimeResult
from journeys.questions.stages import StagesResult
from journeys.questions.time_to_convert import TimeToConvertResult
from journeys.results import printable
from journeys.show.dots_plot import answer_to, intervals, some_rows

if TYPE_CHECKING:
    from matplotlib.axes import Axes


def outcomes(result: OutcomesResult, start: str = "entry", ax: Axes | None = None, **kwargs: Any) -> Axes:
    """Draw how likely each outcome is from one start.

    Parameters
    ----------
    result : OutcomesResult
        From `journeys.outcomes`.
    start : str
        "entry" or a state.
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
        If the answer has no such start.
    """
    return intervals(answer_to(result, OutcomesResult), None, ax, start=start, **kwargs)


def first_passage(result: FirstPassageResult, measure: str = "median", ax: Axes | None = None, **kwargs: Any) -> Axes:
    """Draw how likely, or how soon, the target is reached, from every start.

    Parameters
    ----------
    result : FirstPassageResult
        From `journeys.first_passage`.
    measure : str
        "probability", "median", "q90", "mean", "sd" or "mean_unconditional".
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
    return intervals(answer_to(result, FirstPassageResult), measure, ax, **kwargs)


def return_time(result: ReturnTimeResult, measure: str = "probability", ax: Axes | None = None, **kwargs: Any) -> Axes:
    """Draw how likely, or how soon, journeys come back to a state.

    Parameters
    ----------
    result : ReturnTimeResult
        From `journeys.return_time`.
    measure : str
        As in `first_passage`.
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
    return intervals(answer_to(result, ReturnTimeResult), measure, ax, **kwargs)


def time_to_convert(
    result: TimeToConvertResult, measure: str = "converted", ax: Axes | None = None, **kwargs: Any
) -> Axes:
    """Draw what share converts by when, or how long it takes, by the log and by the model.

    Parameters
    ----------
    result : TimeToConvertResult
        From `journeys.time_to_convert`.
    measure : str
        "converted", "median_days", "q90_days", "days", or the same of steps.
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
    return intervals(answer_to(result, TimeToConvertResult), measure, ax, **kwargs)


def comeback(result: ComebackResult, measure: str = "returned", ax: Axes | None = None, **kwargs: Any) -> Axes:
    """Draw what share came back after a journey had ended, by time away.

    Parameters
    ----------
    result : ComebackResult
        From `journeys.comeback`.
    measure : str
        "returned" or "median_days".
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
    return intervals(answer_to(result, ComebackResult), measure, ax, **kwargs)


def stages(
    result: StagesResult,
    measure: str = "of_stage_before",
    basis: str = "log",
    ax: Axes | None = None,
    **kwargs: Any,
) -> Axes:
    """Draw how far journeys get through the stages.

    Parameters
    ----------
    result : StagesResult
        From `journeys.stages`.
    measure : str
        "of_stage_before", "reached", "median_days" or "went".
    basis : str
        "log" or "model".
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
        If the answer has no such measure or basis.
    """
    return intervals(answer_to(result, StagesResult), measure, ax, basis=basis, **kwargs)


def moves(result: MovesResult, state: str, ax: Axes | None = None, **kwargs: Any) -> Axes:
    """Draw where journeys go from one state, moves never seen left out.

    Parameters
    ----------
    result : MovesResult
        From `fit.moves()`.
    state : str
        "entry" or a state.
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
        If the answer has no such state.
    """
    shown = answer_to(result, MovesResult)
    known = list(dict.fromkeys(shown.keys["state"]))
    if state not in known:
        msg = f"state={state!r} is not in this answer; wanted one of {', '.join(map(repr, known[:12]))}"
        raise ValueError(msg)
    mine = (shown.keys["state"] == state).to_numpy() & (shown.estimates.value > 0)
    ax = intervals(some_rows(shown, mine), None, ax, **kwargs)
    ax.set_yticks(ax.get_yticks(), [printable(short_name(str(name))) for name in shown.keys["next_state"][mine]])
    ax.set_xlabel(f"moves out of {printable(short_name(state))} (%), with {100 * result.confidence_level:g} % interval")
    return ax
