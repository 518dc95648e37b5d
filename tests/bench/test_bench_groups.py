"""The benchmark of many groups runs and prints its figures."""

from __future__ import annotations

import re

import bench_groups
import pytest


def test_it_prints_what_it_measured(capsys: pytest.CaptureFixture[str]) -> None:
    assert bench_groups.main(["--customers", "400", "--groups", "4", "--repeats", "1"]) == 0
    said = capsys.readouterr().out
    assert re.search(r"[\d,]+ rows, 4 groups", said)
    assert len(re.findall(r"time: one fit \d+ ms .*; all groups \d+ ms, ratio [\d.]+ to the same tally", said)) == 2
