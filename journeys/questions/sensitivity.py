"""Where work would pay: what one point more of each move would do."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from functools import partial
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.kernels.arrays import BoolArray, FloatArray, sum_at
from journeys.kernels.intervals import variance_from_buckets
from journeys.kernels.sensitivity import Shift, Shifted, shifted
from journeys.models.fit import JourneyFit
from journeys.questions import cautions
from journeys.questions.by_group import by_group
from journeys.questions.linear import ENOUGH_DF, ENOUGH_EVENTS, TOO_FEW, leaning
from journeys.questions.measures import NO_DWELL
from journeys.questions.outcomes import UNREACHABLE
from journeys.results import KNOWN, PLAIN, Estimates, Result, joined_flags

MEASURES = ("reached", "steps", "days")
POINT = 0.01
LESS_THAN_A_POINT = "less than one point to take"
# Each bucket takes products of full matrices of the states.
MOST_STATES = 500


@dataclass(frozen=True, eq=False, repr=False)
class SensitivityResult(Result):
    """What one point more of each move would do, the largest effect on conversion first."""

    title: ClassVar[str] = "What one point more would do"

    @property
    def cautions(self) -> tuple[str, ...]:
        """What to keep in mind with these numbers."""
        return (cautions.ONE_AT_A_TIME, cautions.ASSOCIATION, cautions.RARER_EXIT)

    def summary(self) -> str:
        """Return the answer as plain text, then what to keep in mind."""
        return f"{super().summary()}\n\n{cautions.told(self.cautions)}"


def sensitivity(
    fit: JourneyFit,
    to: str | Collection[str] | None = None,
    *,
    by: str | Sequence[str] | None = None,
    confidence_level: float = 0.95,
) -> SensitivityResult:
    """Return what it would do if one move alone were one point likelier.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    to : str or collection of str, optional
        An outcome, a state, or several of either; default: all converted outcomes together.
    by : str or sequence of str, optional
        Columns that journeys are grouped by: one block of rows per group.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    SensitivityResult
        One row per (state, next_state, measure) for every move, to a state or to `to`, from a state with mass to
        give: journeys that end there in an outcome neither in `to` nor a conversion, lapsed or churned. `estimate` is
        the exact change, when 0.01 of that mass goes to the move, of the probability that `to` is `reached` from
        entry and of the mean `steps` and `days` given that it is. `change` is what is moved: less than 0.01, and
        flagged, where the state has less to give. `derivative` is the change for a small shift, per unit. Moves with
        the largest effect on `reached` come first.

    Raises
    ------
    ValueError
        If an argument is not one of those, or the chain has more than 500 states.
    LogError
        If `by` is asked of a known chain, or of groups of which none can carry a fit.

    Notes
    -----
    With N = (I - P)^-1 and h the probability of `to`, a shift d of the move from i to j adds
    d N_0i h_j / (1 - d N_ji) to h_0, and N_0i h_j is the derivative; times follow by the same update of rank one.
    The mean dwell of the move stays. Intervals, even about the estimate, from the linearised cluster variance with
    exact derivatives.

    References
    ----------
    J. G. Kemeny, J. L. Snell, Finite Markov Chains, Van Nostrand 1960, chapter III. J. Sherman, W. J. Morrison,
    Annals of Mathematical Statistics 21 (1950) 124-127.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.0, 0.5, 0.1, 0.4], [0.0, 0.0, 0.6, 0.4]], index=["visit", "basket"],
    ...     columns=["visit", "basket", "joined", "left"])
    >>> frame = sensitivity(JourneyFit.from_matrix(chain), "joined").to_frame()
    >>> frame.loc[frame.measure == "reached", ["state", "next_state", "estimate"]].round(4).values.tolist()
    [['visit', 'joined', 0.01], ['visit', 'basket', 0.006], ['basket', 'joined', 0.005]]
    """
    level = checks.confidence_level(confidence_level)
    ask = partial(_sensitivity, to=to, level=level)
    return ask(fit) if by is None else by_group(fit, by, ask)


@dataclass(frozen=True, eq=False)
class _Measure:
    """One measure of every shift."""

    value: FloatArray
    derivative: FloatArray
    influence: FloatArray


def _sensitivity(fit: JourneyFit, *, to: str | Collection[str] | None, level: float) -> SensitivityResult:
    """Answer for one fit."""
    import pandas as pd

    if fit.nodes.n_rows - 1 > MOST_STATES:
        msg = (
            f"the chain has {fit.nodes.n_rows - 1:,} states; every pair of them is looked at, for up to {MOST_STATES}; "
            "wanted rare states gathered under one name"
        )
        raise ValueError(msg)
    is_target = fit.target_mask(to)
    shift, giving = _shifts(fit, is_target)
    measures = _measures(fit, is_target, shift)
    events = float(fit.n_moves[is_target[fit.move_target]].sum())
    parts = [_estimates(fit, one, events) for one in measures]
    n, first = len(shift.move), measures[0].value
    rank = np.argsort(-np.where(np.isnan(first), -np.inf, first), kind="stable")
    # told move by move, computed measure by measure
    order = (np.arange(len(MEASURES))[None, :] * n + rank[:, None]).ravel()
    pairs, labels = np.repeat(rank, len(MEASURES)), np.array(fit.nodes.labels, dtype=object)
    estimates = Estimates.joined(parts).take(order)
    unreached = np.full(len(order), bool(np.isnan(measures[1].value).all() and not (first > 0).any()))
    flags = [
        (unreached, UNREACHABLE), (np.isnan(estimates.value) & ~unreached, NO_DWELL),
        (giving[pairs] < POINT, LESS_THAN_A_POINT), (estimates.few & np.isfinite(estimates.value), TOO_FEW),
    ]  # fmt: skip
    flags += [(np.full(len(order), mask[0]), text) for text, mask in leaning(fit).items()]
    return SensitivityResult(
        keys=pd.DataFrame(
            {
                "state": labels[fit.move_state[shift.move[pairs]]],
                "next_state": labels[fit.move_target[shift.move[pairs]]],
                "measure": np.tile(np.array(MEASURES, dtype=object), n),
            }
        ),
        estimates=estimates,
        flag=joined_flags(flags, len(order)),
        counts={
            "change": shift.by[pairs],
            "derivative": np.concatenate([one.derivative for one in measures])[order],
            "n_moves": fit.n_moves[shift.move[pairs]],
        },
        confidence_level=level,
    )


def _shifts(fit: JourneyFit, is_target: BoolArray) -> tuple[Shift, FloatArray]:
    """Return the moves that may be made likelier, by how much, and the mass that the state of each has to give."""
    labels = np.array(fit.nodes.labels, dtype=object)
    is_outcome = np.arange(fit.nodes.n_nodes) >= fit.nodes.n_rows
    gives = is_outcome & ~is_target & ~np.isin(labels, fit.converted)
    to_give = gives[fit.move_target]
    mass = sum_at(fit.move_state, np.where(to_give, fit.probability, 0.0), fit.nodes.n_rows)
    takes: BoolArray = (is_target | ~is_outcome)[fit.move_target] & (fit.probability > 0)
    takes &= (mass[fit.move_state] > 0) & ~is_target[fit.move_state]
    move = np.flatnonzero(takes)
    giving = mass[fit.move_state[move]]
    n_buckets = 0 if fit.influence is None else len(fit.influence.probability)
    d_by = np.zeros((n_buckets, len(move)))
    if fit.influence is not None:
        # what there is to take is itself uncertain
        for k in np.flatnonzero(giving < POINT):
            mine = to_give & (fit.move_state == fit.move_state[move[k]])
            d_by[:, k] = fit.influence.probability[:, mine].sum(axis=1)
    return Shift(move, np.minimum(giving, POINT), d_by), giving


def _measures(fit: JourneyFit, is_target: BoolArray, shift: Shift) -> list[_Measure]:
    """Return what the shifts do to each measure."""
    pulls = fit.influence
    none = np.zeros((0, len(fit.probability)))
    d_p, d_mean = (none, none) if pulls is None else (pulls.probability, pulls.mean)

    def found(mean: FloatArray, d_mean: FloatArray) -> Shifted:
        n_rows, n_nodes = fit.nodes.n_rows, fit.nodes.n_nodes
        return shifted(
            n_rows, n_nodes, fit.move_state, fit.move_target, fit.probability, mean, is_target, shift, d_p, d_mean
        )

    steps, days = found(fit.probability, d_p), found(fit.mean, d_mean)
    return [
        _Measure(steps.reached, steps.slope_reached, steps.d_reached),
        *(_Measure(one.given, one.slope_given, one.d_given) for one in (steps, days)),
    ]


def _estimates(fit: JourneyFit, one: _Measure, n_conversions: float) -> Estimates:
    n, known = len(one.value), fit.influence is None
    variance, df = (np.zeros(n), np.full(n, np.inf)) if known else variance_from_buckets(one.influence)
    std_error = np.where(np.isfinite(one.value), np.sqrt(variance), np.nan)
    few = np.zeros(n, bool) if known else (df < ENOUGH_DF) | ~(std_error > 0) | (n_conversions < ENOUGH_EVENTS)
    scale = np.full(n, KNOWN if known else PLAIN, dtype=object)
    return Estimates(one.value, std_error, df, scale, np.full(n, np.nan), few)
