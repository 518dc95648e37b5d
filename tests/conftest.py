from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

HERE = Path(__file__).resolve().parent


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
