"""A fit against counts, closed forms and a clustered variance worked out elsewhere."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from small_chains import START, column, ids_of_distinct_buckets, log_of_paths, one

import journeys as jn
from journeys.errors import ShortLogWarning

JOURNEY_ENDS = ["joined", "declined", "lapsed"]


def rules(**more) -> jn.JourneyRules:
    settings = {"converted": ["joined"], "churned": ["declined"], "silence": None, "complete_history": True}
    return jn.JourneyRules("customer", "time", "event", **{**settings, **more})


def fitted(log: pd.DataFrame, open_moves: str = "censored", **more) -> jn.JourneyFit:
    return jn.JourneyModel(open_moves=open_moves).fit(jn.tally(log, rules(**more)))


@pytest.mark.parametrize("open_moves", ["censored", "ignored"])
def test_eight_customers(reference, open_moves: str) -> None:
    """B. Efron, The Jackknife, the Bootstrap and Other Resampling Plans, SIAM 1982, ch. 6; Cochran 1977
    sec. 6.4; exact rational arithmetic on invented paths (h05): counts, chain, clustered standard errors.
    """
    case = reference("ratio_variance", "h05")
    expected, close = case["expected"], case["tolerance"]
    paths = case["input"]["paths"]
    log = log_of_paths(paths, ids_of_distinct_buckets(8), [np.arange(len(path)) * 1.7 for path in paths])
    fit = fitted(log, open_moves, converted=["win"], churned=["lose"])
    names = case["input"]["states"]
    states = ["s", "A", "B"]
    moves = fit.moves().to_frame().set_index(["state", "next_state"])
    counts = np.array(expected["counts"])
    for i, state in enumerate(states):
        for j, name in enumerate(names):
            assert moves.loc[(state, name), "n_moves"] == counts[i, j]
            exact = counts[i, j] / counts[i].sum()
            assert moves.loc[(state, name), "estimate"] == pytest.approx(exact, abs=1e-15)
    assert fit.matrix.loc["entry", "s"] == 1.0

    win = jn.outcomes(fit)
    assert one(win, start_state="s", outcome="win") == pytest.approx(expected["estimates"]["win"], **close)
    steps = jn.first_passage(fit, ["win", "lose"], method="linearised")
    assert one(steps, start_state="s", measure="mean") == pytest.approx(expected["estimates"]["steps"], **close)
    assert one(steps, start_state="entry", measure="mean") == pytest.approx(3.5, **close)
    clustered = expected["se_cluster_n_over_n_minus_1"]
    for start in ("entry", "s"):
        found = one(win, "std_error", start_state=start, outcome="win")
        assert found == pytest.approx(clustered["win"], **close)
        by_passage = one(
            jn.first_passage(fit, "win", method="linearised"), "std_error", start_state=start, measure="probability"
        )
        assert by_passage == pytest.approx(clustered["win"], **close)
        assert one(steps, "std_error", start_state=start, measure="mean") == pytest.approx(clustered["steps"], **close)
    assert one(win, "flag", start_state="s", outcome="win") == "too few"


def random_paths(rng: np.random.Generator, n: int, *, lapsing: bool) -> tuple[list[list[str]], list[list[float]]]:
    """Return paths that end in an outcome (or nowhere), and their times in days, gaps under a week."""
    paths, days = [], []
    for _ in range(n):
        path = list(rng.choice(["visit", "price", "basket"], rng.integers(1, 6)))
        end = rng.choice(JOURNEY_ENDS if lapsing else JOURNEY_ENDS[:2], p=[0.4, 0.2, 0.4] if lapsing else [0.6, 0.4])
        path += [] if end == "lapsed" else [str(end)]
        paths.append([str(event) for event in path])
        days.append((rng.uniform(0, 20) + np.cumsum(rng.uniform(0.01, 6.9, len(path)))).tolist())
    return paths, days


@pytest.mark.parametrize("repeats", ["keep", "merge"])
@pytest.mark.parametrize("lapsing", [True, False])
@pytest.mark.parametrize("open_moves", ["censored", "ignored"])
def test_closed_journeys_give_back_what_was_counted(repeats: str, lapsing: bool, open_moves: str) -> None:
    """Where every journey was seen from entry to end, expected shares, steps and days are the observed ones;
    with one journey and one bucket a customer the variances are p(1 - p)/(n - 1) and s^2/n (identity of h05).
    """
    n = 120
    paths, days = random_paths(np.random.default_rng([5, lapsing]), n, lapsing=lapsing)
    log = log_of_paths(paths, ids_of_distinct_buckets(n), days)
    fit = fitted(log, open_moves, repeats=repeats, silence="7d" if lapsing else None, as_of="2026-01-01")
    assert fit.row_flags == {}
    assert fit.matrix.sum(axis=1).to_numpy() == pytest.approx(1.0, abs=1e-12)

    ends = np.array([path[-1] if path[-1] in JOURNEY_ENDS else "lapsed" for path in paths])
    elapsed = np.array([times[-1] - times[0] for times in days]) + np.where(ends == "lapsed", 7.0, 0.0)
    steps = np.array([len(path) for path in paths]) + (ends == "lapsed")
    if repeats == "merge":
        steps = steps - np.array([sum(a == b for a, b in zip(path, path[1:], strict=False)) for path in paths])
    result = jn.outcomes(fit)
    for end in fit.outcomes:
        share = float(np.mean(ends == end))
        assert one(result, start_state="entry", outcome=end) == pytest.approx(share, abs=1e-12)
        error = one(result, "std_error", start_state="entry", outcome=end)
        assert error**2 == pytest.approx(share * (1 - share) / (n - 1), rel=1e-10)
    for clock, observed in (("steps", steps), ("time", elapsed)):
        over = jn.first_passage(fit, fit.outcomes, clock, method="linearised")
        assert one(over, start_state="entry", measure="probability") == 1.0
        assert one(over, start_state="entry", measure="mean") == pytest.approx(observed.mean(), rel=1e-9)
        if clock == "steps":
            error = one(over, "std_error", start_state="entry", measure="mean")
            assert error**2 == pytest.approx(np.var(observed, ddof=1) / n, rel=1e-9)
    # What each state leads to is a share of its visits; nothing is estimated where all was seen.
    listed = fit.moves().to_frame()
    seen = listed[listed["n_moves"] > 0]
    totals = seen.groupby("state")["n_moves"].transform("sum")
    assert seen["estimate"].to_numpy() == pytest.approx((seen["n_moves"] / totals).to_numpy(), abs=1e-12)


def test_journeys_of_one_customer_are_one_cluster(reference) -> None:
    """Cochran, Sampling Techniques, 3rd ed. 1977, sec. 6.4: the ratio's linearised variance over customers."""
    case = reference("ratio_variance", "h04")
    won, begun = case["input"]["y"], case["input"]["m"]
    paths = [["visit", "joined"] * y + ["visit", "declined"] * (m - y) for y, m in zip(won, begun, strict=True)]
    log = log_of_paths(paths, ids_of_distinct_buckets(4), [np.arange(len(path)) * 0.5 for path in paths])
    result = jn.outcomes(fitted(log))
    assert one(result, start_state="entry", outcome="joined") == pytest.approx(case["expected"]["ratio"], rel=1e-12)
    error = one(result, "std_error", start_state="entry", outcome="joined")
    assert error == pytest.approx(case["expected"]["se_n_over_n_minus_1"], rel=case["tolerance"]["rel"])


