"""Make the event log of an invented bicycle-repair club from a stated truth.

The club sells a yearly membership. People meet it through a poster, the newsletter, a search or a friend's
invitation, look at the price page, come to an open evening or a trial repair, fill a basket, and in the end
join, decline, or fall silent for more than 30 days (which is how a journey lapses). Everything is invented.

There are two kinds of customers, whom nobody can tell apart in the log: *decided* ones are quick and often
join, *curious* ones are slow and seldom do. Within a kind a journey is a first-order chain: the next move
depends on the present state only, and takes a lognormal time cut off at 30 days. After a journey ends a
person comes back with a stated probability, after a stated time, as a person of the same kind. Arrivals are
uniform from 150 days before the log to its end, so that some journeys are under way when the log starts and
some are undecided when it stops.

``truth.json`` is computed from these statements, never from the log. It holds, for journeys as a steady
state would see them (each kind weighted by its people times their expected number of journeys):

``journeys``
    What is true of the two kinds together.
``pooled_chain``
    What one first-order semi-Markov chain fitted to ever longer logs of both kinds would say.

Which of the true numbers such a fit recovers, and which it cannot:

- It recovers the shares of journeys that join, decline and lapse: they are the same in both, exactly,
  because the pooled chain carries the same flow through every state.
- It does not recover the mean steps and the mean days of the journeys that join, nor the share of joiners
  who met a touchpoint. Those who join are mostly of the quick kind; the pooled chain lets every traveller
  change kind at each state. Mean days under mixed kinds were 8 to 19 % off in simulations made for other
  chains; ``truth.json`` states by how much they are here (``pooled_chain`` against ``journeys``). More data
  does not mend this.

Arrivals begin only 150 days before the log, so people on their third or fourth journey are a little rarer
in it than in a steady state; this moves the shares by less than 0.2 points.

Run ``python make_club_log.py`` to make the log that is kept beside this file, or, for a big one of the same
truth, ``python make_club_log.py --people 1000000 --days 720 --out big/club_log.parquet``.
"""

from __future__ import annotations

import argparse
import json
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
from club_truth import (
    AWAY_DAYS,
    DISTRICTS,
    KINDS,
    LAPSED,
    LOG_SPREAD,
    NAMES,
    OUTCOMES,
    SILENCE_DAYS,
    WARM_UP_DAYS,
    Array,
    M,
    matrix,
    median_days,
    truth,
)

LOG_START = np.datetime64("2024-09-02T00:00:00", "us")  # UTC, a Monday
DAY_US = 86_400_000_000
MINUTE_US = 60_000_000
PEOPLE_AT_ONCE = 100_000  # bounds the memory of a big log; part of the seed's meaning

# Extra rows that a real log would carry, per 10,000 rows. None changes a journey once the rules are applied.
BLEMISHES = {"no_member": 3.0, "no_event": 2.0, "no_time": 1.5, "duplicate": 6.0}
REPEATED_OUTCOME_SHARE = 0.02  # outcomes sent a second time, 1 to 40 minutes later
LATE_SHARE = 0.0008  # rows at the end of the file instead of at their time
MINUTE_STAMPS = ("poster", "search", "price_page")  # counted by the minute, so some moves take no time
VOLUNTEERS = 6
VOLUNTEER_ROWS_PER_DAY = 0.15
# The table without its names: one row per event, `person` a number, `code` a place in NAMES.
COLUMNS = ("person", "time", "code")


@dataclass(frozen=True)
class Tables:
    """The stated numbers as arrays to draw from; the first axis is the kind."""

    cumulative: Array  # (2, 9, 12)
    log_median: Array  # (2, 9, 12)
    comes_back: Array  # (2, 12)
    away: Array  # (12, 2): log median and log spread

    @classmethod
    def stated(cls) -> Tables:
        """Lay out the kinds in `club_truth`."""
        back = np.zeros((len(KINDS), M + 3))
        away = np.zeros((M + 3, 2))
        for j, name in enumerate(OUTCOMES, start=M):
            back[:, j] = [kind.comes_back[name] for kind in KINDS]
            away[j] = np.log(AWAY_DAYS[name][0]), AWAY_DAYS[name][1]
        return cls(
            cumulative=np.cumsum([matrix(kind) for kind in KINDS], axis=2),
            log_median=np.log([median_days(kind) for kind in KINDS]),
            comes_back=back,
            away=away,
        )


