"""Each notebook runs from top to bottom, and the outputs kept in it are the ones it gives today."""

from __future__ import annotations

import json
from pathlib import Path

import nbformat
import pytest
from run_notebooks import NOTEBOOKS, REPO, executed, text_outputs

FIRST_HOUR = REPO / "notebooks" / "first_hour.ipynb"


def test_there_are_notebooks():
    assert FIRST_HOUR in NOTEBOOKS


@pytest.mark.parametrize("path", [one for one in NOTEBOOKS if one != FIRST_HOUR], ids=lambda path: path.stem)
def test_kept_outputs_are_those_of_today(path: Path):
    assert text_outputs(executed(path)) == kept_outputs(path)


def kept_outputs(path: Path) -> list[str]:
    kept = nbformat.read(path, as_version=4)
    nbformat.validate(kept)
    return text_outputs(kept)


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_names_no_folder_of_a_machine(path: Path):
    text = path.read_text(encoding="utf-8")
    for folder in (str(REPO), str(Path.home())):
        assert folder not in text


def test_first_hour_keeps_its_outputs_and_says_what_is_so():
    """The sentences around its last table, held against the table itself and the stated truth; one run for both."""
    *fresh, last = text_outputs(executed(FIRST_HOUR, "print(comparison.to_json(orient='index')); print(plain_days)"))
    assert fresh == kept_outputs(FIRST_HOUR)
    table, plain_days = last.splitlines()
    converted, steps, days = (json.loads(table)[name] for name in ("converted", "steps", "days"))
    truth = json.loads((REPO / "demo_data" / "truth.json").read_text(encoding="utf-8"))
    assert converted["true_value"] == pytest.approx(truth["journeys"]["share"]["joined"], abs=1e-9)
    assert days["chain_limit"] == pytest.approx(truth["pooled_chain"]["mean_days_given_joined"], abs=1e-9)
    assert converted["true_value"] == pytest.approx(converted["chain_limit"], abs=1e-9)
    assert converted["low"] < converted["true_value"] < converted["high"]
    for mean in (steps, days):
        assert mean["low"] < mean["chain_limit"] < mean["high"]
        assert mean["true_value"] < mean["low"]
    assert float(plain_days) < days["true_value"] < days["estimate"]