def test_open_stays_are_kept_as_lasting_at_least_so_long() -> None:
    """By hand: stays of 2 days (joined), 4 days still open, 9 days (declined): Aalen-Johansen 1/3 and 2/3."""
    log = log_of_paths(
        [["visit", "joined"], ["visit"], ["visit", "declined"]], [1, 2, 3], [[0, 2], [16], [0, 9]]
    )
    fit = fitted(log, as_of=str(START + pd.Timedelta(days=20)))
    assert fit.matrix.loc["visit", ["joined", "declined"]].tolist() == pytest.approx([1 / 3, 2 / 3], abs=1e-14)
    ignored = fitted(log, "ignored", as_of=str(START + pd.Timedelta(days=20)))
    assert ignored.matrix.loc["visit", ["joined", "declined"]].tolist() == [0.5, 0.5]
    mean = one(jn.first_passage(fit, ["joined", "declined"], "time"), start_state="visit", measure="mean")
    assert mean == pytest.approx(2 / 3 + 9 * 2 / 3, rel=1e-12)


def test_undecided_stays_with_a_silence() -> None:
    """By hand, silence 10 days, log read on day 12: of five stays two joined on day 2, one is open at age 6,
    one joined on day 8 and one lapsed on day 10: hazards 2/5 and 1/2.
    """
    log = log_of_paths(
        [["visit", "joined"], ["visit", "joined"], ["visit"], ["visit", "joined"], ["visit"]], [1, 2, 3, 4, 5],
        [[0, 2], [1, 3], [6], [0, 8], [1]],
    )
    with pytest.warns(ShortLogWarning, match=r"the log of 12\.0 days is shorter than one and a half"):
        fit = fitted(log, silence="10d", as_of=str(START + pd.Timedelta(days=12)))
    assert fit.matrix.loc["visit", ["joined", "lapsed"]].tolist() == pytest.approx([0.7, 0.3], abs=1e-14)
    over = jn.first_passage(fit, ["joined", "lapsed"], "time")
    assert one(over, start_state="visit", measure="mean") == pytest.approx(0.4 * 2 + 0.3 * 8 + 0.3 * 10, rel=1e-12)
    assert fit.row_flags == {"visit": "few seen to the end"}


