import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings

import labkit as lk
from tests.fleet.strategies import tables

SERVERS = "server,capacity\na,1\nb,2.5\nc,3e0\n"
CHOICES = "option_1,option_2,demand\na,b,1\nb,c,2\n"


@pytest.fixture
def folder(tmp_path):
    def write(servers=SERVERS, choices=CHOICES):
        for name, content in (("servers.csv", servers), ("choices.csv", choices)):
            content = content.encode() if isinstance(content, str) else content
            if content is not None:
                (tmp_path / name).write_bytes(content)
        return tmp_path

    return write


def in_memory():
    servers = pd.DataFrame({"server": ["a", "b", "c"], "capacity": [1, 2.5, 3]})
    return lk.Fleet(servers, pd.DataFrame({"option_1": ["a", "b"], "option_2": ["b", "c"], "demand": [1, 2]}))


@given(tables())
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=40)
def test_csv_parquet_and_memory_make_the_same_fleet(tmp_path, drawn):
    servers, choices, names, _ = drawn
    fleet = lk.Fleet(servers, choices)
    for file in tmp_path.iterdir():
        file.unlink()
    if len({type(name) for name in names}) == 1:
        servers.to_parquet(tmp_path / "servers.parquet")
        choices.to_parquet(tmp_path / "choices.parquet")
        assert lk.read_fleet(tmp_path).digest == fleet.digest
        for file in tmp_path.iterdir():
            file.unlink()
    text = [name for name in names if isinstance(name, str)]
    if text and all(_plain(name) for name in text):
        return  # a CSV cannot tell such text from whole numbers
    servers.to_csv(tmp_path / "servers.csv", index=False)
    choices.to_csv(tmp_path / "choices.csv", index=False)
    read = lk.read_fleet(tmp_path)
    if not text:
        assert read.digest == fleet.digest
    elif len(set(map(str, names))) == len(names):
        assert read.names.tolist() == list(map(str, names))
        assert read.options.tolist() == fleet.options.tolist()


def _plain(name):
    try:
        return str(int(name)) == name and abs(int(name)) < 2**63
    except ValueError:
        return False


@pytest.mark.parametrize("change", [
    lambda text: "\ufeff" + text,
    lambda text: text.replace("\n", "\r\n"),
    lambda text: "\ufeff" + text.replace("\n", "\r\n"),
    lambda text: text.replace(",", " , "),
    lambda text: text.rstrip("\n"),
    lambda text: text.replace("\n", "\n\n"),
    lambda text: text.replace("b", '"b"'),
])  # fmt: skip
def test_the_ways_of_writing_a_csv_do_not_show(folder, change):
    assert lk.read_fleet(folder(change(SERVERS), change(CHOICES))).digest == in_memory().digest
    assert lk.read_fleet(str(folder(change(SERVERS), change(CHOICES)))).digest == in_memory().digest


def test_names_become_whole_numbers_only_all_together(folder):
    choices = "option_1,option_2,option_3\n7,8,\n9,8,7\n"
    fleet = lk.read_fleet(folder("server\n7\n-8\n9\n", choices.replace("8", "-8")))
    assert fleet.names.tolist() == [7, -8, 9]
    assert fleet.choices["option_3"].tolist() == [pd.NA, 7] or fleet.choices["option_3"].isna().tolist() == [
        True,
        False,
    ]
    for odd in ("007", "+7", "7.0", "-0", "9223372036854775808", "NA", "nan"):
        fleet = lk.read_fleet(folder(f"server\n{odd}\n8\n9\n", choices.replace("7", odd)))
        assert fleet.names.tolist() == [odd, "8", "9"]
        assert fleet.choices["option_1"].tolist() == [odd, "9"]


def test_formats_may_be_mixed_and_keep_their_types(folder):
    path = folder("server\n7\n8\n", "option_1,option_2\n7,8\n")
    digest = lk.read_fleet(path).digest
    (path / "servers.csv").unlink()
    pd.DataFrame({"server": [7, 8], "capacity": 1.0}).set_index("server").to_parquet(path / "servers.parquet")
    assert lk.read_fleet(path).digest == digest
    pd.DataFrame({"server": ["7", "8"]}).to_parquet(path / "servers.parquet")
    assert lk.read_fleet(path).names.tolist() == ["7", "8"]
    pd.DataFrame({"server": ["7", "8"]}, index=["x", "y"]).to_parquet(path / "servers.parquet")
    assert lk.read_fleet(path).names.tolist() == ["7", "8"]


def test_large_whole_numbers_with_blanks_keep_their_digits(tmp_path):
    names = [2**62 + 1, 2**62 + 2, 2**62 + 3]
    pd.DataFrame({"server": names}).to_parquet(tmp_path / "servers.parquet")
    blanks = pd.Series([None, names[2]], dtype="Int64")
    pd.DataFrame({"option_1": names[:2], "option_2": names[1:], "option_3": blanks}).drop(
        index=[1]
    ).to_parquet(tmp_path / "choices.parquet")
    assert lk.read_fleet(tmp_path).options.tolist() == [[0, 1]]
    frame = pd.DataFrame({"option_1": names[:2], "option_2": [names[1], names[0]], "option_3": blanks})
    frame.to_parquet(tmp_path / "choices.parquet")
    assert lk.read_fleet(tmp_path).options[1].tolist() == [1, 0, 2]


