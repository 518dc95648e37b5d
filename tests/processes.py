"""Logs of journeys that obey a law of one step of memory, or break it in a stated way.

Five states. From each a journey goes to another state or to `joined`, or to nowhere, with the probabilities of `GOING`
and `JOINING` (what is left goes nowhere and lapses). Stays are lognormal, cut off at the silence without changing
where they lead to: so the moves keep their probabilities whatever the tempo of a customer. With `one step` the law is
that of a chain with one step of memory; the others:

- `copied`: customers live in households of four, all in one bucket (see `tally`); a journey is that of the first of
  them again with probability .7, at another time. Each by itself obeys the law, and whether it is seen to its end does
  not depend on what it is, as it would where one customer did the same again the sooner it was over.
- `two steps`: with strength k, where a journey goes from a state depends on the state before. Whoever came up the list
  of states goes on up, and who came down goes on down, with exp(1.2 k) times the weight, and turns round with
  exp(-1.2 k) times; rows keep their sums, and outcomes theirs.
- `kinds`: half the customers move on 1.16 times as readily, the others .84 times: they lapse the more.
- `movers and stayers`: a quarter of the customers see the state again with probability .8, and else go nowhere.
- `tempi`: half the customers are quick, the others slow; moves are the same.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri

import journeys as jn
from journeys.intake.identity import N_BUCKETS, bucket_of, mix

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

SILENCE_DAYS = 30.0
STATES = ("poster", "price page", "newsletter", "open evening", "basket")
START = pd.Timestamp("2024-01-01T00:00:00Z")
ENTRY = np.array([0.40, 0.25, 0.15, 0.12, 0.08])
GOING = np.array(
    [
        [0.00, 0.28, 0.20, 0.12, 0.10],
        [0.16, 0.00, 0.22, 0.18, 0.12],
        [0.14, 0.18, 0.00, 0.22, 0.14],
        [0.10, 0.14, 0.18, 0.00, 0.26],
        [0.10, 0.12, 0.14, 0.20, 0.00],
    ]
)
JOINING = np.array([0.02, 0.04, 0.06, 0.12, 0.26])
MEDIAN_DAYS = np.array([5.0, 3.0, 2.5, 2.0, 1.0])
SIGMA = 1.3
HOUSEHOLD = 4
COPYING = 0.7
COMING_AGAIN = 0.5
MEAN_DAYS_AWAY = 10.0
BEFORE_SILENCES = 12.0
PROCESSES = (
    "one step", "copied", "two steps .15", "two steps .3", "two steps .8", "kinds", "movers and stayers", "tempi",
)  # fmt: skip
_MOST_STEPS = 400
_DAY_US = 86_400_000_000


@dataclass(frozen=True)
class Kind:
    """A kind of customer: its laws by the state before (the last is entry), and its tempo."""

    going: Floats
    tempo: float = 1.0


def law(going: Floats, strength: float = 0.0) -> Floats:
    """Return the moves by state before and state, shape (6, 5, 6): to each state, and to joined."""
    tilted = np.repeat(going[None], 6, axis=0)
    for before in range(5 if strength else 0):
        place = np.arange(5)
        goes_on = np.sign(place - before)[:, None] * np.sign(place[None] - place[:, None])
        weight = going * np.exp(1.2 * strength * goes_on)
        tilted[before] = weight * (going.sum(axis=1) / weight.sum(axis=1))[:, None]
    return np.concatenate([tilted, np.broadcast_to(JOINING[:, None], (6, 5, 1))], axis=2)


def kinds_of(process: str) -> tuple[Kind, ...]:
    """Return the kinds of customers of a process, equally many of each."""
    if process.startswith("two steps"):
        return (Kind(law(GOING, float(process.split()[-1]))),)
    if process == "kinds":
        return Kind(law(GOING * 1.16)), Kind(law(GOING * 0.84))
    if process == "movers and stayers":
        stayers = np.zeros((6, 5, 6))
        stayers[:, :, :5] = 0.8 * np.eye(5)
        return *[Kind(law(GOING))] * 3, Kind(stayers)
    if process == "tempi":
        return Kind(law(GOING), 0.2), Kind(law(GOING), 1.8)
    return (Kind(law(GOING)),)


def simulate(
    process: str,
    n_customers: int,
    silences: float,
    rng: np.random.Generator,
    *,
    running: bool = False,
    coming: float = 1.0,
) -> pd.DataFrame:
    """Return a log of so many customers: customer, time, event.

    Parameters
    ----------
    process : str
        One of `PROCESSES`.
    n_customers : int
        How many.
    silences : float
        Length of the log.
    rng : numpy.random.Generator
        Source of chance.
    running : bool
        Customers have come for `BEFORE_SILENCES` already when the log begins; what happened before is cut off.
    coming : float
        The first share of the log in which customers come for the first time, evenly. Where it is small, next to all
        journeys are over when the log ends.
    """
    if not running:
        return _named(_some(process, n_customers, 0.0, silences, rng, coming), process, rng)
    parts, n_found, first = [], 0, 0
    while n_found < n_customers:
        part = _some(process, 2 * n_customers, BEFORE_SILENCES, silences, rng, coming)
        parts.append(part.assign(customer=part["customer"] + first))
        n_found, first = n_found + part["customer"].nunique(), first + 2 * n_customers
    log = pd.concat(parts)
    return _named(log[log["customer"] <= np.sort(log["customer"].unique())[n_customers - 1]], process, rng)


def _some(
    process: str, n_customers: int, before: float, silences: float, rng: np.random.Generator, coming: float
) -> pd.DataFrame:
    """Return what customers who come so long before the log, or while it goes on, do in it."""
    kinds = kinds_of(process)
    n_each = rng.geometric(1 - COMING_AGAIN, n_customers)
    customer = np.repeat(np.arange(n_customers), n_each)
    begin = np.cumsum(n_each) - n_each
    number = np.arange(len(customer)) - begin[customer]
    path, stay = _journeys(kinds, rng.integers(len(kinds), size=n_customers)[customer], rng)
    if process == "copied":
        head = customer // HOUSEHOLD * HOUSEHOLD
        again = (rng.random(len(customer)) < COPYING) & (number < n_each[head])
        source = np.where(again, begin[head] + number, np.arange(len(customer)))
        path, stay = path[source], stay[source]
    first = rng.uniform(-before, coming * silences, n_customers) * SILENCE_DAYS
    began = _begins(path, stay, customer, number, first, rng)
    time = began[:, None] + np.concatenate([np.zeros((len(stay), 1)), np.cumsum(stay, axis=1)], axis=1)[:, :-1]
    there = (path >= 0) & (time >= 0) & (time <= silences * SILENCE_DAYS)
    who, at, what = np.broadcast_to(customer[:, None], path.shape)[there], time[there], path[there]
    stamps = START + pd.to_timedelta(np.rint(at * _DAY_US).astype(np.int64), unit="us")
    return pd.DataFrame({"customer": who, "time": stamps, "event": np.array([*STATES, "joined"], dtype=object)[what]})


def _named(log: pd.DataFrame, process: str, rng: np.random.Generator) -> pd.DataFrame:
    """Return the log in order of time, with ids that put a household into one bucket."""
    if process == "copied":
        ids = np.arange(int(log["customer"].max() + 1) + 2 * HOUSEHOLD * N_BUCKETS)
        bucket = bucket_of(mix(ids.astype(np.uint64)))
        order = np.argsort(bucket, kind="stable")
        place = np.arange(len(ids)) - np.searchsorted(bucket[order], bucket[order])
        whole = place // HOUSEHOLD < np.bincount(bucket, minlength=N_BUCKETS)[bucket[order]] // HOUSEHOLD
        households = rng.permutation(order[whole].reshape(-1, HOUSEHOLD))
        log = log.assign(customer=households.ravel()[log["customer"].to_numpy()])
    return log.sort_values("time", kind="stable").reset_index(drop=True)


def rules_of(silences: float, **more: object) -> jn.JourneyRules:
    """Return the rules for a log of that length."""
    end = START + pd.Timedelta(days=silences * SILENCE_DAYS)
    settings = {"silence": f"{SILENCE_DAYS:g}d", "log_start": START, "as_of": end, "touchpoints": "all"} | more
    return jn.JourneyRules("customer", "time", "event", converted="joined", **settings)  # type: ignore[arg-type]


def _journeys(kinds: tuple[Kind, ...], kind: Ints, rng: np.random.Generator) -> tuple[Ints, Floats]:
    """Return the states of each journey, -1 after its end, and the stays in them, shape (n_journeys, n_steps)."""
    n = len(kind)
    routes = np.stack([one.going for one in kinds]).cumsum(axis=3)
    tempo = np.array([one.tempo for one in kinds])
    state = _drawn(np.broadcast_to(np.minimum(ENTRY.cumsum(), 1.0), (n, 5)), rng)
    before, live = np.full(n, 5), np.arange(n)
    paths, stays = [], []
    while len(live):
        if len(paths) >= _MOST_STEPS:
            raise RuntimeError("a simulated journey does not end")
        column, stay = np.full(n, -1), np.zeros(n)
        column[live] = state
        target = np.full(len(live), 6)
        at = state < 5
        target[at] = _drawn(routes[kind[live[at]], before[live[at]], state[at]], rng)
        log_median = np.log(np.where(at, MEDIAN_DAYS[np.minimum(state, 4)], 1.0) * tempo[kind[live]])
        within = ndtr((np.log(SILENCE_DAYS) - log_median) / SIGMA)
        drawn = np.exp(log_median + SIGMA * ndtri(rng.random(len(live)) * within))
        stay[live] = np.where(target < 6, np.minimum(drawn, SILENCE_DAYS), 0.0)
        paths.append(column)
        stays.append(stay)
        going = target < 6
        before[live] = np.minimum(state, 4)
        live, state = live[going], target[going]
    return np.stack(paths, axis=1), np.stack(stays, axis=1)


def _begins(path: Ints, stay: Floats, customer: Ints, number: Ints, first: Floats, rng: np.random.Generator) -> Floats:
    """Return when each journey begins, in days: after the one before, a silence if it lapsed, and some time away."""
    joined = (path == 5).any(axis=1)
    took = stay.sum(axis=1) + np.where(joined, 0.0, SILENCE_DAYS) + rng.exponential(MEAN_DAYS_AWAY, len(path))
    passed = np.cumsum(took) - took
    return first[customer] + passed - passed[np.flatnonzero(number == 0)][customer]


def _drawn(cumulative: Floats, rng: np.random.Generator) -> Ints:
    found: Ints = (rng.random(len(cumulative))[:, None] >= cumulative).sum(axis=1)
    return found
