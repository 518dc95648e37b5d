from __future__ import annotations

import gzip

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet as pq
import pytest

from journeys.errors import LogError
from journeys.intake import batches as batches_module
from journeys.intake.normalise import Normaliser
from journeys.intake.read import open_log
from journeys.intake.rows import concat_rows
from journeys.intake.rules import JourneyRules

RULES = JourneyRules("who", "when", "what", converted="joined", silence="30d")
WHEN = [
    "2025-01-01T00:00:00Z",
    "2025-01-01T10:30:00.25Z",
    None,
    "2025-03-01T00:00:00Z",
    "2025-03-02T00:00:00Z",
]
FRAMES = {
    "integer": pd.DataFrame(
        {
            "notes": ["x"] * 5,
            "who": [1, 2, 1, -3, 2**40],
            "what": ["visit", "price, page", "visit", None, "joined"],
            "when": pd.to_datetime(pd.Series(WHEN), format="ISO8601"),
        }
    )
}
FRAMES["text"] = FRAMES["integer"].assign(who=["a", "Zoë", "a", "member-000000017", "b"])


def table_of(frame):
    return pa.Table.from_pandas(frame, preserve_index=False)


def written(kind, frame, folder):
    table = table_of(frame)
    if kind == "parquet":
        pq.write_table(table, folder / "log.parquet", row_group_size=2)
        return folder / "log.parquet"
    if kind in ("csv", "csv.gz", "tsv"):
        path = folder / f"log.{kind}"
        options = pyarrow.csv.WriteOptions(delimiter="\t" if kind == "tsv" else ",")
        with (gzip.open if kind == "csv.gz" else open)(path, "wb") as file:
            pyarrow.csv.write_csv(table, file, options)
        return path
    if kind == "ipc":
        with pa.ipc.new_file(folder / "log.arrow", table.schema) as writer:
            writer.write_table(table, max_chunksize=2)
        return str(folder / "log.arrow")
    if kind == "ipc stream":
        with pa.ipc.new_stream(folder / "log.ipc", table.schema) as writer:
            writer.write_table(table, max_chunksize=2)
        return folder / "log.ipc"
    files = [
        folder / "b" / "_SUCCESS",
        folder / "b" / "0.parquet",
        folder / "b" / "1.parquet",
        folder / ".x.csv",
    ]
    (folder / "b").mkdir()
    files[0].write_text("")
    files[3].write_text("not,read\n")
    pq.write_table(table[:2], files[1])
    pq.write_table(table[2:], files[2])
    return files[2:0:-1] if kind == "list of files" else folder


def hive(frame, folder):
    for day, part in [("2025-01", frame[:2]), ("2025-03", frame[2:])]:
        path = folder / f"month={day}" / "part.parquet"
        path.parent.mkdir()
        pq.write_table(table_of(part), path)
    return folder


class Cursor:
    """As database drivers have it."""

    def __init__(self, table):
        self._table = table

    def fetch_record_batch(self):
        return self._table.to_reader(max_chunksize=2)


def categories(frame):
    return frame.assign(what=frame["what"].astype("category"))


def indexed(frame):
    return frame.set_index(["when", "who"])


IN_MEMORY = {
    "pandas": lambda frame: frame,
    "pandas, numpy text": lambda frame: frame.astype({"what": object}),
    "pandas categories": categories,
    "pandas named index": indexed,
    "pandas odd index": lambda frame: frame.set_index(np.array([9, 9, 3, 1, 0])),
    "pandas microseconds": lambda frame: frame.assign(when=frame["when"].astype("datetime64[us, UTC]")),
    "pandas arrow types": lambda frame: frame.convert_dtypes(dtype_backend="pyarrow"),
    "table": table_of,
    "chunked table": lambda frame: pa.concat_tables([table_of(frame[:3]), table_of(frame[3:])]),
    "string views": lambda frame: table_of(frame).cast(
        pa.schema([(f.name, pa.string_view() if f.type in (pa.string(), pa.large_string()) else f.type)
                   for f in table_of(frame).schema])
    ),
    "record batch": lambda frame: table_of(frame).to_batches()[0],
    "list of batches": lambda frame: table_of(frame).to_batches(max_chunksize=2),
    "reader": lambda frame: table_of(frame).to_reader(max_chunksize=2),
    "generator": lambda frame: (batch for batch in table_of(frame).to_batches(max_chunksize=2)),
    "cursor": lambda frame: Cursor(table_of(frame)),
}  # fmt: skip
ON_DISK = ["parquet", "csv", "csv.gz", "tsv", "ipc", "ipc stream", "folder", "list of files"]
ONE_SHOT = {"reader", "generator", "cursor"}


