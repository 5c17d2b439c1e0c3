"""Reading a plan: whole, unaltered, of this schema, and for this fleet."""

import json

import pandas as pd
import pytest

import labkit as lk
from labkit.errors import InputError
from labkit.plans import dispatcher
from labkit.plans.schema import header_digest
from labkit.plans.tables import sha256
from tests.plans.makers import RULES, copy_of


def refused(sentence, folder, fleet=None):
    with pytest.raises(InputError, match=sentence) as refusal:
        lk.read_plan(folder, fleet)
    assert "\n" not in str(refusal.value)
    assert str(refusal.value).endswith(".")


@pytest.mark.parametrize("rule", RULES)
def test_what_is_read_is_what_was_written(rule, fleet, tmp_path):
    plan = lk.plan(fleet, rule)
    again = lk.read_plan(plan.write(tmp_path / "plan"), fleet)
    assert again.header == plan.header
    assert repr(again) == repr(plan)
    assert list(again.tables) == list(plan.tables)
    for name, table in plan.tables.items():
        pd.testing.assert_frame_equal(again.tables[name], table, check_exact=True)
    assert again.write(tmp_path / "plan") == tmp_path / "plan"


def test_another_fleet_is_refused(written):
    refused("is for another fleet: its digest is .* that of the given fleet", written, lk.ring(8))
    refused("fleet is dict; give a labkit Fleet", written, {})


def test_what_is_no_plan_is_refused(tmp_path):
    refused(r"holds no plan\.json; name a folder that labkit plan wrote", tmp_path)
    refused(r"holds no plan\.json", tmp_path / "nowhere")


@pytest.mark.parametrize(
    "name",
    [
        "servers.csv",
        "choices.csv",
        "shifts.csv",
        "vertices.csv",
        "shares.csv",
        "vectors.csv",
        "vectors_loads.csv",
    ],
)
def test_a_table_that_is_missing_or_altered_is_refused(written, tmp_path, name):
    folder = copy_of(written, tmp_path / "plan")
    content = bytearray((folder / name).read_bytes())
    for place in (0, len(content) // 2, -1):
        spoilt = bytearray(content)
        spoilt[place] ^= 1
        (folder / name).write_bytes(spoilt)
        refused(f"{name} is torn or altered", folder)
    (folder / name).write_bytes(content[:-1])
    refused(f"{name} is torn or altered", folder)
    (folder / name).unlink()
    refused(f"has no {name}, which plan.json names", folder)


def altered(folder, **changes):
    path = folder / "plan.json"
    header = json.loads(path.read_bytes())
    header |= changes
    path.write_text(json.dumps(header), encoding="utf-8")
    return header


@pytest.mark.parametrize("version", [0, 2, "1", 1.5])
def test_an_unknown_schema_version_is_refused(written, tmp_path, version):
    folder = copy_of(written, tmp_path / "plan")
    altered(folder, schema_version=version)
    refused(f"has schema version {version!r}, and this labkit reads 1", folder)


def test_a_header_that_violates_the_schema_is_refused(written, tmp_path):
    folder = copy_of(written, tmp_path / "plan")
    altered(folder, capacities="some")
    refused("violates its schema at capacities: 'some' is not one of", folder)
    altered(folder, capacities="unequal", refresh={"every_tasks": 7, "rule": "as I like"})
    refused("plan.json was altered: it does not have the digest it gives", folder)
    (folder / "plan.json").write_text("[]")
    refused(r"plan.json violates its schema at \$", folder)
    (folder / "plan.json").write_text("{")
    refused("plan.json is not JSON", folder)
    (folder / "plan.json").write_bytes(b"\xff\xfe{")
    refused("plan.json is not JSON", folder)


def test_a_row_count_that_is_wrong_is_refused(written, tmp_path):
    folder = copy_of(written, tmp_path / "plan")
    header = json.loads((folder / "plan.json").read_bytes())
    header["files"]["shifts.csv"]["rows"] += 1
    altered(folder, files=header["files"], digest=header_digest(header))
    refused(r"shifts\.csv has \d rows, and plan\.json says \d", folder)


def test_names_like_formulas_are_harmless_in_the_table_and_whole_for_readers(tmp_path):
    names = ["=1+1", "+x", "-x", "@x", "\tx", "'=x", "'", "x", -5]
    servers = pd.DataFrame({"server": pd.Series(names, dtype=object)})
    options = {"option_1": pd.Series(names, dtype=object), "option_2": pd.Series([*names[1:], names[0]])}
    folder = lk.plan(lk.Fleet(servers, pd.DataFrame(options)), "least-loaded").write(tmp_path / "plan")
    lines = (folder / "servers.csv").read_text().splitlines()[1:]
    assert [line.split(",")[1] for line in lines] == [
        *('"\'=1+1"', '"\'+x"', '"\'-x"', '"\'@x"', '"\'\tx"', "\"''=x\"", "\"''\"", '"x"', "-5"),
    ]
    assert lk.read_plan(folder).tables["servers.csv"]["name"].tolist() == names
    assert dispatcher.Dispatcher(folder).names == [*names[:-1], "-5"]


@pytest.mark.parametrize("text", ["[" * 100_000, '{"a":' * 50_000, "1" * 5000, "\ud800"])
def test_a_header_of_absurd_depth_or_numbers_is_refused(written, tmp_path, text):
    folder = copy_of(written, tmp_path / "spoilt")
    (folder / "plan.json").write_text(text, encoding="utf-8", errors="surrogatepass")
    refused(r"plan\.json (is not JSON|violates its schema)", folder)


@pytest.mark.parametrize(("old", "new"), [('"number"', '"nr"'), ("0,", "x,"), ("0,", f"{2**80},"), (",", "")])
def test_a_table_that_labkit_does_not_write_is_refused_though_its_digest_fits(written, tmp_path, old, new):
    folder = copy_of(written, tmp_path / "spoilt")
    content = (
        (folder / "servers.csv").read_text(encoding="utf-8", errors="surrogatepass").replace(old, new, 1)
    )
    content = content.encode("utf-8", "surrogatepass")
    (folder / "servers.csv").write_bytes(content)
    header = json.loads((folder / "plan.json").read_text())
    header["files"]["servers.csv"]["sha256"] = sha256(content)
    header["digest"] = header_digest(header)
    (folder / "plan.json").write_text(json.dumps(header))
    with pytest.raises(InputError, match="make the plan again"):
        lk.read_plan(folder)


def test_a_link_out_of_the_plan_is_not_followed(written, tmp_path):
    folder = copy_of(written, tmp_path / "spoilt")
    (folder / "servers.csv").rename(tmp_path / "elsewhere")
    (folder / "servers.csv").symlink_to(tmp_path / "elsewhere")
    refused("is a link out of its folder", folder)
