"""HTML in which text from the data can only be text: elements, and tables that screen readers can find their way in."""

from __future__ import annotations

import html
import math
import zlib
from collections.abc import Collection, Mapping, Sequence
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import pandas as pd

# Longer names are cut where people read; the files hold them whole.
LONGEST_NAME = 48
# A notebook shows so many rows of an answer; its frame holds them all.
MOST_ROWS = 60
# What stands where a number is left out because it describes too few people.
LEFT_OUT = "–"
_EMPTY = frozenset({"br", "circle", "hr", "line", "link", "meta", "path", "polygon", "rect"})
# Notebooks bring their own colours, light or dark: these only say how strong a line is beside the text.
_LINE = "border-bottom:1px solid color-mix(in srgb, currentColor 25%, transparent)"


class Markup(str):
    """Text that is HTML already; every other text is escaped when it is put into an element."""

    __slots__ = ()


def element(name: str, /, *inside: str, **attributes: str | int | float | None) -> Markup:
    """Return an element.

    Parameters
    ----------
    name : str
        Of the element, ours, never from the data.
    *inside : str
        What it holds: `Markup` as it is, any other text escaped.
    **attributes : str, int, float or None
        `class_` is class, `aria_label` is aria-label; None leaves the attribute out.

    Returns
    -------
    Markup

    Examples
    --------
    >>> element("p", "a < b, ", element("b", "c"), class_="note")
    '<p class="note">a &lt; b, <b>c</b></p>'
    """
    said = "".join(
        f' {key.rstrip("_").replace("_", "-")}="{escaped(str(value))}"'
        for key, value in attributes.items()
        if value is not None
    )
    if name in _EMPTY and not inside:
        return Markup(f"<{name}{said}/>")
    return Markup(f"<{name}{said}>{joined(inside)}</{name}>")


def joined(parts: Sequence[str], between: str = "") -> Markup:
    """Return parts one after another, text among them escaped."""
    return Markup(between.join(part if isinstance(part, Markup) else escaped(part) for part in parts))


def escaped(text: str) -> Markup:
    r"""Return text as HTML that shows it: markup escaped, control and layout characters as spaces.

    Examples
    --------
    >>> escaped('<b>"\u202e')
    '&lt;b&gt;&quot; '
    """
    return Markup(html.escape("".join(char if char.isprintable() or char == "\n" else " " for char in text)))


def short_name(name: str) -> str:
    """Return a name from the data at a length that can be read; what was cut is counted, and told apart by a sum.

    Examples
    --------
    >>> short_name("basket"), short_name("x" * 10_000)
    ('basket', 'xxxxxxxxxxxxxxxxxxxxxxxx… (10,000 characters, 0d55a4a3)')
    """
    if len(name) <= LONGEST_NAME:
        return name
    return f"{name[: LONGEST_NAME // 2]}… ({len(name):,} characters, {zlib.crc32(name.encode('utf-8', 'replace')):08x})"


def frame_table(frame: pd.DataFrame, caption: str, notes: Sequence[str] = (), n_keys: int = 0) -> str:
    """Return a frame as an HTML table for notebooks: numbers to four digits, names shown as text, at most 60 rows.

    Parameters
    ----------
    frame : DataFrame
        What to show; its index is left out.
    caption : str
        What it is.
    notes : sequence of str
        What to keep in mind, below the table.
    n_keys : int
        So many columns on the left say what a row is about.

    Returns
    -------
    str
    """
    from pandas.api.types import is_numeric_dtype

    right = [is_numeric_dtype(frame.iloc[:, i]) for i in range(frame.shape[1])]
    heads = [
        element("th", short_name(str(name)), scope="col", style=_cell_style(number))
        for name, number in zip(frame.columns, right, strict=True)
    ]
    rows = [
        element("tr", *(_frame_cell(value, i < n_keys, right[i]) for i, value in enumerate(row)))
        for row in frame.head(MOST_ROWS).to_numpy(dtype=object)
    ]
    if (left := len(frame) - MOST_ROWS) > 0:
        notes = (f"{left:,} more rows: .to_frame() holds them all.", *notes)
    table = element(
        "table",
        element("caption", caption, style="text-align:left;font-weight:bold;padding:0.2em 0"),
        element("thead", element("tr", *heads)),
        element("tbody", *rows),
        style="border-collapse:collapse",
    )
    below = [element("p", note, style="max-width:44em;margin:0.3em 0;opacity:0.85") for note in notes]
    return str(element("div", table, *below, style="overflow-x:auto"))


def plain_number(value: object) -> str:
    """Return a cell as text: numbers to four digits, a blank for none.

    Examples
    --------
    >>> plain_number(0.123456), plain_number(12345.6), plain_number(float("nan")), plain_number(7)
    ('0.1235', '12,346', '', '7')
    """
    if isinstance(value, float):
        return "" if math.isnan(value) else f"{value:.4g}" if abs(value) < 999.95 else f"{value:,.0f}"
    return "" if value is None else str(value)


def facts(caption: str, rows: Mapping[str, str], notes: Collection[str] = ()) -> str:
    """Return a few named facts as an HTML table for notebooks."""
    lines = [
        element("tr", element("th", name, scope="row", style=_cell_style(False)), element("td", value))
        for name, value in rows.items()
    ]
    head = element("caption", caption, style="text-align:left;font-weight:bold;padding:0.2em 0")
    below = [element("p", note, style="max-width:44em;margin:0.3em 0") for note in notes]
    table = element("table", head, element("tbody", *lines), style="border-collapse:collapse")
    return str(element("div", table, *below, style="overflow-x:auto"))


def _frame_cell(value: object, is_key: bool, is_number: bool) -> Markup:
    style = _cell_style(is_number)
    if isinstance(value, float) and math.isinf(value):
        return element("td", "∞" if value > 0 else "−∞", style=style)
    text = plain_number(value)
    shown = short_name(text) if is_key else text
    return element("th" if is_key else "td", element("bdi", shown), scope="row" if is_key else None, style=style)


def _cell_style(is_number: bool) -> str:
    return f"text-align:{'right' if is_number else 'left'};padding:0.15em 0.6em;font-weight:normal;{_LINE}"


def count_text(n: float) -> str:
    """Return a whole number, or what stands in its place where it is left out (NaN).

    Examples
    --------
    >>> count_text(1204), count_text(float("nan"))
    ('1,204', '–')
    """
    return LEFT_OUT if math.isnan(n) else f"{n:,.0f}"
