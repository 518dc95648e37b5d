"""The invoices of an online shop (UCI Online Retail: Chen, Sain and Guo 2012, doi 10.1057/dbm.2012.17): a log
with rows that lack their customer, copies and ties, against plain counts by pandas.

A journey here is a run of purchases; a cancellation ends it, sixty days without an invoice let it lapse.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from small_chains import one

import journeys as jn

pytestmark = pytest.mark.open_data

SILENCE = pd.Timedelta(days=60)


def rules(**more) -> jn.JourneyRules:
    return jn.JourneyRules("entity", "time", "event", churned=["cancel"], silence="60d", **more)


@pytest.fixture(scope="module")
def path(shared: Path) -> Path:
    return shared / "data" / "online_retail_invoices.parquet"


@pytest.fixture(scope="module")
def log(path: Path) -> pd.DataFrame:
    return pd.read_parquet(path)


@pytest.fixture(scope="module")
def tally(path: Path) -> jn.Tally:
    return jn.tally(path, rules())


def test_rows_left_out_and_oddities_are_counted(log: pd.DataFrame, tally: jn.Tally) -> None:
    """README: 25,900 rows of 4,372; 3,710 without customer; 682 copies and 1,356 tied times, those without a
    customer among them. Of the rows with one, 127 are copies in the columns read and 59 more are tied.
    """
    keys = ["entity", "time", "event"]
    assert log.duplicated(keys).sum() == 682
    assert log.duplicated(keys[:2], keep=False).sum() == 1_356
    found = tally.findings.set_index("code")["n"]
    assert tally.n_rows == 25_900
    assert tally.n_people == 4_372
    assert found["missing_customer"] == 3_710
    kept = log.dropna(subset="entity")
    assert found["duplicate"] == kept.duplicated(keys).sum() == 127
    assert found["tied_times"] == kept.duplicated(keys[:2]).sum() - 127 == 59
    assert found["naive_times"] == len(kept) == 22_190
    named = tally.findings.set_index("code")["rows"]
    assert named["missing_customer"] == np.flatnonzero(log["entity"].isna())[:10].tolist()


def test_copies_can_be_dropped(path: Path, log: pd.DataFrame) -> None:
    dropped = jn.tally(path, rules(duplicates="drop", as_of="2011-12-09T12:50:00"))
    once = log.drop_duplicates(["entity", "time", "event"])
    counted = jn.tally(once, rules(duplicates="drop", as_of="2011-12-09T12:50:00"))
    for table in ("moves", "entries", "journeys", "customers"):
        pd.testing.assert_frame_equal(dropped.table(table), counted.table(table))


def test_moves_are_what_pandas_counts(log: pd.DataFrame, tally: jn.Tally) -> None:
    kept = log.dropna(subset="entity").sort_values(["entity", "time"], kind="stable")
    kept["next"] = kept.groupby("entity")["event"].shift(-1)
    kept["gap"] = kept.groupby("entity")["time"].shift(-1) - kept["time"]
    bought = kept[kept["event"] == "purchase"]
    in_time = bought[bought["gap"] <= SILENCE]
    age = log["time"].max() - bought["time"]
    last = bought["next"].isna()
    expected = {
        "purchase": int((in_time["next"] == "purchase").sum()),
        "cancel": int((in_time["next"] == "cancel").sum()),
        "lapsed": int(((bought["gap"] > SILENCE) | (last & (age >= SILENCE))).sum()),
        "open": int((last & (age < SILENCE)).sum()),
    }
    moves = tally.table("moves")
    assert moves.groupby("next")["n"].sum().to_dict() == expected


def test_fit_and_questions(tally: jn.Tally) -> None:
    fit = jn.JourneyModel().fit(tally)
    assert fit.matrix.sum(axis=1).to_numpy() == pytest.approx(1.0, abs=1e-12)
    assert fit.row_flags == {}
    ends = jn.outcomes(fit)
    shares = [one(ends, start_state="entry", outcome=end) for end in ("cancel", "lapsed")]
    assert sum(shares) == pytest.approx(1.0, abs=1e-12)
    # Of decided journeys alone the share cancelled is too high: a lapse takes sixty days to be seen.
    decided = tally.table("journeys").query("outcome != 'open' and sure").groupby("outcome")["n"].sum()
    assert shares[0] < decided["cancel"] / decided.sum()
    with pytest.raises(ValueError, match="`to` is missing; wanted one or more of 'purchase', 'cancel', 'lapsed'"):
        jn.first_passage(fit)
    days = jn.first_passage(fit, "cancel", "time")
    assert 0 < one(days, start_state="purchase", measure="mean") < 365
    assert (days.to_frame().query("measure == 'mean'")["flag"] == "").all()
