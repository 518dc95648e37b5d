"""What may be handed on describes no few people, not even by subtraction."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import journeys as jn
from journeys.tally.shareable import OTHER

LEAST = 10


def log(seed: int) -> pd.DataFrame:
    """Return a log with rare states, rare moves and a rare group."""
    rng = np.random.default_rng(seed)
    n = 3_000
    frame = pd.DataFrame({
        "member": rng.integers(0, 900, n),
        "event": rng.choice(["visit", "price", "basket", "workshop", "joined"], n, p=[0.5, 0.3, 0.145, 0.005, 0.05]),
        "happened": pd.Timestamp("2025-01-01", tz="UTC") + pd.to_timedelta(rng.uniform(0, 150, n), unit="D"),
    })  # fmt: skip
    frame["town"] = np.select([frame["member"] < 6, frame["member"] < 40], ["Yerseke", "Goes"], "Utrecht")
    return frame.sort_values("happened", ignore_index=True)


def rules(*by: str) -> jn.JourneyRules:
    return jn.JourneyRules("member", "happened", "event", converted="joined", silence="30d", by=list(by))


@pytest.mark.parametrize("by", [(), ("town",)])
@pytest.mark.parametrize("seed", range(3))
def test_no_row_and_no_difference_describes_few_people(seed: int, by: tuple[str, ...]) -> None:
    frame, keys = log(seed), [*by, "state", "next_state"]
    tally = jn.tally(frame, rules(*by))
    shared = tally.shareable(LEAST)
    assert (shared["n"] % LEAST == 0).all()
    assert not shared.duplicated(["what", *keys]).any()
    for what, second in (("moves", "next"), ("journeys", "outcome"), ("entries", None)):
        table = tally.table(what).assign(next_state="")
        if second:
            table["next_state"] = table[second]
        mine = shared[shared["what"] == what]
        told = {tuple(row) for row in mine[keys].to_numpy()}
        hidden = table[[tuple(row) not in told for row in table[keys].to_numpy()]]
        seen = table.drop(hidden.index)
        # By the number of buckets each row describes at least so many people.
        assert seen.groupby(keys)["bucket"].nunique().min() >= LEAST
        # The children of a branch that are not shown are what is left when those that are shown are taken off: that is
        # of many people too, and never one child alone.
        for level in range(len(keys)):
            shown = {row[: level + 1] for row in told}
            hidden_by_parent: dict[tuple[object, ...], list[pd.DataFrame]] = {}
            for name, rows in table.groupby(keys[: level + 1]):
                name = name if isinstance(name, tuple) else (name,)
                if name not in shown and (not level or name[:level] in {row[:level] for row in shown}):
                    hidden_by_parent.setdefault(name[:level], []).append(rows)
            for rows_of_children in hidden_by_parent.values():
                assert pd.concat(rows_of_children)["bucket"].nunique() >= LEAST
                assert len(rows_of_children) > 1
        total = mine["n"].sum()
        assert total == pytest.approx(table["n"].sum(), abs=LEAST / 2 * len(mine) + LEAST)


def test_a_rare_group_hides_with_another() -> None:
    shared = jn.tally(log(1), rules("town")).shareable(LEAST)
    assert set(shared["town"]) == {"Utrecht", OTHER} or set(shared["town"]) == {OTHER}


def test_times_are_rounded_and_nothing_tells_a_bucket() -> None:
    shared = jn.tally(log(2), rules()).shareable(LEAST)
    days = shared["mean_days"].dropna()
    assert (days == days.map(lambda value: float(f"{value:.2g}"))).all()
    assert "bucket" not in shared
    assert shared.loc[shared["next_state"] == "lapsed", "mean_days"].dropna().max() <= 60


@pytest.mark.parametrize("least", [1, 201, 2.5])
def test_limits_of_how_few(least: float) -> None:
    with pytest.raises((ValueError, TypeError), match="min_customers"):
        jn.tally(log(0), rules()).shareable(least)


def test_a_log_of_few_people_gives_nothing() -> None:
    assert not len(jn.tally(log(0)[lambda frame: frame["member"] < 5], rules()).shareable())
