"""The study of coverage runs, from processes of its own too, and counts what it should."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import study_coverage
from study_coverage import Asked, Task, answers, coverage, main, of_task, studied


def test_a_tiny_study(capsys: pytest.CaptureFixture[str]) -> None:
    words = ["--logs", "3", "--customers", "200", "--bootstrap", "1", "--truth-customers", "2000", "--lengths", "2"]
    assert main([*words, "--jobs", "1"]) == 0
    said = capsys.readouterr().out
    assert "3 logs of 200 customers, 2 silences long; truth: one log of 2,000" in said
    for name in ("conversion", "mean days", "q90 days", "F(10 d) of those who convert", "move basket to joined",
                 "within 10 d, by the log", "back, so far", "all moves together", "bootstrap"):  # fmt: skip
        assert name in said
    assert "move poster to poster" not in said


def test_logs_do_not_depend_on_who_reads_them() -> None:
    tasks = [Task(1, 2.0, number, 150, bootstrap=number == 0) for number in range(3)]
    apart = list(studied(tasks, 2))
    for one, other in zip(apart, studied(tasks, 1), strict=True):
        assert one.names == other.names
        np.testing.assert_array_equal(one.low, other.low)
    assert apart[1].value[0] != apart[2].value[0]
    assert len(apart[0].names) > len(apart[1].names)


def test_intervals_are_ordered() -> None:
    one = of_task(Task(5, 2.0, 0, 1_000, bootstrap=True))
    shown = np.isfinite(one.low).all(axis=1)
    assert shown.sum() > 40
    assert (one.low[shown] <= one.value[shown, None] + 1e-12).all()
    assert (one.value[shown, None] <= one.high[shown] + 1e-12).all()
    # wider at 95 % than at 90 %
    assert (one.low[shown, 0] <= one.low[shown, 1]).all()
    assert (one.high[shown, 0] >= one.high[shown, 1]).all()


def test_what_is_counted() -> None:
    """Four logs: the truth is held at 95 % by two of the three that are not flagged, at 90 % by one."""
    low = np.array([[0.1, 0.2], [0.3, 0.4], [0.6, 0.7], [0.1, 0.1]])
    asked = [
        Asked((("linearised", "conversion"),), np.array([0.5]), low[[i]], low[[i]] + 0.25, np.array([i == 3]))
        for i in range(4)
    ]
    table = coverage(answers(asked, {"conversion": 0.35})).set_index("level")
    assert table["logs"].tolist() == [3, 3]
    assert table["flagged %"].tolist() == [25.0, 25.0]
    assert table["coverage %"].tolist() == pytest.approx([200 / 3, 100 / 3])
    assert table["MC error"].tolist() == pytest.approx([100 * np.sqrt(2 / 27)] * 2)
    # the flagged one has an interval that holds the truth, at 95 % and at 90 %
    assert table["all %"].tolist() == [75.0, 50.0]
    assert table["mean width"].tolist() == pytest.approx([0.25, 0.25])


def test_moves_that_nobody_makes_are_left_out() -> None:
    none = np.array([[0.0, 0.0]])
    asked = [Asked((("linearised", "move a to b"),), np.zeros(1), none, none, np.array([False]))]
    assert not len(answers(asked, {"move a to b": 0.0}))
    assert len(answers(asked, {"move a to b": 0.1})) == len(study_coverage.LEVELS)
    assert isinstance(answers(asked, {"move a to b": 0.1}), pd.DataFrame)
