"""The random logs: that every rule comes up in them, and that their forms hold the same values."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pandas as pd
from random_logs import random_log
from slow_rules import HOUR_US, read_log


def hours_of(duration_us: int) -> int:
    return duration_us // HOUR_US


def test_random_logs_bring_every_rule_to_bear() -> None:
    logs = [random_log(np.random.default_rng(seed)) for seed in range(300)]
    findings: Counter[str] = Counter()
    ends: Counter[tuple[str, bool]] = Counter()
    equal_gaps = negative = cut_at_horizons = 0
    touched: Counter[tuple[str, int]] = Counter()
    for log in logs:
        settings = {name: value for name, value in log.slow.items() if name != "horizons_us"}  # no edges here
        tally = read_log(log.rows, **settings, bucket_of=lambda _: 0, dwell_bin=hours_of, elapsed_bin=hours_of)
        cut_at_horizons += "horizons" in log.rules
        findings.update(tally.findings.keys())
        ends.update((key[2], key[4]) for key in tally.journeys)
        touched.update((key[2], key[5]) for key in tally.touches)
        negative += "value" in log.rules and any(sums[-1] < 0 for sums in tally.journeys.values())
        silence = log.slow["silence_us"]
        longest = {int(key[3] * HOUR_US) for key in tally.moves if key[2] not in ("lapsed", "open")}
        equal_gaps += silence in longest and not log.slow["whole_days"]
    assert 50 < cut_at_horizons < 200
    assert set(findings) == {
        "excluded",
        "missing_customer",
        "missing_time",
        "missing_event",
        "before_log_start",
        "after_as_of",
        "unmapped_event",
        "duplicate",
        "ended_before",
        "after_outcome",
        "before_opener",
        "repeated_outcome",
        "outcome_without_states",
        "first_visit_of_unsure_journey",
        "missing_value",
    }
    assert min(findings.values()) >= 10
    assert {(end, sure) for end in ("joined", "declined", "lapsed", "open") for sure in (True, False)} <= set(
        ends
    )
    assert equal_gaps > 20
    assert negative > 10
    ways = [(end, distinct) for end in ("joined", "lapsed", "open") for distinct in range(3)]
    assert min(touched[way] for way in ways) >= 3


def test_random_frames_hold_the_same_values_as_their_rows() -> None:
    for seed in range(60):
        log = random_log(np.random.default_rng(seed))
        times = pd.to_datetime(log.frame["time"], utc=True).astype("datetime64[us, UTC]")
        for place, (customer, time, event, sequence, ended, columns) in enumerate(log.rows):
            row = log.frame.iloc[place]
            assert (customer is None) == bool(pd.isna(row["customer"]))
            assert customer is None or row["customer"] == customer
            assert (time is None) == bool(pd.isna(times[place]))
            assert time is None or times[place] == pd.Timestamp(time, unit="us", tz="UTC")
            assert row["event"] == event or (event is None and (pd.isna(row["event"]) or row["event"] == ""))
            assert "sequence" not in log.frame or sequence is None or row["sequence"] == sequence
            assert "ended" not in log.frame or row["ended"] == ended
            assert "staff" not in log.frame or columns["staff"] in (row["staff"], None)
