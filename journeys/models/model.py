"""The spec of a fit, and the way from a tally to it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys import checks
from journeys.errors import EndNotSeenWarning, JourneysWarning, LogError, ShortLogWarning, warn
from journeys.kernels.arrays import BoolArray, FloatArray, sum_at
from journeys.kernels.bins import DAY_US
from journeys.kernels.records import FIRST_OUTCOME
from journeys.kernels.sojourn import StayFit, fit_stays, move_influence
from journeys.kernels.stays import BucketStays, FittedStays, Stays
from journeys.markup import short_name
from journeys.models.fit import Influence, JourneyFit, with_dead_ends
from journeys.models.memory import Nodes, chain_of
from journeys.models.stays import move_stays, without_open
from journeys.tally.tally import Tally

END_NOT_SEEN = "end not seen"
FEW_AT_END = "few seen to the end"
COMPLETED_ONLY = "completed moves only"
# Below this many stays at risk just before the silence, the share that lapses rests on few (a judgement).
ENOUGH_AT_END = 20
# Of merged visits at most this share may last longer than any was followed (a judgement: answers are flagged where as
# many journeys lean on a flagged row).
LONGER_THAN_SEEN = 0.01


@dataclass(frozen=True)
class JourneyModel:
    """Choices of a fit.

    Parameters
    ----------
    order : int
        How many of the last states say where a journey goes next, from 1 to 3; above 1 it needs a tally that was
        counted with that order (`jn.tally(log, rules, order=2)`). The states of the chain then have names such as
        "basket after price page"; targets, touchpoints and returns may be named by the last state alone.
    open_moves : {"censored", "ignored"}
        "censored" keeps stays still open at the end of the log, as lasting at least that long
        (Aalen-Johansen); "ignored" counts completed moves only, which overstates quick moves.

    Notes
    -----
    By default the chain is first-order: what comes next depends on the state a customer is in. Of an unsure journey the
    moves whose history is unknown stay out of a fit of higher order. The probabilities are
    Aalen-Johansen estimates on binned stays, open ones right-censored; intervals come from the influence of
    200 buckets of customers (infinitesimal jackknife), so the journeys of one customer may be alike.

    References
    ----------
    P. K. Andersen, O. Borgan, R. D. Gill, N. Keiding, Statistical Models Based on Counting Processes,
    Springer 1993, section IV.4. B. Efron, The Jackknife, the Bootstrap and Other Resampling Plans, SIAM 1982.

    Examples
    --------
    >>> JourneyModel()
    JourneyModel(order=1, open_moves='censored')
    """

    order: int = 1
    open_moves: str = "censored"

    def __post_init__(self) -> None:
        """Check the choices."""
        checks.whole(self.order, "order", 1)
        checks.one_of(self.open_moves, ("censored", "ignored"), "open_moves")

    def fit(self, tally: Tally) -> JourneyFit:
        """Fit the chain to a tally.

        Parameters
        ----------
        tally : Tally
            From `journeys.tally`.

        Returns
        -------
        JourneyFit
            A new, frozen object.

        Raises
        ------
        LogError
            If the log is no longer than the silence, no journey has a sure entry, none of the outcomes
            named in the rules was ever seen, or the tally was counted with a lower order.

        Warns
        -----
        ShortLogWarning
            If the log is shorter than one and a half silences.
        EndNotSeenWarning
            If stays of a state were never seen to their end.
        DeadEndWarning
            If no move out of a state was seen.
        """
        if self.order > tally.order:
            msg = (
                f"order={self.order}, but the tally was counted with order={tally.order}; wanted "
                f"jn.tally(log, rules, order={self.order})"
            )
            raise LogError(msg)
        fault = fault_of(tally)
        if fault is not None:
            raise LogError(fault.message)
        _warn_if_short(tally)
        refuse_without_outcome(tally)
        return self.fit_whatever(tally)

    def fit_whatever(self, tally: Tally, *, n_moments: int = 3) -> JourneyFit:
        """Fit the chain to a tally whose faults have been looked for (see `fault_of`); as `fit_stays` in moments."""
        chain = chain_of(tally, self.order)
        stays, by_bucket = move_stays(tally, chain, censored=self.open_moves == "censored")
        return self.fit_stays(tally, chain.nodes(tally), stays, by_bucket, n_moments=n_moments)

    def fit_stays(
        self, tally: Tally, nodes: Nodes, stays: Stays, by_bucket: BucketStays, *, n_moments: int = 3
    ) -> JourneyFit:
        """Fit the chain to stays that were taken from a tally.

        With one moment the influence on times is left NaN, with two that on their squares.
        """
        weight = 0.0 if tally.whole_days else 0.5
        found = fit_stays(stays, weight)
        row_flags: dict[str, str] = {}
        if tally.rules.silence_us is None:
            unended = (found.survival_end > 1e-12) & _has_open(stays)
            if unended.any():
                # Nobody knows when the rest would leave: only what was completed can be counted.
                stays, by_bucket = without_open(stays, by_bucket, unended)
                found = fit_stays(stays, weight)
                _flag(row_flags, nodes.labels, unended, COMPLETED_ONLY)
                _warn_rows(
                    nodes.labels,
                    unended,
                    "the longest stay in {} is still open, so only completed "
                    "moves are counted there; give a silence to keep open stays",
                    JourneysWarning,
                )
        else:
            self._look_at_ends(tally, stays, found, nodes.labels, row_flags)
        pulls = move_influence(found, stays, by_bucket, n_moments)
        completed = sum_at(found.cell_move, stays.n, len(found.probability))
        lapses = found.survivor_move >= 0
        np.add.at(completed, found.survivor_move[lapses], stays.survivor_n[lapses])
        state, target, columns, kept = with_dead_ends(
            nodes,
            found.move_state,
            found.move_target,
            [found.probability, found.mean, found.second, completed],
            row_flags,
        )
        pad = kept < 0
        place = np.empty(len(found.probability), np.int64)
        place[kept[~pad]] = np.flatnonzero(~pad)
        pulls = tuple(np.where(pad, 0.0, part[:, kept]) if pad.any() else part for part in pulls)
        unknown = np.broadcast_to(np.nan, pulls[0].shape)
        return JourneyFit(
            nodes=nodes,
            converted=tally.rules.converted,
            move_state=state,
            move_target=target,
            probability=columns[0],
            mean=columns[1],
            second=columns[2],
            n_moves=columns[3],
            row_flags=row_flags,
            open_moves=self.open_moves,
            tally=tally,
            influence=Influence(*pulls, *(unknown for _ in range(3 - n_moments))),
            fitted_stays=FittedStays(stays, by_bucket, found, place),
        )

    def _look_at_ends(
        self, tally: Tally, stays: Stays, found: StayFit, labels: tuple[str, ...], row_flags: dict[str, str]
    ) -> None:
        """Flag the rows whose stays were not, or hardly, seen as long as the silence."""
        if self.open_moves == "ignored":
            return
        merged = tally.rules.repeats == "merge"
        seen_to_end = np.maximum(stays.survivor_n, _lapse_counts(stays))
        unseen = (found.survival_end > 1e-12) & (seen_to_end == 0) & _has_stays(stays)
        if merged:
            # A visit may go on for longer than the silence, and its lapse is an event like any other. What is left
            # after the longest visit is taken for lapsed; that is hardly ever nothing, as one is always the longest.
            unseen |= (found.survival_end > LONGER_THAN_SEEN) & _has_stays(stays)
        few = ~unseen & (seen_to_end > 0) & (seen_to_end < ENOUGH_AT_END) & _has_open(stays)
        _flag(row_flags, labels, unseen, END_NOT_SEEN)
        _flag(row_flags, labels, few, FEW_AT_END)
        if unseen.any():
            plainly = "no stay in {} was seen as long as the silence"
            of_visits = "visits to {} may last longer than any that was followed"
            told = f"{of_visits if merged else plainly}: the share that lapses there is an upper bound"
            _warn_rows(labels, unseen, told, EndNotSeenWarning)


@dataclass(frozen=True)
class Fault:
    """Why no fit can be had: in few words, and with what was wanted and how to mend it."""

    briefly: str
    message: str


def fault_of(tally: Tally) -> Fault | None:
    """Return why no fit can be had of a tally, None where there is nothing in its way."""
    sure = bool((tally.entries["sure"] == 1).any())
    return fault_of_part(tally, tally.days_followed, sure=sure)


def fault_of_part(tally: Tally, days_followed: float, *, sure: bool) -> Fault | None:
    """Return why no fit can be had of some journeys of a tally, followed for so long, with any sure entry or none."""
    rules = tally.rules
    if rules.silence_us is not None and days_followed * DAY_US <= rules.silence_us:
        silence_days = rules.silence_us / DAY_US
        what = f"the log is {tally.days:.1f} days long"
        if days_followed < tally.days:
            what = f"these journeys were followed for {days_followed:.1f} days at most"
        return Fault(
            f"followed for {days_followed:.0f} days, no longer than the silence",
            f"{what}, no longer than the silence of {silence_days:g} days, so "
            "nobody can be seen to lapse; wanted a longer log or a shorter silence",
        )
    if not sure:
        return Fault(
            "no sure entry",
            f"none of {tally.n_journeys:,} journeys has a sure entry (all may have begun before the log); wanted a "
            "log that starts earlier, or complete_history=true if it holds each customer's whole past",
        )
    return None


def _warn_if_short(tally: Tally) -> None:
    silence_us = tally.rules.silence_us
    if silence_us is not None and tally.days_followed * DAY_US < 1.5 * silence_us:
        what = f"the log of {tally.days:.1f} days"
        if tally.days_followed < tally.days:
            what = f"the time of {tally.days_followed:.1f} days for which these journeys were followed"
        warn(
            f"{what} is shorter than one and a half silences: times given "
            "conversion will be too narrow in their intervals",
            ShortLogWarning,
        )


def refuse_without_outcome(tally: Tally) -> None:
    """Raise a LogError if none of the outcomes named in the rules was ever seen."""
    rules = tally.rules
    named = FIRST_OUTCOME + np.arange(len(rules.outcomes))
    if len(named) and not np.isin(tally.journeys["outcome"], named).any():
        msg = (
            f"no outcome was ever seen: wanted at least one of {', '.join(map(repr, rules.outcomes))} among the "
            "events; look at the spelling in `converted` and `churned`"
        )
        raise LogError(msg)


def _has_stays(stays: Stays) -> BoolArray:
    ended = sum_at(stays.state, stays.n, stays.n_states) + stays.survivor_n
    return (ended > 0) | _has_open(stays)


def _has_open(stays: Stays) -> BoolArray:
    return sum_at(stays.open_state, stays.open_n, stays.n_states) > 0


def _lapse_counts(stays: Stays) -> FloatArray:
    """Return the lapses that are counted as a cause (merged visits), by row."""
    if stays.survivor_target is None:
        return np.zeros(stays.n_states)
    mine = stays.target == stays.survivor_target
    return sum_at(stays.state[mine], stays.n[mine], stays.n_states)


def _flag(row_flags: dict[str, str], labels: tuple[str, ...], rows: BoolArray, text: str) -> None:
    for row in np.flatnonzero(rows):
        row_flags[labels[row]] = text


def _warn_rows(labels: tuple[str, ...], rows: BoolArray, text: str, kind: type[JourneysWarning]) -> None:
    names = [short_name(labels[row]) for row in np.flatnonzero(rows)]
    shown = ", ".join(names[:5]) + (f" and {len(names) - 5} more" if len(names) > 5 else "")
    warn(text.format(shown), kind)
