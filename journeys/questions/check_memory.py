"""Whether one chain fits all moves: of journeys that came another way, of all groups, of earlier and later ones."""

from __future__ import annotations

import numpy as np

from journeys.intake.group_checks import COHORT, PERIOD
from journeys.kernels.arrays import IntArray, sum_at
from journeys.kernels.order_tests import departures, largest_departure, table_tests
from journeys.models.fit import JourneyFit
from journeys.questions.check_rows import CheckRow, not_run
from journeys.questions.contexts import tables_by_part
from journeys.questions.memory_check import order_tests
from journeys.tally.tally import Tally

MEMORY, GROUPS, LATER = "memory", "between groups", "earlier and later"
FURTHER_BACK = (
    "see which state remembers with `memory_check`; give it several names in `states`, or count and fit with a higher "
    "`order`"
)
APART = "ask each group by itself with `by`"
IN_TIME = "do not average over the change: split the log there (`split_at`) and look at the later part"


def memory_row(fit: JourneyFit, tally: Tally) -> CheckRow:
    """Return the check of one more step of memory than the fit has."""
    found = next(one for one in order_tests(tally) if one.order == fit.nodes.order + 1 and not one.state)
    if np.isnan(found.p_alone):
        return not_run(MEMORY, found.flag.removeprefix("not run: "))
    compared = (
        f"{found.n_moves:,.0f} moves: chi square {found.x2 / found.design_effect:,.1f} on {found.df} degrees of "
        f"freedom (design effect {found.design_effect:.2f}); most apart {found.example}"
    )
    size = 100.0 * found.size
    differs = "where a journey goes depends on where it came from"
    return CheckRow(MEMORY, "", compared, size, "points", p_alone=found.p_alone, verdict=differs, advice=FURTHER_BACK)


def group_rows(tally: Tally) -> list[CheckRow]:
    """Return the checks between groups, column by column, and between earlier and later journeys."""
    names = [name for name in tally.rules.by if name not in (COHORT, PERIOD)] if tally.groups else []
    rows = [_between(tally, name, GROUPS) for name in names]
    if not names:
        rows.append(not_run(GROUPS, "the rules do not group journeys", "name columns to group `by` in the rules"))
    in_time = [name for name in (COHORT, PERIOD) if tally.groups and name in tally.rules.by]
    rows += [_between(tally, name, LATER) for name in in_time]
    if not in_time:
        why = "journeys are not told apart by when they began"
        rows.append(not_run(LATER, why, 'give `cohort = "month"` or `split_at` in the rules'))
    return rows


def _between(tally: Tally, name: str, check_name: str) -> CheckRow:
    """Test whether moves are the same in all parts that a column makes."""
    part, names = _parts(tally, name)
    counts = tables_by_part(tally, part)
    tests = table_tests(counts)
    whole = tests.together()
    if not len(whole.x2) or not whole.df[0] > 0:
        why = f"no two of the parts by {name} have moves to compare that were followed for a whole silence"
        return not_run(check_name, why, about=name)
    if whole.n[0] < whole.df[0]:
        why = f"{whole.n[0]:,.0f} moves are too few for the {len(names)} parts by {name}"
        return not_run(check_name, why, "make the groups larger", about=name)
    most, size, example = largest_departure(departures(counts)), np.nan, ""
    if most is not None:
        size = 100.0 * (most.share - most.expected)
        example = (
            f"; most apart from {tally.states[most.stratum]} to {tally.labels[most.column]}: "
            f"{100 * most.share:.1f} % of {most.n:,.0f} with {name} {names[most.row]}, "
            f"{100 * most.expected:.1f} % in all"
        )
    compared = (
        f"{whole.n[0]:,.0f} moves in {len(names)} parts: chi square {whole.corrected[0]:,.1f} on {whole.df[0]} degrees "
        f"of freedom{example}"
    )
    differs = f"moves are not the same for all of {name}"
    return CheckRow(
        check_name, name, compared, size, "points", p_alone=float(whole.p_value[0]), verdict=differs,
        advice=APART if check_name == GROUPS else IN_TIME,
    )  # fmt: skip


def _parts(tally: Tally, name: str) -> tuple[IntArray, list[str]]:
    """Return the part that each group belongs to, and the names of the parts; cohorts make an earlier and a later."""
    at = tally.rules.by.index(name)
    values = [group[at] for group in tally.groups]
    distinct = list(dict.fromkeys(values))
    if name != COHORT:
        return np.array([distinct.index(value) for value in values]), [str(value) for value in distinct]
    # cohorts are named so that they sort by when they began
    distinct = sorted(distinct, key=str)
    of_group = np.array([distinct.index(value) for value in values])
    per_group = sum_at(tally.journeys["group"].astype(np.int64), tally.journeys["n"].astype(float), len(values))
    sofar = np.cumsum(sum_at(of_group, per_group, len(distinct)))
    first = int(np.argmin(np.abs(sofar[:-1] - sofar[-1] / 2))) if len(distinct) > 1 else 0
    halves = [f"up to {distinct[first]}", f"after {distinct[first]}"]
    return (of_group > first).astype(np.int64), halves
