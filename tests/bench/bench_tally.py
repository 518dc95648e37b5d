"""Speed and memory of `journeys tally` beside duckdb, polars and pandas, each as a whole process, in turns.

    python tests/bench/bench_tally.py --rows 20000000 --customers 1000000 --repeats 3

Makes the logs it needs (kept in --folder), checks that all answers agree, and prints Markdown: the machine, what was
wanted and reached, and what each process cost. No figure is asserted; answers that differ end it with exit code 1.
Ratios are medians over pairs of neighbouring runs. `peers.py` says how each question is put.
"""

from __future__ import annotations

import argparse
import importlib.util
import json
import re
import shutil
import sys
import tempfile
from dataclasses import asdict, dataclass
from pathlib import Path

import ours
from figures import Figures, millions, report
from measure import Cost, ProcessError, hold_to_two_cpus, in_turns, machine, median_ratio, peak, run, seconds

HERE = Path(__file__).resolve().parent
LONGER_THAN_THE_LOG_DAYS = 400
LITTLE_ROWS = 500_000
# What is wanted of the full tally against a peer: times its speed, at most so much of its memory (None: not asked).
WANTED: dict[tuple[str, str, str], tuple[float | None, float | None]] = {
    ("integer", "duckdb", "bare"): (1.2, 1 / 2),
    ("text", "duckdb", "bare"): (2.0, 1 / 2),
    **{(kind, "duckdb", "table"): (4.0, 1 / 3) for kind in ("integer", "text")},
    **{(kind, "polars", "bare"): (5.0, None) for kind in ("integer", "text")},
    **{(kind, "pandas", "bare"): (10.0, None) for kind in ("integer", "text")},
}
REFERENCES = (("duckdb", "enum"), ("polars", "ordered"), ("pyarrow", "read"))
OUR_NAME = "journeys tally"
BASE_IMPORTS = "import pandas, pyarrow.parquet"


