"""The whole summary as one page of HTML: no script, no font, no picture from elsewhere."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace

from journeys.markup import Markup, element, escaped, joined
from journeys.questions.overview import Overview
from journeys.show.conversion_sections import opening
from journeys.show.html.curve import curve_picture
from journeys.show.html.dots import any_hollow, dots_picture
from journeys.show.html.style import STYLE
from journeys.show.parts import Curve, Dots, Lines, Part, Section, Table, Terms, Verbatim, Words
from journeys.show.rows import span_words
from journeys.show.sections import sections, title

# Nothing may be fetched, and nothing run, even if a name got through as markup.
_POLICY = "default-src 'none'; style-src 'unsafe-inline'; img-src data:"
_NUMBER = re.compile(r"[+−]?\d[\d,.]*( %)?( \([^()]*\d[^()]*\))?|\d+ of \d+|[\d,]+ of [\d,]+|some never do|[·–]")
# A long word may be broken where its parts meet, or after so many characters, about as many as a narrow column takes.
_PIECE = re.compile(r".+?(?:[_/]+(?=.)|[.:\-]+(?=[^\W\d_])|$)", re.DOTALL)
_SHORT, _UNBROKEN = 9, 18
# Dates and intervals stay in one piece, and so do a number and its percent sign.
_SPAN = r"[(+−]*\d[\d,.:]*[–\-][+−]?\d[\d,.:–\-]*"
_PERCENT = r"[(+−]*\d[\d,.]* %"
_WHOLE = re.compile(rf"({_SPAN}|{_PERCENT})[);,.:]*")
_WORDS = re.compile(rf"(?<!\S)({_PERCENT}[);,.:]*)(?!\S)|([ \n]+)")
_INTERVAL = re.compile(r"(.*\S) (\([^()]*\))")
# Tables of more numbers than these put intervals below their numbers.
_WIDE = 5
_LONG = 40  # characters of a cell that is a sentence


def summary_html(overview: Overview, told: Sequence[Section] | None = None) -> str:
    """Return the whole summary as a page of HTML.

    Parameters
    ----------
    overview : Overview
        From `journeys.summarise`.
    told : sequence of Section, optional
        Its sections, where they are at hand.

    Returns
    -------
    str
        The same sections as `summary_markdown`, with pictures.
    """
    told = told or sections(overview)
    head = element(
        "head",
        element("meta", charset="utf-8"),
        element("meta", http_equiv="Content-Security-Policy", content=_POLICY),
        element("meta", name="viewport", content="width=device-width, initial-scale=1"),
        element("meta", name="color-scheme", content="light dark"),
        element("title", title(overview)),
        element("link", rel="icon", href="data:,"),
        Markup(f"<style>{STYLE}</style>"),
    )
    links = [element("li", element("a", section.title, href=f"#part-{i}")) for i, section in enumerate(told)]
    body = element(
        "body",
        element("a", "To the numbers", href="#numbers", class_="skip"),
        element(
            "header",
            element("h1", _name(title(overview))),
            element("p", _name(opening(overview)), ".", class_="lead"),
            element("p", *_pieces(span_words(overview)), class_="quiet"),
        ),
        element("nav", element("ol", *links), aria_label="Contents"),
        element("main", *(_section(section, i) for i, section in enumerate(told)), id="numbers"),
    )
    return f'<!DOCTYPE html>\n<html lang="en">\n{head}\n{body}\n</html>\n'


def _section(section: Section, at: int) -> Markup:
    key = f"part-{at}"
    parts = [_part(part, f"{key}-{i}") for i, part in enumerate(section.parts)]
    heading = element("h2", _name(section.title), id=key)
    return Markup(f"\n{element('section', heading, *parts, aria_labelledby=key)}")


def _part(part: Part, key: str) -> Markup:
    match part:
        case Words(text):
            return element("p", _name(text))
        case Lines(items):
            return element("ul", *(element("li", _name(item)) for item in items))
        case Terms(items):
            told = (joined([element("dt", term), element("dd", *_pieces(meaning))]) for term, meaning in items)
            return element("dl", *told)
        case Verbatim(text, _):
            return element("pre", element("code", text))
        case Table():
            return _table(part)
        case Dots():
            caption = f"{part.caption}. Dots with intervals{'; hollow: see the note' if any_hollow(part) else ''}."
            return element("figure", element("figcaption", *_pieces(caption)), dots_picture(part, key))
        case Curve():
            band = ", with its interval at each time" if (part.high > part.low).any() else ""
            caption = f"{part.caption}{band}; the triangle marks the median."
            return element("figure", element("figcaption", *_pieces(caption)), curve_picture(part, key))


def _table(part: Table) -> Markup:
    part = _without_empty(part)
    numeric = [i >= part.n_keys and _is_numeric([row[i] for row in part.rows]) for i in range(len(part.columns))]
    ours = [name in part.ours for name in part.columns]
    lengths = [max((len(row[i]) for row in part.rows), default=0) for i in range(len(part.columns))]
    kinds = [
        "number" if number else ("long" if i < part.n_keys else "words") if long > _LONG else None
        for i, (number, long) in enumerate(zip(numeric, lengths, strict=True))
    ]
    heads = [
        element("th", _name(name), scope="col", class_="number" if number else None)
        for name, number in zip(part.columns, numeric, strict=True)
    ]
    rows = [
        element("tr", *(_cell(cell, i < part.n_keys, kinds[i], ours[i]) for i, cell in enumerate(row)))
        for row in part.rows
    ]
    table = element(
        "table",
        element("caption", element("span", *_pieces(part.caption))), element("thead", element("tr", *heads)),
        element("tbody", *rows),
    )  # fmt: skip
    # A box that can be scrolled must be reached by the keyboard, and named.
    kind = "box below" if sum(numeric) >= _WIDE else "box"
    return element("div", table, class_=kind, tabindex=0, role="region", aria_label=part.caption)


def _cell(text: str, is_key: bool, kind: str | None, is_ours: bool) -> Markup:
    inside = _with_code(text) if is_ours else _with_interval(text) if kind == "number" else _name(text)
    return element("th", inside, scope="row", class_=kind) if is_key else element("td", inside, class_=kind)


def _without_empty(part: Table) -> Table:
    """Return the table without columns, such as notes, in which nothing stands."""
    kept = [i for i in range(len(part.columns)) if i < part.n_keys or any(row[i] for row in part.rows)]
    rows = [[row[i] for i in kept] for row in part.rows]
    return replace(part, columns=[part.columns[i] for i in kept], rows=rows)


def _name(text: str) -> Markup:
    """Return a name from the data, or words with names in them, set apart from the text around it."""
    return element("bdi", *_pieces(text))


def _pieces(text: str) -> list[Markup | str]:
    """Return text that is broken between its words, or where the parts of a word meet."""
    return [_word(word) for word in _WORDS.split(text) if word]


def _word(word: str) -> Markup | str:
    if _WHOLE.fullmatch(word):
        return element("span", word, class_="whole") if len(word) <= _UNBROKEN else word
    if len(word) <= _SHORT:
        return word
    pieces = [piece[i : i + _UNBROKEN] for piece in _PIECE.findall(word) for i in range(0, len(piece), _UNBROKEN)]
    return joined(pieces, "<wbr>")


def _is_numeric(cells: Sequence[str]) -> bool:
    told = [cell for cell in cells if cell]
    return bool(told) and all(_NUMBER.fullmatch(cell) for cell in told)


def _with_interval(text: str) -> Markup:
    """Return a number with its interval set apart."""
    found = _INTERVAL.fullmatch(text)
    return escaped(text) if found is None else joined([found[1], " ", element("span", found[2], class_="interval")])


def _with_code(text: str) -> Markup:
    """Return our own words, what stands between backticks as code."""
    parts = text.split("`")
    return joined([
        element("code", *_pieces(part)) if i % 2 else joined(_pieces(part)) for i, part in enumerate(parts)
    ])
