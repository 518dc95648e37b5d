"""The rules a log is read by: which columns, what a journey is, how it ends, what is left out."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, fields
from typing import Any

from journeys.checks import Duration, Instant, duration_us, instant_us
from journeys.errors import RulesError
from journeys.intake.frozen import FrozenMap
from journeys.intake.group_checks import BUILT_IN
from journeys.intake.rule_checks import LIMITS, NOT_GIVEN, NotGiven, canonical
from journeys.intake.settings import Settings


@dataclass(frozen=True, slots=True, init=False, repr=False)
class JourneyRules(Settings):
    """Rules a log is read by, checked when made; equal rules compare equal however they were written.

    Parameters
    ----------
    customer, time, event : str
        Columns with the customer's id, the time and the name of the event.
    converted, churned : str or list of str
        Events that end a journey well or badly, named after `states` has mapped them.
    silence : str, timedelta or None
        Must be given. A customer quiet for longer has lapsed, at the last event plus `silence`; a gap equal
        to it is no lapse. None: nothing lapses.
    after_outcome : {"reopen", "stop"}
        Whether an event after an outcome begins another journey, or a customer's story ends there. "stop"
        needs `complete_history` or `ended_before`.
    same_outcome_within : str or timedelta
        The same outcome again within this time, with nothing between, is a repeat: counted and merged.
    states : mapping of str to str, optional
        Event to the state (or outcome) it counts as; None (false in TOML) drops the event.
    unmapped : str
        What becomes of events that neither `states` nor the outcomes name: "keep", "drop", or the name of a
        state to gather them under.
    repeats : {"keep", "merge"}
        Whether a run of the same state is several visits or one.
    sequence : str, optional
        Column of whole numbers that orders a customer's rows of the same time.
    duplicates : {"keep", "drop"}
        What becomes of rows equal to an earlier one in customer, time, event, `sequence` and `value`.
    exclude : mapping of str to list
        Column to the values that leave a row out (staff, tests).
    as_of, log_start : str, datetime, date or Timestamp, optional
        Last and first instant of the log, both included; found in the log if left out. No zone: UTC.
    complete_history : bool
        The log holds each customer's whole past.
    ended_before : str, optional
        Boolean column: the customer had ended before the log begins.
    horizons : list of str or timedelta
        Further times since entry at which shares are to be exact.
    opens : str or list of str
        States that may open a journey; what comes before the first of them is left out and counted. Default:
        any state. An outcome opens one only when nothing else does.
    by : str or list of str
        Columns to group journeys by, read at a journey's first event; also "came_after", built in: whether
        the customer was new, had lapsed, or how the journey before ended.
    cohort : {"day", "week", "month"}, optional
        Groups journeys by the day, week (from Monday) or month in which they began: the column "cohort".
    timezone : str
        Where the days of a cohort begin, such as "Europe/Amsterdam".
    split_at : list of str, datetime, date or Timestamp
        Cuts the log into periods, the column "period": a move belongs to the period in which its state was
        entered; one that crosses a cut is open at the cut, and not counted after it.
    stages : list of str
        States that a journey passes one after another on its way, in order, for the table of stages.
    touchpoints : list of str, or "all"
        States that attribution is about, in order, 63 at most; "all" for every state, if there are no more. What
        journeys touch is counted only if asked for: it makes the pass over the log slower. Default: none.
    value : str, optional
        Column of numbers: what each event is worth in money, a journey being worth the sum of its events (its
        outcome's too; an outcome merged with the one before it adds nothing). Kept to a millionth; negative for
        what is paid back; a missing one counts as 0 and is a finding.
    limits : mapping of str to float
        "unreadable": largest share of rows that may lack a readable customer, time or event. "late": largest share
        of a night's rows that may come too late for its ledger.

    Raises
    ------
    RulesError
        Naming everything that is wrong at once.

    Examples
    --------
    >>> rules = JourneyRules("member", "happened", "event", converted=["joined"], silence="30d")
    >>> rules.columns, rules.silence_us // 86_400_000_000
    (('member', 'happened', 'event'), 30)
    >>> rules == JourneyRules("member", "happened", "event", converted="joined", silence="720h")
    True
    >>> JourneyRules("member", "happened", "event", silence="1s", repeats="count")
    Traceback (most recent call last):
    ...
    journeys.errors.RulesError: repeats: got 'count'; wanted one of 'keep', 'merge'
    """

    customer: str
    time: str
    event: str
    converted: tuple[str, ...]
    churned: tuple[str, ...]
    silence: str | None
    after_outcome: str
    same_outcome_within: str
    states: FrozenMap[str | None] | None
    unmapped: str
    repeats: str
    sequence: str | None
    duplicates: str
    exclude: FrozenMap[tuple[str | int | bool, ...]]
    as_of: str | None
    log_start: str | None
    complete_history: bool
    ended_before: str | None
    horizons: tuple[str, ...]
    opens: tuple[str, ...]
    by: tuple[str, ...]
    cohort: str | None
    timezone: str
    split_at: tuple[str, ...]
    stages: tuple[str, ...]
    touchpoints: tuple[str, ...] | str
    value: str | None
    limits: FrozenMap[float]

    def __init__(
        self,
        customer: str,
        time: str,
        event: str,
        *,
        converted: str | Iterable[str] = (),
        churned: str | Iterable[str] = (),
        silence: Duration | NotGiven | None = NOT_GIVEN,
        after_outcome: str = "reopen",
        same_outcome_within: Duration = "1h",
        states: Mapping[str, str | None] | None = None,
        unmapped: str = "keep",
        repeats: str = "keep",
        sequence: str | None = None,
        duplicates: str = "keep",
        exclude: Mapping[str, Any] = FrozenMap(),  # noqa: B008 - immutable
        as_of: Instant | None = None,
        log_start: Instant | None = None,
        complete_history: bool = False,
        ended_before: str | None = None,
        horizons: str | Iterable[Duration] = (),
        opens: str | Iterable[str] = (),
        by: str | Iterable[str] = (),
        cohort: str | None = None,
        timezone: str = "UTC",
        split_at: Instant | Iterable[Instant] = (),
        stages: Iterable[str] = (),
        touchpoints: str | Iterable[str] = (),
        value: str | None = None,
        limits: Mapping[str, float] = FrozenMap(LIMITS),  # noqa: B008 - immutable
    ) -> None:
        given = locals()
        settings, problems = canonical({field.name: given[field.name] for field in fields(self)})
        if problems:
            raise RulesError("\n".join(problems))
        for name, value in settings.items():
            object.__setattr__(self, name, value)

    @property
    def silence_us(self) -> int | None:
        """Silence in microseconds, or None."""
        return None if self.silence is None else duration_us(self.silence, "silence")

    @property
    def same_outcome_us(self) -> int:
        """Time within which the same outcome is a repeat, in microseconds."""
        return duration_us(self.same_outcome_within, "same_outcome_within")

    @property
    def as_of_us(self) -> int | None:
        """Last instant of the log in microseconds since 1970, or None if it is to be found."""
        return None if self.as_of is None else instant_us(self.as_of, "as_of")

    @property
    def log_start_us(self) -> int | None:
        """First instant of the log in microseconds since 1970, or None if it is to be found."""
        return None if self.log_start is None else instant_us(self.log_start, "log_start")

    @property
    def horizons_us(self) -> tuple[int, ...]:
        """Horizons in microseconds, rising."""
        return tuple(duration_us(horizon, "horizons") for horizon in self.horizons)

    @property
    def splits_us(self) -> tuple[int, ...]:
        """Cuts between periods in microseconds since 1970, rising."""
        return tuple(instant_us(split, "split_at") for split in self.split_at)

    @property
    def group_columns(self) -> tuple[str, ...]:
        """Columns of the log that journeys are grouped by."""
        return tuple(name for name in self.by if name not in BUILT_IN)

    @property
    def named_touchpoints(self) -> tuple[str, ...]:
        """Touchpoints by name; none where there are none, or all states are."""
        return () if isinstance(self.touchpoints, str) else self.touchpoints

    @property
    def outcomes(self) -> tuple[str, ...]:
        """Outcomes named by the rules: the converted ones, then the churned ones."""
        return self.converted + self.churned

    @property
    def columns(self) -> tuple[str, ...]:
        """Columns the log must have, each once."""
        roles = (self.customer, self.time, self.event, self.sequence, self.ended_before, self.value)
        named = [column for column in roles if column is not None]
        return tuple(dict.fromkeys([*named, *self.exclude, *self.group_columns]))

    @property
    def id_columns(self) -> tuple[str, ...]:
        """Columns whose whole numbers are only names: the customer's id, groups, what tells rows to leave out."""
        return (self.customer, *self.exclude, *self.group_columns)

    def target(self, event: str) -> str | None:
        """State or outcome an event counts as; None if the rules drop it.

        Parameters
        ----------
        event : str
            As written in the log.

        Returns
        -------
        str or None

        Examples
        --------
        >>> rules = JourneyRules(
        ...     "who", "when", "what", silence=None, states={"view": "seen"}, unmapped="other"
        ... )
        >>> rules.target("view"), rules.target("seen"), rules.target("click")
        ('seen', 'seen', 'other')
        """
        if self.states is None or self.unmapped == "keep":
            return event if self.states is None else self.states.get(event, event)
        if event in self.states:
            return self.states[event]
        if event in self.outcomes or event in self.states.values():
            return event
        return None if self.unmapped == "drop" else self.unmapped

    def _for_toml(self) -> dict[str, Any]:
        settings = self.to_dict()
        settings["silence"] = self.silence or "none"
        if self.states is not None:
            settings["states"] = {event: state or False for event, state in self.states.items()}
        return settings

    def _must_be_said(self) -> dict[str, Any]:
        return {"silence": None}
