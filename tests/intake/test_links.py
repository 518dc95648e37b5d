from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest

import journeys as jn
from journeys.checks import instant_us
from journeys.command.main import DONE, FAILED, USAGE, main
from journeys.errors import LogError
from journeys.intake.id_key import VARIABLE, IdKey
from journeys.intake.identity import customer_keys
from journeys.intake.links import read_links

RULES = jn.JourneyRules("who", "when", "what", converted="joined", silence="5d")
SECRET = "sesame-of-nobody"


def table_of(links: dict[Any, Any], since: Any = "2025-01-05") -> pd.DataFrame:
    when = pd.to_datetime(pd.Series(since, index=range(len(links))), utc=True)
    return pd.DataFrame({"old": list(links), "id": list(links.values()), "since": when})


def person(one: Any, links: dict[Any, Any]) -> Any:
    """The plain way: follow the links one by one."""
    while one in links:
        one = links[one]
    return one


def random_case(seed: int, text: bool) -> tuple[pd.DataFrame, dict[Any, Any], pd.Series]:
    """A log, links with chains (always to a smaller number, so never in a circle), and whose each row is."""
    rng = np.random.default_rng(seed)
    n = 2_000
    when = pd.Timestamp("2025-01-01", tz="UTC") + pd.to_timedelta(np.sort(rng.integers(0, 40 * 86_400, n)), "s")
    names = (lambda number: f"member-{number}") if text else int
    olds = rng.choice(np.arange(1, 120), 60, replace=False)
    links = {names(old): names(rng.integers(0, old)) for old in olds.tolist()}
    who = [names(number) for number in rng.integers(0, 150, n).tolist()]
    frame = pd.DataFrame({"who": who, "when": when, "what": rng.choice(["visit", "price", "joined"], n)})
    return frame, links, pd.Series([person(one, links) for one in who])


@pytest.mark.parametrize("secret", [None, "a secret of the tests, long enough"])
@pytest.mark.parametrize("text", [False, True])
@pytest.mark.parametrize("seed", range(4))
def test_old_ids_count_as_their_persons(seed: int, text: bool, secret: str | None, monkeypatch: pytest.MonkeyPatch):
    if secret is not None:
        monkeypatch.setenv(VARIABLE, secret)
    frame, links, whose = random_case(seed, text)
    tally = jn.tally(frame, RULES, identity=table_of(links))
    assert tally == jn.tally(frame.assign(who=whose.tolist()), RULES)
    assert tally != jn.tally(frame, RULES)
    found = tally.findings.set_index("code").loc["relinked"]
    moved = np.flatnonzero(frame["who"].to_numpy() != whose.to_numpy())
    assert (found["n"], found["rows"], found["column"]) == (len(moved), moved[:10].tolist(), "who")


def test_any_kind_of_table(tmp_path: Path):
    frame, links, whose = random_case(9, True)
    expected = jn.tally(frame.assign(who=whose.tolist()), RULES)
    table = table_of(links)
    table.to_csv(tmp_path / "links.csv", index=False)
    table.to_parquet(tmp_path / "links.parquet")
    arrow = pa.Table.from_pandas(table, preserve_index=False)
    shuffled = table.sample(frac=1, random_state=3).assign(note="more columns", since=None)
    for one in (tmp_path / "links.csv", str(tmp_path / "links.parquet"), arrow, arrow.to_reader(7), shuffled):
        assert jn.tally(frame, RULES, identity=one) == expected


def test_the_end_of_a_long_chain():
    n = 1_000
    links = read_links(table_of({number: number + 1 for number in range(n)}).sample(frac=1, random_state=1))
    (end,) = customer_keys(pa.array([n]))[0].tolist()
    assert set(links.person.tolist()) == {end}
    keys, _ = customer_keys(pa.array([*range(n + 2)]))
    assert links.people(keys)[: n + 1].tolist() == [end] * (n + 1)
    assert links.people(keys)[n + 1] == keys[n + 1]
    assert links.are_old(keys).tolist() == [True] * n + [False] * 2
    assert links.are_old(keys[n:]) is None


def test_links_that_say_nothing_new():
    twice = pd.concat([table_of({1: 2}, "2025-03-01"), table_of({1: 2, 3: 3}, "2025-02-01")])
    links = read_links(twice)
    assert (len(links), links.since_us.tolist(), links.row.tolist()) == (1, [instant_us("2025-02-01", "")], [1])
    frame, _, _ = random_case(2, False)
    for nothing in (table_of({}).astype({"old": "int64", "id": "int64"}), table_of({7: 7})):
        tally = jn.tally(frame, RULES, identity=nothing)
        assert tally == jn.tally(frame, RULES)
        assert "relinked" not in set(tally.findings["code"])


