"""`journeys` on the command line: parse, log, call, return an exit code. No statistics here."""

from __future__ import annotations

import argparse
import json
import logging
import sys
import warnings
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

from journeys.command import nightly
from journeys.command.stop import StoppedError, stoppable
from journeys.command.words import PrintError, named, one_line, tell
from journeys.errors import JourneysError, JourneysWarning, LimitError, LogError, RulesError

if TYPE_CHECKING:
    from journeys.intake.rules import JourneyRules
    from journeys.nightly.then_and_now import ThenAndNow
    from journeys.tally.tally import Tally

DONE, FAILED, USAGE, LIMITS, ALARM = 0, 1, 2, 3, nightly.ALARM
EXIT_CODES = """exit codes:
  0  done
  1  failed
  2  wrong usage or settings
  3  the log broke its quality limits, nothing was published
  4  done, and a change alarm tripped (nightly)
  130  interrupted (Ctrl-C)
  143  stopped by SIGTERM
"""
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
            with stoppable():
                answer, code = options.run(options)
                tell(answer)
            return int(code)
        except (StoppedError, KeyboardInterrupt) as stop:
            stopped = stop if isinstance(stop, StoppedError) else StoppedError()
            return _refused(stopped, stopped.code, options.debug)
        except JourneysError as error:
            code = LIMITS if isinstance(error, LimitError) else USAGE if isinstance(error, RulesError) else FAILED
            return _refused(error, code, options.debug)
        except PrintError as error:
            return _refused(error, FAILED, options.debug)
        except OSError as error:
            place = f"{error.filename}: " if error.filename else ""
            return _refused(error, FAILED, options.debug, f"{place}{error.strerror or error}; nothing was written")
        except MemoryError as error:
            return _refused(error, FAILED, options.debug, "there is not memory enough for this; nothing was written")
        except Exception as error:
            fault = f"{type(error).__name__}: {error}; this should not happen, --debug shows where it did"
            return _refused(error, FAILED, options.debug, fault)


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
        command = _command(commands, name, run, what)
        command.add_argument(
            "log",
            metavar="LOG",
            type=named,
            help="Parquet, CSV or Arrow file, a folder of them, a TOML file with a table [database], or a saved tally",
        )
        command.add_argument(
            "--rules", metavar="FILE", type=named, help="rules file (TOML); not needed for a saved tally"
        )
        command.add_argument(
            "--identity",
            metavar="FILE",
            type=named,
            help="table of people first seen under another id: columns old, id, since",
        )
        if name == "summary":
            command.add_argument("--out", metavar="FOLDER", type=named, required=True, help="where the summary goes")
            command.add_argument("--keep-tally", action="store_true", help="write the tally there too")
            command.add_argument(
                "--generation", type=int, metavar="N", help="LOG is a ledger: what it published then, and now, and why"
            )
            command.add_argument(
                "--horizon",
                action="append",
                metavar="TIME",
                help='share converted within this time, such as "14d"; may be given several times',
            )
            command.add_argument(
                "--min-customers",
                type=int,
                metavar="N",
                help="leave out numbers about fewer people than this (default 10); 0 leaves none out",
            )
        if name == "tally":
            command.add_argument("--out", metavar="FILE", type=named, required=True, help="where the tally goes")
        else:
            command.add_argument("--json", action="store_true", help="print for machines")
    nightly.add_nightly(_command(commands, "nightly", nightly.nightly, "count what is new into a ledger, and publish"))
    nightly.add_forget(_command(commands, "forget", nightly.forget, "take customers out of a ledger"))
    return parser


