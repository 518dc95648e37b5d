"""Stages as the log has them: shares that reach each, those still open accounted for, without the chain."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from journeys.checks import duration_text
from journeys.kernels.bins import DAY_US
from journeys.kernels.records import FIRST_OUTCOME, LAPSED
from journeys.models.stage_stays import NEXT, StageRows
from journeys.models.stays import outcome_column
from journeys.questions.linear import ENOUGH_DF, ENOUGH_EVENTS, LEANS, TOO_FEW
from journeys.questions.stage_rows import (
    ABOVE_ONE,
    ENTRY,
    LOG_BASIS,
    MEDIAN_DAYS,
    NEVER_SEEN,
    OF_STAGE_BEFORE,
    REACHED,
    UNDECIDED,
    WENT,
    Row,
    Share,
    flags,
)  # fmt: skip
from journeys.questions.time_to_convert import TOO_LONG
from journeys.questions.within import (
    BETWEEN_BINS,
    CurveTimes,
    EndedWithin,
    TimeBy,
    ended_within,
    no_numbers,
    plain_share,
)  # fmt: skip
from journeys.tally.tally import Tally

NOT_TO_THE_END = "not all followed to the end"
THE_END_US = 1e30
HALF = 0.5

_Told = tuple[bool, str]


def rows_by_log(tally: Tally, rows: StageRows, names: tuple[str, ...], within_us: int | None) -> list[Row]:
    """Return the rows of the table of stages that the log gives by itself.

    Parameters
    ----------
    tally : Tally
        The counts.
    rows : StageRows
        Its table of stages.
    names : tuple of str
        The stages, and what to call the conversion after the last of them, if there is one.
    within_us : int or None
        Microseconds since entry within which a stage is to be reached; None for as far as journeys were followed.

    Returns
    -------
    list of Row
    """
    seen = rows.reached()
    before = Share(1.0, np.zeros(rows.n_buckets), float(seen[0]))
    certain = Share(1.0, None, float(seen[0])).estimate()
    told = [Row(ENTRY, REACHED, "", LOG_BASIS, certain, ""), *_went(tally, rows, 0, ENTRY)]
    for k, name in enumerate(names, start=1):
        curve = ended_within(*rows.way_to(k), np.array([NEXT]), rows.upper_edges)
        reached = _share(curve, THE_END_US if within_us is None else within_us)
        known = [(seen[k] == 0, NEVER_SEEN), *_followed(curve, within_us)]
        ratio = reached.over(before, float(seen[k - 1]))
        told.append(_row(name, REACHED, "", reached, *known))
        told.append(_row(name, OF_STAGE_BEFORE, "", ratio, *known, (ratio.value > 1 + 1e-9, ABOVE_ONE)))
        told.append(_median(rows, k, name))
        if k <= rows.n_stages:
            told += _went(tally, rows, k, name)
        before = reached
    return told


def _share(curve: EndedWithin, time_us: float) -> Share:
    """Return the share ended so by a time; behind it are the stays ended by then or still at risk."""
    value, influence = curve.at(time_us)
    whole = int((curve.part_of_bins(time_us) == 1).sum())
    known = float(curve.stays.n[curve.stays.bin < whole].sum())
    known += float(curve.found.at_risk[0, whole]) if whole < curve.stays.n_bins else 0.0
    return Share(value, influence, known)


def _followed(curve: EndedWithin, within_us: int | None) -> list[_Told]:
    """Return what is to be said of how long journeys were followed."""
    if within_us is None:
        return [(float(curve.found.survival_end[0]) > LEANS, NOT_TO_THE_END)]
    return [(not curve.is_bin_end(within_us), BETWEEN_BINS), (within_us > curve.followed_us, TOO_LONG)]


def _row(stage: str, measure: str, outcome: str, share: Share, *told: _Told) -> Row:
    estimate = share.estimate()
    return Row(stage, measure, outcome, LOG_BASIS, estimate, flags(*told, (bool(estimate.few[0]), TOO_FEW)))


def _median(rows: StageRows, k: int, name: str) -> Row:
    """Return the median time from the stage before, of those who reach this one."""
    curve = ended_within(*rows.stay_in(k - 1), np.array([NEXT]), rows.upper_edges)
    in_the_end = _share(curve, THE_END_US)
    if not in_the_end.value > 0:
        return Row(name, MEDIAN_DAYS, "", LOG_BASIS, no_numbers(1), NEVER_SEEN)
    of_those = replace(curve, share=curve.share / in_the_end.value)
    if rows.upper_edges is not None and of_those.share[0] >= HALF:
        # Most have the next event at once: the first bin, which holds no time at all too, cannot be read between.
        at_once = replace(no_numbers(1), value=np.zeros(1))
        told = f"within {duration_text(int(rows.upper_edges[0]))}, shown as 0"
        return Row(name, MEDIAN_DAYS, "", LOG_BASIS, at_once, flags(*_followed(curve, None), (True, told)))
    days = of_those.time_by(HALF)
    by_then = _share(curve, days * DAY_US).over(in_the_end, float(rows.reached()[k])).estimate()
    # As in `EndedWithin.time`: the information where the curve is read is carried over to the half itself.
    trials = by_then.n_effective[0]
    spread = float(HALF / np.sqrt(trials)) if trials > 0 else np.nan
    at = int(np.flatnonzero(of_those.share >= HALF - 1e-12)[0])
    enough = min(HALF * trials, curve.found.at_risk[0, at]) >= ENOUGH_EVENTS
    few = not (spread > 0 and by_then.df[0] >= ENOUGH_DF and enough)
    time = TimeBy(of_those, HALF, days, spread, float(by_then.df[0]), few=few)
    flag = flags(*_followed(curve, None), (few, TOO_FEW))
    return Row(name, MEDIAN_DAYS, "", LOG_BASIS, CurveTimes.of(time), flag)


def _went(tally: Tally, rows: StageRows, k: int, name: str) -> list[Row]:
    """Return where those went who reached the k-th stage (0: entry) and not the next one."""
    rules, mine = tally.rules, rows.position == k
    codes = {outcome: FIRST_OUTCOME + i for i, outcome in enumerate(rules.outcomes)}
    if rules.silence_us is not None:
        codes["lapsed"] = LAPSED
    aside = rules.converted if k == rows.n_stages else ()
    asked = {outcome: code for outcome, code in codes.items() if outcome not in aside}
    if not mine.any():
        return [Row(name, WENT, outcome, LOG_BASIS, no_numbers(1), NEVER_SEEN) for outcome in (*asked, UNDECIDED)]
    told, stays = [], rows.stay_in(k)
    for outcome, code in asked.items():
        curve = ended_within(*stays, outcome_column(np.array([code])), rows.upper_edges)
        told.append(_row(name, WENT, outcome, _share(curve, THE_END_US), *_followed(curve, None)))
    still = plain_share(rows.bucket[mine], rows.n[mine], rows.is_open[mine], rows.n_buckets)
    few = flags((bool(still.few[0]), TOO_FEW))
    return [*told, Row(name, WENT, UNDECIDED, LOG_BASIS, still, few)]
