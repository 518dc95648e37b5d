"""The command as it is used: what it writes, prints and returns, and what it says when it refuses."""

from __future__ import annotations

import json
import logging
import re
import subprocess
import sys
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import pandas as pd
import pyarrow.parquet as pq
import pytest
from club_log import LOG, RULES, club_overview, small_log

import journeys as jn
from journeys.command.main import DONE, FAILED, LIMITS, USAGE, main

SUMMARY_FILES = {"summary.parquet", "summary.csv", "summary.md", "summary.html", "columns.csv"}
SMALL_RULES = """customer = "who"
time = "when"
event = "what"
converted = ["joined"]
churned = ["declined"]
silence = "30d"
complete_history = true
"""


@dataclass(frozen=True)
class Ran:
    """What one run left behind."""

    code: int
    out: str
    err: str

    @property
    def refusal(self) -> str:
        """The one line a refusal says, on stderr and nowhere else."""
        assert self.out == ""
        (line,) = self.err.splitlines()
        assert line.startswith("ERROR ")
        assert "Traceback" not in line
        assert len(line) > 30
        return line.removeprefix("ERROR ")


@pytest.fixture(autouse=True)
def _loggers_left_as_they_were() -> Iterator[None]:
    root = logging.getLogger()
    level, handlers = root.level, root.handlers[:]
    yield
    root.setLevel(level)
    root.handlers[:] = handlers


@pytest.fixture
def run(capsys: pytest.CaptureFixture[str]) -> Callable[..., Ran]:
    def call(*argv: str | Path) -> Ran:
        capsys.readouterr()
        code = main([str(word) for word in argv])
        told = capsys.readouterr()
        return Ran(code, told.out, told.err)

    return call


Run = Callable[..., Ran]


def rules_file(folder: Path, text: str = SMALL_RULES, **changes: str) -> Path:
    """Write a rules file with some lines changed; an empty change takes the line out."""
    for key, value in changes.items():
        lines = [line for line in text.splitlines(keepends=True) if not line.startswith(f"{key} = ")]
        text = "".join([f"{key} = {value}\n" if value else "", *lines])
    path = folder / "rules.toml"
    path.write_text(text, encoding="utf-8")
    return path


def log_file(folder: Path, frame: pd.DataFrame | None = None) -> Path:
    """Write a small log."""
    path = folder / "log.parquet"
    (small_log() if frame is None else frame).to_parquet(path, index=False)
    return path


def all_files(folder: Path) -> set[str]:
    """Names of all there is in a folder and below, hidden files too."""
    return {path.relative_to(folder).as_posix() for path in folder.rglob("*")} if folder.exists() else set()


# --- what the commands do ---------------------------------------------------------------------------------


def test_summary_writes_its_files_and_prints_the_headline(run: Run, tmp_path: Path) -> None:
    ran = run("summary", LOG, "--rules", RULES, "--out", tmp_path / "new" / "folder")
    assert ran.code == DONE
    assert all_files(tmp_path / "new" / "folder") == {*SUMMARY_FILES, "groups.csv"}
    plain = club_overview().plain
    assert ran.out.startswith(f"joined so far {plain.n_converted:,} of {plain.n_journeys:,} journeys of ")
    assert [line.split()[:2] for line in ran.err.splitlines()] == [["INFO", "wrote"]] * 6


def test_summary_files_hold_what_the_library_answers(run: Run, tmp_path: Path) -> None:
    assert run("summary", LOG, "--rules", RULES, "--out", tmp_path).code == DONE
    wanted = club_overview().to_frame()
    from_parquet = pd.read_parquet(tmp_path / "summary.parquet")
    from_csv = pd.read_csv(tmp_path / "summary.csv", keep_default_na=True)
    assert list(from_parquet) == list(from_csv) == list(wanted)
    finite = wanted.estimate[lambda column: column.abs() < float("inf")]
    for frame in (from_parquet, from_csv):
        pd.testing.assert_series_equal(frame.estimate.dropna(), finite, check_names=False)
    infinite = wanted.index[wanted.estimate == float("inf")]
    assert len(infinite)
    assert from_csv.loc[infinite, "estimate"].isna().all()
    assert from_csv.loc[infinite, "flag"].str.contains("some never do").all()


