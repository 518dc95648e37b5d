"""What every answer has in common: tidy frames, intervals at any level, one-line and notebook display."""

from __future__ import annotations

import textwrap
from collections.abc import Callable, Collection, Hashable, Mapping, Sequence
from dataclasses import dataclass, field, fields, replace
from typing import TYPE_CHECKING, Any, ClassVar

import numpy as np

from journeys import checks
from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.draw_intervals import drawn_interval
from journeys.kernels.intervals import clopper_pearson, log_interval, logit_interval, t_interval
from journeys.markup import frame_table, plain_number

if TYPE_CHECKING:
    import pandas as pd

# How an interval is made from an estimate and its standard error.
LOGIT, LOG, CELL, PLAIN, KNOWN = "logit", "log", "cell", "plain", "known"


@dataclass(frozen=True, eq=False)
class Estimates:
    """Numbers with what their intervals need, one array element per number.

    Attributes
    ----------
    value, std_error, df : ndarray, shape (n,)
        Estimate, standard error on its own scale and degrees of freedom of its t quantile.
    scale : ndarray of str, shape (n,)
        "logit" for probabilities, "log" for times, "cell" for single moves (Clopper-Pearson at `n_effective`),
        "plain" for differences, "known" for numbers without uncertainty.
    n_effective : ndarray, shape (n,)
        Independent trials that would carry the same information; NaN where that has no meaning.
    few : ndarray of bool, shape (n,)
        Too few events for a two-sided interval: one exact bound for a probability, none for a time.
    """

    value: FloatArray
    std_error: FloatArray
    df: FloatArray
    scale: np.ndarray
    n_effective: FloatArray
    few: BoolArray

    def bounds(self, confidence_level: float) -> tuple[FloatArray, FloatArray]:
        """Return the lower and upper bounds at a level.

        Parameters
        ----------
        confidence_level : float
            Between 0 and 1.

        Returns
        -------
        low, high : ndarray, shape (n,)
            NaN where there is no bound to give.
        """
        low, high = np.full(len(self.value), np.nan), np.full(len(self.value), np.nan)
        share = np.isin(self.scale, (LOGIT, CELL))
        one_sided = share & self.few
        t_like = (self.value, self.std_error, self.df, confidence_level)
        kinds: tuple[tuple[BoolArray, Callable[[], tuple[FloatArray, FloatArray]]], ...] = (
            ((self.scale == LOGIT) & ~self.few, lambda: logit_interval(*t_like)),
            ((self.scale == LOG) & ~self.few, lambda: log_interval(*t_like)),
            ((self.scale == PLAIN) & ~self.few, lambda: t_interval(*t_like)),
            ((self.scale == CELL) & ~self.few, lambda: self._exact(confidence_level, "both")),
            (one_sided & (self.value <= 0.5), lambda: self._exact(confidence_level, "upper")),
            (one_sided & (self.value > 0.5), lambda: self._exact(confidence_level, "lower")),
            ((self.scale == KNOWN) & np.isfinite(self.value), lambda: (self.value, self.value)),
        )
        for mask, interval in kinds:
            # most answers are of one kind, and exact bounds take long
            if mask.any():
                lower, upper = interval()
                low[mask], high[mask] = lower[mask], upper[mask]
        return low, high

    def _exact(self, confidence_level: float, side: str) -> tuple[FloatArray, FloatArray]:
        share = np.where(np.isin(self.scale, (LOGIT, CELL)), np.clip(self.value, 0.0, 1.0), np.nan)
        trials = np.nan_to_num(self.n_effective)
        return clopper_pearson(share * trials, trials, confidence_level, side)  # type: ignore[arg-type]

    @staticmethod
    def joined(parts: Sequence[Estimates]) -> Estimates:
        """Return several one after another; each keeps its kind of bounds."""
        whole = Estimates(*(np.concatenate([getattr(part, f.name) for part in parts]) for f in fields(Estimates)))
        if all(type(part) is Estimates for part in parts):
            return whole
        return JoinedEstimates(**vars(whole), **_by_kind(parts))

    @property
    def kind(self) -> Hashable:
        """What others share that may be put into one with these; what is read off something else stays apart."""
        return Estimates if type(self) is Estimates else id(self)

    def take(self, index: np.ndarray) -> Estimates:
        """Return those at `index`, positions or a mask."""
        return Estimates(*(getattr(self, f.name)[index] for f in fields(Estimates)))

    def times(self, factor: float) -> Estimates:
        """Return the same numbers in another unit."""
        return self if factor == 1 else replace(self, value=self.value * factor, std_error=self.std_error * factor)


