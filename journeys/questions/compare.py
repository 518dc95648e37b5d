"""What differs between two fits: groups, cohorts, periods, what-ifs; or between each group and all the others."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace
from functools import partial
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.errors import LogError
from journeys.kernels.arrays import BoolArray, FloatArray
from journeys.kernels.intervals import t_test, variance_from_buckets
from journeys.models.fit import JourneyFit
from journeys.models.group_fits import GroupFit, group_fits, rest_fit
from journeys.questions.corrected import corrected
from journeys.questions.differences import REACHED, TIMES, Answer, Key, Side, answers_of, live_mask
from journeys.questions.distances import Differences, Distance, distance
from journeys.results import KNOWN, PLAIN, Result
from journeys.tally.groups import Group
from journeys.tally.parts import check_one_id_key
from journeys.tally.tally import Tally

CORRECTIONS = ("holm", "fdr_bh", "none")
ON_ONE_SIDE = "seen on one side only"


@dataclass(frozen=True, eq=False, repr=False)
class CompareResult(Result):
    """Differences, the second less the first, each with its interval and p-value."""

    title: ClassVar[str] = "What differs"


def compare(
    fit_a: Side,
    fit_b: Side | None = None,
    to: str | Collection[str] | None = None,
    *,
    by: str | Sequence[str] | None = None,
    within: checks.Duration | Collection[checks.Duration] = (),
    moves: bool = False,
    stages: bool = False,
    correction: str = "holm",
    confidence_level: float = 0.95,
) -> CompareResult:
    """Return what differs between two fits, the second less the first, or between each group and all the others.

    Parameters
    ----------
    fit_a, fit_b : JourneyFit or Tally
        Two groups, cohorts, periods or logs, or a fit and a what-if; one fit alone with `by`. Tallies, of cohorts too
        young for a fit, can be compared within a time only.
    to : str or collection of str, optional
        The target; default: all converted outcomes together.
    by : str or sequence of str, optional
        Columns that the journeys of one fit are grouped by: each group (side b) against all others (side a).
    within : duration or collection of durations
        Also compare the shares that reach `to` within these, straight from the logs: the only fair comparison
        for a young cohort. Both sides must have been followed for as long.
    moves : bool
        Also compare every single move.
    stages : bool
        Also compare how many reach each stage of the rules, by the log.
    correction : {"holm", "fdr_bh", "none"}
        How p-values are corrected for the number of comparisons.
    confidence_level : float
        Of each interval by itself.

    Returns
    -------
    CompareResult
        The group columns, then one row per (measure, state, next_state): `reached` (the probability from entry, in
        the end), mean `steps` and `days` given that it is reached, `reached within 30d`, then `stage reached` and
        each `move` if asked for.
        Columns estimate_a, estimate_b, p_value and p_value_corrected (over the whole table).

    Raises
    ------
    ValueError
        If an argument is not one of those, `to` is not in the fits, or there is neither a second fit nor `by`.
    LogError
        If there are fewer than two groups, or `within` or `by` is asked of a chain without a log.
    JourneysError
        If the ids of the two logs were hashed with different secrets.

    Notes
    -----
    Customers are kept in the same 200 buckets whatever the log, so that the difference of the two influences of
    each bucket tells its variance even where the same people stand on both sides. Shares are told apart by the
    difference of their logits, steps and days by that of their logarithms, in two-sided t-tests: on the plain scale a
    small number comes with a small standard error, and small groups are called lower far too often. The bounds of
    that difference, less than the estimate and more, are turned back by moving both numbers, the less sure one
    further, so that an interval holds 0 where its test finds nothing. std_error is that of the difference itself.
    Where either side rests on too few events there is no interval. A difference is an association: what else changed
    between the two sides is in it.

    References
    ----------
    B. Efron, The Jackknife, the Bootstrap and Other Resampling Plans, SIAM 1982, chapter 6. S. Holm, A simple
    sequentially rejective multiple test procedure, Scand. J. Statist. 6 (1979) 65-70. B. Woolf, On estimating the
    relation between blood group and disease, Ann. Human Genet. 19 (1955) 251-253 (logits of shares).

    Examples
    --------
    >>> import pandas as pd
    >>> names = {"index": ["visit"], "columns": ["joined", "left"]}
    >>> a, b = (JourneyFit.from_matrix(pd.DataFrame([[share, 1 - share]], **names)) for share in (0.2, 0.3))
    >>> frame = compare(a, b, "joined").to_frame().round(3)
    >>> frame[["measure", "estimate_a", "estimate_b", "estimate"]].values.tolist()[0]
    ['reached', 0.2, 0.3, 0.1]
    """
    level = checks.confidence_level(confidence_level)
    checks.one_of(correction, CORRECTIONS, "correction")
    horizons = _horizons(within)
    if (fit_b is None) == (by is None):
        msg = "compare: wanted either two fits, or one fit and the columns of its groups: compare(fit, by=...)"
        raise ValueError(msg)
    if not horizons and any(isinstance(side, Tally) for side in (fit_a, fit_b)):
        msg = "compare: a tally that is not fitted can only be compared within a time; wanted within=... or fits"
        raise ValueError(msg)
    if fit_b is not None:
        _check_one_id_key(fit_a, fit_b)
        found = _differences(fit_a, fit_b, to, horizons, moves, stages)
        return _table([((), one) for one in found], [], correction, level)
    names = [by] if isinstance(by, str) else list(by or ())
    rows: list[tuple[Group, _Difference]] = []
    for group, rest in _against_the_rest(fit_a, names):
        if group.fit is None or rest.fit is None:
            rows.append((group.values, _without_fit(group, rest)))
        sides = (rest.fit or rest.tally, group.fit or group.tally)
        rows += [(group.values, one) for one in _differences(*sides, to, horizons, moves, stages)]
    return _table(rows, names, correction, level)


def _check_one_id_key(fit_a: Side, fit_b: Side) -> None:
    """Raise if the buckets of the two sides hold different people."""
    tallies = [side if isinstance(side, Tally) else side.tally for side in (fit_a, fit_b)]
    if tallies[0] is not None and tallies[1] is not None:
        check_one_id_key(tallies[0], tallies[1], "compared")


def _against_the_rest(fit: Side, names: list[str]) -> list[tuple[GroupFit, GroupFit]]:
    """Return the fit of each group beside that of all the others together."""
    if isinstance(fit, Tally):
        msg = "by: wanted a fit, whose groups are fitted alike; got a tally: JourneyModel().fit(tally)"
        raise TypeError(msg)
    found = group_fits(fit, names)
    if len(found) < 2:
        msg = f"by: there is only one group of {', '.join(names)}; wanted at least two to compare"
        raise LogError(msg)
    return [(group, rest_fit(fit, names, group.values)) for group in found]


@dataclass(frozen=True, eq=False)
class _Difference:
    """One number on both sides, and how their difference varies."""

    key: Key
    a: float
    b: float
    std_error: float
    df: float
    apart: Distance
    known: bool
    flag: str


def _horizons(within: checks.Duration | Collection[checks.Duration]) -> list[int]:
    several = isinstance(within, Collection) and not isinstance(within, str)
    given: list[checks.Duration] = list(within) if several else [within]  # type: ignore[arg-type, list-item]
    return sorted({checks.duration_us(one, "within") for one in given})


def _differences(
    fit_a: Side, fit_b: Side, to: str | Collection[str] | None, horizons: Sequence[int], moves: bool, stages: bool
) -> list[_Difference]:
    """Return the differences of all numbers that either side has."""
    fitted = not isinstance(fit_a, Tally) and not isinstance(fit_b, Tally)
    asked = partial(answers_of, to=to, horizons_us=horizons, in_the_end=fitted, moves=moves, stages=stages)
    sides = [asked(side) for side in (fit_a, fit_b)]
    live = live_mask(fit_a) | live_mask(fit_b)
    known = all(isinstance(side, JourneyFit) and side.influence is None for side in (fit_a, fit_b))
    return [_difference(sides[0].get(key), sides[1].get(key), key, live, known) for key in {**sides[0], **sides[1]}]


def _difference(a: Answer | None, b: Answer | None, key: Key, live: BoolArray, known: bool) -> _Difference:
    nothing: FloatArray = np.zeros(len(live))
    pull_a, pull_b = (nothing if one is None else one.influence for one in (a, b))
    # A move that one side never made has a share of 0 there.
    value_a, value_b = (0.0 if one is None else one.value for one in (a, b))
    variance, df = variance_from_buckets((pull_b - pull_a)[live]) if live.any() else (np.zeros(()), np.array(np.inf))
    few = (a is not None and a.few) or (b is not None and b.few) or a is None or b is None
    flags = [] if a is not None and b is not None else [ON_ONE_SIDE]
    for side, one in (("a", a), ("b", b)):
        flags += [f"{side}: {one.flag}"] if one is not None and one.flag else []
    apart = distance(value_a, value_b, pull_a[live], pull_b[live], is_share=key[0] not in TIMES)
    std_error = float(np.sqrt(variance))
    if few and not known:
        std_error, apart = np.nan, replace(apart, std_error=np.nan)
    return _Difference(key, value_a, value_b, std_error, float(df), apart, known, "; ".join(flags))


def _without_fit(group: GroupFit, rest: GroupFit) -> _Difference:
    why = group.why or f"the rest: {rest.why}"
    apart = Distance(PLAIN, np.nan, np.nan, np.nan, 0.5)
    return _Difference((REACHED, "entry", ""), np.nan, np.nan, np.nan, np.nan, apart, False, why)


def _table(
    rows: list[tuple[Group, _Difference]], names: list[str], correction: str, level: float
) -> CompareResult:
    import pandas as pd

    a, b, std_error, df = (
        np.array([getattr(one, name) for _, one in rows], np.float64) for name in ("a", "b", "std_error", "df")
    )
    size, spread, spread_df, lean = (
        np.array([getattr(one.apart, name) for _, one in rows], np.float64)
        for name in ("size", "std_error", "df", "lean")
    )
    scales = np.array([one.apart.scale for _, one in rows], dtype=object)
    known = np.array([one.known for _, one in rows], bool)
    p_value = t_test(size, spread, spread_df)
    keys = {name: [group[i] for group, _ in rows] for i, name in enumerate(names)}
    keys |= {part: [one.key[i] for _, one in rows] for i, part in enumerate(("measure", "state", "next_state"))}
    no_interval = ~np.isfinite(std_error) & ~known
    return CompareResult(
        keys=pd.DataFrame(keys),
        estimates=Differences(
            b - a, std_error, df, np.where(known, KNOWN, PLAIN).astype(object), np.full(len(a), np.nan), no_interval,
            a=a, b=b, scales=scales, spread=spread, spread_df=spread_df, lean=lean,
        ),
        flag=np.array([one.flag for _, one in rows], dtype=object),
        counts={
            "estimate_a": a,
            "estimate_b": b,
            "p_value": p_value,
            "p_value_corrected": corrected(p_value, correction),
        },
        confidence_level=level,
    )
