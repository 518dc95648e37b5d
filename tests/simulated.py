"""A simulator of event logs whose true answers follow exactly from its stated parameters.

Five states. From each state a journey heads for another state, for `joined`, or for nowhere, with the
probabilities of ``HEADING`` and ``JOINING`` (what is left heads for nowhere). The stay before a move is
lognormal with the median and sigma of the state, ten times quicker where the move is a conversion. A stay
that would last longer than the silence never ends in that move: the journey lapses, as one that heads for
nowhere does. So P(i, j) = heading(i, j) * Pr(stay <= silence), and the mean stay of the moves that happen is
the lognormal's partial mean: truth needs no simulation.

With the parameters below: conversion from entry .15465, mean days to convert 9.5558, steps given conversion
3.7493, and .521 of the visits to the first state end in a lapse.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.special import ndtr

Floats = NDArray[np.float64]

SILENCE_DAYS = 30.0
STATES = ("poster", "price page", "newsletter", "open evening", "basket")
CONVERTED = "joined"
LOG_START = pd.Timestamp("2024-01-01T00:00:00Z")

ENTRY = np.array([0.45, 0.25, 0.15, 0.10, 0.05])
HEADING = np.array(
    [
        [0.00, 0.26, 0.20, 0.10, 0.07],
        [0.12, 0.00, 0.24, 0.20, 0.06],
        [0.14, 0.16, 0.00, 0.24, 0.12],
        [0.08, 0.10, 0.18, 0.00, 0.34],
        [0.06, 0.08, 0.10, 0.24, 0.00],
    ]
)
JOINING = np.array([0.01, 0.02, 0.05, 0.11, 0.26])
MEDIAN_DAYS = np.array([8.0, 5.0, 3.0, 2.0, 1.0])
SIGMA = np.array([2.0, 1.8, 1.6, 1.4, 1.2])
CONVERSION_SPEED = 10.0
# The time between the end of a journey (a lapse included) and the next entry of a customer who returns.
MEAN_DAYS_AWAY = 20.0
DAY_US = 86_400_000_000


@dataclass(frozen=True)
class CustomerClass:
    """A kind of customer: its share, and what multiplies its joining and its median stays."""

    share: float
    joining: float
    tempo: float


@dataclass(frozen=True)
class Change:
    """From a day of the log on, joining is so many times as likely: at every visit begun then, or in journeys."""

    day: float
    joining: float
    in_flight: bool


ONE_CLASS = (CustomerClass(1.0, 1.0, 1.0),)
# People in a hurry who seldom join, and slow ones who do: a fit without classes is 1.71 days short here.
TWO_CLASSES = (CustomerClass(0.4, 0.2, 0.3), CustomerClass(0.6, 1.8, 2.0))


@dataclass(frozen=True)
class Truth:
    """What a journey from entry really does.

    `matrix` and `mean_days_to_convert_fitted` are the limit of a fit that knows of no classes; with one class
    the latter equals `mean_days_to_convert`.
    """

    conversion: float
    mean_days_to_convert: float
    mean_steps_to_convert: float
    mean_days_to_convert_fitted: float
    matrix: pd.DataFrame


def headings(kind: CustomerClass) -> Floats:
    """Return the probabilities of heading for each state and for the conversion, shape (5, 6)."""
    return np.column_stack([HEADING, JOINING * kind.joining])


def log_medians(kind: CustomerClass) -> Floats:
    """Return the mean of the log of the stay in days before each move, shape (5, 6)."""
    days = np.repeat(MEDIAN_DAYS[:, None] * kind.tempo, len(STATES) + 1, axis=1)
    days[:, -1] /= CONVERSION_SPEED
    return np.log(days)


def kernel(kind: CustomerClass) -> tuple[Floats, Floats]:
    """Return P and the days spent, E[stay; move], of the moves that happen, each of shape (5, 6)."""
    mu, sigma, limit = log_medians(kind), SIGMA[:, None], np.log(SILENCE_DAYS)
    share_in_time = ndtr((limit - mu) / sigma)
    partial_mean = np.exp(mu + sigma**2 / 2) * ndtr((limit - mu - sigma**2) / sigma)
    return headings(kind) * share_in_time, headings(kind) * partial_mean


def passage(probability: Floats, days: Floats) -> tuple[float, float, float]:
    """Return conversion from entry, E[days; converted] and E[steps; converted] by one linear solve."""
    n = len(STATES)
    visits = ENTRY @ np.linalg.inv(np.eye(n) - probability[:, :n])
    convert = np.linalg.solve(np.eye(n) - probability[:, :n], probability[:, n])
    conversion = float(ENTRY @ convert)
    mean_days = float(visits @ (days[:, :n] @ convert + days[:, n]))
    mean_steps = float(visits @ convert) + conversion  # the step from entry to the first state counts
    return conversion, mean_days, mean_steps


def truth(*, two_classes: bool = False) -> Truth:
    """Return the true answers for journeys that enter in proportion to the classes' shares."""
    n = len(STATES)
    totals = np.zeros(3)
    moves, days_spent, visits = np.zeros((n, n + 1)), np.zeros((n, n + 1)), np.zeros(n)
    for kind in TWO_CLASSES if two_classes else ONE_CLASS:
        probability, days = kernel(kind)
        totals += kind.share * np.array(passage(probability, days))
        visits_of_kind = kind.share * ENTRY @ np.linalg.inv(np.eye(n) - probability[:, :n])
        visits += visits_of_kind
        moves += visits_of_kind[:, None] * probability
        days_spent += visits_of_kind[:, None] * days
    pooled = moves / visits[:, None]
    conversion, fitted_days, _ = passage(pooled, days_spent / visits[:, None])
    matrix = pd.DataFrame(
        np.vstack([[*ENTRY, 0.0, 0.0], np.column_stack([pooled, 1.0 - pooled.sum(axis=1)])]),
        index=["entry", *STATES],
        columns=[*STATES, CONVERTED, "lapsed"],
    )
    return Truth(
        conversion=float(totals[0]),
        mean_days_to_convert=float(totals[1] / totals[0]),
        mean_steps_to_convert=float(totals[2] / totals[0]),
        mean_days_to_convert_fitted=fitted_days / conversion,
        matrix=matrix,
    )


