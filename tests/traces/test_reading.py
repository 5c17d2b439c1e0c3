import gc
import io
import tracemalloc

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import labkit as lk
from labkit.fleet.names import ABSENT
from labkit.traces.reading import Block, open_trace

HEADER = "time,option_1,option_2,option_3,size,duration,placed\n"
CSV = HEADER + "0,a,b,,1,2.5,a\n0,c,,,0,0,c\n1.5,b,,a,2,1e3,b\n4,c,b,a,3,7,a\n"


def fleet(*names):
    names = names or ("a", "b", "c")
    choices = {"option_1": names[:-1], "option_2": names[1:]}
    return lk.Fleet(pd.DataFrame({"server": names}), pd.DataFrame(choices))


def joined(trace, servers, **given_rows) -> Block:
    """Return all blocks as one, after checks of what every block promises."""
    blocks = list(open_trace(trace, servers).blocks(**given_rows))
    first = 0
    for block in blocks:
        assert block.first == first
        first += len(block.time)
        for values in block[1:]:
            if values is not None:
                assert len(values) == len(block.time) > 0
                assert values.flags.c_contiguous
                assert values.flags.writeable
        assert block.options.dtype == np.uint32
    columns = zip(*(block[1:] for block in blocks), strict=True)
    return Block(0, *(None if one[0] is None else np.concatenate(one) for one in columns))


def assert_same(one: Block, other: Block):
    for left, right in zip(one[1:], other[1:], strict=True):
        assert (left is None) == (right is None)
        if left is not None:
            assert left.dtype == right.dtype
            np.testing.assert_array_equal(left, right)


@pytest.fixture
def write(tmp_path):
    def write(content, name="log.csv"):
        path = tmp_path / name
        if isinstance(content, pd.DataFrame) and path.suffix == ".csv":
            content.to_csv(path, index=False)
        elif isinstance(content, pd.DataFrame):
            content.to_parquet(path, index=False)
        elif isinstance(content, pa.Table):
            pq.write_table(content, path)
        else:
            path.write_bytes(content.encode() if isinstance(content, str) else content)
        return path

    return write


def test_a_small_log_in_full(write):
    trace = open_trace(write(CSV), fleet())
    assert (trace.width, trace.has_size, trace.has_duration, trace.has_placed) == (3, True, True, True)
    assert (trace.unit, trace.last_time()) == ("", 4.0)
    assert trace.at(2) == f"{trace.label} line 4"
    assert trace.label == str(write(CSV))
    for _ in range(2):
        (block,) = trace.blocks()
        assert block.time.tolist() == [0, 0, 1.5, 4]
        absent = int(ABSENT)
        assert block.options.tolist() == [[0, 1, absent], [2, absent, absent], [1, 0, absent], [2, 1, 0]]
        assert block.size.tolist() == [1, 0, 2, 3]
        assert block.duration.tolist() == [2.5, 0, 1e3, 7]
        assert block.placed.tolist() == [0, 2, 1, 0]


def test_columns_that_are_not_there_are_none(write):
    log = pd.DataFrame({"time": [1, 2], "option_1": ["a", "b"], "option_2": ["b", "c"]})
    trace = open_trace(log, fleet())
    assert (trace.label, trace.has_size, trace.has_duration, trace.has_placed) == ("trace", *[False] * 3)
    assert next(trace.blocks())[3:] == (None, None, None)


NAMES = st.sampled_from([("a", "b", "c", "d"), ("7", "8", "é x", "10"), (7, 8, -3, 2**60)])


@st.composite
def logs(draw):
    """A fleet's names and a log of it in which the columns may stand in any order."""
    names = draw(NAMES)
    rows = draw(st.integers(1, 12))
    steps = st.sampled_from([0, 0, 1, 0.1, 1e-9, 12345.678])
    time = np.cumsum([draw(steps) for _ in range(rows)]) - draw(st.sampled_from([0, 0.5, 1e6]))
    picks = [draw(st.lists(st.sampled_from(names), min_size=1, max_size=3, unique=True)) for _ in range(rows)]
    blanks = [draw(st.permutations([*pick, *[None] * (3 - len(pick))])) for pick in picks]
    columns = {"time": time} | {f"option_{at + 1}": [row[at] for row in blanks] for at in range(3)}
    amounts = st.sampled_from([0.0, 1.0, 2.5, 1e-9, 1e12])
    for label in ("size", "duration"):
        if draw(st.booleans()):
            columns[label] = [draw(amounts) for _ in range(rows)]
    if draw(st.booleans()):
        columns["placed"] = [draw(st.sampled_from(names)) for _ in range(rows)]
    for label in columns:
        if isinstance(names[0], int) and label.startswith(("option_", "placed")):
            columns[label] = pd.array(columns[label], dtype="Int64")
    order = draw(st.permutations(list(columns)))
    return names, pd.DataFrame({label: columns[label] for label in order})


