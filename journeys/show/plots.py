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

import numpy as np

from journeys.questions.curve_result import PassageCurve
from journeys.results import printable
from journeys.show.axes import BLUE, GREY, INK, ORANGE
from journeys.show.axes import axes as _axes
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


def passage_curve(curve: PassageCurve, ax: Axes | None = None, log: bool | None = None, **kwargs: Any) -> Axes:
    """Draw how the share that has reached a target grows, with its band and the median on the axis.

    Parameters
    ----------
    curve : PassageCurve
        From `journeys.passage_curve`.
    ax : matplotlib Axes, optional
        Where to draw; default: a new figure.
    log : bool, optional
        Draw the log's own curve too, as a thin stepped line. Default: where there is one
        (`curve.has_observed`).
    **kwargs
        For the line of the curve (`Axes.plot`).

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    ValueError
        If `log=True` where the log has no curve of its own.

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
    frame = curve.to_frame()
    last = float(frame[curve.clock].iloc[-1])
    if not curve.whole:
        # the axis is even, so the points are too
        frame = curve.to_frame(np.linspace(0.0, last, 121))
    elif frame[curve.clock].iloc[0] > 0:
        frame = curve.to_frame(np.append(0.0, frame[curve.clock]))
    time, share = frame[curve.clock].to_numpy(), 100 * frame["estimate"].to_numpy()
    line: dict[str, Any] = {"color": BLUE, "linewidth": 1.8, "zorder": 3, "label": "by the chain"} | kwargs
    if curve.whole:
        line = {"drawstyle": "steps-post"} | line
    low, high = (100 * frame[name].to_numpy() for name in ("low", "high"))
    if np.isfinite(low).any() and (high > low).any():
        label = f"{100 * curve.confidence_level:g} % interval at each {'step' if curve.clock == 'steps' else 'time'}"
        ax.fill_between(
            time, low, high, step="post" if curve.whole else None, color=BLUE, alpha=0.16, linewidth=0,
            zorder=1, label=label,
        )  # fmt: skip
    ax.plot(time, share, **line)
    if log if log is not None else curve.has_observed:
        seen = curve.observed()
        seen = seen[seen["time"] <= last]
        ax.step(
            np.append(0.0, seen["time"]), 100 * np.append(0.0, seen["estimate"]), where="post", color=GREY,
            linewidth=0.9, zorder=4, label="by the log alone",
        )  # fmt: skip
    _mark_median(ax, curve)
    whom = "of those who reach it" if curve.given else "of all who start"
    unit = "" if curve.clock == "steps" else f" ({curve.unit})"
    ax.set_xlabel(f"{'steps' if curve.clock == 'steps' else 'time'} from {printable(curve.start)}{unit}")
    ax.set_ylabel(f"{printable(_listed(curve.to))}, % {whom}")
    ax.set_xlim(0, last if last > 0 else None)
    ax.set_ylim(0, None)
    ax.legend(frameon=False, loc="lower right", fontsize="small", labelcolor=INK)
    return ax


def _mark_median(ax: Axes, curve: PassageCurve) -> None:
    """Mark on the axis when half of those who reach it have done so."""
    row = curve.given_reached().quantile(0.5).iloc[0]
    if not np.isfinite(row["estimate"]):
        return
    x = float(row["estimate"])
    y = 100 * float(curve.at([x])[0])
    ax.plot([x, x], [0, y], color=INK, linewidth=0.8, linestyle=(0, (2, 2)), zorder=2)
    ax.plot([x], [0], marker="^", markersize=7, color=ORANGE, clip_on=False, zorder=5)
    text = f"half of those who reach it: {_number(x)}"
    if np.isfinite(row["low"]) and row["high"] > row["low"]:
        text += f" ({_number(row['low'])}–{_number(row['high'])})"
    ax.annotate(
        text, (x, 0), xytext=(6, 5), textcoords="offset points", fontsize="small", color=INK, ha="left", va="bottom"
    )


def _number(value: float) -> str:
    return f"{value:.3g}" if abs(value) < 100 else f"{value:,.0f}"


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " or " + names[-1]
