"""What all pictures share: ink on white, axes without a frame."""

from __future__ import annotations

from typing import TYPE_CHECKING

from journeys.show.palette import GREY, INK

if TYPE_CHECKING:
    from matplotlib.axes import Axes


def axes(ax: Axes | None, size: tuple[float, float]) -> Axes:
    """Return the axes given, or new ones: ink on white, without a frame."""
    if ax is None:
        from matplotlib.figure import Figure
        from matplotlib.pyplot import subplots

        figure: Figure
        figure, ax = subplots(figsize=size, layout="constrained")
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        ax.spines[side].set_color(GREY)
    ax.tick_params(colors=INK, labelsize="small")
    ax.xaxis.label.set_color(INK)
    ax.yaxis.label.set_color(INK)
    return ax
