"""A cumulative curve with its band and the log's own steps, the median marked on the axis, as SVG."""

from __future__ import annotations

import math

import numpy as np

from journeys.markup import Markup, element
from journeys.show.html.svg import WIDTH, Axis, axis_over, line, picture, place, tick_words, words
from journeys.show.parts import Curve

_LEFT, _RIGHT, _TOP, _BOTTOM, _HEIGHT = 34.0, WIDTH - 8.0, 20.0, 190.0, 226.0


def curve_picture(part: Curve, key: str) -> Markup:
    """Return the picture of a curve.

    Parameters
    ----------
    part : Curve
        What to draw.
    key : str
        Tells its elements apart from those of other pictures of the page.

    Returns
    -------
    Markup
    """
    highest = [float(np.nanmax(values)) for values in (part.share, part.high, part.seen_share) if _any(values)]
    across = Axis(0.0, float(part.time[-1]) or 1.0, _LEFT, _RIGHT)
    up = axis_over([0.0, *highest], _BOTTOM, _TOP, from_zero=True)
    inside = [*_scales(part, across, up)]
    has_band = bool(np.isfinite(part.low).all() and (part.high > part.low).any())
    if has_band:
        there = _points(part.time, part.high, across, up)
        back = _points(part.time[::-1], part.low[::-1], across, up)
        inside.append(element("path", d=f"M{'L'.join([*there, *back])}Z", class_="band"))
    if len(part.seen_time):
        inside.append(element("path", d=_steps(part, across, up), class_="seen"))
    inside.append(element("path", d="M" + "L".join(_points(part.time, part.share, across, up)), class_="curve"))
    inside += [*_half(part, across, up), *_key(has_band, bool(len(part.seen_time)))]
    return picture(_HEIGHT, part.caption, _told(part), key, *inside)


def _scales(part: Curve, across: Axis, up: Axis) -> list[Markup]:
    drawn = []
    ticks = up.ticks()
    for tick in ticks:
        drawn.append(line(_LEFT, up.at(tick), _RIGHT, up.at(tick), "rule"))
        drawn.append(words(_LEFT - 6.0, up.at(tick) + 3.5, tick_words(tick, ticks[1] - ticks[0]), "end", "faint"))
    ticks = across.ticks()
    for tick in ticks:
        text = tick_words(tick, ticks[1] - ticks[0])
        drawn.append(words(across.at(tick), _BOTTOM + 16.0, text, "middle", "faint"))
    drawn.append(line(_LEFT, _BOTTOM, _RIGHT, _BOTTOM, "axis"))
    drawn.append(words((_LEFT + _RIGHT) / 2, _BOTTOM + 32.0, part.unit, "middle", "faint"))
    return [*drawn, words(0.0, _TOP - 9.0, part.share_of, "start", "faint")]


def _half(part: Curve, across: Axis, up: Axis) -> list[Markup]:
    """Mark on the axis by when half of those have converted who ever do."""
    if not (math.isfinite(part.median) and part.median <= across.high):
        return []
    x, y = across.at(part.median), up.at(float(np.interp(part.median, part.time, part.share)))
    corners = ((x - 5.0, _BOTTOM + 7.0), (x + 5.0, _BOTTOM + 7.0), (x, _BOTTOM - 1.0))
    mark = element("polygon", points=" ".join(f"{place(a)},{place(b)}" for a, b in corners), class_="mark")
    # the words stand where there is room, between the curve and the axis
    beside = x + 6.0 if x < (_LEFT + _RIGHT) / 2 else x - 6.0
    anchor = "start" if beside > x else "end"
    return [line(x, _BOTTOM, x, y, "half"), mark, words(beside, _BOTTOM - 8.0, part.median_words, anchor)]


def _key(has_band: bool, has_log: bool) -> list[Markup]:
    """Name the lines, at the right below the curve."""
    x, y, drawn = _RIGHT - 100.0, _BOTTOM - 40.0, []
    named = [("curve", "by the model"), ("seen", "by the log alone")] if has_log else [("curve", "by the model")]
    for i, (kind, name) in enumerate(reversed(named)):
        at = y - 14.0 * i
        if kind == "curve" and has_band:
            band = f"M{place(x)},{place(at - 5)}h16v10h-16Z"
            drawn.append(element("path", d=band, class_="band"))
        drawn += [line(x, at, x + 16.0, at, kind), words(x + 21.0, at + 3.5, name, "start", "faint")]
    return drawn


def _points(time: np.ndarray, share: np.ndarray, across: Axis, up: Axis) -> list[str]:
    return [f"{place(across.at(a))},{place(up.at(b))}" for a, b in zip(time.tolist(), share.tolist(), strict=True)]


def _steps(part: Curve, across: Axis, up: Axis) -> str:
    """Return the way of a stepped line, without what is too small to be seen."""
    way, last = [f"M{place(across.at(0.0))},{place(up.at(0.0))}"], ""
    for time, share in zip(part.seen_time.tolist(), part.seen_share.tolist(), strict=True):
        at = place(up.at(share))
        if at != last:
            way.append(f"H{place(across.at(time))}V{at}")
            last = at
    return "".join([*way, f"H{place(across.at(across.high))}"])


def _told(part: Curve) -> str:
    """Return some points of the curve in words."""
    picked = np.unique(np.linspace(0, len(part.time) - 1, 7).round().astype(int))
    told = [f"{part.share[i]:.1f} % by {part.time[i]:.0f}" for i in picked]
    return f"{part.share_of}, {part.unit}: {'; '.join(told)}. {part.median_words}"


def _any(values: np.ndarray) -> bool:
    return bool(len(values) and np.isfinite(values).any())
