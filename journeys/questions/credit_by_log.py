"""Conversions shared out among the touchpoints as they were counted in the log, without the chain."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

import numpy as np

from journeys.errors import LogError
from journeys.kernels.arrays import FloatArray, IntArray
from journeys.models.fit import JourneyFit
from journeys.models.what_if import WhatIf
from journeys.questions.ended import Ended, Sums, ended, rows_ended
from journeys.questions.linear import ENOUGH_DF, ENOUGH_EVENTS, LEANS, TOO_FEW, probabilities
from journeys.questions.stage_rows import NEVER_SEEN
from journeys.questions.stages_by_log import NOT_TO_THE_END
from journeys.questions.touch_shares import outcome_codes, popcount
from journeys.results import LOGIT, PLAIN, Estimates, joined_flags
from journeys.tally.accumulate import Columns, join_limbs
from journeys.tally.tally import Tally

BELOW_ZERO = "more paid back than paid"
NOTHING_PAID = "no value to share out"
MILLION = 1e6


@dataclass(frozen=True, eq=False)
class Credited:
    """Credit by one rule: estimates and flags of the touchpoints, then of those that touch none."""

    names: tuple[str, ...]
    estimates: Estimates
    flag: np.ndarray


@dataclass(frozen=True, eq=False)
class Counted:
    """The conversions of a log and the touchpoints they are shared out among.

    Attributes
    ----------
    journeys : Ended
        Whole journeys with a sure entry.
    codes : ndarray of int
        The outcomes that are shared out.
    names : tuple of str
        The touchpoints.
    in_value : bool
        What the conversions are worth is shared out, not their number.
    """

    journeys: Ended
    codes: IntArray
    names: tuple[str, ...]
    in_value: bool

    @property
    def tally(self) -> Tally:
        """The counts."""
        return self.journeys.tally

    @property
    def all_named(self) -> bool:
        """Every touchpoint that was counted is among those asked about."""
        return set(self.names) == set(self.tally.touchpoints)


def counted(
    fit: JourneyFit,
    to: str | Collection[str] | None,
    touchpoints: str | Collection[str] | None,
    rules: Collection[str],
    *,
    in_value: bool,
) -> Counted:
    """Return what there is to share out.

    Raises
    ------
    TypeError
        If `touchpoints` are no names.
    ValueError
        If one of them was not counted or comes twice, or `to` has a state in it.
    LogError
        If the log does not tell: no touches or no values were counted, or not for some of the touchpoints alone.
    """
    tally = fit.tally
    if tally is None or isinstance(fit, WhatIf):
        msg = 'basis="log": this chain was given or changed by hand, so no log tells of it; wanted basis="model"'
        raise LogError(msg)
    codes = outcome_codes(fit, fit.target_mask(to))
    if codes is None:
        msg = 'basis="log": `to` has a state in it, and touches count by outcome; wanted outcomes, or basis="model"'
        raise ValueError(msg)
    if not tally.rules.touchpoints:
        msg = (
            'basis="log": no touches were counted; name touchpoints in the rules (touchpoints=["…"], or "all") and '
            'count again, or ask for basis="model"'
        )
        raise LogError(msg)
    if in_value and tally.rules.value is None:
        msg = 'weight="value": no values were counted; name their column in the rules (value="…") and count again'
        raise LogError(msg)
    found = Counted(ended(tally), codes, _named(tally, touchpoints), in_value)
    if found.all_named:
        return found
    ordered = [rule for rule in rules if rule != "even"]
    if ordered:
        msg = (
            f"rule={ordered[0]!r}: first and last touches are counted among all touchpoints of the rules; wanted "
            "touchpoints=None, or those of interest alone in the rules, counted again"
        )
        raise LogError(msg)
    if not len(tally.touch_sets["n"]) and len(tally.touches["n"]):
        msg = (
            f"touchpoints: {len(tally.touchpoints)} are named in the rules, and for more than 15 it is not counted "
            "which are touched together; wanted touchpoints=None, or those of interest alone in the rules, and counted "
            "again"
        )
        raise LogError(msg)
    return found


def _named(tally: Tally, touchpoints: str | Collection[str] | None) -> tuple[str, ...]:
    if touchpoints is None:
        return tally.touchpoints
    names = (touchpoints,) if isinstance(touchpoints, str) else touchpoints
    if not isinstance(names, Collection) or not names or not all(isinstance(name, str) for name in names):
        msg = f"touchpoints: got {touchpoints!r}; wanted names of states, or None for those of the rules"
        raise TypeError(msg)
    names = tuple(names)
    unknown = [name for name in names if name not in tally.touchpoints]
    if unknown:
        listed = ", ".join(repr(name) for name in tally.touchpoints[:12])
        msg = (
            f"touchpoints: touches of {unknown[0]!r} were not counted; wanted names among {listed}, or it among the "
            "touchpoints of the rules, counted again"
        )
        raise ValueError(msg)
    twice = [name for i, name in enumerate(names) if name in names[:i]]
    if twice:
        msg = f"touchpoints: {twice[0]!r} stands there twice; wanted each once"
        raise ValueError(msg)
    return names


def credited(it: Counted, rule: str, *, refuse: bool) -> Credited:
    """Return the shares of the touchpoints, and of conversions that touch none, by a rule.

    Parameters
    ----------
    it : Counted
        What there is to share out.
    rule : {"even", "first", "last"}
        How.
    refuse : bool
        Raise where what the conversions are worth adds up to nothing or less; else there are no numbers.

    Raises
    ------
    LogError
        If it does, and it is asked to.

    Notes
    -----
    Each share is a ratio of sums over conversions, each conversion weighted by the jump of the Aalen-Johansen estimate
    that it makes; its influence by bucket is the exact derivative.
    """
    parts = _sums(it, rule)
    whole, n = parts.added(), len(parts.value)
    conversions = it.journeys.n_journeys(it.codes)
    empty = it.in_value and conversions > 0 and not whole.value[0] > 0
    if empty and refuse:
        msg = (
            'weight="value": what the conversions are worth adds up to nothing or less, so that shares of it mean '
            'nothing; wanted more paid than paid back, or weight="conversions"'
        )
        raise LogError(msg)
    shares = Sums(np.full(n, np.nan), np.zeros_like(parts.influence)) if empty else parts.over(whole)
    estimates = _of_value(shares, conversions) if it.in_value else _of_number(shares, conversions)
    flags = [
        (np.full(n, conversions == 0), NEVER_SEEN),
        (np.full(n, empty), NOTHING_PAID),
        (estimates.value < 0, BELOW_ZERO),
        (estimates.few & np.isfinite(estimates.value), TOO_FEW),
        (np.full(n, it.journeys.left > LEANS), NOT_TO_THE_END),
    ]
    return Credited(it.names, estimates, joined_flags(flags, n))


def _of_number(shares: Sums, conversions: float) -> Estimates:
    value, std_error, df = shares.share_spread()
    return probabilities(None, value, std_error, df, np.full(len(value), conversions), LOGIT)


def _of_value(shares: Sums, conversions: float) -> Estimates:
    """Return shares of a value: what is paid back may take one below 0 and another above 1."""
    std_error, df = shares.spread()
    n = len(df)
    few = ~(df >= ENOUGH_DF) | ~(std_error > 0) | (conversions < ENOUGH_EVENTS)
    return Estimates(shares.value, std_error, df, np.full(n, PLAIN, dtype=object), np.full(n, np.nan), few)


def _sums(it: Counted, rule: str) -> Sums:
    """Return the weighted sum of each touchpoint, then of what touches none of them."""
    if not it.all_named:
        return _of_sets(it)
    tally, n = it.tally, len(it.names)
    rows = rows_ended(tally.touches, it.codes)
    column = np.full(len(tally.labels), n)
    for i, name in enumerate(it.names):
        if name in tally.states:
            column[tally.first_state + tally.states.index(name)] = i
    if rule == "even":
        amount = _amount(it, rows) / np.maximum(rows["distinct"], 1)
    else:
        amount = np.where(rows["state"] == 0, rows["n"], rows[rule]).astype(np.float64)
    return it.journeys.sums(rows, column[rows["state"]], amount, n + 1)


def _of_sets(it: Counted) -> Sums:
    """Return the even split among some of the touchpoints, from the sets that were touched."""
    n = len(it.names)
    rows = rows_ended(it.tally.touch_sets, it.codes)
    bits = [1 << it.tally.touchpoints.index(name) for name in it.names]
    sets = rows["set"].astype(np.int64) & sum(bits)
    each = _amount(it, rows) / np.maximum(popcount(sets), 1)
    touched = np.stack([(sets & bit) > 0 for bit in bits] + [sets == 0])
    column, row = np.nonzero(touched)
    kept = {name: rows[name][row] for name in ("bucket", "outcome", "bin")}
    return it.journeys.sums(kept, column, each[row], n + 1)


def _amount(it: Counted, rows: Columns) -> FloatArray:
    """Return the number of journeys of each row, or what they are worth."""
    return join_limbs(rows, "value") / MILLION if it.in_value else rows["n"].astype(np.float64)
