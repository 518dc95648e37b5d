"""The main job's answer: every headline number of a log with its interval, beside what a plain count says."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from journeys import checks
from journeys.errors import LogError
from journeys.kernels.phase_type import DENSE
from journeys.markup import frame_table
from journeys.models.fit import JourneyFit
from journeys.models.what_if import WhatIf
from journeys.questions.check import CheckResult, check
from journeys.questions.comeback import ComebackResult, comeback
from journeys.questions.compare import CompareResult, compare
from journeys.questions.credit import CreditResult, credit
from journeys.questions.curve_result import PassageCurve
from journeys.questions.first_passage import FirstPassageResult, first_passage
from journeys.questions.moves import MovesResult, moves
from journeys.questions.outcomes import OutcomesResult, outcomes
from journeys.questions.passage_curve import passage_curve
from journeys.questions.plain_count import PlainCount, plain_count
from journeys.questions.removal import RemovalResult, removal
from journeys.questions.sensitivity import SensitivityResult, sensitivity
from journeys.questions.stages import StagesResult, stages
from journeys.questions.time_to_convert import IN_THE_END, SO_FAR, TimeToConvertResult, time_to_convert

if TYPE_CHECKING:
    import pandas as pd

KEY_COLUMNS = (
    "section", "start_state", "state", "next_state", "stage", "touchpoint", "rule", "after", "outcome", "measure",
    "horizon", "basis", "check_name", "about",
)  # fmt: skip
CREDITED = ("even", "first", "last")
# Of larger chains nobody reads every move, and looking at all pairs takes long.
MOST_SHIFTED = 100
# With more groups than these each is not fitted against all others.
MOST_COMPARED = 30


@dataclass(frozen=True, eq=False)
class Overview:
    """All parts of the summary of one fit.

    Attributes
    ----------
    fit : JourneyFit
        What was asked.
    plain : PlainCount
        The plain count of the same log.
    conversion : TimeToConvertResult
        Share converted by horizon and in the end; mean steps and days.
    endings : OutcomesResult
        Where journeys end.
    steps, days : FirstPassageResult
        From entry and every state to conversion.
    matrix : MovesResult
        Every move.
    checks : CheckResult
        Whether to believe the fit.
    back : ComebackResult or None
        Who comes back after a lapse; None where nothing lapses.
    funnel : StagesResult or None
        The stages of the rules; None where none are named.
    touched, credited : RemovalResult and CreditResult, or None
        The touchpoints of the rules; None where none are named.
    shifts : SensitivityResult or None
        What one point more of each move would do; None for chains of more than 100 states.
    groups : dict of str to TimeToConvertResult
        Conversion by each column that journeys are grouped by.
    against : dict of str to CompareResult
        Each group against all others, for columns of few groups.
    """

    fit: JourneyFit
    plain: PlainCount
    conversion: TimeToConvertResult
    endings: OutcomesResult
    steps: FirstPassageResult
    days: FirstPassageResult
    matrix: MovesResult
    checks: CheckResult
    back: ComebackResult | None = None
    funnel: StagesResult | None = None
    touched: RemovalResult | None = None
    credited: CreditResult | None = None
    shifts: SensitivityResult | None = None
    groups: dict[str, TimeToConvertResult] = field(default_factory=dict)
    against: dict[str, CompareResult] = field(default_factory=dict)

    @cached_property
    def curve(self) -> PassageCurve | None:
        """By when how many have converted, of all who come in; None for chains of more than 500 states."""
        if self.fit.nodes.n_rows > DENSE:
            return None
        return passage_curve(self.fit, confidence_level=self.conversion.confidence_level)

    def reconciliation(self) -> pd.DataFrame:
        """Return how the expected share comes out of the plain one, line by line.

        Returns
        -------
        DataFrame
            Columns line, n, of, estimate, low, high, note.
        """
        import pandas as pd

        plain = self.plain
        decided = plain.n_journeys - plain.n_undecided
        frame = self.conversion.to_frame()
        frame = frame[frame.measure == "converted"].set_index("horizon")
        so_far, end = frame.loc[SO_FAR], frame.loc[IN_THE_END]
        rows = [
            (
                "plain count: converted so far, of all journeys",
                plain.n_converted,
                plain.n_journeys,
                so_far.estimate,
                so_far.low,
                so_far.high,
                "too low: the undecided count as lost" if plain.n_undecided else "",
            ),
            (
                "converted so far, of decided journeys only",
                plain.n_converted,
                decided,
                plain.n_converted / decided if decided else np.nan,
                np.nan,
                np.nan,
                "off: the undecided are left out"
                if self.fit.tally is None or self.fit.tally.rules.silence_us is None
                else "off: a conversion is seen at once, a loss only after the silence",
            ),
            (
                "undecided yet",
                plain.n_undecided,
                plain.n_journeys,
                plain.n_undecided / plain.n_journeys,
                np.nan,
                np.nan,
                "kept, as lasting at least as long as they were seen",
            ),
            (
                "may have begun before the log",
                plain.n_journeys - plain.n_sure,
                plain.n_journeys,
                1 - plain.n_sure / plain.n_journeys,
                np.nan,
                np.nan,
                "their moves count, their first event is not taken for an entry",
            ),
            (
                "expected in the end, of all who come in",
                np.nan,
                np.nan,
                end.estimate,
                end.low,
                end.high,
                end.flag,
            ),
        ]
        return pd.DataFrame(rows, columns=["line", "n", "of", "estimate", "low", "high", "note"])

    def to_frame(self) -> pd.DataFrame:
        """Return every number of the summary, one tidy row each.

        Returns
        -------
        DataFrame
            Columns section, the keys of all sections, estimate, std_error, low, high, confidence_level,
            counts, flag.
        """
        import pandas as pd

        sections = {
            "time_to_convert": self.conversion,
            "outcomes": self.endings,
            "first_passage_steps": self.steps,
            "first_passage_days": self.days,
            "moves": self.matrix,
            "comeback": self.back,
            "stages": self.funnel,
            "touchpoints": self.touched,
            "credit": self.credited,
            "sensitivity": self.shifts,
            "checks": self.checks,
            **{f"by {column}": result for column, result in self.groups.items()},
            **{f"against the rest by {column}": result for column, result in self.against.items()},
        }
        frames = [result.to_frame().assign(section=name) for name, result in sections.items() if result is not None]
        whole = pd.concat([pd.DataFrame(self._counts()), *frames], ignore_index=True)
        return whole[
            [
                *(key for key in KEY_COLUMNS if key in whole),
                *(column for column in whole if column not in KEY_COLUMNS),
            ]
        ]

    def _counts(self) -> dict[str, Any]:
        """Return the columns that tell what was counted."""
        plain = self.plain
        counts = {
            "people": plain.n_people,
            "journeys": plain.n_journeys,
            "sure entries": plain.n_sure,
            "undecided": plain.n_undecided,
        }
        rows: list[tuple[str, str | None, int]] = [(name, None, n) for name, n in counts.items()]
        rows += [("ended", outcome, n) for outcome, n in plain.n_by_outcome.items()]
        measures, ended, n = zip(*rows, strict=True)
        return {
            "measure": measures,
            "outcome": ended,
            "estimate": np.array(n, dtype=np.float64),
            "section": "counts",
            "basis": "log",
            "flag": "",
            **dict.fromkeys(("std_error", "low", "high", "confidence_level"), np.nan),
        }

    def __repr__(self) -> str:
        """Return one line."""
        return f"<Overview: {self.plain.n_journeys:,} journeys of {self.plain.n_people:,} people>"

    def _repr_html_(self) -> str:
        return frame_table(self.reconciliation(), "How the expected share comes out of the plain one", n_keys=1)


def summarise(
    fit: JourneyFit, horizons: Collection[checks.Duration] | None = None, *, confidence_level: float = 0.95
) -> Overview:
    """Return the summary of a fit: counts, conversion, times, endings, moves, and the plain count beside.

    Parameters
    ----------
    fit : JourneyFit
        A fit to a tally.
    horizons : collection of durations, optional
        As in `time_to_convert`.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    Overview
        Its `to_frame` is what the command writes.

    Raises
    ------
    LogError
        If the fit is a known chain without a log, or a what-if.
    ValueError
        If a horizon is not a duration, or the level is not between 0 and 1.

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> from journeys.models.model import JourneyModel
    >>> from journeys.tally.count import count_log
    >>> days = ["2025-01-01", "2025-01-03", "2025-01-02", "2025-01-02", "2025-01-05"]
    >>> log = pd.DataFrame({"member": [1, 1, 2, 3, 3], "event": ["visit", "joined", "visit", "visit", "left"],
    ...                     "happened": pd.to_datetime(days, utc=True)})
    >>> rules = JourneyRules("member", "happened", "event", converted="joined", churned="left", silence="30d",
    ...                      complete_history=True, as_of="2025-03-01")
    >>> overview = summarise(JourneyModel().fit(count_log(log, rules)))
    >>> overview.plain.n_converted, overview.plain.n_by_outcome["lapsed"]
    (1, 1)
    """
    if fit.tally is None:
        msg = "this chain was given, not fitted to a log; ask outcomes or first_passage instead"
        raise LogError(msg)
    if isinstance(fit, WhatIf):
        msg = "this chain was changed by hand, so the log's counts do not go with it; wanted its fit, or ask compare"
        raise LogError(msg)
    level = checks.confidence_level(confidence_level)
    tally, rules = fit.tally, fit.tally.rules
    return Overview(
        fit=fit,
        plain=plain_count(fit.tally),
        conversion=time_to_convert(fit, horizons, confidence_level=level),
        endings=outcomes(fit, confidence_level=level),
        steps=first_passage(fit, clock="steps", method="linearised", confidence_level=level),
        days=first_passage(fit, clock="time", method="linearised", confidence_level=level),
        matrix=moves(fit, confidence_level=level),
        checks=check(fit, confidence_level=level),
        back=None if rules.silence_us is None else comeback(tally, confidence_level=level),
        funnel=stages(fit, confidence_level=level) if rules.stages else None,
        touched=removal(fit, confidence_level=level) if rules.touchpoints else None,
        credited=credit(fit, rule=CREDITED, confidence_level=level) if rules.touchpoints else None,
        shifts=sensitivity(fit, confidence_level=level) if len(fit.states) <= MOST_SHIFTED else None,
        groups={name: time_to_convert(fit, horizons, by=name, confidence_level=level) for name in rules.by},
        against={
            name: compare(fit, by=name, confidence_level=level)
            for name in rules.by
            if 1 < len(tally.split(name)) <= MOST_COMPARED
        },
    )
