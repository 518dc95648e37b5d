"""Night after night is one pass over the whole log, to the last bit, wherever the nights are cut."""

from __future__ import annotations

import json
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pytest
from ledgers import DAY_US, files_of, invented, make_job, newest_tally, one_pass, write_night
from random_logs import RandomLog, random_log

from journeys.checks import instant_text
from journeys.intake.read import open_log
from journeys.intake.rows import Rows
from journeys.intake.rules import JourneyRules
from journeys.kernels.compiled import is_built
from journeys.nightly.manifest import Generation
from journeys.nightly.night import run_night
from journeys.nightly.state import kept_bytes, kept_from, rows_bytes, rows_from
from journeys.tally import count_log
from journeys.tally.resumed import ResumedPass
from journeys.tally.spans import Span
from journeys.tally.spill import Spill
from journeys.tally.tally import Tally

GROUPED = {
    "by": ["district"], "cohort": "week", "split_at": ["2025-02-01"], "repeats": "merge", "touchpoints": "all",
    "value": "amount", "stages": ["visit", "price", "basket"], "duplicates": "drop",
}  # fmt: skip
FINDINGS = ["code", "column", "n"]


@dataclass
class Shelf:
    """What goes from night to night, as the bytes that a ledger would keep."""

    parts: dict[int, bytes] = field(default_factory=dict)
    held: bytes | None = None
    learned: str = "null"

    def night(self, part: pa.Table, rules: JourneyRules, span: Span, compiled: bool) -> Tally | None:
        """Count one night."""
        log = open_log(part, rules.columns, text=(rules.event,))
        held: Rows | None = None if self.held is None else rows_from(self.held)
        pass_ = ResumedPass(log, rules, span, json.loads(self.learned), compiled=compiled)
        with Spill() as spill:
            rows = pass_.deal(spill, held, late_before_us=None, until_us=span.as_of_us, now_us=2**62)
            tally = None
            if span.as_of_us >= span.log_start_us:
                tally = pass_.count(
                    spill,
                    lambda number: kept_from(self.parts[number]) if number in self.parts else None,
                    lambda number, kept: self.parts.__setitem__(number, kept_bytes(kept).to_pybytes()),
                )
        self.held = None if rows is None else rows_bytes(rows).to_pybytes()
        self.learned = json.dumps(pass_.learned())
        return tally


def settled_until(log: RandomLog, end: int, tick: int) -> int:
    """Return up to when everything is known once the first `end` rows have come in."""
    ahead = [time for _, time, *_ in log.rows[end:] if time is not None]
    as_of = log.slow["as_of_us"]
    return min(as_of, min(ahead) - tick) if ahead else as_of


def in_nights(log: RandomLog, seed: int) -> tuple[Tally, Tally | None, JourneyRules]:
    """Return the last tally of a random log cut into nights, and one from the middle with the rules to check it by."""
    rng = np.random.default_rng(seed)
    rules, table = JourneyRules(**log.rules), pa.Table.from_pandas(log.frame, preserve_index=False)
    whole_days, tick = log.slow["whole_days"], DAY_US if log.slow["whole_days"] else 1
    cuts = [0, *np.sort(rng.integers(0, len(table) + 1, 4)).tolist(), len(table)]
    shelf, tallies, ends = Shelf(), [], []
    for begin, end in zip(cuts, cuts[1:], strict=False):
        until = settled_until(log, end, tick)
        span = Span(log.slow["log_start_us"], until, whole_days)
        tallies.append(shelf.night(table.slice(begin, end - begin), rules, span, is_built() and bool(rng.integers(2))))
        ends.append((end, until))
    last, middle, (end, until) = tallies[-1], tallies[2], ends[2]
    assert last is not None
    # Rules take neither a cut after the log's end nor a log of one moment; a ledger takes both.
    if middle is None or rules.split_at or until == log.slow["log_start_us"]:
        return last, None, rules
    as_of = instant_text(until)[: len("2025-06-30")] if whole_days else instant_text(until)
    return last, middle, JourneyRules.from_dict(rules.to_dict() | {"as_of": as_of})


@pytest.mark.parametrize("first", range(0, 48, 8))
def test_any_cut_of_any_log(first: int):
    compared = 0
    for seed in range(first, first + 8):
        log = random_log(np.random.default_rng(seed))
        whole = count_log(log.frame, JourneyRules(**log.rules))
        last, middle, rules = in_nights(log, seed)
        assert last == whole, seed
        if middle is not None:
            part = count_log(log.frame.iloc[: middle.n_rows], rules)
            assert part == replace(middle, rules=rules), seed
            compared += 1
    assert compared


@pytest.mark.parametrize(("rules", "n_nights"), [({}, 60), (GROUPED, 33)], ids=["plain", "grouped"])
def test_many_nights(root: Path, published: list[tuple[Generation, Tally]], rules: dict[str, Any], n_nights: int):
    job = make_job(root, rules)
    # Few people, since a night's time goes with the parts that hold any.
    nights = invented(7, n_nights, 30, n_people=7)
    for day, rows in enumerate(nights):
        write_night(job, day, rows)
        if day % 7 == 3 or 20 <= day < 26:
            continue  # the scheduler slept
        done = run_night(job)
        assert done.n_too_late == 0
        if day % 9 == 0:
            before = files_of(job.ledger)
            again = run_night(job)
            assert (again.new_inputs, again.publication) == ((), None)
            assert files_of(job.ledger) == before
        if day in (30, 45):
            assert newest_tally(job) == one_pass(job, newest_tally(job))
    run_night(job)
    tally = newest_tally(job)
    whole = one_pass(job, tally)
    assert tally == whole
    assert tally.n_rows == sum(map(len, nights))
    assert tally.findings[FINDINGS].values.tolist() == whole.findings[FINDINGS].values.tolist()
    assert [generation.number for generation, _ in published] == sorted({one.number for one, _ in published})
    run_night(job, rebuild=True)
    assert newest_tally(job) == tally


def test_rows_too_late_are_left_out_and_counted(root: Path, published: list[tuple[Generation, Tally]]):
    job = make_job(root, {"limits": {"late": 1.0}})
    nights = invented(3, 4, 60)
    for day in (0, 2):
        write_night(job, day, nights[day])
        run_night(job)
    write_night(job, 1, nights[1])
    done = run_night(job)
    tally = newest_tally(job)
    assert done.n_too_late == len(nights[1]) > 0
    late = tally.findings.set_index("code").loc["too_late"]
    assert (late.n, late["column"]) == (len(nights[1]), "happened")
    (job.log / "day=001" / "rows.parquet").unlink()
    without = one_pass(job, tally)
    assert tally.moves["n"].sum() == without.moves["n"].sum()
    assert tally.n_rows == without.n_rows + done.n_too_late


def test_a_row_of_the_future_waits_and_makes_nothing_late(root: Path, published: list[tuple[Generation, Tally]]):
    job = make_job(root)
    nights = invented(5, 3, 40)
    now = int(nights[0].happened.max().value // 1000) + 3 * DAY_US
    nights[0].loc[5, "happened"] = nights[0].happened.max() + np.timedelta64(3650, "D")
    for day, rows in enumerate(nights):
        write_night(job, day, rows)
        done = run_night(job, now_us=now)
        assert done.n_too_late == 0
        assert done.n_waiting >= 1
    tally = newest_tally(job)
    assert tally == one_pass(job, tally)
    assert tally.record.n("later_than_now") == 1
