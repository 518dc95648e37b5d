"""Pictures of answers: cumulative curves with bands, dots with intervals on one axis, the matrix as a table.

One function for every answer, named as the question is, and `intervals` for any of them. Each takes the answer and, if
wanted, the Axes to draw on, and returns the Axes. They need matplotlib (`pip install "journeys[report]"`), which is
loaded when the first picture is drawn.

Examples
--------
>>> import matplotlib
>>> matplotlib.use("Agg")
>>> import pandas as pd
>>> from journeys.models.fit import JourneyFit
>>> from journeys.questions.outcomes import outcomes
>>> chain = pd.DataFrame([[0.6, 0.4]], index=["basket"], columns=["joined", "declined"])
>>> intervals(outcomes(JourneyFit.from_matrix(chain))).get_xlabel()
'probability (%), with 95 % interval'
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from journeys.questions.curve_result import PassageCurve
from journeys.questions.group_curves import GroupCurves
from journeys.results import printable
from journeys.show.axes import BLUE, GREY, INK
from journeys.show.axes import axes as _axes
from journeys.show.curves import draw_curve, draw_groups, draw_observed, last_of, mark_median
from journeys.show.dots_plot import intervals
from journeys.show.matrix_plot import matrix
from journeys.show.result_plots import (
    comeback,
    first_passage,
    moves,
    outcomes,
    return_time,
    stages,
    time_to_convert,
)
from journeys.show.touch_plots import compare, credit, removal, sensitivity, worth

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = [
    "comeback", "compare", "credit", "first_passage", "intervals", "matrix", "moves", "outcomes", "passage_curve",
    "removal", "return_time", "sensitivity", "stages", "time_to_convert", "worth",
]  # fmt: skip


def passage_curve(
    curve: PassageCurve | GroupCurves, ax: Axes | None = None, log: bool | None = None, **kwargs: Any
) -> Axes:
    """Draw how the share that has reached a target grows, with its band and the median on the axis.

    Parameters
    ----------
    curve : PassageCurve or GroupCurves
        From `journeys.passage_curve`. By group: a curve for each, up to six, without a mark at the median; a group
        without one is named in the legend.
    ax : matplotlib Axes, optional
        Where to draw; default: a new figure.
    log : bool, optional
        Draw the log's own curve too, as a thin stepped line. Default: where there is one
        (`curve.has_observed`), not by group.
    **kwargs
        For the line of the curve (`Axes.plot`).

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    ValueError
        If `log=True` where the log has no curve of its own, or there are more than six groups.

    Examples
    --------
    >>> import matplotlib
    >>> matplotlib.use("Agg")
    >>> import pandas as pd
    >>> from journeys.models.fit import JourneyFit
    >>> from journeys.questions.passage_curve import passage_curve as ask
    >>> chain = pd.DataFrame([[0.5, 0.5]], index=["basket"], columns=["basket", "joined"])
    >>> ax = passage_curve(ask(JourneyFit.from_matrix(chain), "joined", clock="steps"))
    >>> ax.get_xlabel()
    'steps from entry'
    """
    ax = _axes(ax, (6.4, 3.8))
    if isinstance(curve, GroupCurves):
        one, last = curve.any_curve, draw_groups(ax, curve, bool(log), kwargs)
    else:
        one, last = curve, last_of(curve)
        every = f"{100 * curve.confidence_level:g} % interval at each {'step' if curve.clock == 'steps' else 'time'}"
        draw_curve(ax, curve, last, {"color": BLUE, "label": "by the chain"} | kwargs, every)
        if log if log is not None else curve.has_observed:
            draw_observed(ax, curve, last, {"color": GREY, "label": "by the log alone"})
        mark_median(ax, curve)
    whom = "of those who reach it" if one.given else "of all who start"
    unit = "" if one.clock == "steps" else f" ({one.unit})"
    ax.set_xlabel(f"{'steps' if one.clock == 'steps' else 'time'} from {printable(one.start)}{unit}")
    ax.set_ylabel(f"{printable(_listed(one.to))}, % {whom}")
    ax.set_xlim(0, last if last > 0 else None)
    ax.set_ylim(0, None)
    ax.legend(frameon=False, loc="lower right", fontsize="small", labelcolor=INK)
    return ax


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " or " + names[-1]
