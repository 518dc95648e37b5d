"""Every figure that is asked for, measured by the programs beside this one, and written into the contributors' guide.

    python tests/bench/all_figures.py                      # all of it, some hours on a quiet machine
    python tests/bench/all_figures.py --list               # the parts, and about how long each takes
    python tests/bench/all_figures.py --only import curve  # some parts; the other rows of the table stay

The table stands between two comments in DEVELOPERS.md: what was asked, what was wanted, what was measured, whether that
is reached, and on which machine. A part that fails says so in its row, and ends this program with exit code 1; a figure
that misses what is wanted does not. `--small` runs everything on tiny logs, to see that it runs: the table then
belongs elsewhere (`--table FILE`).
"""

from __future__ import annotations

import argparse
import re
import sys
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from itertools import takewhile
from pathlib import Path
from typing import NamedTuple

from figures import table
from measure import ROOT, ProcessError, hold_to_two_cpus, machine, run

HERE = Path(__file__).resolve().parent
GUIDE = ROOT / "DEVELOPERS.md"
BEGIN, END = "<!-- figures: written by tests/bench/all_figures.py -->", "<!-- end of the figures -->"
HEADS = ("part", "what", "wanted", "measured", "reached", "when", "machine")
NOT_MEASURED = ("failed", "left out", "not installed", "deeptime")


class Row(NamedTuple):
    """One figure."""

    what: str
    wanted: str
    measured: str
    reached: str


class Kept(NamedTuple):
    """A row of the table: the part it is of, the figure, the day with the load before, and the machine."""

    part: str
    row: Row
    when: str
    machine: str


Reader = Callable[[str], list[Row]]


class Sought(NamedTuple):
    """A figure to be found in what a program prints: its pattern, what it is, and its limit."""

    pattern: str
    what: str
    sign: str
    limit: float
    unit: str = " ×"

    def row(self, said: str) -> Row:
        """Return the figure beside its limit."""
        found = re.search(self.pattern, said)
        if found is None:
            return Row(self.what, self.wanted, f"failed: nothing like {self.pattern!r} was printed", "no")
        got = float(found[1])
        well = got >= self.limit if self.sign == "≥" else got <= self.limit
        return Row(self.what, self.wanted, f"{found[1]}{self.unit}", "yes" if well else "no")

    @property
    def wanted(self) -> str:
        """The limit in words."""
        return f"{self.sign} {self.limit:g}{self.unit}"


def reported(said: str) -> list[Row]:
    """Return what `figures.report` tells of what was wanted, and of what could not be measured."""
    lines = said.partition("| what | wanted | measured | reached |")[2].strip().splitlines()[1:]
    rows = [Row(*cells(line)) for line in takewhile(lambda line: line.startswith("|"), lines)]
    return [row for row in rows if row.wanted or row.measured.startswith(NOT_MEASURED)]


def cells(line: str) -> list[str]:
    """Return the cells of a line of a Markdown table."""
    return [cell.strip() for cell in line.strip()[1:-1].split("|")]


def sought(*figures: Sought) -> Reader:
    """Return a reader of a program that prints figures in words."""
    return lambda said: [one.row(said) for one in figures]


def coverage(said: str) -> list[Row]:
    """Return the coverage of `study_coverage.py`, by the length of the logs."""
    rows = []
    pattern = r"([\d.]+) silences: at 95 % (answers|single moves) that are not flagged are held in ([\d.]+)–([\d.]+) %"
    for length, which, low, high in re.findall(pattern, said):
        least, most = (93.0, 97.0) if which == "answers" else (93.0, 99.5)
        well = float(low) >= least and float(high) <= most
        rows.append(Row(f"coverage of 95 % intervals, {which}, logs of {length} silences", f"{least:g}–{most:g} %",
                        f"{low}–{high} %", "yes" if well else "no"))  # fmt: skip
    return rows or [Row("coverage of 95 % intervals", "93–97 %", "failed: nothing was told", "no")]


