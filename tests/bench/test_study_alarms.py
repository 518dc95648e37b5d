"""The study of the change alarms runs, counts what it should, and looks at the weeks that more nights look at."""

from __future__ import annotations

import pytest
from study_alarms import CHANGE_WEEK, Found, Task, changed, main, of_task, steady


def test_a_tiny_study(capsys: pytest.CaptureFixture[str]) -> None:
    words = ["--logs", "1", "--customers", "1500", "--silences", "2", "--groups", "2", "--jobs", "1"]
    assert main(words) == 0
    said = capsys.readouterr().out
    assert "1 logs, steady, 2 groups; nominal 1 % of the weeks" in said
    assert "conversion trips in the first week" in said


def test_all_weeks_at_once_are_more_nights() -> None:
    task = Task(3, 0, 14_000, 3.2, 1, changed=True)
    found = of_task(task)
    assert found == of_task(task, (0, 1, 4, 9, 11, 12))
    # 96 days: eleven whole weeks were followed for two more by then, the first two are compared with nothing.
    assert found.n_weeks == 9
    assert found.conversion == {CHANGE_WEEK}


def test_what_is_counted() -> None:
    some = [Found(8, {3: 0.004, 5: 0.02}, set(), set()), Found(12, {}, {4}, {CHANGE_WEEK})]
    told = steady(some)
    assert told["weeks looked at"] == "20"
    assert told["weeks in which a share trips"].startswith("2 of 20, 10.00 ")
    assert told["the same, by a point or more"].startswith("1 of 20, ")
    assert told["logs in which a share trips"].startswith("1 of 2, ")
    assert told["weeks in which an event does"].startswith("1 of 20, ")
    assert changed(some)["conversion trips in the first week"].startswith("1 of 2, ")