@pytest.mark.parametrize(
    ("servers", "choices", "words"),
    [
        ("", CHOICES, r"servers\.csv is empty"),
        ("\n\n", CHOICES, r"servers\.csv is empty"),
        ("server,capacity\n", CHOICES, r"servers\.csv has no rows"),
        (SERVERS, "option_1,option_2\n", r"choices\.csv has no rows"),
        (SERVERS.replace(",", ";"), CHOICES, r"servers\.csv separates its columns by semicolons; use commas"),
        (SERVERS.replace(",", "\t"), CHOICES, r"servers\.csv separates its columns by tabs"),
        (SERVERS.replace("capacity", "capcity"), CHOICES, r"servers\.csv has an unknown column 'capcity'; "),
        (SERVERS.replace("capacity", ""), CHOICES, r"servers\.csv: column 2 has no name"),
        (SERVERS.replace("capacity", "server "), CHOICES, r"servers\.csv has two columns named 'server'"),
        ("capacity,server\na,1\n", CHOICES, r"line 2: capacity is 'a', which is not a number"),
        (SERVERS.replace("2.5", '"2,500"'), CHOICES, r"servers\.csv line 3: capacity is '2,500', which is"),
        (SERVERS.replace("2.5", "2 500"), CHOICES, r"servers\.csv line 3: capacity is '2 500'"),
        (SERVERS.replace("2.5", ""), CHOICES, r"servers\.csv line 3: capacity is blank"),
        (SERVERS.replace("2.5", "-2"), CHOICES, r"servers\.csv line 3: capacity is -2\.0; give a finite"),
        (SERVERS.replace("2.5", "inf"), CHOICES, r"servers\.csv line 3: capacity is inf"),
        (SERVERS.replace("2.5", "nan"), CHOICES, r"servers\.csv line 3: capacity is blank"),
        (SERVERS.replace("2.5", "2,5"), CHOICES, r"servers\.csv line 3 has 3 cells and the header 2"),
        (SERVERS.replace("b,2.5", "b"), CHOICES, r"servers\.csv line 3 has 1 cell and the header 2"),
        (SERVERS.replace("b,", '"b,'), CHOICES, r"servers\.csv line 3 has 1 cell and the header 2"),
        (SERVERS.replace("b,2.5\n", "\n\na,1\n"), CHOICES, r"line 5: server 'a' was .*servers\.csv line 2"),
        (SERVERS.replace("a,", '"x\ny",').replace("b,", ","), CHOICES, r"line 4: server is blank"),
        (SERVERS, CHOICES.replace("c", "d"), r"choices\.csv line 3: option_2 is 'd', which names no server"),
        (SERVERS, CHOICES.replace("b,c", "b,"), r"choices\.csv line 3: the choice has 1 option \('b'\)"),
        (SERVERS, CHOICES.replace("b,c", "b,b"), r"choices\.csv line 3: server 'b' is an option twice"),
        (SERVERS, CHOICES.replace(",1\n", ",0\n").replace(",2\n", ",0\n"), r"choices\.csv: every demand"),
        ("server\n7\n8\n", "option_1,option_2\n7,8\n07,8\n", r"line 3: option_1 is '07', .* is a server 7"),
        (SERVERS.encode("utf-16"), CHOICES, r"servers\.csv is not UTF-8 text; save it as CSV in UTF-8"),
        (SERVERS, CHOICES.replace("c", "ü").encode("latin-1"), r"choices\.csv is not UTF-8 text"),
        (("server\n" + "a\n" * 9_000).encode() + b"\xff\n", CHOICES, r"csv is not UTF-8 text after line"),
    ],
)  # fmt: skip
def test_a_wrong_file_is_refused_with_its_line(folder, servers, choices, words):
    with pytest.raises(lk.InputError, match=words):
        lk.read_fleet(folder(servers, choices))


def test_folders_that_hold_no_fleet_are_refused(folder, tmp_path):
    with pytest.raises(lk.InputError, match="folder is 3; give the path of a folder"):
        lk.read_fleet(3)
    with pytest.raises(lk.InputError, match=r"folder '.*nowhere' does not exist"):
        lk.read_fleet(tmp_path / "nowhere")
    with pytest.raises(lk.InputError, match=r"holds neither servers\.csv nor servers\.parquet; add one"):
        lk.read_fleet(tmp_path)
    path = folder()
    with pytest.raises(lk.InputError, match=r"folder '.*servers\.csv' is a file"):
        lk.read_fleet(path / "servers.csv")
    (path / "servers.parquet").write_bytes(b"x")
    with pytest.raises(lk.InputError, match=r"holds both servers\.csv and servers\.parquet; keep one"):
        lk.read_fleet(path)
    (path / "servers.csv").unlink()
    with pytest.raises(lk.InputError, match=r"servers\.parquet is not a whole parquet file"):
        lk.read_fleet(path)
    (path / "servers.parquet").rename(path / "Servers.csv")
    with pytest.raises(lk.InputError, match=r"holds neither servers.csv .*\(there is 'Servers\.csv'\)"):
        lk.read_fleet(path)
    (path / "servers.csv").mkdir()
    with pytest.raises(lk.InputError, match=r"servers\.csv is not a file"):
        lk.read_fleet(path)


def test_parquet_rows_and_columns_are_named(tmp_path):
    pd.DataFrame({"server": ["a", "b"], "capacity": [1.0, -1.0]}).to_parquet(tmp_path / "servers.parquet")
    pd.DataFrame({"option_1": ["a"], "option_2": ["b"]}).to_parquet(tmp_path / "choices.parquet")
    with pytest.raises(lk.InputError, match=r"servers\.parquet row 2: capacity is -1\.0"):
        lk.read_fleet(tmp_path)
    pd.DataFrame({"name": ["a", "b"]}).to_parquet(tmp_path / "servers.parquet")
    with pytest.raises(lk.InputError, match=r"servers\.parquet has an unknown column 'name'"):
        lk.read_fleet(tmp_path)
