"""Our side of the benchmarks: `journeys tally` as a user runs it, and what its answer comes to.

    python tests/bench/ours.py TALLY

prints one line of JSON like `peers.py`: how many rows the moves table has, and n, dwell and digest of all its pairs
(state, next), and of those that end in an event. The full tally is what we make of "bare" too: there is no less.
"""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path

from peers import OUTCOMES, SILENCE_US, digest

DAY_US = 86_400_000_000
NO_EVENT = ("lapsed", "open")


def write_rules(path: Path, silence_days: int = SILENCE_US // DAY_US) -> Path:
    """Write the rules of the benchmark's log; with a silence longer than the log, every gap is a move."""
    joined, declined = OUTCOMES
    path.write_text(
        'customer = "customer"\ntime = "time"\nevent = "event"\n'
        f'converted = ["{joined}"]\nchurned = ["{declined}"]\nsilence = "{silence_days}d"\n',
        encoding="utf-8",
    )
    return path


def command(log: Path, rules: Path, out: Path) -> list[str]:
    """Return the words of `journeys tally`, to be run from the repository."""
    return [sys.executable, "-m", "journeys", "tally", str(log), "--rules", str(rules), "--out", str(out)]


def main() -> int:
    """Print what a saved tally comes to."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("tally", type=Path)
    from journeys import Tally

    moves = Tally.load(parser.parse_args().tally).table("moves")
    sums = moves.astype({"dwell": "int64"}).groupby(["state", "next"])[["n", "dwell"]].sum()
    pairs = [(*names, n, us) for names, n, us in sums.itertuples()]
    ends = [pair for pair in pairs if pair[1] not in NO_EVENT]
    print(json.dumps({"rows": len(moves), "pairs": digest(pairs), "moves": digest(ends)}))
    return 0


if __name__ == "__main__":
    sys.exit(main())
