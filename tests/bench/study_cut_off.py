"""A night killed at random moments: is anything lost, counted twice, or broken for the next night?

    python tests/bench/study_cut_off.py --kills 200

Each time a process that counts a night and publishes it is killed after a random part of the processor time that a
whole run takes, and the job is run again: the ledger and what is published must be what an uninterrupted run leaves,
and the night after must be one pass over the whole log. Prints how many were killed, and in what state the ledger was
found.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from pathlib import Path

import numpy as np

HERE = Path(__file__).resolve().parent
sys.path[:0] = [str(HERE.parent), str(HERE.parents[1])]

from cut_off import Killer, Stage  # noqa: E402
from ledgers import files_of, quick_folder  # noqa: E402

from journeys.nightly.ledger import opened  # noqa: E402
from journeys.nightly.publish import is_published  # noqa: E402


def main() -> int:
    """Read the options, kill, and tell."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--kills", type=int, default=200)
    parser.add_argument("--seed", type=int, default=0)
    options = parser.parse_args()
    rng, killer, found = np.random.default_rng(options.seed), Killer(), Counter[str]()
    with quick_folder() as root:
        stage = Stage(root, n_people=30, rules={"silence": "12h"})
        # The first run pays for what the system reads once.
        for _ in range(2):
            stage.again()
            whole = killer.whole(stage, True)
        for number in range(options.kills):
            stage.again()
            alive = killer.kill(stage, float(rng.random()) * whole, True)
            found[f"{'killed' if alive else 'had ended'}, ledger {_state(stage)}"] += 1
            try:
                stage.check(published=True)
            except AssertionError as fault:
                found["WRONG AFTER THE RERUN"] += 1
                sys.stderr.write(f"kill {number}: {fault}\n")
    for what, n in sorted(found.items()):
        sys.stdout.write(f"{n:6} {what}\n")
    return 1 if found["WRONG AFTER THE RERUN"] else 0


def _state(stage: Stage) -> str:
    """Return in what state the ledger is."""
    files = files_of(stage.job.ledger)
    if files["manifest.json"] != stage.before["manifest.json"]:
        newest = opened(stage.job.ledger).manifest.newest  # type: ignore[union-attr]
        done = newest is not None and is_published(stage.job.out, newest)
        return f"the new one, {'published' if done else 'not published yet'}"
    if any(path.name.startswith(".part-") for path in stage.job.out.iterdir()):
        return "WRONG: published before it stands"
    return "as before" if files == stage.before else "as before, with leftovers"


if __name__ == "__main__":
    sys.exit(main())