def test_summary_from_the_kept_tally_is_the_same_to_the_byte(run: Run, tmp_path: Path) -> None:
    first = run("summary", LOG, "--rules", RULES, "--out", tmp_path / "a", "--keep-tally")
    assert all_files(tmp_path / "a") == {*SUMMARY_FILES, "groups.csv", "tally.parquet"}
    again = run("summary", tmp_path / "a" / "tally.parquet", "--out", tmp_path / "b")
    assert (first.code, again.code) == (DONE, DONE)
    assert again.out == first.out
    assert all_files(tmp_path / "b") == {*SUMMARY_FILES, "groups.csv"}
    for name in SUMMARY_FILES:
        assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes()


def test_saved_tally_takes_the_rules_it_was_counted_by(run: Run, tmp_path: Path) -> None:
    log, rules = log_file(tmp_path), rules_file(tmp_path)
    assert run("tally", log, "--rules", rules, "--out", tmp_path / "t.parquet").code == DONE
    assert run("audit", tmp_path / "t.parquet", "--rules", rules).code == DONE
    refused = run("audit", tmp_path / "t.parquet", "--rules", rules_file(tmp_path, silence='"40d"'))
    assert refused.code == USAGE
    assert "not the rules" in refused.refusal
    assert "leave --rules out" in refused.refusal


def test_tally_writes_one_file_that_loads(run: Run, tmp_path: Path) -> None:
    log, rules = log_file(tmp_path), rules_file(tmp_path)
    ran = run("tally", log, "--rules", rules, "--out", tmp_path / "t.parquet")
    assert ran.code == DONE
    tally = jn.Tally.load(tmp_path / "t.parquet")
    assert tally == jn.tally(log, jn.JourneyRules.from_toml(rules))
    assert ran.out == tally.summary() + "\n"
    assert all_files(tmp_path) == {"log.parquet", "rules.toml", "t.parquet"}


def test_tally_without_any_outcome_is_no_fault(run: Run, tmp_path: Path) -> None:
    rules = rules_file(tmp_path, converted='["bought"]', churned='["left"]')
    assert run("tally", log_file(tmp_path), "--rules", rules, "--out", tmp_path / "t.parquet").code == DONE


def test_audit_prints_checks_and_findings_within_a_hundred_columns(run: Run) -> None:
    ran = run("audit", LOG, "--rules", RULES)
    assert ran.code == DONE
    assert "This log can carry the model." in ran.out
    assert max(len(line) for line in ran.out.splitlines()[1:]) <= 100
    assert re.search(r"missing_customer +member +18 +left out: no customer id", ran.out)
    # Row numbers from 0: the first row without a member is the first of the file's.
    first = int(pd.read_parquet(LOG, columns=["member"]).member.isna().to_numpy().argmax())
    assert f"[rows {first}, " in ran.out
    assert ran.err == ""


def test_audit_says_that_a_log_is_too_short(run: Run, tmp_path: Path) -> None:
    ran = run("audit", log_file(tmp_path), "--rules", rules_file(tmp_path, silence='"300d"'))
    assert ran.code == DONE
    assert "This log cannot carry the model." in ran.out
    assert re.search(r"^  no +length of the log", ran.out, flags=re.MULTILINE)


def test_names_from_the_data_cannot_steer_the_terminal_nor_break_the_table(run: Run, tmp_path: Path) -> None:
    name = "\x1b[2J\u202e" + "joined\n" * 200
    log = log_file(tmp_path, small_log(won=name))
    rules = rules_file(tmp_path, converted=json.dumps([name]))
    audited = run("audit", log, "--rules", rules)
    summed = run("summary", log, "--rules", rules, "--out", tmp_path / "out")
    assert (audited.code, summed.code) == (DONE, DONE)
    assert not re.search(r"[\x00-\x09\x0b-\x1f\u202e]", audited.out + audited.err + summed.out + summed.err)
    assert max(len(line) for line in audited.out.splitlines()[1:]) <= 130


@pytest.mark.parametrize("times", [["3d"], ["12h", "45d"]])
def test_horizons_are_those_asked_for(run: Run, tmp_path: Path, times: list[str]) -> None:
    words = [word for time in times for word in ("--horizon", time)]
    assert run("summary", LOG, "--rules", RULES, "--out", tmp_path, *words).code == DONE
    frame = pd.read_csv(tmp_path / "summary.csv")
    shares = frame[(frame.section == "time_to_convert") & (frame.measure == "converted")]
    shares = shares[(shares.basis == "log") | (shares.horizon == "in the end")]
    assert shares.horizon.tolist() == ["so far", *times, "in the end"]
    assert shares.estimate[1:].is_monotonic_increasing


