"""The number that was published then, the number now, and why they differ."""

from __future__ import annotations

from collections.abc import Callable, Hashable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from journeys.checks import instant_text
from journeys.errors import LogError, RulesError, StoreError
from journeys.models.model import JourneyModel
from journeys.nightly.ledger import Ledger, opened
from journeys.nightly.manifest import Generation
from journeys.questions.plain_count import PlainCount, plain_count
from journeys.questions.time_to_convert import IN_THE_END, time_to_convert
from journeys.results import text_table
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    import pandas as pd

T = TypeVar("T")


@dataclass(frozen=True, eq=False)
class ThenAndNow:
    """Two generations of a ledger side by side.

    Attributes
    ----------
    then, now : Generation
    lines : DataFrame
        Columns line, then, then_low, then_high, now, now_low, now_high, difference.
    why : tuple of str
        What makes the difference, one sentence each.
    """

    then: Generation
    now: Generation
    lines: pd.DataFrame
    why: tuple[str, ...]

    def summary(self) -> str:
        """Return both side by side, and why they differ, in words."""
        head = [("", *(f"generation {one.number}" for one in (self.then, self.now)), "difference")]
        rows = [
            (one["line"], _said(one, "then"), _said(one, "now"), _difference(one["line"], one["difference"]))
            for one in self.lines.to_dict("records")
        ]  # fmt: skip
        dates = [("read up to", *(instant_text(one.as_of_us) for one in (self.then, self.now)), "")]
        table = text_table([*head, *dates, *rows], right=[1, 2, 3], width=0)
        return table + "\n\nWhy they differ\n" + "\n".join(f"- {line}" for line in self.why) + "\n"


def tally_of_ledger(path: str | Path, number: int | None = None) -> Tally:
    """Return the counts of a generation of a ledger, the newest if none is named."""
    def newest_or(ledger: Ledger) -> Tally:
        return ledger.tally(_generation(ledger, number))

    return _read(Path(path), newest_or)


def then_and_now(path: str | Path, number: int) -> ThenAndNow:
    """Compare a generation of a ledger with its newest.

    Parameters
    ----------
    path : str or Path
        The ledger.
    number : int
        Of a generation that is kept.

    Returns
    -------
    ThenAndNow

    Raises
    ------
    RulesError
        If there is no such generation.
    StoreError
        If the ledger is damaged.
    """
    import pandas as pd

    def both(ledger: Ledger) -> list[tuple[Generation, Tally]]:
        return [(one, ledger.tally(one)) for one in (_generation(ledger, number), _generation(ledger, None))]

    (then, was), (now, is_) = _read(Path(path), both)
    tallies = [was, is_]
    counts = [plain_count(tally) for tally in tallies]
    read: dict[str, Callable[[PlainCount, Tally], int]] = {
        "rows read": lambda _, tally: tally.n_rows,
        "people": lambda plain, _: plain.n_people,
        "journeys": lambda plain, _: plain.n_journeys,
        "converted so far": lambda plain, _: plain.n_converted,
        "undecided yet": lambda plain, _: plain.n_undecided,
    }
    rows = []
    for line, of in read.items():
        a, b = (float(of(plain, tally)) for plain, tally in zip(counts, tallies, strict=True))
        rows.append((line, a, np.nan, np.nan, b, np.nan, np.nan, b - a))
    a3, b3 = (_expected(tally) for tally in tallies)
    rows.append((_EXPECTED, *a3, *b3, b3[0] - a3[0]))
    names = ["line", "then", "then_low", "then_high", "now", "now_low", "now_high", "difference"]
    return ThenAndNow(then, now, pd.DataFrame(rows, columns=names), _why(then, now, *counts))


def _read(path: Path, what: Callable[[Ledger], T]) -> T:
    """Return something of a ledger; read once more where a night may have replaced its files meanwhile."""
    ledger = opened(path)
    try:
        return what(ledger)
    except (StoreError, FileNotFoundError):
        again = opened(path)
        if again.manifest == ledger.manifest:
            raise
        return what(again)


_EXPECTED = "expected to convert in the end"


def _generation(ledger: Ledger, number: int | None) -> Generation:
    kept = [] if ledger.manifest is None else ledger.manifest.generations
    if not kept:
        msg = f"{ledger.folder} has published nothing yet; run `journeys nightly` first"
        raise StoreError(msg)
    if number is None:
        return kept[-1]
    for one in kept:
        if one.number == number:
            return one
    there = ", ".join(f"{one.number} ({instant_text(one.as_of_us)[:10]})" for one in kept[-24:])
    msg = f"--generation {number}: is not kept; there are {there}"
    raise RulesError(msg)


def _expected(tally: Tally) -> tuple[float, float, float]:
    try:
        frame = time_to_convert(JourneyModel().fit(tally)).to_frame()
    except LogError:
        return np.nan, np.nan, np.nan
    one = frame[(frame.measure == "converted") & (frame.horizon == IN_THE_END)].iloc[0]
    return float(one.estimate), float(one.low), float(one.high)


def _why(then: Generation, now: Generation, was: PlainCount, is_: PlainCount) -> tuple[str, ...]:
    """Return what has happened between two generations."""
    if then.number == now.number:
        return ("they are the same generation",)
    days = (now.as_of_us - then.as_of_us) / 86_400e6
    decided = (is_.n_journeys - is_.n_undecided) - (was.n_journeys - was.n_undecided)
    lines = [
        f"{days:,.1f} more days of the log are read: {now.n_rows - then.n_rows:,} more rows",
        f"{is_.n_journeys - was.n_journeys:,} more journeys have begun",
        f"{decided:,} journeys have been decided since, {is_.n_converted - was.n_converted:,} of them converted; "
        f"{was.n_undecided:,} were undecided then",
    ]
    if now.rebuilt != then.rebuilt:
        lines.append(
            f"all inputs were counted anew in generation {now.rebuilt}: rows that had come too late for the ledger "
            f"before ({then.n_too_late:,} by then) are in the number now"
        )
    elif now.n_too_late != then.n_too_late:
        n = now.n_too_late - then.n_too_late
        rows = "1 row has come too late since and is" if n == 1 else f"{n:,} rows have come too late since and are"
        lines.append(f"{rows} in neither number")
    if now.rules != then.rules:
        lines.append(f"the rules are others: {then.rules} then, {now.rules} now (checksums)")
    return tuple(lines)


def _said(row: Mapping[Hashable, Any], side: str) -> str:
    value, low, high = (row[f"{side}{bound}"] for bound in ("", "_low", "_high"))
    if not np.isfinite(value):
        return "cannot be said"
    if row["line"] != _EXPECTED:
        return f"{value:,.0f}"
    return f"{100 * value:.1f} % ({100 * low:.1f}–{100 * high:.1f})"


def _difference(line: str, value: float) -> str:
    if not np.isfinite(value):
        return ""
    return f"{100 * value:+.1f} points" if line == _EXPECTED else f"{value:+,.0f}"
