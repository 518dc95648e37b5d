"""The matrix of moves as a table with intervals."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.markup import short_name
from journeys.questions.moves import MovesResult
from journeys.results import printable
from journeys.show.axes import INK, PALE, QUIET, axes
from journeys.show.dots_plot import answer_to
from journeys.show.words import percent

if TYPE_CHECKING:
    from matplotlib.axes import Axes

# A wider matrix cannot be read; its rows can, one by one.
WIDEST_MATRIX = 25


def matrix(result: MovesResult, ax: Axes | None = None) -> Axes:
    """Draw the matrix of moves as a table: percent of moves out of each state, the interval below each number.

    Parameters
    ----------
    result : MovesResult
        From `fit.moves()`, without groups.
    ax : matplotlib Axes, optional
        Where to draw; default: a new figure.

    Returns
    -------
    matplotlib Axes
        Moves never seen are a dot; flagged numbers stand in brackets.

    Raises
    ------
    TypeError
        If the result answers another question.
    ValueError
        If the answer is by group, or of more than 25 states.
    """
    frame = answer_to(result, MovesResult).to_frame()
    if list(result.keys.columns) != ["state", "next_state"]:
        by = ", ".join(map(str, result.keys.columns[:-2]))
        msg = f"result: is by {by}; wanted moves without groups, or those of one group"
        raise ValueError(msg)
    states, after = (list(dict.fromkeys(frame[name])) for name in ("state", "next_state"))
    if len(states) > WIDEST_MATRIX:
        msg = f"result: has {len(states):,} states; wanted up to {WIDEST_MATRIX}, or plots.moves(result, state) of one"
        raise ValueError(msg)
    ax = axes(ax, (1.4 + 0.82 * len(after), 1.0 + 0.42 * len(states)))
    for row in frame.to_dict("records"):
        _cell(ax, row, after.index(row["next_state"]), len(states) - 1 - states.index(row["state"]))
    ax.set_xticks(range(len(after)), [printable(short_name(name)) for name in after], rotation=30, ha="left")
    ax.set_yticks(range(len(states)), [printable(short_name(name)) for name in reversed(states)])
    ax.set_xlim(-0.5, len(after) - 0.5)
    ax.set_ylim(-0.5, len(states) - 0.5)
    ax.hlines(np.arange(len(states)) - 0.5, -0.5, len(after) - 0.5, color=PALE, linewidth=0.6)
    ax.tick_params(length=0, top=True, labeltop=True, bottom=False, labelbottom=False)
    for side in ("left", "bottom"):
        ax.spines[side].set_visible(False)
    note = "; in brackets: see its flag" if ((frame["flag"] != "") & (frame["estimate"] > 0)).any() else ""
    ax.set_xlabel(f"% of moves out of each state, with {100 * result.confidence_level:g} % interval{note}")
    return ax


def _cell(ax: Axes, row: dict[Any, Any], x: float, y: float) -> None:
    """Write a number with its interval below it."""
    if row["estimate"] == 0:
        ax.text(x, y, "·", ha="center", va="center", color=QUIET)
        return
    told = percent(row["estimate"]).removesuffix(" %")
    ax.text(x, y + 0.02, f"[{told}]" if row["flag"] else told, ha="center", va="bottom", fontsize="small", color=INK)
    if np.isfinite(row["low"]) and row["high"] > row["low"]:
        ends = "–".join(percent(row[name]).removesuffix(" %") for name in ("low", "high"))
        ax.text(x, y - 0.02, ends, ha="center", va="top", fontsize="x-small", color=QUIET)