# --- for machines -----------------------------------------------------------------------------------------


def strict(text: str) -> dict[str, object]:
    """Parse JSON as the standard has it: no NaN, no Infinity."""

    def refuse(token: str) -> None:
        raise AssertionError(f"{token} is no JSON")

    answer = json.loads(text, parse_constant=refuse)
    assert isinstance(answer, dict)
    return answer


def test_summary_json_has_every_number_to_its_last_digit(run: Run, tmp_path: Path) -> None:
    answer = strict(run("summary", LOG, "--rules", RULES, "--out", tmp_path, "--json").out)
    frame = pd.read_parquet(tmp_path / "summary.parquet")
    rows = pd.DataFrame(answer["estimates"])
    assert answer["tally"] == club_overview().fit.tally.checksum
    assert list(rows) == list(frame)
    for column in ("estimate", "std_error", "low", "high"):
        assert rows[column].isna().any()
        assert rows[column].dropna().tolist() == frame[column].dropna().tolist()


def test_audit_json_has_findings_with_row_numbers(run: Run) -> None:
    answer = strict(run("audit", LOG, "--rules", RULES, "--json").out)
    assert answer["carries_model"] is True
    assert {"check_name", "value", "verdict", "note"} == set(answer["checks"][0])
    missing = next(one for one in answer["findings"] if one["code"] == "missing_time")
    times = pd.read_parquet(LOG, columns=["happened"]).happened
    assert missing["n"] == times.isna().sum()
    assert missing["rows"] == times.index[times.isna()][:10].tolist()


# --- the same log, however it comes -----------------------------------------------------------------------


def test_row_order_kind_of_file_and_folders_do_not_matter(run: Run, tmp_path: Path) -> None:
    frame = pd.read_parquet(LOG)
    # Rows of one customer at one time have no order but that of the file, and a row sent twice counts once.
    frame = frame[~frame.duplicated(["member", "happened"])].reset_index(drop=True)
    mixed = frame.sample(frac=1.0, random_state=7)
    halves = tmp_path / "halves"
    (halves / "later").mkdir(parents=True)
    frame.to_parquet(tmp_path / "as_it_is.parquet", index=False)
    mixed.to_parquet(tmp_path / "mixed.parquet", index=False)
    mixed.to_csv(tmp_path / "mixed.csv", index=False)
    mixed[30_000:].to_parquet(halves / "a.parquet", index=False)
    mixed[:30_000].to_parquet(halves / "later" / "b.parquet", index=False)
    pages = {}
    for name in ("as_it_is.parquet", "mixed.parquet", "mixed.csv", "halves"):
        assert run("summary", tmp_path / name, "--rules", RULES, "--out", tmp_path / "out" / name).code == DONE
        pages[name] = tuple((tmp_path / "out" / name / one).read_bytes() for one in sorted(SUMMARY_FILES))
    assert len(set(pages.values())) == 1


# --- refusals ---------------------------------------------------------------------------------------------


def test_missing_log(run: Run, tmp_path: Path) -> None:
    for words in (("--rules", RULES), ()):
        ran = run("summary", tmp_path / "none.parquet", *words, "--out", tmp_path / "out")
        assert ran.code == FAILED
        assert "none.parquet: no such file" in ran.refusal
    assert all_files(tmp_path) == set()


def test_folder_without_files(run: Run, tmp_path: Path) -> None:
    (tmp_path / "logs").mkdir()
    ran = run("audit", tmp_path / "logs", "--rules", RULES)
    assert ran.code == FAILED
    assert re.search("logs holds no file to read; wanted one of .parquet", ran.refusal)


@pytest.mark.parametrize("share", [0.2, 0.9])
def test_damaged_parquet(run: Run, tmp_path: Path, share: float) -> None:
    whole = log_file(tmp_path).read_bytes()
    cut = tmp_path / "cut.parquet"
    cut.write_bytes(whole[: int(share * len(whole))])
    ran = run("summary", cut, "--rules", rules_file(tmp_path), "--out", tmp_path / "out")
    assert ran.code == FAILED
    assert "cut.parquet: not a whole Parquet file" in ran.refusal
    assert not (tmp_path / "out").exists()


