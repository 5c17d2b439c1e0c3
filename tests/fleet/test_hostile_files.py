"""Fleets, logs and schedules as an attacker would send them: bombs, links, pipes and endless names."""

import contextlib
import io
import os
import time

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import labkit as lk
from labkit import memory
from labkit.engine.failure_tables import read_schedule
from labkit.fleet.csv_files import NUMBER
from labkit.fleet.parquet_files import check_size, read_parquet
from labkit.fleet.parquet_footer import chunks_of
from labkit.fleet.readers import read_fleet
from labkit.records.store import decode
from labkit.traces.reading import open_trace

SERVERS = b"server\na\nb\nc\n"
CHOICES = b"option_1,option_2\na,b\nb,c\n"
FLEET = lk.Fleet(pd.DataFrame({"server": ["a", "b"]}), pd.DataFrame({"option_1": ["a"], "option_2": ["b"]}))


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "fleet").mkdir()
    (tmp_path / "fleet" / "servers.csv").write_bytes(SERVERS)
    (tmp_path / "fleet" / "choices.csv").write_bytes(CHOICES)
    return tmp_path / "fleet"


@pytest.fixture
def small(monkeypatch):
    """Let the machine have 10 MB."""
    monkeypatch.setattr(memory, "memory", lambda: 10**7)
    monkeypatch.setattr("labkit.fleet.parquet_files.memory", lambda: 10**7)


def parquet(table, **options):
    sink = pa.BufferOutputStream()
    pq.write_table(table, sink, store_schema=False, **options)
    return sink.getvalue().to_pybytes()


def repeated(value, rows):
    return pa.DictionaryArray.from_arrays(pa.array(np.zeros(rows, np.int32)), [value])


def bombs():
    texts = pa.table({"server": repeated("x" * 20_000, 50_000)})
    plain = texts.slice(0, 500).cast(pa.schema([("server", pa.string())]))
    delta = {"use_dictionary": False, "column_encoding": {"server": "DELTA_BYTE_ARRAY"}}
    return {
        "rows": parquet(pa.table({"server": repeated(7, 5_000_000)})),
        "texts": parquet(texts),
        "prefixes": parquet(plain, **delta),
        "lists": parquet(pa.table({"server": pa.array([[7] * 2_000_000], pa.list_(pa.int64()))})),
    }


@pytest.mark.parametrize("kind", ["rows", "texts", "prefixes", "lists"])
def test_a_bomb_is_refused_with_an_estimate_before_it_is_unpacked(kind, tmp_path, small):
    content = bombs()[kind]
    assert len(content) < 120_000
    path = tmp_path / "servers.parquet"
    path.write_bytes(content)
    del content
    pool = pa.default_memory_pool()
    before = pool.bytes_allocated()
    with pytest.raises(
        lk.InputError, match=r"would take about .* GB of memory and this machine has 0.01 GB: keep"
    ):
        read_parquet(path)
    assert pool.bytes_allocated() <= before + 10**6


def test_the_bomb_of_texts_is_refused_on_a_real_machine(tmp_path):
    """A terabyte in 200 KB; it takes a hundredth of a second to see."""
    path = tmp_path / "servers.parquet"
    path.write_bytes(parquet(pa.table({"server": repeated("x" * 1_000_000, 1_000_000)})))
    start = time.perf_counter()
    with pytest.raises(lk.InputError, match=r"texts of column 'server', would take about .* GB"):
        read_parquet(path)
    assert time.perf_counter() - start < 5


def test_the_footer_tells_what_arrow_tells():
    table = pa.table({"a": [1, 2, None], "b": ["x", "y", None], "c": [[1, 2], [], None]})
    content = parquet(table, row_group_size=2)
    about = pq.ParquetFile(io.BytesIO(content)).metadata
    columns = [about.row_group(g).column(c) for g in range(2) for c in range(3)]
    assert [(each.values, each.size) for each in chunks_of(io.BytesIO(content))] == [
        (each.num_values, each.total_uncompressed_size) for each in columns
    ]
    assert [each.column for each in chunks_of(io.BytesIO(content))] == ["a", "b", "c"] * 2
    assert [each.is_text for each in chunks_of(io.BytesIO(content))] == [False, True, False] * 2


def test_numbers_of_a_footer_that_contradict_each_other_do_not_end_the_process(tmp_path):
    """Each byte of a footer is changed; Arrow's own look at such metadata aborts Python for some of them."""
    content = parquet(pa.table({"server": ["a", "b"], "capacity": [1.0, 2.0]}))
    start = len(content) - 8 - int.from_bytes(content[-8:-4], "little")
    path = tmp_path / "servers.parquet"
    for at in range(start, len(content)):
        path.write_bytes(content[:at] + bytes([content[at] ^ 1 << at % 8]) + content[at + 1 :])
        with contextlib.suppress(lk.InputError):
            read_parquet(path)


def test_a_size_is_checked_for_content_in_memory_as_well(tmp_path, small):
    with pytest.raises(lk.InputError, match="would take about"):
        check_size(tmp_path / "x.parquet", bombs()["rows"])
    whole = parquet(pa.table({"a": [1]}))
    check_size(tmp_path / "x.parquet", whole)
    assert decode(whole).num_rows == 1


