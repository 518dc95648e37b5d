"""What a plain count of a log says, for the line between it and the expected share."""

from __future__ import annotations

from dataclasses import dataclass

from journeys.kernels.records import FIRST_OUTCOME, LAPSED, OPEN
from journeys.tally.tally import Tally


@dataclass(frozen=True)
class PlainCount:
    """What a plain count of the log says; in a summary, NaN in the place of what describes too few people.

    Attributes
    ----------
    n_people, n_journeys : int
        Customers, and journeys begun.
    n_sure : int
        Journeys whose start was seen.
    n_undecided : int
        Journeys still open.
    n_by_outcome : dict of str to int
        Journeys ended so far, by outcome.
    n_converted : int
        Of these, the conversions.
    """

    n_people: int
    n_journeys: int
    n_sure: int
    n_undecided: int
    n_by_outcome: dict[str, int]
    n_converted: int


def plain_count(tally: Tally) -> PlainCount:
    """Return the plain counts of a tally.

    Parameters
    ----------
    tally : Tally
        The counts.

    Returns
    -------
    PlainCount
        Journeys by what became of them so far.
    """
    n, outcome = tally.journeys["n"], tally.journeys["outcome"]
    ended = {name: int(n[outcome == code].sum()) for code, name in enumerate(tally.rules.outcomes, start=FIRST_OUTCOME)}
    if tally.rules.silence_us is not None:
        ended["lapsed"] = int(n[outcome == LAPSED].sum())
    return PlainCount(
        n_people=tally.n_people,
        n_journeys=tally.n_journeys,
        n_sure=int(n[tally.journeys["sure"] == 1].sum()),
        n_undecided=int(n[outcome == OPEN].sum()),
        n_by_outcome=ended,
        n_converted=sum(ended[name] for name in tally.rules.converted),
    )
