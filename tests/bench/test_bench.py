"""The benchmark of the tally runs, and everyone gives the same answers: duckdb, polars, pandas and ours."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest
from bench_tally import Bench, ask
from figures import Figures, report
from measure import run
from peers import digest

BENCH = Path(__file__).resolve().parent / "bench_tally.py"
PEERS = ("duckdb bare", "duckdb table", "duckdb enum", "polars bare", "polars ordered", "pandas bare", "pyarrow read")


def bench(folder: Path, kind: str, *options: str) -> subprocess.CompletedProcess[str]:
    sizes = ("--rows", "50000", "--customers", "4000", "--repeats", "1", "--ids", kind, "--folder", str(folder))
    return subprocess.run([sys.executable, str(BENCH), *sizes, *options], capture_output=True, text=True, timeout=300)


@pytest.mark.parametrize(
    ("kind", "options"),
    [
        ("integer", ("--growth", "20000", "60000", "--imports", "1")),
        # one peer is enough to see that text ids are measured like the others
        ("text", ("--growth", "--imports", "0", "--skip", "polars", "pandas", "pyarrow")),
    ],
)
def test_the_table_prints_and_answers_agree(tmp_path: Path, kind: str, options: tuple[str, ...]):
    for engine in ("duckdb", "polars"):
        pytest.importorskip(engine, reason=f"optional engine missing: {engine}")
    figures = tmp_path / "figures.json"
    done = bench(tmp_path, kind, *options, "--json", str(figures))
    assert done.returncode == 0, done.stdout + done.stderr
    assert "| what | wanted | measured | reached |" in done.stdout
    assert done.stdout.count("| agree |") == 3
    assert "DIFFER" not in done.stdout
    assert "failed:" not in done.stdout
    told = json.loads(figures.read_text(encoding="utf-8"))
    costs = {cost["process"]: cost for cost in told["costs"]}
    asked = [peer for peer in PEERS if peer.partition(" ")[0] not in options]
    assert {"journeys tally", *asked} <= set(costs)
    assert all(0 < cost["peak_mib"] < 10_000 and cost["seconds"] > 0 for cost in told["costs"])
    measured = {what: (wanted, reached) for what, wanted, _, reached in told["rows"]}
    for peer in {"duckdb bare", "duckdb table", "polars bare", "pandas bare"} & set(asked):
        wanted, reached = measured[f"{kind} ids, 0.05 M rows: speed against {peer}"]
        assert wanted.startswith("≥")
        assert reached in ("yes", "no")
    assert sum("growth" in what for what in measured) == (2 if kind == "integer" else 0)
    assert sum("import" in what for what in measured) == (2 if kind == "integer" else 0)


def test_an_answer_that_differs_is_told(tmp_path: Path):
    """One row moved from one pair to another, or half of the pairs gone, and the verdict is another."""
    pytest.importorskip("duckdb", reason="optional engine missing: duckdb")
    figures = Figures()
    place = Bench(tmp_path, 1, frozenset(), figures)
    log = place.log(2_000, 200, "integer")
    run(place.tally(log))
    bare, table = (run(ask("duckdb", question, log)).said for question in ("bare", "table"))
    other = json.dumps(json.loads(bare) | {"moves": digest([("a", "b", 1, 2)])})
    place.check_answers("right", log, {("duckdb", "bare"): bare, ("duckdb", "table"): table})
    place.check_answers("wrong", log, {("duckdb", "bare"): other, ("duckdb", "table"): other})
    told = {what.partition(",")[0]: same for what, same in figures.answers}
    assert told == {
        "right: moves table": True, "right: moves without a silence": True, "right: all pairs": True,
        "wrong: moves table": False, "wrong: moves without a silence": False, "wrong: all pairs": True,
    }
    assert report({}, figures).count("| DIFFER |") == 2


def test_a_digest_is_of_the_set_of_pairs():
    pairs = [("a", "b", 3, 10), ("b", "a", 1, 7)]
    assert digest(pairs) == digest(pairs[::-1])
    assert digest(pairs) != digest([("a", "b", 2, 10), ("b", "a", 2, 7)])