def test_a_csv_larger_than_memory_is_refused_unread(folder, small):
    with (folder / "servers.csv").open("wb") as stream:
        stream.truncate(10**10)  # a hole, no content
    with pytest.raises(lk.InputError, match=r"its 10,000,000,000 bytes would take about 60 GB"):
        read_fleet(folder)


def test_an_endless_line_is_refused_without_reading_it(tmp_path):
    path = tmp_path / "trace.csv"
    with path.open("wb") as stream:
        stream.truncate(10**11)
    start = time.perf_counter()
    with pytest.raises(lk.InputError, match="no readable header"):
        open_trace(path, FLEET)
    assert time.perf_counter() - start < 5


def test_a_long_number_takes_no_longer_than_its_length():
    start = time.perf_counter()
    assert not NUMBER.fullmatch("9" * 200_000 + "x")
    assert NUMBER.fullmatch("9" * 200_000)
    assert all(
        NUMBER.fullmatch(text) for text in ("1", "1.", "1.5", ".5", "+1e5", "-1.e-5", "nan", "-Infinity")
    )
    assert not any(NUMBER.fullmatch(text) for text in ("", ".", "1.5.2", "e5", "1e", "1_0", "0x1"))
    assert time.perf_counter() - start < 1


@pytest.mark.parametrize("form", ["csv", "parquet"])
def test_an_endless_name_is_refused_in_a_short_sentence(folder, form):
    servers = pd.DataFrame({"server": ["a" * 1000, "b" * 1001]})
    (folder / "servers.csv").unlink()
    getattr(servers, f"to_{form}")(folder / f"servers.{form}", index=False)
    with pytest.raises(
        lk.InputError, match="b'… of 1,001 characters; give a name of at most 1,000"
    ) as refusal:
        read_fleet(folder)
    assert len(str(refusal.value)) < 500


def test_whatever_is_received_a_sentence_is_short():
    with pytest.raises(lk.InputError) as refusal:
        lk.place(FLEET, "x" * 10**6, tasks=1, rng=1)
    assert len(str(refusal.value)) < 2_000
    assert str(refusal.value).endswith(".")


@pytest.mark.parametrize("name", ["servers.csv", "choices.csv"])
def test_a_link_out_of_the_folder_is_not_followed(folder, name):
    (folder.parent / "secret").write_bytes((folder / name).read_bytes())
    (folder / name).unlink()
    (folder / name).symlink_to("../secret")
    with pytest.raises(lk.InputError, match=rf"{name} is a link out of its folder, to .*secret; links out"):
        read_fleet(folder)


def test_a_folder_that_the_user_names_may_be_a_link_and_so_may_files_inside_it(folder):
    (folder / "servers.csv").rename(folder / "real")
    (folder / "servers.csv").symlink_to("real")
    (folder.parent / "other").symlink_to(folder)
    assert len(read_fleet(folder.parent / "other")) == 3


@pytest.mark.parametrize("name", ["servers.csv", "choices.csv"])
def test_a_pipe_or_device_is_refused_without_waiting(folder, name):
    (folder / name).unlink()
    os.mkfifo(folder / name)
    with pytest.raises(lk.InputError, match=rf"{name} is not a file"):
        read_fleet(folder)
    (folder / name).unlink()
    (folder / name).symlink_to("/dev/zero")
    with pytest.raises(lk.InputError, match=rf"{name} is not a file"):
        read_fleet(folder)


def test_pipes_are_no_logs_and_no_schedules(tmp_path):
    os.mkfifo(tmp_path / "x.csv")
    with pytest.raises(lk.InputError, match="is not a file"):
        open_trace(tmp_path / "x.csv", FLEET)
    with pytest.raises(lk.InputError, match="is not a file"):
        read_schedule(tmp_path / "x.csv")


@pytest.mark.parametrize(
    ("make", "sentence"),
    [
        (lambda: lk.ring(10**12), "n asks for 1000000000000 servers; a fleet holds at most"),
        (lambda: lk.ring(4 * 10**9), "asks for 4,000,000,000 servers, which would take about"),
        (lambda: lk.torus(60_000, 60_000), "sides asks for 3,600,000,000 servers"),
        (lambda: lk.hypercube(31), "dimension asks for 2,147,483,648 servers"),
        (lambda: lk.random_regular(10**9, 40, rng=1), "degree asks for 1,000,000,000 servers"),
        (lambda: lk.random_regular(500_000, 400_000, rng=1), "degree asks for 500,000 servers"),
        (lambda: lk.ring_with_chords(10**8, 10**15, rng=1), "chords asks for 1,000,000,000,000,000 choices"),
        (
            lambda: lk.place(lk.complete(10**9), "one-choice", tasks=1, replicates=10**5, rng=1),
            "replicates is 100,000; with 1,000,000,000 servers and 1 checkpoints they would take about",
        ),
    ],
)
def test_absurd_fleets_and_runs_are_refused_before_they_are_made(make, sentence):
    start = time.perf_counter()
    with pytest.raises(lk.InputError, match=sentence):
        make()
    assert time.perf_counter() - start < 1
