"""What a summary consists of, before it is Markdown or HTML: sections of words, tables and pictures, as plain data."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, field

import numpy as np


@dataclass(frozen=True)
class Words:
    """A paragraph.

    Attributes
    ----------
    text : str
        Names from the data may be in it: it is never markup.
    """

    text: str


@dataclass(frozen=True)
class Lines:
    """Sentences one below the other.

    Attributes
    ----------
    items : sequence of str
        Names from the data may be in them.
    """

    items: Sequence[str]


@dataclass(frozen=True)
class Terms:
    """Terms with what they mean.

    Attributes
    ----------
    items : sequence of (str, str)
        Term, meaning.
    """

    items: Sequence[tuple[str, str]]


@dataclass(frozen=True)
class Verbatim:
    """Text shown letter by letter, such as a rules file."""

    text: str
    language: str


@dataclass(frozen=True)
class Table:
    """A table of words and of numbers as they shall be read.

    Attributes
    ----------
    caption : str
        What it tells.
    columns : sequence of str
        Heads.
    rows : sequence of sequences of str
        Cells.
    n_keys : int
        So many columns on the left say what a row is about.
    ours : collection of str
        Columns whose text is the package's own, in which backticks stand around code.
    """

    caption: str
    columns: Sequence[str]
    rows: Sequence[Sequence[str]]
    n_keys: int = 1
    ours: Collection[str] = ()


@dataclass(frozen=True)
class Dot:
    """A number on an axis.

    Attributes
    ----------
    label : str
        What it is of.
    estimate, low, high : float
        NaN or infinite where there is none.
    flag : str
        Not empty: drawn hollow; in the place of a number that is not there.
    """

    label: str
    estimate: float
    low: float
    high: float
    flag: str = ""


@dataclass(frozen=True)
class Dots:
    """Numbers with their intervals on one axis; only where there are pictures.

    Attributes
    ----------
    caption : str
        What it shows.
    unit : str
        What stands below the axis.
    dots : sequence of Dot
        From top to bottom.
    from_zero : bool
        The axis begins, or has a line, at zero.
    """

    caption: str
    unit: str
    dots: Sequence[Dot]
    from_zero: bool = True


@dataclass(frozen=True, eq=False)
class Curve:
    """How a share grows with time, in percent; only where there are pictures.

    Attributes
    ----------
    caption, unit, share_of : str
        What it shows, what stands below the axis, and beside it.
    time, share, low, high : ndarray, shape (n,)
        The curve and its band.
    seen_time, seen_share : ndarray, shape (m,)
        The same by the log alone, in steps; empty where there is none.
    median : float
        Time by which half of those have converted who ever do; NaN where it is not known.
    median_words : str
        The same in words, with its interval.
    """

    caption: str
    unit: str
    share_of: str
    time: np.ndarray
    share: np.ndarray
    low: np.ndarray
    high: np.ndarray
    seen_time: np.ndarray
    seen_share: np.ndarray
    median: float
    median_words: str


Part = Words | Lines | Terms | Verbatim | Table | Dots | Curve


@dataclass(frozen=True)
class Section:
    """A heading and what stands below it.

    Attributes
    ----------
    title : str
        Names from the data may be in it.
    parts : sequence of parts
        In the order in which they are read: a sentence and a table before any picture.
    """

    title: str
    parts: Sequence[Part] = field(default_factory=tuple)

    @property
    def numbers_only(self) -> Section:
        """The same without pictures."""
        return Section(self.title, [part for part in self.parts if not isinstance(part, Dots | Curve)])
