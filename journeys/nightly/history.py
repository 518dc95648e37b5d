"""The growing table of headline numbers: one row for each run, and for each group in it."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.checks import instant_text
from journeys.errors import StoreError
from journeys.files import written_whole
from journeys.nightly.manifest import Generation
from journeys.questions.few_people import FewPeople
from journeys.questions.overview import Overview
from journeys.questions.plain_count import PlainCount, plain_count
from journeys.questions.time_to_convert import IN_THE_END
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    import pandas as pd

# What a row is about, what was counted, and what is expected, each share and time with its interval.
STAMPS = ("generation", "run", "as_of", "rules", "by", "group")
COUNTS = ("n_people", "n_journeys", "n_undecided", "n_converted")
MEASURES = {"converted": "expected", "median_days": "median_days"}
BOUNDS = ("", "_low", "_high")
FLAG = "flag"
COLUMNS = (*STAMPS, *COUNTS, *(f"{name}{bound}" for name in MEASURES.values() for bound in BOUNDS), FLAG)


def history_rows(
    generation: Generation, tally: Tally, plain: PlainCount, overview: Overview | None, why: str | None,
    few: FewPeople | None = None,
) -> list[dict[str, Any]]:
    """Return the rows of one run: all customers together first, then each group of each column.

    Parameters
    ----------
    generation : Generation
    tally : Tally
    plain : PlainCount
        Of the tally.
    overview : Overview or None
        None: counts only.
    why : str or None
        Why there are counts only.
    few : FewPeople or None
        What describes too few people to be told; of all customers together `plain` leaves it out already.
    """
    stamps: dict[str, Any] = {
        "generation": generation.number, "run": generation.run, "as_of": instant_text(generation.as_of_us),
        "rules": generation.rules, "by": "", "group": "",
    }  # fmt: skip
    found = [stamps | _counts(plain) | _estimates(None if overview is None else overview.conversion.to_frame(), why)]
    for column in () if overview is None else tally.rules.by:
        frame = overview.groups[column].to_frame()  # type: ignore[union-attr]
        for (value,), part in tally.split(column).items():
            counts = _counts(plain_count(part)) | ({} if few is None else dict.fromkeys(_left_out(few, column, value)))
            # How many people a group has is known for the whole only.
            row = stamps | {"by": column, "group": str(value)} | counts | {"n_people": None}
            found.append(row | _estimates(frame[frame[column] == value], why))
    return found


def write_history(path: Path, rows: list[dict[str, Any]], generation: int) -> None:
    """Add rows to a table, in place of any of the same generation.

    Raises
    ------
    StoreError
        If the table is there and cannot be read.
    """
    import pandas as pd

    frame = pd.DataFrame(rows, columns=list(COLUMNS)).astype(dict.fromkeys(COUNTS, "Int64"))
    if path.exists():
        before = read_history(path)
        before = before[before.generation != generation]
        frame = pd.concat([before, frame], ignore_index=True) if len(before) else frame
    with written_whole(path) as part:
        frame.to_parquet(part, index=False)


def read_history(path: Path) -> pd.DataFrame:
    """Return the table of headline numbers.

    Raises
    ------
    StoreError
        If it is no whole table of that kind.
    """
    import pandas as pd
    import pyarrow as pa

    try:
        return pd.read_parquet(path)[list(COLUMNS)]
    except (pa.ArrowException, OSError, ValueError, KeyError):
        msg = f"{path} is not a whole table of headline numbers; put it back from a copy, or move it out of the way"
        raise StoreError(msg) from None


def _counts(plain: PlainCount) -> dict[str, int | None]:
    found = {name: getattr(plain, name) for name in COUNTS}
    return {name: None if math.isnan(n) else n for name, n in found.items()}


def _left_out(few: FewPeople, column: str, value: Any) -> list[str]:
    """Return the counts of a group that are not told."""
    hidden = few.groups[column]
    return [
        *(COUNTS if few.log or value in hidden.size else ()),
        *(["n_converted"] if value in hidden.conversion else ()),
        *(["n_undecided"] if value in hidden.undecided else ()),
    ]


def _estimates(frame: pd.DataFrame | None, why: str | None) -> dict[str, Any]:
    """Return what is expected in the end, with intervals; infinite numbers are left out, as their flag says."""
    row: dict[str, Any] = {f"{name}{bound}": np.nan for name in MEASURES.values() for bound in BOUNDS}
    row[FLAG] = why or ""
    if frame is None:
        return row
    for measure, name in MEASURES.items():
        found = frame[(frame.measure == measure) & (frame.horizon == IN_THE_END)]
        for _, one in found.iterrows():
            values = [one.estimate, one.low, one.high]
            row |= {
                f"{name}{bound}": float(value) if np.isfinite(value) else np.nan
                for bound, value in zip(BOUNDS, values, strict=True)
            }
            if measure == "converted":
                row[FLAG] = one.flag
    return row