def rows_of(log):
    normaliser = Normaliser(RULES)
    rows = concat_rows([normaliser.rows(batch) for batch in log.batches(RULES.columns)])
    names = [normaliser.codes.names[code] for code in rows.event]
    return rows.key.tolist(), rows.time.tolist(), names, rows.row.tolist(), normaliser.findings.to_dict()


def opened(source):
    return open_log(source, RULES.columns, text=[RULES.event])


@pytest.fixture(params=["integer", "text"])
def frame(request):
    return FRAMES[request.param]


@pytest.fixture
def expected(frame):
    return rows_of(opened(table_of(frame)))


def test_expected(expected):
    keys, times, names, rows, findings = expected
    assert names == ["visit", "price, page", "joined"]
    assert rows == [0, 1, 4]
    assert times[1] - times[0] == 37_800_250_000
    assert [item["code"] for item in findings["findings"]] == ["missing_time", "missing_event"]


@pytest.mark.parametrize("kind", IN_MEMORY)
def test_in_memory(kind, frame, expected):
    log = opened(IN_MEMORY[kind](frame))
    assert log.one_shot == (kind in ONE_SHOT)
    assert rows_of(log) == expected
    if log.one_shot:
        with pytest.raises(LogError, match="can be read only once, and was; pass a table or a file instead"):
            log.batches(["who"])
    else:
        assert rows_of(log) == expected
        assert log.n_rows == 5


@pytest.mark.parametrize("kind", ON_DISK)
def test_on_disk(kind, frame, expected, tmp_path):
    log = opened(written(kind, frame, tmp_path))
    assert rows_of(log) == expected
    assert rows_of(log) == expected


def test_hive_folder(frame, expected, tmp_path):
    log = opened(hive(frame, tmp_path))
    assert rows_of(log) == expected
    table = pa.Table.from_batches(list(log.batches(["month", "who"])))
    assert table["month"].to_pylist() == ["2025-01"] * 2 + ["2025-03"] * 3


def test_hive_values(tmp_path):
    for folder in ["year=2024/team=a%20b", "year=2025/team=__HIVE_DEFAULT_PARTITION__"]:
        (tmp_path / folder).mkdir(parents=True)
        pq.write_table(pa.table({"who": [1]}), tmp_path / folder / "0.parquet")
    batches = list(open_log(tmp_path, ["year"]).batches(["team", "year"]))
    together = pa.Table.from_batches(batches)
    assert together.to_pydict() == {"team": ["a b", None], "year": [2024, 2025]}
    assert open_log(tmp_path, ["who"]).n_rows == 2


@pytest.mark.optional
@pytest.mark.filterwarnings("ignore:Arrow output on a DB-API result makes an extra copy")
@pytest.mark.parametrize("engine", ["polars", "duckdb"])
def test_engines(engine, frame, expected):
    module = pytest.importorskip(engine, reason=f"needs {engine}")
    if engine == "polars":
        polars = module.from_arrow(table_of(frame))
        assert rows_of(opened(polars)) == expected
        assert rows_of(opened(polars.with_columns(module.col("what").cast(module.Categorical)))) == expected
        with pytest.raises(TypeError, match=r"got a polars LazyFrame; call .collect\(\)"):
            opened(polars.lazy())
        return
    events = table_of(frame)  # duckdb finds it by its name
    log = opened(module.sql("select * from events"))
    assert log.one_shot
    assert rows_of(log) == expected
    with opened(module.sql("select * from events")).spooled() as kept:
        assert rows_of(kept) == expected
        assert rows_of(kept) == expected
    assert rows_of(opened(module.connect().execute("select * from events"))) == expected
    assert len(events) == 5


@pytest.mark.parametrize("kind", ["generator", "pandas"])
def test_spooled(kind, frame, expected):
    with opened(IN_MEMORY[kind](frame)).spooled() as kept:
        assert rows_of(kept) == expected
        assert rows_of(kept) == expected
        assert (kept.n_rows, kept.one_shot, kept.names) == (5, False, ["who", "when", "what"])


def test_spooling_keeps_types_that_change():
    parts = [pa.record_batch({"who": pa.array([1], kind)}) for kind in (pa.int8(), pa.int64(), pa.int64())]
    with open_log(iter(parts), ["who"]).spooled() as kept:
        batches = list(kept.batches(["who"]))
    assert [batch.schema.field("who").type for batch in batches] == [pa.int8(), pa.int64()]
    assert [batch.num_rows for batch in batches] == [1, 2]


