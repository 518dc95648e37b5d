"""Ctrl-C and SIGTERM: one line, an exit code of their own, and nothing half written left behind."""

from __future__ import annotations

import signal
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from club_log import LOG, RULES

from journeys.command.main import main
from journeys.show import summary as show

CODES = [(signal.SIGINT, 130, "interrupted; "), (signal.SIGTERM, 143, "stopped by SIGTERM; ")]
SLEEPING = """
import sys, time
from journeys.command import main as command

def sleep(options):
    print("ready", flush=True)
    time.sleep(60)

command._audit = sleep
sys.exit(command.main(["audit", "log.parquet"]))
"""


@pytest.mark.parametrize(("number", "code", "said"), CODES)
def test_stopped_while_files_are_written(
    number: signal.Signals, code: int, said: str, tmp_path: Path, capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
) -> None:  # fmt: skip
    before = signal.getsignal(number)
    out = tmp_path / "out"
    seen: list[int] = []

    def asked_to_stop(*_: Any) -> None:
        seen.append(len(list(out.iterdir())))
        signal.raise_signal(number)

    monkeypatch.setattr(show, "write_csv", asked_to_stop)
    assert main(["summary", str(LOG), "--rules", str(RULES), "--out", str(out)]) == code
    assert seen[0] > 1
    assert list(out.iterdir()) == []
    ran = capsys.readouterr()
    assert ran.out == ""
    (line,) = [line for line in ran.err.splitlines() if not line.startswith(("INFO", "WARNING"))]
    assert line.startswith(f"ERROR {said}")
    assert signal.getsignal(number) is before


@pytest.mark.skipif(sys.platform == "win32", reason="signals are sent otherwise there")
@pytest.mark.parametrize(("number", "code", "said"), CODES)
def test_a_process_that_is_told_to_stop(number: signal.Signals, code: int, said: str) -> None:
    process = subprocess.Popen(
        [sys.executable, "-c", SLEEPING], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    assert process.stdout is not None
    assert process.stdout.readline() == "ready\n"
    process.send_signal(number)
    _, errors = process.communicate(timeout=60)
    assert process.returncode == code
    assert errors.startswith(f"ERROR {said}")
    assert len(errors.splitlines()) == 1


@pytest.mark.skipif(sys.platform == "win32", reason="there is no nohup there")
def test_a_signal_that_is_ignored_stays_so(tmp_path: Path) -> None:
    before = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        assert main(["tally", str(tmp_path / "none.parquet"), "--out", str(tmp_path / "tally.parquet")]) == 1
        assert signal.getsignal(signal.SIGINT) is signal.SIG_IGN
    finally:
        signal.signal(signal.SIGINT, before)
