"""Single bits turned over in the files of a ledger: is each one told, or is any answered from?

    python tests/bench/study_damage.py --flips 500

Half of the bits fall on files by their size, half on every file alike. After each the next night is run and all kept
generations are read; the ledger is then put back. Prints how many were told, by file.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from pathlib import Path

import numpy as np

HERE = Path(__file__).resolve().parent
sys.path[:0] = [str(HERE.parent), str(HERE.parents[1])]

from cut_off import without_summaries  # noqa: E402
from damage import flip_any  # noqa: E402
from ledgers import invented, make_job, quick_folder, write_night  # noqa: E402

from journeys.nightly.ledger import opened  # noqa: E402
from journeys.nightly.night import run_night  # noqa: E402


def main() -> int:
    """Read the options, turn bits over, and tell."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--flips", type=int, default=500)
    parser.add_argument("--seed", type=int, default=0)
    options = parser.parse_args()
    rng, told, silent = np.random.default_rng(options.seed), Counter[str](), Counter[str]()
    with quick_folder() as root, without_summaries():
        job = make_job(root, alarms={"within": "2d"})
        nights = invented(2, 34, 20, n_people=12)
        for day in (3, 28, 31):
            write_night(job, day, nights[day])
            run_night(job)
        write_night(job, 33, nights[33])
        manifest = opened(job.ledger).manifest
        number = 0 if manifest is None else manifest.generations[0].number
        for _ in range(options.flips):
            name, _, answer = flip_any(job, rng, number)
            (silent if answer is None else told)[name.partition("-")[0]] += 1
    for kind in sorted({*told, *silent}):
        sys.stdout.write(f"{kind:14} {told[kind]:5} told {silent[kind]:5} not told\n")
    return 1 if silent else 0


if __name__ == "__main__":
    sys.exit(main())
