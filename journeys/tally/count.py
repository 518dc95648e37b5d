"""The one streamed pass over a log: source in, tally out."""

from __future__ import annotations

import os
from contextlib import nullcontext
from dataclasses import replace
from functools import partial
from typing import Any

import numpy as np

from journeys import checks
from journeys.errors import LogError
from journeys.intake.look import Look, first_look
from journeys.intake.people import People
from journeys.intake.read import open_log
from journeys.intake.rules import JourneyRules
from journeys.kernels.bins import DAY_US
from journeys.kernels.compiled import is_built
from journeys.kernels.histories import MOST_SLOTS
from journeys.tally.counter import OutOfOrderError
from journeys.tally.keys import MOST_BINS
from journeys.tally.passes import Pass
from journeys.tally.spans import Span
from journeys.tally.tally import Tally

MOST_WORKERS = 8


def count_log(
    source: Any,
    rules: JourneyRules,
    *,
    order: int = 1,
    identity: Any = None,
    n_workers: int | None = None,
    compiled: bool | None = None,
    progress: bool = False,
) -> Tally:
    """Return the tally of an event log, in one streamed pass.

    Parameters
    ----------
    source : path, list of paths, DataFrame, Arrow table or reader, iterator of record batches, DatabaseLog
        The log: Parquet, CSV or Arrow IPC files, folders of them, pandas frames, anything with
        ``__arrow_c_stream__``, a database. Only the columns that the rules name are read.
    rules : JourneyRules
        What a journey is.
    order : int
        From 1 to 3: moves are told apart by so many of the last states, which fits of that order need.
    identity : path, DataFrame, Arrow table, optional
        Table of people first seen under another id: columns `old` (the id that rows bear), `id` (the person's,
        or another old one) and `since` (when that became known, or empty). All rows of an old id count as the
        person's, and are counted in the findings.
    n_workers : int, optional
        Threads that count; default one per processor, at most 8. The tally does not depend on it.
    compiled : bool, optional
        Count in a compiled loop, with the same tally; default: where it could be built.
    progress : bool
        Show a progress bar on stderr.

    Returns
    -------
    Tally
        Counts and sums; the log itself is not kept.

    Raises
    ------
    LogError
        If columns are missing, times cannot be read, nothing is left to count, a few rows lie far outside the
        rest (a wrong clock), or the identity table contradicts itself.
    RulesError
        If the environment variable JOURNEYS_ID_KEY is set to something short enough to guess.
    ValueError
        If `n_workers` is not a whole number from 1, or `order` not one from 1 to 3.
    ImportError
        If `compiled` is True and the compiled loop is not built.

    Notes
    -----
    Memory grows with the customers, not with the rows. Rows of a customer may come in any order: where they
    are out of time order the log is spilled by customer to temporary files, and the answer is the same.

    Where JOURNEYS_ID_KEY is set, each distinct id goes through a hash with that secret (BLAKE2b); it takes about a
    microsecond for each in every block of half a million rows; tallies under different secrets cannot be added.

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> log = pd.DataFrame({
    ...     "member": [1, 1, 2], "event": ["visit", "joined", "visit"],
    ...     "happened": pd.to_datetime(["2025-01-01", "2025-01-02", "2025-03-01"], utc=True),
    ... })
    >>> rules = JourneyRules(customer="member", time="happened", event="event", converted=["joined"],
    ...                      silence="30d", complete_history=True)
    >>> count_log(log, rules).n_journeys
    2
    """
    workers = min(os.cpu_count() or 1, MOST_WORKERS) if n_workers is None else checks.whole(n_workers, "n_workers", 1)
    order = checked_order(order)
    people = People.here(identity)
    log = open_log(source, rules.columns, text=(rules.event,), ids=rules.id_columns)
    with log.spooled() if log.one_shot else nullcontext(log) as kept:
        look = first_look(kept, rules)
        pass_ = partial(
            Pass, kept, rules, look, span_of(look, rules),
            order=order, n_workers=workers, compiled=_compiles(compiled), progress=progress, people=people,
        )  # fmt: skip
        try:
            tally = pass_().in_order()
        except OutOfOrderError:
            tally = pass_().sorted_by_customer()
    return replace(tally, id_key=people.fingerprint)


def checked_order(order: int) -> int:
    """Return the order, if it is one that can be counted."""
    order = checks.whole(order, "order", 1)
    if order > MOST_SLOTS:
        msg = f"order={order}; wanted at most {MOST_SLOTS}: no log has journeys enough to tell longer memories apart"
        raise ValueError(msg)
    return order


def _compiles(wanted: bool | None) -> bool:
    """Tell whether to count in the compiled loop."""
    if wanted and not is_built():
        msg = "compiled=True: the compiled loop is not built; install the package again with a C compiler at hand"
        raise ImportError(msg)
    return is_built() if wanted is None else wanted


def span_of(look: Look, rules: JourneyRules) -> Span:
    """Return from when to when a log is read.

    Parameters
    ----------
    look : Look
    rules : JourneyRules

    Returns
    -------
    Span

    Raises
    ------
    LogError
        If the dates of the rules leave nothing, or a log of dates is too long.
    """
    log_start = look.first_us if rules.log_start_us is None else rules.log_start_us
    as_of = look.last_us if rules.as_of_us is None else rules.as_of_us
    if log_start > as_of:
        msg = (
            f"log_start ({np.datetime64(log_start, 'us')}) is after as_of ({np.datetime64(as_of, 'us')}); "
            "set log_start and as_of to the span of the log"
        )
        raise LogError(msg)
    if look.whole_days and (as_of - log_start) // DAY_US >= MOST_BINS:
        msg = f"the log spans more than {MOST_BINS:,} days; set log_start and as_of to the span of the log"
        raise LogError(msg)
    return Span(log_start, as_of, look.whole_days)