def test_damaged_tally(run: Run, tmp_path: Path) -> None:
    path = tmp_path / "t.parquet"
    assert run("tally", log_file(tmp_path), "--rules", rules_file(tmp_path), "--out", path).code == DONE
    table = pq.read_table(path)
    other = table.set_column(table.schema.get_field_index("n"), "n", [[7] * len(table)])
    pq.write_table(other.replace_schema_metadata(table.schema.metadata), path)
    ran = run("summary", path, "--out", tmp_path / "out")
    assert ran.code == FAILED
    assert "damaged" in ran.refusal
    assert not (tmp_path / "out").exists()


def test_log_without_rules(run: Run, tmp_path: Path) -> None:
    ran = run("summary", log_file(tmp_path), "--out", tmp_path / "out")
    assert ran.code == USAGE
    assert re.search("--rules is missing: .*log.parquet is not a saved tally; wanted --rules FILE", ran.refusal)


def test_unknown_rule(run: Run, tmp_path: Path) -> None:
    rules = rules_file(tmp_path, SMALL_RULES.replace("silence", "silense"))
    ran = run("summary", log_file(tmp_path), "--rules", rules, "--out", tmp_path / "out")
    assert ran.code == USAGE
    assert "'silense' is no setting of the rules; did you mean 'silence'?" in ran.refusal
    assert not (tmp_path / "out").exists()


def test_several_wrong_rules_are_told_at_once_in_one_line(run: Run, tmp_path: Path) -> None:
    rules = rules_file(tmp_path, silence='"1 month"', complete_history='"perhaps"')
    ran = run("audit", log_file(tmp_path), "--rules", rules)
    assert ran.code == USAGE
    assert "'1 month'" in ran.refusal
    assert "; and complete_history: got 'perhaps'" in ran.refusal


@pytest.mark.parametrize("text", ["silence = ", None])
def test_rules_file_that_cannot_be_read(run: Run, tmp_path: Path, text: str | None) -> None:
    rules = tmp_path / "mine.toml"
    if text is not None:
        rules.write_text(text, encoding="utf-8")
    ran = run("audit", log_file(tmp_path), "--rules", rules)
    assert ran.code == USAGE
    assert re.search("rules file .*mine.toml: (not TOML|No such file)", ran.refusal)


def test_missing_column(run: Run, tmp_path: Path) -> None:
    ran = run("audit", log_file(tmp_path), "--rules", rules_file(tmp_path, customer='"whom"'))
    assert ran.code == FAILED
    assert "has no column 'whom'; there are 'who', 'when', 'what'" in ran.refusal


@pytest.mark.parametrize("command", ["summary", "audit"])
def test_no_outcome_ever_seen(run: Run, tmp_path: Path, command: str) -> None:
    rules = rules_file(tmp_path, converted='["bought"]', churned='["left"]')
    out = ("--out", tmp_path / "out") if command == "summary" else ()
    ran = run(command, log_file(tmp_path), "--rules", rules, *out)
    assert ran.code == FAILED
    assert "no outcome was ever seen: wanted at least one of 'bought', 'left'" in ran.refusal
    assert not (tmp_path / "out").exists()


def test_rules_without_a_converted_outcome(run: Run, tmp_path: Path) -> None:
    rules = rules_file(tmp_path, converted="")
    ran = run("summary", log_file(tmp_path), "--rules", rules, "--out", tmp_path / "out")
    assert ran.code == USAGE
    assert "no converted outcome; wanted converted=" in ran.refusal


def test_log_shorter_than_the_silence(run: Run, tmp_path: Path) -> None:
    rules = rules_file(tmp_path, silence='"300d"')
    ran = run("summary", log_file(tmp_path), "--rules", rules, "--out", tmp_path / "out")
    assert ran.code == FAILED
    assert re.search("200.0 days long, no longer than the silence of 300 days.*wanted a longer log", ran.refusal)
    assert not (tmp_path / "out").exists()


def test_broken_limits_publish_nothing(run: Run, tmp_path: Path) -> None:
    frame = small_log()
    frame.loc[[3, 5], "what"] = None
    log = log_file(tmp_path, frame)
    rules = rules_file(tmp_path)
    ran = run("summary", log, "--rules", rules, "--out", tmp_path / "out", "--keep-tally")
    assert ran.code == LIMITS
    assert re.search(r"2 of 161 rows \(1.24 %\).*limit is 1.00 %, so nothing was published", ran.refusal)
    assert not (tmp_path / "out").exists()
    rules.write_text(SMALL_RULES + "[limits]\nunreadable = 0.02\n", encoding="utf-8")
    assert run("summary", log, "--rules", rules, "--out", tmp_path / "out").code == DONE


