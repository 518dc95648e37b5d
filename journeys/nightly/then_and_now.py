"""The number that was published then, the number now, and why they differ."""

from __future__ import annotations

import math
from collections.abc import Callable, Hashable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from journeys.checks import instant_text
from journeys.errors import LogError, RulesError, StoreError
from journeys.markup import LEFT_OUT
from journeys.models.model import JourneyModel
from journeys.nightly.ledger import Ledger, opened
from journeys.nightly.manifest import Generation
from journeys.questions.few_people import HIDDEN, few_in_counts
from journeys.questions.hidden import shown_counts
from journeys.questions.plain_count import PlainCount, plain_count
from journeys.questions.summarise import MIN_CUSTOMERS, few_limit
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
        Columns line, then, then_low, then_high, now, now_low, now_high, difference, flag: numbers about too few people
        are NaN, and those of then from which the difference would tell of too few; the flag says so.
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
        flags = sorted(set(self.lines.flag) - {""})
        notes = "".join(f"\n{LEFT_OUT} {flag}" for flag in flags)
        return table + notes + "\n\nWhy they differ\n" + "\n".join(f"- {line}" for line in self.why) + "\n"


def tally_of_ledger(path: str | Path, number: int | None = None) -> Tally:
    """Return the counts of a generation of a ledger, the newest if none is named."""
    def newest_or(ledger: Ledger) -> Tally:
        return ledger.tally(_generation(ledger, number))

    return _read(Path(path), newest_or)


def then_and_now(path: str | Path, number: int, min_customers: int = MIN_CUSTOMERS) -> ThenAndNow:
    """Compare a generation of a ledger with its newest.

    Parameters
    ----------
    path : str or Path
        The ledger.
    number : int
        Of a generation that is kept.
    min_customers : int
        Numbers about fewer people are left out, and so are differences of fewer, with the number of then that would
        tell them; 0 leaves none out.

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

    def both(ledger: Ledger) -> list[tuple[Generation, Tally]]:
        return [(one, ledger.tally(one)) for one in (_generation(ledger, number), _generation(ledger, None))]

    (then, was), (now, is_) = _read(Path(path), both)
    least = few_limit(min_customers)
    then_, now_ = (_Side.of(tally, least) for tally in (was, is_))
    lines = _lines(then_, now_, least)
    return ThenAndNow(then, now, lines, _why(then, now, then_.plain, now_.plain, lines))


@dataclass(frozen=True, eq=False)
class _Side:
    """What a generation tells, without what is about too few people."""

    n_rows: int
    plain: PlainCount
    expected: tuple[float, float, float]
    expected_hidden: bool

    @classmethod
    def of(cls, tally: Tally, least: int) -> _Side:
        plain = plain_count(tally)
        few = few_in_counts(tally, least) if least > 1 else None
        hidden = few is not None and (few.log or few.conversion)
        expected = (np.nan, np.nan, np.nan) if hidden else _expected(tally)
        return cls(tally.n_rows, plain if few is None else shown_counts(plain, few), expected, hidden)


def _lines(then: _Side, now: _Side, least: int) -> pd.DataFrame:
    """Return the lines of both, without numbers of then that would tell of too few people beside those of now."""
    import pandas as pd

    kept_back = _few_changes(then.plain, now.plain, least)
    text = f"{HIDDEN}fewer than {least} people here or beside it"
    n_more = now.n_rows - then.n_rows
    rows: list[tuple[Any, ...]] = [("rows read", then.n_rows, *_BLANK, now.n_rows, *_BLANK, n_more, "")]
    for name, line in COUNTED.items():
        a, b = (float(getattr(side.plain, name)) for side in (then, now))
        a = math.nan if name in kept_back else a
        rows.append((line, a, *_BLANK, b, *_BLANK, b - a, text if math.isnan(b - a) else ""))
    hidden = then.expected_hidden or now.expected_hidden
    change = now.expected[0] - then.expected[0]
    rows.append((_EXPECTED, *then.expected, *now.expected, change, text if hidden else ""))
    names = ["line", "then", "then_low", "then_high", "now", "now_low", "now_high", "difference", "flag"]
    return pd.DataFrame(rows, columns=names)


def _few_changes(then: PlainCount, now: PlainCount, least: int) -> set[str]:
    """Return the counts of which the number of then would tell, beside that of now, of too few people.

    What adds up for ever, such as journeys begun and decided, has changed by as many as came; how many are undecided
    may hardly change while many come and go. Journeys are those decided and those not, and conversions are decided.
    """
    people, begun, converted, undecided = (getattr(now, name) - getattr(then, name) for name in COUNTED)
    decided = begun - undecided

    def few(*changes: float) -> bool:
        return any(0 < change < least for change in changes)

    found = {
        "n_people": few(people), "n_journeys": few(begun), "n_undecided": few(begun, decided),
        "n_converted": few(converted, decided, decided - converted),
    }  # fmt: skip
    return {name for name, is_few in found.items() if is_few}


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
# What is told of the plain counts, and how.
COUNTED = {
    "n_people": "people", "n_journeys": "journeys", "n_converted": "converted so far", "n_undecided": "undecided yet",
}  # fmt: skip
_BLANK = (math.nan, math.nan)


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


def _why(
    then: Generation, now: Generation, was: PlainCount, is_: PlainCount, told: pd.DataFrame
) -> tuple[str, ...]:
    """Return what has happened between two generations; numbers that `told` leaves out are left out here too."""
    if then.number == now.number:
        return ("they are the same generation",)
    days = (now.as_of_us - then.as_of_us) / 86_400e6
    change = dict(zip(told.line, told.difference, strict=True))
    begun, converted, undecided = (change[COUNTED[name]] for name in ("n_journeys", "n_converted", "n_undecided"))
    lines = [
        f"{days:,.1f} more days of the log are read: {now.n_rows - then.n_rows:,} more rows",
        "some journeys have begun since" if math.isnan(begun) else f"{begun:,.0f} more journeys have begun",
    ]
    if math.isnan(begun - undecided):
        lines.append("some journeys have been decided since; how many is left out, with numbers about too few people")
    else:
        of_them = "" if math.isnan(converted) else f", {converted:,.0f} of them converted"
        decided = f"{begun - undecided:,.0f} journeys have been decided since"
        lines.append(f"{decided}{of_them}; {was.n_undecided:,} were undecided then")
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
        return LEFT_OUT if row["flag"] else "cannot be said"
    if row["line"] != _EXPECTED:
        return f"{value:,.0f}"
    return f"{100 * value:.1f} % ({100 * low:.1f}–{100 * high:.1f})"


def _difference(line: str, value: float) -> str:
    if not np.isfinite(value):
        return ""
    return f"{100 * value:+.1f} points" if line == _EXPECTED else f"{value:+,.0f}"
