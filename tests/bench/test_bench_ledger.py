"""The programs that measure and try a ledger run, and find what they look for."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

BENCH = Path(__file__).resolve().parent


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["bench_ledger.py", "--rows", "9000", "--customers", "300", "--night", "300", "--repeats", "1"], "| agree |"),
        (["study_cut_off.py", "--kills", "1"], "1 killed, ledger"),
        (["study_damage.py", "--flips", "4"], "0 not told"),
    ],
)
def test_programs_run(words: list[str], said: str):
    done = subprocess.run(
        [sys.executable, str(BENCH / words[0]), *words[1:]], capture_output=True, text=True, timeout=300
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert said in done.stdout
    assert "WRONG" not in done.stdout
    assert "DIFFER" not in done.stdout
