"""The files at the top agree with each other and keep their promises."""

import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest
import yaml
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name

import labkit

ROOT = Path(__file__).parents[1]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
REQUIREMENTS = [
    Requirement(text) for text in [*PROJECT["dependencies"], *PROJECT["optional-dependencies"]["dev"]]
]
# name==version [; marker] and its hashes, one a line
PIN = re.compile(
    r"([a-z0-9-]+)==([\w.!+]+)(?: ; [^\\\n]+)? \\(?:\n    --hash=sha256:[0-9a-f]{64}(?: \\)?)+\n"
)
TOP = {
    *("README.md", "DEVELOPERS.md", "CHANGELOG.md", "CITATION.cff", "LICENSE"),
    *("pyproject.toml", "environment.yml", "requirements.lock", "Makefile"),
    *("labkit", "notebooks", "experiments", "results", "tests"),
}


def read(name: str) -> str:
    return (ROOT / name).read_text(encoding="utf-8")


def python(*arguments: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run([sys.executable, *arguments], cwd=ROOT, capture_output=True, text=True, timeout=60)


def test_one_version_everywhere():
    newest = re.search(r"^## (\S+)", read("CHANGELOG.md"), re.MULTILINE)
    versions = {
        "pyproject.toml": PROJECT["version"],
        "labkit.__version__": labkit.__version__,
        "CITATION.cff": yaml.safe_load(read("CITATION.cff"))["version"],
        "CHANGELOG.md": newest and newest[1],
    }
    assert set(versions.values()) == {PROJECT["version"]}, versions


def test_one_licence_everywhere():
    citation = yaml.safe_load(read("CITATION.cff"))
    assert PROJECT["license"] == citation["license"] == "BSD-3-Clause"
    assert read("LICENSE").startswith("BSD 3-Clause License")


def test_the_citation_has_what_its_format_requires():
    citation = yaml.safe_load(read("CITATION.cff"))
    assert citation["cff-version"] == "1.2.0"
    assert all(citation[key] for key in ("message", "title", "authors"))


def test_the_conda_environment_is_that_of_the_project():
    environment = yaml.safe_load(read("environment.yml"))
    assert environment["name"] == PROJECT["name"]
    assert environment["dependencies"] == [
        f"python{PROJECT['requires-python']}",
        "pip",
        {"pip": ["-r requirements.lock"]},
    ]


def test_the_lock_is_nothing_but_hashed_pins():
    rest = PIN.sub("", read("requirements.lock"))
    assert rest == ""


@pytest.mark.parametrize("requirement", REQUIREMENTS, ids=str)
def test_the_lock_covers(requirement):
    pins = [
        pin
        for pin in PIN.finditer(read("requirements.lock"))
        if pin[1] == canonicalize_name(requirement.name)
    ]
    assert pins, f"{requirement} is not in requirements.lock; make lock"
    assert all(requirement.specifier.contains(pin[2]) for pin in pins), "make lock"


@pytest.mark.parametrize("command", ["make answer", "make test"])
def test_the_readme_shows(command):
    assert command in read("README.md")


def test_the_top_level_holds_only_what_is_agreed():
    made = {"build", "dist", "labkit.egg-info", "__pycache__"}
    found = {path.name for path in ROOT.iterdir() if not path.name.startswith(".")}
    assert found - made <= TOP


def test_importing_labkit_loads_nothing_heavy():
    heavy = ["numpy", "pandas", "numba", "scipy", "pyarrow", "matplotlib", "networkx", "papermill"]
    done = python("-c", f"import sys, labkit; print([name for name in {heavy} if name in sys.modules])")
    assert (done.returncode, done.stdout.strip()) == (0, "[]"), done.stderr


def test_the_kernel_of_a_run_imports_no_more_than_it_needs():
    slow = ["scipy.stats", "scipy.linalg", "matplotlib", "networkx", "papermill", "plotly"]
    lines = (
        "import importlib, pathlib, sys",
        "from labkit.studies.kernels import _imports",
        "for name in _imports(pathlib.Path('notebooks/headroom.ipynb')): importlib.import_module(name)",
        f"print([name for name in {slow} if name in sys.modules])",
    )
    done = python("-c", "\n".join(lines))
    assert (done.returncode, done.stdout.strip()) == (0, "[]"), done.stderr


def test_every_public_name_is_there():
    assert [name for name in labkit.__all__ if not hasattr(labkit, name)] == []


def test_the_command_shows_its_help():
    done = python("-m", "labkit.cli", "--help")
    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("usage: labkit ")


def test_the_package_names_its_command():
    assert PROJECT["scripts"] == {"labkit": "labkit.cli:main"}
