"""The main job's answer: every headline number of a log with its interval, beside what a plain count says."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.kernels.phase_type import DENSE
from journeys.markup import count_text, frame_table
from journeys.models.fit import JourneyFit
from journeys.questions.check import CheckResult
from journeys.questions.comeback import ComebackResult
from journeys.questions.compare import CompareResult
from journeys.questions.credit import CreditResult
from journeys.questions.curve_result import PassageCurve
from journeys.questions.few_people import FewPeople
from journeys.questions.first_passage import FirstPassageResult
from journeys.questions.moves import MovesResult
from journeys.questions.outcomes import OutcomesResult
from journeys.questions.passage_curve import passage_curve
from journeys.questions.plain_count import PlainCount
from journeys.questions.removal import RemovalResult
from journeys.questions.sensitivity import SensitivityResult
from journeys.questions.stages import StagesResult
from journeys.questions.time_to_convert import IN_THE_END, SO_FAR, TimeToConvertResult

if TYPE_CHECKING:
    import pandas as pd

KEY_COLUMNS = (
    "section", "start_state", "state", "next_state", "stage", "touchpoint", "rule", "after", "outcome", "measure",
    "horizon", "basis", "check_name", "about",
)  # fmt: skip
CREDITED = ("even", "first", "last")


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
    few : FewPeople or None
        What was taken out of all of these because it describes too few people; None where nothing was to be.
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
    few: FewPeople | None = None

    @cached_property
    def curve(self) -> PassageCurve | None:
        """By when how many have converted, of all who come in; None for chains of more than 500 states, or if few."""
        if self.fit.nodes.n_rows > DENSE or (self.few is not None and (self.few.log or self.few.conversion)):
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
        lines = pd.DataFrame(rows, columns=["line", "n", "of", "estimate", "low", "high", "note"])
        if self.few is not None:
            lines.loc[lines[["n", "of"]].isna().any(axis=1) & (lines.index < len(lines) - 1), "note"] = self.few.text
        return lines

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
            "flag": ["" if math.isfinite(one) or self.few is None else self.few.text for one in n],
            **dict.fromkeys(("std_error", "low", "high", "confidence_level"), np.nan),
        }

    def __repr__(self) -> str:
        """Return one line."""
        return f"<Overview: {count_text(self.plain.n_journeys)} journeys of {count_text(self.plain.n_people)} people>"

    def _repr_html_(self) -> str:
        return frame_table(self.reconciliation(), "How the expected share comes out of the plain one", n_keys=1)
