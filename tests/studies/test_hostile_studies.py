"""Studies and frozen tables from strangers: nothing of them is executed, followed or unrolled unasked."""

import json
import os
import subprocess
import time

import pytest
from papermill.translators import PythonTranslator

import labkit as lk
from labkit.records.declared import Parameter, read_notebook
from labkit.records.frozen import MANIFEST, check_files, manifest_text
from labkit.studies import verifying
from labkit.studies.commits import Commits
from labkit.studies.execution import execute
from labkit.studies.model import find_study, make_study, read_study
from labkit.studies.places import Places
from labkit.studies.verifying import verify
from tests.records.tiny import snapshot, write_notebook, write_tiny

# Texts that end a string, a line, a format or a cell, if anything lets them.
NASTY = [
    "'", '"', "'''", '"""', "\\", "\\\\", '\\"', "\\'", "\\\n", "\n", "\r", "\r\n", "\t", "\0", "\x1b[2J",
    "\x85",
    "\u2028", "\u2029", "\u202e", "\ufeff", "é", "😀", "\\N{BULLET}", "\\u0022", "\\x22", "\\101", "{x}",
    "{{}}",
    "{0.__class__}", "%s", "%(x)s", "${HOME}", "$(touch stolen)", "`touch stolen`", "#", "# Parameters\n",
    '"; open("stolen", "w"); x = "', "'; open('stolen', 'w'); x = '", '\\"; open("stolen", "w"); x = "',
    '\n__import__("os").system("touch stolen")\n', "%%bash\ntouch stolen", "!touch stolen",
    "=cmd|'/C calc'!A0",
    "r'", 'f"{open(chr(115), chr(119))}"', "\\\"\\\\\"", "a" * 5000, "%run stolen",
    "\x00\x01\x7f", "\\" * 7 + '"',
]  # fmt: skip
NESTED = [
    NASTY,
    [[text] for text in NASTY],
    {text: text for text in NASTY},
    [1, -1, 2**70, 1e308, -0.0, 5e-324, True, False, None, [], {}, [[[]]], {"a": [{"b": None}]}],
]


@pytest.fixture
def place(tmp_path):
    write_tiny(tmp_path / "tiny.ipynb")
    placed = "fleet: str = 'x'\nreplicates: int = 1\nentropy: int = 1"
    write_notebook(tmp_path / "placed.ipynb", "x = 1", parameters=placed)
    return tmp_path


def study(place, **changes):
    content = {"notebook": "tiny.ipynb", "replicates": 3, "entropy": 1} | changes
    return make_study("s", content, folder=place)


def same(given, received):
    """Tell whether two values are equal in kind and to the sign, all the way down."""
    return repr(given) == repr(received)


