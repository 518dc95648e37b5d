"""Frames as files and as Markdown tables; names from the data can do no harm in either."""

from __future__ import annotations

import csv
import os
import re
from collections.abc import Collection
from typing import TYPE_CHECKING

import numpy as np

from journeys.files import written_whole
from journeys.results import printable

if TYPE_CHECKING:
    import pandas as pd

# What a spreadsheet takes for the beginning of a formula.
# The wide forms stand for the narrow ones in some languages' spreadsheets.
_FORMULA = ("=", "+", "-", "@", "\t", "\r", "\n", "\uff1d", "\uff0b", "\uff0d", "\uff20")


def file_frame(frame: pd.DataFrame) -> pd.DataFrame:
    """Return a frame fit for a file: infinite numbers blank (their flag says so), text columns plain text.

    Parameters
    ----------
    frame : DataFrame
        Tidy estimates.

    Returns
    -------
    DataFrame
        A copy.
    """
    from pandas.api.types import is_float_dtype, is_numeric_dtype

    out = frame.copy()
    for name in out.columns:
        column = out[name]
        if is_float_dtype(column):
            out[name] = column.where(np.isfinite(column))
        elif not is_numeric_dtype(column):
            out[name] = column.astype("object").where(column.notna(), "").astype(str)
    return out


def write_parquet(frame: pd.DataFrame, path: str | os.PathLike[str]) -> None:
    """Write a frame to a Parquet file, whole or not at all."""
    with written_whole(path) as part:
        file_frame(frame).to_parquet(part, index=False)


def write_csv(frame: pd.DataFrame, path: str | os.PathLike[str]) -> None:
    """Write a frame to a CSV file; text that a spreadsheet would run as a formula gets an apostrophe in front."""
    from pandas.api.types import is_numeric_dtype

    out = file_frame(frame)
    for name in out.columns:
        if not is_numeric_dtype(out[name]):
            out[name] = out[name].map(cell_text)
    out = out.rename(columns=cell_text)
    # A bare carriage return would end the row for many readers, and not every writer puts it in quotes.
    texts = [name for name in out.columns if not is_numeric_dtype(out[name])]
    returns = any("\r" in cell for name in texts for cell in (name, *out[name].unique()))
    with written_whole(path) as part:
        out.to_csv(part, index=False, quoting=csv.QUOTE_NONNUMERIC if returns else csv.QUOTE_MINIMAL)


def cell_text(text: str) -> str:
    """Return text that a spreadsheet shows as text.

    Examples
    --------
    >>> cell_text("=2+2"), cell_text("joined")
    ("'=2+2", 'joined')
    """
    return f"'{text}" if text.startswith(_FORMULA) else text


def markdown_table(frame: pd.DataFrame, ours: Collection[str] = ()) -> str:
    r"""Return a frame as a Markdown table.

    Parameters
    ----------
    frame : DataFrame
        Text and numbers as they shall be read.
    ours : collection of str
        Columns whose text is the package's own, Markdown already: left as it is.

    Returns
    -------
    str

    Examples
    --------
    >>> import pandas as pd
    >>> print(markdown_table(pd.DataFrame({"state": ["a|b"], "n": ["3"]})))
    | state | n |
    |---|---|
    | a\|b | 3 |
    """
    rows = [
        [str(cell) if name in ours else markdown_text(str(cell)) for name, cell in zip(frame.columns, row, strict=True)]
        for row in frame.to_numpy(dtype=object)
    ]
    head = "| " + " | ".join(markdown_text(str(name)) for name in frame.columns) + " |"
    rule = "|" + "---|" * len(frame.columns)
    return "\n".join([head, rule, *("| " + " | ".join(row) + " |" for row in rows)])


def markdown_text(text: str) -> str:
    r"""Return text that Markdown shows as it is: markup escaped, line breaks and control characters as spaces.

    Examples
    --------
    >>> markdown_text("<b>*x*")
    '\\<b\\>\\*x\\*'
    """
    # An underscore inside a word is no markup, and names are full of them.
    return re.sub(r"[\\`*{}\[\]<>#|~&]|(?<![^\W_])_|_(?![^\W_])", r"\\\g<0>", printable(text))
