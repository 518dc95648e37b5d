"""Dots with intervals on one axis, as SVG."""

from __future__ import annotations

import math

from journeys.markup import Markup, element
from journeys.show.html.svg import CHARACTER, WIDTH, Axis, axis_over, cut, line, picture, place, tick_words, words
from journeys.show.parts import Dot, Dots

_ROW = 20.0
_LONGEST_LABEL = 28
_MOST_TOLD = 30


def dots_picture(part: Dots, key: str) -> Markup:
    """Return a picture of dots; flagged ones are hollow, what has no number stands in words.

    Parameters
    ----------
    part : Dots
        What to draw.
    key : str
        Tells its elements apart from those of other pictures of the page.

    Returns
    -------
    Markup
    """
    labels = [cut(dot.label, _LONGEST_LABEL) for dot in part.dots]
    left = 10.0 + CHARACTER * max(map(len, labels), default=0)
    seen = [value for dot in part.dots for value in (dot.estimate, dot.low, dot.high) if math.isfinite(value)]
    axis = axis_over(seen, left, WIDTH - 12.0, from_zero=part.from_zero)
    bottom = 6.0 + _ROW * len(part.dots)
    rows = [
        inside
        for i, (dot, label) in enumerate(zip(part.dots, labels, strict=True))
        for inside in _row(dot, label, axis, 6.0 + _ROW * (i + 0.5))
    ]
    return picture(bottom + 34.0, part.caption, _told(part), key, *_scale(part, axis, bottom), *rows)


def any_hollow(part: Dots) -> bool:
    """Tell whether a dot of the picture is hollow."""
    return any(dot.flag and math.isfinite(dot.estimate) for dot in part.dots)


def _scale(part: Dots, axis: Axis, bottom: float) -> list[Markup]:
    ticks = axis.ticks()
    step = ticks[1] - ticks[0] if len(ticks) > 1 else 1.0
    drawn = [line(axis.at(tick), 4.0, axis.at(tick), bottom, "rule") for tick in ticks]
    drawn += [words(axis.at(tick), bottom + 13.0, tick_words(tick, step), "middle", "faint") for tick in ticks]
    if axis.low < 0 < axis.high:
        drawn.append(line(axis.at(0.0), 4.0, axis.at(0.0), bottom, "zero"))
    drawn.append(line(axis.start, bottom, axis.end, bottom, "axis"))
    wide = CHARACTER * 0.85 * len(part.unit)
    middle = max((axis.start + axis.end) / 2, 0.0)
    anchor = "middle" if middle + wide / 2 <= WIDTH else "end"
    return [*drawn, words(middle if anchor == "middle" else WIDTH, bottom + 28.0, part.unit, anchor, "faint")]


def _row(dot: Dot, label: str, axis: Axis, y: float) -> list[Markup]:
    drawn = [words(axis.start - 8.0, y + 4.0, label, "end")]
    if not math.isfinite(dot.estimate):
        room = int((axis.end - axis.start) / CHARACTER)
        return [*drawn, words(axis.end, y + 3.5, cut(dot.flag or "no number", room), "end", "none")]
    if math.isfinite(dot.low) and math.isfinite(dot.high):
        drawn.append(line(axis.at(dot.low), y, axis.at(dot.high), y, "span"))
    kind = "dot hollow" if dot.flag else "dot"
    return [*drawn, element("circle", cx=place(axis.at(dot.estimate)), cy=place(y), r=3.2, class_=kind)]


def _told(part: Dots) -> str:
    """Return the numbers of the picture in words."""
    told = [_in_words(dot) for dot in part.dots[:_MOST_TOLD]]
    more = len(part.dots) - _MOST_TOLD
    return f"{part.unit}: {'; '.join(told)}" + (f"; and {more} more, in the table above" if more > 0 else "")


def _in_words(dot: Dot) -> str:
    if not math.isfinite(dot.estimate):
        return f"{dot.label}: {dot.flag or 'no number'}"
    text = f"{dot.label} {dot.estimate:.3g}"
    if math.isfinite(dot.low) and math.isfinite(dot.high):
        text += f", interval {dot.low:.3g} to {dot.high:.3g}"
    return f"{text}, {dot.flag}" if dot.flag else text