@dataclass(frozen=True, eq=False)
class DrawnEstimates(Estimates):
    """Estimates whose two-sided bounds are read off the answers of resamples.

    Attributes
    ----------
    draws : ndarray, shape (n_resamples, n)
        All NaN where there shall be no interval.
    accelerations : ndarray, shape (n,), or None
        For bias-corrected and accelerated bounds; None for percentiles.
    """

    draws: FloatArray
    accelerations: FloatArray | None

    def bounds(self, confidence_level: float) -> tuple[FloatArray, FloatArray]:
        """Return the lower and upper bounds at a level (see `Estimates.bounds`)."""
        low, high = super().bounds(confidence_level)
        mine = np.isin(self.scale, (LOGIT, LOG)) & ~self.few
        lower, upper = drawn_interval(self.draws, self.value, confidence_level, self.accelerations)
        return np.where(mine, lower, low), np.where(mine, upper, high)

    def take(self, index: np.ndarray) -> Estimates:
        """Return those at `index`, positions or a mask."""
        accelerations = None if self.accelerations is None else self.accelerations[index]
        kept = vars(super().take(index))
        return DrawnEstimates(**kept, draws=self.draws[:, index], accelerations=accelerations)

    def times(self, factor: float) -> Estimates:
        """Return the same numbers in another unit."""
        value, std_error = self.value * factor, self.std_error * factor
        return replace(self, value=value, std_error=std_error, draws=self.draws * factor)


@dataclass(frozen=True, eq=False)
class JoinedEstimates(Estimates):
    """Estimates of several kinds together.

    Attributes
    ----------
    parts : tuple of Estimates
        Each with the bounds of its kind.
    order : ndarray of int, shape (n,)
        Position of each number in the parts one after another.
    """

    parts: tuple[Estimates, ...]
    order: IntArray

    def bounds(self, confidence_level: float) -> tuple[FloatArray, FloatArray]:
        """Return the lower and upper bounds at a level (see `Estimates.bounds`)."""
        low, high = zip(*(part.bounds(confidence_level) for part in self.parts), strict=True)
        return np.concatenate(low)[self.order], np.concatenate(high)[self.order]

    def take(self, index: np.ndarray) -> Estimates:
        """Return those at `index`, positions or a mask; nothing is kept of others, whose bounds would be in vain."""
        used, place = np.unique(self.order[index], return_inverse=True)
        ends = np.cumsum([len(part.value) for part in self.parts])
        cuts = zip(self.parts, np.split(used, np.searchsorted(used, ends[:-1])), ends, strict=True)
        parts = tuple(part.take(mine - end + len(part.value)) for part, mine, end in cuts)
        return JoinedEstimates(**vars(super().take(index)), parts=parts, order=place)

    def times(self, factor: float) -> Estimates:
        """Return the same numbers in another unit."""
        parts = tuple(part.times(factor) for part in self.parts)
        return replace(self, value=self.value * factor, std_error=self.std_error * factor, parts=parts)


def _by_kind(parts: Sequence[Estimates]) -> dict[str, Any]:
    """Return the parts of several estimates, those of one kind as one, and the place of each number among them."""
    both = [
        (one.parts, one.order) if isinstance(one, JoinedEstimates) else ((one,), np.arange(len(one.df)))
        for one in parts
    ]
    held = [sum(len(leaf.value) for leaf in leaves) for leaves, _ in both]
    order = np.concatenate([one + end - n for (_, one), end, n in zip(both, np.cumsum(held), held, strict=True)])
    leaves = [leaf for some, _ in both for leaf in some]
    alike: dict[Hashable, list[int]] = {}
    for i, leaf in enumerate(leaves):
        alike.setdefault(leaf.kind, []).append(i)
    by_kind = [i for some in alike.values() for i in some]
    sizes, shift = np.array([len(leaf.value) for leaf in leaves]), np.zeros(len(leaves), np.int64)
    shift[by_kind] = np.cumsum(sizes[by_kind]) - sizes[by_kind]
    order += np.repeat(shift - np.cumsum(sizes) + sizes, sizes)[order]
    return {"parts": tuple(_as_one([leaves[i] for i in some]) for some in alike.values()), "order": order}


def _as_one(parts: list[Estimates]) -> Estimates:
    names = [f.name for f in fields(parts[0]) if isinstance(getattr(parts[0], f.name), np.ndarray)]
    return replace(parts[0], **{name: np.concatenate([getattr(part, name) for part in parts]) for name in names})