def test_values_reach_a_kernel_as_they_are_and_as_nothing_else(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    code = "import json\nopen(told, 'w').write(json.dumps([values, text]))"
    notebook = write_notebook(
        tmp_path / "n {x}.ipynb", code, parameters='values: list = []\ntext: str = ""\ntold: str = ""'
    )
    told, text = tmp_path / "told {text}.json", "".join(NASTY)
    given = {"values": NESTED, "text": text, "told": str(told)}
    result = execute(notebook, read_notebook(notebook).checked(given), tmp_path / "out {text}.ipynb")
    assert result.error == ""
    assert same(json.loads(told.read_text()), [NESTED, text])
    assert sorted(path.name for path in tmp_path.iterdir()) == [
        "n {x}.ipynb",
        "out {text}.ipynb",
        "told {text}.json",
    ]


@pytest.mark.parametrize("at", range(len(NASTY)))
def test_the_cell_that_papermill_puts_in_is_one_assignment_of_one_literal(at):
    import ast

    text = NASTY[at]
    half = text + "\ud800"
    for value in (text, half, [text, {text: [half]}]):
        tree = ast.parse(PythonTranslator.codify({"value": value}))
        assert [type(statement) for statement in tree.body] == [ast.Assign]
        assert same(ast.literal_eval(tree.body[0].value), value)


@pytest.mark.parametrize(
    "name",
    ["x = open('stolen', 'w') #", "tasks\nimport os", "tasks;x", "__builtins__", "lk", "share ", "täsks", ""],
)
def test_a_name_that_the_notebook_does_not_declare_is_refused(place, name):
    with pytest.raises(lk.InputError, match="is no parameter of the notebook"):
        study(place, parameters={name: 1})
    with pytest.raises(lk.InputError, match="is no parameter of the notebook"):
        study(place, grid={name: [1]})


def test_a_name_in_a_record_is_refused_as_well_wherever_it_is_executed(place, monkeypatch):
    origin = {
        "notebook": str(place / "tiny.ipynb"),
        "notebook_digest": "",
        "parameters": {"x = open('stolen', 'w') #": 1},
        "inputs": {},
    }
    with Places() as places:
        monkeypatch.setattr(
            places, "_choose", lambda origin: (object.__new__(type("P", (), {"root": place})), [])
        )
        monkeypatch.setattr(places, "_measure", lambda *given: pytest.fail("executed"))
        with pytest.raises(lk.InputError, match="is no parameter of the notebook"):
            places.again(origin)


@pytest.mark.parametrize(
    "commit", ["--detach", "-x", "HEAD", "a" * 39, "a" * 41, "A" * 40, "", f"{'a' * 40}\n"]
)
def test_what_is_no_digest_never_reaches_git(commit, monkeypatch):
    monkeypatch.setattr(subprocess, "run", lambda *words, **options: pytest.fail("git was called"))
    with Commits() as commits, pytest.raises(lk.InputError, match="a commit has 40 or 64 hex digits"):
        commits.of(commit)


class Strangers:
    """A frozen table whose manifest a stranger has written anew, with the digests that belong to it."""

    def __init__(self, frozen, folder):
        self.place = frozen.place
        self.folder = folder

    def say(self, files=None, **changes):
        """Change the origin of each run, and add files."""
        path = self.place / MANIFEST
        manifest = json.loads(path.read_text())
        for run in manifest["runs"]:
            run.update(changes)
        for name, content in (files or {}).items():
            (self.place / name).write_bytes(content)
            import hashlib

            manifest["files"][name] = hashlib.sha256(content).hexdigest()
        path.write_text(manifest_text(manifest))
        (self.folder.parent / "README.md").unlink(missing_ok=True)


@pytest.fixture
def strangers(project, folder, frozen):
    return Strangers(frozen(study=project.study(grid="share = [0.5]")), folder)


def test_what_a_stranger_says_of_runs_is_refused_before_anything_is_executed(strangers, project, monkeypatch):
    monkeypatch.setattr("labkit.studies.places.execute", lambda *given: pytest.fail("executed"))
    evil = write_tiny(project.folder / "evil.ipynb").read_bytes()
    inside = strangers.place / "evil.ipynb"
    (project.folder / "link.ipynb").symlink_to(inside)
    for changes, sentence in [
        (
            {"notebook": str(inside)},
            "evil.ipynb', which lies among frozen tables; a table may bring a stranger's program",
        ),
        (
            {"notebook": str(project.folder / "evil.ipynb")},
            "evil.ipynb', which is no notebook that this project's commits hold",
        ),
        ({"notebook": str(project.folder / "link.ipynb")}, "which lies among frozen tables"),
        ({"notebook": str(strangers.folder / ".." / "frozen" / "first" / "evil.ipynb")}, "which lies among"),
        (
            {"git_hash": "--upload-pack=touch stolen"},
            "its commit is '--upload-pack=touch stolen' in manifest.json",
        ),
        ({"git_hash": "HEAD"}, "a commit has 40 or 64 hex digits"),
        ({"study": "../../x"}, "study is '../../x'; a study's name begins with"),
    ]:
        kept = json.loads((strangers.place / MANIFEST).read_text())["runs"]
        strangers.say({"evil.ipynb": evil}, **changes)
        with pytest.raises(lk.InputError, match=sentence):
            verify("first", 1, folder=strangers.folder)
        strangers.say(**{name: kept[0][name] for name in changes})


@pytest.mark.parametrize(
    "changes",
    [
        {"parameters": []},
        {"inputs": {"x": 1}},
        {"entropy": -1},
        {"notebook": 5},
        {"dirty": 1},
        {"versions": None},
    ],
)
def test_a_manifest_whose_runs_are_none_is_no_manifest(strangers, changes):
    strangers.say(**changes)
    (finding,) = verify("first", folder=strangers.folder).findings
    assert (finding.kind, finding.file) == ("manifest", MANIFEST)


@pytest.mark.parametrize(
    "name", ["../x", "/etc/passwd", "a\\b", "a\0b", "C:x", "..", ".", "", "x" * 300, "a\x1bb"]
)
def test_names_of_files_in_a_manifest_stay_in_its_folder(strangers, name):
    path = strangers.place / MANIFEST
    manifest = json.loads(path.read_text())
    manifest["files"][name] = "0" * 64
    path.write_text(manifest_text(manifest))
    (finding,) = check_files(strangers.place, "first")[1][:1]
    assert (finding.kind, finding.file) == ("manifest", MANIFEST)


def test_links_and_pipes_in_a_frozen_table_are_named_not_followed(strangers):
    secret = strangers.folder.parent / "secret"
    (strangers.place / "table.csv").rename(secret)
    (strangers.place / "table.csv").symlink_to(secret)
    os.mkfifo(strangers.place / "pipe")
    (strangers.place / "more").symlink_to("/")
    sentences = [each.sentence for each in verify("first", folder=strangers.folder).findings]
    assert any("file table.csv is a link, and links are not followed" in each for each in sentences)
    assert sum("is not part of the frozen table" in each for each in sentences) == 2
    (strangers.place / MANIFEST).rename(secret)
    (strangers.place / MANIFEST).symlink_to(secret)
    assert "is a link out of its folder" in check_files(strangers.place)[1][0].sentence


def test_a_link_out_of_the_study_is_not_followed_but_a_path_may_name_any_place(place, tmp_path):
    inside = tmp_path / "study"
    inside.mkdir()
    (tmp_path / "data").mkdir()
    (tmp_path / "data" / "x.csv").write_text("a\n")
    write_tiny(tmp_path / "other.ipynb")
    (tmp_path / "placed.ipynb").rename(inside / "placed.ipynb")
    (inside / "fleet").symlink_to("../data")
    (inside / "evil.ipynb").symlink_to("../other.ipynb")
    placed = {"notebook": "placed.ipynb", "replicates": 3, "entropy": 1}
    with pytest.raises(
        lk.InputError, match=r"fleet 'fleet' is a link out of its folder, to .*data; links out"
    ):
        make_study("s", placed | {"parameters": {"fleet": "fleet"}}, folder=inside)
    with pytest.raises(lk.InputError, match=r"notebook 'evil.ipynb' is a link out of its folder"):
        make_study("s", placed | {"notebook": "evil.ipynb"}, folder=inside)
    (tmp_path / "way").symlink_to(inside)
    for way in ("../data", str(tmp_path / "data")):
        found = make_study("s", placed | {"parameters": {"fleet": way}}, folder=tmp_path / "way")
        assert found.parameters["fleet"] == (tmp_path / "data").resolve().as_posix()


@pytest.mark.parametrize("kind", ["pipe", "device"])
def test_a_parameter_that_is_no_file_is_refused_without_waiting(place, kind):
    path = place / "data"
    os.mkfifo(path) if kind == "pipe" else path.symlink_to("/dev/zero")
    with pytest.raises(lk.InputError, match=r"fleet is 'data'; .* is no file and no folder"):
        study(place, notebook="placed.ipynb", parameters={"fleet": "data"})
    with pytest.raises(lk.InputError, match="nothing is there that can be read"):
        Parameter("fleet", "str", False, "x").checked(str(path))


@pytest.mark.parametrize("name", ["../x", "demo\0", "../experiments/demo", "x" * 5000, "~nobody/x", ""])
def test_names_of_studies_stay_in_their_folder(name):
    with pytest.raises(lk.InputError):
        find_study(name)


def test_a_grid_of_millions_is_refused_before_it_is_made(place):
    start = time.perf_counter()
    many = {"share": [0.5] * 2000, "tasks": [1] * 2000, "mode": ["a"] * 2000}
    with pytest.raises(
        lk.InputError, match="has 2,000 × 2,000 × 2,000 = 8,000,000,000 points; a study has at most"
    ):
        study(place, grid=many)
    assert time.perf_counter() - start < 2


@pytest.mark.parametrize(
    "text",
    ["a = " + "[" * 10_000, "a" + ".a" * 10_000 + " = 1", "a = " + "{b = " * 10_000, "a = 0x" + "f" * 10_000],
)
def test_a_study_of_absurd_depth_or_numbers_is_refused(place, text):
    (place / "s.toml").write_text(text)
    with pytest.raises(lk.InputError) as refusal:
        read_study(place / "s.toml")
    assert len(str(refusal.value)) <= 2_000


def test_texts_of_absurd_size_are_refused_unread(place):
    for name in ("s.toml", "tiny.ipynb"):
        with (place / name).open("wb") as stream:
            stream.truncate(10**11)
    with pytest.raises(lk.InputError, match=r"study .* has 100,000 MB; such a file has at most 5 MB"):
        read_study(place / "s.toml")
    with pytest.raises(lk.InputError, match=r"notebook .* has 100,000 MB"):
        read_notebook(place / "tiny.ipynb")


@pytest.mark.parametrize(
    "cell", ["x: list = " + "[" * 5000, "x: int = 1\0", "x: int = \ud800", "x: int = (", "1" * 5000]
)
def test_a_parameters_cell_that_python_cannot_read_is_refused(tmp_path, cell):
    path = write_notebook(tmp_path / "n.ipynb", "y = 1", parameters=cell)
    with pytest.raises(lk.InputError, match=r"n.ipynb.* (cannot be read|no declaration)"):
        read_notebook(path)


def test_verifying_and_refusing_write_nothing(strangers):
    before = snapshot(strangers.folder)
    verify("first", folder=strangers.folder)
    assert snapshot(strangers.folder) == before
    assert verifying.RUN_ID.fullmatch("0123456789abcdef")
