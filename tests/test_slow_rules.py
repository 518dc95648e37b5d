"""The slow reading of the rules against logs worked out by hand.

Times in these logs are whole hours, the silence is 10 hours, the log runs from hour 0 to hour 100, and a bin
is an hour. Sums are written in hours.
"""

from __future__ import annotations

from collections import Counter
from typing import Any

import pytest
from slow_rules import DAY_US, HOUR_US, SlowTally, read_log

Event = tuple[Any, ...]


def hour_bin(duration_us: int) -> int:
    return duration_us // HOUR_US


def read(*events: Event, customer: str = "c", **rules: Any) -> SlowTally:
    """Read one customer's (hour, event[, sequence]) rows; keywords change the rules."""
    hours = [(*event, None)[:3] for event in events]
    rows = [(customer, hour * HOUR_US, name, sequence, None, {}) for hour, name, sequence in hours]
    return read_rows(rows, **rules)


def read_rows(rows: list[Event], **rules: Any) -> SlowTally:
    given = {
        "converted": ["joined"],
        "churned": ["left"],
        "silence_us": 10 * HOUR_US,
        "log_start_us": 0,
        "as_of_us": 100 * HOUR_US,
        "bucket_of": lambda _: 0,
        "dwell_bin": hour_bin,
        "elapsed_bin": hour_bin,
    }
    return read_log(rows, **(given | rules))


def moves(tally: SlowTally) -> dict[tuple[str, str, int], int]:
    """Return n by (state, next, bin), once the dwell sums and the single bucket have been looked at."""
    result: Counter[tuple[str, str, int]] = Counter()
    for (bucket, state, to, hours, _), (n, dwell_us) in tally.moves.items():
        assert bucket == 0
        assert dwell_us == n * hours * HOUR_US
        result[state, to, hours] += n
    return dict(result)


