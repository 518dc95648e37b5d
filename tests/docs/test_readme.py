"""The README keeps its word: its commands and its Python run, and its tables name what there is."""

from __future__ import annotations

import doctest
import os
import re
import shlex
import signal
import subprocess
import sys
from dataclasses import fields
from pathlib import Path

import pytest

import journeys as jn
from journeys import errors
from journeys.command import main as command
from journeys.command.stop import StoppedError
from journeys.intake.findings import MESSAGES
from journeys.intake.rule_checks import LIMITS
from journeys.models import model, what_if
from journeys.nightly import job
from journeys.questions import (
    bootstrap,
    comeback,
    compare,
    credit_by_log,
    curve_result,
    elapsed,
    linear,
    measures,
    memory_check,
    outcomes,
    quantiles,
    removal,
    return_time,
    sensitivity,
    stage_rows,
    stages_by_log,
    time_to_convert,
    touch_shares,
    within,
    worth,
)

REPO = Path(__file__).resolve().parents[2]
README = (REPO / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (REPO / "DEVELOPERS.md").read_text(encoding="utf-8")
CI = REPO / ".ci" / "run"
SETUP = "python3 -m venv .venv && .venv/bin/pip install "
PYTEST = ".venv/bin/python -m pytest "


def blocks(text: str, language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", text, re.DOTALL | re.MULTILINE)


def commands() -> list[str]:
    return [line for block in blocks(README, "sh") for line in block.splitlines()]


def without_setup(line: str) -> str:
    return line.split(" && ")[-1]


def table_after(words: str) -> list[str]:
    """First cells of the first table below a heading or the beginning of a line."""
    body = README.split(f"\n{words}", 1)[1]
    rows = re.search(r"(?:^\|.*\n)+", body, re.MULTILINE)
    assert rows is not None
    return [row.split("|")[1].strip() for row in rows[0].splitlines()[2:]]


def coded(cells: list[str]) -> set[str]:
    return {name for cell in cells for name in re.findall(r"`([^`]+)`", cell)}


def run(words: list[str], cwd: Path) -> subprocess.CompletedProcess[str]:
    environment = os.environ | {"PYTHONPATH": str(REPO)}
    return subprocess.run(words, cwd=cwd, env=environment, capture_output=True, text=True)


@pytest.fixture
def clone(tmp_path: Path) -> Path:
    """A folder in which the README's relative paths lead to the demo data, and outputs do no harm."""
    (tmp_path / "demo_data").symlink_to(REPO / "demo_data")
    return tmp_path


def test_begins_with_two_lines_that_set_up_and_run():
    first, second, third = commands()[:3]
    assert first.startswith(SETUP + ". && .venv/bin/journeys summary demo_data/")
    assert second.startswith(SETUP + "-e '.[test,dev]' && " + PYTEST)
    assert third.startswith(PYTEST)
    assert third.endswith("-m open_data")


def test_every_command_runs_as_written(clone: Path):
    ours = [without_setup(line) for line in commands() if ".venv/bin/journeys" in line]
    assert len(ours) == sum("journeys " in line for line in commands())
    for line in ours:
        program, *words = shlex.split(line)
        assert program == ".venv/bin/journeys"
        done = run([sys.executable, "-m", "journeys", *words], clone)
        assert done.returncode == command.DONE, f"{line}\n{done.stderr}"
        assert done.stdout
        if "--out" in words:
            assert (clone / words[words.index("--out") + 1]).exists()
    written = {path.name for path in (clone / "club_summary").iterdir()}
    assert written == {
        "summary.md", "summary.html", "summary.csv", "summary.parquet", "groups.csv", "columns.csv", "tally.parquet",
    }  # fmt: skip


@pytest.mark.parametrize("line", [line for line in commands() if PYTEST in line])
def test_every_test_command_finds_tests(line: str):
    program, *words = shlex.split(without_setup(line))
    assert program == ".venv/bin/python"
    words = [word for word in words if word not in ("-n", "2")]
    done = run([sys.executable, *words, "--collect-only", "-qq", "-p", "no:cacheprovider", "tests/kernels"], REPO)
    assert done.returncode == pytest.ExitCode.OK, done.stdout + done.stderr
    assert "test_" in done.stdout


def test_outputs_are_ignored_by_git():
    ignored = (REPO / ".gitignore").read_text(encoding="utf-8").split()
    for line in commands():
        words = shlex.split(without_setup(line))
        if "--out" in words:
            name = words[words.index("--out") + 1]
            assert {f"/{name}", f"/{name}/"} & set(ignored)


@pytest.mark.parametrize("source", blocks(README, "python"))
def test_python_gives_what_it_says(source: str, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.chdir(REPO)
    examples = doctest.DocTestParser().get_doctest(source, {}, "README", "README.md", 0)
    assert examples.examples
    told: list[str] = []
    runner = doctest.DocTestRunner(optionflags=doctest.NORMALIZE_WHITESPACE)
    runner.run(examples, out=told.append)
    assert runner.failures == 0, "".join(told)


@pytest.mark.parametrize(("name", "text"), [("README.md", README), ("DEVELOPERS.md", DEVELOPERS)])
def test_paths_exist(name: str, text: str):
    candidates = coded([text]) | set(re.findall(r"\]\(([^)#]+)\)", text))
    tops = {path.name for path in REPO.iterdir()} - {".venv", ".git"}
    paths = {each for each in candidates if each.split("/")[0] in tops and re.fullmatch(r"[\w./-]+", each)}
    assert paths, name
    missing = sorted(each for each in paths if not (REPO / each).exists() and not _ignored(each))
    assert missing == []


def test_modules_named_for_contributors_exist():
    stages = {path.name for path in (REPO / "journeys").iterdir() if path.is_dir()}
    named = {tuple(each.split(".")[:2]) for each in coded([DEVELOPERS]) if re.fullmatch(r"[\w.]+", each)}
    modules = {pair for pair in named if len(pair) == 2 and pair[0] in stages}
    assert len(modules) > 8
    missing = [pair for pair in modules if not (REPO / "journeys" / pair[0] / f"{pair[1]}.py").exists()]
    assert missing == []


def _ignored(path: str) -> bool:
    return path.startswith(("club_summary", "club_tally", ".venv"))


def test_names_every_exit_code():
    stated = set(table_after("## The commands"))
    known = {command.DONE, command.FAILED, command.USAGE, command.LIMITS, command.ALARM}
    known |= {StoppedError(number).code for number in (signal.SIGINT, signal.SIGTERM)}
    assert stated == {str(code) for code in known}
    in_docstrings = {
        code
        for each in vars(errors).values()
        if isinstance(each, type) and each.__doc__
        for code in re.findall(r"exit code (\d+)", each.__doc__)
    }
    assert in_docstrings <= stated
    assert {line.split()[0] for line in command.EXIT_CODES.splitlines()[1:] if line.strip()} == stated


def test_names_every_key_of_the_rules():
    assert coded(table_after("## The rules file")) == {field.name for field in fields(jn.JourneyRules)}
    for limit in LIMITS.items():
        assert "{} = {}".format(*limit) in README


def test_names_every_key_of_a_job():
    assert coded(table_after("### The job file")) == {*job.KEYS, *job.ALARM_KEYS}
    rows = re.findall(r"^\| `(\w+)` \| ([^|`]*) \|", README.split("### The job file")[1], re.MULTILINE)
    stated = {key: default.strip() for key, default in rows if default.strip()}
    defaults = {key: str(value) for key, value in {**job.DEFAULTS, **job.ALARM_DEFAULTS}.items()}
    assert stated == defaults | {"horizons": "as the summary", "alarms": "none", "identity": "none"}


def test_the_job_of_the_readme_runs(tmp_path: Path):
    """The worked example: its job file, its two ways of being called, on the demo's log dealt out by day."""
    import pandas as pd

    job_file = next(one for one in blocks(README, "toml") if "lateness" in one)
    (tmp_path / "job.toml").write_text(job_file, encoding="utf-8")
    rules = (REPO / "demo_data" / "rules.toml").read_text(encoding="utf-8")
    rules = rules.replace('by = ["district"]', "").replace('cohort = "month"', "")
    (tmp_path / "rules.toml").write_text(rules, encoding="utf-8")
    log = pd.read_parquet(REPO / "demo_data" / "club_log.parquet")
    log = log[log.happened < "2024-10-20"]
    for number, (day, rows) in enumerate(log.groupby(log.happened.dt.strftime("%Y-%m-%d"))):
        folder = tmp_path / "events" / f"day={day}"
        folder.mkdir(parents=True)
        rows.to_parquet(folder / f"rows-{number}.parquet", index=False)
    lines = [line for block in blocks(README, "text") for line in block.splitlines() if " nightly " in line]
    assert len(lines) == 2
    for line, said in zip(lines, ("expected in the end", '"new_inputs": []'), strict=True):
        words = re.search(r"journeys (nightly job\.toml[^>]*)", line)
        assert words is not None
        environment = os.environ | {"PYTHONPATH": str(REPO), "JOURNEYS_ID_KEY": "a long secret of the bicycle club"}
        done = subprocess.run(
            [sys.executable, "-m", "journeys", *shlex.split(words[1])],
            cwd=tmp_path, env=environment, capture_output=True, text=True,
        )  # fmt: skip
        assert done.returncode in (command.DONE, command.ALARM), done.stderr
        assert said in done.stdout
    assert {path.name for path in (tmp_path / "published").iterdir()} >= {"latest", "history.parquet", "runs.jsonl"}


def test_states_the_defaults_of_the_rules():
    rules = jn.JourneyRules("who", "when", "what", silence=None)
    rows = dict(re.findall(r"^\| `(\w+)` \| `([^`]+)` \|", README, re.MULTILINE))
    assert len(rows) > 5
    for key, default in rows.items():
        value = getattr(rules, key)
        if key != "limits":
            assert default == (str(value).lower() if isinstance(value, bool) else f'"{value}"'), key


def test_names_every_finding():
    assert coded(table_after("### Findings")) == set(MESSAGES)


def test_names_every_flag():
    known = {
        linear.TOO_FEW, model.END_NOT_SEEN, model.FEW_AT_END, model.COMPLETED_ONLY, outcomes.UNREACHABLE,
        measures.SOME_NEVER, measures.NO_DWELL, measures.NO_SPREAD, return_time.NEVER_BACK, bootstrap.UNDEFINED,
        time_to_convert.BETWEEN_BINS, time_to_convert.TOO_LONG, time_to_convert.NO_CURVE, "no move out was seen",
        linear.DOUBTFUL, elapsed.NO_DISTRIBUTION, curve_result.NEVER_THAT_MANY, curve_result.NO_BAND,
        quantiles.BY_CURVE, quantiles.TOO_LARGE, quantiles.NOT_IN_REACH, comeback.NOT_FOLLOWED,
        comeback.STILL_SILENCE, comeback.NONE_SEEN, within.NO_UPPER_END, stages_by_log.NOT_TO_THE_END,
        stage_rows.NEVER_SEEN, stage_rows.ABOVE_ONE, compare.ON_ONE_SIDE, removal.OFF_THE_WAY,
        touch_shares.DIFFER, touch_shares.TOO_SHORT, credit_by_log.BELOW_ZERO, credit_by_log.NOTHING_PAID,
        worth.NOT_OF_A_PART, worth.NOTHING_IN_ALL, sensitivity.LESS_THAN_A_POINT, what_if.WHAT_IF, what_if.NEW_MOVE,
        "no sure entry", memory_check.THIN,
    }  # fmt: skip
    with_numbers = {
        "one customer holds 12 % of the value",
        "11 of 30d followed",
        "not run: 11 conversions of journeys whose start was seen, fewer than 20",
        "followed for 29 days, no longer than the silence",
    }
    assert coded(table_after("Flags are words")) == known | with_numbers


def test_names_every_option():
    helped = "".join(
        run([sys.executable, "-m", "journeys", name, "--help"], REPO).stdout
        for name in ("summary", "audit", "tally", "nightly", "forget")
    )
    options = set(re.findall(r"--[a-z][a-z-]+", helped)) - {"--help"}
    assert options == set(re.findall(r"(?<=[`\s])--[a-z][a-z-]+", README))


def test_names_only_what_python_has():
    for name in re.findall(r"\bjn\.(\w+)", README):
        assert name in jn.__all__, name


def test_the_query_of_a_colleague_gives_what_is_said(monkeypatch: pytest.MonkeyPatch):
    duckdb = pytest.importorskip("duckdb")
    monkeypatch.chdir(REPO)
    query = next(one for one in blocks(README, "sql") if "club_log" in one)
    people, _, percent, days = duckdb.connect().sql(query).fetchall()[0]
    assert f"It says {percent:.1f} % and {days:.1f} days." in README
    assert f"{people:,} people" in README


def test_its_numbers_of_the_club_are_those_of_today():
    """The tables of the section on SQL, of silences and of `repeats`."""
    rules = jn.JourneyRules.from_toml(REPO / "demo_data" / "rules.toml")
    log = REPO / "demo_data" / "club_log.parquet"
    tally = jn.tally(log, rules)
    fit = jn.JourneyModel().fit(tally)
    lines = jn.summarise(fit).reconciliation().itertuples()
    so_far, decided, undecided, unsure, expected = lines
    for one in (so_far, decided):
        assert f"| {int(one.n):,} of {int(one.of):,} | {100 * one.estimate:.1f} %" in README
    for one in (undecided, unsure):
        assert f"{int(one.n):,} journeys" in README
    share = f"{100 * expected.estimate:.1f} % ({100 * expected.low:.1f}–{100 * expected.high:.1f})"
    assert f"| {share}: each" in README
    joined = tally.table("journeys").query("outcome == 'joined' and sure")
    assert f"joined so far | {joined.elapsed.sum() / joined.n.sum() / 86_400e6:.1f}: too short" in README
    days = jn.time_to_convert(fit).to_frame().query("measure == 'days'").iloc[0]
    assert f"by the model | {days.estimate:.1f} ({days.low:.1f}–{days.high:.1f}): too long" in README
    by_log = jn.check(fit).to_frame().set_index("check_name").loc["days to convert", "compared"]
    within, log_days = re.search(r"within (\d+ days): .* log ([\d.]+) days", by_log).groups()  # type: ignore[union-attr]
    assert f"within {within}, by the log (`jn.check`) | {log_days}: undecided" in README
    for one in jn.audit(log, rules).silences.itertuples():
        shares = (one.came_back, one.soon_back, one.conversion)
        cells = " | ".join(f"{100 * share:.1f} %" for share in shares)
        assert f"| {one.silence} | {one.n_silent:,} | {cells} |" in README


def test_ci_runs_the_test_commands_of_the_readme(tmp_path: Path):
    """`.ci/run --show` prints the commands it found, without running them."""
    assert os.access(CI, os.X_OK)
    done = subprocess.run([CI, "--show"], cwd=tmp_path, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    assert done.stdout.splitlines() == [without_setup(line) for line in commands() if PYTEST in line]