def test_only_the_asked_columns_are_read(frame, tmp_path):
    for source in [written("parquet", frame, tmp_path), frame, table_of(frame), table_of(frame).to_reader()]:
        assert [batch.schema.names for batch in open_log(source, ["what"]).batches(["what", "who"])] == [
            ["what", "who"]
        ]


def test_sizes_of_batches(monkeypatch):
    monkeypatch.setattr(batches_module, "_FEW_ROWS", 10)
    monkeypatch.setattr(batches_module, "ROWS_AT_ONCE", 25)
    sizes = [3, 3, 5, 2, 60, 1, 0, 10, 4]
    numbers = iter(range(sum(sizes)))
    parts = [pa.record_batch({"who": pa.array([next(numbers) for _ in range(n)], pa.int64())}) for n in sizes]
    got = list(open_log(iter(parts), ["who"]).batches(["who"]))
    assert [batch.num_rows for batch in got] == [11, 2, 25, 25, 10, 1, 10, 4]
    assert pa.Table.from_batches(got)["who"].to_pylist() == list(range(sum(sizes)))


def test_dictionaries_that_differ_are_joined():
    parts = [pa.record_batch({"what": pa.array([name]).dictionary_encode()}) for name in "abc"]
    (batch,) = open_log(iter(parts), ["what"]).batches(["what"])
    assert batch.column("what").to_pylist() == ["a", "b", "c"]


def test_missing_columns():
    frame = pd.DataFrame({"notes": [1], "customer_id": [1], "wen": [1]})
    with pytest.raises(
        LogError, match="pandas frame has no column 'when'; there are 'wen', 'notes', 'customer_id'"
    ):
        open_log(frame, ["customer_id", "when"])
    with pytest.raises(LogError, match="has 2 columns called 'a'; rename all but one"):
        open_log(pd.DataFrame([[1, 2]], columns=["a", "a"]), ["a"])
    parts = [pa.record_batch({"a": [1]}), pa.record_batch({"b": [1]})]
    with pytest.raises(LogError, match="batch 1 of list_iterator of record batches has no column 'a'"):
        list(open_log(iter(parts), ["a"]).batches(["a"]))


def test_a_later_file_without_the_column(tmp_path):
    pq.write_table(pa.table({"who": [1]}), tmp_path / "0.parquet")
    pq.write_table(pa.table({"other": [1]}), tmp_path / "1.parquet")
    with pytest.raises(LogError, match=r"Parquet file .*1.parquet has no column 'who'; there are 'other'"):
        list(open_log(tmp_path, ["who"]).batches(["who"]))


@pytest.mark.parametrize(
    ("source", "message"),
    [
        ({"who": [1]}, "got a dict; wanted .*; make it a frame: pandas.DataFrame"),
        ([{"who": 1}], "got a list of dict; .*pandas.DataFrame"),
        ([(1, 2)], "got a list of tuple"),
        (3, "got a int; wanted the path of a Parquet"),
        (None, "got a NoneType"),
        (b"log.csv", "got a bytes"),
        (pd.Series([1]), "got a Series, which has no rows with named columns"),
        ((number for number in [1]), "got a generator of int"),
    ],
)
def test_refuses_what_is_no_log(source, message):
    with pytest.raises(TypeError, match=message):
        open_log(source, [])


def test_refuses_paths(tmp_path):
    with pytest.raises(LogError, match="nothing.parquet: no such file"):
        open_log(tmp_path / "nothing.parquet", [])
    with pytest.raises(LogError, match="holds no file to read; wanted one of .parquet"):
        open_log(tmp_path, [])
    (tmp_path / "log.xlsx").write_text("")
    with pytest.raises(LogError, match="log.xlsx: files ending in '.xlsx' are not read"):
        open_log(tmp_path / "log.xlsx", [])
    with pytest.raises(TypeError, match="got a list"):
        open_log([tmp_path, 3], [])
    folder = tmp_path / "mixed"
    folder.mkdir()
    (folder / "a.csv").write_text("who\n1\n")
    pq.write_table(pa.table({"who": [1]}), folder / "b.parquet")
    with pytest.raises(LogError, match=r"files of several kinds \(CSV, Parquet\)"):
        open_log(folder, [])
    with pytest.raises(LogError, match="names a file twice"):
        open_log([folder / "a.csv", folder / "a.csv"], [])
    with pytest.raises(LogError, match="is a folder in a list of files"):
        open_log([folder], [])