def step(tables: Tables, kind: Array, state: Array, rng: np.random.Generator) -> tuple[Array, Array]:
    """Draw the next state or outcome and the days it takes, one for each person; both of shape (n,)."""
    draw = rng.random(len(state))[:, None]
    code = (draw > tables.cumulative[kind, state, :LAPSED]).sum(axis=1)
    days = np.exp(rng.normal(tables.log_median[kind, state, code], LOG_SPREAD))
    while (late := np.flatnonzero(days > SILENCE_DAYS)).size:  # the cut at 30 days: draw again
        days[late] = np.exp(rng.normal(tables.log_median[kind, state, code][late], LOG_SPREAD))
    days[state == 0] = 0.0
    days[code == LAPSED] = SILENCE_DAYS
    return code, days


def live(kind: Array, arrival: Array, days: float, rng: np.random.Generator) -> pd.DataFrame:
    """Make the rows of all people from their arrival until the log stops, each in the order made.

    Parameters
    ----------
    kind : ndarray of int, shape (n,)
    arrival : ndarray of float, shape (n,)
        Day of the first event, counted from the start of the log; may be negative.
    days : float
        Day on which the log stops.
    rng : numpy.random.Generator

    Returns
    -------
    pandas.DataFrame
        `person`, `time` (days) and `code`, those before the log included.
    """
    tables = Tables.stated()
    person, time, state = np.arange(len(kind)), arrival.copy(), np.zeros(len(kind), dtype=np.int64)
    rows: list[tuple[Array, ...]] = []
    while person.size:
        state, took = step(tables, kind[person], state, rng)
        time = time + took
        seen = (state < LAPSED) & (time < days)
        rows.append((person[seen], time[seen], state[seen]))
        ended = state >= M
        stays = ~ended | (rng.random(len(person)) < tables.comes_back[kind[person], state])
        log_median, spread = tables.away[state[ended]].T
        time[ended] += np.maximum(1.0, np.exp(rng.normal(log_median, spread)))
        state[ended] = 0
        stays &= time < days
        person, time, state = person[stays], time[stays], state[stays]
    columns = (np.concatenate(part) for part in zip(*rows, strict=True))
    return pd.DataFrame(dict(zip(COLUMNS, columns, strict=True)))


def members(n_people: int, days: float, rng: np.random.Generator) -> tuple[pd.DataFrame, Array]:
    """Make the rows of the first `n_people` people who leave a row in the log, and the district of each.

    Returns
    -------
    rows : pandas.DataFrame
        `person` (0 to `n_people` - 1), `time` (microseconds from the log's start), `code`.
    district : ndarray of int, shape (n_people,)
    """
    lives = np.array([there for _, there in DISTRICTS.values()])
    decided = np.array([share for share, _ in DISTRICTS.values()])
    rows, districts, have = [], [], 0
    while have < n_people:
        n = min(PEOPLE_AT_ONCE, 2 * n_people)
        district = rng.choice(len(lives), size=n, p=lives)
        kind = np.where(rng.random(n) < decided[district], 0, 1)
        batch = live(kind, rng.uniform(-WARM_UP_DAYS, days, n), days, rng)
        batch = batch[batch["time"] >= 0]
        seen = np.unique(batch["person"])[: n_people - have]
        batch = batch[batch["person"].isin(seen)]
        rows.append(batch.assign(person=have + np.searchsorted(seen, batch["person"])))
        districts.append(district[seen])
        have += len(seen)
    table = pd.concat(rows, ignore_index=True)
    return table.assign(time=(table["time"] * DAY_US).astype("int64")), np.concatenate(districts)


def stamp_minutes(rows: pd.DataFrame) -> pd.DataFrame:
    """Cut the stamps of some states to whole minutes, unless a row would then precede the one it followed."""
    rows = rows.sort_values(["person", "time"], kind="stable", ignore_index=True)
    minute = rows["time"] // MINUTE_US * MINUTE_US
    coarse = rows["code"].isin([NAMES.index(name) for name in MINUTE_STAMPS])
    before = rows["time"].where(~coarse, minute).groupby(rows["person"]).shift()
    return rows.assign(time=rows["time"].where(~coarse | (minute < before), minute))


def volunteer_rows(first: int, days: float, rng: np.random.Generator) -> pd.DataFrame:
    """Make the rows of the volunteers, who try everything at any time; they are numbered from `first`."""
    n = int(VOLUNTEERS * VOLUNTEER_ROWS_PER_DAY * days)
    person = first + rng.integers(VOLUNTEERS, size=n)
    time = (rng.random(n) * days * DAY_US).astype("int64")
    return pd.DataFrame(dict(zip(COLUMNS, (person, time, rng.integers(1, LAPSED, size=n)), strict=True)))


