"""The study of coverage runs, in processes of its own too, goes on where it was stopped, and counts what it should."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import study_coverage
from coverage_questions import Asked
from study_coverage import BEGIN, END, GUIDE, Task, answers, coverage, main, of_task, studied, told, write

NAME = ("outcomes", "probability", "entry")


@pytest.fixture(scope="module")
def one() -> Asked:
    return of_task(Task(5, 3.0, 0, 1_000, bootstrap=True))


def test_a_tiny_study(capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    guide, kept = tmp_path / "guide.md", tmp_path / "kept"
    guide.write_text(f"before\n{BEGIN}\nold\n{END}\nafter\n")
    words = ["--customers", "200", "--bootstrap", "1", "--truth-customers", "1000", "--lengths", "3", "--jobs", "1"]
    assert main([*words, "--logs", "1", "--keep", str(kept)]) == 0
    first = kept.read_bytes()
    assert main([*words, "--logs", "2", "--keep", str(kept), "--write", str(guide)]) == 0
    assert kept.read_bytes().startswith(first)
    assert len(kept.read_bytes()) > len(first)
    said = capsys.readouterr().out
    text = guide.read_text()
    assert text.startswith(f"before\n{BEGIN}\n2 logs of 200 customers of two kinds, 3 silences long")
    assert text.endswith(f"\n{END}\nafter\n")
    assert "old" not in text
    for name in ("| moves |", "| first_passage, time |", "| return_time, restart |", "| comeback |", "| worth |",
                 "| compare, groups |", "| removal |", "share_in_log", "| credit |", "resampled |"):  # fmt: skip
        assert name in text
        assert name in said


def test_the_guide_has_the_two_marks() -> None:
    text = GUIDE.read_text(encoding="utf-8")
    assert text.count(BEGIN) == text.count(END) == 1


def test_a_file_without_marks_stays_as_it_is(tmp_path: Path) -> None:
    (tmp_path / "a.md").write_text("mine")
    with pytest.raises(SystemExit, match="wanted the marks"):
        write("table", tmp_path / "a.md")
    assert (tmp_path / "a.md").read_text() == "mine"


def test_logs_do_not_depend_on_who_reads_them() -> None:
    tasks = [Task(1, 3.0, number, 200, bootstrap=number == 0) for number in range(2)]
    apart = [one for _, one in studied(tasks, 2)]
    for one, (_, other) in zip(apart, studied(tasks, 1), strict=True):
        assert one.names == other.names
        np.testing.assert_array_equal(one.low, other.low)
    assert len(apart[0].names) > len(apart[1].names)
    assert apart[0].value[:10].tolist() != apart[1].value[:10].tolist()


def test_every_public_question_is_asked_once(one: Asked) -> None:
    assert len(set(one.names)) == len(one.names)
    asked = {name.partition(",")[0].partition(" ")[0] for name, _, _ in one.names}
    assert asked == {
        "moves", "outcomes", "first_passage", "return_time", "comeback", "passage_curve", "time_to_convert", "stages",
        "removal", "credit", "sensitivity", "worth", "compare",
    }  # fmt: skip


def test_intervals_are_ordered(one: Asked) -> None:
    shown = np.isfinite(one.low) & np.isfinite(one.high) & np.isfinite(one.value)
    assert shown.sum() > 400
    # a difference of two integers that a quantile in steps is may lie at the edge
    assert (one.low[shown] <= one.value[shown] + 1e-9).all()
    assert (one.value[shown] <= one.high[shown] + 1e-9).all()


def test_what_is_counted() -> None:
    """Four logs: the truth is held by two of the three that are not flagged, and by the one that is."""
    asked = [
        Asked((NAME,), np.array([low + 0.1]), np.array([low]), np.array([low + 0.25]), np.array([low == 0.101]),
              np.array([False]))
        for low in (0.1, 0.3, 0.6, 0.101)
    ]  # fmt: skip
    row = coverage(answers(asked, {NAME: 0.35})).iloc[0]
    assert (row["question"], row["measure"], row["answers"], row["logs"]) == ("outcomes", "probability", 1, 4)
    assert row["truth"] == (0.35, 0.35)
    assert row["flagged"] == 25.0
    assert row["coverage"] == pytest.approx(200 / 3)
    assert row["error"] == pytest.approx(100 * np.sqrt(2 / 27))
    assert row["all"] == 75.0
    values = np.array([0.2, 0.4, 0.7, 0.201])
    assert row["bias"] == pytest.approx((values.mean() - 0.35) / values.std(ddof=1))
    assert np.isnan(row["lowest"])  # of too few logs to tell of single answers
    assert "| outcomes | probability | 1 | 4 | 0.35 | 66.7 ± 27.2 |  | 25 | +0.11 |" in told({3.0: coverage(
        answers(asked, {NAME: 0.35}))})  # fmt: skip


@pytest.mark.parametrize("truth", [{}, {NAME: np.inf}, {NAME: 0.0}])
def test_answers_without_a_truth_to_hold_are_left_out(truth: dict[tuple[str, str, str], float]) -> None:
    none = np.array([0.0])
    asked = [Asked((NAME,), none, none, none + 1, np.array([False]), np.array([False]))]
    assert not len(answers(asked, truth))
    assert len(answers(asked, {NAME: 0.1})) == 1
    assert study_coverage.ENOUGH > 1


def test_what_is_known_is_left_out() -> None:
    half = np.array([0.5])
    assert not len(answers([Asked((NAME,), half, half, half, np.array([False]), np.array([True]))], {NAME: 0.5}))
