"""The benchmark of the curve runs and prints its figures."""

from __future__ import annotations

import re

import bench_curve
import pytest

from journeys.questions import quantiles


def test_it_prints_what_it_measured(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    for name in ("TIME_WORK", "STEP_WORK"):
        monkeypatch.setattr(quantiles, name, getattr(quantiles, name))  # the benchmark lifts both
    assert bench_curve.main(["--states", "4", "--customers", "400", "--repeats", "1", "--growth", "3"]) == 0
    said = capsys.readouterr().out
    assert re.search(r"4 states, [\d,]+ cells: solves alone [\d.]+ s, curve with bands [\d.]+ s, ratio [\d.]+", said)
    assert said.count("from every start with intervals, 3 states") == 2
    error = re.search(r"largest error against closed forms (\S+)", said)
    assert error
    assert float(error[1]) <= 1e-4
