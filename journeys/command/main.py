"""`journeys` on the command line: parse, log, call, return an exit code. No statistics here."""

from __future__ import annotations

import argparse
import io
import json
import logging
import os
import sys
import warnings
from collections.abc import Sequence
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

from journeys.errors import JourneysError, JourneysWarning, LimitError, LogError, RulesError

if TYPE_CHECKING:
    from journeys.intake.rules import JourneyRules
    from journeys.tally.tally import Tally

DONE, FAILED, USAGE, LIMITS = 0, 1, 2, 3
EXIT_CODES = """exit codes:
  0  done
  1  failed
  2  wrong usage or settings
  3  the log broke its quality limits, nothing was published
"""
# Several faults are told at once; the name of a file may be thousands of signs long.
_LONGEST_LINE = 4_000
logger = logging.getLogger("journeys")


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command.

    Parameters
    ----------
    argv : sequence of str, optional
        The words after the program's name; default those of the process.

    Returns
    -------
    int
        The exit code.
    """
    parser = _parser()
    try:
        options = parser.parse_args(argv)
    except SystemExit as stop:
        return int(stop.code or 0)
    logging.basicConfig(stream=sys.stderr, format="%(levelname)s %(message)s", level=logging.INFO, force=True)
    with warnings.catch_warnings():
        warnings.showwarning = _log_warning
        warnings.simplefilter("always", JourneysWarning)
        try:
            _tell(options.run(options))
        except JourneysError as error:
            code = LIMITS if isinstance(error, LimitError) else USAGE if isinstance(error, RulesError) else FAILED
            return _refused(error, code, options.debug)
        except _PrintError as error:
            return _refused(error, FAILED, options.debug)
        except OSError as error:
            place = f"{error.filename}: " if error.filename else ""
            return _refused(error, FAILED, options.debug, f"{place}{error.strerror or error}; nothing was written")
        except MemoryError as error:
            return _refused(error, FAILED, options.debug, "there is not memory enough for this; nothing was written")
        except Exception as error:
            fault = f"{type(error).__name__}: {error}; this should not happen, --debug shows where it did"
            return _refused(error, FAILED, options.debug, fault)
    return DONE


class _PrintError(Exception):
    """Standard output did not take the answer; what was written to files stands."""


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="journeys",
        description="From an event log to how many convert, how soon, where they are lost, how sure.",
        epilog=EXIT_CODES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    commands = parser.add_subparsers(required=True, metavar="COMMAND")
    for name, run, what in (
        ("summary", _summary, "the main job: count the log, fit, and write the summary"),
        ("audit", _audit, "what was left out of the log, and whether it can carry the model"),
        ("tally", _tally, "count the log and keep the counts"),
    ):
        command = commands.add_parser(
            name,
            help=what,
            description=what,
            epilog=EXIT_CODES,
            formatter_class=argparse.RawDescriptionHelpFormatter,
        )
        command.set_defaults(run=run)
        command.add_argument(
            "log", metavar="LOG", type=_named, help="Parquet, CSV or Arrow file, a folder of them, or a saved tally"
        )
        command.add_argument(
            "--rules", metavar="FILE", type=_named, help="rules file (TOML); not needed for a saved tally"
        )
        command.add_argument("--debug", action="store_true", help="show where an error came from")
        if name == "summary":
            command.add_argument("--out", metavar="FOLDER", type=_named, required=True, help="where the summary goes")
            command.add_argument("--keep-tally", action="store_true", help="write the tally there too")
            command.add_argument(
                "--horizon",
                action="append",
                metavar="TIME",
                help='share converted within this time, such as "14d"; may be given several times',
            )
        if name == "tally":
            command.add_argument("--out", metavar="FILE", type=_named, required=True, help="where the tally goes")
        else:
            command.add_argument("--json", action="store_true", help="print for machines")
    return parser


def _named(path: str) -> str:
    """Return a path that a file can have; an empty one is what a variable of the shell that is not set gives."""
    try:
        path.encode()
    except UnicodeEncodeError:
        msg = "the path is not UTF-8"
        raise argparse.ArgumentTypeError(msg) from None
    if not path or "\0" in path:
        msg = "the path is empty" if not path else "the path holds a zero byte"
        raise argparse.ArgumentTypeError(msg)
    return path


def _summary(options: argparse.Namespace) -> str:
    from journeys.models.model import JourneyModel
    from journeys.questions.overview import summarise
    from journeys.show.summary import summary_text, write_summary

    out = Path(options.out)
    if out.exists() and not out.is_dir():
        msg = f"--out {out}: is a file; wanted a folder, new or there already"
        raise RulesError(msg)
    horizons = _horizons(options)
    tally = _counted(options)
    check_limits(tally)
    fit = JourneyModel().fit(tally)
    overview = summarise(fit, horizons)
    written = write_summary(overview, out, keep_tally=options.keep_tally)
    for path in written:
        logger.info("wrote %s", path)
    if options.json:
        from journeys.show.tables import file_frame

        return _as_json({"tally": tally.checksum, "estimates": _records(file_frame(overview.to_frame()))})
    return summary_text(overview)


def _audit(options: argparse.Namespace) -> str:
    from journeys.questions.audit import audit
    from journeys.tally.store import is_tally

    seen = audit(_counted(options)) if is_tally(options.log) else audit(options.log, _rules(options))
    if options.json:
        return _as_json(
            {
                "carries_model": seen.carries_model,
                "checks": _records(seen.checks),
                "silences": _records(seen.silences),
                "findings": _records(seen.findings),
            }
        )
    return seen.summary() + "\n"


def _tally(options: argparse.Namespace) -> str:
    out = Path(options.out)
    if out.is_dir():
        msg = f"--out {out}: is a folder; wanted a file, such as {out / 'tally.parquet'}"
        raise RulesError(msg)
    if not out.parent.is_dir():
        msg = f"--out {out}: there is no folder {out.parent}; make it first, or name another place"
        raise RulesError(msg)
    tally = _counted(options)
    tally.save(options.out)
    logger.info("wrote %s", options.out)
    return tally.summary() + "\n"


def _horizons(options: argparse.Namespace) -> list[str] | None:
    """Return --horizon as given, once each can be read."""
    from journeys.checks import duration_us

    for one in options.horizon or ():
        try:
            duration_us(one, "--horizon")
        except ValueError as fault:
            raise RulesError(str(fault)) from None
    return options.horizon  # type: ignore[no-any-return]


def _counted(options: argparse.Namespace) -> Tally:
    """Return the tally of LOG, or LOG itself where it is a saved one."""
    from journeys.tally.store import is_tally, load

    if is_tally(options.log):
        tally = load(options.log)
        if options.rules is not None and _rules(options) != tally.rules:
            msg = (
                f"--rules {options.rules}: these are not the rules {options.log} was counted by; leave --rules out, "
                "or count the log again"
            )
            raise RulesError(msg)
        return tally
    from journeys.tally.count import count_log

    return count_log(options.log, _rules(options), progress=sys.stderr.isatty())


def _rules(options: argparse.Namespace) -> JourneyRules:
    from journeys.intake.rules import JourneyRules

    if options.rules is None:
        if not Path(options.log).exists():
            msg = f"{options.log}: no such file"
            raise LogError(msg)
        msg = f"--rules is missing: {options.log} is not a saved tally; wanted --rules FILE, as for any event log"
        raise RulesError(msg)
    return JourneyRules.from_toml(options.rules)


def check_limits(tally: Tally) -> None:
    """Raise a LimitError if more rows were unreadable than the rules allow."""
    n, limit = tally.record.n_unreadable, tally.rules.limits["unreadable"]
    if n > limit * tally.n_rows:
        msg = (
            f"{n:,} of {tally.n_rows:,} rows ({100 * n / tally.n_rows:.2f} %) have no readable customer, time or "
            f"event; the limit is {100 * limit:.2f} %, so nothing was published. Mend the export, or raise [limits] "
            "unreadable in the rules; `journeys audit` says which rows"
        )
        raise LimitError(msg)


def _records(frame: Any) -> list[dict[str, Any]]:
    """Return rows for JSON: numbers to their last digit, null where there is none."""
    plain = frame.astype(object)
    records: list[dict[str, Any]] = plain.where(frame.notna(), None).to_dict(orient="records")
    return records


def _as_json(answer: dict[str, Any]) -> str:
    return json.dumps(answer, indent=1, allow_nan=False) + "\n"


def _tell(answer: str) -> None:
    """Print the answer to its end, whatever standard output can hold of it."""
    if sys.stdout is None:  # closed by whoever started the program
        return
    if isinstance(sys.stdout, io.TextIOWrapper):
        # A terminal that lacks a sign shows its number instead.
        sys.stdout.reconfigure(errors="backslashreplace")
    try:
        sys.stdout.write(answer)
        sys.stdout.flush()
    except OSError as error:
        # What is left in the buffer would be written, and fail, once more at the end.
        with Path(os.devnull).open("w") as nowhere, suppress(OSError, ValueError):
            os.dup2(nowhere.fileno(), sys.stdout.fileno())
        msg = f"standard output: {error.strerror}; files named above are whole"
        raise _PrintError(msg) from error


def _refused(error: BaseException, code: int, debug: bool, told: str | None = None) -> int:
    """Say in one line what was wrong; several faults are told one after another."""
    logger.error("%s", _one_line(told or str(error) or type(error).__name__), exc_info=error if debug else None)
    return code


def _one_line(message: str) -> str:
    """Return a message as one line that does not steer the terminal, whatever a file or a name in it holds."""
    line = "; and ".join(stripped for line in message.splitlines() if (stripped := line.strip()))
    if len(line) > _LONGEST_LINE:
        line = f"{line[: _LONGEST_LINE // 2]} … {line[-_LONGEST_LINE // 2 :]}"
    return "".join(char if char.isprintable() else " " for char in line)


class _Parser(argparse.ArgumentParser):
    """Tells wrong usage in one line, as every other fault is told."""

    def error(self, message: str) -> NoReturn:
        self.exit(USAGE, f"ERROR {_one_line(message)}; `{self.prog} --help` says what is wanted\n")


def _log_warning(message: Warning | str, *_: Any, **__: Any) -> None:
    logger.warning("%s", message)
