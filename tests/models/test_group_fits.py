"""All groups fitted in one go, against the fit of each part of the tally by itself."""

from __future__ import annotations

import warnings
from dataclasses import fields
from typing import Any

import numpy as np
import pandas as pd
import pytest
import simulated

import journeys as jn
from journeys.errors import JourneysWarning
from journeys.kernels.stays import BucketStays, StayFit, Stays
from journeys.models import group_stack
from journeys.models.fit import JourneyFit
from journeys.models.group_fits import group_fits
from journeys.models.model import fault_of

LENGTH = 2.5


def log_of(n: int, seed: int) -> pd.DataFrame:
    """Return a log with groups of very different sizes, states that some never see, and one without a conversion."""
    rng = np.random.default_rng(seed)
    log = simulated.simulate(n, LENGTH, rng)
    size = np.array([0, 0, 0, 0, 0, 0, 1, 1, 1, 2, 2, 3])
    log["country"] = np.array(["NL", "BE", "FR", "LU"])[size[log["customer"].to_numpy() % len(size)]]
    log.loc[(log["country"] == "BE") & (log["event"] == "poster"), "event"] = "tram"
    return log[~((log["country"] == "LU") & (log["event"] == "joined"))]


def tally_of(log: pd.DataFrame, **more: Any) -> jn.Tally:
    given = {"silence": "30d", "by": "country"} | more
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=["joined"],
        log_start=simulated.LOG_START, as_of=simulated.log_end(LENGTH), **given,
    )  # fmt: skip
    return jn.tally(log, rules)


def same(one: Any, other: Any, name: str) -> None:
    """Assert that two parts of fits are alike; bins that nobody is in may be missing at the end."""
    if isinstance(one, Stays | BucketStays | StayFit):
        for each in fields(one):
            same(getattr(one, each.name), getattr(other, each.name), f"{name}.{each.name}")
    elif isinstance(one, np.ndarray):
        np.testing.assert_allclose(one, other, rtol=1e-12, atol=1e-14, err_msg=name)
    else:
        assert one == other, name


def same_fit(one: JourneyFit, other: JourneyFit) -> None:
    for name in ("nodes", "converted", "move_state", "move_target", "n_moves", "probability", "mean", "second",
                 "row_flags", "open_moves"):  # fmt: skip
        same(getattr(one, name), getattr(other, name), name)
    assert list(one.row_flags.items()) == list(other.row_flags.items())
    assert one.influence is not None
    assert other.influence is not None
    for name in ("probability", "mean", "second"):
        same(getattr(one.influence, name), getattr(other.influence, name), f"influence of {name}")
    for name in ("stays", "by_bucket", "found", "move"):
        same(getattr(one.fitted_stays, name), getattr(other.fitted_stays, name), name)


SETTINGS: dict[str, dict[str, Any]] = {
    "plain": {},
    "no silence": {"silence": None, "complete_history": True},
    "merged": {"repeats": "merge"},
    "cohorts": {"cohort": "month"},
    "periods": {"split_at": [simulated.LOG_START + pd.Timedelta(days=45)]},
    "history": {"complete_history": True},
}


@pytest.mark.parametrize("open_moves", ["censored", "ignored"])
@pytest.mark.parametrize("name", SETTINGS)
@pytest.mark.parametrize("together", [20_000, 1])
def test_fits_are_those_of_the_parts(
    name: str, open_moves: str, together: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(group_stack, "_TOGETHER", together)
    tally = tally_of(log_of(400, 3), **SETTINGS[name])
    model = jn.JourneyModel(open_moves=open_moves)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", JourneysWarning)
        whole = model.fit(tally)
    found, parts = group_fits(whole, tally.rules.by), tally.split(tally.rules.by)
    assert [one.values for one in found] == list(parts)
    refused = 0
    for one, part in zip(found, parts.values(), strict=True):
        fault = fault_of(part)
        assert one.why == ("" if fault is None else fault.briefly)
        assert (one.fit is None) == (fault is not None)
        if one.fit is None:
            refused += 1
            continue
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", JourneysWarning)
            same_fit(one.fit, model.fit_whatever(part))
    assert bool(refused) == (name in ("cohorts", "periods"))
    fitted = [one.fit for one in found if one.fit is not None]
    assert len({fit.states for fit in fitted}) > 1
    if open_moves == "censored":
        assert any(fit.row_flags for fit in fitted)
