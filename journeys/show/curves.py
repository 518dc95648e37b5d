"""Curves of those who have reached a target, drawn one by one or several together."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.questions.curve_result import PassageCurve
from journeys.questions.group_curves import GroupCurves
from journeys.results import printable
from journeys.show.axes import BLUE, GREY, INK, ORANGE

if TYPE_CHECKING:
    from matplotlib.axes import Axes

# Curves of groups are told apart by colour and, where there are more, by the kind of line.
_LINES = ((BLUE, "-"), (ORANGE, "-"), (INK, ":"), (GREY, "-"), (BLUE, "--"), (ORANGE, "--"))


def draw_groups(ax: Axes, curves: GroupCurves, log: bool, kwargs: dict[str, Any]) -> float:
    """Draw the curve of each group, and return where the longest ends."""
    if len(curves.curves) > len(_LINES):
        msg = (
            f"passage_curve: got {len(curves.curves)} groups of {', '.join(curves.by)}; wanted at most {len(_LINES)} "
            "in one picture: pick some with tally.where, or use .to_frame() or .quantile()"
        )
        raise ValueError(msg)
    last = max(last_of(curve) for curve in curves.curves.values() if curve is not None)
    for (group, curve), (color, style) in zip(curves.curves.items(), _LINES, strict=False):
        name = ", ".join(printable(str(value)) for value in group)
        if curve is None:
            ax.plot([], [], linestyle="none", label=f"{name}: {printable(curves.why[group])}")
            continue
        draw_curve(ax, curve, last, {"color": color, "linestyle": style, "label": name} | kwargs, "")
        if log:
            draw_observed(ax, curve, last, {"color": color})
    return last


def last_of(curve: PassageCurve) -> float:
    """Return the time by which the curve has told all."""
    return float(curve.to_frame()[curve.clock].iloc[-1])


def draw_curve(ax: Axes, curve: PassageCurve, last: float, line: dict[str, Any], band: str) -> None:
    """Draw one curve with its band, which has a name in the legend if one is given."""
    if curve.whole:
        own = curve.to_frame()[curve.clock].to_numpy()
        frame = curve.to_frame(np.unique(np.concatenate([[0.0], own, [last]])))
    else:
        # the axis is even, so the points are too
        frame = curve.to_frame(np.linspace(0.0, last, 121))
    time, share = frame[curve.clock].to_numpy(), 100 * frame["estimate"].to_numpy()
    low, high = (100 * frame[name].to_numpy() for name in ("low", "high"))
    if np.isfinite(low).any() and (high > low).any():
        ax.fill_between(
            time, low, high, step="post" if curve.whole else None, color=line["color"], alpha=0.16 if band else 0.1,
            linewidth=0, zorder=1, label=band or None,
        )  # fmt: skip
    style: dict[str, Any] = {"linewidth": 1.8, "zorder": 3} | ({"drawstyle": "steps-post"} if curve.whole else {})
    ax.plot(time, share, **style | line)


def draw_observed(ax: Axes, curve: PassageCurve, last: float, line: dict[str, Any]) -> None:
    """Draw what the log says by itself as a thin stepped line."""
    seen = curve.observed()
    seen = seen[seen["time"] <= last]
    time, share = np.append(0.0, seen["time"]), 100 * np.append(0.0, seen["estimate"])
    ax.step(time, share, where="post", linewidth=0.9, zorder=4, **line)


def mark_median(ax: Axes, curve: PassageCurve) -> None:
    """Mark on the axis when half of those who reach it have done so."""
    row = curve.given_reached().quantile(0.5).iloc[0]
    if not np.isfinite(row["estimate"]):
        return
    x = float(row["estimate"])
    y = 100 * float(curve.at([x])[0])
    ax.plot([x, x], [0, y], color=INK, linewidth=0.8, linestyle=(0, (2, 2)), zorder=2)
    ax.plot([x], [0], marker="^", markersize=7, color=ORANGE, clip_on=False, zorder=5)
    text = f"half of those who reach it: {number(x)}"
    if np.isfinite(row["low"]) and row["high"] > row["low"]:
        text += f" ({number(row['low'])}–{number(row['high'])})"
    ax.annotate(
        text, (x, 0), xytext=(6, 5), textcoords="offset points", fontsize="small", color=INK, ha="left", va="bottom"
    )


def number(value: float) -> str:
    """Return a number in three digits."""
    return f"{value:.3g}" if abs(value) < 100 else f"{value:,.0f}"
