"""The table of all figures: parts are run, read and replaced, and what could not be measured is said."""

from __future__ import annotations

from pathlib import Path

import all_figures
import pytest
from all_figures import BEGIN, END, PARTS, Kept, Part, Row, coverage, main, old_rows, reported, written
from figures import Figures, report

EMPTY = f"# A guide\n\n{BEGIN}\n{END}\n\nMore.\n"


def test_the_quick_parts_run_and_the_rest_of_the_table_stays(tmp_path: Path) -> None:
    path = tmp_path / "guide.md"
    path.write_text(EMPTY, encoding="utf-8")
    assert main(["--small", "--table", str(path), "--only", "curve"]) == 0
    first = old_rows(path.read_text(encoding="utf-8"))
    assert [row.part for row in first] == ["curve", "curve"]
    assert [(row.row.wanted, row.row.reached) for row in first][1] == ("≤ 0.0001", "yes")
    assert main(["--small", "--table", str(path), "--only", "removal"]) == 0
    text = path.read_text(encoding="utf-8")
    # the order is that of the parts, whatever was run first
    assert [row.part for row in old_rows(text)] == ["removal", "curve", "curve"]
    assert old_rows(text)[1:] == first
    assert text.startswith("# A guide\n\n<!--")
    assert text.endswith("-->\n\nMore.\n")
    assert text.count("- machine 1: processor") == 1


def test_a_row_is_written_and_read_back() -> None:
    rows = [
        Kept(part.name, Row(f"what {i}", "", f"{i} ×", ""), "2025-01-01, load 0.1", f"kind {i % 2}")
        for i, part in enumerate(PARTS)
    ]
    assert old_rows(written(rows[::-1])) == rows
    assert written(rows).count("- machine ") == 2


def test_what_a_program_reports_is_read() -> None:
    found = Figures()
    found.compare("speed", 3.0, least=2.0)
    found.compare("memory", 3.0, most=2.0)
    found.compare("not asked for", 1.0)
    found.rows.append(("against polars", "", "not installed", ""))
    assert reported(report({}, found)) == [
        Row("speed", "≥ 2 ×", "3 ×", "yes"), Row("memory", "≤ 2 ×", "3 ×", "no"),
        Row("against polars", "", "not installed", ""),
    ]  # fmt: skip
    said = "2 silences: at 95 % answers that are not flagged are held in 92.9–96.0 %\n"
    assert [row.reached for row in coverage(said + said.replace("answers", "single moves"))] == ["no", "no"]
    assert [row.reached for row in coverage(said.replace("92.9", "93.0"))] == ["yes"]


def test_what_fails_is_told(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "guide.md"
    path.write_text(EMPTY, encoding="utf-8")
    silent = all_figures.sought(all_figures.Sought(r"ratio (\d+)", "a ratio", "≥", 2.0))
    bad = [Part("curve", 1, "bench_curve.py", "--nonsense", "--nonsense", reported),
           Part("import", 1, "", "json.tool --help", "json.tool --help", silent)]  # fmt: skip
    monkeypatch.setattr(all_figures, "PARTS", bad)
    assert main(["--small", "--table", str(path)]) == 1
    told = {row.part: row.row for row in old_rows(path.read_text(encoding="utf-8"))}
    assert "unrecognized arguments: --nonsense" in told["curve"].measured
    assert told["import"].measured.startswith("failed: nothing like")


def test_tiny_logs_do_not_get_into_the_guide(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit):
        main(["--small"])
    assert "--table" in capsys.readouterr().err
    with pytest.raises(ValueError, match="has no table to write into"):
        all_figures.replaced("nothing here", [])
    assert main(["--list"]) == 0
    listed = capsys.readouterr().out
    assert [part.name for part in PARTS if f"| {part.name} | {part.minutes:g} |" not in listed] == []


def test_the_guide_has_its_place_for_the_table() -> None:
    text = all_figures.GUIDE.read_text(encoding="utf-8")
    assert text.count(BEGIN) == text.count(END) == 1
    assert {row.part for row in old_rows(text)} <= {part.name for part in PARTS}
