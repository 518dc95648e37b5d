"""How many steps back matter: tests of the order of the chain, corrected for customers who make many moves."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.kernels.arrays import IntArray
from journeys.kernels.order_tests import (
    Departure,
    Histories,
    TableTests,
    departures,
    information,
    largest_departure,
    table_tests,
)
from journeys.questions.contexts import histories_of, state_words
from journeys.questions.corrected import corrected
from journeys.results import PLAIN, Estimates, Result
from journeys.tally.tally import Tally

ALPHA = 0.05
NO_MOVES = "not run: no move with a known past was followed for a whole silence"
NO_SILENCE = "not run: without a silence no stay is known to have been followed to its end"
NOTHING_TO_TELL = "not run: nothing to tell apart"
TOO_FEW_CUSTOMERS = "not run: fewer than 10 groups of customers to tell chance by"
# Buckets that are not empty.
ENOUGH_BUCKETS = 10
THIN = "fewer moves than cells: p-values are rough"


@dataclass(frozen=True, eq=False, repr=False)
class MemoryResult(Result):
    """Tests of each order against the next, and for the last of them state by state."""

    title: ClassVar[str] = "How many steps back matter"


@dataclass(frozen=True)
class OrderTest:
    """One test: all states together, or one of them."""

    order: int
    state: str
    x2: float
    df: int
    design_effect: float
    n_moves: float
    p_alone: float
    size: float
    example: str
    bic_lower: float
    bic_higher: float
    flag: str


def memory_check(
    tally: Tally, *, by: str | Sequence[str] | None = None, confidence_level: float = 0.95
) -> MemoryResult:
    """Return whether what a journey does next depends on more than the state it is in.

    Parameters
    ----------
    tally : Tally
        The counts. One of order k tells of orders up to k + 1 (see `journeys.tally`).
    by : str or sequence of str, optional
        Columns that journeys are grouped by: one block of rows per group.
    confidence_level : float
        Between 0 and 1; no number here has an interval, it is only carried along.

    Returns
    -------
    MemoryResult
        One row per order compared with the next, with `state` blank, and for the highest also one per state.
        `estimate` is a size to look at: by how much the share of the move named in `example` differs, in its context,
        from the share in its state. It is that of the move that departs most, so no fair estimate of anything, and has
        no interval. `statistic` is Pearson's X2, `design_effect` by how much moves of the same customers inflate it,
        `statistic_corrected` their ratio, `df` its degrees of freedom, `p_value` its chance under the lower
        order, `p_value_corrected` the same corrected for how many rows are compared. `bic_lower` and `bic_higher` are
        for information. `verdict` says it in words.

    Raises
    ------
    TypeError
        If `tally` is not a tally.
    ValueError
        If a column is not one that journeys are grouped by.

    Notes
    -----
    Counted are moves out of states that were entered at least a silence before the end of the log, whose past is
    known: with younger stays only the quick moves would be there, and a right chain would be rejected. Pearson's
    statistic is divided by the mean design effect over buckets of customers (Rao and Scott) before it is compared with
    the chi square distribution. p-values are corrected by Holm's method, over the orders of all groups, and
    over the states of all groups.

    References
    ----------
    T. W. Anderson, L. A. Goodman, Statistical inference about Markov chains, Ann. Math. Statist. 28 (1957) 89-110.
    J. N. K. Rao, A. J. Scott, J. Amer. Statist. Assoc. 76 (1981) 221-230. S. Holm, Scand. J. Statist. 6 (1979) 65-70.

    Examples
    --------
    Who came by post joins at the fair, who came from the street does not:

    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> from journeys.tally.count import count_log
    >>> paths = [["post", "fair", "joined"], ["street", "fair", "left"]] * 40
    >>> rows = [(who, pd.Timestamp("2025-01-01", tz="UTC") + pd.Timedelta(days=day), event)
    ...         for who, path in enumerate(paths) for day, event in enumerate(path)]
    >>> log = pd.DataFrame(rows, columns=["member", "happened", "event"]).sort_values("happened", kind="stable")
    >>> rules = JourneyRules("member", "happened", "event", converted="joined", churned="left", silence="30d",
    ...                      complete_history=True, as_of="2025-06-01")
    >>> frame = memory_check(count_log(log, rules)).to_frame()
    >>> frame[["check_name", "state", "verdict"]].values.tolist()[1]
    ['order 1 or 2', '', 'differs: 2 states of the past tell more than 1']
    """
    if not isinstance(tally, Tally):
        msg = f"tally: got {type(tally).__name__}; wanted what journeys.tally returns"
        raise TypeError(msg)
    level = checks.confidence_level(confidence_level)
    if by is None:
        return _result([((), one) for one in order_tests(tally)], [], level)
    names = [by] if isinstance(by, str) else list(by)
    parts = tally.split(names)
    return _result([(values, one) for values, part in parts.items() for one in order_tests(part)], names, level)


def order_tests(tally: Tally) -> list[OrderTest]:
    """Return the tests of one tally: order by order, then state by state for the highest."""
    histories = histories_of(tally)
    if not len(histories.n):
        why = NO_SILENCE if tally.rules.silence_us is None else NO_MOVES
        return [_not_run(order, why) for order in range(1, histories.order + 1)]
    if len(np.unique(histories.bucket)) < ENOUGH_BUCKETS:
        return [_not_run(order, TOO_FEW_CUSTOMERS) for order in range(1, histories.order + 1)]
    each = [_Compared.of(tally, histories, order) for order in range(1, histories.order + 1)]
    bic = information(histories, [one.whole for one in each])
    whole = [one.together(float(bic[one.order - 1]), float(bic[one.order])) for one in each]
    last = each[-1]
    return whole + [last.of_state(i) for i in np.flatnonzero(last.by_state.df > 0).tolist()]


@dataclass(frozen=True, eq=False)
class _Compared:
    """One order against the one below."""

    tally: Tally
    order: int
    strata: IntArray
    by_state: TableTests
    most: list[Departure | None]

    @classmethod
    def of(cls, tally: Tally, histories: Histories, order: int) -> _Compared:
        counts, strata = histories.counts(order)
        return cls(tally, order, strata, table_tests(counts), departures(counts))

    @cached_property
    def whole(self) -> TableTests:
        """All strata together."""
        return self.by_state.together()

    def together(self, bic_lower: float, bic_higher: float) -> OrderTest:
        """Return the test of all states."""
        return self._told(self.whole, 0, "", largest_departure(self.most), bic_lower, bic_higher)

    def of_state(self, at: int) -> OrderTest:
        """Return the test of one state, or of one history."""
        name = " then ".join(state_words(self.tally, int(code)) for code in self.strata[at])
        return self._told(self.by_state, at, name, self.most[at], np.nan, np.nan)

    def _told(
        self, tests: TableTests, at: int, state: str, most: Departure | None, bic_lower: float, bic_higher: float
    ) -> OrderTest:
        df, n = int(tests.df[at]), float(tests.n[at])
        return OrderTest(
            order=self.order,
            state=state,
            x2=float(tests.x2[at]) if df else np.nan,
            df=df,
            design_effect=float(tests.design_effect[at]),
            n_moves=n,
            p_alone=float(tests.p_value[at]),
            size=np.nan if most is None else most.share - most.expected,
            example="" if most is None else self._example(most),
            bic_lower=bic_lower,
            bic_higher=bic_higher,
            flag=NOTHING_TO_TELL if df == 0 else THIN if n < df else "",
        )

    def _example(self, most: Departure) -> str:
        path = [most.row, *self.strata[most.stratum].tolist()]
        *before, now = [state_words(self.tally, code) for code in path]
        after = f"{now} after {' then '.join(before)}" if before else now
        return (
            f"from {after} to {self.tally.labels[most.column]}: {100 * most.share:.1f} % of {most.n:,.0f}, "
            f"else {100 * most.expected:.1f} %"
        )


def _not_run(order: int, why: str) -> OrderTest:
    blank = np.nan
    return OrderTest(order, "", blank, 0, blank, 0.0, blank, blank, "", blank, blank, why)


def _result(rows: list[tuple[tuple[object, ...], OrderTest]], names: list[str], level: float) -> MemoryResult:
    import pandas as pd

    tests = [one for _, one in rows]
    keys = {name: [values[i] for values, _ in rows] for i, name in enumerate(names)}
    keys |= {
        "check_name": [f"order {one.order - 1} or {one.order}" for one in tests],
        "state": [one.state for one in tests],
    }
    alone = np.array([one.p_alone for one in tests])
    each = np.array([one.state != "" for one in tests], bool)
    p = np.full(len(tests), np.nan)
    p[~each], p[each] = corrected(alone[~each]), corrected(alone[each])
    effect = np.array([one.design_effect for one in tests])
    x2 = np.array([one.x2 for one in tests])
    blank = np.full(len(tests), np.nan)
    size = np.array([one.size for one in tests])
    return MemoryResult(
        keys=pd.DataFrame(keys),
        estimates=Estimates(
            size, blank, blank, np.full(len(tests), PLAIN, dtype=object), blank, np.zeros(len(tests), bool)
        ),
        flag=np.array([one.flag for one in tests], dtype=object),
        counts={
            "statistic": x2,
            "design_effect": effect,
            "statistic_corrected": np.divide(x2, effect, out=blank.copy(), where=effect > 0),
            "df": np.array([one.df for one in tests]),
            "p_value": alone,
            "p_value_corrected": p,
            "bic_lower": np.array([one.bic_lower for one in tests]),
            "bic_higher": np.array([one.bic_higher for one in tests]),
            "n_moves": np.array([one.n_moves for one in tests]),
            "example": np.array([one.example for one in tests], dtype=object),
            "verdict": np.array([_verdict(one, float(chance)) for one, chance in zip(tests, p, strict=True)], object),
        },
        confidence_level=level,
    )


def _verdict(test: OrderTest, p: float) -> str:
    if np.isnan(p):
        return test.flag or NOTHING_TO_TELL
    more = "the state a journey is in tells" if test.order == 1 else f"{test.order} states of the past tell"
    if p < ALPHA:
        return f"differs: {more} more than {test.order - 1 or 'none'}"
    return f"agrees: {more} no more than {test.order - 1 or 'none'}"
