"""The stated truth behind the club's log, and what follows from it by algebra alone."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[Any]

TOUCHPOINTS = ("poster", "newsletter", "search", "friend_invitation")
STAGES = ("price_page", "open_evening", "trial_repair", "basket")
STATES = ("entry", *TOUCHPOINTS, *STAGES)  # the entry takes no time and leaves no row
OUTCOMES = ("joined", "declined", "lapsed")
NAMES = (*STATES, *OUTCOMES)
M = len(STATES)
JOINED, DECLINED, LAPSED = range(M, M + 3)

SILENCE_DAYS = 30.0
WARM_UP_DAYS = 150.0

# Share of decided people by district, and of the people who live there.
DISTRICTS = {
    "Old Mill": (0.50, 0.20),
    "Harbour": (0.38, 0.30),
    "Northfield": (0.30, 0.35),
    "Station": (0.24, 0.15),
}

# Median days of a move: by state it starts from, unless the pair is named. Times a kind's tempo.
MEDIAN_DAYS = {
    "poster": 4.0, "newsletter": 5.0, "search": 4.0, "friend_invitation": 3.0,
    "price_page": 4.0, "open_evening": 5.0, "trial_repair": 5.0, "basket": 2.0,
}
QUICK_MEDIAN_DAYS = {("poster", "search"): 0.005, ("search", "price_page"): 0.004, ("basket", "joined"): 0.1}
LOG_SPREAD = 1.3  # standard deviation of the logarithm of a move's time, before the cut at 30 days


@dataclass(frozen=True)
class Kind:
    """One kind of customer: where journeys go, how fast, and who comes back.

    Parameters
    ----------
    name : str
    tempo : float
        Factor on every median time.
    moves : dict
        Probability of each next state or outcome, by state; every row sums to 1.
    comes_back : dict
        Probability that another journey follows, by outcome.
    """

    name: str
    tempo: float
    moves: dict[str, dict[str, float]]
    comes_back: dict[str, float]


# Median days between an outcome and the next journey (a lapse is dated 30 days after the last event), and the
# standard deviation of the logarithm. The shortest possible time away is one day.
AWAY_DAYS = {"joined": (60.0, 0.5), "declined": (35.0, 0.6), "lapsed": (15.0, 0.8)}

DECIDED = Kind(
    name="decided",
    tempo=0.8,
    moves={
        "entry": {"poster": 0.25, "newsletter": 0.15, "search": 0.35, "friend_invitation": 0.25},
        "poster": {"newsletter": 0.05, "search": 0.39, "price_page": 0.22, "open_evening": 0.13,
                   "lapsed": 0.21},
        "newsletter": {"newsletter": 0.11, "search": 0.17, "price_page": 0.31, "open_evening": 0.17,
                       "declined": 0.03, "lapsed": 0.21},
        "search": {"poster": 0.05, "newsletter": 0.11, "price_page": 0.52, "open_evening": 0.11,
                   "trial_repair": 0.04, "lapsed": 0.17},
        "friend_invitation": {"search": 0.08, "price_page": 0.29, "open_evening": 0.29, "trial_repair": 0.19,
                              "declined": 0.02, "lapsed": 0.13},
        "price_page": {"newsletter": 0.14, "search": 0.11, "open_evening": 0.16, "trial_repair": 0.17,
                       "basket": 0.19, "declined": 0.06, "lapsed": 0.17},
        "open_evening": {"newsletter": 0.11, "price_page": 0.25, "trial_repair": 0.30, "basket": 0.12,
                         "declined": 0.05, "lapsed": 0.17},
        "trial_repair": {"friend_invitation": 0.07, "price_page": 0.20, "basket": 0.40, "joined": 0.13,
                         "declined": 0.06, "lapsed": 0.14},
        "basket": {"newsletter": 0.07, "price_page": 0.20, "joined": 0.54, "declined": 0.05, "lapsed": 0.14},
    },
    comes_back={"joined": 0.12, "declined": 0.30, "lapsed": 0.45},
)
CURIOUS = Kind(
    name="curious",
    tempo=1.2,
    moves={
        "entry": {"poster": 0.32, "newsletter": 0.23, "search": 0.35, "friend_invitation": 0.10},
        "poster": {"newsletter": 0.22, "search": 0.40, "price_page": 0.13, "open_evening": 0.06,
                   "lapsed": 0.19},
        "newsletter": {"poster": 0.09, "newsletter": 0.30, "search": 0.22, "price_page": 0.18,
                       "open_evening": 0.04, "declined": 0.02, "lapsed": 0.15},
        "search": {"poster": 0.13, "newsletter": 0.25, "price_page": 0.41, "open_evening": 0.05,
                   "lapsed": 0.16},
        "friend_invitation": {"newsletter": 0.15, "search": 0.15, "price_page": 0.27, "open_evening": 0.19,
                              "trial_repair": 0.10, "declined": 0.02, "lapsed": 0.12},
        "price_page": {"poster": 0.08, "newsletter": 0.24, "search": 0.20, "open_evening": 0.08,
                       "trial_repair": 0.12, "basket": 0.10, "declined": 0.04, "lapsed": 0.14},
        "open_evening": {"newsletter": 0.22, "search": 0.07, "price_page": 0.18, "trial_repair": 0.27,
                         "basket": 0.09, "declined": 0.03, "lapsed": 0.14},
        "trial_repair": {"newsletter": 0.15, "friend_invitation": 0.05, "price_page": 0.23, "basket": 0.30,
                         "joined": 0.07, "declined": 0.05, "lapsed": 0.15},
        "basket": {"newsletter": 0.13, "search": 0.07, "price_page": 0.24, "joined": 0.38, "declined": 0.04,
                   "lapsed": 0.14},
    },
    comes_back={"joined": 0.10, "declined": 0.15, "lapsed": 0.45},
)
KINDS = (DECIDED, CURIOUS)


def matrix(kind: Kind) -> Array:
    """Return move probabilities, shape (9, 12): entry and states by entry, states and outcomes."""
    table = np.array([[kind.moves[state].get(name, 0.0) for name in NAMES] for state in STATES])
    if not np.allclose(table.sum(axis=1), 1.0, atol=1e-12):
        raise ValueError(f"the moves of kind {kind.name!r} have rows that do not sum to 1")
    return table


def median_days(kind: Kind) -> Array:
    """Return the median days of each move before the cut, shape (9, 12); 1 where no time is drawn."""
    table = np.ones((M, M + 3))
    for i, state in enumerate(STATES[1:], start=1):
        for j, name in enumerate(NAMES[:LAPSED]):
            table[i, j] = kind.tempo * QUICK_MEDIAN_DAYS.get((state, name), MEDIAN_DAYS[state])
    return table


def mean_days(kind: Kind) -> Array:
    """Return the mean days of each move, shape (9, 12): truncated lognormals, 0 at entry, 30 for a lapse."""
    phi = np.vectorize(lambda z: 0.5 * math.erfc(-z / math.sqrt(2.0)))
    mu = np.log(median_days(kind))
    z = (math.log(SILENCE_DAYS) - mu) / LOG_SPREAD
    table = np.exp(mu + LOG_SPREAD**2 / 2) * phi(z - LOG_SPREAD) / phi(z)
    table[:, LAPSED] = SILENCE_DAYS
    table[0] = 0.0
    return np.asarray(table)


def visits(moves: Array) -> Array:
    """Return the expected visits to each state by starting state, shape (9, 9)."""
    return np.linalg.inv(np.eye(M) - moves[:, :M])


def ends(moves: Array, days: Array) -> dict[str, Any]:
    """Sum over one journey from the entry: outcome shares, and steps, days, touches of those that join.

    Parameters
    ----------
    moves, days : ndarray, shape (9, 12)
        Move probabilities, and the mean days of each move.

    Returns
    -------
    dict
        ``shares`` (3,), and ``steps``, ``days`` (numbers) and ``touched`` (4,), each still multiplied by the
        probability of joining, so that kinds can be added up.
    """
    n = visits(moves)
    h = np.append(n @ moves[:, JOINED], [1.0, 0.0, 0.0])
    weighted = moves * days
    return {
        "shares": n[0] @ moves[:, M:],
        "steps": (n @ h[:M])[0],
        "days": (n @ (weighted @ h))[0],
        "touched": np.array([n[0, c] * h[c] / n[c, c] for c in range(1, 1 + len(TOUCHPOINTS))]),
    }


def readable(sums: dict[str, Any]) -> dict[str, Any]:
    """Turn sums of `ends` into the numbers a reader knows, divided by the share that joins."""
    joined = sums["shares"][0]
    touched = dict(zip(TOUCHPOINTS, (sums["touched"] / joined).tolist(), strict=True))
    return {
        "share": dict(zip(OUTCOMES, sums["shares"].tolist(), strict=True)),
        "mean_steps_given_joined": float(sums["steps"] / joined),
        "mean_days_given_joined": float(sums["days"] / joined),
        "share_of_joiners_who_met": touched,
    }


def journeys_per_person(kind: Kind) -> float:
    """Return the expected number of journeys of one person who is followed for ever."""
    back = np.array([kind.comes_back[name] for name in OUTCOMES])
    return float(1.0 / (1.0 - ends(matrix(kind), mean_days(kind))["shares"] @ back))


def mixed(people: Sequence[float]) -> tuple[dict[str, Any], dict[str, Any], list[float]]:
    """Return the true numbers of all journeys, those of the pooled chain, and the share of journeys by kind.

    Parameters
    ----------
    people : sequence of float, shape (2,)
        Share of people by kind.
    """
    raw = np.array([share * journeys_per_person(kind) for share, kind in zip(people, KINDS, strict=True)])
    weight = raw / raw.sum()
    chains = [(matrix(kind), mean_days(kind)) for kind in KINDS]
    parts = [ends(p, d) for p, d in chains]
    true = {key: sum(w * part[key] for w, part in zip(weight, parts, strict=True)) for key in parts[0]}
    # A long log holds visits to a state in proportion to journeys times expected visits.
    flow = np.array([w * visits(p)[0] for w, (p, _) in zip(weight, chains, strict=True)])
    flow /= flow.sum(axis=0)
    pooled = sum(f[:, None] * p for f, (p, _) in zip(flow, chains, strict=True))
    time = sum(f[:, None] * p * d for f, (p, d) in zip(flow, chains, strict=True))
    days = np.divide(time, pooled, out=np.zeros_like(pooled), where=pooled > 0)
    chain = readable(ends(pooled, days)) | {"moves": named(pooled), "mean_days_of_moves": named(days)}
    return readable(true), chain, weight.tolist()


def named(table: Array) -> dict[str, dict[str, float]]:
    """Turn a (9, 12) array into rows and columns by name, zeros left out."""
    rows = zip(STATES, table.tolist(), strict=True)
    return {state: {n: x for n, x in zip(NAMES, row, strict=True) if x > 0} for state, row in rows}


def truth() -> dict[str, Any]:
    """Return everything that is stated, and everything that follows from it without a log."""
    lives = np.array([there for _, there in DISTRICTS.values()])
    decided = np.array([share for share, _ in DISTRICTS.values()])
    people = [float(lives @ decided), float(lives @ (1 - decided))]
    journeys, pooled, weight = mixed(people)
    kinds = {}
    for kind, of_people, of_journeys in zip(KINDS, people, weight, strict=True):
        kinds[kind.name] = {
            "share_of_people": of_people,
            "share_of_journeys": of_journeys,
            "journeys_per_person": journeys_per_person(kind),
            "journeys": readable(ends(matrix(kind), mean_days(kind))),
            "moves": kind.moves,
            "tempo": kind.tempo,
            "mean_days_of_moves": named(np.where(matrix(kind) > 0, mean_days(kind), 0.0)),
            "comes_back": kind.comes_back,
        }
    districts = {}
    for name, (share, there) in DISTRICTS.items():
        here = mixed([share, 1 - share])
        districts[name] = {"share_of_people": there, "decided_share_of_people": share, "journeys": here[0]}
    return {
        "silence_days": SILENCE_DAYS,
        "log_spread": LOG_SPREAD,
        "median_days": MEDIAN_DAYS,
        "quick_median_days": {f"{a} -> {b}": v for (a, b), v in QUICK_MEDIAN_DAYS.items()},
        "away_days": {k: {"median": a, "log_spread": b, "at_least": 1.0} for k, (a, b) in AWAY_DAYS.items()},
        "journeys": journeys,
        "pooled_chain": pooled,
        "kinds": kinds,
        "districts": districts,
    }
