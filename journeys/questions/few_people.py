"""What in a summary describes too few people to be shown, and what would tell of it by subtraction."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from journeys.kernels.arrays import BoolArray
from journeys.kernels.records import FIRST_OUTCOME, LAPSED, OPEN
from journeys.kernels.small_cells import Line, buckets_of, is_few, not_shown
from journeys.models.fit import JourneyFit
from journeys.questions.few_groups import FewInGroups, few_in_groups
from journeys.questions.few_moves import few_moves
from journeys.questions.few_stages import few_stages
from journeys.questions.few_touches import few_touches
from journeys.questions.stage_rows import UNDECIDED
from journeys.tally.tables import N_BUCKETS
from journeys.tally.tally import Tally

Names = frozenset[str]
Pairs = frozenset[tuple[str, str]]
HIDDEN = "hidden: "


@dataclass(frozen=True, eq=False)
class FewPeople:
    """What readers of a summary are not shown.

    Attributes
    ----------
    least : int
        Fewer people than this are few; counted by buckets of customers, a lower bound.
    log : bool
        The whole log is of few people.
    conversion : bool
        Those who convert are few, or those who do not.
    starts : bool
        Journeys whose start was seen, or those whose start was not.
    busy : bool
        Customers of very many events.
    outcomes : set of str
        Ways of ending; "undecided" for those under way.
    back : set of str
        Ways of ending after which who came back, or did not, is not told.
    states, moves : sets of str, of (state, next state)
        States that few have left, and moves.
    stages, went : sets of str, of (stage, outcome)
        Stages that few reached, and how journeys left them.
    passed, credited : sets of str, of (touchpoint, rule)
        Touchpoints of converting journeys.
    groups : mapping of str to FewInGroups
        By column that journeys are grouped by.
    """

    least: int
    log: bool
    conversion: bool
    starts: bool
    busy: bool
    outcomes: Names
    back: Names = frozenset()
    states: Names = frozenset()
    moves: Pairs = frozenset()
    stages: Names = frozenset()
    went: Pairs = frozenset()
    passed: Names = frozenset()
    credited: Pairs = frozenset()
    groups: Mapping[str, FewInGroups] = field(default_factory=dict)

    @property
    def text(self) -> str:
        """What stands in the place of a number that is not shown."""
        return f"{HIDDEN}fewer than {self.least} people here or beside it"

    @property
    def anything(self) -> bool:
        """Whether there is anything that a summary does not show."""
        sets = (self.outcomes, self.back, self.states, self.moves, self.stages, self.went, self.passed, self.credited)
        groups = any(one.size or one.within for one in self.groups.values())
        return self.log or self.conversion or self.starts or self.busy or groups or any(sets)


def is_hidden(flag: object) -> bool:
    """Tell whether a flag says that a number is not shown."""
    return str(flag).startswith(HIDDEN)


def few_in_counts(tally: Tally, least: int) -> FewPeople:
    """Return what is not shown of the plain counts of a tally, in all and by group."""
    table = tally.journeys
    names, cell = _endings(tally)
    seen = buckets_of(cell[table["outcome"]], table["bucket"], table["n"], (len(names), N_BUCKETS))
    conversion, outcomes = _few_outcomes(tally, names, seen, least)
    sure = buckets_of(table["sure"].astype(np.int64), table["bucket"], table["n"], (2, N_BUCKETS))
    busy = tally.moves["bucket"][(tally.moves["busy"] == 1) & (tally.moves["n"] > 0)]
    return FewPeople(
        least=least,
        log=is_few(seen, least),
        conversion=conversion,
        starts=any(is_few(part, least) for part in sure),
        busy=0 < len(np.unique(busy)) < least,
        outcomes=outcomes,
        back=_few_back(tally, outcomes, least),
        groups={name: few_in_groups(tally, name, least, every=conversion) for name in tally.rules.by},
    )


def few_people(fit: JourneyFit, tally: Tally, least: int) -> FewPeople:
    """Return what is not shown of a summary.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    tally : Tally
        What it was fitted to.
    least : int
        No number shall describe fewer people.

    Returns
    -------
    FewPeople

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> from journeys.models.model import JourneyModel
    >>> from journeys.tally.count import count_log
    >>> events = ["joined"] * 20 + ["declined"] * 3 + ["visit"] * 30
    >>> first = pd.DataFrame({"member": range(53), "event": "visit", "happened": pd.Timestamp("2025-01-01", tz="UTC")})
    >>> second = first.assign(event=events, happened=pd.Timestamp("2025-01-02", tz="UTC"))
    >>> rules = JourneyRules("member", "happened", "event", converted="joined", churned="declined", silence="30d",
    ...                      complete_history=True, as_of="2025-03-01")
    >>> tally = count_log(pd.concat([first, second]), rules)
    >>> sorted(few_people(JourneyModel().fit(tally), tally, 10).outcomes)
    ['declined', 'lapsed']
    """
    few = few_in_counts(tally, least)
    states, moves = few_moves(fit, tally, few.outcomes, least)
    stages, went = few_stages(tally, few.outcomes, least) if tally.rules.stages else (frozenset(), frozenset())
    passed, credited = few_touches(tally, least) if tally.rules.touchpoints else (frozenset(), frozenset())
    parts: dict[str, Any] = {
        "states": states, "moves": moves, "stages": stages, "went": went, "passed": passed, "credited": credited,
    }  # fmt: skip
    return FewPeople(**{**vars(few), **parts})


def _endings(tally: Tally) -> tuple[list[str], np.ndarray]:
    """Return the ways of ending, and the place of each code among them."""
    outcomes = tally.rules.outcomes
    cell = np.zeros(FIRST_OUTCOME + len(outcomes), np.int64)
    cell[FIRST_OUTCOME:] = np.arange(len(outcomes))
    cell[LAPSED], cell[OPEN] = len(outcomes), len(outcomes) + 1
    return [*outcomes, "lapsed", UNDECIDED], cell


def _few_outcomes(tally: Tally, names: list[str], seen: BoolArray, least: int) -> tuple[bool, Names]:
    """Return whether conversion is not shown, and which ways of ending are not."""
    won = np.isin(names, tally.rules.converted)
    ended = np.array(names) != UNDECIDED
    # the model ends all journeys, so its share that converts has those ended otherwise for a complement
    conversion = any(is_few(seen[part], least) for part in (won, ~won, ~won & ended))
    parts = [np.ones(len(names), bool), ended]
    if not conversion:
        # what readers can add up: how many convert, and how many do not
        parts = [won, ~won & ended, ~won, *parts]
    lines = [Line(np.flatnonzero(part)) for part in parts]
    hidden = not_shown(seen, lines, least, hidden=won & conversion)
    return conversion, frozenset(name for name, one in zip(names, hidden, strict=True) if one)


def _few_back(tally: Tally, outcomes: Names, least: int) -> Names:
    """Return the ways of ending after which the return is not told."""
    gaps, labels = tally.gaps, tally.labels
    hidden = set(outcomes)
    for code in np.unique(gaps["outcome"]).tolist():
        mine = (gaps["outcome"] == code) & (gaps["n"] > 0)
        parts = (gaps["bucket"][mine & (gaps["back"] == back)] for back in (0, 1))
        if any(0 < len(np.unique(part)) < least for part in parts):
            hidden.add(labels[code])
    return frozenset(hidden)