def passed(said: str) -> list[Row]:
    """Return how many tests passed."""
    found = re.search(r"(\d+) passed", said)
    n = int(found[1]) if found else 0
    return [Row("tests against published values, within stated tolerances", "all", f"{n} passed", "yes" if n else "no")]


@dataclass(frozen=True)
class Part:
    """A program, its sizes, and how its figures are read; `minutes` on two quiet processors, about."""

    name: str
    minutes: float
    script: str
    full: str
    small: str
    read: Reader

    def rows(self, *, small: bool) -> list[Row]:
        """Run it and return its figures; one row says so where it does not end well."""
        words = (self.small if small else self.full).split()
        start = [sys.executable, str(HERE / self.script)] if self.script else [sys.executable, "-m"]
        try:
            return self.read(run([*start, *words]).said)
        except ProcessError as fault:
            return [Row(f"{self.script or words[0]} {' '.join(words)}", "", f"failed: {fault}", "no")]


def _tally(ids: str, minutes: float) -> Part:
    full = f"--rows 20000000 --customers 1000000 --repeats 3 --ids {ids} --growth --imports 0"
    small = f"--rows 20000 --customers 2000 --repeats 1 --ids {ids} --growth --imports 0"
    return Part(f"tally, {ids} ids", minutes, "bench_tally.py", full, small, reported)


_REFERENCES = "pytest -q -p no:cacheprovider tests/kernels tests/questions/test_outcomes.py"
PARTS = (
    _tally("integer", 8),
    _tally("text", 11),
    Part("growth", 10, "bench_tally.py", "--ids --growth 5000000 80000000 --imports 0",
         "--ids --growth 20000 40000 --customers 2000 --repeats 1 --imports 0", reported),
    Part("import", 1, "bench_tally.py", "--ids --growth --imports 11", "--ids --growth --imports 1", reported),
    Part("night", 25, "bench_ledger.py", "--rows 100000000 --customers 5000000 --night 1000000 --repeats 3",
         "--rows 9000 --customers 300 --night 300 --repeats 1", reported),
    Part("resamples", 6, "bench_resampling.py", "--states 50 --customers 20000 --resamples 399 --repeats 3",
         "--states 5 --customers 500 --resamples 30 --repeats 1 --few 3", reported),
    Part("removal", 2, "bench_removal.py", "--states 60 --customers 20000 --redraws 100 --repeats 3",
         "--states 5 --customers 600 --redraws 60 --repeats 1", sought(
             Sought(r"fitted and solved anew .*, ratio ([\d.]+)",
                    "removal effects with intervals, 60 touchpoints: speed against a loop that refits without each",
                    "≥", 5.0))),
    Part("large chain", 4, "bench_large_chain.py", "--states 20000 --full 4000 --repeats 3",
         "--states 600 --full 200 --directions 5 --repeats 1", reported),
    Part("curve", 2, "bench_curve.py", "--states 20 --customers 20000 --repeats 5 --growth",
         "--states 4 --customers 400 --repeats 1 --growth", sought(
             Sought(r"ratio ([\d.]+) \(wanted at most 2\)",
                    "a curve with its bands, 20 states: time against its own linear solves", "≤", 2.0),
             Sought(r"largest error against closed forms (\S+)", "its largest error against closed forms", "≤", 1e-4,
                    ""))),
    Part("groups", 1, "bench_groups.py", "--customers 200000 --groups 200 --repeats 9",
         "--customers 400 --groups 4 --repeats 1", sought(
             Sought(r"wall time: .*ratio ([\d.]+) to the same tally",
                    "fits and outcomes of 200 groups: time against one fit and its outcomes", "≤", 5.0))),
    Part("report", 1, "bench_report.py", "--repeats 5", "--repeats 1", reported),
    Part("coverage", 240, "study_coverage.py", "--logs 2000 --customers 1000 --jobs 2 --lengths 3",
         "--logs 2 --customers 150 --jobs 1 --lengths 3 --bootstrap 0 --truth-customers 1000", coverage),
    Part("reference", 3, "", _REFERENCES, "pytest -q -p no:cacheprovider tests/kernels/test_agreement.py", passed),
)  # fmt: skip