def repeated_outcomes(rows: pd.DataFrame, days: float, rng: np.random.Generator) -> pd.DataFrame:
    """Send some outcomes a second time 1 to 40 minutes later (the next journey is at least a day away)."""
    ends = rows[rows["code"] >= M]
    ends = ends[rng.random(len(ends)) < REPEATED_OUTCOME_SHARE]
    again = ends.assign(time=ends["time"] + rng.integers(1, 41, size=len(ends)) * MINUTE_US)
    return again[again["time"] < days * DAY_US]


def blemish(log: pd.DataFrame, rng: np.random.Generator) -> pd.DataFrame:
    """Add the rows of `BLEMISHES` beside their models, then move a few rows to the end of the file."""
    parts = [log]
    blanks = {"no_member": "member", "no_event": "event", "no_time": "happened", "duplicate": None}
    for name, column in blanks.items():
        extra = log.iloc[rng.choice(len(log), size=round(BLEMISHES[name] * len(log) / 10_000), replace=False)]
        parts.append(extra if column is None else extra.assign(**{column: None}).astype(log.dtypes))
    # A copy sits next to its row, so that row order stays right also for rows without a time.
    log = pd.concat(parts).sort_index(kind="stable")
    # Where two rows of a member share a stamp, only their order tells which came first: these stay put.
    movable = np.flatnonzero(~log.duplicated(["member", "happened"], keep=False) & log["happened"].notna())
    late = rng.choice(movable, size=round(LATE_SHARE * len(log)), replace=False)
    return log.iloc[np.append(np.setdiff1d(np.arange(len(log)), late), late)]


def make_log(n_people: int, days: float, seed: int) -> pd.DataFrame:
    """Make the whole log.

    Parameters
    ----------
    n_people : int
        People with at least one row, the volunteers apart.
    days : float
        Length of the log.
    seed : int

    Returns
    -------
    pandas.DataFrame
        `member`, `happened`, `event`, `district`, `staff`, sorted by time but for a few late rows.
    """
    rng = np.random.default_rng(seed)
    rows, district = members(n_people, days, rng)
    rows = stamp_minutes(rows)
    rows = pd.concat([rows, repeated_outcomes(rows, days, rng), volunteer_rows(n_people, days, rng)])
    rows = rows.sort_values("time", kind="stable", ignore_index=True)
    district = np.append(district, rng.integers(len(DISTRICTS), size=VOLUNTEERS))
    number = rng.permutation(n_people + VOLUNTEERS) + 1
    width = max(5, len(str(number.size)))
    ids = np.array([f"P{i:0{width}d}" for i in number.tolist()])
    person = rows["person"].to_numpy()
    passed = rows["time"].to_numpy().astype("timedelta64[us]")
    log = pd.DataFrame(
        {
            "member": pd.Categorical.from_codes(person, categories=pd.Index(ids)),
            "happened": pd.Series(LOG_START + passed).dt.tz_localize("UTC"),
            "event": pd.Categorical.from_codes(rows["code"] - 1, categories=pd.Index(NAMES[1:LAPSED])),
            "district": pd.Categorical.from_codes(district[person], categories=pd.Index(list(DISTRICTS))),
            "staff": person >= n_people,
        }
    )
    return blemish(log, rng).reset_index(drop=True)


def to_arrow(log: pd.DataFrame) -> pa.Table:
    """Turn the log into an Arrow table of plain types: text, timestamp[us, UTC] and bool."""
    text, time = pa.string(), pa.timestamp("us", tz="UTC")
    kinds = {"member": text, "happened": time, "event": text, "district": text, "staff": pa.bool_()}
    table = pa.Table.from_pandas(log, preserve_index=False).replace_schema_metadata(None)
    return table.cast(pa.schema(list(kinds.items())))


def main(argv: list[str] | None = None) -> int:
    """Write the log, and `truth.json` beside it."""
    parser = argparse.ArgumentParser(description="Make the bicycle club's event log from its stated truth.")
    parser.add_argument("--people", type=int, default=9_400, help="people in the log (default 9400)")
    parser.add_argument("--days", type=int, default=240, help="length of the log in days (default 240)")
    parser.add_argument("--seed", type=int, default=20, help="seed of the random numbers (default 20)")
    beside = Path(__file__).with_name("club_log.parquet")
    parser.add_argument("--out", type=Path, default=beside, help="Parquet file to write")
    args = parser.parse_args(argv)
    if args.people < 1 or args.days < 1:
        parser.error(f"--people and --days must be at least 1, got {args.people} and {args.days}")
    args.out.parent.mkdir(parents=True, exist_ok=True)
    pq.write_table(to_arrow(make_log(args.people, args.days, args.seed)), args.out, compression="zstd")
    args.out.with_name("truth.json").write_text(json.dumps(truth(), indent=1) + "\n", encoding="utf-8")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