def test_folders_with_different_keys(tmp_path):
    for folder in ["a=1", "b=1"]:
        (tmp_path / folder).mkdir()
        pq.write_table(pa.table({"who": [1]}), tmp_path / folder / "0.parquet")
    with pytest.raises(LogError, match="folders with different keys"):
        open_log(tmp_path, ["who"])


@pytest.mark.parametrize("name", ["log.parquet", "log.arrow", "log.ipc"])
@pytest.mark.parametrize("content", [b"", b"who,when\n1,2\n", b"PAR1junkPAR1", b"ARROW1\0\0junk"])
def test_damaged_files(name, content, tmp_path):
    (tmp_path / name).write_bytes(content)
    with pytest.raises(LogError, match="not a whole (Parquet|Arrow) file .*write it again") as caught:
        open_log(tmp_path / name, ["who"])
    assert caught.value.__suppress_context__


def test_parquet_damaged_within(tmp_path):
    path = tmp_path / "log.parquet"
    pq.write_table(pa.table({"who": np.random.default_rng(1).integers(0, 2**60, 10_000)}), path)
    data = bytearray(path.read_bytes())
    data[4:200] = b"\xff" * 196
    path.write_bytes(data)
    log = open_log(path, ["who"])
    with pytest.raises(LogError, match="not a whole Parquet file"):
        list(log.batches(["who"]))


SECRET = "s3cret"
CSV_FAULTS = [
    ("", "the file is empty; wanted a line of column names"),
    (
        f"who,when\n1,2025-01-01\n2,2025-01-02,{SECRET}\n",
        r"row 3 \(the line of names is row 1\) has 3 values, wanted 2",
    ),
    ("who,when\n1,2025-01-01\n2\n", "row 3 .* has 1 values, wanted 2"),
]


@pytest.mark.parametrize(("content", "message"), CSV_FAULTS)
def test_csv_faults(content, message, tmp_path):
    (tmp_path / "log.csv").write_text(content)
    with pytest.raises(LogError, match=message) as caught:
        list(open_log(tmp_path / "log.csv", ["who"]).batches(["who"]))
    assert SECRET not in str(caught.value)
    assert caught.value.__suppress_context__


def test_csv_ids_that_change_kind_far_down(tmp_path):
    rows = 2_000_000
    body = b"pad,who\n" + b"xx,123456\n" * rows + f"xx,{SECRET}\n".encode()
    (tmp_path / "log.csv").write_bytes(body)
    with pytest.raises(
        LogError, match=rf"row {rows + 2} .*column 'who', is not int64 as the rows before"
    ) as caught:
        list(open_log(tmp_path / "log.csv", ["who"]).batches(["who"]))
    assert SECRET not in str(caught.value)


def test_csv_names_stay_text(tmp_path):
    (tmp_path / "log.csv").write_text("who,what\n1,007\n2,7\n3,\n4,true\n")
    (batch,) = open_log(tmp_path / "log.csv", ["what"], text=["what"]).batches(["who", "what"])
    assert batch.column("what").to_pylist() == ["007", "7", None, "true"]
    assert batch.column("who").type == pa.int64()


def test_csv_fractions_may_come_later(tmp_path):
    (tmp_path / "log.csv").write_text("when\n2025-01-01 10:00:00\n2025-01-01 10:00:00.5\n")
    (batch,) = open_log(tmp_path / "log.csv", ["when"]).batches(["when"])
    assert pa.types.is_timestamp(batch.column("when").type)


def test_pandas_columns_of_several_kinds():
    frame = pd.DataFrame({"who": pd.Series(["a", SECRET, 3], dtype=object)})
    with pytest.raises(
        LogError, match=r"column 'who' \(dtype object\) holds values of several kinds"
    ) as caught:
        list(open_log(frame, ["who"]).batches(["who"]))
    assert SECRET not in str(caught.value)


def test_describe(frame, tmp_path):
    path = written("parquet", frame, tmp_path)
    assert open_log(path, []).describe() == "Parquet file log.parquet, 5 rows"
    assert open_log(frame, []).describe() == "pandas frame, 5 rows"
    assert open_log(iter([pa.record_batch({"a": [1]})]), []).describe() == "list_iterator of record batches"
    log = open_log(frame, [])
    assert open_log(log, ["who"]) is log
