"""The share of conversions in the log that touch each touchpoint, and where the model says otherwise."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.intervals import variance_from_buckets
from journeys.models.fit import JourneyFit
from journeys.models.what_if import WhatIf
from journeys.questions.ended import Ended, Sums, ended, rows_ended
from journeys.questions.linear import ENOUGH_DF, LEANS
from journeys.questions.touchpoints import Asked, influenced
from journeys.tally.tally import Tally

DIFFER = "log and model differ"
TOO_SHORT = "log too short to compare with the model"
# How often at most a touchpoint of any is flagged where the model is right, but for the approximation.
_CHANCE = 0.01
# Conversions with the touchpoint, and without, below which no comparison is made (a judgement).
_ENOUGH = 20.0
# 95 % point of the normal distribution.
_ONE_SIDED = 1.645
_ROUNDING = 1e-9


@dataclass(frozen=True, eq=False)
class InLog:
    """What the log says beside each removal effect.

    Attributes
    ----------
    share, std_error : ndarray, shape (n_touchpoints,)
        Of conversions that touch it; NaN where that was not counted.
    differs : ndarray of bool, shape (n_touchpoints,)
        The effect by the model is another, beyond chance.
    too_short : bool
        More than a hundredth of the conversions that the model expects lie beyond the time followed: not compared.
    """

    share: FloatArray
    std_error: FloatArray
    differs: BoolArray
    too_short: bool


def beside(fit: JourneyFit, it: Asked, effect: FloatArray, influence: FloatArray) -> InLog:
    """Return what the log says beside removal effects.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    it : Asked
        The target and the touchpoints of the effects.
    effect : ndarray, shape (n_touchpoints,)
        By the model.
    influence : ndarray, shape (n_buckets, n_touchpoints)
        What each bucket does to them.

    Returns
    -------
    InLog
        All NaN where the log has no touches, where it is not the log of this chain, or the target is no outcome.

    Notes
    -----
    The difference has its variance from the sums of the influences on both sides, bucket by bucket; the touchpoints
    are judged together.

    References
    ----------
    S. Holm, A simple sequentially rejective multiple test procedure, Scandinavian Journal of Statistics 6 (1979)
    65-70.
    """
    n = len(it.groups)
    blank = InLog(np.full(n, np.nan), np.full(n, np.nan), np.zeros(n, bool), too_short=False)
    codes = outcome_codes(fit, it.way.moves.is_target)
    if codes is None or fit.tally is None or isinstance(fit, WhatIf) or not len(fit.tally.touches["n"]):
        return blank
    journeys = ended(fit.tally)
    names = [list(dict.fromkeys(fit.nodes.last_states[row - 1] for row in group)) for group in it.groups]
    counted = np.array([is_counted(fit.tally, group) for group in names])
    converted = journeys.share(codes)
    if not converted.value[0] > 0 or not counted.any():
        return blank
    shares = touched(journeys, codes, names, counted).over(converted)
    value, std_error, _ = shares.share_spread()
    too_short = journeys.left > LEANS and _falls_short(fit, it, converted)
    # By whichever of the two expects more on the smaller side: a share of nothing may be what is odd.
    smaller = np.maximum(np.minimum(value, 1 - value), np.minimum(effect, 1 - effect))
    compared = counted & (not too_short) & (smaller * journeys.n_journeys(codes) >= _ENOUGH)
    differs = _beyond_chance(effect - value, influence - shares.influence, compared)
    return InLog(np.where(counted, value, np.nan), np.where(counted, std_error, np.nan), differs, too_short)


def outcome_codes(fit: JourneyFit, is_target: BoolArray) -> IntArray | None:
    """Return the codes of the target's outcomes in the tables of the tally; None where a state is among them."""
    nodes, tally = fit.nodes, fit.tally
    if tally is None or is_target[: nodes.n_rows].any():
        return None
    names = [nodes.labels[node] for node in np.flatnonzero(is_target)]
    return np.array([tally.labels.index(name) for name in names], dtype=np.int64)


def popcount(sets: np.ndarray) -> IntArray:
    """Return how many bits of each set are there.

    Examples
    --------
    >>> popcount(np.array([0b101, 0])).tolist()
    [2, 0]
    """
    return sum(((sets.astype(np.int64) >> bit) & 1 for bit in range(16)), np.zeros(len(sets), np.int64))


def is_counted(tally: Tally, group: Sequence[str]) -> bool:
    """Tell whether the touches of some states, taken together, were counted."""
    return set(group) <= set(tally.touchpoints) and (len(group) == 1 or len(tally.touch_sets["n"]) > 0)


def touched(
    journeys: Ended, codes: IntArray, names: list[list[str]], counted: BoolArray, last_bin: int | None = None
) -> Sums:
    """Return, for each touchpoint, the weighted number of conversions that touch it, 0 where that was not counted.

    Only those up to a bin of elapsed time, where one is given.
    """
    tally = journeys.tally
    touches, sets = (rows_ended(table, codes, last_bin) for table in (tally.touches, tally.touch_sets))
    parts, columns = [], []
    for i, group in enumerate(names):
        if not counted[i]:
            continue
        if len(group) == 1:
            rows, mine = touches, touches["state"] == tally.labels.index(group[0])
        else:
            bits = sum(1 << tally.touchpoints.index(name) for name in group)
            rows, mine = sets, (sets["set"].astype(np.int64) & bits) > 0
        parts.append({name: rows[name][mine] for name in ("bucket", "outcome", "bin", "n")})
        columns.append(np.full(int(mine.sum()), i))
    rows = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    return journeys.sums(rows, np.concatenate(columns), rows["n"].astype(np.float64), len(names))


def _falls_short(fit: JourneyFit, it: Asked, converted: Sums) -> bool:
    """Tell whether, beyond chance, over a hundredth of the conversions by the model are not in the log's curve."""
    by_p = it.way.slope(it.way.visits, it.way.share)
    influence = (1 - LEANS) * influenced(fit, by_p[None, :]) - converted.influence
    (variance,), _ = variance_from_buckets(influence)
    short = (1 - LEANS) * it.way.conversion - float(converted.value[0])
    return bool(short > _ONE_SIDED * np.sqrt(variance))


def _beyond_chance(difference: FloatArray, influence: FloatArray, compared: BoolArray) -> BoolArray:
    """Return which differences are too large for chance, those compared judged together."""
    from scipy.special import stdtr

    differs = np.zeros(len(difference), bool)
    variance, df = variance_from_buckets(influence[:, compared])
    size = np.abs(difference[compared])
    z = np.divide(size, np.sqrt(variance), out=np.zeros(len(size)), where=(variance > 0) & (size > _ROUNDING))
    p = np.where(df >= ENOUGH_DF, 2 * stdtr(df, -z), 1.0)
    order = np.argsort(p)
    passed = p[order] <= _CHANCE / np.arange(len(p), 0, -1)
    held = np.zeros(len(p), bool)
    held[order] = np.logical_and.accumulate(passed)
    differs[np.flatnonzero(compared)] = held
    return differs