def test_merged_visits_longer_than_the_silence() -> None:
    """A visit of 3 times 6 days outlasts a silence of 7; lapsing is then one of its ends, at its own time."""
    runs = [["visit"] * 4 + ["joined"], ["visit"] * 4, ["visit", "joined"], ["visit"]]
    times = [[0, 6, 12, 18, 20], [0, 6, 12, 18], [3, 4], [5]]
    fit = fitted(
        log_of_paths(runs, ids_of_distinct_buckets(4), times), repeats="merge", silence="7d",
        as_of=str(START + pd.Timedelta(days=60)),
    )
    assert fit.matrix.loc["visit"].tolist() == [0.0, 0.5, 0.0, 0.5]
    joined = jn.first_passage(fit, "joined", "time")
    assert one(joined, start_state="visit", measure="mean") == pytest.approx((20 + 1) / 2, rel=1e-12)
    lapsed = jn.first_passage(fit, "lapsed", "time")
    assert one(lapsed, start_state="visit", measure="mean") == pytest.approx((25 + 7) / 2, rel=1e-12)
    assert one(jn.first_passage(fit, "joined"), start_state="entry", measure="mean") == 2.0
    kept = fitted(log_of_paths(runs, [1, 2, 3, 4], times), silence="7d", as_of=str(START + pd.Timedelta(days=60)))
    assert kept.matrix.loc["visit", "visit"] == pytest.approx(6 / 10)


def log_of_days(silence: int, last: int, per_day: int) -> pd.DataFrame:
    """Return a log of dates: every day `per_day` customers come in; of those left each day half go, a quarter
    to joined and a quarter to declined, with no chance in it; who is left after `silence` days lapses.
    """
    rows, who = [], 0
    for entered in range(last + 1):
        left, fates = per_day, []
        for day in range(1, silence + 1):
            fates += [(day, "joined")] * (left // 4) + [(day, "declined")] * (left // 4)
            left -= left // 2
        fates += [(0, "")] * left
        for day, end in fates:
            who += 1
            rows.append((who, entered, "visit"))
            if end and entered + day <= last:
                rows.append((who, entered + day, end))
    frame = pd.DataFrame(rows, columns=["customer", "time", "event"])
    frame["time"] = [(START + pd.Timedelta(days=day)).date() for day in frame["time"]]
    return frame.sort_values("time", kind="stable")


def test_dates_without_a_time_are_counted_day_by_day() -> None:
    """Closed form: a stay ends on each day with chance 1/2, geometric on the days 1 to 5, cut by the silence.

    Half of the last days' stays are open; on bins of a day with full risk the fit is exact all the same.
    """
    silence, last = 5, 13
    log = log_of_days(silence, last, per_day=4 * 2**silence)
    fit = fitted(log, silence=f"{silence}d")
    assert fit.tally is not None
    assert fit.tally.whole_days
    assert (fit.tally.table("journeys")["outcome"] == "open").any(), "open journeys are what makes this hard"
    left = 0.5**silence
    expected = {"joined": (1 - left) / 2, "declined": (1 - left) / 2, "lapsed": left}
    assert fit.matrix.loc["visit", list(expected)].tolist() == pytest.approx(list(expected.values()), abs=1e-12)
    day = np.arange(1, silence + 1)
    weight = 0.5**day / (1 - left)
    mean = float(day @ weight)
    result = jn.first_passage(fit, "joined", "time")
    assert one(result, start_state="visit", measure="mean") == pytest.approx(mean, rel=1e-12)
    assert one(result, start_state="visit", measure="sd") ** 2 == pytest.approx(day**2 @ weight - mean**2, rel=1e-10)
    share = column(jn.time_to_convert(fit, ["1d", "2d", "5d"]), "estimate", "horizon", ["1d", "2d", "5d"], basis="log")
    assert share == pytest.approx([0.25, 0.375, 0.5 * (1 - left)], abs=1e-12)
    ignored = fitted(log, "ignored", silence=f"{silence}d")
    assert abs(ignored.matrix.loc["visit", "joined"] - expected["joined"]) > 0.003


def test_entry_comes_from_sure_entries_only() -> None:
    """Two first events lie within a silence of the log's start; their moves count, their entries do not."""
    paths = [["price", "joined"], ["price", "joined"], ["visit", "declined"], ["visit", "price", "joined"]]
    days = [[0, 1], [2, 3], [15, 16], [20, 21, 22]]
    fit = fitted(
        log_of_paths(paths, [1, 2, 3, 4], days), silence="10d", complete_history=False,
        as_of=str(START + pd.Timedelta(days=90)),
    )
    assert fit.matrix.loc["entry", ["price", "visit"]].tolist() == [0.0, 1.0]
    assert fit.matrix.loc["price", "joined"] == 1.0
    listed = fit.moves().to_frame().set_index(["state", "next_state"])["n_moves"]
    assert listed["price", "joined"] == 3
    assert listed["entry", "visit"] == 2
    assert "lapsed" not in set(fit.moves().to_frame().query("state == 'entry'")["next_state"])
