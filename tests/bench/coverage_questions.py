"""Every public question asked of one simulated log, as a reader gets its answers: estimate, bounds, flag.

A log is of two kinds of customers who come back and is cut off while journeys are under way (`tests/simulated.py`).
What a conversion is worth goes with its customer. Comparisons have logs of their own, with a change half-way, or with
two groups of which one joins 1.5 times as readily.
"""

from __future__ import annotations

import warnings
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
import simulated

import journeys as jn
from journeys.errors import JourneysWarning

FACTOR = 1.5
WITHIN_DAYS = 10
DAYS = (1.0, 3.0, 10.0, 30.0)
STEPS = (2, 3, 5, 8)
QUANTILES = (0.1, 0.25, 0.5, 0.75)
TOUCHED_BY = ("even", "first", "last")
# What is told without an interval, since nothing is estimated: counts, and what is so by definition.
COUNTS = ("total_so_far", "largest_customer_share")


@dataclass(frozen=True)
class Asked:
    """Answers to one log, by (question, measure, which): arrays of shape (n,)."""

    names: tuple[tuple[str, str, str], ...]
    value: np.ndarray
    low: np.ndarray
    high: np.ndarray
    flagged: np.ndarray
    known: np.ndarray


def rules(silences: float, **more: object) -> jn.JourneyRules:
    """Return the rules by which a simulated log is read."""
    return jn.JourneyRules(
        "customer", "time", "event", converted=[simulated.CONVERTED], silence=f"{simulated.SILENCE_DAYS:g}d",
        complete_history=True, log_start=simulated.LOG_START, as_of=simulated.log_end(silences),
        **more,  # type: ignore[arg-type]
    )  # fmt: skip


def with_values(log: pd.DataFrame, rng: np.random.Generator) -> pd.DataFrame:
    """Return the log with what each conversion is worth: more with some customers than with others."""
    of_customer = rng.normal(0.0, 0.4, int(log["customer"].max()) + 1)[log["customer"].to_numpy()]
    worth = np.round(20 * np.exp(of_customer + rng.normal(0.0, 0.3, len(log))), 2)
    return log.assign(value=np.where(log["event"] == simulated.CONVERTED, worth, 0.0))


def ask(customers: int, silences: float, rng: np.random.Generator, *, bootstrap: bool) -> Asked:
    """Simulate, and return all answers; those that rest on resamples where asked for."""
    log = with_values(simulated.simulate(customers, silences, rng, two_classes=True), rng)
    tally = jn.tally(
        log,
        rules(
            silences, horizons=[f"{WITHIN_DAYS}d", "40d"], touchpoints="all", value="value",
            stages=["price page", "open evening", "basket"],
        ),
    )  # fmt: skip
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", JourneysWarning)
        fit = jn.JourneyModel().fit(tally)
        parts = [*_of_chain(fit), *_of_curves(fit), *_of_log(fit, tally), *_of_touchpoints(fit)]
        parts += [*_compared(customers, silences, rng), *(_resampled(fit) if bootstrap else ())]
    whole = pd.concat(parts, ignore_index=True)
    names = tuple(whole[["question", "measure", "which"]].itertuples(index=False, name=None))
    numbers = (whole[name].to_numpy(np.float64) for name in ("estimate", "low", "high"))
    known = (whole["std_error"] == 0) & (whole["low"] == whole["high"])
    return Asked(names, *numbers, (whole["flag"] != "").to_numpy(), known.to_numpy())


def _rows(question: str, frame: pd.DataFrame, which: Sequence[str], measure: str | None = "measure") -> pd.DataFrame:
    """Return an answer's rows under common names."""
    told = frame[measure] if measure else "probability"
    named = frame[list(which)].astype(str).agg(", ".join, axis=1) if which else ""
    return frame[["estimate", "std_error", "low", "high", "flag"]].assign(question=question, measure=told, which=named)


def _of_chain(fit: jn.JourneyFit) -> Iterator[pd.DataFrame]:
    """Ask what follows from the moves, linearised."""
    yield _rows("moves", fit.moves().to_frame(), ["state", "next_state"], None)
    yield _rows("outcomes", jn.outcomes(fit).to_frame(), ["start_state", "outcome"], None)
    for clock in ("steps", "time"):
        frame = jn.first_passage(fit, clock=clock, method="linearised").to_frame()
        yield _rows(f"first_passage, {clock}", frame, ["start_state"])
        frame = jn.return_time(fit, clock=clock, method="linearised").to_frame()
        yield _rows(f"return_time, {clock}", frame, ["state"])
    frame = jn.return_time(fit, restart=True, method="linearised").to_frame()
    yield _rows("return_time, restart", frame[frame["measure"] != "probability"], ["state"])
    yield _rows("sensitivity", jn.sensitivity(fit).to_frame(), ["state", "next_state"])
    what_if = fit.with_move("price page", "basket", 0.05)
    yield _rows("compare, a what-if", jn.compare(fit, what_if).to_frame(), [])


def _of_curves(fit: jn.JourneyFit) -> Iterator[pd.DataFrame]:
    """Ask for the curves of a passage, and when a share of those who convert has."""
    for clock, at in (("time", DAYS), ("steps", STEPS)):
        curve = jn.passage_curve(fit, clock=clock)
        given = curve.given_reached()
        for told, one in (("share", curve), ("share of those who convert", given)):
            frame = one.to_frame(at)
            frame = frame.assign(measure=told, at=[f"{point:g}" for point in at])
            yield _rows(f"passage_curve, {clock}", frame, ["at"])
        frame = given.quantile(QUANTILES).assign(measure="quantile, given")
        yield _rows(f"passage_curve, {clock}", frame, ["share"])


