"""A record says which commit it comes from, and when sources differ from it, how."""

import json
import subprocess

import pytest

from labkit.records.provenance import provenance, source_state


def git(folder, *words):
    who = ["-c", "user.name=A", "-c", "user.email=a@example.org", "-c", "commit.gpgsign=false"]
    return subprocess.run(
        ["git", *who, *words], cwd=folder, check=True, capture_output=True, text=True
    ).stdout


@pytest.fixture
def project(tmp_path):
    (tmp_path / "labkit").mkdir()
    (tmp_path / "labkit" / "__init__.py").write_text("a = 1\n")
    (tmp_path / ".gitignore").write_text("results/\n")
    git(tmp_path, "init", "-q")
    return tmp_path


@pytest.fixture
def committed(project):
    git(project, "add", ".")
    git(project, "commit", "-q", "-m", "First")
    return project


def test_a_clean_tree_is_its_commit(committed):
    (committed / "results").mkdir()
    (committed / "results" / "x").write_text("ignored")
    head = git(committed, "rev-parse", "HEAD").strip()
    assert source_state(committed) == {"git_hash": head, "dirty": False, "diff_digest": ""}


def test_every_kind_of_difference_counts_and_differs(committed):
    seen = set()
    source = committed / "labkit" / "__init__.py"
    for change in (
        lambda: source.write_text("a = 2\n"),
        lambda: source.write_text("a = 3\n"),
        lambda: (committed / "new.py").write_text("b = 1\n"),
        lambda: (committed / "new.py").write_text("b = 2\n"),
        lambda: (committed / "new.py").rename(committed / "named.py"),
        lambda: source.unlink(),
    ):
        change()
        state = source_state(committed)
        assert state["dirty"]
        seen.add(state["diff_digest"])
    assert len(seen) == 6


def test_what_was_computed_is_no_source(committed):
    (committed / ".gitignore").write_text("")
    head = (
        git(committed, "commit", "-q", "-a", "-m", "Second"),
        git(committed, "rev-parse", "HEAD").strip(),
    )[1]
    frozen = committed / "results" / "frozen" / "name"
    frozen.mkdir(parents=True)
    (frozen / "table.csv").write_text("a\n1\n")
    clean = {"git_hash": head, "dirty": False, "diff_digest": ""}
    assert source_state(committed) == clean
    git(committed, "add", ".")
    assert source_state(committed) == clean
    git(committed, "commit", "-q", "-m", "Third")
    (frozen / "table.csv").write_text("a\n2\n")
    assert not source_state(committed)["dirty"]
    (committed / "labkit" / "results").write_text("a source")
    assert source_state(committed)["dirty"]


def test_the_digest_does_not_depend_on_what_is_staged(committed):
    (committed / "labkit" / "__init__.py").write_text("a = 2\n")
    before = source_state(committed)
    git(committed, "add", ".")
    assert source_state(committed) == before


def test_without_a_commit_the_hash_is_empty_and_the_tree_dirty(project):
    state = source_state(project)
    assert (state["git_hash"], state["dirty"]) == ("", True)
    assert len(state["diff_digest"]) == 64


def test_without_a_repository_nothing_is_claimed(tmp_path, monkeypatch):
    unknown = {"git_hash": "", "dirty": True, "diff_digest": ""}
    (tmp_path / "labkit").mkdir()
    (tmp_path / "labkit" / "__init__.py").touch()
    assert source_state(tmp_path) == unknown
    monkeypatch.setenv("PATH", str(tmp_path))
    assert source_state(tmp_path) == unknown


def test_a_repository_that_only_surrounds_an_installed_copy_is_not_named(committed):
    installed = committed / "results" / "site"
    (installed / "labkit").mkdir(parents=True)
    (installed / "labkit" / "__init__.py").touch()
    assert source_state(installed)["git_hash"] == ""


def test_a_record_names_versions_generator_and_draws():
    found = provenance()
    versions = json.loads(found["versions"])
    assert {"python", "numpy", "numba", "scipy", "pandas", "pyarrow", "labkit", "platform", "machine"} <= set(
        versions
    )
    assert found["bit_generator"] == "SFC64"
    assert "64-bit word" in found["draws"]