@pytest.mark.parametrize(
    ("table", "message"),
    [
        (pd.concat([table_of({SECRET: "b", "c": "d"}), table_of({SECRET: "e"})]),
         "identity table: rows 0 and 2 link the same old id to two people"),
        (table_of({"a": "b", "b": SECRET, SECRET: "a"}), "identity table: the links of row . go in a circle"),
        (table_of({"x": "a", "a": SECRET, SECRET: "a"}), "identity table: the links of row . go in a circle"),
        (table_of({SECRET: None}), "identity table: row 0 has no 'id'; wanted both ids in every row"),
        (table_of({SECRET: "a", "": "b"}), "identity table: row 1 has no 'old'"),
        (table_of({SECRET: 3, "b": 4}), "customer ids change from text to whole numbers"),
        (table_of({3: 4}), "the identity table holds whole numbers, the log has text for customer ids; write both"),
        (table_of({SECRET: "b"}).drop(columns="since"), "has no column 'since'"),
        (table_of({SECRET: "b"}).assign(since=5), "column 'since' holds numbers, not times"),
    ],
)  # fmt: skip
def test_tables_refused(table: pd.DataFrame, message: str):
    frame, _, _ = random_case(1, True)
    with pytest.raises(LogError, match=message) as told:
        jn.tally(frame, RULES, identity=table)
    assert SECRET not in str(told.value)


def test_links_that_come_too_late():
    since = ["2025-01-01", "2025-02-01", "2025-03-01", None]
    table = table_of({"a": "x", "b": "x", "c": "y", "d": "y"}, since)
    links = read_links(table)
    late = links.late(instant_us("2025-02-01", "watermark"))
    assert [(item["code"], item["n"], item["rows"]) for item in late.to_dict()["findings"]] == [("late_link", 1, [2])]
    assert links.late(instant_us("2025-03-01", "watermark")).to_dict()["findings"] == []
    # Where it is known who was counted, that decides: b was, as a person of its own, and c never came.
    counted, _ = customer_keys(pa.array(["b", "x", "z"]))
    assert links.late(0, counted).to_dict()["findings"][0]["rows"] == [1]
    key = IdKey("a secret of the tests, long enough")
    counted, _ = customer_keys(pa.array(["b", "d"]), None, key)
    assert read_links(table, key).late(0, counted).to_dict()["findings"][0]["rows"] == [1, 3]


def test_a_rebuild_mends_late_links():
    """What was counted before a link was known stays under the old id; counting all again gives the whole person."""
    frame, links, whose = random_case(5, True)
    table = table_of(links, "2025-01-20")
    half = frame["when"] < "2025-01-20"
    before = jn.tally(frame[half], RULES, identity=None)
    assert before.n_people > jn.tally(frame[half].assign(who=whose[half]), RULES).n_people
    keys, _ = customer_keys(pa.array(frame["who"][half].unique()))
    late = read_links(table).late(instant_us("2025-01-20", ""), keys)
    assert late.n("late_link") == len(set(links) & set(frame["who"][half]))
    rebuilt = jn.tally(frame, RULES, identity=table)
    assert rebuilt == jn.tally(frame.assign(who=whose), RULES)


def test_from_the_command_line(tmp_path: Path, capsys: pytest.CaptureFixture[str]):
    frame, links, whose = random_case(6, True)
    frame.to_parquet(tmp_path / "log.parquet")
    table_of(links).to_csv(tmp_path / "links.csv", index=False)
    (tmp_path / "rules.toml").write_text(RULES.to_toml())
    log, out, rules = (str(tmp_path / name) for name in ("log.parquet", "tally.parquet", "rules.toml"))
    words = ["--rules", rules, "--identity", str(tmp_path / "links.csv")]
    assert main(["tally", log, *words, "--out", out]) == DONE
    assert jn.Tally.load(out) == jn.tally(frame.assign(who=whose), RULES)
    assert main(["audit", log, *words]) == DONE
    assert "relinked" in capsys.readouterr().out
    assert jn.audit(frame, RULES, identity=tmp_path / "links.csv").tally == jn.Tally.load(out)
    assert main(["audit", out, *words]) == USAGE
    assert "is a saved tally, which holds no ids" in capsys.readouterr().err
    (tmp_path / "links.csv").write_text("old,id,since\na,b,\nb,a,\n")
    assert main(["audit", log, *words]) == FAILED