def old_rows(text: str) -> list[Kept]:
    """Return the rows of the table in a text."""
    inside = text.partition(BEGIN)[2].partition(END)[0]
    machines = dict(re.findall(r"^- machine (\d+): (.*)$", inside, flags=re.MULTILINE))
    lines = [cells(line) for line in inside.splitlines() if line.startswith("|")]
    return [Kept(line[0], Row(*line[1:5]), line[5], machines.get(line[6], line[6])) for line in lines[2:]]


def written(rows: Sequence[Kept]) -> str:
    """Return the table, part by part, machines by number, and what they are below it."""
    order = {part.name: i for i, part in enumerate(PARTS)}
    kept = sorted((row for row in rows if row.part in order), key=lambda row: order[row.part])
    numbers = {text: str(i) for i, text in enumerate(dict.fromkeys(row.machine for row in kept), start=1)}
    body = table(HEADS, [(row.part, *row.row, row.when, numbers[row.machine]) for row in kept])
    notes = "\n".join(f"- machine {number}: {text}" for text, number in numbers.items())
    return f"{BEGIN}\n{body}\n\n{notes}\n{END}"


def replaced(text: str, rows: Sequence[Kept]) -> str:
    """Return a text with another table between its comments."""
    head, begin, rest = text.partition(BEGIN)
    _, end, tail = rest.partition(END)
    if not begin or not end:
        msg = f"the file has no table to write into; wanted the lines {BEGIN!r} and {END!r}"
        raise ValueError(msg)
    return head + written(rows) + tail


def plain(text: str) -> str:
    """Return text that stays in its cell."""
    return " ".join(text.replace("|", "/").split())


def measure(part: Part, path: Path, *, small: bool) -> bool:
    """Run a part and put its rows in the place of its old ones; tell whether it could be measured."""
    about = machine()
    when = f"{datetime.now(UTC):%Y-%m-%d}, load {about.pop('load before')}"
    rows = part.rows(small=small)
    text = path.read_text(encoding="utf-8")
    others = [row for row in old_rows(text) if row.part != part.name]
    on = plain("; ".join(f"{name} {value}" for name, value in about.items()))
    mine = [Kept(part.name, Row(*map(plain, row)), when, on) for row in rows]
    path.write_text(replaced(text, [*others, *mine]), encoding="utf-8")
    return not any(row.measured.startswith("failed") for row in rows)


def main(argv: Sequence[str] | None = None) -> int:
    """Run the parts that are asked for, and write each into the table when it is done."""
    names = [part.name for part in PARTS]
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--only", nargs="+", choices=names, default=names, metavar="PART", help=", ".join(names))
    parser.add_argument("--table", type=Path, default=GUIDE, metavar="FILE", help="where the table stands")
    parser.add_argument("--small", action="store_true", help="tiny logs, to see that it runs; wants --table")
    parser.add_argument("--list", action="store_true", help="tell the parts and about how long each takes")
    asked = parser.parse_args(argv)
    if asked.list:
        print(table(("part", "minutes, about", "command"), [
            (part.name, f"{part.minutes:g}", f"{part.script} {part.full}".strip()) for part in PARTS]))  # fmt: skip
        return 0
    if asked.small and asked.table == GUIDE:
        parser.error("--small: figures of tiny logs do not belong in the guide; wanted --table FILE")
    hold_to_two_cpus()
    well = True
    for part in (one for one in PARTS if one.name in asked.only):
        print(f"… {part.name}: about {part.minutes:g} minutes", file=sys.stderr, flush=True)
        well &= measure(part, asked.table, small=asked.small)
    return 0 if well else 1


if __name__ == "__main__":
    sys.exit(main())
