"""The benchmark of large chains runs, its answers agree, and it says so where a peer is missing."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

from bench_large_chain import Bench
from figures import Figures, report
from measure import Cost

BENCH = Path(__file__).resolve().parent / "bench_large_chain.py"


def test_the_table_prints_and_answers_agree(tmp_path: Path):
    figures = tmp_path / "figures.json"
    # an interpreter that surely has no deeptime: isolated, without site-packages
    bare = tmp_path / "python"
    bare.write_text(f'#!/bin/sh\nexec "{sys.executable}" -I -S "$@"\n', encoding="utf-8")
    bare.chmod(0o755)
    words = ["--states", "900", "--full", "300", "--directions", "7", "--repeats", "1", "--peer", str(bare)]
    done = subprocess.run([sys.executable, str(BENCH), *words, "--json", str(figures)], capture_output=True, text=True,
                          timeout=300, check=False)  # fmt: skip
    assert done.returncode == 0, done.stdout + done.stderr
    assert "| what | wanted | measured | reached |" in done.stdout
    assert "deeptime is not installed" in done.stdout
    told = json.loads(figures.read_text(encoding="utf-8"))
    assert told["answers"] == [["300 states: ours and a full matrix", True]]
    measured = {what: (wanted, reached) for what, wanted, _, reached in told["rows"]}
    speed = measured["first passage on 900 states, to a full matrix scaled from 300 by 27: speed"]
    assert speed[0] == "≥ 100 ×"
    assert speed[1] in ("yes", "no")
    assert sum(wanted == "≤ 1 GiB" and reached == "yes" for wanted, reached in measured.values()) == 2


def test_answers_that_differ_are_told():
    found = Figures()
    bench = Bench(2, 1, 1, sys.executable, found)
    costs = [Cost(1.0, 1.0, 1.0, json.dumps({"seconds": 1.0, "answers": {"mean": [x]}})) for x in (1.0, 1.0, 1.001)]
    bench.agree("right", costs[0], costs[1], ("mean",))
    bench.agree("wrong", costs[0], costs[2], ("mean",))
    assert found.answers == [("right", True), ("wrong", False)]
    assert report({}, found).count("| DIFFER |") == 1
