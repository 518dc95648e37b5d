"""No id of a customer stands in any file of a ledger or of what is published, nor in any line that a run writes.

Every id bears a mark that nothing else has. After each run of every kind all files are searched for it, inside the
columns of Arrow and Parquet files and their heads too, and so is all that was printed and logged, down to DEBUG.
"""

from __future__ import annotations

import contextlib
import logging
from collections.abc import Iterator
from pathlib import Path

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from cut_off import without_summaries
from ledgers import invented, make_job, quick_folder, write_night
from test_alarms import ALARMS, changing

from journeys.command.main import ALARM, DONE, FAILED, LIMITS, USAGE, main
from journeys.intake.id_key import VARIABLE

MARK = "zqxv"
# As text, and as the numbers that integer ids are: nothing else in these logs is that large.
FAR = 770_077_007_700_000_000


class Watch:
    """Runs a command, and searches everything that it wrote."""

    def __init__(self, root: Path, capsys: pytest.CaptureFixture[str], caplog: pytest.LogCaptureFixture) -> None:
        self.root, self._capsys, self._caplog = root, capsys, caplog
        self.n_files = 0

    def run(self, *words: object, code: int) -> str:
        """Run, expect an exit code, search, and return what was printed."""
        assert main([str(word) for word in words]) == code
        said = self._capsys.readouterr()
        self.search(said.out + said.err + self._caplog.text)
        self._caplog.clear()
        for place in ("ledger", "out"):
            for path in (self.root / place).rglob("*"):
                if path.is_file():
                    self.n_files += 1
                    self.search(contents(path), path.name)
        return said.out + said.err

    @staticmethod
    def search(text: str, where: str = "what was said") -> None:
        assert MARK not in text, where
        assert str(FAR)[:9] not in text, where


def contents(path: Path) -> str:
    """Give all that a file holds, as written and as read."""
    data = path.read_bytes()
    text = data.decode("utf-8", "replace")
    if path.suffix == ".parquet":
        text += str(pq.read_table(path).to_pydict()) + str(pq.read_schema(path).metadata)
    elif path.suffix == ".arrow":
        source = pa.BufferReader(data)
        with contextlib.suppress(pa.ArrowInvalid):  # one of them is cut short
            while source.tell() < len(data):
                with pa.ipc.open_stream(source) as reader:
                    text += str(reader.schema.metadata) + str(reader.read_all().to_pydict())
    return text


def marked(rows: pd.DataFrame, whole: bool = False) -> pd.DataFrame:
    """Give the rows ids that can be searched for."""
    return rows.assign(who=rows.who + FAR if whole else [f"{MARK}-{7919 * one:x}" for one in rows.who])


@pytest.fixture
def unpublished() -> Iterator[contextlib.ExitStack]:
    with contextlib.ExitStack() as stack:
        yield stack


