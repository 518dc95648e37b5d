"""The benchmark of the resamples runs, and all three ways give the same answers."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
from bench_resampling import check, made
from figures import Figures

BENCH = Path(__file__).resolve().parent / "bench_resampling.py"


def test_the_table_prints_and_answers_agree(tmp_path: Path) -> None:
    figures = tmp_path / "figures.json"
    sizes = ("--states", "6", "--customers", "600", "--resamples", "40", "--repeats", "1", "--few", "4")
    words = [sys.executable, str(BENCH), *sizes, "--json", str(figures)]
    done = subprocess.run(words, capture_output=True, text=True, timeout=300)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "| what | wanted | measured | reached |" in done.stdout
    told = json.loads(figures.read_text(encoding="utf-8"))
    assert len(told["answers"]) == 4
    assert all(same for _, same in told["answers"])
    measured = {what: (wanted, reached) for what, wanted, _, reached in told["rows"]}
    for against, wanted in (("the loop on arrays", "≥ 5 ×"), ("the public calls", "≥ 30 ×")):
        (row,) = [row for what, row in measured.items() if what.endswith(f"against {against}") and row[0]]
        assert row[0] == wanted
        assert row[1] in ("yes", "no")


def test_an_answer_that_differs_is_told() -> None:
    case, figures = made(5, 500, 20), Figures()
    check(case, figures)
    assert [same for _, same in figures.answers] == [True] * 4
    loops = [case.arrays(b) for b in range(2)]
    object.__setattr__(case, "arrays", lambda b: (loops[b][0], loops[b][1] * (1 + 1e-6)))
    wrong = Figures()
    check(case, wrong)
    assert [same for _, same in wrong.answers] == [False, True] * 2
    assert np.isfinite(loops[0][0]).any()
