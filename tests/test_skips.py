"""Where CI=true, a skip is a failure unless it names a missing optional engine."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

CONFTEST = Path(__file__).resolve().parent / "conftest.py"
RUNS = "def test_runs():\n    assert 1 + 1 == 2\n"
SKIPS = "import pytest\ndef test_skips():\n    pytest.skip({reason!r})\n"
MARKED = "import pytest\n@pytest.mark.skip(reason={reason!r})\ndef test_skips():\n    raise RuntimeError\n"
WHOLE_FILE = "import pytest\npytest.skip({reason!r}, allow_module_level=True)\n"


def session(folder: Path, test: str, ci: str, *options: str) -> subprocess.CompletedProcess[str]:
    shutil.copy(CONFTEST, folder / "conftest.py")
    (folder / "test_runs.py").write_text(RUNS)
    (folder / "test_skips.py").write_text(test)
    command = [sys.executable, "-m", "pytest", "-q", "-p", "no:cacheprovider", "--rootdir", str(folder), *options]
    return subprocess.run(command, cwd=folder, env=os.environ | {"CI": ci}, capture_output=True, text=True)


@pytest.mark.parametrize("options", [(), ("-n", "2")], ids=["one process", "workers"])
@pytest.mark.parametrize("test", [SKIPS, MARKED, WHOLE_FILE], ids=["within", "marked", "whole file"])
def test_a_skip_fails_where_ci_is_set(tmp_path: Path, test: str, options: tuple[str, ...]):
    done = session(tmp_path, test.format(reason="not today"), "true", *options)
    assert done.returncode == 1, done.stdout + done.stderr
    assert "SKIPPED, which is a failure here" in done.stdout
    assert done.stdout.count("not today") >= 1


@pytest.mark.parametrize("test", [SKIPS, MARKED, WHOLE_FILE], ids=["within", "marked", "whole file"])
def test_a_missing_engine_does_not(tmp_path: Path, test: str):
    done = session(tmp_path, test.format(reason="optional engine missing: pyspark"), "true")
    assert done.returncode == 0, done.stdout + done.stderr
    assert "which is a failure here" not in done.stdout


def test_nor_does_a_skip_elsewhere(tmp_path: Path):
    done = session(tmp_path, SKIPS.format(reason="not today"), "")
    assert done.returncode == 0, done.stdout + done.stderr
