"""What the log is like: how much there is to go by, and what could lead astray. No tests, so nothing is corrected."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import replace

import numpy as np

from journeys.kernels.intervals import variance_from_buckets
from journeys.kernels.records import FIRST_OUTCOME, OPEN
from journeys.models.fit import JourneyFit
from journeys.models.model import END_NOT_SEEN, JourneyModel
from journeys.questions.check_rows import FINE, NOTE, CheckRow, not_run
from journeys.questions.linear import leaning
from journeys.questions.walks import timed, walk_to
from journeys.tally.tally import Tally

# From where on a reader should be told; common sense, no source.
FEW_CONVERSIONS = 20
MANY_TIES = 0.02
MANY_UNDECIDED = 1 / 3
MANY_UNSURE = 1 / 2
LARGE_EFFECT = 2.0
BUSY = 1_000
# In a shorter log nobody can lapse twice, so two decided journeys of one customer look alike where they are not: in
# simulated logs of one and a half silences this was noted in 22 of 100, of two silences and more in at most 3.
SHORTEST_FOR_PAIRS = 2.0
# Within so many standard errors of 0 a likeness of journeys is chance.
_CHANCE = 1.96

FEW, TIES, UNDECIDED, UNSURE, UNSEEN = "enough events", "ties", "undecided journeys", "unsure entries", "end not seen"
ROBOTS, ALIKE, EFFECT = "without the busy", "journeys of one customer", "design effect"


def log_rows(fit: JourneyFit, to: str | Collection[str] | None, tally: Tally) -> list[CheckRow]:
    """Return what there is to say of the log."""
    return [
        _events(tally), _ties(tally), _undecided(tally), _unsure(tally), _end_not_seen(fit), _busy(fit, to, tally),
        *_customers(tally),
    ]  # fmt: skip


def _events(tally: Tally) -> CheckRow:
    outcome, n = tally.journeys["outcome"], tally.journeys["n"]
    converted = np.isin(outcome, FIRST_OUTCOME + np.arange(len(tally.rules.converted)))
    won, decided = int(n[converted].sum()), int(n[outcome != OPEN].sum())
    least = min(won, decided - won)
    few = least < FEW_CONVERSIONS
    what = "conversions" if won <= decided - won else "journeys that ended without converting"
    return CheckRow(
        FEW, "", f"{won:,} of {decided:,} decided journeys converted", float(least), "journeys",
        verdict=f"{NOTE}only {least:,} {what}" if few else FINE,
        advice="intervals are wide, most checks cannot be run: wait, or count a more frequent outcome" if few else "",
    )  # fmt: skip


def _ties(tally: Tally) -> CheckRow:
    ties = tally.record.n("tied_times")
    share = ties / tally.n_rows if tally.n_rows else 0.0
    many = share > MANY_TIES
    compared = f"{ties:,} of {tally.n_rows:,} rows have the customer and time of the row before"
    return _share_row(
        TIES, compared, share, f"{100 * share:.1f} % of the rows are in an order that only the file knows", many,
        "name a column of sequence numbers (`sequence`)",
    )  # fmt: skip


def _undecided(tally: Tally) -> CheckRow:
    n = tally.journeys["n"]
    count = int(n[tally.journeys["outcome"] == OPEN].sum())
    share = count / tally.n_journeys
    return _share_row(
        UNDECIDED, f"{count:,} of {tally.n_journeys:,} journeys are open", share,
        f"{100 * share:.0f} % of the journeys are open, so much rests on the model", share > MANY_UNDECIDED,
        "wait for a longer log, or look at shares within a horizon",
    )  # fmt: skip


def _unsure(tally: Tally) -> CheckRow:
    n = tally.journeys["n"]
    count = int(n[tally.journeys["sure"] == 0].sum())
    share = count / tally.n_journeys
    return _share_row(
        UNSURE, f"{count:,} of {tally.n_journeys:,} journeys may have begun before the log", share,
        f"where journeys begin is known of only {100 * (1 - share):.0f} %", share > MANY_UNSURE,
        "let the log start earlier, or say `complete_history = true` where it holds each customer's whole past",
    )  # fmt: skip


def _share_row(name: str, compared: str, share: float, words: str, many: bool, advice: str) -> CheckRow:
    verdict = NOTE + words if many else FINE
    return CheckRow(name, "", compared, share, "share", verdict=verdict, advice=advice if many else "")


def _end_not_seen(fit: JourneyFit) -> CheckRow:
    names = [name for name, text in fit.row_flags.items() if text == END_NOT_SEEN]
    if not names:
        return CheckRow(UNSEEN, "", "every state was seen for a whole silence", 0.0, "states", verdict=FINE)
    leans = bool(leaning(fit)[END_NOT_SEEN][0])
    shown = ", ".join(names[:5]) + (f" and {len(names) - 5} more" if len(names) > 5 else "")
    return CheckRow(
        UNSEEN, "", f"stays in {shown} were not seen to their end", float(len(names)), "states",
        verdict=NOTE + ("answers lean on lapses nobody saw" if leans else "hardly any journey gets there"),
        advice="wait for a longer log, or gather rare states in `states`",
    )  # fmt: skip


def _busy(fit: JourneyFit, to: str | Collection[str] | None, tally: Tally) -> CheckRow:
    """Return what conversion would be without the moves that customers made after very many events."""
    is_busy = tally.moves["busy"] == 1
    n = int(tally.moves["n"][is_busy].sum())
    if not n:
        compared = f"no customer has moves after {BUSY:,} events"
        return CheckRow(ROBOTS, "", compared, 0.0, "points", verdict=FINE)
    kept = {name: values[~is_busy] for name, values in tally.moves.items()}
    model = JourneyModel(order=fit.nodes.order, open_moves=fit.open_moves)
    without = model.fit_whatever(replace(tally, moves=kept))
    if fit.influence is None or without.influence is None:
        return not_run(ROBOTS, "the fit has no buckets of customers")
    (value, pull), (other, other_pull) = _conversion(fit, to), _conversion(without, to)
    variance, df = variance_from_buckets(pull - other_pull)
    own, _ = variance_from_buckets(pull)
    size, std_error = 100 * (value - other), 100 * float(np.sqrt(variance))
    matters = abs(value - other) > float(np.sqrt(own))
    return CheckRow(
        ROBOTS, "", f"expected conversion {100 * value:.2f} %; {100 * other:.2f} % without {n:,} moves made after a "
        f"customer's first {BUSY:,} events", size, "points", std_error, float(df),
        verdict=f"{NOTE}a few very busy customers move the answer" if matters else FINE,
        advice="look at who they are; leave robots and staff out with `exclude`" if matters else "",
    )  # fmt: skip


def _conversion(fit: JourneyFit, to: str | Collection[str] | None) -> tuple[float, np.ndarray]:
    found = timed(fit, walk_to(fit, to))
    pulls = np.zeros((0, len(fit.probability))) if fit.influence is None else fit.influence.probability
    return float(found.probability[0]), found.probability_changes(pulls)[:, 0]


def _customers(tally: Tally) -> list[CheckRow]:
    """Return how alike the journeys of one customer are in converting, and what that does to the information."""
    at = tally.customers["people"] > 0
    j, jj, x, jx, xx = (tally.customers[name][at].astype(np.float64) for name in ("j", "jj", "x", "jx", "xx"))
    if not 0 < x.sum() < j.sum():
        why = "all decided journeys ended alike" if j.sum() else "no journey is decided"
        return [not_run(ALIKE, why), not_run(EFFECT, why)]
    p = x.sum() / j.sum()
    variance, _ = variance_from_buckets((x - p * j) / j.sum())
    effect = float(variance / (p * (1 - p) / j.sum()))
    large = effect > LARGE_EFFECT
    rows = [
        CheckRow(
            EFFECT, "", f"{j.sum():,.0f} decided journeys tell as much of conversion as {j.sum() / effect:,.0f} "
            "independent ones", effect, "times",
            verdict=f"{NOTE}few customers make many of the journeys" if large else FINE,
            advice="intervals allow for it; formulas for independent journeys would be far too sure" if large else "",
        )
    ]  # fmt: skip
    pairs = (jj - j).sum()
    if not pairs > 0:
        return [not_run(ALIKE, "no customer has two decided journeys"), *rows]
    silence_us = tally.rules.silence_us
    if silence_us is not None and tally.as_of_us - tally.log_start_us < SHORTEST_FOR_PAIRS * silence_us:
        return [not_run(ALIKE, "in a log of under two silences nobody can have lapsed twice"), *rows]
    # the covariance of two journeys of a customer over its own variance, and its derivative by a bucket's sums
    together = xx - x - 2 * p * (jx - x) + p**2 * (jj - j)
    size = float(together.sum() / (p * (1 - p) * pairs))
    by_p = float((2 * p * pairs - 2 * (jx - x).sum()) / (p * (1 - p) * pairs) - size * (1 - 2 * p) / (p * (1 - p)))
    pull = together / (p * (1 - p) * pairs) - size * (jj - j) / pairs + by_p * (x - p * j) / j.sum()
    spread, df = variance_from_buckets(pull)
    alike = size > _CHANCE * float(np.sqrt(spread))
    return [
        CheckRow(
            ALIKE, "", f"correlation of converting between {pairs / 2:,.0f} pairs of journeys of one customer", size,
            "correlation", float(np.sqrt(spread)), float(df),
            verdict=f"{NOTE}some customers convert again and again, others never" if alike else FINE,
            advice="intervals allow for it; where days or steps differ too, customers are of several kinds" if alike
            else "",
        ),
        *rows,
    ]  # fmt: skip
