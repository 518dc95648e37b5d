"""What an audit sees in logs that were spoilt on purpose."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest

import journeys as jn
from journeys.questions.audit import Audit
from journeys.tally.patterns import looks_personal

DAYS = 200
START = pd.Timestamp("2025-01-01", tz="UTC")


def sound_log(n: int = 800, seed: int = 3) -> pd.DataFrame:
    """Return a log of people who look around for some days, and join or do not."""
    rng = np.random.default_rng(seed)
    rows: list[tuple[int, float, str]] = []
    for who in range(n):
        day = rng.uniform(0, DAYS)
        for event in rng.choice(["visit", "price", "basket"], rng.integers(1, 6)):
            rows.append((who, day, str(event)))
            day += rng.exponential(2.0)
        if rng.random() < 0.4:
            rows.append((who, day, "joined"))
    frame = pd.DataFrame(rows, columns=["member", "day", "event"])
    frame = frame[frame["day"] < DAYS]
    return at_days(frame).sort_values("happened", ignore_index=True)


def at_days(frame: pd.DataFrame) -> pd.DataFrame:
    return frame.assign(happened=START + pd.to_timedelta(frame["day"], unit="D")).drop(columns="day")


def rules(**more: object) -> jn.JourneyRules:
    settings = {"converted": "joined", "silence": "30d", **more}
    return jn.JourneyRules("member", "happened", "event", **settings)


def told(audit: Audit) -> pd.DataFrame:
    return audit.to_frame().set_index("check_name")


def with_rows(log: pd.DataFrame, more: pd.DataFrame) -> pd.DataFrame:
    return pd.concat([log, at_days(more)]).sort_values("happened", kind="stable", ignore_index=True)


def test_a_sound_log_is_good_throughout() -> None:
    checks = told(jn.audit(sound_log(), rules(complete_history=True)))
    assert set(checks["verdict"]) == {"good"}
    assert "recorded in part of the log only" in checks.index


@pytest.mark.parametrize("order", ["time", "customer"])
def test_a_mailing_stands_out_however_the_rows_come(order: str) -> None:
    mailed = pd.DataFrame({"member": np.arange(300) % 290, "day": 90.0 + np.arange(300) * 1e-7, "event": "mailed"})
    log = with_rows(sound_log(), mailed)
    if order == "customer":
        log = log.sort_values(["member", "happened"], kind="stable", ignore_index=True)
    row = told(jn.audit(log, rules())).loc["stamped for very many in one minute"]
    assert row["verdict"] == "with care"
    assert row["value"] == "mailed (100 % so, up to 290 customers)"
    batches = pa.Table.from_pandas(log, preserve_index=False).to_batches(max_chunksize=1_000)
    once = jn.audit(iter(batches), rules())
    assert told(once).loc["stamped for very many in one minute", "value"] == row["value"]


def test_a_robot_in_one_minute_is_no_mailing() -> None:
    robot = pd.DataFrame({"member": 1_000_000, "day": 90.0 + np.arange(2_000) * 1e-8, "event": "visit"})
    checks = told(jn.audit(with_rows(sound_log(), robot), rules()))
    assert checks.loc["stamped for very many in one minute", "value"] == "none"
    assert checks.loc["most events of one customer", "value"] == "2,000"
    assert checks.loc["most events of one customer", "verdict"] == "with care"
    assert "moves come after event 1,000" in checks.loc["most events of one customer", "note"]


def test_dates_have_no_minutes() -> None:
    log = sound_log()
    log["happened"] = log["happened"].dt.date
    row = told(jn.audit(log, rules())).loc["stamped for very many in one minute"]
    assert (row["value"], row["note"]) == ("not looked for", "the log holds dates without a time")


def test_states_of_part_of_the_log_are_named_with_their_dates() -> None:
    log = sound_log()
    late = (log["event"] == "basket") & (log["happened"] >= START + pd.Timedelta(days=100))
    log.loc[(log["event"] == "basket") & ~late, "event"] = "visit"
    row = told(jn.audit(log, rules())).loc["recorded in part of the log only"]
    assert row["verdict"] == "with care"
    assert row["value"].startswith("basket (2025-04-1")
    # Under one name in the rules it was there throughout.
    together = jn.audit(log, rules(states={"basket": "looks", "visit": "looks"}))
    assert told(together).loc["recorded in part of the log only", "value"] == "none"


def test_names_that_may_tell_who_somebody_is_are_counted_not_shown() -> None:
    log = sound_log()
    log.loc[log.index[:40], "event"] = "mail to ada@example.org"
    log.loc[log.index[50:90], "event"] = "invoice 20250117"
    audit = jn.audit(log, rules())
    row = told(audit).loc["names that look like ids or addresses"]
    assert row["verdict"] == "with care"
    assert row["value"] == "1 with a long number, 1 with an e-mail address"


@pytest.mark.parametrize(
    ("name", "what"),
    [
        ("price page", None), ("step 12 of 15", None), ("2025-01-17", None), ("café ☕", None), ("dead beef", None),
        ("defaced", None), ("effaceddefaced", None),
        ("a.b@c.nl", "an e-mail address"), ("tel +31 20 624 11 11", "a telephone number"),
        ("order 4711234", "a long number"),
        ("5f2a9c1e-0d3b-4e8f-9a77-112233445566", "a random id"), ("session 9f86d081884c7d65", "a random id"),
    ],
)  # fmt: skip
def test_what_looks_personal(name: str, what: str | None) -> None:
    assert looks_personal(name) == what


def test_other_silences_are_what_those_rules_would_give() -> None:
    log = sound_log()
    silences = jn.audit(log, rules()).silences.set_index("silence")
    assert silences.index.tolist() == ["7d", "14d", "30d", "60d", "90d"]
    for silence in ("14d", "60d"):
        tally = jn.tally(log, rules(silence=silence))
        share = jn.first_passage(jn.JourneyModel().fit(tally), method="linearised").to_frame()
        share = share[(share.start_state == "entry") & (share.measure == "probability")].iloc[0]
        back = jn.comeback(tally).to_frame().set_index("horizon").loc["so far"]
        row = silences.loc[silence]
        assert row["conversion"] == pytest.approx(share["estimate"], rel=1e-12)
        assert (row["conversion_low"], row["conversion_high"]) == pytest.approx((share["low"], share["high"]))
        assert (row["came_back"], row["n_silent"]) == (back["estimate"], back["n_absences"])
    short = jn.audit(log[log["happened"] < START + pd.Timedelta(days=45)], rules()).silences.set_index("silence")
    assert short.loc["60d", "note"] == "not told: the log is 45 days long"
    assert np.isnan(short.loc["60d", "conversion"])


def test_returns_just_past_the_silence_are_a_warning() -> None:
    """People who come once a month look lost to a silence of 28 days."""
    rng = np.random.default_rng(5)
    rows = [
        (who, first + 30 * month + rng.normal(0, 1), "visit")
        for who in range(300)
        for first in [rng.uniform(0, 60)]
        for month in range(5)
    ]
    monthly = pd.DataFrame(rows, columns=["member", "day", "event"])
    monthly["member"] += 10_000
    monthly = monthly[(monthly["day"] > 0) & (monthly["day"] < DAYS)]
    row = told(jn.audit(with_rows(sound_log(), monthly), rules(silence="28d"))).loc["quiet for over 28d"]
    assert row["verdict"] == "with care"
    assert "a longer silence would cut fewer journeys in two" in row["note"]
    longer = jn.audit(with_rows(sound_log(), monthly), rules(silence="45d"))
    assert told(longer).loc["quiet for over 45d", "verdict"] == "good"


def test_of_a_tally_only_its_counts_are_told() -> None:
    audit = jn.audit(jn.tally(sound_log(), rules()))
    assert not len(audit.silences)
    assert "stamped for very many in one minute" not in told(audit).index
    assert "Other silences" not in audit.summary()
