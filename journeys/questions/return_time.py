"""Coming back to a state: how likely within a journey, and how soon."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from functools import partial
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.kernels.absorption import Passage
from journeys.kernels.arrays import FloatArray, IntArray
from journeys.kernels.many_passages import Draws
from journeys.kernels.return_walks import Walk, return_walk
from journeys.models.fit import NO_WAY_OUT, JourneyFit
from journeys.questions.bootstrap import MOMENTS, MOST_STATES, Plan, accelerations, linear_spreads, plan, walk_influence
from journeys.questions.by_group import by_group
from journeys.questions.linear import leaning, starts_counted
from journeys.questions.measures import LEVELS, MEASURES, UNIT_DAYS, Walked, measured
from journeys.questions.quantiles import quantiles_of_moves
from journeys.questions.walks import Walk as Moves
from journeys.results import Estimates, Result

NEVER_BACK = "never comes back"


@dataclass(frozen=True, eq=False, repr=False)
class ReturnTimeResult(Result):
    """Probability of coming back to a state, and how many steps or how much time that takes.

    Attributes
    ----------
    unit : str
        "steps", or the unit of time.
    method : str
        How the uncertainty was found.
    resamples : ndarray, shape (n_resamples, n_rows), or None
        As in `FirstPassageResult`.
    """

    title: ClassVar[str] = "Coming back to a state"
    unit: str = "steps"
    method: str = "linearised"
    resamples: FloatArray | None = None


def return_time(
    fit: JourneyFit,
    state: str | Collection[str] | None = None,
    clock: str = "steps",
    *,
    restart: bool = False,
    by: str | Sequence[str] | None = None,
    method: str = "bootstrap",
    n_resamples: int | None = None,
    rng: int | np.random.Generator | None = None,
    unit: str = "days",
    confidence_level: float = 0.95,
) -> ReturnTimeResult:
    """Return whether and how soon a journey that is in a state comes to it again.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    state : str or collection of str, optional
        One state or several; default: all, which above 500 must be named.
    clock : {"steps", "time"}
        Count moves, or time from arriving in the state to arriving there again.
    restart : bool
        Let an ended journey be followed at once by a new one, so that everybody who may come back does. The
        move into the outcome then leads to entry and counts one, as does entry's move into the first state.
        In steps only: how long customers stay away between journeys is no part of the chain.
    by : str or sequence of str, optional
        Columns that journeys are grouped by: one fit per group, their columns first.
    method, n_resamples, rng : str, int, int or numpy.random.Generator
        As in `first_passage`. Each resample is solved for once a state: some seconds for 50 states.
    unit : {"days", "weeks", "hours", "minutes"}
        Unit of time; without meaning for steps.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    ReturnTimeResult
        One row per (state, measure): `probability` of coming back before the journey ends; `median`, `q90`,
        `mean` and `sd` of the steps or time if it comes back; `mean_unconditional`, infinite where some never
        do. In a chain without outcomes, and with `restart`, that is the mean recurrence time, one over the
        state's share of all visits where there is a stationary distribution.

    Raises
    ------
    ValueError
        If an argument is not one of those, or `restart` is asked for in time.

    Notes
    -----
    The state is split in two: its moves lead out of one half, what comes back comes to the other, and the
    answer is the first passage from the first to the second. A move from the state to itself is a return in
    one step. Intervals as in `first_passage`.

    References
    ----------
    J. G. Kemeny, J. L. Snell, Finite Markov Chains, Van Nostrand 1960, chapter IV. B. Efron, R. J. Tibshirani,
    An Introduction to the Bootstrap, Chapman and Hall 1993. B. Efron, Better bootstrap confidence intervals,
    JASA 82 (1987) 171-185.

    Examples
    --------
    >>> import pandas as pd
    >>> weather = pd.DataFrame([[0.5, 0.5], [0.25, 0.75]], index=["wet", "dry"], columns=["wet", "dry"])
    >>> frame = return_time(JourneyFit.from_matrix(weather), "wet").to_frame()
    >>> frame[["measure", "estimate"]].round(3).values.tolist()[2:]
    [['q90', 7.0], ['mean', 3.0], ['sd', 3.162], ['mean_unconditional', 3.0]]
    """
    import pandas as pd

    checks.one_of(clock, ("steps", "time"), "clock")
    checks.one_of(unit, tuple(UNIT_DAYS), "unit")
    level = checks.confidence_level(confidence_level)
    names = _names(fit, state)
    if restart and clock == "time":
        msg = (
            "restart: got True with clock='time'; the time between two journeys is no part of the chain: wanted "
            "clock='steps', or ask comeback how long customers stay away"
        )
        raise ValueError(msg)
    if by is not None:
        ask = partial(
            return_time, state=state, clock=clock, restart=restart, method=method, n_resamples=n_resamples, rng=rng,
            unit=unit, confidence_level=level,
        )  # fmt: skip
        return by_group(fit, by, ask)
    how = plan(fit, method, n_resamples, rng, fit.nodes.n_rows + 1)
    steps = clock == "steps"
    rows = np.array([fit.nodes.labels.index(name) for name in names])
    answers = measured(fit, _walked(fit, rows, how, clock, restart), how, 1.0 if steps else UNIT_DAYS[unit])
    labels = np.array(names, dtype=object)
    keys = {"state": np.repeat(labels, len(MEASURES)), "measure": np.tile(MEASURES, len(labels)).astype(object)}
    return ReturnTimeResult(
        keys=pd.DataFrame(keys),
        estimates=answers.estimates,
        flag=answers.flag,
        counts={"n_effective": answers.n_effective, "n_undefined": answers.n_undefined},
        confidence_level=level,
        unit=clock if steps else unit,
        method=how.method,
        resamples=answers.resamples,
    )


def _names(fit: JourneyFit, state: str | Collection[str] | None) -> list[str]:
    """Return the states asked for, in the order given."""
    if state is None:
        if len(fit.states) > MOST_STATES:
            msg = f"state: got none of {len(fit.states):,} states; wanted some named (up to {MOST_STATES} are all told)"
            raise ValueError(msg)
        return list(fit.states)
    names = [state] if isinstance(state, str) else list(dict.fromkeys(state))
    unknown = [name for name in names if not len(fit.nodes.rows_of(name))]
    if unknown or not names:
        got = repr(unknown[0]) if unknown else "none"
        more = f" and {len(fit.states) - 12} more" if len(fit.states) > 12 else ""
        msg = f"state: got {got}; wanted one or more of {', '.join(map(repr, fit.states[:12]))}{more}"
        raise ValueError(msg)
    rows = dict.fromkeys(np.concatenate([fit.nodes.rows_of(name) for name in names]).tolist())
    return [fit.nodes.labels[row] for row in rows]


def _walked(fit: JourneyFit, rows: IntArray, how: Plan, clock: str, restart: bool) -> Walked:
    """Return all that is known of the ways back to some states."""
    p, n_rows, n, steps = fit.probability, fit.nodes.n_rows, len(rows), clock == "steps"
    never_left = [fit.row_flags.get(fit.nodes.labels[row]) == NO_WAY_OUT for row in rows]

    def walks(state: IntArray, target: IntArray) -> list[Walk]:
        return [
            return_walk(
                n_rows, fit.nodes.n_nodes, state, target, int(row), restart=restart, never_left=stuck,
                as_good=fit.nodes.rows_of(fit.nodes.last_states[row - 1]) if fit.nodes.last else None,
            )
            for row, stuck in zip(rows, never_left, strict=True)
        ]

    mean, second = (p, p) if steps else (fit.mean, fit.second)
    mine = walks(fit.move_state, fit.move_target)
    found = [walk.passage(p, mean, second) for walk in mine]
    pulls = [walk_influence(fit, walk, one, steps=steps) for walk, one in zip(mine, found, strict=True)]
    influence = None
    if fit.influence is not None:
        influence = {name: np.concatenate([pull[name] for pull in pulls if pull], axis=1) for name in MOMENTS}
    lean = {text: mask[rows] | (mask[0] & restart) for text, mask in leaning(fit).items()}
    certain = np.array([one.certain[n_rows] for one in found])
    return Walked(
        probability=np.array([one.probability[n_rows] for one in found]),
        certain=certain,
        mean=np.array([one.mean_given[n_rows] for one in found]),
        sd=np.array([one.sd_given[n_rows] for one in found]),
        at_target=np.zeros(n, bool),
        sure=certain & (restart or not fit.outcomes),
        doubtful=np.array([one.doubtful[n_rows] for one in found]),
        trials=starts_counted(fit)[rows],
        spreads=linear_spreads(influence, n),
        speeds=accelerations(influence if how.method == "bca" else None),
        draws=_together(how.draws(fit, walks, steps=steps)),
        quantiles=_quantiles(fit, mine, found, clock),
        lean=lean,
        unreachable=NEVER_BACK,
    )


def _together(draws: list[Draws] | None) -> Draws | None:
    """Return the draws of all states side by side."""
    if draws is None:
        return None
    names = ("probability", "certain", "mean_given", "sd_given")
    return Draws(*(np.concatenate([getattr(one, name) for one in draws], axis=1) for name in names))


def _quantiles(
    fit: JourneyFit, walks: list[Walk], found: list[Passage], clock: str
) -> list[tuple[Estimates, np.ndarray]]:
    """Return median and 90 % quantile of each way back."""
    every = np.arange(len(fit.probability))
    by_state = [
        quantiles_of_moves(
            fit, Moves(walk.n_states, walk.n_nodes, walk.state, walk.target, every, walk.is_target),
            walk.starts, clock=clock, levels=LEVELS, probability=one.probability,
        )
        for walk, one in zip(walks, found, strict=True)
    ]  # fmt: skip
    return [
        (Estimates.joined([one[i][0] for one in by_state]), np.concatenate([one[i][1] for one in by_state]))
        for i in range(len(LEVELS))
    ]
