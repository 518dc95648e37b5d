"""How often 95 % intervals hold the truth: every public question, over many simulated logs.

Logs of two kinds of customers who come back are cut off after some silences, while journeys are under way, and are
asked everything (`coverage_questions.py`). The truth is the limit of each answer. Cut off logs of mixed customers have
none in closed form, so it is the answer of one log of many more customers; its own error is that of the answers times
the root of the sizes' ratio, .06 standard errors for 300,000 customers beside 1,000. That it is the limit and not the
answer of whole journeys leaves out what mixed customers do to a chain, which `study_censoring.py` is about.

Run from the repository: ``python tests/bench/study_coverage.py --logs 1000 --customers 1000 --jobs 2 --write``, which
puts the table into DEVELOPERS.md.
"""

from __future__ import annotations

import argparse
import contextlib
import multiprocessing
import os
import pickle
import sys
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

sys.path[:0] = [str(Path(__file__).resolve().parent), str(Path(__file__).resolve().parents[1])]

from coverage_questions import Asked, ask  # noqa: E402

LENGTHS = (3.0, 6.0)
TRUTH_SEED = 7  # no log of the study has it
# The coverage of an answer by itself is told from so many intervals on; below, it is chance.
ENOUGH = 100
GUIDE = Path(__file__).resolve().parents[2] / "DEVELOPERS.md"
BEGIN, END = "<!-- coverage of intervals: begin -->", "<!-- coverage of intervals: end -->"
KEYS = ["question", "measure"]


@dataclass(frozen=True)
class Task:
    """One log of the study."""

    seed: int
    silences: float
    number: int
    customers: int
    bootstrap: bool


def of_task(task: Task) -> Asked:
    """Simulate one log, with luck of its own, and ask."""
    rng = np.random.default_rng([task.seed, round(10 * task.silences), task.number])
    return ask(task.customers, task.silences, rng, bootstrap=task.bootstrap)


def limits(found: Asked) -> dict[tuple[str, str, str], float]:
    """Return the answers of the large log by name, those from resamples under the names they have too."""
    truth = dict(zip(found.names, found.value.tolist(), strict=True))
    again = {(f"{question}, resampled", *rest): value for (question, *rest), value in truth.items()}
    return truth | again  # type: ignore[return-value]


def studied(tasks: Sequence[Task], jobs: int, kept: Path | None = None) -> Iterator[tuple[Task, Asked]]:
    """Yield the answers of many logs, from processes of their own where there are several jobs.

    Those that the file `kept` holds are taken from there, the others added to it: a study that was stopped goes on.
    """
    os.environ["OMP_NUM_THREADS"] = os.environ["OPENBLAS_NUM_THREADS"] = "1"  # one log, one core
    done = dict(_read(kept)) if kept and kept.exists() else {}
    yield from ((task, done[task]) for task in tasks if task in done)
    rest = [task for task in tasks if task not in done]
    with contextlib.ExitStack() as stack:
        note = stack.enter_context(kept.open("ab")) if kept else None
        found: Iterator[Asked] = map(of_task, rest)
        if jobs > 1:
            pool = stack.enter_context(multiprocessing.get_context("spawn").Pool(jobs))
            found = pool.imap(of_task, rest, chunksize=5)
        for task, one in zip(rest, found, strict=True):
            if note:
                pickle.dump((task, one), note)
                note.flush()
            yield task, one


def _read(kept: Path) -> Iterator[tuple[Task, Asked]]:
    with kept.open("rb") as file, contextlib.suppress(EOFError):
        while True:
            yield pickle.load(file)


