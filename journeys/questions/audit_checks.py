"""The single checks of an audit: each looks at one thing and says what it saw, and whether that is good."""

from __future__ import annotations

import warnings
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from journeys.checks import instant_text
from journeys.errors import JourneysWarning, LogError
from journeys.kernels.records import FIRST_OUTCOME, OPEN
from journeys.models.model import JourneyModel
from journeys.questions.silences import PILED_UP
from journeys.tally.patterns import Patterns, Recorded, looks_personal
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    import pandas as pd

GOOD, CARE, NO = "good", "with care", "no"
# A state recorded in less of the log's span than this was there for part of the log only; one with fewer rows than
# `_FEW_ROWS` may be so by chance.
WHOLE_SPAN, _FEW_ROWS = 0.8, 20
# More events of one customer than anybody makes by hand (common practice, no source).
TOO_MANY_EVENTS = 1_000


class Check(NamedTuple):
    """One thing looked at: what, what was seen, a verdict and a remark."""

    check_name: str
    value: str
    verdict: str
    note: str


def of_counts(tally: Tally) -> list[Check]:
    """Return the checks that a tally is enough for."""
    return [
        _unreadable(tally), _length(tally), _sure(tally), _undecided(tally), *_outcomes(tally), _largest(tally),
        _names(tally), *_fit(tally),
    ]  # fmt: skip


def of_patterns(patterns: Patterns, tally: Tally) -> list[Check]:
    """Return the checks that a second look at the log is needed for."""
    return [_at_once(patterns), _whole_span(patterns.recorded, tally)]


def of_silences(silences: pd.DataFrame, silence: str) -> Check:
    """Return the check of the silence that the rules give."""
    own = silences[silences["silence"] == silence].to_dict("records")[0]
    name, back, soon = f"quiet for over {silence}", own["came_back"], own["soon_back"]
    value = f"{_percent(back)} later came back" if np.isfinite(back) else "nobody"
    if soon >= PILED_UP:
        note = f"{_percent(soon)} within another quarter of it: a longer silence would cut fewer journeys in two"
        return Check(name, value, CARE, note)
    return Check(name, value, GOOD, "")


def _percent(share: float, digits: int = 1) -> str:
    return f"{100 * share:.{digits}f} %"


def _unreadable(tally: Tally) -> Check:
    n = tally.record.n_unreadable
    share, limit = n / max(tally.n_rows, 1), tally.rules.limits["unreadable"]
    verdict = GOOD if share <= limit else NO
    return Check(
        "unreadable rows",
        f"{n:,} of {tally.n_rows:,} ({_percent(share, 2)})",
        verdict,
        f"limit {_percent(limit, 2)}",
    )


def _length(tally: Tally) -> Check:
    value = f"{tally.days:.1f} days"
    if tally.rules.silence_us is None:
        return Check("length of the log", value, GOOD, "no silence given: nothing lapses")
    silences = tally.days / (tally.rules.silence_us / 86_400e6)
    value += f", {silences:.1f} silences"
    if silences <= 1:
        return Check("length of the log", value, NO, "nobody can be seen to lapse: wanted more than one silence")
    if silences < 1.5:
        return Check(
            "length of the log", value, CARE, "under one and a half silences: times given conversion are shaky"
        )
    return Check("length of the log", value, GOOD, "")


def _sure(tally: Tally) -> Check:
    sure = int(tally.entries["n"][tally.entries["sure"] == 1].sum())
    share = sure / max(tally.n_journeys, 1)
    verdict = NO if not sure else GOOD if share >= 0.5 else CARE
    note = "the others may have begun before the log" if share < 1 else ""
    value = f"{sure:,} of {tally.n_journeys:,} ({_percent(share)})"
    return Check("journeys whose start was seen", value, verdict, note)


def _undecided(tally: Tally) -> Check:
    n = int(tally.journeys["n"][tally.journeys["outcome"] == OPEN].sum())
    share = n / max(tally.n_journeys, 1)
    return Check(
        "journeys undecided yet",
        f"{n:,} of {tally.n_journeys:,} ({_percent(share)})",
        GOOD if share < 0.5 else CARE,
        "a plain count treats them as lost",
    )