@dataclass(frozen=True)
class Bench:
    """Where the logs are, how often each process runs."""

    folder: Path
    repeats: int
    skip: frozenset[str]
    found: Figures

    def log(self, rows: int, customers: int, kind: str, order: str = "time") -> Path:
        """Return a log, made if it is not there yet."""
        path = self.folder / f"{kind}_{order}_{rows}_{customers}.parquet"
        if not path.exists():
            tell(f"making {path.name}")
            part = path.with_suffix(".part")
            sizes = ["--rows", str(rows), "--customers", str(customers), "--ids", kind, "--order", order]
            run([sys.executable, str(HERE / "make_log.py"), *sizes, "--out", str(part)])
            part.rename(path)
        return path

    def tally(self, log: Path, silence_days: int | None = None) -> list[str]:
        """Return our command; with a silence of its own it writes beside the other's tally."""
        if silence_days is None:
            return ours.command(log, ours.write_rules(self.folder / "rules.toml"), self.folder / "tally.parquet")
        rules = ours.write_rules(self.folder / "rules_long.toml", silence_days)
        return ours.command(log, rules, self.folder / "tally_long.parquet")

    def answer(self, name: str) -> dict[str, dict[str, object]]:
        """Return what a tally in the folder comes to."""
        told: dict[str, dict[str, object]] = json.loads(
            run([sys.executable, str(HERE / "ours.py"), str(self.folder / name)]).said
        )
        return told

    def against_peers(self, kind: str, rows: int, customers: int) -> None:
        """Compare the full tally with each peer's answers, on one log."""
        log = self.log(rows, customers, kind)
        title = f"{kind} ids, {millions(rows)} rows"
        # Read once for all, so that nobody pays for a cold disk; our first run may have code to compile.
        run(ask("pyarrow", "read", log))
        self.found.cost(title, f"{OUR_NAME}, first run", rows, [run(self.tally(log))])
        mine: list[Cost] = []
        seen: dict[tuple[str, str], str] = {}
        for peer, question in (*(key[1:] for key in WANTED if key[0] == kind), *REFERENCES):
            name = f"{peer} {question}"
            if peer in self.skip or importlib.util.find_spec(peer) is None:
                why = "left out" if peer in self.skip else "not installed"
                self.found.rows.append((f"{title}: against {name}", "", why, ""))
                continue
            tell(f"{title}: {name}")
            try:
                pairs = in_turns(self.tally(log), ask(peer, question, log), self.repeats)
            except ProcessError as fault:
                self.found.rows.append((f"{title}: against {name}", "", f"failed: {fault}", ""))
                continue
            seen[peer, question] = pairs[0][1].said
            mine += [pair[0] for pair in pairs]
            self.found.cost(title, name, rows, [pair[1] for pair in pairs])
            speed, memory = WANTED.get((kind, peer, question), (None, None))
            turned = [(theirs, our) for our, theirs in pairs]
            self.found.compare(f"{title}: speed against {name}", median_ratio(turned, seconds), least=speed)
            self.found.compare(f"{title}: memory against {name}", median_ratio(pairs, peak), most=memory)
        if mine:
            self.found.cost(title, OUR_NAME, rows, mine)
        self.check_answers(title, log, seen)

    def check_answers(self, title: str, log: Path, seen: dict[tuple[str, str], str]) -> None:
        """Hold the answers against each other and against ours."""
        told = {key: json.loads(said) for key, said in seen.items() if key[0] != "pyarrow"}
        bare = {key: answer for key, answer in told.items() if key[1] != "table"}
        if ("duckdb", "table") in told:
            same = told["duckdb", "table"]["pairs"] == self.answer("tally.parquet")["pairs"]
            self.found.answers.append((f"{title}: moves table, ours and duckdb's", same))
        if bare:
            run(self.tally(log, LONGER_THAN_THE_LOG_DAYS))
            mine = self.answer("tally_long.parquet")["moves"]
            same = all(answer["moves"] == mine for answer in bare.values())
            self.found.answers.append((f"{title}: moves without a silence, ours and {names(bare)}", same))
            pairs = [answer["pairs"] for answer in bare.values()]
            self.found.answers.append((f"{title}: all pairs, {names(bare)}", all(one == pairs[0] for one in pairs)))

    def growth(self, few: int, many: int, customers: int) -> None:
        """Compare a short and a long log of the same customers."""
        logs = [self.log(rows, customers, "integer") for rows in (few, many)]
        tell(f"growth from {millions(few)} to {millions(many)} rows")
        for log in logs:
            run(ask("pyarrow", "read", log))
        run(self.tally(logs[0]))
        pairs = in_turns(self.tally(logs[1]), self.tally(logs[0]), self.repeats)
        title = f"growth at {millions(customers)} customers"
        for rows, place in ((few, 1), (many, 0)):
            self.found.cost(f"{title}, {millions(rows)} rows", OUR_NAME, rows, [pair[place] for pair in pairs])
        what = f"{title}, {millions(many)} rows to {millions(few)}"
        self.found.compare(f"{what}: time per row", median_ratio(pairs, seconds) * few / many, most=1.15)
        self.found.compare(f"{what}: peak memory", median_ratio(pairs, peak), most=2.0)

    def orders(self, rows: int, customers: int) -> None:
        """Compare orders of the same number of rows."""
        in_time = self.tally(self.log(rows, customers, "integer"))
        for order, words in (("customer", "grouped by customer"), ("none", "in no order")):
            other = self.tally(self.log(rows, customers, "integer", order))
            tell(f"rows {words}")
            pairs = in_turns(other, in_time, self.repeats)
            self.found.cost(f"{millions(rows)} rows {words}", OUR_NAME, rows, [pair[0] for pair in pairs])
            what = f"{millions(rows)} rows {words}, to those in time order"
            self.found.compare(f"{what}: time", median_ratio(pairs, seconds))
            self.found.compare(f"{what}: peak memory", median_ratio(pairs, peak))

    def imports(self, times: int) -> None:
        """Compare the import of the package with that of what it is built on, and --help with the import."""
        tell("imports")
        package, help_, base = (
            [sys.executable, *words]
            for words in (("-c", "import journeys"), ("-m", "journeys", "--help"), ("-c", BASE_IMPORTS))
        )
        for what, words, other, most in (
            (f"import of the package, to `{BASE_IMPORTS}`: time", package, base, 1.3),
            ("`journeys --help`, to the import of the package: time", help_, package, 1.0),
        ):
            in_turns(words, other, 1)
            pairs = in_turns(words, other, times)
            for place, one in enumerate((words, other)):
                self.found.cost("start", f"python {' '.join(one[1:])}", 0, [pair[place] for pair in pairs])
            self.found.compare(what, median_ratio(pairs, seconds), most=most)

    def instructions(self, customers: int) -> None:
        """Count the instructions of a short log, which do not depend on what else the machine does."""
        title = f"instructions per row, {LITTLE_ROWS:,} rows, start left out"
        if shutil.which("valgrind") is None:
            self.found.rows.append((title, "", "valgrind is not there", ""))
            return
        tell("counting instructions, some fifty times slower than a plain run")
        log = self.log(LITTLE_ROWS, min(customers, LITTLE_ROWS // 20), "integer")
        out = f"--callgrind-out-file={self.folder / 'callgrind.out'}"
        counts = []
        for words in (self.tally(log), [sys.executable, "-c", "import journeys.tally.count, journeys.tally.store"]):
            log_file = self.folder / "callgrind.log"
            run(["valgrind", "--tool=callgrind", out, f"--log-file={log_file}", *words])
            said = re.search(r"Collected\s*:\s*(\d+)", log_file.read_text(encoding="utf-8"))
            counts.append(int(said[1]) if said else 0)
        self.found.rows.append((title, "", f"{(counts[0] - counts[1]) / LITTLE_ROWS:,.0f}", ""))
        self.found.rows.append(("instructions of the start", "", f"{counts[1]:,}", ""))


def ask(peer: str, question: str, log: Path) -> list[str]:
    """Return the words that put a question to a peer."""
    return [sys.executable, str(HERE / "peers.py"), peer, question, str(log)]


def names(answers: dict[tuple[str, str], object]) -> str:
    """Name who answered."""
    return ", ".join(f"{peer} {question}" for peer, question in answers)


def tell(what: str) -> None:
    """Say on stderr what goes on."""
    print(f"… {what}", file=sys.stderr, flush=True)


def options() -> argparse.Namespace:
    """Read the options."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--rows", type=int, default=20_000_000)
    parser.add_argument("--customers", type=int, default=1_000_000)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--ids", nargs="*", choices=("integer", "text"), default=["integer", "text"])
    parser.add_argument("--growth", type=int, nargs="*", default=[5_000_000, 80_000_000], metavar="ROWS",
                        help="fewest and most rows; nothing: leave it out")  # fmt: skip
    parser.add_argument("--skip", nargs="*", default=[], metavar="PEER", help="duckdb, polars, pandas")
    parser.add_argument("--imports", type=int, default=11, metavar="N", help="pairs of imports; 0: leave them out")
    parser.add_argument("--orders", action="store_true", help="also grouped by customer, and in no order")
    parser.add_argument("--callgrind", action="store_true", help="count instructions on a short log (slow)")
    parser.add_argument("--folder", type=Path, default=Path(tempfile.gettempdir(), "journeys_bench"))
    parser.add_argument("--json", type=Path, metavar="FILE", help="write the figures there too")
    asked = parser.parse_args()
    if asked.repeats < 1:
        parser.error(f"--repeats {asked.repeats}: wanted at least 1")
    if len(asked.growth) not in (0, 2):
        parser.error("--growth: wanted two numbers of rows, or none")
    return asked


def main() -> int:
    """Measure and print."""
    asked = options()
    hold_to_two_cpus()
    about = machine()
    asked.folder.mkdir(parents=True, exist_ok=True)
    found = Figures()
    bench = Bench(asked.folder, asked.repeats, frozenset(asked.skip), found)
    for kind in asked.ids:
        bench.against_peers(kind, asked.rows, asked.customers)
    if asked.growth:
        bench.growth(*asked.growth, asked.customers)
    if asked.orders:
        bench.orders(asked.rows, asked.customers)
    if asked.imports:
        bench.imports(asked.imports)
    if asked.callgrind:
        bench.instructions(asked.customers)
    if asked.json:
        figures = {"machine": about, "rows": found.rows, "answers": found.answers,
                   "costs": [{"log": log, "process": who, "rows": n, **asdict(c)} for log, who, n, c in found.costs]}
        asked.json.write_text(json.dumps(figures, indent=1, ensure_ascii=False), encoding="utf-8")
    print(report(about, found))
    return 0 if all(same for _, same in found.answers) else 1


if __name__ == "__main__":
    sys.exit(main())