def answers(asked: Sequence[Asked], truth: dict[tuple[str, str, str], float]) -> pd.DataFrame:
    """Return one row per log and answer: its error, whether it was flagged, and whether its interval holds the truth.

    Left out is what has no truth to hold (infinite, or never seen in the large log) and what is known, not estimated.
    """
    parts = []
    for number, one in enumerate(asked):
        aim = np.array([truth.get(name, np.nan) for name in one.names])
        # A move that nobody makes is 0 in truth, and so is what hangs on it.
        kept = np.isfinite(aim) & (aim != 0) & ~one.known
        shown = np.isfinite(one.low) | np.isfinite(one.high)
        low, high = np.nan_to_num(one.low, nan=-np.inf), np.nan_to_num(one.high, nan=np.inf)
        frame = pd.DataFrame(one.names, columns=[*KEYS, "which"]).assign(
            log=number, truth=aim, value=one.value, shown=shown, flagged=one.flagged | ~shown,
            held=shown & (low <= aim) & (aim <= high),
        )[kept]  # fmt: skip
        parts.append(frame.assign(error=frame["value"].where(np.isfinite(frame["value"])) - frame["truth"]))
    return pd.concat(parts, ignore_index=True)


def coverage(found: pd.DataFrame) -> pd.DataFrame:
    """Return one row per question and measure, over all its starts, stages, touchpoints or moves.

    `answers` counts these; `truth` is that of the smallest and the largest; `bias` the error of the mean in standard
    deviations of the answer, of the answer where it is largest, flagged or not. `coverage` is that of intervals
    without a flag, `error` its Monte Carlo error, `lowest` and `highest` that of single answers; `flagged` the share
    that has a flag, `all` the coverage of all that have an interval.
    """
    return pd.DataFrame([_row(key, group) for key, group in found.groupby(KEYS, sort=False)])


def _row(key: tuple[str, str], group: pd.DataFrame) -> dict[str, object]:
    by_answer = group.groupby("which")["error"].agg(["mean", "std"])
    bias = (by_answer["mean"] / by_answer["std"].where(by_answer["std"] > 0)).dropna()
    kept = group[~group["flagged"]]
    share = kept["held"].mean()
    # answers of one log are not independent: the error is that of the logs' own shares
    by_log = kept.groupby("log")["held"].agg(["sum", "size"])
    spread = np.sqrt(((by_log["sum"] - share * by_log["size"]) ** 2).sum()) / max(len(kept), 1)
    single = kept.groupby("which")["held"].agg(["mean", "size"])
    single = single.loc[single["size"] >= ENOUGH, "mean"]
    return {
        **dict(zip(KEYS, key, strict=True)), "answers": group["which"].nunique(), "logs": group["log"].nunique(),
        "truth": (group["truth"].min(), group["truth"].max()),
        "bias": bias.loc[bias.abs().idxmax()] if len(bias) else np.nan,
        "coverage": 100 * share, "error": 100 * spread if len(kept) else np.nan,
        "lowest": 100 * single.min(), "highest": 100 * single.max(),
        "flagged": 100 * group["flagged"].mean(), "all": 100 * group.loc[group["shown"], "held"].mean(),
    }  # fmt: skip


def told(tables: dict[float, pd.DataFrame]) -> str:
    """Return the tables as one in Markdown, the lengths of log side by side; the truth is that of the last."""
    found = {silences: table.set_index(KEYS) for silences, table in tables.items()}
    *_, last = found.values()
    head = ["question", "measure", "answers", "logs", "truth"]
    for silences in found:
        head += [f"{silences:g} silences: %", "single, %", "flagged, %", "bias, sd"]
    lines = [head, ["---"] * len(head)]
    for key in last.index:
        row = last.loc[key]
        per_length = [_cells(table.loc[key]) if key in table.index else [""] * 4 for table in found.values()]
        lines.append([*key, str(row["answers"]), f"{row['logs']:,}", _span(row["truth"]), *sum(per_length, [])])
    return "\n".join("| " + " | ".join(line) + " |" for line in lines)


