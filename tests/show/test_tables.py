"""Names from the data can do no harm in a file or a page, and come back as they were."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest

from journeys.show.tables import cell_text, markdown_table, markdown_text, write_csv, write_parquet

FORMULAS = ["=cmd()", "=2+2", "+1", "-1", "@x", "\tx", "\rx", "\nx", "＝1", "＋1", "－1", "＠x"]
HARMLESS = [
    "joined",
    "a|b",
    "<script>alert(1)</script>",
    "two\nlines",
    "three\r\nlines",
    "old\rlines",
    "`code` ```fence```",
    "‏right to left‮",
    "x" * 10_000,
    "🚲👩‍🔧",
    'a "quoted", comma',
    "'already",
    " leading and trailing ",
    "NA",
    "null",
    "1e5",
    "\\",
]
NAMES = FORMULAS + HARMLESS


def test_csv_gives_names_back_up_to_the_apostrophe(tmp_path: Path) -> None:
    frame = pd.DataFrame({"state": NAMES, "estimate": np.arange(len(NAMES), dtype=float)})
    write_csv(frame, tmp_path / "names.csv")
    back = pd.read_csv(tmp_path / "names.csv", dtype={"state": str}, keep_default_na=False)
    assert back.state.tolist() == [f"'{name}" for name in FORMULAS] + HARMLESS
    assert back.estimate.tolist() == frame.estimate.tolist()


def test_no_row_of_a_csv_file_is_broken_in_two(tmp_path: Path) -> None:
    # After a bare carriage return some readers begin a row, and so a cell: it has to stand in quotes.
    write_csv(pd.DataFrame({"state": ["x\r=cmd()", "y"], "n": [1.0, np.nan]}), tmp_path / "names.csv")
    assert b'"x\r=cmd()",1' in (tmp_path / "names.csv").read_bytes()
    back = pd.read_csv(tmp_path / "names.csv")
    assert back.state.tolist() == ["x\r=cmd()", "y"]
    assert back.n.isna().tolist() == [False, True]


def test_no_cell_of_a_csv_file_begins_a_formula(tmp_path: Path) -> None:
    frame = pd.DataFrame({"=a()": FORMULAS, "n": range(len(FORMULAS))})
    write_csv(frame, tmp_path / "names.csv")
    back = pd.read_csv(tmp_path / "names.csv", dtype=str, keep_default_na=False)
    assert list(back) == ["'=a()", "n"]
    assert not [cell for cell in back["'=a()"] if cell[0] in "=+-@\t\r\n＝＋－＠"]


def test_negative_numbers_stay_numbers_in_csv(tmp_path: Path) -> None:
    write_csv(pd.DataFrame({"estimate": [-1.5, 0.1 + 0.2]}), tmp_path / "numbers.csv")
    assert (tmp_path / "numbers.csv").read_text(encoding="utf-8").split() == ["estimate", "-1.5", repr(0.1 + 0.2)]


def test_parquet_gives_names_back_as_they_were(tmp_path: Path) -> None:
    write_parquet(pd.DataFrame({"state": NAMES}), tmp_path / "names.parquet")
    assert pq.read_table(tmp_path / "names.parquet")["state"].to_pylist() == NAMES


@pytest.mark.parametrize("kind", ["csv", "parquet"])
def test_infinite_and_missing_numbers_are_blanks(tmp_path: Path, kind: str) -> None:
    frame = pd.DataFrame({"estimate": [1.0, np.inf, -np.inf, np.nan], "flag": ["", "infinite", "infinite", None]})
    path = tmp_path / f"numbers.{kind}"
    (write_csv if kind == "csv" else write_parquet)(frame, path)
    back = pd.read_csv(path, keep_default_na=True) if kind == "csv" else pd.read_parquet(path)
    assert back.estimate.isna().tolist() == [False, True, True, True]
    assert back.flag.fillna("").tolist() == ["", "infinite", "infinite", ""]
    assert np.isinf(frame.estimate).sum() == 2, "the caller's frame was changed"


@pytest.mark.parametrize("write", [write_csv, write_parquet])
def test_files_are_written_whole_or_not_at_all(tmp_path: Path, write: object) -> None:
    target = tmp_path / "there.file"
    target.write_text("old", encoding="utf-8")
    unwritable = pd.DataFrame({"estimate": [1.0], "state": pd.Series(["\ud800"], dtype=object)})
    with pytest.raises(UnicodeEncodeError, match="surrogates"):
        write(unwritable, target)  # type: ignore[operator]
    assert [path.name for path in tmp_path.iterdir()] == ["there.file"]
    assert target.read_text(encoding="utf-8") == "old"


@pytest.mark.parametrize("name", FORMULAS)
def test_cell_text_is_an_apostrophe_and_the_name(name: str) -> None:
    assert cell_text(name) == "'" + name


# --- Markdown ---------------------------------------------------------------------------------------------


def shown(markdown: str) -> str:
    """What a reader sees of escaped text: a backslash before punctuation is not shown."""
    return re.sub(r"\\([!-/:-@\[-`{-~])", r"\1", markdown)


def bare(markdown: str) -> str:
    """What is left of escaped text for Markdown to read as markup."""
    return re.sub(r"\\[!-/:-@\[-`{-~]", "", markdown)


@pytest.mark.parametrize("name", NAMES)
def test_markdown_shows_the_name_with_line_breaks_and_marks_as_spaces(name: str) -> None:
    text = markdown_text(name)
    assert shown(text) == "".join(char if char.isprintable() else " " for char in name)
    assert not set(bare(text)) & set("\\`*{}[]<>#|~&\n\r\t‏‮")


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("price_page", "price_page"),
        ("_loud_", r"\_loud\_"),
        ("&lt;b&gt;", r"\&lt;b\&gt;"),
        ("[x](http://example.org)", r"\[x\](http://example.org)"),
        ("a  b", "a  b"),
        ("\x1b[2J", r" \[2J"),
        ("\u2066left\u2069", " left "),
    ],
)
def test_markdown_text(name: str, text: str) -> None:
    assert markdown_text(name) == text


def test_markdown_table_keeps_its_cells_whatever_they_hold() -> None:
    table = markdown_table(pd.DataFrame({"a|b": NAMES, "n": [str(i) for i in range(len(NAMES))]}))
    lines = table.split("\n")
    assert len(lines) == len(NAMES) + 2
    cells = [[cell.strip() for cell in re.split(r"(?<!\\)(?:\\\\)*\|", line)[1:-1]] for line in lines]
    assert cells[0] == [r"a\|b", "n"]
    assert cells[1] == ["---", "---"]
    assert [row[1] for row in cells[2:]] == [str(i) for i in range(len(NAMES))]
    assert {len(row) for row in cells} == {2}


def test_only_columns_that_are_ours_keep_their_markup() -> None:
    frame = pd.DataFrame({"name": ["`x`"], "why": ["see `silence`"]})
    assert markdown_table(frame, ["why"]).endswith(r"| \`x\` | see `silence` |")
