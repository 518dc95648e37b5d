"""The benchmark of removal effects runs, prints its figures, and its answers agree."""

from __future__ import annotations

import re

import bench_removal
import pytest


def test_it_prints_what_it_measured(capsys: pytest.CaptureFixture[str]) -> None:
    words = ["--states", "5", "--customers", "600", "--repeats", "1", "--redraws", "60"]
    assert bench_removal.main(words) == 0
    said = capsys.readouterr().out
    assert re.search(r"5 touchpoints: removal with intervals and order in 60 redraws [\d.]+ s", said)
    assert len(re.findall(r"ratio [\d.]+", said)) == 2
    found = re.search(
        r"largest difference of the effects (\S+); standard errors of redraws to ours, median (\S+)", said
    )
    assert found
    assert float(found[1]) < 1e-12
    assert 0.7 < float(found[2]) < 1.4
