from __future__ import annotations

import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

HERE = Path(__file__).resolve().parent
MISSING_ENGINE = "optional engine missing:"


class SkipsAreFailures:
    """Turns a session red in which something was skipped for any reason but a missing optional engine."""

    def __init__(self) -> None:
        self._skipped: list[str] = []

    def _look(self, report: pytest.TestReport | pytest.CollectReport) -> None:
        if report.skipped and not hasattr(report, "wasxfail"):
            where = report.longrepr
            reason = str(where[2] if isinstance(where, tuple | list) else where).removeprefix("Skipped: ")
            if not reason.startswith(MISSING_ENGINE):
                self._skipped.append(f"{report.nodeid}: {reason}")

    def pytest_runtest_logreport(self, report: pytest.TestReport) -> None:
        self._look(report)

    def pytest_collectreport(self, report: pytest.CollectReport) -> None:
        self._look(report)

    @pytest.hookimpl(tryfirst=True)
    def pytest_sessionfinish(self, session: pytest.Session) -> None:
        if self._skipped and session.exitstatus in (pytest.ExitCode.OK, pytest.ExitCode.NO_TESTS_COLLECTED):
            session.exitstatus = pytest.ExitCode.TESTS_FAILED

    def pytest_terminal_summary(self, terminalreporter: pytest.TerminalReporter) -> None:
        for line in self._skipped:
            terminalreporter.write_line(f"SKIPPED, which is a failure here: {line}", red=True)


def pytest_configure(config: pytest.Config) -> None:
    if os.environ.get("CI") == "true":
        config.pluginmanager.register(SkipsAreFailures())


@pytest.fixture(scope="session")
def shared() -> Path:
    folder = HERE.parent.parent / "shared"
    if not (folder / "reference" / "data").is_dir():
        pytest.fail(
            f"the open data are not at {folder}/reference/data; put the folder 'shared' beside the "
            "repository, or leave these tests out with -m 'not open_data'"
        )
    return folder


@pytest.fixture(scope="session")
def reference() -> Callable[[str, str], dict[str, Any]]:
    """Give a case of tests/reference by the name of its file and the start of its id."""

    def case(name: str, start: str) -> dict[str, Any]:
        cases = json.loads((HERE / "reference" / f"{name}.json").read_text(encoding="utf-8"))["cases"]
        (found,) = [c for c in cases if c["id"].startswith(start)]
        return dict(found)

    return case