def _outcomes(tally: Tally) -> list[Check]:
    rows = []
    for code, name in enumerate(tally.rules.outcomes, start=FIRST_OUTCOME):
        n = int(tally.journeys["n"][tally.journeys["outcome"] == code].sum())
        note = "" if n else "never seen: look at its spelling in the rules"
        rows.append(Check(f"journeys ended by {name}", f"{n:,}", GOOD if n >= 20 else CARE, note))
    bare = tally.record.n("outcome_without_states")
    share = bare / max(int(np.sum(tally.journeys["n"][tally.journeys["outcome"] >= FIRST_OUTCOME])), 1)
    rows.append(
        Check(
            "outcomes with nothing before them",
            f"{bare:,} ({_percent(share)} of outcomes)",
            GOOD if share < 0.2 else CARE,
            "are their earlier events missing from the log?" if bare else "",
        )
    )
    return rows


def _largest(tally: Tally) -> Check:
    """Look for customers with more events than people make."""
    most = int(tally.customers["largest_events"].max())
    busy = tally.moves["busy"] == 1
    share = int(tally.moves["n"][busy].sum()) / max(int(tally.moves["n"].sum()), 1)
    if most <= TOO_MANY_EVENTS:
        return Check("most events of one customer", f"{most:,}", GOOD, "")
    note = f"a robot? leave it out with `exclude`; {_percent(share)} of all moves come after event {TOO_MANY_EVENTS:,}"
    return Check("most events of one customer", f"{most:,}", CARE, note)


def _names(tally: Tally) -> Check:
    """Look for states and values of groups that look as if they told who somebody is; they are not shown."""
    names = [*tally.states, *tally.rules.outcomes, *(str(value) for group in tally.groups for value in group)]
    found: dict[str, int] = {}
    for name in dict.fromkeys(names):
        what = looks_personal(name)
        if what is not None:
            found[what] = found.get(what, 0) + 1
    if not found:
        return Check("names that look like ids or addresses", "none", GOOD, "")
    value = ", ".join(f"{n:,} with {what}" for what, n in found.items())
    note = "names go into every report: gather them under plain ones with `states`, or leave the column out"
    return Check("names that look like ids or addresses", value, CARE, note)


def _at_once(patterns: Patterns) -> Check:
    """Look for events that were stamped for very many customers in one minute."""
    name = "stamped for very many in one minute"
    if not patterns.looked_at_minutes:
        return Check(name, "not looked for", GOOD, "the log holds dates without a time")
    found = [one for one in patterns.recorded if one.n_at_once]
    if not found:
        return Check(name, "none", GOOD, "")
    told = [f"{one.name} ({_percent(one.n_at_once / one.n, 0)} so, up to {one.most:,} customers)" for one in found]
    note = "a mailing is no step of a journey: drop it with `states`, and keep what people do in answer to it"
    return Check(name, ", ".join(told), CARE, note)


def _whole_span(recorded: tuple[Recorded, ...], tally: Tally) -> Check:
    """Look for states that were recorded in part of the log only."""
    name, span = "recorded in part of the log only", max(tally.as_of_us - tally.log_start_us, 1)
    found = [one for one in recorded if one.n >= _FEW_ROWS and one.last_us - one.first_us < WHOLE_SPAN * span]
    if not found:
        return Check(name, "none", GOOD, "")
    told = [
        f"{one.name} ({' to '.join(instant_text(us)[:10] for us in (one.first_us, one.last_us))})" for one in found
    ]
    note = "was it renamed, or new? the chain takes every move as possible throughout: map old names, or set log_start"
    return Check(name, ", ".join(told), CARE, note)


def _fit(tally: Tally) -> list[Check]:
    """Fit once and tell what the rows of the matrix say of themselves."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", JourneysWarning)
            fit = JourneyModel().fit(tally)
    except LogError as error:
        return [Check("a model can be fitted", "no", NO, str(error))]
    rows = [Check("a model can be fitted", "yes", GOOD, "")]
    for text in dict.fromkeys(fit.row_flags.values()):
        names = [name for name, flag in fit.row_flags.items() if flag == text]
        rows.append(Check(text, ", ".join(names), CARE, f"answers that lean on these states are flagged {text!r}"))
    return rows
