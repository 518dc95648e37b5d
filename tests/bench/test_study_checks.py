"""The study of the checks runs, and counts what it should."""

from __future__ import annotations

import numpy as np
import pytest
from study_checks import ANY, BY_GROUP, PLAIN, TESTS, Task, main, of_task, rejected


def test_a_tiny_study(capsys: pytest.CaptureFixture[str]) -> None:
    words = ["--logs", "2", "--customers", "300", "--lengths", "3", "--process", "one step", "copied", "--jobs", "1"]
    assert main(words) == 0
    said = capsys.readouterr().out
    assert "2 logs of 300 customers, 3 silences long: % below 5 %" in said
    for name in ("one step", "copied", *TESTS, PLAIN, ANY):
        assert name in said


def test_a_log_of_its_own_each() -> None:
    first, again, other = (of_task(Task(1, "tempi", 3.0, number, 300, running=True)) for number in (0, 0, 1))
    assert first == again
    grouped = of_task(Task(1, "one step", 3.0, 0, 300, running=False, groups=True))
    assert np.isfinite([grouped[name] for name in BY_GROUP]).all()
    assert first["memory"] != other["memory"]


def test_what_is_counted() -> None:
    found = rejected([{"a": 0.01, "b": 0.2}, {"a": 0.5, "b": np.nan}, {"a": 0.04, "b": np.nan}])
    assert found["a"] == (pytest.approx(2 / 3), 1.0)
    assert found["b"] == (0.0, pytest.approx(1 / 3))
