"""A run is measured again where its code is; one work tree serves all runs of a commit."""

from types import SimpleNamespace

import pytest

from labkit.errors import InputError
from labkit.records.schema import first_difference, measured_part, row_of_origin
from labkit.records.store import Store
from labkit.sources import versions
from labkit.studies import places as places_module
from labkit.studies.commits import Commits
from labkit.studies.place import HERE
from labkit.studies.places import ExecutionFailed, Places
from tests.records.tiny import MEASURE, write_notebook, write_tiny
from tests.studies.copies import NOTHING_LEFT, Copy


def origins(project):
    store = Store(project.store)
    return [(store.read(path), row_of_origin(store.read(path))) for path in store.files("s")]


def test_runs_of_todays_code_are_measured_here_without_a_note(project):
    project.record(project.study(grid="tasks = [1, 2]"))
    with Places() as places:
        for table, origin in origins(project):
            again, notes = places.measured_again(origin)
            assert first_difference(measured_part(table), again) == ""
            assert notes == []


def test_each_version_that_is_another_has_a_note(project):
    project.record(project.study())
    ((_, origin),) = origins(project)
    now = dict(origin["versions"])
    origin["versions"] |= {"numpy": "0.1", "scipy": ""}
    with Places() as places:
        _, notes = places.measured_again(origin)
    assert notes == [f"numpy was 0.1 and is {now['numpy']}", f"scipy was missing and is {now['scipy']}"]


def test_code_that_breaks_is_no_refusal(project):
    project.record(project.study())
    ((_, origin),) = origins(project)
    origin |= {"dirty": True, "git_hash": ""}
    write_tiny(project.notebook, measure='raise RuntimeError("the well is dry")')
    with Places() as places, pytest.raises(ExecutionFailed, match="the well is dry") as failed:
        places.measured_again(origin)
    assert failed.value.place == HERE
    assert failed.value.notes[0] == "the record names no commit; executed with today's code"
    write_tiny(project.notebook, measure=MEASURE + '\nmode = "silent"')
    with Places() as places, pytest.raises(ExecutionFailed, match="left no record"):
        places.measured_again(origin)


def test_a_notebook_whose_record_would_go_to_the_users_store_is_refused(project):
    project.record(project.study())
    ((_, origin),) = origins(project)
    origin |= {"dirty": True}
    write_notebook(project.notebook, MEASURE, parameters='tasks: int = 1\nstudy: str = ""')
    with Places() as places, pytest.raises(InputError, match="declares no parameter store"):
        places.measured_again(origin)


class TestCommits:
    @pytest.fixture
    def copy(self, tmp_path, monkeypatch):
        copy = Copy(tmp_path)
        monkeypatch.setattr("tempfile.tempdir", str(copy.scratch))
        monkeypatch.setattr("sys.prefix", str(copy.python.parents[1]))
        return copy

    def test_a_tree_is_made_once_and_removed_whatever_happens(self, copy):
        said = []
        first, second = copy.git("rev-parse", "HEAD"), copy.commit()

        def work():
            with Commits(said.append, copy.root) as commits:
                place = commits.of(first)
                assert commits.of(first) is place
                assert (place.commit, place.name, place.python) == (first, first, HERE.python)
                assert (place.root / "labkit" / "__init__.py").is_file()
                assert commits.of(second).root != place.root
                assert copy.left()[0] == 3
                raise KeyboardInterrupt

        with pytest.raises(KeyboardInterrupt):
            work()
        assert len(said) == 2
        assert copy.left() == NOTHING_LEFT

    def test_a_tree_that_was_left_half_made_is_removed(self, copy):
        head = copy.git("rev-parse", "HEAD")
        with Commits(root=copy.root) as commits:
            tree = commits.of(head).root
            (tree / ".git").unlink()
            (copy.root / ".git" / "worktrees" / tree.name / "locked").write_text("initializing")
        assert copy.left() == NOTHING_LEFT

    def test_the_commits_own_lock_is_set_up_in_its_tree(self, copy):
        copy.write("requirements.lock", "second\n")
        said, head = [], copy.commit()
        with Commits(said.append, copy.root) as commits:
            place = commits.of(head)
            assert place.python == place.root / ".venv" / "bin" / "python"
            assert commits.of(head) is place
        assert len(said) == 2
        assert copy.left() == NOTHING_LEFT

    def test_packages_of_another_lock_are_those_of_the_commit(self, copy, monkeypatch):
        """Today's code gives the run its id, but the packages that the record names are gone."""
        first = copy.git("rev-parse", "HEAD")
        copy.write("requirements.lock", "second\n")
        second = copy.commit()
        places = Places(root=copy.root)
        assert not places.has_other_lock(first)
        assert places.has_other_lock(second)
        assert not places.has_other_lock("0" * 40)
        monkeypatch.setattr(places_module, "_identity_here", lambda origin: SimpleNamespace(run_id="r"))
        monkeypatch.setattr(Places, "of", lambda self, commit: commit)
        origin = {"run_id": "r", "git_hash": second, "dirty": False, "versions": versions()}
        assert places._choose(origin) == (HERE, [])
        origin["versions"] = {**origin["versions"], "numpy": "0.1"}
        assert places._choose(origin) == (second, [])
        assert places._choose({**origin, "git_hash": first}) == (HERE, [])
        assert places._choose({**origin, "dirty": True}) == (HERE, [])

    def test_without_a_set_up_script_the_commit_is_refused(self, copy):
        (copy.root / ".ci" / "setup").unlink()
        head = copy.commit()
        with Commits(root=copy.root) as commits, pytest.raises(InputError, match=r"has no \.ci/setup, so"):
            commits.of(head)
        assert copy.left() == NOTHING_LEFT

    def test_a_project_inside_a_larger_repository_is_found(self, copy):
        copy.git("mv", "labkit", "table.csv", "-k", "notebooks")
        (copy.root / "part" / ".ci").mkdir(parents=True)
        for name in (".ci/setup", "requirements.lock"):
            (copy.root / name).rename(copy.root / "part" / name)
        head = copy.commit()
        with Commits(root=copy.root / "part") as commits:
            place = commits.of(head)
            assert place.root.name == "part"
            assert (place.root / "requirements.lock").read_text() == "first\n"

    def test_without_git_or_repository_one_sentence_says_so(self, copy, tmp_path, monkeypatch):
        head = copy.git("rev-parse", "HEAD")
        outside = tmp_path / "outside"
        outside.mkdir()
        with Commits(root=outside) as commits, pytest.raises(InputError, match="is no git repository"):
            commits.of(head)
        monkeypatch.setenv("PATH", str(tmp_path))
        with (
            Commits(root=copy.root) as commits,
            pytest.raises(InputError, match="there is no git; install it"),
        ):
            commits.of(head)

    def test_a_place_without_room_is_one_sentence(self, copy):
        head = copy.git("rev-parse", "HEAD")
        with Commits(root=copy.root) as commits:
            (copy.root / ".git" / "worktrees").write_text("in the way")
            with pytest.raises(InputError, match=f"commit {head[:10]}: git cannot make a work tree of it in"):
                commits.of(head)