def journeys(tally: SlowTally) -> dict[tuple[str, str, bool], tuple[int, int, int, int]]:
    """Return (n, steps, squared steps, elapsed hours) by (entry state, outcome, sure)."""
    result: dict[tuple[str, str, bool], tuple[int, int, int, int]] = {}
    for (_, state, outcome, _, sure), (n, steps, squared, elapsed_us) in tally.journeys.items():
        before = result.get((state, outcome, sure), (0, 0, 0, 0))
        new = (n, steps, squared, elapsed_us // HOUR_US)
        result[state, outcome, sure] = tuple(a + b for a, b in zip(before, new, strict=True))
    return result


def test_a_gap_equal_to_the_silence_is_not_a_lapse() -> None:
    tally = read((20, "a"), (30, "b"), (40, "joined"))
    assert moves(tally) == {("a", "b", 10): 1, ("b", "joined", 10): 1}
    assert journeys(tally) == {("a", "joined", True): (1, 3, 9, 20)}
    assert tally.entries == {(0, "a", True): 1}
    assert tally.customers == {0: (1, 1, 1, 1, 1, 1, 3)}
    assert tally.findings == {}


def test_a_longer_gap_is_a_lapse_dated_at_the_last_event_plus_the_silence() -> None:
    tally = read((20, "a"), (22, "b"), (33, "b"), (34, "joined"))
    assert moves(tally) == {("a", "b", 2): 1, ("b", "lapsed", 10): 1, ("b", "joined", 1): 1}
    # The first journey takes 2 + 10 hours and three steps: a, b, the lapse.
    assert journeys(tally) == {("a", "lapsed", True): (1, 3, 9, 12), ("b", "joined", True): (1, 2, 4, 1)}
    assert tally.customers == {0: (1, 2, 4, 2, 1, 1, 4)}


def test_one_microsecond_beyond_the_silence_is_a_lapse() -> None:
    rows = [("c", 20 * HOUR_US, "a", None, None, {}), ("c", 30 * HOUR_US + 1, "joined", None, None, {})]
    assert journeys(read_rows(rows)) == {
        ("a", "lapsed", True): (1, 2, 4, 10),
        ("joined", "joined", True): (1, 1, 1, 0),
    }


@pytest.mark.parametrize(
    ("hour", "outcome", "dwell", "steps", "decided"),
    [(90, "lapsed", 10, 3, 1), (91, "open", 9, 2, 0), (100, "open", 0, 2, 0)],
)
def test_what_is_running_at_the_end_has_lapsed_or_is_open(
    hour: int, outcome: str, dwell: int, steps: int, decided: int
) -> None:
    tally = read((hour - 5, "a"), (hour, "b"))
    assert moves(tally) == {("a", "b", 5): 1, ("b", outcome, dwell): 1}
    assert journeys(tally) == {("a", outcome, True): (1, steps, steps**2, 5 + dwell)}
    assert tally.customers == {0: (1, decided, decided, 0, 0, 0, 2)}


def test_without_a_silence_nothing_lapses() -> None:
    tally = read((1, "a"), (60, "b"), silence_us=None)
    assert moves(tally) == {("a", "b", 59): 1, ("b", "open", 40): 1}
    assert journeys(tally) == {("a", "open", False): (1, 2, 4, 99)}


def test_without_a_silence_only_later_journeys_or_a_complete_history_are_sure() -> None:
    events = ((50, "a"), (51, "joined"), (90, "b"))
    tally = read(*events, silence_us=None)
    assert tally.entries == {(0, "a", False): 1, (0, "b", True): 1}
    tally = read(*events, silence_us=None, complete_history=True)
    assert tally.entries == {(0, "a", True): 1, (0, "b", True): 1}


def test_repeats_of_an_outcome_are_merged_along_a_chain() -> None:
    # One hour between each and the row just before: one conversion. Two hours: another one.
    tally = read((20, "a"), (21, "joined"), (22, "joined"), (23, "joined"), (25, "joined"))
    assert tally.findings == {"repeated_outcome": 2, "outcome_without_states": 1}
    assert journeys(tally) == {
        ("a", "joined", True): (1, 2, 4, 1),
        ("joined", "joined", True): (1, 1, 1, 0),
    }
    assert tally.customers == {0: (1, 2, 4, 4, 2, 4, 5)}


def test_another_outcome_or_a_state_between_is_no_repeat() -> None:
    tally = read((20, "a"), (21, "joined"), (21, "left"), (22, "joined"), (23, "b"), (23, "joined"))
    assert tally.findings == {"outcome_without_states": 2}
    assert journeys(tally) == {
        ("a", "joined", True): (1, 2, 4, 1),
        ("left", "left", True): (1, 1, 1, 0),
        ("joined", "joined", True): (1, 1, 1, 0),
        ("b", "joined", True): (1, 2, 4, 0),
    }
    assert tally.customers == {0: (1, 4, 16, 12, 3, 9, 6)}


def test_after_an_outcome_the_next_event_opens_a_sure_journey() -> None:
    tally = read((1, "a"), (2, "joined"), (3, "b"), (5, "left"))
    assert tally.entries == {(0, "a", False): 1, (0, "b", True): 1}
    assert journeys(tally) == {("a", "joined", False): (1, 2, 4, 1), ("b", "left", True): (1, 2, 4, 2)}
    assert moves(tally) == {("a", "joined", 1): 1, ("b", "left", 2): 1}
    assert tally.customers == {0: (1, 2, 4, 2, 1, 1, 4)}


def test_stop_leaves_out_what_follows_the_first_outcome() -> None:
    tally = read((20, "a"), (21, "left"), (22, "left"), (30, "b"), (31, "joined"), after_outcome="stop")
    assert tally.findings == {"after_outcome": 3}
    assert journeys(tally) == {("a", "left", True): (1, 2, 4, 1)}
    assert tally.customers == {0: (1, 1, 1, 0, 0, 0, 2)}


def test_stop_does_not_stop_at_a_lapse() -> None:
    tally = read((20, "a"), (40, "b"), (41, "joined"), after_outcome="stop")
    assert tally.findings == {}
    assert journeys(tally) == {("a", "lapsed", True): (1, 2, 4, 10), ("b", "joined", True): (1, 2, 4, 1)}


def test_who_had_ended_before_the_log_is_left_out_whole() -> None:
    rows = [
        ("x", 20 * HOUR_US, "a", None, True, {}),
        ("x", 21 * HOUR_US, "joined", None, False, {}),
        ("y", 20 * HOUR_US, "a", None, False, {}),
        ("y", 21 * HOUR_US, "joined", None, True, {}),
    ]
    tally = read_rows(rows, after_outcome="stop")
    assert tally.findings == {"ended_before": 2}
    assert tally.customers == {0: (1, 1, 1, 1, 1, 1, 2)}


def test_merged_repeats_are_one_visit_whose_dwell_goes_on() -> None:
    tally = read((20, "a"), (23, "a"), (30, "a"), (33, "b"), (34, "a"), (35, "joined"), repeats="merge")
    assert moves(tally) == {("a", "b", 13): 1, ("b", "a", 1): 1, ("a", "joined", 1): 1}
    # Three visits and the conversion.
    assert journeys(tally) == {("a", "joined", True): (1, 4, 16, 15)}
    kept = read((20, "a"), (23, "a"), (30, "a"), (33, "b"), (34, "a"), (35, "joined"))
    assert moves(kept) == {
        ("a", "a", 3): 1,
        ("a", "a", 7): 1,
        ("a", "b", 3): 1,
        ("b", "a", 1): 1,
        ("a", "joined", 1): 1,
    }
    assert journeys(kept) == {("a", "joined", True): (1, 6, 36, 15)}


def test_a_merged_visit_lapses_one_silence_after_its_last_event() -> None:
    # Hours 20, 28 and 38 are one visit; the gap of 12 hours after it is judged from its last event.
    tally = read((20, "a"), (28, "a"), (38, "a"), (50, "a"), (95, "a"), (97, "a"), repeats="merge")
    assert moves(tally) == {("a", "lapsed", 28): 1, ("a", "lapsed", 10): 1, ("a", "open", 5): 1}
    assert journeys(tally) == {("a", "lapsed", True): (2, 4, 8, 38), ("a", "open", True): (1, 1, 1, 5)}


def test_the_first_visit_of_an_unsure_journey_stays_out_when_repeats_are_merged() -> None:
    events = ((9, "a"), (12, "a"), (14, "b"), (15, "a"), (16, "joined"), (17, "b"))
    tally = read(*events, repeats="merge")
    assert tally.findings == {"first_visit_of_unsure_journey": 1}
    assert moves(tally) == {("b", "a", 1): 1, ("a", "joined", 1): 1, ("b", "lapsed", 10): 1}
    assert tally.entries == {(0, "a", False): 1, (0, "b", True): 1}
    assert journeys(tally) == {("a", "joined", False): (1, 4, 16, 7), ("b", "lapsed", True): (1, 2, 4, 10)}
    only_visit = read((9, "a"), (12, "a"), repeats="merge", as_of_us=13 * HOUR_US)
    assert only_visit.findings == {"first_visit_of_unsure_journey": 1}
    assert only_visit.moves == {}
    assert journeys(only_visit) == {("a", "open", False): (1, 1, 1, 4)}
    kept = read(*events)
    assert kept.findings == {}
    assert moves(kept)["a", "a", 3] == 1


@pytest.mark.parametrize(("hour", "sure"), [(9, False), (10, True)])
def test_a_first_journey_is_sure_from_one_silence_after_the_start(hour: int, sure: bool) -> None:
    assert read((hour, "a")).entries == {(0, "a", sure): 1}
    assert read((hour, "joined")).entries == {(0, "joined", sure): 1}
    assert read((hour, "a"), complete_history=True).entries == {(0, "a", True): 1}


def test_a_journey_after_a_lapse_seen_in_the_log_is_sure() -> None:
    tally = read((0, "a"), (11, "b"), log_start_us=-5 * HOUR_US, silence_us=9 * HOUR_US)
    assert tally.entries == {(0, "a", False): 1, (0, "b", True): 1}


def test_an_outcome_without_states_is_a_journey_that_ends_at_once() -> None:
    tally = read((20, "joined"))
    assert tally.findings == {"outcome_without_states": 1}
    assert tally.moves == {}
    assert tally.entries == {(0, "joined", True): 1}
    assert journeys(tally) == {("joined", "joined", True): (1, 1, 1, 0)}
    assert tally.customers == {0: (1, 1, 1, 1, 1, 1, 1)}


def test_duplicates_are_counted_and_removed_only_on_demand() -> None:
    # The last two rows differ in their sequence and are no duplicates.
    events = ((20, "a", 1), (20, "b", 1), (20, "a", 1), (21, "b", 1), (21, "b", 2), (22, "joined", 1))
    kept = read(*events)
    assert kept.findings == {"duplicate": 1}
    assert journeys(kept) == {("a", "joined", True): (1, 6, 36, 2)}
    dropped = read(*events, duplicates="drop")
    assert dropped.findings == {"duplicate": 1}
    assert journeys(dropped) == {("a", "joined", True): (1, 5, 25, 2)}
    assert moves(dropped) == {("a", "b", 0): 1, ("b", "b", 1): 1, ("b", "b", 0): 1, ("b", "joined", 1): 1}


def test_order_is_time_then_sequence_then_input() -> None:
    events = ((21, "joined", 3), (21, "b", 2), (20, "a", 9), (21, "c", 2))
    assert moves(read(*events)) == {("a", "b", 1): 1, ("b", "c", 0): 1, ("c", "joined", 0): 1}
    assert moves(read((20, "b"), (20, "a"), (20, "joined"))) == {("b", "a", 0): 1, ("a", "joined", 0): 1}


@pytest.mark.parametrize(
    ("unmapped", "expected", "findings"),
    [
        ("keep", {("A", "noise", 1): 1, ("noise", "A", 1): 1, ("A", "joined", 2): 1}, {}),
        ("drop", {("A", "A", 2): 1, ("A", "joined", 2): 1}, {"unmapped_event": 1}),
        ("other", {("A", "other", 1): 1, ("other", "A", 1): 1, ("A", "joined", 2): 1}, {}),
    ],
)
def test_states_name_the_events(
    unmapped: str, expected: dict[tuple[str, str, int], int], findings: dict[str, int]
) -> None:
    events = ((20, "a1"), (21, "noise"), (22, "a2"), (24, "paid"))
    states = {"a1": "A", "a2": "A", "paid": "joined"}
    tally = read(*events, states=states, unmapped=unmapped)
    assert moves(tally) == expected
    assert tally.findings == findings
    # An event that carries an outcome's own name is that outcome, mapped or not.
    # So is one that carries the name of a state that the mapping leads to.
    assert journeys(read((20, "A"), (21, "joined"), states=states, unmapped=unmapped)) == {
        ("A", "joined", True): (1, 2, 4, 1)
    }


def test_an_event_mapped_to_nothing_is_as_if_not_there() -> None:
    tally = read((20, "a"), (29, "mail"), (33, "joined"), states={"mail": None})
    assert tally.findings == {"unmapped_event": 1, "outcome_without_states": 1}
    assert moves(tally) == {("a", "lapsed", 10): 1}


def test_rows_are_left_out_for_the_first_reason_that_holds() -> None:
    hour = HOUR_US
    rows = [
        ("c", 20 * hour, "a", None, None, {"staff": "yes"}),
        (None, 20 * hour, "a", None, None, {"staff": "no"}),
        ("", None, "a", None, None, {"staff": "no"}),
        ("c", None, "a", None, None, {"staff": "no"}),
        ("c", 20 * hour, "", None, None, {"staff": "no"}),
        ("c", -1, "noise", None, None, {"staff": "no"}),
        ("c", 100 * hour + 1, "a", None, None, {"staff": "no"}),
        ("c", 20 * hour, "noise", None, None, {"staff": None}),
        ("c", 0, "a", None, None, {"staff": "no"}),
        ("c", 100 * hour, "a", None, None, {"staff": "no"}),
    ]
    tally = read_rows(rows, exclude={"staff": ["yes"]}, states={"a": "a"}, unmapped="drop")
    assert tally.findings == {
        "excluded": 1,
        "missing_customer": 2,
        "missing_time": 1,
        "missing_event": 1,
        "before_log_start": 1,
        "after_as_of": 1,
        "unmapped_event": 1,
    }
    assert tally.customers == {0: (1, 1, 1, 0, 0, 0, 2)}


def test_busy_moves_have_enough_rows_before_them() -> None:
    # Two rows go before the move into the outcome, three (a repeat included) before the next one.
    tally = read((20, "a"), (21, "b"), (22, "joined"), (22, "joined"), (23, "a"), (24, "b"), busy_after=3)
    counts = {key[1:3] + key[4:]: value[0] for key, value in tally.moves.items()}
    assert counts == {
        ("a", "b", False): 1,
        ("b", "joined", False): 1,
        ("a", "b", True): 1,
        ("b", "lapsed", True): 1,
    }


@pytest.mark.parametrize(("busy_after", "busy"), [(2, True), (3, False)])
def test_a_lapse_or_an_open_end_is_busy_when_enough_rows_were_kept(busy_after: int, busy: bool) -> None:
    lapsed = read((20, "a"), (21, "b"), busy_after=busy_after)
    assert (0, "b", "lapsed", 10, busy) in lapsed.moves
    came_back = read((20, "a"), (21, "b"), (40, "joined"), busy_after=busy_after)
    assert (0, "b", "lapsed", 10, busy) in came_back.moves
    still_open = read((90, "a"), (95, "b"), busy_after=busy_after)
    assert (0, "b", "open", 5, busy) in still_open.moves


def test_customers_add_up_within_their_bucket() -> None:
    rows = [
        *[(7, hour * HOUR_US, name, None, None, {}) for hour, name in ((20, "a"), (21, "joined"), (22, "a"))],
        *[(8, hour * HOUR_US, name, None, None, {}) for hour, name in ((20, "left"), (30, "joined"))],
        (9, 95 * HOUR_US, "a", None, None, {}),
        ("10", 95 * HOUR_US, "a", None, None, {}),
    ]
    tally = read_rows(rows, bucket_of=lambda customer: 3 if customer in (7, 8, 9) else 4)
    # Decided journeys 2, 2, 0 and conversions 1, 1, 0.
    assert tally.customers == {3: (3, 4, 8, 4, 2, 2, 3), 4: (1, 0, 0, 0, 0, 0, 1)}


def test_dates_are_binned_by_days() -> None:
    rows = [("c", day * DAY_US, name, None, None, {}) for day, name in ((5, "a"), (8, "b"), (11, "joined"))]
    tally = read_rows(rows, silence_us=3 * DAY_US, as_of_us=20 * DAY_US, whole_days=True)
    assert set(tally.moves) == {(0, "a", "b", 3, False), (0, "b", "joined", 3, False)}
    assert set(tally.journeys) == {(0, "a", "joined", 6, True)}
