"""Fits and tallies on disk: what comes back, and what is refused."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from scipy import stats
from small_chains import START, log_of_paths

import journeys as jn
from journeys.errors import StoreError
from journeys.tally import is_tally


@pytest.fixture(scope="module")
def tally() -> jn.Tally:
    paths = [["visit", "price", "joined", "joined"], ["visit"], ["price", "declined"], ["visit", "joined"]] * 3
    days = [[0, 1, 2, 2.01], [20], [15, 16], [30, 31]] * 3
    log = log_of_paths(paths, range(12), [[day + i * 0.37 for day in one] for i, one in enumerate(days)])
    log.loc[log.index[3], "event"] = None
    rules = jn.JourneyRules("customer", "time", "event", converted="joined", churned="declined", silence="10d",
                            complete_history=True, as_of=str(START + pd.Timedelta(days=60)),
                            states={"price": "the price"})
    return jn.tally(log, rules)


@pytest.fixture(scope="module")
def known() -> jn.JourneyFit:
    cells = [[0.1, 0.4, 0.5], [0.3, 0.0, 0.7]]
    frame = pd.DataFrame(cells, index=["price", "basket"], columns=["price", "basket", "joined"])
    return jn.JourneyFit.from_matrix(frame, dwell={"price": stats.expon(scale=2), "basket": 1.5})


def same(first: jn.JourneyFit, second: jn.JourneyFit) -> None:
    """Hold the answers of two fits against each other, to the last bit."""
    pd.testing.assert_frame_equal(first.matrix, second.matrix, check_exact=True)
    for clock in ("steps", "time"):
        pd.testing.assert_frame_equal(
            jn.first_passage(first, clock=clock).to_frame(), jn.first_passage(second, clock=clock).to_frame(),
            check_exact=True,
        )
    pd.testing.assert_frame_equal(jn.outcomes(first).to_frame(), jn.outcomes(second).to_frame(), check_exact=True)
    assert first.row_flags == second.row_flags
    assert first.converted == second.converted


def test_tally_comes_back_whole(tally: jn.Tally, tmp_path: Path) -> None:
    tally.save(tmp_path / "tally.parquet")
    back = jn.Tally.load(tmp_path / "tally.parquet")
    assert back == tally
    assert back.rules == tally.rules
    pd.testing.assert_frame_equal(back.findings, tally.findings)
    assert set(tally.findings["code"]) >= {"missing_event", "repeated_outcome"}
    for name in ("moves", "entries", "journeys", "customers"):
        pd.testing.assert_frame_equal(back.table(name), tally.table(name), check_exact=True)
    assert is_tally(tmp_path / "tally.parquet")
    assert [path.name for path in tmp_path.iterdir()] == ["tally.parquet"], "no temporary file stays behind"


@pytest.mark.parametrize("open_moves", ["censored", "ignored"])
@pytest.mark.filterwarnings("ignore::journeys.errors.EndNotSeenWarning")
def test_fit_comes_back_whole(tally: jn.Tally, tmp_path: Path, open_moves: str) -> None:
    fit = jn.JourneyModel(open_moves=open_moves).fit(tally)
    fit.save(tmp_path / "fit.parquet")
    back = jn.JourneyFit.load(tmp_path / "fit.parquet")
    same(fit, back)
    assert back.open_moves == open_moves
    assert back.tally == tally
    assert jn.Tally.load(tmp_path / "fit.parquet") == tally, "a fit on disk is its tally and a word"


def test_known_chain_comes_back_whole(known: jn.JourneyFit, tmp_path: Path) -> None:
    known.save(tmp_path / "chain.parquet")
    back = jn.JourneyFit.load(tmp_path / "chain.parquet")
    same(known, back)
    assert back.open_moves == "known"
    assert back.tally is None
    assert not is_tally(tmp_path / "chain.parquet")


def test_nothing_there(tmp_path: Path) -> None:
    with pytest.raises(StoreError, match="no tally at .*none.parquet'; wanted a file written by tally.save"):
        jn.Tally.load(tmp_path / "none.parquet")
    with pytest.raises(StoreError, match="no fit at .*none.parquet'; wanted a file written by fit.save"):
        jn.JourneyFit.load(tmp_path / "none.parquet")
    assert not is_tally(tmp_path / "none.parquet")
    assert not is_tally(tmp_path)


def test_something_else(tally: jn.Tally, known: jn.JourneyFit, tmp_path: Path) -> None:
    (tmp_path / "notes.txt").write_text("not Parquet")
    pq.write_table(pa.table({"member": [1]}), tmp_path / "log.parquet")
    tally.save(tmp_path / "tally.parquet")
    known.save(tmp_path / "chain.parquet")
    for name in ("notes.txt", "log.parquet", "chain.parquet"):
        with pytest.raises(StoreError, match="is not a whole tally; wanted a file written by tally.save"):
            jn.Tally.load(tmp_path / name)
        assert not is_tally(tmp_path / name)
    for name in ("notes.txt", "log.parquet", "tally.parquet"):
        with pytest.raises(StoreError, match="is not a whole fit; wanted a file written by fit.save: fit it again"):
            jn.JourneyFit.load(tmp_path / name)


def test_another_format_version(tally: jn.Tally, known: jn.JourneyFit, tmp_path: Path) -> None:
    for kept, key, load in ((tally, b"journeys", jn.Tally.load), (known, b"journeys fit", jn.JourneyFit.load)):
        path = tmp_path / "kept.parquet"
        kept.save(path)
        table = pq.read_table(path)
        head = re.sub(rb'"format_version": \d+', b'"format_version": 99', table.schema.metadata[key])
        pq.write_table(table.replace_schema_metadata({key: head}), path)
        with pytest.raises(StoreError, match="has format version 99"):
            load(path)


def test_changed_counts_are_told_by_the_checksum(tally: jn.Tally, known: jn.JourneyFit, tmp_path: Path) -> None:
    path = tmp_path / "kept.parquet"
    for kept, name, load in ((tally, "n", jn.Tally.load), (known, "probability", jn.JourneyFit.load)):
        kept.save(path)
        table = pq.read_table(path)
        values = table[name].to_pylist()
        values[0] += 1
        changed = table.set_column(table.column_names.index(name), name, pa.array(values, table[name].type))
        pq.write_table(changed, path)
        with pytest.raises(StoreError, match=r"is damaged \(its checksum does not fit\)"):
            load(path)


@pytest.mark.parametrize("kind", ["tally", "fit", "chain"])
@pytest.mark.filterwarnings("ignore::journeys.errors.EndNotSeenWarning")
def test_truncated_or_flipped(tally: jn.Tally, known: jn.JourneyFit, tmp_path: Path, kind: str) -> None:
    """A file cut anywhere is refused; one with a byte changed is refused or says the same as before."""
    fit = jn.JourneyModel().fit(tally)
    path = tmp_path / "kept.parquet"
    {"tally": tally, "fit": fit, "chain": known}[kind].save(path)
    load = jn.Tally.load if kind == "tally" else jn.JourneyFit.load
    whole = path.read_bytes()
    rng = np.random.default_rng(11)
    for size in [0, 1, 4, 12, *rng.integers(12, len(whole), 40), len(whole) - 1]:
        path.write_bytes(whole[:size])
        with pytest.raises(StoreError):
            load(path)
    n_refused = 0
    for place in np.unique(rng.integers(0, len(whole), 250)):
        broken = bytearray(whole)
        broken[place] ^= int(rng.integers(1, 256))
        path.write_bytes(bytes(broken))
        try:
            back = load(path)
        except StoreError:
            n_refused += 1
            continue
        if isinstance(back, jn.Tally):
            assert back == tally
            pd.testing.assert_frame_equal(back.findings, tally.findings)
        else:
            same(back, known if kind == "chain" else fit)
    assert n_refused > 25
