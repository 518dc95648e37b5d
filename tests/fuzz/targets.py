"""What is fuzzed: how sound input of each kind is made, and what must hold whatever has become of it.

Ledgers and jobs are in `ledger_targets.py`. A kind of file that is new is one more entry in `TARGETS`.
"""

from __future__ import annotations

import contextlib
import gzip
import io
import sys
import warnings
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv as pc
import pyarrow.parquet as pq

import journeys as jn
from journeys.command.main import main
from journeys.errors import JourneysError
from journeys.tally.count import count_log

sys.path.insert(0, str(Path(__file__).resolve().parent))

from ledger_targets import LEDGER_TARGETS  # noqa: E402
from target import READ, REFUSED, Target  # noqa: E402

RULES = jn.JourneyRules(
    "who", "when", "what", converted="joined", churned="declined", silence="2d", by="team", value="paid",
    touchpoints="all", complete_history=True,
)  # fmt: skip
RULES_TOML = """
customer = "who"   # a comment
time = "when"
event = "what"
converted = ["joined"]
silence = "30d"
as_of = 2025-06-30T12:00:00Z
exclude = { staff = [true], team = ["north", "south"] }
horizons = ["7d", "1 day 02:30:00"]
split_at = ["2025-03-01"]

[states]
"page view" = "looking"
spam = false

[limits]
unreadable = 0.02
"""


def small_log() -> pa.Table:
    """Give forty rows of seven customers, with ties, gaps and something missing."""
    rng = np.random.default_rng(5)
    n = 40
    start = np.datetime64("2025-01-01", "us")
    when = np.sort(start + rng.integers(0, 20 * 24, n) * np.timedelta64(3_600_000_000, "us"))
    what = rng.choice(["visit", "price", "joined", "declined"], n, p=[0.5, 0.3, 0.1, 0.1])
    return pa.table({
        "who": pa.array([None if i == 9 else f"member-{i}" for i in rng.integers(0, 7, n)], pa.string()),
        "when": pa.array(when, pa.timestamp("us", "UTC")),
        "what": pa.array(what.tolist(), pa.string()),
        "team": pa.array(rng.choice(["north", "south"], n).tolist(), pa.string()),
        "paid": pa.array(rng.integers(0, 90, n) / 4),
    })  # fmt: skip


def counted(source: object) -> jn.Tally | None:
    """Tally a log, or give None where it is refused."""
    try:
        return count_log(source, RULES, n_workers=1)
    except JourneysError:
        return None


def held_against(path: Path, read: Callable[[], pa.Table]) -> str:
    """Compare the tally of a file with that of the rows Arrow itself finds in it."""
    tally = counted(path)
    if tally is None:
        return REFUSED
    table = read().select(list(RULES.columns))
    assert counted(table) == tally, "not what the rows say"
    return READ


def parquet_seeds(folder: Path) -> list[bytes]:
    path = folder / "log.parquet"
    seeds = []
    for options in ({}, {"row_group_size": 15}, {"compression": "zstd", "use_dictionary": False}, {"version": "1.0"}):
        pq.write_table(small_log(), path, **options)
        seeds.append(path.read_bytes())
    return seeds


def check_parquet(path: Path) -> str:
    return held_against(path, lambda: pq.ParquetFile(path).read())


def arrow_seeds(folder: Path) -> list[bytes]:
    seeds = []
    for make, compression in ((pa.ipc.new_file, None), (pa.ipc.new_stream, None), (pa.ipc.new_file, "zstd")):
        sink = io.BytesIO()
        table = small_log()
        with make(sink, table.schema, options=pa.ipc.IpcWriteOptions(compression=compression)) as writer:
            writer.write_table(table, max_chunksize=16)
        seeds.append(sink.getvalue())
    return seeds


def check_arrow(path: Path) -> str:
    def read() -> pa.Table:
        data = path.read_bytes()
        reader = pa.ipc.open_file(data) if data.startswith(b"ARROW1") else pa.ipc.open_stream(data)
        return reader.read_all()

    return held_against(path, read)


def csv_seeds(folder: Path) -> list[bytes]:
    frame = small_log().to_pandas()
    text = frame.to_csv(index=False).encode()
    numbered = frame.assign(who=[f"{i % 7:03}" for i in range(len(frame))]).to_csv(index=False, lineterminator="\r\n")
    return [text, numbered.encode(), frame.to_csv(index=False, quoting=1, quotechar='"').encode()]


def gzip_seeds(folder: Path) -> list[bytes]:
    return [gzip.compress(seed, mtime=0) for seed in csv_seeds(folder)]


def check_csv(path: Path) -> str:
    tally = counted(path)
    if tally is None:
        return REFUSED
    options = pc.ConvertOptions(include_columns=RULES.columns, column_types=dict.fromkeys(RULES.columns, pa.binary()))
    with pa.input_stream(str(path), compression="detect") as stream:
        rows = pc.read_csv(stream, parse_options=pc.ParseOptions(newlines_in_values=True), convert_options=options)
    assert tally.n_rows == rows.num_rows, "rows were lost"
    assert tally.record.n_unreadable <= tally.n_rows
    return READ


def tally_seeds(folder: Path) -> list[bytes]:
    counted(small_log()).save(folder / "one.tally")  # type: ignore[union-attr]
    return [(folder / "one.tally").read_bytes()]