def _of_log(fit: jn.JourneyFit, tally: jn.Tally) -> Iterator[pd.DataFrame]:
    """Ask what is read off whole journeys, beside the model."""
    frame = jn.time_to_convert(fit).to_frame()
    yield _rows("time_to_convert", frame.assign(measure=frame["measure"] + ", by " + frame["basis"]), ["horizon"])
    frame = jn.comeback(tally, after=["lapsed", simulated.CONVERTED], horizons=["40d", "50d"]).to_frame()
    frame["measure"] = frame["measure"].where(frame["horizon"] != "so far", "returned so far")
    yield _rows("comeback", frame, ["after", "horizon"])
    for told, within in (("stages", None), (f"stages within {WITHIN_DAYS} days", f"{WITHIN_DAYS}d")):
        frame = jn.stages(fit, within=within).to_frame()
        if within:  # the others have no bound in time, and would be asked twice
            frame = frame[frame["measure"].isin(("reached", "of_stage_before"))]
        yield _rows(told, frame.assign(measure=frame["measure"] + ", by " + frame["basis"]), ["stage", "outcome"])
    frame = jn.worth(fit).to_frame()
    yield _rows("worth", frame[~frame["measure"].isin(COUNTS)], [])


def _of_touchpoints(fit: jn.JourneyFit) -> Iterator[pd.DataFrame]:
    """Ask what touchpoints are worth, by every rule and basis."""
    effect = jn.removal(fit).to_frame()
    yield _rows("removal", effect.assign(measure="stop"), ["touchpoint"])
    share, error = effect["share_in_log"], 1.96 * effect["std_error_in_log"]
    in_log = effect.assign(measure="share_in_log ± 1.96 errors", estimate=share, low=share - error, high=share + error)
    # that log and model differ is told of the other number
    in_log["flag"] = in_log["flag"].where(in_log["flag"] != "log and model differ", "")
    yield _rows("removal", in_log, ["touchpoint"])
    frame = jn.removal(fit, how="pass").to_frame()
    yield _rows("removal", frame.assign(measure="pass, " + frame["measure"]), ["touchpoint"])
    yield _rows("removal", jn.removal(fit, how="divert").to_frame().assign(measure="divert"), ["touchpoint"])
    for told, frame in (
        ("credit", jn.credit(fit, rule=TOUCHED_BY).to_frame()),
        ("credit", jn.credit(fit, basis="model").to_frame()),
        ("credit of value", jn.credit(fit, weight="value").to_frame()),
    ):
        yield _rows(told, frame.assign(measure=frame["rule"] + ", by " + frame["basis"]), ["touchpoint"])


def _resampled(fit: jn.JourneyFit) -> Iterator[pd.DataFrame]:
    """Ask again for what has an interval from resamples, quantiles apart, which have the same either way."""
    for clock in ("steps", "time"):
        for told, frame, which in (
            ("first_passage", jn.first_passage(fit, clock=clock).to_frame(), "start_state"),
            ("return_time", jn.return_time(fit, clock=clock).to_frame(), "state"),
        ):
            kept = frame[~frame["measure"].isin(("median", "q90"))]
            yield _rows(f"{told}, {clock}, resampled", kept, [which])
    frame = jn.removal(fit, method="bootstrap", n_redraws=399).to_frame()
    yield _rows("removal, resampled", frame.assign(measure="stop"), ["touchpoint"])


def _compared(customers: int, silences: float, rng: np.random.Generator) -> Iterator[pd.DataFrame]:
    """Compare two groups, the visits before and after a change, and the journeys before and after one."""
    within = f"{WITHIN_DAYS}d"
    half = silences * simulated.SILENCE_DAYS / 2
    cut = simulated.LOG_START + pd.Timedelta(days=half)
    first, second = customers // 2, customers - customers // 2
    a = simulated.simulate(first, silences, rng, two_classes=True)
    more = simulated.Change(-1.0, FACTOR, in_flight=False)
    b = simulated.simulate(second, silences, rng, two_classes=True, change=more)
    both = pd.concat([a.assign(team="a"), b.assign(team="b", customer=b["customer"] + first)], ignore_index=True)
    fit = jn.JourneyModel().fit(jn.tally(both, rules(silences, by="team", horizons=[within])))
    frame = jn.compare(fit, by="team", within=within, moves=True).to_frame()
    frame = frame[frame["team"] == "b"]
    of_moves = frame["measure"] == "move"
    yield _rows("compare, groups", frame[~of_moves], [])
    yield _rows("compare, groups", frame[of_moves], ["state", "next_state"])

    change = simulated.Change(half, FACTOR, in_flight=True)
    log = simulated.simulate(customers, silences, rng, two_classes=True, change=change)
    parts = jn.tally(log, rules(silences, split_at=[cut])).split("period").values()
    yield _rows("compare, in flight", jn.compare(*map(jn.JourneyModel().fit, parts)).to_frame(), [])

    change = simulated.Change(half, FACTOR, in_flight=False)
    log = simulated.simulate(customers, silences, rng, two_classes=True, change=change)
    tally = jn.tally(log, rules(silences, cohort="day", horizons=[within]))
    before, last = cut - pd.Timedelta(days=1), simulated.log_end(silences) - pd.Timedelta(days=WITHIN_DAYS + 1)
    spans = ((None, before.date().isoformat()), (cut.date().isoformat(), last.date().isoformat()))
    frame = jn.compare(*(tally.where(cohort=span) for span in spans), within=within).to_frame()
    yield _rows("compare, cohorts", frame, [])