@given(logs(), st.integers(1, 5))
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=30, deadline=None)
def test_format_and_block_size_and_order_of_columns_do_not_show(write, drawn, rows):
    names, log = drawn
    servers = fleet(*names)
    whole = joined(log, servers)
    assert_same(joined(log, servers, rows=rows), whole)
    assert_same(joined(log.astype({"option_1": object, "option_2": "category"}), servers), whole)
    assert_same(joined(log[sorted(log.columns)], servers), whole)
    for name in ("log.csv", "log.parquet"):
        path = write(log, name)
        assert_same(joined(path, servers, rows=rows), whole)
        assert_same(joined(str(path), servers), whole)
        assert open_trace(path, servers).last_time() == whole.time[-1]
    expected = [[names.index(name) for name in row if not pd.isna(name)] for row in _options(log)]
    assert [[one for one in row if one != ABSENT] for row in whole.options.tolist()] == expected


def _options(log):
    return log[["option_1", "option_2", "option_3"]].astype(object).to_numpy().tolist()


def test_pieces_of_a_file_do_not_show(write):
    """Longer than a piece, with row groups and dictionaries that change on the way."""
    rows, draw = 150_000, np.random.default_rng(5)
    names = [f"server {at}" for at in range(300)]
    first = draw.integers(0, 100, rows) + 100 * (np.arange(rows) // 60_000)
    second = (first + draw.integers(1, 50, rows)) % 300
    log = pd.DataFrame({
        "time": np.cumsum(draw.exponential(size=rows)), "duration": draw.exponential(size=rows),
        "option_1": np.array(names)[first], "option_2": np.array(names)[second],
        "placed": np.array(names)[second],
    })  # fmt: skip
    servers = fleet(*names)
    whole = joined(log, servers)
    np.testing.assert_array_equal(whole.options, np.column_stack([first, second]))
    np.testing.assert_array_equal(whole.placed, second)
    assert_same(joined(write(log), servers, rows=1 << 20), whole)
    table = pa.Table.from_pandas(log)
    for size in (1 << 20, 40_001):
        file = io.BytesIO()
        pq.write_table(table, file, row_group_size=size)
        assert_same(joined(write(file.getvalue(), "log.parquet"), servers, rows=50_000), whole)
    # A mistake far down is named by its own line or row.
    log.loc[140_000, "option_2"] = "nowhere"
    with pytest.raises(lk.InputError, match=r"line 140002: option_2 is 'nowhere', which names no server"):
        joined(write(log), servers)
    for trace in (write(log, "log.parquet"), log):
        with pytest.raises(lk.InputError, match=r"row 140001: option_2 is 'nowhere', which names no server"):
            joined(trace, servers)


@pytest.mark.parametrize(
    "change",
    [
        lambda text: "\ufeff" + text,
        lambda text: text.replace("\n", "\r\n"),
        lambda text: text.replace("\n", "\n\n"),
        lambda text: "\n" + text,
        lambda text: text.replace(",", " , "),
        lambda text: text.replace("b", '"b"'),
        lambda text: text.replace("time", '"time\n"'),
    ],
)
def test_the_ways_of_writing_a_csv_do_not_show(write, change):
    assert_same(joined(write(change(CSV)), fleet()), joined(write(CSV, "plain.csv"), fleet()))


def test_names_in_csv_stand_for_whole_numbers_when_all_servers_are(write):
    content = "time,option_1,option_2,placed\n0,7,8,8\n0,-9,,-9\n"
    assert joined(write(content), fleet(7, 8, -9)).options[:, 0].tolist() == [0, 2]
    assert joined(write(content), fleet("7", "8", "-9")).placed.tolist() == [1, 2]
    assert joined(write(content), fleet("a", 7, "8", "-9", "7")).options[0].tolist() == [4, 2]
    with pytest.raises(lk.InputError, match=r"line 2: option_1 is '07', .* there is a server 7"):
        joined(write(content.replace("0,7", "0,07")), fleet(7, 8, -9))
    with pytest.raises(lk.InputError, match=r"line 3: placed is 9, which names no server"):
        joined(write(content.replace("-9\n", "9\n")), fleet(7, 8, -9))


STAMPS = ["2031-03-30T00:30:00.000000001", "2031-03-30T00:30:01.5", "2031-04-01T00:30:00"]
SECONDS = [0.0, 1.499999999, 172799.999999999]


@pytest.mark.parametrize("zone", [None, "UTC", "Asia/Kathmandu"])
@pytest.mark.parametrize("resolution", ["s", "ms", "us", "ns"])
def test_timestamps_of_any_resolution_become_seconds_since_the_first_row(write, resolution, zone):
    time = pd.Series(pd.to_datetime(STAMPS, format="ISO8601").as_unit(resolution))
    log = pd.DataFrame({"time": time.dt.tz_localize("UTC").dt.tz_convert(zone) if zone else time})
    log = log.assign(option_1="a", option_2="b", duration=[0.5, 1, 2])
    whole = joined(log, fleet())
    expected = SECONDS if resolution == "ns" else {"s": [0, 1, 172800]}.get(resolution, [0, 1.5, 172800])
    assert whole.time.tolist() == expected
    assert open_trace(log, fleet()).unit == "s"
    assert_same(joined(write(log, "log.parquet"), fleet(), rows=2), whole)
    assert_same(joined(log.astype({"time": object}), fleet()), whole)
    content = log.assign(time=[stamp.isoformat() for stamp in log["time"]])
    assert_same(joined(write(content), fleet(), rows=1), whole)
    assert_same(joined(write(content.assign(time=content["time"].str.replace("T", " "))), fleet()), whole)
    spans = log.assign(duration=pd.to_timedelta(log["duration"], unit="s"))
    assert_same(joined(spans, fleet()), whole)
    assert_same(joined(write(spans, "log.parquet"), fleet()), whole)


def test_days_and_instants_far_apart():
    log = pd.DataFrame({"time": [np.datetime64("1678-01-01"), np.datetime64("2262-01-01")]})
    log = log.assign(option_1="a", option_2="b")
    days = (pd.Timestamp("2262-01-01").date() - pd.Timestamp("1678-01-01").date()).days
    assert joined(log, fleet()).time.tolist() == [0, days * 86400]
    assert joined(log.assign(time=log["time"].dt.date.astype(object)), fleet()).time[1] == days * 86400


def test_the_index_of_a_table_counts_when_it_has_a_name(write):
    log = pd.DataFrame({"time": [1.0, 2.0], "option_1": ["a", "b"], "option_2": ["b", "c"]})
    whole = joined(log, fleet())
    for frame in (log.set_index("time"), log.set_index(pd.Index([5, 9])), log.iloc[::-1].iloc[::-1]):
        assert_same(joined(frame, fleet()), whole)
        file = io.BytesIO()
        frame.to_parquet(file)
        assert_same(joined(write(file.getvalue(), "log.parquet"), fleet()), whole)


WRONG_CSV = [
    ("", r"log\.csv is empty"),
    ("\n\n", r"log\.csv is empty"),
    (HEADER, r"log\.csv has no rows; give at least one"),
    (CSV.replace(",", ";"), r"separates its columns by semicolons; use commas"),
    (CSV.replace(",", "\t"), r"separates its columns by tabs"),
    (CSV.replace("size", "sizes"), r"unknown column 'sizes'; did you mean 'size'.*, or drop it"),
    (CSV.replace("option_2", "option_4"), r"number the options without holes: option_2 is missing"),
    (CSV.replace("option_2", "size"), r"two columns named 'size'"),
    (CSV.replace("size", " "), r"column 5 has no name"),
    ("time,option_1\n0,a\n", r"no column 'option_2'; its columns are 'time', 'option_1'"),
    ("option_1,option_2\na,b\n", r"no column 'time'"),
    (CSV[:-1], r"may be cut in the middle of its last line.*; add a line break if the line is whole"),
    (CSV[:-5] + "\n", r"line 5 has 5 cells and the header 7"),
    (CSV + "5,a,b,,1,1,a,\n", r"line 6 has 8 cells and the header 7"),
    (CSV.replace("0,a,b,,", "0,a,b,"), r"line 2 has 6 cells and the header 7"),
    (CSV.replace("1.5,b", '1.5,"b'), r"line 4 has 2 cells|line 4.*unclosed quotation mark"),
    (CSV.replace("1.5,", "x,"), r"line 4: time is 'x', which is not a number"),
    (CSV.replace("1.5,", "NA,"), r"line 4: time is 'NA', which is not a number"),
    (CSV.replace("1.5,", ","), r"line 4: time is blank; give finite numbers"),
    (CSV.replace("1.5,", "nan,"), r"line 4: time is blank"),
    (CSV.replace("1.5,", "inf,"), r"line 4: time is inf; give finite numbers"),
    (CSV.replace("1.5,", "1e16,"), r"line 4: time is 1e\+16, beyond 2\^53"),
    (CSV.replace("1.5,", "2031-05-02,"), r"line 4: time is '2031-05-02', and the first row's is a number"),
    (CSV.replace("4,c", "1.4,c"), r"line 5: time is 1\.39.*, before the 1\.5 of the row above; sort"),
    (CSV.replace("\n0,a", "\n,a"), r"line 2: time is blank; give a number, or a date"),
    (CSV.replace("\n0,a", "\nnoon,a"), r"line 2: time is 'noon'; give a number, or a date"),
    (CSV.replace(",7,", ",-7,"), r"line 5: duration is -7\.0; give a finite number of at least 0"),
    (CSV.replace(",7,", ",inf,"), r"line 5: duration is inf; give a finite number"),
    (CSV.replace(",7,", ",,"), r"line 5: duration is blank"),
    (CSV.replace(",7,", ",7h,"), r"line 5: duration is '7h', which is not a number"),
    (CSV.replace("a,3,", "a,-3,"), r"line 5: size is -3\.0; give a finite number of at least 0"),
    (CSV.replace("a,3,", "a,1e200,"), r"line 5: size is 1e\+200; give a finite number"),
    (CSV.replace("c,b,a", "c,d,a"), r"line 5: option_2 is 'd', which names no server"),
    (CSV.replace("c,b,a", "c,c,a"), r"line 5: server 'c' is an option twice"),
    (CSV.replace("c,b,a", "c,a , a"), r"line 5: server 'a' is an option twice"),
    (CSV.replace("c,b,a", ",,"), r"line 5: the choice has 0 options \(none\); give at least one server"),
    (CSV.replace("7,a", "7,d"), r"line 5: placed is 'd', which names no server"),
    (CSV.replace("7,a", "7,"), r"line 5: placed is blank; name the server that took the task, or drop"),
    (CSV.encode("utf-16"), r"is not UTF-8 text; save it as CSV in UTF-8"),
    (CSV.replace("c,b,a", "ü,b,a").encode("latin-1"), r"is not UTF-8 text"),
    (CSV.replace("\n0,a", "\n2031-05-02T10:00,a"), r"line 3: time is '0', and the first row's is a date and"),
    (CSV.replace("\n0,", "\n2031-05-02T10:00Z,").replace("1.5", "2031-05-02T11:00"), r"line 4.* with a zone"),
    (CSV.replace("\n0,", "\n2031-05-02,").replace("1.5", "2031-05-01").replace("4,c", "2032-01-01,c"),
     r"line 4: time is 2031-05-01T00:00:00, before the 2031-05-02T00:00:00 of"),
    (CSV.replace("\n0,", "\n2031-05-02,").replace("1.5", "2300-01-01"), r"line 4: .* to 2261"),
    (CSV.replace("\n0,", "\n2031-05-02,").replace("1.5", ""), r"line 4: time is blank"),
]  # fmt: skip


@pytest.mark.parametrize(("content", "words"), WRONG_CSV)
def test_a_wrong_csv_is_refused_with_its_line(write, content, words):
    with pytest.raises(lk.InputError, match=words) as caught:
        joined(write(content), fleet())
    assert "\n" not in str(caught.value)


def frame(**columns):
    log = {"time": [0.0, 1.0], "option_1": ["a", "b"], "option_2": ["b", "c"], **columns}
    return pd.DataFrame({label: values for label, values in log.items() if values is not None})


WRONG_FRAMES = [
    (frame().iloc[:0], r"trace has no rows"),
    (frame(option_2=None), r"trace has no column 'option_2'"),
    (frame(note=["x", "y"]), r"trace has an unknown column 'note'; allowed: .*, or drop it from the trace"),
    (frame().rename(columns={"time": 3}), r"trace has an unknown column 3"),
    (frame(time=[0, np.nan]), r"row 2: time is blank"),
    (frame(time=[0, np.inf]), r"row 2: time is inf"),
    (frame(time=[1, 0]), r"row 2: time is 0, before the 1 of the row above"),
    (frame(time=["0", "1"]), r"row 1: time is '0'; give numbers, or timestamps such as pandas\.to_datetime"),
    (frame(time=[True, False]), r"row 1: time is True; give numbers"),
    (frame(time=pd.to_timedelta([0, 1])), r"row 1: time is .*; give numbers"),
    (frame(time=np.array([1j, 2j])), r"column 'time' has type complex128; give numbers or timestamps"),
    (frame(time=[1, 2**53 + 1]), r"row 2: time is 9007199254740993, beyond 2\^53"),
    (frame(time=[1, pd.Timestamp("2031-01-01")]), r"row 2: time is Timestamp.*, which is not a number"),
    (frame(time=[pd.Timestamp("2031-01-01"), 1]), r"row 2: time is 1, which is not a timestamp"),
    (frame(time=np.array([1, 2**80], dtype=object)), r"row 2: time is 1208925819614629174706176"),
    (frame(time=pd.to_datetime(["2031-01-01", None])), r"row 2: time is blank; give dates and times"),
    (frame(time=np.array(["2031-01-01", "2500-01-01"], "M8[s]")), r"row 2: time is '2500-01-01.* to 2261"),
    (frame(option_1=["a", 7]), r"row 2: option_1 is 7, which names no server"),
    (frame(option_1=["a", True]), r"row 2: option_1 is True, which names no server"),
    (frame(option_1=["a", "c"]), r"row 2: server 'c' is an option twice"),
    (frame(option_1=[None, "b"], option_2=[" ", "c"]), r"row 1: the choice has 0 options"),
    (frame(placed=["a", None]), r"row 2: placed is blank"),
    (frame(placed=["a", "A"]), r"row 2: placed is 'A', which names no server"),
    (frame(size=[1, "2"]), r"row 2: size is '2'; give a finite number"),
    (frame(size=[1, None]), r"row 2: size is blank"),
    (frame(duration=[1, -1e-9]), r"row 2: duration is -1e-09; give a finite number of at least 0"),
    (frame(duration=pd.to_timedelta([1, 2])), r"row 1: duration is a span of time, and times are numbers"),
    (frame(size=pd.to_timedelta([1, 2])), r"row 1: size is a span of time"),
    (frame(time=pd.to_datetime(["2031", "2031"]), duration=pd.to_timedelta([1, None])), r"duration is b"),
]  # fmt: skip


@pytest.mark.parametrize(("log", "words"), WRONG_FRAMES)
def test_a_wrong_table_is_refused_with_its_row(write, log, words):
    with pytest.raises(lk.InputError, match=words) as caught:
        joined(log, fleet())
    assert "\n" not in str(caught.value)
    try:
        path = write(log, "log.parquet")
    except (pa.ArrowException, TypeError, ValueError, OverflowError):
        return  # parquet holds no such column
    with pytest.raises(lk.InputError):
        joined(path, fleet())


def test_what_is_no_log_is_refused(write, tmp_path):
    with pytest.raises(lk.InputError, match=r"trace is list; give a pandas DataFrame or the path"):
        open_trace([1], fleet())
    with pytest.raises(lk.InputError, match=r"fleet is str; give a labkit Fleet"):
        open_trace(frame(), "fleet")
    with pytest.raises(lk.InputError, match=r"gone\.csv' does not exist"):
        open_trace(tmp_path / "gone.csv", fleet())
    (tmp_path / "folder.csv").mkdir()
    with pytest.raises(lk.InputError, match=r"folder\.csv' is not a file"):
        open_trace(tmp_path / "folder.csv", fleet())
    with pytest.raises(lk.InputError, match=r"does not end in \.csv or \.parquet"):
        open_trace(write(CSV, "log.txt"), fleet())
    with pytest.raises(lk.InputError, match=r"log\.parquet is empty"):
        open_trace(write(b"", "log.parquet"), fleet())
    with pytest.raises(lk.InputError, match=r"log\.parquet is not a whole parquet file; write it again"):
        open_trace(write(CSV, "log.parquet"), fleet())
    with pytest.raises(lk.InputError, match=r"log\.parquet has no rows"):
        open_trace(write(frame().iloc[:0], "log.parquet"), fleet())
    with pytest.raises(lk.InputError, match=r"trace has two columns named 'time'"):
        open_trace(frame().set_index("time", drop=False), fleet())
    with pytest.raises(lk.InputError, match=r"rows is 0; give a whole number of at least 1"):
        open_trace(frame(), fleet()).blocks(rows=0)
    damaged = write(frame(option_1=["a", "uvwxyz"]), "log.parquet").read_bytes()
    with pytest.raises(lk.InputError, match=r"column 'option_1' has text that is not UTF-8"):
        joined(write(damaged.replace(b"uvwxyz", b"uvw\xffyz"), "log.parquet"), fleet())
    lists = pa.table([[1.0], [["a"]], ["b"]], names=["time", "option_1", "option_2"])
    with pytest.raises(lk.InputError, match=r"row 1: option_1 is .*; give the name of one server in a"):
        joined(lists.to_pandas(), fleet())
    two = pa.table([[1.0], ["a"], ["b"], ["b"]], names=["time", "option_1", "option_2", "option_2"])
    with pytest.raises(lk.InputError, match=r"two columns named 'option_2'"):
        open_trace(write(two, "log.parquet"), fleet())


def test_a_csv_cut_anywhere_is_read_to_whole_lines_or_refused(write):
    content = CSV.replace("1.5,b", '1.5,"b"').replace("\n", "\r\n").encode()
    whole = joined(write(content), fleet())
    for cut in range(len(content)):
        try:
            read = joined(write(content[:cut]), fleet())
        except lk.InputError:
            continue
        assert content[:cut].endswith((b"\r", b"\n"))
        rows = len(read.time)
        assert rows == content[:cut].count(b"\r") - 1
        assert_same(read, Block(0, *(one[:rows] for one in whole[1:])))


def test_a_parquet_file_cut_anywhere_is_refused(write):
    table = pa.table([[0.0, 1.0], ["a", "b"], ["b", "c"]], names=["time", "option_1", "option_2"])
    content = write(table, "log.parquet").read_bytes()
    for cut in range(1, len(content)):
        with pytest.raises(lk.InputError, match="is not a whole parquet file"):
            open_trace(write(content[:cut], "log.parquet"), fleet())


def test_a_parquet_footer_with_names_that_are_no_text_is_read_or_refused(write):
    table = pa.table([[0.0, 1.0], ["a", "b"], ["b", "c"]], names=["time", "option_1", "option_2"])
    content = write(table, "log.parquet").read_bytes()
    refused, at = 0, -1
    while (at := content.find(b"option_1", at + 1)) >= 0:
        path = write(content[:at] + b"option_\xff" + content[at + 8 :], "log.parquet")
        for read in (lk.fleet_from_trace, lambda each: open_trace(each, fleet())):
            try:
                read(path)
            except lk.InputError:
                refused += 1
    assert refused


def test_memory_does_not_grow_with_the_length_of_a_file(write, monkeypatch):
    # Arrow reads some pieces of a CSV ahead; small ones, so that a short file has more than those.
    monkeypatch.setattr("labkit.traces.pieces._BYTES", 1 << 16)

    def most(path):
        gc.collect()
        low, high = pa.total_allocated_bytes(), 0
        tracemalloc.start()
        for _ in open_trace(path, lk.ring(64)).blocks():
            high = max(high, pa.total_allocated_bytes() - low)
        python = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        return high + python

    def log(rows):
        server = np.arange(rows) % 64
        return pd.DataFrame({"time": np.arange(rows), "option_1": server, "option_2": (server + 1) % 64})

    for name in ("log.csv", "log.parquet"):
        most(write(log(1_000), name))
        few, many = most(write(log(200_000), name)), most(write(log(1_000_000), name))
        assert many < few + 1e6, name
        assert many < 16e6, name  # the longer table itself has 24
