"""Words, streams and places that a command is given by mistake or by malice: one line, an exit code, nothing broken."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from importlib import import_module
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from journeys.command.main import main

ROOT = Path(__file__).resolve().parents[2]
RULES = 'customer = "who"\ntime = "when"\nevent = "what"\nconverted = ["joined"]\nsilence = "1d"\n'


@pytest.fixture
def place(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    when = pa.array([i * 30_000_000_000 for i in range(40)], pa.timestamp("us", "UTC"))
    log = pa.table({"who": [i % 9 for i in range(40)], "when": when, "what": ["é", "joined", "visit", "visit"] * 10})
    pq.write_table(log, tmp_path / "log.parquet")
    (tmp_path / "rules.toml").write_text(RULES + "complete_history = true\n")
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["audit", ""], "the path is empty"),
        (["tally", "log.parquet", "--rules", "rules.toml", "--out", ""], "the path is empty"),
        (["summary", "log.parquet", "--rules", "", "--out", "x"], "the path is empty"),
        (["audit", "odd\udcff.parquet"], "the path is not UTF-8"),
        (["audit", "log.parquet", "--\x1b[31mred\nline"], "unrecognized arguments"),
        (["\x1b[31mred"], "invalid choice"),
    ],
)
def test_wrong_words(place: Path, capsys: pytest.CaptureFixture[str], words: list[str], told: str) -> None:
    assert main(words) == 2
    out, error = capsys.readouterr()
    assert not out
    assert error.startswith("ERROR ")
    assert told in error
    assert error.count("\n") == 1
    assert "\x1b" not in error


def test_an_endless_name_is_told_in_a_short_line(place: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["audit", "a" * 100_000 + ".csv", "--rules", "rules.toml"]) == 1
    assert len(capsys.readouterr().err) < 5_000


def test_a_pipe_is_not_replaced(place: Path, capsys: pytest.CaptureFixture[str]) -> None:
    os.mkfifo(place / "pipe")
    assert main(["tally", "log.parquet", "--rules", "rules.toml", "--out", "pipe"]) == 1
    assert "is a pipe or a device, not a file" in capsys.readouterr().err
    assert not [path for path in place.iterdir() if path.name.endswith(".part")]


def test_memory_that_runs_out(
    place: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(*_: object, **__: object) -> None:
        raise MemoryError

    monkeypatch.setattr(import_module("journeys.tally.count"), "count_log", full)
    assert main(["tally", "log.parquet", "--rules", "rules.toml", "--out", "x"]) == 1
    assert capsys.readouterr().err == "ERROR there is not memory enough for this; nothing was written\n"


def process(*words: str, **options: object) -> subprocess.Popen[bytes]:
    env = os.environ | {"PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "ascii"}
    command = [sys.executable, "-m", "journeys", *words]
    return subprocess.Popen(command, env=env, stderr=subprocess.PIPE, **options)  # type: ignore[call-overload]


WORDS = ("audit", "log.parquet", "--rules", "rules.toml")


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="only Linux has a device that is always full")
def test_standard_output_that_is_full(place: Path) -> None:
    with Path("/dev/full").open("wb") as full:
        done = process(*WORDS, stdout=full)
        error = done.communicate(timeout=60)[1].decode()
    assert done.returncode == 1
    assert error.splitlines()[-1] == "ERROR standard output: No space left on device; files named above are whole"
    assert "Traceback" not in error


def test_standard_output_that_nobody_reads_or_that_lacks_signs(place: Path) -> None:
    done = process("summary", *WORDS[1:], "--out", "x", stdout=subprocess.PIPE)
    out, error = done.communicate(timeout=60)
    assert done.returncode == 0, error
    assert out.isascii()
    with process(*WORDS, stdout=subprocess.PIPE) as done:
        done.stdout.close()  # type: ignore[union-attr]
        error = done.stderr.read().decode()  # type: ignore[union-attr]
    assert done.returncode == 1
    assert error.splitlines()[-1].startswith("ERROR standard output: Broken pipe")
    assert "Traceback" not in error


def test_a_disk_that_is_full(place: Path) -> None:
    def small_files() -> None:
        import resource

        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        resource.setrlimit(resource.RLIMIT_FSIZE, (500, 500))

    done = process("tally", *WORDS[1:], "--out", "x.parquet", stdout=subprocess.PIPE, preexec_fn=small_files)
    error = done.communicate(timeout=60)[1].decode()
    assert done.returncode == 1
    assert error.count("ERROR") == 1
    assert "Traceback" not in error
    assert sorted(path.name for path in place.iterdir()) == ["log.parquet", "rules.toml"]
