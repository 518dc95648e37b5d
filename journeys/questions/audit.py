"""Can this log carry the model: what was left out of it, and what it is too short or too thin for."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.errors import JourneysWarning, LogError
from journeys.intake.rules import JourneyRules
from journeys.kernels.records import FIRST_OUTCOME, OPEN
from journeys.models.model import JourneyModel, refuse_without_outcome
from journeys.results import text_table
from journeys.tally.count import count_log
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    import pandas as pd

GOOD, CARE, NO = "good", "with care", "no"
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
    """

    tally: Tally
    checks: pd.DataFrame

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
            + ("Findings: kind, column, rows (their numbers count from 0 over the whole input)\n" if found else "")
            + (text_table(_short(found), right=[2]) if found else "Findings: none")
        )

    def __repr__(self) -> str:
        """Return one line."""
        says = "can carry the model" if self.carries_model else "cannot carry the model"
        n = len(self.findings)
        return f"<Audit: the log {says}; {n} kind{'' if n == 1 else 's'} of findings>"

    def _repr_html_(self) -> str:
        return str(self.checks.to_html(index=False) + self.findings.to_html(index=False))


def audit(
    source: Any, rules: JourneyRules | None = None, *, identity: Any = None, progress: bool = False
) -> Audit:
    """Return what was left out of a log and whether it can carry the model.

    Parameters
    ----------
    source : log or Tally
        Anything `journeys.tally` reads, or a tally.
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
        tally = source
    elif rules is None:
        msg = "rules are missing; wanted a JourneyRules beside a log"
        raise TypeError(msg)
    else:
        tally = count_log(source, rules, identity=identity, progress=progress)
    refuse_without_outcome(tally)
    rows = [
        _unreadable(tally),
        _length(tally),
        _sure(tally),
        _undecided(tally),
        *_outcomes(tally),
        *_fit(tally),
    ]
    return Audit(tally, pd.DataFrame(rows, columns=["check_name", "value", "verdict", "note"]))


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


def _unreadable(tally: Tally) -> tuple[str, str, str, str]:
    n = tally.record.n_unreadable
    share, limit = n / max(tally.n_rows, 1), tally.rules.limits["unreadable"]
    verdict = GOOD if share <= limit else NO
    return (
        "unreadable rows",
        f"{n:,} of {tally.n_rows:,} ({_percent(share, 2)})",
        verdict,
        f"limit {_percent(limit, 2)}",
    )


def _length(tally: Tally) -> tuple[str, str, str, str]:
    value = f"{tally.days:.1f} days"
    if tally.rules.silence_us is None:
        return "length of the log", value, GOOD, "no silence given: nothing lapses"
    silences = tally.days / (tally.rules.silence_us / 86_400e6)
    value += f", {silences:.1f} silences"
    if silences <= 1:
        return "length of the log", value, NO, "nobody can be seen to lapse: wanted more than one silence"
    if silences < 1.5:
        return (
            "length of the log",
            value,
            CARE,
            "under one and a half silences: times given conversion are shaky",
        )
    return "length of the log", value, GOOD, ""


def _sure(tally: Tally) -> tuple[str, str, str, str]:
    sure = int(tally.entries["n"][tally.entries["sure"] == 1].sum())
    share = sure / max(tally.n_journeys, 1)
    verdict = NO if not sure else GOOD if share >= 0.5 else CARE
    note = "the others may have begun before the log" if share < 1 else ""
    return "journeys whose start was seen", f"{sure:,} of {tally.n_journeys:,} ({_percent(share)})", verdict, note


def _undecided(tally: Tally) -> tuple[str, str, str, str]:
    n = int(tally.journeys["n"][tally.journeys["outcome"] == OPEN].sum())
    share = n / max(tally.n_journeys, 1)
    return (
        "journeys undecided yet",
        f"{n:,} of {tally.n_journeys:,} ({_percent(share)})",
        GOOD if share < 0.5 else CARE,
        "a plain count treats them as lost",
    )


def _outcomes(tally: Tally) -> list[tuple[str, str, str, str]]:
    rows = []
    for code, name in enumerate(tally.rules.outcomes, start=FIRST_OUTCOME):
        n = int(tally.journeys["n"][tally.journeys["outcome"] == code].sum())
        note = "" if n else "never seen: look at its spelling in the rules"
        rows.append((f"journeys ended by {name}", f"{n:,}", GOOD if n >= 20 else CARE, note))
    bare = tally.record.n("outcome_without_states")
    share = bare / max(int(np.sum(tally.journeys["n"][tally.journeys["outcome"] >= FIRST_OUTCOME])), 1)
    rows.append(
        (
            "outcomes with nothing before them",
            f"{bare:,} ({_percent(share)} of outcomes)",
            GOOD if share < 0.2 else CARE,
            "are their earlier events missing from the log?" if bare else "",
        )
    )
    return rows


def _fit(tally: Tally) -> list[tuple[str, str, str, str]]:
    """Fit once and tell what the rows of the matrix say of themselves."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", JourneysWarning)
            fit = JourneyModel().fit(tally)
    except LogError as error:
        return [("a model can be fitted", "no", NO, str(error))]
    rows = [("a model can be fitted", "yes", GOOD, "")]
    for text in dict.fromkeys(fit.row_flags.values()):
        names = [name for name, flag in fit.row_flags.items() if flag == text]
        rows.append((text, ", ".join(names), CARE, f"answers that lean on these states are flagged {text!r}"))
    return rows
