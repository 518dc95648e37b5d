"""Links and paths that lead elsewhere: a job writes in its own two folders, or refuses in one line."""

from __future__ import annotations

import shutil
from pathlib import Path
from typing import Any

import pytest
from ledgers import files_of, invented, make_job, newest_tally, one_pass, write_night

from journeys.command.main import FAILED, USAGE, main
from journeys.errors import LogError, RulesError, StoreError
from journeys.nightly.job import Job
from journeys.nightly.night import run_night
from journeys.nightly.publish import LATEST


@pytest.fixture
def job(root: Path) -> Job:
    """A job with a night to come, and something beside it that is not its own."""
    job = make_job(root / "job")
    write_night(job, 0, invented(2, 1, 20)[0])
    (root / "other").mkdir()
    (root / "other" / "thesis.txt").write_text("mine")
    return job


def one_line(root: Path, capsys: pytest.CaptureFixture[str]) -> tuple[int, str]:
    code = main(["nightly", str(root / "job.toml")])
    told = capsys.readouterr().err
    errors = [line for line in told.splitlines() if line.startswith("ERROR")]
    assert len(errors) == 1, told
    assert "should not happen" not in told
    return code, errors[0]


def test_paths_may_climb_out_of_the_folder_of_the_job_file(root: Path, job: Job, published: list[Any]) -> None:
    job = make_job(root / "job", ledger="../else/where/ledger", out="./../out")
    assert run_night(job).generation == 1
    assert newest_tally(job) == one_pass(job, newest_tally(job))
    assert {path.name for path in root.iterdir()} == {"job", "other", "else"}


@pytest.mark.parametrize(("ledger", "out"), [("../job/events/l", "out"), ("ledger", "../job/ledger/../ledger/out")])
def test_roundabout_ways_into_another_folder_are_seen(root: Path, job: Job, ledger: str, out: str) -> None:
    with pytest.raises(RulesError, match=r"lies in the folder of (log|ledger); wanted folders of their own"):
        make_job(root / "job", ledger=ledger, out=out)


@pytest.mark.parametrize(("key", "to"), [("ledger", "events"), ("out", "ledger"), ("out", "events")])
def test_links_into_another_folder_are_seen(root: Path, job: Job, key: str, to: str) -> None:
    (root / "job" / to).mkdir(exist_ok=True)
    (root / "job" / "link").symlink_to(to)
    with pytest.raises(RulesError, match=f"{key}: .+ lies in the folder of .+; wanted folders of their own"):
        make_job(root / "job", **{key: "link"})


@pytest.mark.parametrize("key", ["ledger", "out"])
@pytest.mark.parametrize("kind", ["file", "loop", "link to nothing"])
def test_what_stands_in_the_place_of_a_folder(
    root: Path, job: Job, key: str, kind: str, capsys: pytest.CaptureFixture[str]
) -> None:
    place = root / "job" / key
    if kind == "file":
        place.write_text("mine")
    else:
        place.symlink_to(place if kind == "loop" else root / "nowhere")
    code, told = one_line(root / "job", capsys)
    assert code == USAGE
    assert f"{key}: {place} is no folder; wanted a folder, or a path where there is nothing yet" in told
    assert not (root / "nowhere").exists()


@pytest.mark.parametrize("key", ["log", "rules", "identity"])
def test_links_that_lead_to_themselves(root: Path, job: Job, key: str, capsys: pytest.CaptureFixture[str]) -> None:
    (root / "job" / "loop").symlink_to("loop")
    text = (root / "job" / "job.toml").read_text()
    kept = "".join(line for line in text.splitlines(keepends=True) if not line.startswith(key))
    (root / "job" / "job.toml").write_text(f'{key} = "loop"\n{kept}')
    assert one_line(root / "job", capsys)[0] in (FAILED, USAGE)


@pytest.mark.parametrize("key", ["log", "rules", "ledger", "out", "identity"])
@pytest.mark.parametrize(("path", "words"), [(r"a\u0000b", "wanted a path"), ("n" * 5_000, "File name too long")])
def test_names_that_no_file_can_have(
    root: Path, job: Job, key: str, path: str, words: str, capsys: pytest.CaptureFixture[str]
) -> None:
    text = (root / "job" / "job.toml").read_text()
    kept = "".join(line for line in text.splitlines(keepends=True) if not line.startswith(key))
    (root / "job" / "job.toml").write_text(f'{key} = "{path}"\n{kept}')
    code, told = one_line(root / "job", capsys)
    assert code in (FAILED, USAGE)
    assert words in told


def test_links_in_the_folder_of_the_log(root: Path, job: Job, published: list[Any]) -> None:
    (job.log / "day=001").symlink_to(root / "other")
    with pytest.raises(LogError, match="is a link to a folder, or to nothing; wanted files: take it out"):
        run_night(job)


def test_a_lock_that_is_a_link(root: Path, job: Job) -> None:
    """Opening it would empty the file that it leads to."""
    job.ledger.mkdir()
    (job.ledger / "lock").symlink_to(root / "other" / "thesis.txt")
    with pytest.raises(StoreError, match="lock is a link; wanted a ledger whose files are its own"):
        run_night(job)
    assert (root / "other" / "thesis.txt").read_text() == "mine"


def test_links_under_the_names_of_a_ledger_s_files_are_not_followed(
    root: Path, job: Job, published: list[Any]
) -> None:
    run_night(job)
    names = list(files_of(job.ledger))
    shutil.rmtree(job.ledger)
    job.ledger.mkdir()
    for name in names:
        (job.ledger / f"{name}.part").symlink_to(root / "other" / "thesis.txt")
        if not name.startswith("manifest"):
            (job.ledger / name).symlink_to(root / "other" / "thesis.txt")
    run_night(job)
    assert (root / "other" / "thesis.txt").read_text() == "mine"
    assert not [path for path in job.ledger.iterdir() if path.is_symlink()]
    assert newest_tally(job) == one_pass(job, newest_tally(job))


def test_what_is_published_does_not_follow_links(root: Path, job: Job) -> None:
    first = run_night(job).publication.folder  # type: ignore[union-attr]
    shutil.rmtree(job.out)
    job.out.mkdir()
    (job.out / first.name).symlink_to(root / "other")
    (job.out / f".{LATEST}-part").symlink_to(root / "other" / "thesis.txt")
    (job.out / LATEST).symlink_to(root / "other")
    run_night(job)
    assert [path.name for path in (root / "other").iterdir()] == ["thesis.txt"]
    assert not first.is_symlink()
    assert (job.out / LATEST / "run.json").read_bytes() == (first / "run.json").read_bytes()


def test_a_copy_that_lost_its_links_goes_on(root: Path, job: Job) -> None:
    """As `cp -rL` makes it: `latest` is a folder of files."""
    run_night(job)
    shutil.copytree(job.out, root / "copy")
    shutil.rmtree(job.out)
    shutil.copytree(root / "copy", job.out)
    assert not (job.out / LATEST).is_symlink()
    write_night(job, 1, invented(5, 2, 20)[1])
    night = run_night(job)
    assert (job.out / LATEST / "run.json").read_bytes() == (night.publication.folder / "run.json").read_bytes()  # type: ignore[union-attr]
