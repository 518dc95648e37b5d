"""A table of a tally with names in place of codes."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.kernels.histories import slot
from journeys.kernels.records import FIRST_OUTCOME
from journeys.tally.accumulate import Columns, exact_limbs
from journeys.tally.tables import CODED, FLAGS, HISTORY, NO_STATE, TABLES

if TYPE_CHECKING:
    import pandas as pd

    from journeys.tally.tally import Tally


def named_table(tally: Tally, name: str) -> pd.DataFrame:
    """Return one table with names in place of codes (see `Tally.table`)."""
    import pandas as pd

    if name not in TABLES:
        msg = f"table {name!r} is not known; wanted one of {', '.join(TABLES)}"
        raise ValueError(msg)
    columns: Columns = getattr(tally, name)
    labels = np.array(tally.labels, dtype=object)
    behind = np.array(["entry", "unknown", *tally.labels[FIRST_OUTCOME:]], dtype=object)
    frame: dict[str, Any] = {}
    for column, values in columns.items():
        if column.endswith("_high"):
            total = column.removesuffix("_high")
            frame[total] = pd.Series(exact_limbs(columns, total), dtype=object)
        elif column.endswith("_low"):
            continue
        elif column in CODED:
            nothing = NO_STATE.get((name, column), labels[0])
            frame[column] = np.where(values == 0, nothing, (behind if column == "previous" else labels)[values])
        elif column in HISTORY.values():
            first = 1 + (column == "earlier")
            for which in range(tally.order - 1):
                frame[f"previous_{first + which}"] = behind[slot(values, which)]
        elif column == "group":
            for i, name_of_part in enumerate(tally.rules.by):
                frame[name_of_part] = np.array([group[i] for group in tally.groups], dtype=object)[values]
        else:
            frame[column] = values.astype(bool) if column in FLAGS else values
    return pd.DataFrame(frame)
