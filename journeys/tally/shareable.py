"""Counts that can be handed on: no buckets, rounded, nothing that describes only a few people."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from journeys import checks
from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at
from journeys.kernels.bins import DAY_US
from journeys.tally.accumulate import Columns, join_limbs
from journeys.tally.tables import N_BUCKETS

if TYPE_CHECKING:
    import pandas as pd

    from journeys.tally.tally import Tally

OTHER = "other"
_DIGITS = 2
# Which tables are handed on: what the second part of a row's name is, and the sum of times.
_TOLD = {"moves": ("next", "dwell"), "entries": (None, None), "journeys": ("outcome", "elapsed")}


@dataclass(frozen=True, eq=False)
class _Cells:
    """Cells of a table: their names, how many, days in all, and in which buckets of customers they were seen."""

    names: list[tuple[object, ...]]
    n: IntArray
    days: FloatArray
    seen: BoolArray

    @property
    def people(self) -> IntArray:
        """How many people a cell describes at least."""
        return np.asarray(self.seen.sum(axis=1), dtype=np.int64)

    def gathered(self, into: list[tuple[object, ...]]) -> _Cells:
        """Return cells of the new names, those of one name taken together."""
        names = sorted(set(into), key=str)
        place = {name: i for i, name in enumerate(names)}
        at = np.array([place[name] for name in into], np.int64)
        seen = np.zeros((len(names), N_BUCKETS), bool)
        np.logical_or.at(seen, at, self.seen)
        n = sum_at(at, self.n.astype(np.float64), len(names)).astype(np.int64)
        return _Cells(names, n, sum_at(at, self.days, len(names)), seen)


def shareable(tally: Tally, min_customers: int = 10) -> pd.DataFrame:
    """Return counts of a tally that can be handed on.

    Parameters
    ----------
    tally : Tally
        The counts.
    min_customers : int
        No row describes fewer people than this. The number of non-empty buckets of customers, which is a lower bound
        of the people, is what is held against it.

    Returns
    -------
    DataFrame
        One row per cell: `what` ("moves", "entries" or "journeys"), the group columns, `state`, `next_state` (of a
        journey its outcome, of an entry nothing), `n` rounded to a multiple of `min_customers`, and `mean_days` to two
        digits. Cells that describe too few people are gathered under "other", with the smallest of the others beside
        them where that is too few still, so that no subtraction brings them back; what cannot be gathered is left out.

    Raises
    ------
    ValueError
        If `min_customers` is not a whole number from 2 to 200.

    Notes
    -----
    Rounding and gathering make it hard to learn of one person from the table; they prove nothing against somebody who
    knows the other rows of the log, or holds two such tables of nearly the same log. What may be handed on is for the
    law where you work to say.

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> from journeys.tally.count import count_log
    >>> log = pd.DataFrame({"member": range(120), "event": ["visit"] * 117 + ["workshop"] * 3,
    ...                     "happened": pd.Timestamp("2025-03-01", tz="UTC")})
    >>> rules = JourneyRules("member", "happened", "event", silence="30d", log_start="2025-01-01", as_of="2025-06-01")
    >>> shareable(count_log(log, rules)).loc[lambda frame: frame.what == "moves", ["state", "next_state", "n"]]
       state next_state    n
    0  other      other  120
    """
    import pandas as pd

    least = checks.whole(min_customers, "min_customers", 2)
    if least > N_BUCKETS:
        msg = f"min_customers={least}; wanted at most {N_BUCKETS}, the number of buckets that people are counted by"
        raise ValueError(msg)
    by = tally.rules.by
    frames = []
    for what in _TOLD:
        cells = _hidden(_cells(tally, what), least)
        if not cells.names:
            continue
        frame = pd.DataFrame(cells.names, columns=[*by, "state", "next_state"])
        frame.insert(0, "what", what)
        frame["n"] = (cells.n + least // 2) // least * least
        frame["mean_days"] = [float(f"{days / n:.{_DIGITS}g}") for days, n in zip(cells.days, cells.n, strict=True)]
        if what == "entries":
            frame["mean_days"] = np.nan
        frames.append(frame)
    if not frames:
        return pd.DataFrame(columns=["what", *by, "state", "next_state", "n", "mean_days"])
    return pd.concat(frames, ignore_index=True)


def _cells(tally: Tally, what: str) -> _Cells:
    """Return the cells of a table, its other keys added up."""
    table: Columns = getattr(tally, what)
    second, time = _TOLD[what]
    labels = tally.labels
    group = table["group"].astype(np.int64) if tally.rules.by else np.zeros(len(table["n"]), np.int64)
    to = table[second].astype(np.int64) if second else np.zeros(len(table["n"]), np.int64)
    state = table["state"].astype(np.int64)
    keys, at = np.unique(np.stack([group, state, to]), axis=1, return_inverse=True)
    seen = np.zeros((keys.shape[1], N_BUCKETS), bool)
    seen[at, table["bucket"]] = True
    names = [
        (*(tally.groups[g] if tally.rules.by else ()), labels[s], labels[t] if second else "")
        for g, s, t in keys.T.tolist()
    ]
    days = join_limbs(table, time) / DAY_US if time else np.zeros(len(table["n"]))
    n = sum_at(at, table["n"].astype(np.float64), keys.shape[1]).astype(np.int64)
    return _Cells(names, n, sum_at(at, days, keys.shape[1]), seen)


def _hidden(cells: _Cells, least: int) -> _Cells:
    """Gather what describes too few: within its state, then within its group, then over the groups."""
    depth = len(cells.names[0]) if cells.names else 0
    for level in range(depth - 1, -1, -1):
        parents: dict[tuple[object, ...], list[int]] = {}
        for i, name in enumerate(cells.names):
            parents.setdefault(name[:level], []).append(i)
        into = list(cells.names)
        for parent, children in parents.items():
            for i in _too_small(cells, np.array(children), level, least):
                into[i] = (*parent, *[OTHER] * (depth - level))
        cells = cells.gathered(into)
    keep = cells.people >= least
    return replace(
        cells, names=[name for name, kept in zip(cells.names, keep, strict=True) if kept], n=cells.n[keep],
        days=cells.days[keep], seen=cells.seen[keep],
    )  # fmt: skip


def _too_small(cells: _Cells, rows: IntArray, level: int, least: int) -> list[int]:
    """Return the cells of one parent that have to be taken together: whole branches that hold a small cell."""
    branches: dict[object, list[int]] = {}
    for row in rows.tolist():
        branches.setdefault(cells.names[row][level], []).append(row)
    smallest = {name: int(cells.people[part].min()) for name, part in branches.items()}
    size = {name: int(cells.seen[part].any(axis=0).sum()) for name, part in branches.items()}
    # A branch gathered before stays with the others that are.
    hidden = [name for name in branches if smallest[name] < least or (name == OTHER and len(branches) > 1)]
    if not any(smallest[name] < least for name in hidden):
        return []
    rest = sorted((name for name in branches if name not in hidden), key=lambda name: size[name])
    # With one alone, or too few together, the next smallest goes along: else the total would tell what they are.
    while rest and (len(hidden) == 1 or _people(cells, [branches[name] for name in hidden]) < least):
        hidden.append(rest.pop(0))
    return [row for name in hidden for row in branches[name]]


def _people(cells: _Cells, parts: list[list[int]]) -> int:
    return int(cells.seen[[row for part in parts for row in part]].any(axis=0).sum())
