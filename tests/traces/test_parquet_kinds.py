"""Small files in parquet that stand for more than any memory are refused, or read in little of it."""

import base64

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import labkit as lk
from labkit.traces import pieces
from labkit.traces.pieces import open_pieces
from labkit.traces.reading import open_trace


def columns(**changes):
    return {"time": [0.0, 1.0], "option_1": ["a", "b"], "option_2": ["b", "c"], **changes}


def written(folder, **changes):
    path = folder / "log.parquet"
    pq.write_table(pa.table(columns(**changes)), path)
    return path


NAMES = "give the name of one server in a cell, a text or a whole number"
FIXED = pa.array([b"abc", b"abd"], pa.binary(3))


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"time": ["0", "1"]}, "time has type text; give numbers, or timestamps"),
        ({"time": pa.array(["0", "1"]).dictionary_encode()}, "time has type text; give numbers"),
        ({"size": ["1", "2"]}, "size has type text; give a finite number of at least 0"),
        (
            {"duration": FIXED},
            r"duration has type fixed_size_binary\[3\]; give a finite number of at least 0, or",
        ),
        ({"option_1": [b"a", b"b"]}, f"option_1 has type binary; {NAMES}"),
        (
            {"option_2": pa.array([b"a", b"b"]).dictionary_encode()},
            f"option_2 has type dictionary<.*; {NAMES}",
        ),
        ({"option_3": [["a"], ["b"]]}, f"option_3 has type list<.*; {NAMES}"),
        ({"placed": [{"a": "b"}, {"a": "c"}]}, f"placed has type struct<.*; {NAMES}"),
    ],
)
def test_kinds_of_any_length_are_refused_from_the_schema(tmp_path, changes, said):
    path = written(tmp_path, **changes)
    with pytest.raises(lk.InputError, match=f"log.parquet: {said}"):
        open_pieces(path)


@pytest.mark.parametrize("kind", [pa.string(), pa.large_string(), pa.string_view()])
def test_a_long_text_in_each_of_many_rows_is_held_once(tmp_path, kind):
    rows, long = 70_000, "z" * 100_000
    texts = pa.DictionaryArray.from_arrays(pa.array([0] * rows, pa.int32()), pa.array([long]))
    table = pa.table([[0.0] * rows, texts, [1] * rows], names=["time", "option_1", "option_2"])
    claimed = pa.schema([("time", pa.float64()), ("option_1", kind), ("option_2", pa.int64())])
    path = tmp_path / "log.parquet"
    with pq.ParquetWriter(path, table.schema, store_schema=False) as file:
        file.write_table(table)
        file.add_key_value_metadata({"ARROW:schema": base64.b64encode(claimed.serialize()).decode()})
    assert pq.read_schema(path).field("option_1").type == kind
    assert path.stat().st_size < 1_000_000
    del table, texts
    before, seen = pa.total_allocated_bytes(), 0
    for piece in open_pieces(path).read(["option_1"]):
        assert len(piece["option_1"].dictionary) == 1
        assert pa.total_allocated_bytes() - before < 10_000_000
        seen += len(piece["option_1"])
    assert seen == rows


@pytest.mark.parametrize("kind", [pa.string(), pa.large_string(), pa.string_view()])
@pytest.mark.parametrize("encoding", ["PLAIN", "DELTA_LENGTH_BYTE_ARRAY", "DELTA_BYTE_ARRAY"])
def test_names_are_read_however_they_are_stored(tmp_path, kind, encoding):
    servers = lk.Fleet(
        pd.DataFrame({"server": ["a", "b", "c"]}), pd.DataFrame({"option_1": ["a"], "option_2": ["b"]})
    )
    table = pa.table(columns(option_1=pa.array(["a", "b"]).cast(kind)))
    path = tmp_path / "log.parquet"
    pq.write_table(table, path, use_dictionary=False, column_encoding={"option_1": encoding})
    (block,) = open_trace(path, servers).blocks()
    assert block.options.tolist() == [[0, 1], [1, 2]]


def test_long_texts_that_differ_at_their_ends_are_read_a_few_at_a_time(tmp_path, monkeypatch):
    monkeypatch.setattr(pieces, "_LOOK", 1_000_000)
    rows, long = 2_000, "z" * 50_000
    path, schema = tmp_path / "log.parquet", pa.table(columns()).schema
    encoding = {"option_1": "DELTA_BYTE_ARRAY"}
    with pq.ParquetWriter(path, schema, use_dictionary=False, column_encoding=encoding) as file:
        for first in range(0, rows, 500):
            names = [f"{long}{first + row}" for row in range(500)]
            file.write_table(pa.table([[float(first)] * 500, names, ["b"] * 500], schema=schema))
    del names
    assert path.stat().st_size < 1_000_000
    before, seen = pa.total_allocated_bytes(), []
    for piece in open_pieces(path).read(["option_1"]):
        assert pa.total_allocated_bytes() - before < 20_000_000  # of 100 MB
        seen += [text.as_py()[len(long) :] for text in piece["option_1"]]
    assert seen == [str(row) for row in range(rows)]


def test_a_lack_of_memory_is_not_told_as_a_damaged_file(tmp_path, monkeypatch):
    path = written(tmp_path)

    def no_memory(*given, **options):
        raise pa.ArrowMemoryError("malloc of size 6400000000 failed")

    monkeypatch.setattr(pq.ParquetFile, "iter_batches", no_memory)
    with pytest.raises(MemoryError, match="malloc"):
        next(open_pieces(path).read(["time"]))
