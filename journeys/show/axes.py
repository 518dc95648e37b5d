"""What all pictures share: ink on white, one pair of colours, axes without a frame."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from matplotlib.axes import Axes

INK = "#1f2328"
GREY = "#8b9197"
PALE = "#d9dcdf"
# Grey dark enough to be read.
QUIET = "#57606a"
# The one pair of colours: dark blue and orange stay apart for every kind of colour blindness.
BLUE = "#1b4f8a"
ORANGE = "#d97706"


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