def test_limits_hold_for_a_saved_tally_too(run: Run, tmp_path: Path) -> None:
    frame = small_log()
    frame.loc[:9, "when"] = pd.NaT
    assert (
        run("tally", log_file(tmp_path, frame), "--rules", rules_file(tmp_path), "--out", tmp_path / "t").code == DONE
    )
    ran = run("summary", tmp_path / "t", "--out", tmp_path / "out")
    assert ran.code == LIMITS
    assert "10 of 161 rows" in ran.refusal
    assert not (tmp_path / "out").exists()


def test_file_in_the_place_of_the_folder(run: Run, tmp_path: Path) -> None:
    (tmp_path / "out").write_text("mine", encoding="utf-8")
    ran = run("summary", log_file(tmp_path), "--rules", rules_file(tmp_path), "--out", tmp_path / "out")
    assert ran.code == USAGE
    assert re.search("--out .*out: is a file; wanted a folder", ran.refusal)
    ran = run("summary", log_file(tmp_path), "--rules", rules_file(tmp_path), "--out", tmp_path / "out" / "below")
    assert ran.code == FAILED
    assert "below: Not a directory; nothing was written" in ran.refusal
    assert (tmp_path / "out").read_text(encoding="utf-8") == "mine"


def test_folder_in_the_place_of_a_file(run: Run, tmp_path: Path) -> None:
    log, rules = log_file(tmp_path), rules_file(tmp_path)
    ran = run("tally", log, "--rules", rules, "--out", tmp_path)
    assert ran.code == USAGE
    assert "is a folder; wanted a file, such as" in ran.refusal
    ran = run("tally", log, "--rules", rules, "--out", tmp_path / "none" / "t.parquet")
    assert ran.code == USAGE
    assert re.search("there is no folder .*none; make it first", ran.refusal)
    (tmp_path / "out" / "summary.csv").mkdir(parents=True)
    ran = run("summary", log, "--rules", rules, "--out", tmp_path / "out")
    assert ran.code == FAILED
    assert "summary.csv: Is a directory; nothing was written" in ran.refusal
    assert all_files(tmp_path / "out") == {"summary.csv"}


