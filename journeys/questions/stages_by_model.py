"""Stages as the chain has them: one first passage after another."""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import BoolArray
from journeys.kernels.bins import DAY_US
from journeys.models.fit import JourneyFit
from journeys.questions.linear import DOUBTFUL, TOO_FEW, leaning
from journeys.questions.outcomes import UNREACHABLE
from journeys.questions.quantiles import quantiles_of_moves
from journeys.questions.stage_legs import Leg, legs_of, passed, passed_within
from journeys.questions.stage_rows import (
    CONVERTED,
    ENTRY,
    MEDIAN_DAYS,
    MODEL_BASIS,
    NEVER_SEEN,
    OF_STAGE_BEFORE,
    REACHED,
    WENT,
    Row,
    Share,
    flags,
)  # fmt: skip
from journeys.questions.within import no_numbers

_Lean = dict[str, BoolArray]


def rows_by_model(fit: JourneyFit, names: tuple[str, ...], within_us: int | None) -> list[Row]:
    """Return the rows of the table of stages that the chain gives.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    names : tuple of str
        The stages, and `CONVERTED` last if the chain has converted outcomes.
    within_us : int or None
        As in `rows_by_log`.

    Returns
    -------
    list of Row
    """
    legs, lean = legs_of(fit, names), leaning(fit)
    told = [Row(ENTRY, REACHED, "", MODEL_BASIS, Share(1.0, None, 1.0).estimate(), "")]
    shares, why = passed(legs), ""
    if within_us is not None and legs:
        shares, why = passed_within(legs, within_us / DAY_US)
    for k, (stage, name) in enumerate(zip((ENTRY, *names), names, strict=False)):
        if k == len(legs):
            break
        told += _went(legs[k], stage, lean, aside=fit.converted if name == CONVERTED else ())
        told += _shares(legs[k], name, shares[k - 1 : k + 1] if k else shares[:1], lean, why)
        told.append(_median(legs[k], name))
    if len(legs) < len(names):
        return told + _beyond(fit, legs, names, lean)
    if names[-1] != CONVERTED:
        last = Leg(fit, fit.nodes.labels.index(names[-1]), np.zeros(fit.nodes.n_nodes, np.bool_))
        told += _went(last, names[-1], lean, aside=())
    return told


def _beyond(fit: JourneyFit, legs: list[Leg], names: tuple[str, ...], lean: _Lean) -> list[Row]:
    """Return the rows of the stages from the first one that the chain does not have."""
    k = len(legs)
    stage, start = (ENTRY, 0) if k == 0 else (names[k - 1], fit.nodes.labels.index(names[k - 1]))
    told = _went(Leg(fit, start, np.zeros(fit.nodes.n_nodes, np.bool_)), stage, lean, aside=())
    for i, name in enumerate(names[k:], start=k):
        nothing = Share(np.nan, None, 0.0).estimate()
        told.append(Row(name, REACHED, "", MODEL_BASIS, Share(0.0, None, 0.0).estimate(), NEVER_SEEN))
        told += [Row(name, one, "", MODEL_BASIS, nothing, NEVER_SEEN) for one in (OF_STAGE_BEFORE, MEDIAN_DAYS)]
        aside = fit.converted if names[i + 1 : i + 2] == (CONVERTED,) else ()
        ends = () if name == CONVERTED else fit.outcomes
        told += [Row(name, WENT, one, MODEL_BASIS, nothing, NEVER_SEEN) for one in ends if one not in aside]
    return told


def _shares(leg: Leg, name: str, shares: list[Share], lean: _Lean, why: str) -> list[Row]:
    """Return what share reaches a stage, of all journeys and of those in the stage before.

    `shares` holds that of the stage before, where there is one, and that of this one; `why` says why there is none.
    """
    if why:
        return [Row(name, measure, "", MODEL_BASIS, no_numbers(1), why) for measure in (REACHED, OF_STAGE_BEFORE)]
    reached = shares[-1]
    ratio = reached.over(shares[0], leg.reaches.trials) if len(shares) > 1 else reached
    doubtful = bool(leg.found.doubtful[leg.start])
    out = reached.value <= 0
    return [
        _row((name, measure, ""), share, _at(lean, start), unreached=out, doubtful=doubtful)
        for measure, share, start in ((REACHED, reached, 0), (OF_STAGE_BEFORE, ratio, leg.start))
    ]


def _row(
    key: tuple[str, str, str], share: Share, told: list[tuple[bool, str]], *, unreached: bool, doubtful: bool
) -> Row:
    estimate = share.estimate()
    few = bool(estimate.few[0])
    flag = flags((unreached and not doubtful, UNREACHABLE), (doubtful, DOUBTFUL), (few, TOO_FEW), *told)
    return Row(*key, MODEL_BASIS, estimate, flag)


def _at(lean: _Lean, start: int) -> list[tuple[bool, str]]:
    """Return what is to be told of the rows that an answer from a start leans on."""
    return [(bool(mask[start]), text) for text, mask in lean.items()]


def _median(leg: Leg, name: str) -> Row:
    """Return the median time from the stage before, of those who reach this one."""
    ((estimate, flag),) = quantiles_of_moves(
        leg.fit, leg.walk, np.array([leg.start]), clock="time", levels=(0.5,), probability=leg.found.probability
    )
    return Row(name, MEDIAN_DAYS, "", MODEL_BASIS, estimate, str(flag[0]))


def _went(leg: Leg, stage: str, lean: _Lean, aside: tuple[str, ...]) -> list[Row]:
    """Return where those go who reach a stage and not the next one, which is the outcomes `aside` or a state."""
    told = []
    for outcome in leg.fit.outcomes:
        if outcome in aside:
            continue
        share, found = leg.ends_in(outcome)
        doubtful = bool(found.doubtful[leg.start])
        here = _at(lean, leg.start)
        told.append(_row((stage, WENT, outcome), share, here, unreached=share.value <= 0, doubtful=doubtful))
    return told
