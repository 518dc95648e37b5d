"""What readers of a summary get describes enough people, counted here on the log itself, and cannot be subtracted."""

from __future__ import annotations

import logging
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from club_log import club_overview, overview_of, small_log

import journeys as jn
from journeys.command.main import main
from journeys.questions.few_people import is_hidden
from journeys.questions.overview import Overview
from journeys.show.page import summary_markdown
from journeys.show.summary import summary_text

LEAST = 10
ENDS = ("joined", "declined", "left")


def random_walks(seed: int) -> pd.DataFrame:
    """A log in which every journey is over: a step a day, rare states, endings and towns among them."""
    rng = np.random.default_rng(seed)
    states, ends, towns = ["visit", "look", "price", "rare"], [*ENDS, ""], ["Aa", "Bee", "Cee", "Dee"]
    shares = [rng.dirichlet(np.full(4, 0.5)) + 1e-3 for _ in range(3)]
    rows = []
    for who in range(int(rng.integers(80, 200))):
        path = list(rng.choice(states, int(rng.integers(1, 5)), p=shares[0] / shares[0].sum()))
        path.append(str(rng.choice(ends, p=shares[1] / shares[1].sum())))
        town = str(rng.choice(towns, p=shares[2] / shares[2].sum()))
        start = pd.Timestamp("2025-01-05", tz="UTC") + pd.Timedelta(days=int(rng.integers(60)), minutes=who)
        rows += [(who, start + pd.Timedelta(days=i), name, town) for i, name in enumerate(path) if name]
    return pd.DataFrame(rows, columns=["who", "when", "what", "town"])


@cache
def walked(seed: int) -> tuple[pd.DataFrame, Overview] | None:
    """The log with the move that each row begins, and its summary; None where it cannot carry one."""
    frame = random_walks(seed)
    if not {"joined"} <= set(frame.what):
        return None
    overview = overview_of(
        frame, min_customers=LEAST, churned=["declined", "left"], as_of="2025-06-01", log_start="2025-01-01", by="town"
    )
    frame["next"] = frame.groupby("who").what.shift(-1).fillna("lapsed")
    return frame, overview


def given_away(hidden: pd.Series, people: pd.Series) -> bool:
    """Tell whether one alone of several is not shown."""
    return int((hidden & (people > 0)).sum()) == 1 and int((people > 0).sum()) > 1


@pytest.mark.parametrize("seed", range(14))
def test_moves_and_endings_are_of_enough_people(seed: int) -> None:
    if (found := walked(seed)) is None:
        return
    log, overview = found
    frame = overview.to_frame()
    frame["hidden"] = frame.flag.map(is_hidden)
    moves = frame[(frame.section == "moves") & (frame.state != "entry")].copy()
    people = log[~log.what.isin(ENDS)].groupby(["what", "next"]).who.nunique()
    moves["people"] = [people.get((a, b), 0) for a, b in zip(moves.state, moves.next_state, strict=True)]
    assert not (~moves.hidden & moves.people.between(1, LEAST - 1)).any()
    numbers = ["estimate", "std_error", "low", "high", "n_moves", "n_effective"]
    assert moves.loc[moves.hidden, numbers].isna().all(axis=None)
    assert not any(given_away(part.hidden, part.people) for _, part in moves.groupby("state"))
    counts = frame[(frame.section == "counts") & frame.outcome.notna()].copy()
    last = log.groupby("who").next.last().where(lambda one: one != "lapsed", log.groupby("who").what.last())
    ended = last.where(last.isin(ENDS), "lapsed").value_counts()
    counts["people"] = counts.outcome.map(ended).fillna(0)
    assert (counts.hidden | (counts.estimate == counts.people)).all()
    assert not (~counts.hidden & counts.people.between(1, LEAST - 1)).any()
    assert not given_away(counts.hidden, counts.people)
    for outcome in counts.outcome[~counts.hidden]:
        column = moves[moves.next_state == outcome]
        assert not given_away(column.hidden, column.people)
    told = frame[(frame.section == "time_to_convert")]
    assert told.hidden.all() or int(ended["joined"]) >= LEAST