def log_end(length_in_silences: float) -> pd.Timestamp:
    """Return the `as_of` of a simulated log of this length."""
    return LOG_START + pd.Timedelta(round(length_in_silences * SILENCE_DAYS * DAY_US), unit="us")


def simulate(
    n_customers: int,
    length_in_silences: float,
    rng: np.random.Generator,
    *,
    first_arrivals: str = "uniform",
    returning: float = 0.5,
    two_classes: bool = False,
    change: Change | None = None,
) -> pd.DataFrame:
    """Return the log between `LOG_START` and `log_end(length_in_silences)`: customer, time, event, by time.

    First arrivals are uniform over the log, or over the log and the eight silences before it ("steady state
    from -8W"); what falls outside the log is cut off. After each journey, lapsed or converted, a customer
    comes back with probability `returning`. A change holds for visits begun after it (in flight), or for all
    visits of journeys begun after it.
    """
    starts = {"uniform": 0.0, "steady state from -8W": -8.0 * SILENCE_DAYS}
    log_days = length_in_silences * SILENCE_DAYS
    kinds = TWO_CLASSES if two_classes else ONE_CLASS
    kind = rng.choice(len(kinds), n_customers, p=[k.share for k in kinds])
    later = 1.0 if change is None else change.joining
    changed = [CustomerClass(k.share, k.joining * later, k.tempo) for k in kinds]
    routes = np.stack([headings(k).cumsum(axis=1) for k in (*kinds, *changed)])
    mu = np.stack([log_medians(k) for k in (*kinds, *changed)])

    into = np.minimum(ENTRY.cumsum(), 1.0)
    into[-1] = 1.0  # whatever rounding left of the sum
    customer = np.arange(n_customers)
    time = rng.uniform(starts[first_arrivals], log_days, n_customers)
    began = time
    state = draw(np.broadcast_to(into, (n_customers, len(STATES))), rng)
    seen: list[tuple[NDArray[np.int64], Floats, NDArray[np.int64]]] = []
    while len(customer):
        seen.append((customer, time, state))
        # Who has just converted, or heads for nowhere, or would be silent too long, ends the journey here.
        at_state = state < len(STATES)
        here = np.where(at_state, state, 0)
        behaves = kind[customer]
        if change is not None:
            behaves = behaves + len(kinds) * ((time if change.in_flight else began) >= change.day)
        heading = draw(routes[behaves, here], rng)
        moving = at_state & (heading <= len(STATES))
        target = np.minimum(heading, len(STATES))
        stay = rng.lognormal(mu[behaves, here, target], SIGMA[here])
        moving &= stay <= SILENCE_DAYS
        back = ~moving & (rng.random(len(customer)) < returning)
        ended = time + np.where(at_state, SILENCE_DAYS, 0.0)
        away = rng.exponential(MEAN_DAYS_AWAY, len(customer))
        entry = draw(np.broadcast_to(into, (len(customer), len(STATES))), rng)
        time = np.where(moving, time + stay, ended + away)
        state = np.where(moving, target, entry)
        began = np.where(moving, began, time)
        going_on = (moving | back) & (time <= log_days)
        customer, time, state, began = (part[going_on] for part in (customer, time, state, began))
    return as_log(seen, log_days)


def draw(cumulative: Floats, rng: np.random.Generator) -> NDArray[np.int64]:
    """Draw a column per row from cumulative probabilities; one past the last where they fall short of 1."""
    drawn: NDArray[np.int64] = (rng.random(len(cumulative))[:, None] >= cumulative).sum(axis=1)
    return drawn


def as_log(seen: list[tuple[NDArray[np.int64], Floats, NDArray[np.int64]]], log_days: float) -> pd.DataFrame:
    """Return the events inside the log, by time; a customer's events of one microsecond keep their order."""
    customer, days, state = (np.concatenate(parts) for parts in zip(*seen, strict=True))
    time_us = np.rint(days * DAY_US).astype(np.int64)
    inside = np.flatnonzero((days >= 0) & (time_us <= round(log_days * DAY_US)))
    order = inside[np.argsort(time_us[inside], kind="stable")]
    names = np.array([*STATES, CONVERTED], dtype=object)
    start_us = round(LOG_START.timestamp()) * 1_000_000
    stamps = pd.DatetimeIndex((time_us[order] + start_us).view("datetime64[us]"), tz="UTC")
    return pd.DataFrame({"customer": customer[order], "time": stamps, "event": names[state[order]]})
