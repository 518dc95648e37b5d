"""The status history of 737 enhancement proposals, against plain-pandas facts computed beside the data.

Facts: the folder data of the shared references, its README and three tables (transition counts, absorption,
dwell), cut at the first terminal status, last statuses still open ignored.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from small_chains import column, one

import journeys as jn
from journeys.errors import JourneysWarning
from journeys.kernels.bins import bin_bounds_days, dwell_edges

pytestmark = pytest.mark.open_data

ENDS = ["Final", "Rejected", "Withdrawn", "Superseded", "April Fool!"]
RULES = jn.JourneyRules(
    "entity", "time", "event", converted=ENDS[:1], churned=ENDS[1:], silence=None, after_outcome="stop",
    complete_history=True,
)


@pytest.fixture(scope="module")
def tally(shared: Path) -> jn.Tally:
    return jn.tally(shared / "data" / "pep_status.parquet", RULES)


@pytest.fixture(scope="module")
def fit(tally: jn.Tally) -> jn.JourneyFit:
    return jn.JourneyModel(open_moves="ignored").fit(tally)


def facts(shared: Path, name: str) -> pd.DataFrame:
    return pd.read_csv(shared / "data" / f"pep_status_{name}.csv", index_col=0)


def test_counts(tally: jn.Tally, fit: jn.JourneyFit) -> None:
    """README: 1,819 rows of 737; Final 380, Rejected 140, Withdrawn 68, Superseded 17, one April Fool!; 131 open;
    48 rows follow a first terminal status.
    """
    assert tally.n_rows == 1_819
    assert tally.n_people == tally.n_journeys == 737
    journeys = tally.table("journeys")
    ended = journeys.groupby("outcome")["n"].sum().to_dict()
    assert ended == {"Final": 380, "Rejected": 140, "Withdrawn": 68, "Superseded": 17, "April Fool!": 1, "open": 131}
    assert journeys["sure"].all()
    findings = tally.findings.set_index("code")["n"]
    assert findings["after_outcome"] == 48
    assert not {"missing_customer", "missing_time", "missing_event", "repeated_outcome"} & set(findings.index)
    plain = jn.summarise(fit).plain
    assert plain.n_converted == 380
    assert plain.n_undecided == 131
    so_far = one(jn.time_to_convert(fit), horizon="so far")
    assert round(100 * so_far, 2) == 51.56


def test_transition_counts(shared: Path, fit: jn.JourneyFit) -> None:
    expected = facts(shared, "transition_counts")
    listed = fit.moves().to_frame().pivot(index="state", columns="next_state", values="n_moves")
    assert listed.loc[expected.index, expected.columns].to_numpy().tolist() == expected.to_numpy().tolist()
    assert set(fit.states) == set(expected.index)
    shares = expected.div(expected.sum(axis=1), axis=0)
    found = fit.matrix.loc[expected.index, expected.columns]
    assert found.to_numpy() == pytest.approx(shares.to_numpy(), abs=1e-12)
    assert listed.loc["entry"].sum() == 737


def test_outcomes_and_expected_steps(shared: Path, fit: jn.JourneyFit) -> None:
    """Six decimals: from Draft Final .613323, Rejected .235121, Withdrawn .125289, Superseded .024498."""
    expected = facts(shared, "absorption")
    result = jn.outcomes(fit)
    for end in ENDS:
        found = column(result, "estimate", "start_state", expected.index, outcome=end)
        assert found == pytest.approx(expected[end].to_numpy(), abs=6e-7)
    assert one(result, start_state="Draft", outcome="Final") == pytest.approx(0.613323, abs=6e-7)
    steps = jn.first_passage(fit, ENDS)
    found = column(steps, "estimate", "start_state", expected.index, measure="mean")
    assert found == pytest.approx(expected["exp_steps"].to_numpy(), abs=6e-7)
    unconditional = column(steps, "estimate", "start_state", expected.index, measure="mean_unconditional")
    assert unconditional.tolist() == found.tolist(), "every status leads to an end in the end"


def test_dwell(shared: Path, tally: jn.Tally) -> None:
    """Median and 90 % of the completed dwells lie in the bins the tally puts them in; the number is exact."""
    expected = facts(shared, "dwell_days")
    edges = dwell_edges(None)
    assert edges is not None
    lower, upper = bin_bounds_days(edges, len(edges))
    moves = tally.table("moves")
    moves = moves[moves["next"] != "open"]
    for state, row in expected.iterrows():
        mine = moves[moves["state"] == state].sort_values("bin")
        assert mine["n"].sum() == row["count"]
        if not row["count"]:
            continue
        bins = np.repeat(mine["bin"].to_numpy(), mine["n"].to_numpy())
        for share in (0.5, 0.9):
            # The table interpolates between two dwells and rounds to a tenth of a day.
            place = share * (len(bins) - 1)
            low, high = lower[bins[int(np.floor(place))]], upper[bins[int(np.ceil(place))]]
            assert low - 0.05 <= row[f"{share:.0%}"] <= high + 0.05


def test_dwell_sums_are_exact(shared: Path, tally: jn.Tally) -> None:
    log = pd.read_parquet(shared / "data" / "pep_status.parquet")
    log["until"] = log.groupby("entity")["time"].shift(-1)
    ended = log["event"].isin(ENDS).groupby(log["entity"]).cummax()
    kept = log[~ended & log["until"].notna()]
    expected = (kept["until"] - kept["time"]).groupby(kept["event"]).sum() // pd.Timedelta(microseconds=1)
    moves = tally.table("moves")
    found = moves[moves["next"] != "open"].groupby("state")["dwell"].sum()
    assert found.to_dict() == expected.to_dict()


def test_open_statuses_can_be_kept(tally: jn.Tally) -> None:
    """With open stays kept, statuses whose longest stay is still open fall back on completed moves."""
    with pytest.warns(JourneysWarning, match="the longest stay in .* is still open") as caught:
        fit = jn.JourneyModel().fit(tally)
    assert len(caught) == 1
    assert set(fit.row_flags.values()) == {"completed moves only"}
    assert fit.matrix.sum(axis=1).to_numpy() == pytest.approx(1.0, abs=1e-12)
    log_open = tally.table("moves").query("next == 'open'")
    assert log_open["n"].sum() == 131
    assert set(fit.row_flags) <= set(log_open["state"])
