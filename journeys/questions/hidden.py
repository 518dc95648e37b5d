"""A summary without the numbers that describe too few people, nor those that would tell of them by subtraction."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray
from journeys.questions.check import CheckResult
from journeys.questions.check_log import ALIKE, EFFECT, FEW, ROBOTS, UNDECIDED, UNSURE
from journeys.questions.check_memory import GROUPS, LATER, MEMORY
from journeys.questions.check_ways import CURVE, DAYS, STEPS, TOUCHES
from journeys.questions.few_people import FewPeople
from journeys.questions.plain_count import PlainCount
from journeys.questions.stage_rows import UNDECIDED as OPEN
from journeys.questions.time_to_convert import SO_FAR
from journeys.results import KNOWN, Estimates, Result

if TYPE_CHECKING:
    import pandas as pd

R = TypeVar("R", bound=Result)
# Checks in words that count conversions and decided journeys, and what begins the words on a single move.
_OF_CONVERSIONS = (DAYS, STEPS, CURVE, TOUCHES, FEW, ALIKE, EFFECT)
_EXAMPLE = "; most apart"


@dataclass(frozen=True, eq=False)
class _Shown(Estimates):
    """Estimates some of which are not shown, nor their bounds."""

    whole: Estimates
    hidden: BoolArray

    @staticmethod
    def of(whole: Estimates, hidden: BoolArray) -> _Shown:
        """Return estimates without those that are hidden."""
        value, std_error, df, n = (
            np.where(hidden, np.nan, part) for part in (whole.value, whole.std_error, whole.df, whole.n_effective)
        )
        scale = np.where(hidden, KNOWN, whole.scale)
        return _Shown(value, std_error, df, scale, n, whole.few & ~hidden, whole=whole, hidden=hidden)

    def bounds(self, confidence_level: float) -> tuple[FloatArray, FloatArray]:
        """Return the lower and upper bounds at a level (see `Estimates.bounds`)."""
        low, high = self.whole.bounds(confidence_level)
        return np.where(self.hidden, np.nan, low), np.where(self.hidden, np.nan, high)

    def take(self, index: np.ndarray) -> Estimates:
        """Return those at `index`, positions or a mask."""
        return _Shown.of(self.whole.take(index), self.hidden[index])

    def times(self, factor: float) -> Estimates:
        """Return the same numbers in another unit."""
        return _Shown.of(self.whole.times(factor), self.hidden)


def shown_counts(plain: PlainCount, few: FewPeople) -> PlainCount:
    """Return plain counts, NaN in the place of those that are not shown."""
    ended = {name: math.nan if few.log or name in few.outcomes else n for name, n in plain.n_by_outcome.items()}
    hidden = {
        "n_people": few.log,
        "n_journeys": few.log,
        "n_sure": few.log or few.starts,
        "n_undecided": few.log or OPEN in few.outcomes,
        "n_converted": few.log or few.conversion,
    }
    values: dict[str, Any] = {name: math.nan for name, one in hidden.items() if one} | {"n_by_outcome": ended}
    return replace(plain, **values)


class Hider:
    """Takes out of answers what is not shown.

    Parameters
    ----------
    few : FewPeople
        What that is.
    """

    def __init__(self, few: FewPeople) -> None:
        self._few = few
        self._none_converts = few.log or few.conversion

    def conversion(self, result: R) -> R:
        """Return an answer about those who convert, of all journeys or from every state."""
        states = self._few.states
        starts = result.keys["start_state"] if "start_state" in result.keys else result.keys["measure"]
        return self._masked(result, starts.isin(states).to_numpy() | self._none_converts)

    def endings(self, result: R) -> R:
        """Return an answer by start and outcome."""
        few, keys = self._few, result.keys
        return self._masked(result, (keys.start_state.isin(few.states) | keys.outcome.isin(few.outcomes)).to_numpy())

    def moves(self, result: R) -> R:
        """Return an answer by move."""
        return self._masked(result, self._of_moves(result.keys))

    def shifts(self, result: R) -> R:
        """Return what a shift of each move does to conversion."""
        return self._masked(result, self._of_moves(result.keys) | self._none_converts)

    def back(self, result: R) -> R:
        """Return an answer by how the journey before ended."""
        return self._masked(result, result.keys.after.isin(self._few.back).to_numpy())

    def stages(self, result: R) -> R:
        """Return the answer by stage."""
        few, keys = self._few, result.keys
        gone = keys.stage.isin(few.stages).to_numpy()
        hidden = self._masked(result, gone | self._pairs(few.went, keys.stage, keys.outcome))
        # how many are still under way stands beside every row of a stage
        unsaid = keys.stage.isin([stage for stage, outcome in few.went if outcome == OPEN]).to_numpy()
        return replace(hidden, counts={**hidden.counts, "n_open": _blank(hidden.counts["n_open"], unsaid | gone)})

    def passed(self, result: R) -> R:
        """Return the answer on who passed each touchpoint."""
        few, name = self._few, result.keys.touchpoint
        return self._masked(result, name.isin(few.passed | few.states).to_numpy() | self._none_converts)

    def credited(self, result: R) -> R:
        """Return the answer on what touchpoints are credited with."""
        pairs = self._pairs(self._few.credited, result.keys.touchpoint, result.keys["rule"])
        return self._masked(result, pairs | self._none_converts)

    def group(self, column: str, result: R) -> R:
        """Return an answer on the conversion of the groups of a column."""
        few, keys = self._few.groups[column], result.keys
        hidden: BoolArray = keys[column].isin(few.conversion).to_numpy()
        if "basis" in keys:
            by_log = keys.basis.eq("log") & keys.horizon.ne(SO_FAR)
            hidden = hidden | (by_log & keys[column].isin(few.within)).to_numpy()
        return self._masked(result, hidden)

    def checks(self, result: CheckResult) -> CheckResult:
        """Return the checks, without words on few people."""
        few, name, about = self._few, result.keys.check_name, result.keys.about
        hidden = np.full(len(name), few.log)
        for names, why in (
            (_OF_CONVERSIONS, self._none_converts or OPEN in few.outcomes),
            ((UNDECIDED,), OPEN in few.outcomes),
            ((UNSURE,), few.starts),
            ((ROBOTS,), few.busy),
        ):
            hidden |= name.isin(names).to_numpy() & why
        hidden |= (name.eq(TOUCHES) & about.isin(few.passed)).to_numpy()
        columns = [column for column, one in few.groups.items() if one.size]
        hidden |= (name.isin([GROUPS, LATER]) & about.isin(columns)).to_numpy()
        masked = self._masked(result, hidden)
        words = {key: np.where(hidden, text, masked.counts[key]) for key, text in
                 (("compared", ""), ("verdict", few.text), ("advice", ""))}  # fmt: skip
        single = name.isin([MEMORY, GROUPS, LATER]).to_numpy() & bool(few.moves)
        told = [text.partition(_EXAMPLE)[0] if one else text for text, one in
                zip(words["compared"], single, strict=True)]  # fmt: skip
        words["compared"] = np.array(told, dtype=object)
        return replace(masked, counts={**masked.counts, **words})

    def _of_moves(self, keys: pd.DataFrame) -> BoolArray:
        from_few: BoolArray = keys.state.isin(self._few.states).to_numpy()
        return from_few | self._pairs(self._few.moves, keys.state, keys.next_state)

    def _pairs(self, pairs: frozenset[tuple[str, str]], first: pd.Series, second: pd.Series) -> BoolArray:
        if not pairs:
            return np.zeros(len(first), bool)
        return np.fromiter((pair in pairs for pair in zip(first, second, strict=True)), bool, len(first))

    def _masked(self, result: R, hidden: BoolArray) -> R:
        hidden = hidden | self._few.log
        if not hidden.any():
            return result
        counts = {name: _blank(values, hidden) for name, values in result.counts.items()}
        estimates = _Shown.of(result.estimates, hidden)
        return replace(result, estimates=estimates, counts=counts, flag=np.where(hidden, self._few.text, result.flag))


def hide(part: R | None, how: Callable[[R], R]) -> R | None:
    """Return an answer without what is not shown, where there is one."""
    return None if part is None else how(part)


def _blank(values: np.ndarray, hidden: BoolArray) -> np.ndarray:
    if not hidden.any() or not np.issubdtype(values.dtype, np.number):
        return values
    return np.where(hidden, np.nan, values)
