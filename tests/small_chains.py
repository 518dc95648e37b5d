"""Known chains and small logs for the tests of fits and questions, and the few look-ups they all need."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa

import journeys as jn
from journeys.intake import identity
from journeys.results import Result

START = pd.Timestamp("2025-01-01T00:00:00Z")
ABSORBING = [f"b{x:02d}" for x in (1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 14, 15, 16)]


def known_chain(case: dict[str, Any]) -> tuple[jn.JourneyFit, list[str], list[str]]:
    """Return an absorbing reference chain as a fit, with its states and outcomes in the reference's order.

    The rows of absorbing states are taken out: in a known chain an outcome is a column without a row.
    """
    given, expected = case["input"], case["expected"]
    names = given["states"]
    absorbing = given["absorbing"]
    states = expected.get("transient_order") or [name for name in names if name not in absorbing]
    outcomes = expected.get("absorbing_order") or absorbing
    frame = pd.DataFrame(np.array(given["P"], dtype=float), index=names, columns=names)
    return jn.JourneyFit.from_matrix(frame.loc[states, [*states, *outcomes]]), states, outcomes


def ruin(p: float, a: int) -> pd.DataFrame:
    """Return the classical ruin problem: rows are capitals 1 to a - 1, columns these, "0" and str(a)."""
    z = np.arange(1, a)
    matrix = np.zeros((a - 1, a + 1))
    matrix[z - 1, np.where(z == 1, a - 1, z - 2)] += 1 - p
    matrix[z - 1, np.where(z == a - 1, a, z - 0)] += p
    names = [str(capital) for capital in z]
    return pd.DataFrame(matrix, index=names, columns=[*names, "0", str(a)])


def column(result: Result, value: str, names: str, order: Iterable[str], **where: str) -> np.ndarray:
    """Return the values of one column of a result, for the rows `where`, in the order of another column."""
    frame = result.to_frame()
    for key, wanted in where.items():
        frame = frame[frame[key] == wanted]
    return frame.set_index(names)[value].loc[list(order)].to_numpy(dtype=float)


def one(result: Result, value: str = "estimate", **where: str) -> Any:
    """Return one cell of a result."""
    frame = result.to_frame()
    for key, wanted in where.items():
        frame = frame[frame[key] == wanted]
    (found,) = frame[value].tolist()
    return found


def ids_of_distinct_buckets(n: int) -> list[int]:
    """Return customer ids of which no two share a bucket."""
    ids = np.arange(1, 20_000)
    keys, _ = identity.customer_keys(pa.array(ids))
    _, first = np.unique(identity.bucket_of(keys), return_index=True)
    return ids[np.sort(first)[:n]].tolist()


def log_of_paths(paths: Sequence[Sequence[str]], ids: Sequence[int], days: Sequence[Sequence[float]]) -> pd.DataFrame:
    """Return a log in which customer i goes through paths[i] at the times days[i] after the start."""
    rows = [
        (who, START + pd.Timedelta(days=day), event)
        for who, path, times in zip(ids, paths, days, strict=True)
        for event, day in zip(path, times, strict=True)
    ]
    return pd.DataFrame(rows, columns=["customer", "time", "event"]).sort_values("time", kind="stable")