@pytest.mark.parametrize("seed", range(14))
def test_groups_are_of_enough_people(seed: int, tmp_path: Path) -> None:
    if (found := walked(seed)) is None:
        return
    from journeys.show.group_tables import wide_groups

    log, overview = found
    groups = wide_groups(overview)
    assert groups is not None
    people = groups.group.map(log.groupby("town").who.nunique())
    hidden = groups.n_journeys.isna()
    assert not (~hidden & (people < LEAST)).any()
    assert not given_away(hidden, people)
    assert groups.loc[hidden].drop(columns=["group_column", "group", "flag"]).isna().all(axis=None)
    won = log[log.what == "joined"].groupby("town").who.nunique().reindex(groups.group).fillna(0).to_numpy()
    shown = groups["converted_so_far"].notna().to_numpy()
    assert not (shown & (won > 0) & (won < LEAST)).any()


def test_some_is_left_out_and_the_pages_say_so() -> None:
    found = [one[1] for seed in range(14) if (one := walked(seed)) is not None]
    few = [overview for overview in found if overview.few is not None and overview.few.anything]
    assert len(few) > 5
    for overview in few:
        words = f"numbers about fewer than {LEAST} people"
        assert words in summary_markdown(overview)
        assert words in " ".join(summary_text(overview).split())
        assert "nan" not in summary_markdown(overview).lower()
        assert "nan" not in summary_text(overview).lower()


def test_of_the_demo_log_only_shares_of_a_cohort_of_few_seen_starts_are_left_out() -> None:
    """The log begins in September, so that the start of hardly any journey of that month was seen."""
    overview = club_overview()
    frame = overview.to_frame()
    hidden = frame[frame.flag.map(is_hidden)]
    assert hidden.groupby(["section", "cohort"]).horizon.apply(list).to_dict() == {
        ("by cohort", "2024-09"): ["14d", "30d", "90d"]
    }
    assert (hidden.basis == "log").all()
    assert hidden[["estimate", "low", "high"]].isna().all(axis=None)
    assert overview.few is not None
    assert replace(overview.few, groups={}).anything is False
    assert f"numbers about fewer than {LEAST} people" in summary_markdown(overview)


def test_nothing_is_left_out_where_that_is_asked_for() -> None:
    frame = overview_of(small_log(12)).to_frame()
    assert not frame.flag.map(is_hidden).any()


def test_a_log_of_few_people_has_no_numbers() -> None:
    frame = overview_of(small_log(6), min_customers=LEAST).to_frame()
    assert frame.flag.map(is_hidden).all()
    assert frame[["estimate", "low", "high"]].isna().all(axis=None)


@pytest.mark.parametrize("least", [-1, 201, 2.5, True])
def test_a_limit_that_makes_no_sense_is_refused(least: object) -> None:
    with pytest.raises((ValueError, TypeError), match="min_customers"):
        overview_of(small_log(), min_customers=least)  # type: ignore[arg-type]


def test_no_id_stands_in_any_file_or_line(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], caplog: pytest.LogCaptureFixture
) -> None:
    log = small_log(60)
    log["who"] = ["zqx" + format(7919 * who + 104729, "x") + "zqx" for who in log.who]
    log.loc[3, "when"] = pd.NaT
    log.to_parquet(tmp_path / "log.parquet")
    rules = jn.JourneyRules("who", "when", "what", converted="joined", churned="declined", silence="30d",
                            limits={"unreadable": 0.5, "late": 0.5})  # fmt: skip
    (tmp_path / "rules.toml").write_text(rules.to_toml(), encoding="utf-8")
    out = tmp_path / "out"
    given = [str(tmp_path / "log.parquet"), "--rules", str(tmp_path / "rules.toml")]
    caplog.set_level(logging.DEBUG)
    assert main(["summary", *given, "--out", str(out), "--keep-tally"]) == 0
    assert main(["audit", *given]) == 0
    said = capsys.readouterr()
    for text in (said.out, said.err, caplog.text):
        assert "zqx" not in text
    written = [path for path in out.rglob("*") if path.is_file()]
    assert len(written) >= 6
    for path in written:
        assert b"zqx" not in path.read_bytes(), path.name
        if path.suffix == ".parquet":
            import pyarrow.parquet as pq

            assert "zqx" not in str(pq.read_table(path).to_pydict()) + str(pq.read_schema(path).metadata)
