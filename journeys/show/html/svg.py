"""Small pictures as SVG: an axis with round numbers, lines and words on it, and a name for who cannot see it."""

from __future__ import annotations

import math
from dataclasses import dataclass

from journeys.markup import Markup, element

# Wide enough for a phone; a larger screen shows the same at up to one and a half times the size.
WIDTH = 348.0
CHARACTER = 6.5


@dataclass(frozen=True)
class Axis:
    """A straight scale from numbers to places.

    Attributes
    ----------
    low, high : float
        Numbers at its two ends.
    start, end : float
        Places of these.
    """

    low: float
    high: float
    start: float
    end: float

    def at(self, value: float) -> float:
        """Return the place of a number; beyond the ends, the end."""
        share = (min(max(value, self.low), self.high) - self.low) / (self.high - self.low)
        return self.start + share * (self.end - self.start)

    def ticks(self, most: int = 6) -> list[float]:
        """Return some round numbers from end to end."""
        step = round_step((self.high - self.low) / most)
        first = math.ceil(self.low / step - 1e-9)
        return [step * i for i in range(first, math.floor(self.high / step + 1e-9) + 1)]


def round_step(least: float) -> float:
    """Return the smallest of 1, 2 or 5 times a power of ten that is no less.

    Examples
    --------
    >>> round_step(0.3), round_step(17)
    (0.5, 20.0)
    """
    power = 10.0 ** math.floor(math.log10(least))
    return next(power * factor for factor in (1, 2, 5, 10) if power * factor >= least * (1 - 1e-9))


def axis_over(values: list[float], start: float, end: float, *, from_zero: bool) -> Axis:
    """Return an axis that holds some finite numbers and ends at round ones."""
    low, high = min(values, default=0.0), max(values, default=1.0)
    if from_zero:
        low, high = min(low, 0.0), max(high, 0.0)
    if not high > low:
        low, high = low - 0.5 * (abs(low) or 1.0), high + 0.5 * (abs(high) or 1.0)
    step = round_step((high - low) / 5)
    return Axis(step * math.floor(low / step + 1e-9), step * math.ceil(high / step - 1e-9), start, end)


def picture(height: float, name: str, told: str, key: str, *inside: str) -> Markup:
    """Return a picture with its name and what it shows in words, for screen readers."""
    return element(
        "svg",
        element("title", name, id=f"{key}-name"),
        element("desc", told, id=f"{key}-told"),
        *inside,
        viewBox=f"0 0 {WIDTH:g} {place(height)}",
        role="img",
        aria_labelledby=f"{key}-name",
        aria_describedby=f"{key}-told",
    )


def line(x1: float, y1: float, x2: float, y2: float, kind: str) -> Markup:
    """Return a straight line."""
    return element("line", x1=place(x1), y1=place(y1), x2=place(x2), y2=place(y2), class_=kind)


def words(x: float, y: float, text: str, anchor: str = "start", kind: str | None = None) -> Markup:
    """Return words at a place; anchor is "start", "middle" or "end"."""
    return element("text", text, x=place(x), y=place(y), text_anchor=anchor, class_=kind)


def tick_words(value: float, step: float) -> str:
    """Return a number on an axis with as many digits as its steps need.

    Examples
    --------
    >>> tick_words(0.30000000000000004, 0.1), tick_words(20.0, 10.0), tick_words(-5.0, 5.0)
    ('0.3', '20', '−5')
    """
    digits = max(0, -math.floor(math.log10(step) + 1e-9))
    return f"{value:,.{digits}f}".replace("-", "−")


def place(value: float) -> str:
    """Return a place with a digit after the point, which is finer than can be seen."""
    return f"{value:.1f}".removesuffix(".0")


def cut(text: str, most: int) -> str:
    """Return text that fits, its end cut off where it does not."""
    return text if len(text) <= most else text[: most - 1].rstrip() + "…"
