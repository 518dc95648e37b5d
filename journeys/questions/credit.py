"""Conversions shared out among the touchpoints, so that the parts add up."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from functools import partial
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.kernels.intervals import variance_from_buckets
from journeys.kernels.shapley import equal_split
from journeys.models.fit import JourneyFit
from journeys.questions import cautions
from journeys.questions.by_group import by_group
from journeys.questions.credit_by_log import Credited, counted, credited
from journeys.questions.credit_words import rules_differ
from journeys.questions.linear import TOO_FEW, leaning, probabilities
from journeys.questions.outcomes import UNREACHABLE
from journeys.questions.touchpoints import asked, influenced
from journeys.results import LOGIT, Estimates, Result, joined_flags

RULES = ("even", "first", "last")
BASES = ("log", "model")
WEIGHTS = ("conversions", "value")
NONE_OF_THEM = "none of them"
# All subsets of the touchpoints are solved for: 2^15 small systems take some tenths of a second.
MOST_TOUCHPOINTS = 15


@dataclass(frozen=True, eq=False, repr=False)
class CreditResult(Result):
    """Shares of the conversions by touchpoint; those of a rule and a basis sum to 1.

    Attributes
    ----------
    weight : str
        What is shared out: the conversions, or their value.
    """

    title: ClassVar[str] = "Credit for conversions"
    weight: str = "conversions"

    @property
    def cautions(self) -> tuple[str, ...]:
        """What to keep in mind with these numbers."""
        there = set(self.keys["rule"])
        even = (cautions.EVEN_SPLIT,) if "even" in there else ()
        ordered = (cautions.ONE_TAKES_ALL,) if there & {"first", "last"} else ()
        return (cautions.ASSOCIATION, *even, *ordered, cautions.UNRECORDED, cautions.STAFF)

    def summary(self) -> str:
        """Return the answer as plain text, where the rules differ and why, then what to keep in mind."""
        told = rules_differ(self.to_frame())
        return "\n\n".join([super().summary(), *(["\n".join(told)] if told else []), cautions.told(self.cautions)])


def credit(
    fit: JourneyFit,
    to: str | Collection[str] | None = None,
    *,
    rule: str | Sequence[str] = "even",
    basis: str | Sequence[str] = "log",
    weight: str = "conversions",
    touchpoints: str | Collection[str] | None = None,
    by: str | Sequence[str] | None = None,
    confidence_level: float = 0.95,
) -> CreditResult:
    """Return the share of the conversions that each touchpoint is credited with.

    Parameters
    ----------
    fit : JourneyFit
        The chain, and the log behind it.
    to : str or collection of str, optional
        An outcome, or several; by the model a state too. Default: all converted outcomes together.
    rule : {"even", "first", "last"} or several of them
        "even": each conversion in equal parts to all touchpoints that it touched. "first", "last": all of it to the
        first, or the last, of them; by the log only.
    basis : {"log", "model"} or both
        "log": from the touches counted, where the rules name `touchpoints`. "model": from the chain, for up to 15
        touchpoints and the even split alone.
    weight : {"conversions", "value"}
        What is shared out: conversions, or what their journeys are worth, where the rules name a column of `value`;
        by the log and the even split alone.
    touchpoints : str or collection of str, optional
        States; default: those that the rules name, else, by the model, every state; none that is in `to`.
    by : str or sequence of str, optional
        Columns that journeys are grouped by: one block of rows per group.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    CreditResult
        One row per (touchpoint, rule, basis), the touchpoints in the order given, and a row "none of them" for
        conversions that touch none of them. The estimates of a rule and basis sum to 1. `.summary()` says where rules
        differ and why.

    Raises
    ------
    TypeError
        If a touchpoint is no name.
    ValueError
        If an argument is not one of those or they do not go together, a touchpoint is no state, was not counted or is
        in `to`, or by the model there are more than 15.
    LogError
        If the log has no touches counted or no values, its conversions are worth nothing or less, or it does not tell
        of some touchpoints alone; if `by` is asked of a known chain, or of groups of which none can carry a fit.

    Notes
    -----
    By the log, journeys with a sure entry that have converted are weighted by the jumps of the Aalen-Johansen
    estimate, so that those still open do not pull the credit to touchpoints of short journeys. By the model, the even
    split is the Shapley value of the game in which the worth of a set of touchpoints is the conversion when arrivals
    at all others are lost, found from all of those 2^k conversions; on whole journeys an even split is that value too.
    Intervals from the linearised cluster variance with exact derivatives, even on the logit scale (of value: on its
    own).

    References
    ----------
    L. S. Shapley, A value for n-person games, in Contributions to the Theory of Games II, Princeton 1953. P. K.
    Andersen, O. Borgan, R. D. Gill, N. Keiding, Statistical Models Based on Counting Processes, Springer 1993, section
    IV.4.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.0, 0.5, 0.5, 0.0], [0.0, 0.0, 0.5, 0.5]], index=["visit", "basket"],
    ...     columns=["visit", "basket", "joined", "left"])
    >>> frame = credit(JourneyFit.from_matrix(chain), "joined", basis="model").to_frame()
    >>> frame[["touchpoint", "estimate"]].round(3).values.tolist()
    [['visit', 0.833], ['basket', 0.167], ['none of them', 0.0]]
    """
    rules, bases = _some(rule, RULES, "rule"), _some(basis, BASES, "basis")
    checks.one_of(weight, WEIGHTS, "weight")
    level = checks.confidence_level(confidence_level)
    _check_together(rules, bases, weight)
    ask = partial(
        _credit, to=to, rules=rules, bases=bases, weight=weight, touchpoints=touchpoints, level=level,
        refuse=by is None,
    )  # fmt: skip
    return ask(fit) if by is None else by_group(fit, by, ask)


def _some(given: str | Sequence[str], choices: tuple[str, ...], name: str) -> tuple[str, ...]:
    """Return one or several of some choices, each once."""
    several = (given,) if isinstance(given, str) or not isinstance(given, Sequence) else given
    if not several:
        msg = f"{name}: got none; wanted one or more of {', '.join(repr(choice) for choice in choices)}"
        raise ValueError(msg)
    return tuple(dict.fromkeys(checks.one_of(one, choices, name) for one in several))


def _check_together(rules: tuple[str, ...], bases: tuple[str, ...], weight: str) -> None:
    """Raise where the model, or the log, cannot tell what is asked for."""
    ordered = [rule for rule in rules if rule != "even"]
    if "model" in bases and ordered and ("log" not in bases or "even" not in rules):
        msg = f'rule={ordered[0]!r}: the model gives the even split alone; wanted rule="even", or basis="log"'
        raise ValueError(msg)
    if weight == "value" and "model" in bases:
        msg = 'weight="value": the model knows no values; wanted basis="log"'
        raise ValueError(msg)
    if weight == "value" and ordered:
        msg = f'weight="value": values are counted for the even split alone, not {ordered[0]!r}; wanted rule="even"'
        raise ValueError(msg)


def _credit(
    fit: JourneyFit,
    *,
    to: str | Collection[str] | None,
    rules: tuple[str, ...],
    bases: tuple[str, ...],
    weight: str,
    touchpoints: str | Collection[str] | None,
    level: float,
    refuse: bool,
) -> CreditResult:
    """Answer for one fit."""
    import pandas as pd

    parts: list[tuple[str, str, Credited]] = []
    if "log" in bases:
        it = counted(fit, to, touchpoints, rules, in_value=weight == "value")
        parts += [(rule, "log", credited(it, rule, refuse=refuse)) for rule in rules]
    if "model" in bases:
        parts.append(("even", "model", _by_model(fit, to, touchpoints)))
    keys = [(name, rule, basis) for rule, basis, part in parts for name in (*part.names, NONE_OF_THEM)]
    estimates = Estimates.joined([part.estimates for _, _, part in parts])
    return CreditResult(
        keys=pd.DataFrame(keys, columns=["touchpoint", "rule", "basis"], dtype=object),
        estimates=estimates,
        flag=np.concatenate([part.flag for _, _, part in parts]),
        counts={"n_effective": estimates.n_effective},
        confidence_level=level,
        weight=weight,
    )


def _by_model(fit: JourneyFit, to: str | Collection[str] | None, touchpoints: str | Collection[str] | None) -> Credited:
    """Return the even split by the chain."""
    it = asked(fit, to, touchpoints, singly=True)
    if len(it.names) > MOST_TOUCHPOINTS:
        msg = (
            f"touchpoints: {len(it.names)} states; wanted at most {MOST_TOUCHPOINTS} named, since by the model every "
            'set of them is solved for, or basis="log", which takes any number'
        )
        raise ValueError(msg)
    n, known = len(it.names) + 1, fit.influence is None
    value, std_error, df = np.full(n, np.nan), np.full(n, np.nan), np.full(n, np.nan)
    if it.way.conversion > 0:
        value, by_p = equal_split(it.way, it.groups, derive=not known)
        variance, df = (np.zeros(n), np.full(n, np.inf)) if known else variance_from_buckets(influenced(fit, by_p))
        std_error = np.sqrt(variance)
    estimates = probabilities(fit, value, std_error, df, np.full(n, it.n_conversions), LOGIT)
    flags = [(np.full(n, it.way.conversion <= 0), UNREACHABLE), (estimates.few & np.isfinite(value), TOO_FEW)]
    flags += [(np.full(n, mask[0]), text) for text, mask in leaning(fit).items()]
    return Credited(it.names, estimates, joined_flags(flags, n))
