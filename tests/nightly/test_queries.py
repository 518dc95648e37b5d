"""A database as the nightly input: night after night is one pass over the whole table."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from cut_off import CutOffError, stopped_at
from ledgers import files_of, invented, make_job, newest_tally, write_night
from servers import PASSWORD, postgresql

import journeys as jn
from journeys.checks import instant_text
from journeys.command.main import DONE, USAGE, main
from journeys.errors import RulesError
from journeys.nightly.ledger import opened
from journeys.nightly.night import run_night
from journeys.tally.tally import Tally

VARIABLE = "JOURNEYS_TEST_DATABASE"
SECRET = "s3cret-word"
QUERY = "SELECT who, happened, event, district FROM visits WHERE happened > $1 ORDER BY place"
pytestmark = pytest.mark.optional


class Club:
    """A table of visits in a database, and a job that counts it."""

    def __init__(self, root: Path, driver: str, where: str, **settings: Any) -> None:
        self._driver, self._where, self._place, self._root = driver, where, 0, root
        self.ask(QUERY)
        self.job = make_job(root, {"by": ["district"]}, log="club.toml", **settings)

    @property
    def path(self) -> str:
        return str(self._root / "job.toml")

    def ask(self, query: str) -> None:
        self._root.mkdir(exist_ok=True)
        (self._root / "club.toml").write_text(
            f'[database]\nquery = "{query}"\ndriver = "{self._driver}"\nconnection_from = "{VARIABLE}"\n'
        )

    def arrive(self, rows: pd.DataFrame) -> None:
        if self._driver == "postgresql":
            from adbc_driver_postgresql import dbapi
        else:
            from adbc_driver_duckdb import dbapi
        import pyarrow as pa

        place = np.arange(self._place, self._place + len(rows))
        table = pa.Table.from_pandas(rows.assign(place=place), preserve_index=False)
        with closing(dbapi.connect(self._where)) as connection, closing(connection.cursor()) as cursor:
            cursor.adbc_ingest("visits", table, mode="append" if self._place else "create")
            connection.commit()
        self._place += len(rows)

    def one_pass(self, like: Tally) -> Tally:
        """Return the tally of one pass over all that the query gives by now."""
        dates = {"log_start": instant_text(like.log_start_us), "as_of": instant_text(like.as_of_us)}
        rules = jn.JourneyRules.from_dict(self.job.rules.to_dict() | dates)
        return replace(jn.tally(self._root / "club.toml", rules), rules=like.rules)

    def is_whole(self) -> bool:
        tally = newest_tally(self.job)
        whole = self.one_pass(tally)
        columns = ["code", "column", "n"]
        same = tally.findings[columns].values.tolist() == whole.findings[columns].values.tolist()
        return tally == whole and same and tally.n_rows == whole.n_rows


@pytest.fixture
def club(root: Path, monkeypatch: pytest.MonkeyPatch) -> Club:
    pytest.importorskip("adbc_driver_duckdb", reason="optional engine missing: adbc-driver-duckdb")
    monkeypatch.setenv(VARIABLE, str(root / f"{SECRET}.duckdb"))
    return Club(root / "work", "duckdb", str(root / f"{SECRET}.duckdb"))


def nights_with_faults(n: int) -> list[pd.DataFrame]:
    """Return nights with late rows, rows without an event, and one whose clock runs ahead."""
    nights = invented(21, n, 40, n_people=12)
    for rows in nights:
        rows.loc[1, "event"] = None
        # The youngest of a night waits, and is read anew.
        rows.loc[rows.happened.idxmax(), "event"] = None
    nights[2].loc[5, "happened"] += np.timedelta64(3650, "D")
    return nights


def test_night_after_night(club: Club, published: list[Any]):
    club.job = make_job(Path(club.path).parent, {"by": ["district"], "limits": {"unreadable": 0.5}}, log="club.toml")
    n_waited = 0
    for day, rows in enumerate(nights_with_faults(8)):
        club.arrive(rows)
        if day == 4:
            continue  # the scheduler slept
        if day == 5:
            before = files_of(club.job.ledger)
            for at in (2, 12):
                with stopped_at(at), pytest.raises(CutOffError):
                    run_night(club.job)
                assert files_of(club.job.ledger)["manifest.json"] == before["manifest.json"]
        done = run_night(club.job)
        assert done.n_too_late == 0
        n_waited += done.n_waiting
        assert club.is_whole(), day
        before = files_of(club.job.ledger)
        again = run_night(club.job)
        assert (again.generation, again.new_inputs, again.publication) == (done.generation, (), None)
        assert files_of(club.job.ledger) == before
    assert n_waited > 20
    assert newest_tally(club.job).record.n("later_than_now") == 1
    whole = newest_tally(club.job)
    run_night(club.job, rebuild=True)
    assert newest_tally(club.job) == whole


def test_what_the_manifest_says_of_a_query(club: Club, published: list[Any]):
    nights = invented(22, 2, 40)
    for rows in nights[:2]:
        club.arrive(rows)
        run_night(club.job)
    manifest = opened(club.job.ledger).manifest
    assert manifest is not None
    first, second = manifest.inputs
    assert (first.name, first.kind, first.since_us) == ("query, night 1", "query", None)
    assert (second.name, second.generation) == ("query, night 2", 2)
    checksum = jn.DatabaseLog(QUERY, VARIABLE, "duckdb").for_manifest()["query_checksum"]
    assert first.checksum == second.checksum == checksum
    tally, happened = newest_tally(club.job), pd.concat(nights[:2]).happened
    assert second.since_us is not None
    ends = [pd.Timestamp(at, unit="us", tz="UTC") for at in (second.since_us, tally.as_of_us)]
    by_then = [int((happened <= end).sum()) for end in ends]
    assert [first.n_rows, first.n_rows + second.n_rows] == by_then
    assert tally.n_rows == len(happened) > by_then[1]


@pytest.mark.parametrize("query", [QUERY.replace("ORDER BY place", ""), QUERY.replace(">", ">=")])
def test_another_query_is_refused(club: Club, published: list[Any], query: str):
    nights = invented(22, 2, 40)
    club.arrive(nights[0])
    run_night(club.job)
    before = files_of(club.job.ledger)
    club.ask(query)
    club.arrive(nights[1])
    words = "the query is not the one that the ledger was counted by; put it back .+ --rebuild"
    with pytest.raises(RulesError, match=words):
        run_night(club.job)
    assert files_of(club.job.ledger) == before
    assert run_night(club.job, rebuild=True).generation == 2
    assert club.is_whole()


def test_a_query_without_a_watermark_is_refused(club: Club):
    club.ask("SELECT * FROM visits")
    words = r"club.toml: a ledger asks each night for what is new: since: the query has no \$1"
    with pytest.raises(RulesError, match=words):
        run_night(club.job)


def test_files_and_queries_do_not_mix(club: Club, published: list[Any]):
    rows = invented(22, 1, 40)[0]
    club.arrive(rows)
    run_night(club.job)
    folder = make_job(Path(club.path).parent, {"by": ["district"]})
    write_night(folder, 0, rows)
    with pytest.raises(RulesError, match="the files of .+ now, but the ledger has counted query, night 1"):
        run_night(folder)
    assert run_night(folder, rebuild=True).generation == 2
    with pytest.raises(RulesError, match="the query of .+ now, but the ledger has counted day=000/rows.parquet"):
        run_night(club.job)


def test_how_to_get_in_is_written_nowhere(club: Club, published: list[Any], capsys: pytest.CaptureFixture[str],
                                          monkeypatch: pytest.MonkeyPatch):  # fmt: skip
    club.arrive(invented(22, 1, 40)[0])
    assert main(["nightly", club.path, "--dry-run", "--json"]) == DONE
    assert json.loads(capsys.readouterr().out)["new_inputs"] == ["query, night 1"]
    assert main(["nightly", club.path]) == DONE
    assert main(["nightly", club.path]) == DONE
    assert "Nothing new; generation 1 stands." in capsys.readouterr().out
    club.ask("SELECT nothing FROM nowhere WHERE happened > $1")
    assert main(["nightly", club.path]) == USAGE
    monkeypatch.setenv(VARIABLE, f"/nowhere/{SECRET}.duckdb")
    club.ask(QUERY)
    assert main(["nightly", club.path]) != DONE
    monkeypatch.delenv(VARIABLE)
    assert main(["nightly", club.path]) != DONE
    said = capsys.readouterr()
    kept = b"".join([*files_of(club.job.ledger).values(), *files_of(club.job.out).values()])
    assert VARIABLE in said.err
    assert SECRET not in said.out + said.err
    assert SECRET.encode() not in kept
    assert b"FROM visits" not in kept


@contextmanager
def _server(monkeypatch: pytest.MonkeyPatch) -> Iterator[str]:
    pytest.importorskip("adbc_driver_postgresql", reason="optional engine missing: adbc-driver-postgresql")
    with postgresql() as uri:
        monkeypatch.setenv(VARIABLE, uri)
        yield uri


def test_postgresql(root: Path, published: list[Any], monkeypatch: pytest.MonkeyPatch):
    with _server(monkeypatch) as uri:
        club = Club(root / "work", "postgresql", uri)
        for rows in invented(23, 3, 40):
            club.arrive(rows)
            run_night(club.job)
            assert club.is_whole()
        before = files_of(club.job.ledger)
        assert run_night(club.job).new_inputs == ()
        assert files_of(club.job.ledger) == before
        assert PASSWORD.encode() not in b"".join(before.values())