@pytest.mark.parametrize(
    ("whole", "key"), [(False, None), (True, "a long secret of the bicycle club, kept elsewhere")],
    ids=["text", "whole numbers through a key"],
)  # fmt: skip
def test_every_kind_of_run(
    whole: bool, key: str | None, root: Path, capsys: pytest.CaptureFixture[str], caplog: pytest.LogCaptureFixture,
    monkeypatch: pytest.MonkeyPatch, unpublished: contextlib.ExitStack,
) -> None:  # fmt: skip
    caplog.set_level(logging.DEBUG)
    if key:
        monkeypatch.setenv(VARIABLE, key)
        unpublished.enter_context(without_summaries())  # they are searched where there is no key
    job = make_job(root, {"by": ["district"], "value": "amount"}, id_key="required" if key else "none")
    path, watch = root / "job.toml", Watch(root, capsys, caplog)
    nights = [marked(one, whole) for one in invented(3, 12, 12, n_people=12)]
    write_night(job, 0, pd.concat(nights[:6]))
    watch.run("nightly", path, "--dry-run", code=DONE)
    watch.run("nightly", path, code=DONE)
    watch.run("nightly", path, code=DONE)

    late = write_night(job, 1, nights[0].head(9).assign(event="look"))
    assert "came too late" in watch.run("nightly", path, code=LIMITS)
    late.unlink()
    twice = write_night(job, 2, nights[7])
    (twice.parent / "again.parquet").write_bytes(twice.read_bytes())
    watch.run("nightly", path, code=FAILED)
    (twice.parent / "again.parquet").unlink()
    watch.run("nightly", path, code=DONE)

    nights[7].head(3).to_parquet(twice)
    assert "has changed since it was counted" in watch.run("nightly", path, code=FAILED)
    watch.run("nightly", path, "--rebuild", code=DONE)

    # lists of ids, and ids of the other kind
    for wrong in (nights[8].assign(who=[[one] for one in nights[8].who]), marked(invented(3, 12, 12)[8], not whole)):
        night = write_night(job, 9, wrong)
        watch.run("nightly", path, code=FAILED)
        night.unlink()
        night.parent.rmdir()

    ids = root / "ids.txt"
    ids.write_text("\n".join([str(nights[0].who.iloc[0]), f"{MARK}-nobody" if not whole else str(FAR - 1)]))
    watch.run("forget", ids, "--ledger", job.ledger, code=DONE)
    ids.write_text(f"{MARK} and more\n")
    watch.run("forget", ids, "--ledger", job.ledger, code=FAILED if whole else DONE)

    part = next(job.ledger.glob("part-*"))
    part.write_bytes(part.read_bytes()[:-20])
    write_night(job, 10, nights[9])
    assert "is damaged" in watch.run("nightly", path, code=FAILED)
    watch.run("nightly", path, "--rebuild", code=DONE)
    monkeypatch.setenv(VARIABLE, "another secret of the bicycle club, kept too")
    watch.run("nightly", path, code=USAGE)
    assert watch.n_files > 100


def test_csv_that_is_broken_in_the_middle(
    root: Path, capsys: pytest.CaptureFixture[str], caplog: pytest.LogCaptureFixture
) -> None:
    """Arrow quotes the line that it cannot read."""
    caplog.set_level(logging.DEBUG)
    job, watch = make_job(root), Watch(root, capsys, caplog)
    text = marked(invented(3, 1, 12)[0]).to_csv(index=False)
    for number, broken in enumerate((f"{MARK},1\n", f"{MARK},soon,visit,Hill,1.0\n", f'"{MARK},2025-01-06,visit\n')):
        (job.log / f"{number}.csv").write_text(text + broken)
        assert main(["nightly", str(root / "job.toml"), "--debug"]) in (FAILED, LIMITS)
        said = capsys.readouterr()
        watch.search(said.out + said.err + caplog.text)
        (job.log / f"{number}.csv").unlink()


def test_old_ids_in_a_table_that_is_wrong(
    root: Path, capsys: pytest.CaptureFixture[str], caplog: pytest.LogCaptureFixture
) -> None:
    caplog.set_level(logging.DEBUG)
    job, watch = make_job(root, identity="people.csv"), Watch(root, capsys, caplog)
    write_night(job, 0, marked(invented(3, 2, 20)[0]))
    head = "old,id,since\n"
    for number, (lines, code) in enumerate((
        (f"{MARK}-1eef,{MARK}-2,2025-01-05\n", DONE),
        (f"{MARK}-1,{MARK}-2,2025-01-05\n{MARK}-2,{MARK}-1,2025-01-05\n", FAILED),
        (f"{MARK}-1,{MARK}-2,2025-01-05\n{MARK}-1,{MARK}-3,2025-01-05\n", FAILED),
        (f"{MARK}-1,{MARK}-2,soon\n", FAILED),
    )):  # fmt: skip
        (root / "people.csv").write_text(head + lines)
        write_night(job, 1 + number, marked(invented(3, 3, 20)[2]).head(3 + number))
        watch.run("nightly", root / "job.toml", code=code)


def test_a_night_whose_alarms_trip(capsys: pytest.CaptureFixture[str], caplog: pytest.LogCaptureFixture) -> None:
    caplog.set_level(logging.DEBUG)
    with quick_folder() as root:
        job, watch = make_job(root, lateness="1d", alarms=ALARMS), Watch(root, capsys, caplog)
        weeks = [marked(week) for week in changing(41, 7, 0.1, 5)]
        for number, rows in enumerate(weeks):
            write_night(job, number, rows)
            if number in (0, 5, 6):
                said = watch.run("nightly", root / "job.toml", code=ALARM if number == 6 else DONE)
        assert "ALARM" in said
