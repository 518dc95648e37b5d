"""A source that can be read once, kept in a temporary file so that it can be looked at before it is counted."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pyarrow as pa

from journeys.intake.read import LogSource, open_log
from journeys.intake.rules import JourneyRules


@contextmanager
def spooled(log: LogSource, rules: JourneyRules) -> Iterator[LogSource]:
    """Give a source that can be read again and holds what `log` gives.

    Parameters
    ----------
    log : LogSource
        Read once, to its end.
    rules : JourneyRules
        Names the columns to keep.

    Yields
    ------
    LogSource
        Gone, with its file, when the block ends.
    """
    with tempfile.TemporaryDirectory(prefix="journeys-") as folder:
        path = Path(folder) / "log.arrow"
        writer: pa.RecordBatchFileWriter | None = None
        for batch in log.batches(rules.columns):
            if writer is None:
                writer = pa.ipc.new_file(str(path), batch.schema)
            writer.write_batch(batch)
        if writer is None:
            yield open_log(pa.table({name: pa.array([], pa.null()) for name in rules.columns}), rules.columns)
            return
        writer.close()
        yield open_log(path, rules.columns)
