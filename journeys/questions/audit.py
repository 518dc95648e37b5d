"""Can this log carry the model: what was left out of it, and what it is too short or too thin for."""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import nullcontext
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from journeys.checks import duration_text
from journeys.intake.people import People
from journeys.intake.read import open_log
from journeys.intake.rules import JourneyRules
from journeys.markup import frame_table
from journeys.models.model import refuse_without_outcome
from journeys.questions.audit_checks import NO, Check, of_counts, of_patterns, of_silences
from journeys.questions.silences import COLUMNS, other_silences
from journeys.results import text_table
from journeys.tally.count import count_log
from journeys.tally.patterns import look_again
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    import pandas as pd

# Row numbers told per finding, and characters per cell, in the text for people.
SHOWN, LONGEST = 5, 40


@dataclass(frozen=True, eq=False)
class Audit:
    """Findings and verdicts on one log.

    Attributes
    ----------
    tally : Tally
        The counts looked at.
    checks : DataFrame
        One row per check: check_name, value, verdict ("good", "with care", "no"), note.
    silences : DataFrame
        What other silences would say (see `journeys.questions.silences.other_silences`); no rows for a tally, of which
        that cannot be told.
    """

    tally: Tally
    checks: pd.DataFrame
    silences: pd.DataFrame

    @property
    def findings(self) -> pd.DataFrame:
        """Rows left out and oddities: code, column, n, rows, message."""
        return self.tally.findings

    @property
    def carries_model(self) -> bool:
        """Whether a model can be fitted at all."""
        return bool((self.checks["verdict"] != NO).all())

    def to_frame(self) -> pd.DataFrame:
        """Return the checks, one tidy row each."""
        return self.checks.copy()

    def summary(self) -> str:
        """Return checks and findings as plain text."""
        says = "can" if self.carries_model else "cannot"
        checks = [
            [row["verdict"], row["check_name"], row["value"], row["note"]] for row in self.checks.to_dict("records")
        ]
        found = [
            [row["code"], row["column"], f"{row['n']:,}", row["message"] + _where(row["rows"], row["n"])]
            for row in self.findings.to_dict("records")
        ]
        return (
            f"{self.tally.summary()}\nThis log {says} carry the model.\n\nChecks\n{text_table(_short(checks))}\n\n"
            + _silences_text(self.silences)
            + ("Findings: kind, column, rows (their numbers count from 0 over the whole input)\n" if found else "")
            + (text_table(_short(found), right=[2]) if found else "Findings: none")
        )

    def __repr__(self) -> str:
        """Return one line."""
        says = "can carry the model" if self.carries_model else "cannot carry the model"
        n = len(self.findings)
        return f"<Audit: the log {says}; {n} kind{'' if n == 1 else 's'} of findings>"

    def _repr_html_(self) -> str:
        says = "can" if self.carries_model else "cannot"
        found = self.findings.drop(columns="rows")
        silences = frame_table(self.silences, "Other silences", n_keys=1) if len(self.silences) else ""
        return (
            frame_table(self.checks, f"Checks: this log {says} carry the model", n_keys=1)
            + silences
            + frame_table(found, "Findings" if len(found) else "Findings: none", n_keys=1)
        )


def audit(
    source: Any, rules: JourneyRules | None = None, *, identity: Any = None, progress: bool = False
) -> Audit:
    """Return what was left out of a log and whether it can carry the model.

    Parameters
    ----------
    source : log or Tally
        Anything `journeys.tally` reads, or a tally. A log is read once more for its patterns and once for every
        silence; of a tally these are not told.
    rules : JourneyRules, optional
        What a journey is; not needed for a tally.
    identity : path, DataFrame, Arrow table, optional
        Table of people first seen under another id, as `journeys.tally` takes it.
    progress : bool
        Show a progress bar on stderr.

    Returns
    -------
    Audit
        Findings and checks.

    Raises
    ------
    LogError
        If the log cannot be read, or no outcome named in the rules was ever seen.
    TypeError
        If a log comes without rules.

    Examples
    --------
    >>> import pandas as pd
    >>> days = pd.to_datetime(["2025-01-01", "2025-01-02", "2025-04-01"], utc=True)
    >>> log = pd.DataFrame({"member": [1, 1, 2], "event": ["visit", "joined", "visit"], "happened": days})
    >>> rules = JourneyRules("member", "happened", "event", converted=["joined"], silence="30d",
    ...                      complete_history=True)
    >>> audit(log, rules).carries_model
    True
    """
    import pandas as pd

    if isinstance(source, Tally):
        refuse_without_outcome(source)
        return Audit(source, _frame(of_counts(source)), pd.DataFrame(columns=COLUMNS))
    if rules is None:
        msg = "rules are missing; wanted a JourneyRules beside a log"
        raise TypeError(msg)
    log = open_log(source, rules.columns, text=(rules.event,), ids=rules.id_columns)
    with log.spooled() if log.one_shot else nullcontext(log) as kept:
        tally = count_log(kept, rules, identity=identity, progress=progress)
        refuse_without_outcome(tally)
        checks = of_counts(tally) + of_patterns(look_again(kept, tally, People.here(identity)), tally)
        silences = other_silences(kept, tally, identity=identity, progress=progress)
    if rules.silence_us is not None:
        checks.append(of_silences(silences, duration_text(rules.silence_us)))
    return Audit(tally, _frame(checks), silences)


def _frame(checks: list[Check]) -> pd.DataFrame:
    import pandas as pd

    return pd.DataFrame(checks, columns=Check._fields)


def _silences_text(silences: pd.DataFrame) -> str:
    """Return the table of other silences for people."""
    if not len(silences):
        return ""
    rows = [["silence", "fell quiet", "later came back", "soon back", "convert in the end", ""]]
    for row in silences.to_dict("records"):
        told = [_share(row, "came_back"), _share(row, "soon_back"), _share(row, "conversion")]
        n = "" if _missing(row["n_silent"]) else f"{row['n_silent']:,.0f}"
        rows.append([row["silence"], n, *told, row["note"] or ""])
    about = "Other silences (soon back: within another quarter of it)\n"
    return about + text_table(_short(rows), right=[1, 2, 3, 4]) + "\n\n"


def _missing(value: Any) -> bool:
    """Tell whether a cell holds no number."""
    return value is None or value != value


def _share(row: Any, name: str) -> str:
    """Return a share of a row with its interval, if it has one."""
    share, low, high = (row.get(name + end) for end in ("", "_low", "_high"))
    if _missing(share):
        return ""
    told = f"{100 * share:.1f} %"
    return told if _missing(low) or _missing(high) else f"{told} ({100 * low:.1f}-{100 * high:.1f})"


def _where(rows: Sequence[int], n: int) -> str:
    """Return the first row numbers of a finding, for its message."""
    shown = ", ".join(str(row) for row in rows[:SHOWN])
    return f" [{'row' if n == 1 else 'rows'} {shown}{', …' if n > SHOWN else ''}]" if shown else ""


def _short(rows: list[list[str]]) -> list[list[str]]:
    """Return rows whose cells, the last aside, fit a table: a name from the data can be of any length."""
    return [
        [*(cell if len(cell) <= LONGEST else cell[: LONGEST - 1] + "…" for cell in row[:-1]), row[-1]] for row in rows
    ]


def _percent(share: float, digits: int = 1) -> str:
    return f"{100 * share:.{digits}f} %"
