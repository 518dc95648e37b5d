"""The whole distribution of the steps or the time to a target from one start, with a band."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from functools import partial
from typing import overload

import numpy as np

from journeys import checks
from journeys.kernels.phase_type import DENSE
from journeys.models.fit import JourneyFit, NotInChainError
from journeys.questions.curve_result import PassageCurve
from journeys.questions.elapsed import NO_DISTRIBUTION, elapsed
from journeys.questions.first_passage import UNIT_DAYS
from journeys.questions.group_curves import GroupCurves, group_curves
from journeys.questions.solved_curve import Solved, SolvedSteps, SolvedTime
from journeys.questions.walks import Walk, timed, walk_to


@overload
def passage_curve(
    fit: JourneyFit,
    to: str | Collection[str] | None = None,
    start: str = "entry",
    clock: str = "time",
    *,
    by: None = None,
    given: bool = False,
    unit: str = "days",
    confidence_level: float = 0.95,
) -> PassageCurve: ...


@overload
def passage_curve(
    fit: JourneyFit,
    to: str | Collection[str] | None = None,
    start: str = "entry",
    clock: str = "time",
    *,
    by: str | Sequence[str],
    given: bool = False,
    unit: str = "days",
    confidence_level: float = 0.95,
) -> GroupCurves: ...


def passage_curve(
    fit: JourneyFit,
    to: str | Collection[str] | None = None,
    start: str = "entry",
    clock: str = "time",
    *,
    by: str | Sequence[str] | None = None,
    given: bool = False,
    unit: str = "days",
    confidence_level: float = 0.95,
) -> PassageCurve | GroupCurves:
    """Return the share that has reached `to` by any time, from one start.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    to : str or collection of str, optional
        An outcome, a state, or several of either; default: all converted outcomes together.
    start : str
        "entry" or a state.
    clock : {"time", "steps"}
        Elapsed time, or the number of moves (the one from entry counts).
    by : str or sequence of str, optional
        Columns that journeys are grouped by: one fit and one curve per group.
    given : bool
        False: the share of all who start, which ends at the probability of ever reaching `to`. True: the share
        of those who do reach it, which ends at 1.
    unit : {"days", "weeks", "hours", "minutes"}
        Unit of time; without meaning for steps.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    PassageCurve
        `.at(times)` for numbers, `.to_frame(times)` for numbers with bands, `.quantile(p)` for the time by
        which a share has reached it. The bands hold at each time by itself. With `by` the same of every group
        (`GroupCurves`): `.at(times)` is an array of shape (n_groups, n_times), the frames have the columns of the
        groups first, `.curves` holds the curve of each group by its values. A group that cannot carry a fit, or
        never sees the start or a state of `to`, has rows without a number, whose flag says why.

    Raises
    ------
    ValueError
        If an argument is none of those; if a column is not one that journeys are grouped by; if `start` is part
        of `to`; if a known chain has dwells on the way without a distribution; if a curve in time is asked of more
        than 500 states.

    Notes
    -----
    Steps: the chain with the target made absorbing, F(n) from powers of its matrix. Time: with K the matrix of
    the dwell densities of the moves, the density f of the time solves f = K_target + K f. It is solved by
    damped fast Fourier transforms on six scales of time, each ten times finer than the one before, to within
    1e-4. Dwells of a fit are spread over their bins with the mean of each; dwells of whole days stay whole.
    The band is linearised over buckets of customers, on the logit scale: one more stay that moves from i to j
    after u adds the chance to come to i, take u, and go on to the target, all in time.

    References
    ----------
    R. Pyke, Markov renewal processes with finitely many states, Ann. Math. Statist. 32 (1961) 1243-1259.
    J. Abate, W. Whitt, Numerical inversion of probability generating functions, Oper. Res. Letters 12 (1992)
    245-251. M. F. Neuts, Matrix-Geometric Solutions in Stochastic Models, Johns Hopkins 1981.

    Examples
    --------
    >>> import pandas as pd
    >>> from scipy import stats
    >>> chain = pd.DataFrame([[0.0, 0.8, 0.2]], index=["basket"], columns=["basket", "joined", "declined"])
    >>> fit = JourneyFit.from_matrix(chain, dwell={"basket": stats.expon(scale=2.0)})
    >>> curve = passage_curve(fit, "joined")
    >>> curve.at([1, 2, 1000]).round(3).tolist()
    [0.315, 0.506, 0.8]
    >>> curve.given_reached().quantile(0.5)["estimate"].round(3).tolist()
    [1.386]
    """
    checks.one_of(clock, ("time", "steps"), "clock")
    checks.one_of(unit, tuple(UNIT_DAYS), "unit")
    level = checks.confidence_level(confidence_level)
    if not isinstance(given, bool):
        msg = f"given: got {given!r}; wanted True (of those who reach it) or False (of all who start)"
        raise ValueError(msg)
    if by is not None:
        _start(fit, start, walk_to(fit, to))
        ask = partial(_curve, to=to, start=start, clock=clock, given=given, unit=unit, confidence_level=level)
        return group_curves(fit, by, ask)
    return _curve(fit, to, start, clock, given=given, unit=unit, confidence_level=level)


def _curve(
    fit: JourneyFit, to: str | Collection[str] | None, start: str, clock: str, *, given: bool, unit: str,
    confidence_level: float,
) -> PassageCurve:  # fmt: skip
    """Return the curve of one chain."""
    walk = walk_to(fit, to)
    row = _start(fit, start, walk)
    share = timed(fit, walk).probability
    solved: Solved = SolvedSteps(fit, walk, row, float(share[row]))
    if clock == "time":
        it = elapsed(fit, walk)
        if it is None:
            msg = (
                f"{NO_DISTRIBUTION} for every move on the way, so there is no curve in time; wanted a frozen "
                'distribution of scipy.stats per state in dwell=, or clock="steps"'
            )
            raise ValueError(msg)
        if len(it.renewal.open_states) > DENSE:
            msg = (
                f"{len(it.renewal.open_states):,} states lead to the target; curves in time are for up to {DENSE}; "
                'wanted fewer states, or clock="steps"'
            )
            raise ValueError(msg)
        solved = SolvedTime(it, row)
    names = np.array(fit.nodes.labels, dtype=object)[walk.is_target]
    return PassageCurve(
        fit=fit,
        start=start,
        to=tuple(names.tolist()),
        clock=clock,
        given=given,
        unit=unit if clock == "time" else "steps",
        confidence_level=confidence_level,
        _walk=walk,
        _solved=solved,
        _share=share,
    )


def _start(fit: JourneyFit, start: str, walk: Walk) -> int:
    rows = np.array([0]) if start == "entry" else fit.nodes.rows_of(start)
    if not len(rows):
        known = ", ".join(repr(name) for name in fit.nodes.labels[: fit.nodes.n_rows][:12])
        raise NotInChainError(start, f"start={start!r} is no state of this chain; wanted one of {known}")
    if len(rows) > 1:
        told = ", ".join(repr(fit.nodes.labels[row]) for row in rows[:12])
        msg = f"start={start!r} stands for {len(rows)} states of this chain; wanted one of {told}"
        raise ValueError(msg)
    row = int(rows[0])
    if walk.is_target[row]:
        msg = f"start={start!r} is itself in `to`, so nothing is awaited; wanted another start, or return_time"
        raise ValueError(msg)
    return row