def test_place_that_may_not_be_written_in(run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    # Permissions do not bind a superuser, who may be running this: the refusal of the system is played.
    def refuse(*_: object, **where: object) -> None:
        raise PermissionError(13, "Permission denied", str(where["dir"]))

    monkeypatch.setattr("journeys.files.tempfile.mkstemp", refuse)
    out = tmp_path / "out"
    for words in (("summary", "--out", out), ("tally", "--out", tmp_path / "t.parquet")):
        ran = run(words[0], LOG, "--rules", RULES, *words[1:])
        assert ran.code == FAILED
        assert re.search(f"{re.escape(str(tmp_path))}.*: Permission denied; nothing was written", ran.refusal)
    assert all_files(out) == set()


@pytest.mark.parametrize("stage", ["write_csv", "write_parquet"])
@pytest.mark.parametrize("before", [False, True])
def test_failure_while_writing_leaves_nothing_or_the_old_files(
    run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, stage: str, before: bool
) -> None:
    log, rules, out = log_file(tmp_path), rules_file(tmp_path), tmp_path / "out"
    if before:
        assert run("summary", log, "--rules", rules, "--out", out).code == DONE
    old = {name: (out / name).read_bytes() for name in all_files(out)}

    def full(frame: pd.DataFrame, path: Path) -> None:
        path.write_text("half of", encoding="utf-8")
        raise OSError(28, "No space left on device", str(path))

    monkeypatch.setattr(f"journeys.show.summary.{stage}", full)
    ran = run("summary", log, "--rules", rules, "--out", out, "--keep-tally", "--horizon", "9d")
    assert ran.code == FAILED
    assert "No space left on device; nothing was written" in ran.refusal
    assert {name: (out / name).read_bytes() for name in all_files(out)} == old


def test_fault_of_the_program_is_told_in_one_line(run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: object, **__: object) -> None:
        raise KeyError("two\nlines \x1b[2J")

    monkeypatch.setattr("journeys.show.summary.write_summary", fail)
    ran = run("summary", log_file(tmp_path), "--rules", rules_file(tmp_path), "--out", tmp_path / "out")
    assert ran.code == FAILED
    assert "KeyError" in ran.refusal
    assert "--debug" in ran.refusal
    assert "\x1b" not in ran.err


def test_debug_shows_where_an_error_came_from(run: Run, tmp_path: Path) -> None:
    ran = run("summary", tmp_path / "none.parquet", "--rules", RULES, "--out", tmp_path / "out", "--debug")
    assert ran.code == FAILED
    assert "no such file" in ran.err.splitlines()[0]
    assert "Traceback (most recent call last)" in ran.err
    assert "LogError" in ran.err


@pytest.mark.parametrize(
    ("words", "told"),
    [
        ((), "required: COMMAND"),
        (("sumary",), "invalid choice: 'sumary'"),
        (("summary", "LOG"), "required: --out"),
        (("summary", "--out", "x"), "required: LOG"),
        (("audit", "LOG", "--colour"), "unrecognized arguments: --colour"),
        (("audit", "LOG", "--rules"), "--rules: expected one argument"),
        (("tally", "LOG", "--out", "x", "--json"), "unrecognized arguments: --json"),
    ],
)
def test_wrong_usage(run: Run, words: tuple[str, ...], told: str) -> None:
    ran = run(*words)
    assert ran.code == USAGE
    assert told in ran.refusal
    assert "--help" in ran.refusal


@pytest.mark.parametrize("time", ["soon", "14", "-3d", "0s", "1 month"])
def test_horizon_that_is_no_duration(run: Run, tmp_path: Path, time: str) -> None:
    ran = run("summary", LOG, "--rules", RULES, "--out", tmp_path / "out", f"--horizon={time}")
    assert ran.code == USAGE
    assert f"--horizon: got {time!r}" in ran.refusal
    assert not (tmp_path / "out").exists()


def test_warnings_are_told_and_do_not_fail(run: Run, tmp_path: Path) -> None:
    rules = rules_file(tmp_path, silence='"150d"')
    ran = run("summary", log_file(tmp_path), "--rules", rules, "--out", tmp_path / "out")
    assert ran.code == DONE
    assert any(re.match("WARNING the log of 200.0 days is shorter", line) for line in ran.err.splitlines())
    assert all(line.startswith(("INFO ", "WARNING ")) for line in ran.err.splitlines())


# --- help, and the command as a process of its own --------------------------------------------------------


def test_every_command_named_in_the_help_is_there(run: Run) -> None:
    helped = run("--help")
    assert helped.code == DONE
    assert helped.err == ""
    commands = re.findall(r"^    (\w+) ", helped.out, flags=re.MULTILINE)
    assert {"summary", "audit", "tally"} <= set(commands)
    for command in commands:
        ran = run(command, "--help")
        assert ran.code == DONE
        assert f"journeys {command}" in ran.out
        assert "exit codes:" in ran.out


def as_process(*words: str | Path, where: Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "journeys", *map(str, words)],
        cwd=where, capture_output=True, text=True, encoding="utf-8", check=False, timeout=120,
    )  # fmt: skip


def test_as_a_process(tmp_path: Path) -> None:
    log_file(tmp_path)
    rules_file(tmp_path)
    done = as_process("summary", "log.parquet", "--rules", "rules.toml", "--out", "out", where=tmp_path)
    assert done.returncode == 0
    assert done.stdout.startswith("joined so far 20 of 61 journeys of 61 people, 32.8 %")
    assert all_files(tmp_path / "out") == SUMMARY_FILES
    wrong = as_process("summary", "log.parquet", "--rules", "none.toml", "--out", "out", where=tmp_path)
    assert wrong.returncode == 2
    assert wrong.stdout == ""
    assert wrong.stderr.splitlines() == ["ERROR rules file none.toml: No such file or directory"]


def test_as_a_process_with_json(tmp_path: Path) -> None:
    log_file(tmp_path)
    rules_file(tmp_path)
    done = as_process("audit", "log.parquet", "--rules", "rules.toml", "--json", where=tmp_path)
    assert done.returncode == 0
    assert strict(done.stdout)["carries_model"] is True