def check_tally(path: Path) -> str:
    try:
        tally = jn.Tally.load(path)
    except JourneysError:
        return REFUSED
    sound = counted(small_log())
    assert tally == sound, "other numbers"
    assert tally.record.to_dict() == sound.record.to_dict(), "other findings"  # type: ignore[union-attr]
    return READ


def known_chain() -> jn.JourneyFit:
    """Give a chain that was not fitted."""
    frame = pd.DataFrame([[0.2, 0.5, 0.3], [0.1, 0.1, 0.8]], index=["a", "b"], columns=["a", "b", "end"])
    return jn.JourneyFit.from_matrix(frame, dwell={"a": 1.5, "b": 2.0})


def fitted() -> jn.JourneyFit:
    """Give a fit of the small log."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return jn.JourneyModel().fit(counted(small_log()))  # type: ignore[arg-type]


def fit_seeds(folder: Path) -> list[bytes]:
    seeds = []
    for fit in (known_chain(), fitted()):
        fit.save(folder / "one.fit")
        seeds.append((folder / "one.fit").read_bytes())
    return seeds


def check_fit(path: Path) -> str:
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", jn.errors.JourneysWarning)
            fit = jn.JourneyFit.load(path)
    except JourneysError:
        return REFUSED
    sound = known_chain() if fit.tally is None else fitted()
    pd.testing.assert_frame_equal(fit.matrix, sound.matrix, check_exact=True)
    pd.testing.assert_frame_equal(fit.moves().to_frame(), sound.moves().to_frame(), check_exact=True)
    assert fit.open_moves == sound.open_moves
    return READ


def rules_seeds(folder: Path) -> list[bytes]:
    return [RULES_TOML.encode(), RULES.to_toml().encode()]


def check_rules(path: Path) -> str:
    try:
        rules = jn.JourneyRules.from_toml(path)
    except JourneysError:
        return REFUSED
    again = path.with_name("again.toml")
    again.write_text(rules.to_toml(), encoding="utf-8")
    assert jn.JourneyRules.from_toml(again) == rules, "other rules when written and read"
    again.unlink()
    return READ


WORDS = [
    "summary", "audit", "tally", "--out", "--rules", "--json", "--debug", "--horizon", "--keep-tally", "--help", "--",
    "-", "", "log.parquet", "rules.toml", "place", "place/new", "log.parquet/new", "no/such/place", "empty.csv", "14d",
    "1us", "-3d", "nan", "--unknown", "--out=", "--rules=rules.toml", "--out=place", "a" * 300, "b" * 5_000 + ".csv",
    "\x1b[31m\n", "odd\udcff.csv", "‮", "\x00", "/dev/full", "/dev/null", "loop",
]  # fmt: skip


def words_seeds(folder: Path) -> list[bytes]:
    """Give bytes of which each is the place of a word in the list."""
    good = ["summary", "log.parquet", "--rules", "rules.toml", "--out", "place"]
    place = {word: bytes([i]) for i, word in enumerate(WORDS)}
    others = (["tally", *good[1:5], "place/new"], ["audit", *good[1:4], "--json"], [*good, "--keep-tally"])
    return [b"".join(place[word] for word in words) for words in (good, *others)]


def check_words(path: Path) -> str:
    """Run a command in a folder with a log, rules, a file, a folder and a link that leads to itself."""
    words = [WORDS[byte % len(WORDS)] for byte in path.read_bytes()[:12]]
    folder = path.parent / "here"
    with contextlib.ExitStack() as stack:
        folder.mkdir()
        stack.callback(remove, folder)
        pq.write_table(small_log(), folder / "log.parquet")
        (folder / "rules.toml").write_text(RULES.to_toml(), encoding="utf-8")
        (folder / "empty.csv").touch()
        (folder / "place").mkdir()
        (folder / "loop").symlink_to("loop")
        out, told = io.StringIO(), io.StringIO()
        with contextlib.chdir(folder), contextlib.redirect_stdout(out), contextlib.redirect_stderr(told):
            code = main(words)
        errors = [line for line in told.getvalue().splitlines() if line.startswith("ERROR")]
        assert code in (0, 1, 2, 3)
        assert len(errors) == (code != 0), told.getvalue()
        assert "should not happen" not in told.getvalue(), told.getvalue()
        assert "--debug" in words or "Traceback" not in told.getvalue(), told.getvalue()
        assert not [one for one in folder.rglob("*") if one.name.endswith(".part")], "a file in parts"
    return REFUSED if code else READ


def remove(folder: Path) -> None:
    """Take away a folder of plain files."""
    import shutil

    shutil.rmtree(folder)


TARGETS: dict[str, Target] = {
    "parquet": Target(".parquet", parquet_seeds, check_parquet),
    "arrow": Target(".arrow", arrow_seeds, check_arrow),
    "csv": Target(".csv", csv_seeds, check_csv),
    "csv.gz": Target(".csv.gz", gzip_seeds, check_csv),
    "tally": Target(".tally", tally_seeds, check_tally),
    "fit": Target(".fit", fit_seeds, check_fit),
    "rules": Target(".toml", rules_seeds, check_rules),
    "words": Target(".words", words_seeds, check_words),
    **LEDGER_TARGETS,
}