@dataclass(frozen=True, eq=False)
class Result:
    """An answer: keys, estimates, counts and flags of equal length.

    Attributes
    ----------
    keys : DataFrame
        What each number is about.
    estimates : Estimates
        The numbers.
    counts : mapping of str to ndarray
        Further columns, named for what they count.
    flag : ndarray of str
        What to know before using the number; empty where there is nothing.
    confidence_level : float
        Level that `to_frame` shows.
    """

    title: ClassVar[str] = "Result"

    keys: pd.DataFrame
    estimates: Estimates
    flag: np.ndarray
    counts: Mapping[str, np.ndarray] = field(default_factory=dict)
    confidence_level: float = 0.95

    def to_frame(self) -> pd.DataFrame:
        """Return one tidy row per estimate.

        Returns
        -------
        DataFrame
            The keys, then estimate, std_error, low, high, confidence_level, counts, flag.
        """
        low, high = self.estimates.bounds(self.confidence_level)
        frame = self.keys.assign(
            estimate=self.estimates.value,
            std_error=self.estimates.std_error,
            low=low,
            high=high,
            confidence_level=self.confidence_level,
        )
        return frame.assign(**dict(self.counts), flag=self.flag)

    def confidence_interval(self, confidence_level: float = 0.95) -> pd.DataFrame:
        """Return the intervals at another level, without computing the answer again.

        Parameters
        ----------
        confidence_level : float
            Between 0 and 1.

        Returns
        -------
        DataFrame
            The keys, then low, high, confidence_level.

        Raises
        ------
        ValueError
            If the level is not between 0 and 1.
        """
        level = checks.confidence_level(confidence_level)
        low, high = self.estimates.bounds(level)
        return self.keys.assign(low=low, high=high, confidence_level=level)

    def summary(self) -> str:
        """Return the answer as a plain text table; numbers to four digits."""
        from pandas.api.types import is_numeric_dtype

        frame = self.to_frame().drop(columns="confidence_level")
        rows = [[plain_number(value) for value in row] for row in frame.to_numpy(dtype=object)]
        numbers = [i for i, name in enumerate(frame.columns) if is_numeric_dtype(frame[name])]
        table = text_table([[str(name) for name in frame.columns], *rows], right=numbers, width=0)
        return f"{self.title}, intervals at {100 * self.confidence_level:g} %\n{table}"

    def __repr__(self) -> str:
        """Return one line."""
        return f"<{type(self).__name__}: {len(self.keys)} rows at {100 * self.confidence_level:g} % confidence>"

    def _repr_html_(self) -> str:
        frame = self.to_frame().drop(columns="confidence_level")
        caption = f"{self.title}, intervals at {100 * self.confidence_level:g} %"
        return frame_table(frame, caption, getattr(self, "cautions", ()), self.keys.shape[1])


def joined_flags(parts: list[tuple[BoolArray, str]], n: int) -> np.ndarray:
    """Return, for each of `n` rows, the texts whose masks hold there, joined by semicolons."""
    flag = np.full(n, "", dtype=object)
    for mask, text in parts:
        flag = np.where(mask, np.where(flag == "", text, flag + "; " + text), flag)
    return flag


def printable(text: str) -> str:
    r"""Return text on one line that cannot steer a terminal: control and layout characters as spaces.

    Parameters
    ----------
    text : str
        Such as a name from the data.

    Returns
    -------
    str

    Examples
    --------
    >>> printable("two\nlines")
    'two lines'
    """
    return "".join(char if char.isprintable() else " " for char in text)


def text_table(rows: Sequence[Sequence[str]], *, right: Collection[int] = (), width: int = 100) -> str:
    """Return rows as plain text in columns, left-aligned and indented by two.

    Parameters
    ----------
    rows : sequence of sequences of str
        Cells; all rows of one length.
    right : collection of int
        Columns aligned to the right.
    width : int
        Longest line wished for: the last column is wrapped to keep within it where it can. 0: never wrapped.

    Returns
    -------
    str

    Examples
    --------
    >>> print(text_table([["visits", "1,204", ""], ["joined", "97", "8.1 % of visits"]], right=[1]))
      visits  1,204
      joined     97  8.1 % of visits
    """
    cells = [[printable(cell) for cell in row] for row in rows]
    widths = [max(len(row[i]) for row in cells) for i in range(len(cells[0]) - 1)] if cells else []
    indent = 2 + sum(each + 2 for each in widths)
    lines = []
    for row in cells:
        head = "".join(
            f"{cell:>{each}}  " if i in right else f"{cell:<{each}}  "
            for i, (cell, each) in enumerate(zip(row, widths, strict=False))
        )
        last = textwrap.wrap(row[-1], max(width - indent, 20)) if width else [row[-1]]
        lines.append(f"  {head}{last[0] if last else ''}".rstrip())
        lines += [" " * indent + more for more in last[1:]]
    return "\n".join(lines)
