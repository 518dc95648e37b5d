"""Some hundred damaged inputs of every kind, drawn by hypothesis and by a seed, and those kept from longer runs."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import journeys as jn
from journeys.errors import JourneysError
from journeys.intake.frozen import toml_text
from journeys.nightly.job import ALARM_KEYS, KEYS

HERE = Path(__file__).resolve().parent
sys.path.insert(0, str(HERE))

from ledger_targets import MANIFEST, signed, sound  # noqa: E402
from mutate import WAYS, mutated  # noqa: E402
from run_fuzz import KEPT, Tries  # noqa: E402
from targets import TARGETS, WORDS  # noqa: E402

BRIEF = settings(
    max_examples=30, deadline=None, derandomize=True, database=None,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)  # fmt: skip


@pytest.fixture(scope="module")
def tries(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Tries]:
    found = {}
    before = tempfile.tempdir
    for name in TARGETS:
        folder = tmp_path_factory.mktemp("fuzz")
        tempfile.tempdir = str(folder)
        found[name] = Tries(name, folder)
    tempfile.tempdir = before
    return found


@pytest.mark.parametrize("name", TARGETS)
def test_sound_input_is_read(name: str, tries: dict[str, Tries]) -> None:
    before = tries[name].counts["read"]
    for seed in tries[name].seeds:
        tries[name].one(seed)
    assert tries[name].counts["read"] == before + len(tries[name].seeds)


@pytest.mark.parametrize("name", TARGETS)
def test_damaged_input_is_read_rightly_or_refused(name: str, tries: dict[str, Tries]) -> None:
    for number in range(20):
        tries[name].one(mutated(tries[name].seeds, np.random.default_rng([99, number])))
    assert tries[name].counts["refused"]


@BRIEF
@given(data=st.data())
def test_drawn_damage(data: st.DataObject, tries: dict[str, Tries]) -> None:
    kind = tries[data.draw(st.sampled_from([name for name in TARGETS if name != "words"]))]
    way = data.draw(st.sampled_from(WAYS))
    kind.one(way(data.draw(st.sampled_from(kind.seeds)), np.random.default_rng(data.draw(st.integers(0, 10**6)))))


@BRIEF
@given(data=st.binary(max_size=300), name=st.sampled_from([name for name in TARGETS if name != "words"]))
def test_drawn_bytes(data: bytes, name: str, tries: dict[str, Tries]) -> None:
    tries[name].one(data)


VALUES = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5) | st.dates() | st.datetimes(),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=3), inner, max_size=2),
    max_leaves=4,
)


@settings(BRIEF, max_examples=200)
@given(more=st.dictionaries(st.sampled_from(list(jn.JourneyRules.__dataclass_fields__)), VALUES, max_size=4))
def test_any_value_for_any_rule(more: dict[str, object]) -> None:
    try:
        rules = jn.JourneyRules.from_dict({"customer": "a", "time": "b", "event": "c", "silence": "1d"} | more)
    except JourneysError:
        return
    assert jn.JourneyRules.from_dict(rules.to_dict()) == rules


JOB = {"log": "events", "rules": "rules.toml", "ledger": "ledger", "out": "out", "lateness": "6h", "id_key": "none"}


@settings(BRIEF, max_examples=60)
@given(
    more=st.dictionaries(st.sampled_from(KEYS), VALUES, max_size=2),
    alarms=st.none() | st.dictionaries(st.sampled_from(ALARM_KEYS), VALUES),
)
def test_any_value_for_any_key_of_a_job(
    more: dict[str, object], alarms: dict[str, object] | None, tries: dict[str, Tries]
) -> None:
    settings = JOB | more | ({} if alarms is None else {"alarms": alarms})
    try:
        text = toml_text(settings).encode()
    except (TypeError, ValueError, AttributeError):
        return  # what no TOML file can say
    tries["job"].one(text)


@settings(BRIEF, max_examples=60)
@given(data=st.data())
def test_any_value_in_a_manifest(data: st.DataObject, tries: dict[str, Tries]) -> None:
    body = json.loads(sound()[MANIFEST])["ledger"]
    at = body
    key = data.draw(st.sampled_from(sorted(at)))
    while at[key] and isinstance(at[key], dict | list) and data.draw(st.integers(0, 3)):
        at = at[key]
        key = data.draw(st.sampled_from(sorted(at) if isinstance(at, dict) else list(range(len(at)))))
    at[key] = data.draw(st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5) | st.just([{}]))
    tries["manifest"].one(signed(json.dumps({"ledger": body}).encode()))


@settings(BRIEF, max_examples=25)
@given(words=st.lists(st.integers(0, len(WORDS) - 1), max_size=8))
def test_any_words_of_the_command(words: list[int], tries: dict[str, Tries]) -> None:
    tries["words"].one(bytes(words))


@pytest.mark.parametrize("path", sorted(KEPT.glob("*")), ids=lambda path: path.name)
def test_what_once_failed(path: Path, tries: dict[str, Tries]) -> None:
    tries[path.name.partition("-")[0]].one(path.read_bytes())


def test_the_script_tells_how_many_were_tried() -> None:
    done = subprocess.run(
        [sys.executable, HERE / "run_fuzz.py", "--tries", "20", "--target", "rules"],
        env=os.environ | {"PYTHONPATH": str(HERE.parents[1])}, capture_output=True, text=True, timeout=60,
    )  # fmt: skip
    assert done.returncode == 0, done.stdout + done.stderr
    assert done.stdout.startswith("rules: 20 tried, ")


def test_the_script_fails_where_a_check_does(tries: dict[str, Tries], monkeypatch: pytest.MonkeyPatch) -> None:
    (folder := tries["tally"]._folder).joinpath("left").touch()
    with pytest.raises(AssertionError, match="left behind"):
        tries["tally"].one(b"")
    folder.joinpath("left").unlink()
