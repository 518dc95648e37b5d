"""Whether to believe a fit: everything that can be held against its log, in one table."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from journeys import checks
from journeys.errors import LogError
from journeys.models.fit import JourneyFit
from journeys.models.group_fits import group_fits
from journeys.models.what_if import WhatIf
from journeys.questions.check_log import log_rows
from journeys.questions.check_memory import group_rows, memory_row
from journeys.questions.check_rows import AGREES, DIFFERS, NOT_RUN, CheckRow, not_run
from journeys.questions.check_ways import way_rows
from journeys.questions.corrected import corrected
from journeys.questions.touch_shares import outcome_codes
from journeys.results import PLAIN, Estimates, Result, text_table

if TYPE_CHECKING:
    import pandas as pd

ALPHA = 0.05
CORRECTION = "p-values are corrected for their number (Holm)"


@dataclass(frozen=True, eq=False, repr=False)
class CheckResult(Result):
    """Checks of a fit, one row each."""

    title: ClassVar[str] = "Whether to believe the model"

    @property
    def differing(self) -> pd.DataFrame:
        """The rows of `to_frame` in which model and log differ beyond chance."""
        frame = self.to_frame()
        return frame[frame["verdict"].str.startswith(DIFFERS)]

    def summary(self) -> str:
        """Return one line per check, and below it what was compared and what to do where something is the matter."""
        frame = self.to_frame()
        keys = [name for name in self.keys if name not in ("check_name", "about")]
        lines = [[*map(str, row)] for row in frame[[*keys, "check_name", "about", "verdict"]].to_numpy(dtype=object)]
        told = [f"{self.title}; {CORRECTION}", text_table(lines)]
        for row in frame[frame["advice"] != ""].to_dict("records"):
            said = "; ".join(part for part in (row["compared"], row["advice"]) if part)
            told.append(f"{row['check_name']}: {said}")
        return "\n".join(told)


def check(
    fit: JourneyFit,
    to: str | Collection[str] | None = None,
    *,
    by: str | Sequence[str] | None = None,
    rng: int | np.random.Generator | None = None,
    confidence_level: float = 0.95,
) -> CheckResult:
    """Return whether the model may be believed: what it says beside what its log says without it.

    Parameters
    ----------
    fit : JourneyFit
        A fit to a tally.
    to : str or collection of str, optional
        One or more outcomes; default: all converted outcomes together.
    by : str or sequence of str, optional
        Columns that journeys are grouped by: the checks of each group's own fit.
    rng : int or numpy.random.Generator, optional
        Source of chance for the largest of several differences; default: started from the checksum of the tally.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    CheckResult
        One row per check: `check_name`, `about` (a column or touchpoint), `estimate`: the size of the disagreement,
        model less log, in `unit`; its interval where it has one; `compared`: both sides in words; `p_value`, for
        itself; `p_value_corrected`, for the number of tests; `verdict`: "agrees", "differs: …", "note: …", "nothing to
        note", or "not run: …" with the reason; `advice`. `.differing` has the rows to worry about.

        Tests: "days to convert" and "steps to convert" (means of those who convert), "curve of conversion" (the time
        at which the curves are most apart), "touchpoints of conversions" (the touchpoint most apart), "memory" (one
        state more of the past), "between groups" (each column of `by`), "earlier and later" (cohorts or periods).
        The others tell what the log is like: "enough events", "ties", "undecided journeys", "unsure entries",
        "end not seen", "without the busy" (conversion without moves made after a customer's first 1,000 events),
        "journeys of one customer" (correlation of converting), "design effect".

    Raises
    ------
    LogError
        If the fit is a known chain or a what-if; if no group can carry a fit.
    ValueError
        If `to` is no outcome, a column is not one that journeys are grouped by, or an argument is not one of those.

    Notes
    -----
    The share that converts in the end is no check: of journeys that have all ended, model and log agree in it whatever
    the chain. What the log says is the Aalen-Johansen estimate of whole journeys with a sure entry, followed while at
    least 20 are at risk; conversions bear its jumps as weights, so that journeys still open do not pull the log to
    quick ones. Days are compared within the last time followed; steps not where the model expects over a hundredth of
    the conversions later. Differences have their linearised variance from the sums of both influences, bucket by
    bucket of customers, so moves of the same customers and journeys in both sides are allowed for. Of several
    differences the largest is compared with draws of the largest that have the same correlations. Memory and groups
    are chi square tests of moves followed for a whole silence, divided by their mean design effect (see
    `memory_check`); "between groups" compares the moves out of each state. p-values are corrected by Holm's method
    over all tests of all groups: where the model is right, the chance of any "differs" is at most about 5 %.

    References
    ----------
    P. K. Andersen, O. Borgan, R. D. Gill, N. Keiding, Statistical Models Based on Counting Processes, Springer 1993,
    section IV.4. J. N. K. Rao, A. J. Scott, J. Amer. Statist. Assoc. 76 (1981) 221-230. S. Holm, Scand. J. Statist. 6
    (1979) 65-70.

    Examples
    --------
    Who came by post joins at the fair, who came from the street does not; the chain cannot know:

    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> from journeys.models.model import JourneyModel
    >>> from journeys.tally.count import count_log
    >>> paths = [["post", "fair", "joined"], ["street", "fair", "left"]] * 40
    >>> rows = [(who, pd.Timestamp("2025-01-01", tz="UTC") + pd.Timedelta(days=day), event)
    ...         for who, path in enumerate(paths) for day, event in enumerate(path)]
    >>> log = pd.DataFrame(rows, columns=["member", "happened", "event"]).sort_values("happened", kind="stable")
    >>> rules = JourneyRules("member", "happened", "event", converted="joined", churned="left", silence="30d",
    ...                      complete_history=True, as_of="2025-06-01")
    >>> check(JourneyModel().fit(count_log(log, rules))).differing["check_name"].tolist()
    ['memory']
    """
    level = checks.confidence_level(confidence_level)
    checks.rng(rng, 0)
    if fit.tally is None or isinstance(fit, WhatIf):
        what = "was changed by hand" if isinstance(fit, WhatIf) else "was given, not fitted to a log"
        msg = f"this chain {what}, so there is no log to hold it against; wanted a fit to a tally"
        raise LogError(msg)
    if outcome_codes(fit, fit.target_mask(to)) is None:
        msg = f"to={to!r} has a state in it; wanted outcomes: whole journeys are compared"
        raise ValueError(msg)
    if by is None:
        return _result([((), row) for row in check_rows(fit, to, rng)], [], level)
    names = [by] if isinstance(by, str) else list(by)
    rows: list[tuple[tuple[object, ...], CheckRow]] = []
    found = group_fits(fit, names)
    if all(one.fit is None for one in found):
        reasons = "; ".join(dict.fromkeys(one.why for one in found))
        msg = f"by: no group of {', '.join(names)} can carry a fit ({reasons}); wanted larger groups or a longer log"
        raise LogError(msg)
    for one in found:
        mine = [not_run("all", one.why)] if one.fit is None else check_rows(one.fit, to, rng)
        rows += [(one.values, row) for row in mine]
    return _result(rows, names, level)


def check_rows(
    fit: JourneyFit, to: str | Collection[str] | None, rng: int | np.random.Generator | None
) -> list[CheckRow]:
    """Return all checks of one fit."""
    tally, codes = fit.tally, outcome_codes(fit, fit.target_mask(to))
    if tally is None or codes is None:
        msg = "fit: got one without a tally; wanted a fit to a log"
        raise ValueError(msg)
    chance = checks.rng(rng, int(tally.checksum, 16))
    return [
        *way_rows(fit, to, codes, chance),
        memory_row(fit, tally),
        *group_rows(tally),
        *log_rows(fit, to, tally),
    ]


def _result(rows: list[tuple[tuple[object, ...], CheckRow]], names: list[str], level: float) -> CheckResult:
    """Return rows as an answer, p-values corrected over all of them."""
    import pandas as pd

    told = [row for _, row in rows]

    def numbers(name: str) -> np.ndarray:
        return np.array([getattr(row, name) for row in told], np.float64)

    def words(name: str) -> np.ndarray:
        return np.array([getattr(row, name) for row in told], dtype=object)

    keys: dict[str, object] = {name: [values[i] for values, _ in rows] for i, name in enumerate(names)}
    keys |= {name: words(name) for name in ("check_name", "about")}
    p = corrected(numbers("p_alone"))
    verdicts = np.array([_verdict(row, chance) for row, chance in zip(told, p.tolist(), strict=True)], dtype=object)
    quiet = [text == AGREES for text in verdicts]
    std_error, blank = numbers("std_error"), np.full(len(told), np.nan)
    return CheckResult(
        keys=pd.DataFrame(keys),
        estimates=Estimates(
            numbers("size"), std_error, numbers("df"), np.full(len(told), PLAIN, dtype=object), blank,
            ~np.isfinite(std_error),
        ),
        flag=np.array([text if text.startswith(NOT_RUN) else "" for text in verdicts], dtype=object),
        counts={
            "unit": words("unit"),
            "compared": words("compared"),
            "p_value": numbers("p_alone"),
            "p_value_corrected": p,
            "verdict": verdicts,
            "advice": np.where(quiet, "", words("advice")),
        },
        confidence_level=level,
    )  # fmt: skip


def _verdict(row: CheckRow, p: float) -> str:
    if np.isnan(p):
        return row.verdict
    return DIFFERS + row.verdict if p < ALPHA else AGREES