def in_short(tables: dict[float, pd.DataFrame]) -> str:
    """Return the range of coverage of the questions, and of single moves, of which at most half are flagged."""
    lines = []
    for silences, table in tables.items():
        mine = table[table["flagged"] <= 50]
        is_move = mine["question"] == "moves"
        for name, some, least, most in (
            ("answers", mine[~is_move], "coverage", "coverage"), ("single moves", mine[is_move], "lowest", "highest")
        ):  # fmt: skip
            low, high = some[least].min(), some[most].max()
            if np.isfinite(low):
                held = f"{low:.1f}–{high:.1f} %"
                lines.append(f"{silences:g} silences: at 95 % {name} that are not flagged are held in {held}")
    return "\n".join(lines)


def _span(values: tuple[float, float]) -> str:
    return " to ".join(dict.fromkeys(f"{value:.3g}" for value in values)).replace("-", "−")


def _cells(row: pd.Series) -> list[str]:
    if np.isnan(row["coverage"]):
        judged = "" if np.isnan(row["all"]) else f"({row['all']:.1f})"
    else:
        judged = f"{row['coverage']:.1f} ± {row['error']:.1f}"
    single = "" if np.isnan(row["lowest"]) else f"{row['lowest']:.1f}–{row['highest']:.1f}"
    bias = "" if np.isnan(row["bias"]) else f"{row['bias']:+.2f}".replace("-", "−")
    return [judged, single, f"{row['flagged']:.0f}", bias]


def write(text: str, path: Path) -> None:
    """Put the text between the two marks of a file."""
    whole = path.read_text(encoding="utf-8")
    before, found, rest = whole.partition(BEGIN)
    _, ended, after = rest.partition(END)
    if not found or not ended:
        raise SystemExit(f"{path}: wanted the marks {BEGIN} and {END}, each once")
    path.write_text(f"{before}{BEGIN}\n{text}\n{END}{after}", encoding="utf-8")


def study(asked: argparse.Namespace) -> dict[float, pd.DataFrame]:
    """Return the table of each length of log, the logs in turns."""
    large = [Task(TRUTH_SEED, silences, 0, asked.truth_customers, bootstrap=False) for silences in asked.lengths]
    tasks = [
        Task(asked.seed, silences, number, asked.customers, number < asked.bootstrap)
        for number in range(asked.logs)
        for silences in asked.lengths
    ]
    found: dict[float, list[Asked]] = {silences: [] for silences in asked.lengths}
    truths = {}
    for task, one in studied([*large, *tasks], asked.jobs, asked.keep):
        if task in large:
            truths[task.silences] = limits(one)
        else:
            found[task.silences].append(one)
    return {silences: coverage(answers(parts, truths[silences])) for silences, parts in found.items()}


def main(argv: Sequence[str] | None = None) -> int:
    """Print the table, and write it into the guide where asked to."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--logs", type=int, default=1_000)
    parser.add_argument("--customers", type=int, default=1_000)
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--bootstrap", type=int, default=500, help="of so many of the logs resamples are drawn too")
    parser.add_argument("--truth-customers", type=int, default=300_000)
    parser.add_argument("--lengths", type=float, nargs="+", default=list(LENGTHS), help="in silences")
    parser.add_argument("--seed", type=int, default=20250101)
    parser.add_argument("--keep", type=Path, help="a file for the answers so far, from which a stopped study goes on")
    parser.add_argument("--write", type=Path, nargs="?", const=GUIDE, help="a file with the two marks; DEVELOPERS.md")
    asked = parser.parse_args(argv)
    began = time.perf_counter()
    tables = study(asked)
    for silences, table in tables.items():
        print(f"{silences:g} silences\n{table.to_string(float_format='{:.4g}'.format)}\n")
    lengths = " and ".join(f"{silences:g}" for silences in asked.lengths)
    text = (
        f"{asked.logs:,} logs of {asked.customers:,} customers of two kinds, {lengths} silences long, cut off while "
        f"journeys are under way;\ntruth: one log of {asked.truth_customers:,} customers each.\n\n{told(tables)}"
    )
    print(f"{text}\n{in_short(tables)}\n{time.perf_counter() - began:.0f} s")
    if asked.write:
        write(text, asked.write)
    return 0


if __name__ == "__main__":
    sys.exit(main())
