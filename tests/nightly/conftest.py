from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from ledgers import quick_folder

from journeys.nightly import night
from journeys.nightly.manifest import Generation
from journeys.nightly.publish import Publication
from journeys.tally.tally import Tally


@pytest.fixture(autouse=True)
def _no_key(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("JOURNEYS_ID_KEY", raising=False)


@pytest.fixture
def root() -> Iterator[Path]:
    with quick_folder() as folder:
        yield folder


@pytest.fixture
def published(monkeypatch: pytest.MonkeyPatch) -> list[tuple[Generation, Tally]]:
    """Generations handed over for publishing, which takes longer than all else and is left out here."""
    seen: list[tuple[Generation, Tally]] = []

    def publish(job: Any, generation: Generation, tally: Tally) -> Publication:
        seen.append((generation, tally))
        return Publication(job.out, "", None, {}, generation.alarms)

    def is_published(_: Path, generation: Generation) -> bool:
        return any(one.number == generation.number for one, _ in seen)

    monkeypatch.setattr(night, "publish", publish)
    monkeypatch.setattr(night, "answers_of", lambda _, tally: tally)
    monkeypatch.setattr(night, "is_published", is_published)
    return seen