def _command(commands: Any, name: str, run: Callable[[argparse.Namespace], tuple[str, int]], what: str) -> Any:
    """Add a command, with what all commands have."""
    command = commands.add_parser(
        name, help=what, description=what, epilog=EXIT_CODES, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    command.set_defaults(run=run)
    command.add_argument("--debug", action="store_true", help="show where an error came from")
    return command


def _summary(options: argparse.Namespace) -> tuple[str, int]:
    from journeys.models.model import JourneyModel
    from journeys.questions.summarise import summarise
    from journeys.show.summary import summary_text, write_summary

    out = Path(options.out)
    if out.exists() and not out.is_dir():
        msg = f"--out {out}: is a file; wanted a folder, new or there already"
        raise RulesError(msg)
    horizons, least = _horizons(options), _min_customers(options)
    compared = _compared(options, least)
    tally = _counted(options)
    check_limits(tally)
    fit = JourneyModel().fit(tally)
    overview = summarise(fit, horizons, min_customers=least)
    written = write_summary(overview, out, keep_tally=options.keep_tally)
    for path in written:
        logger.info("wrote %s", path)
    if options.json:
        from journeys.show.tables import file_frame

        return _as_json({"tally": tally.checksum, "estimates": _records(file_frame(overview.to_frame()))}), DONE
    return ("" if compared is None else compared.summary() + "\n") + summary_text(overview), DONE


def _compared(options: argparse.Namespace, least: int) -> ThenAndNow | None:
    """Return what a ledger published in a generation, beside its newest; None where none is asked for."""
    if options.generation is None:
        return None
    from journeys.nightly.manifest import is_ledger
    from journeys.nightly.then_and_now import then_and_now

    if not is_ledger(options.log):
        msg = f"--generation {options.generation}: {options.log} is no ledger; wanted the folder that `nightly` keeps"
        raise RulesError(msg)
    return then_and_now(options.log, options.generation, least)


def _audit(options: argparse.Namespace) -> tuple[str, int]:
    from journeys.nightly.manifest import is_ledger
    from journeys.questions.audit import audit
    from journeys.tally.store import is_tally

    if is_tally(options.log) or is_ledger(options.log):
        seen = audit(_counted(options))
    else:
        seen = audit(options.log, _rules(options), identity=options.identity, progress=sys.stderr.isatty())
    if options.json:
        answer = _as_json(
            {
                "carries_model": seen.carries_model,
                "checks": _records(seen.checks),
                "silences": _records(seen.silences),
                "findings": _records(seen.findings),
            }
        )
        return answer, DONE
    return seen.summary() + "\n", DONE


def _tally(options: argparse.Namespace) -> tuple[str, int]:
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
    return tally.summary() + "\n", DONE


def _horizons(options: argparse.Namespace) -> list[str] | None:
    """Return --horizon as given, once each can be read."""
    from journeys.checks import duration_us

    for one in options.horizon or ():
        try:
            duration_us(one, "--horizon")
        except ValueError as fault:
            raise RulesError(str(fault)) from None
    return options.horizon  # type: ignore[no-any-return]


def _min_customers(options: argparse.Namespace) -> int:
    """Return --min-customers, once it can be told."""
    from journeys.questions.summarise import MIN_CUSTOMERS, few_limit

    try:
        return MIN_CUSTOMERS if options.min_customers is None else few_limit(options.min_customers, "--min-customers")
    except ValueError as fault:
        raise RulesError(str(fault)) from None


def _counted(options: argparse.Namespace) -> Tally:
    """Return the tally of LOG, or LOG itself where it is a saved one."""
    from journeys.nightly.manifest import is_ledger
    from journeys.tally.store import is_tally, load

    ledger = is_ledger(options.log)
    if ledger or is_tally(options.log):
        tally = _of_ledger(options) if ledger else load(options.log)
        if options.identity is not None:
            msg = f"--identity: {options.log} is a saved tally, which holds no ids; count the log again"
            raise RulesError(msg)
        if options.rules is not None and _rules(options) != tally.rules:
            msg = (
                f"--rules {options.rules}: these are not the rules {options.log} was counted by; leave --rules out, "
                "or count the log again"
            )
            raise RulesError(msg)
        return tally
    from journeys.tally.count import count_log

    return count_log(options.log, _rules(options), identity=options.identity, progress=sys.stderr.isatty())


def _of_ledger(options: argparse.Namespace) -> Tally:
    from journeys.nightly.then_and_now import tally_of_ledger

    return tally_of_ledger(options.log, getattr(options, "generation", None))


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


def _refused(error: BaseException, code: int, debug: bool, told: str | None = None) -> int:
    """Say in one line what was wrong; several faults are told one after another."""
    logger.error("%s", one_line(told or str(error) or type(error).__name__), exc_info=error if debug else None)
    return code


class _Parser(argparse.ArgumentParser):
    """Tells wrong usage in one line, as every other fault is told."""

    def error(self, message: str) -> NoReturn:
        self.exit(USAGE, f"ERROR {one_line(message)}; `{self.prog} --help` says what is wanted\n")


def _log_warning(message: Warning | str, *_: Any, **__: Any) -> None:
    logger.warning("%s", message)
