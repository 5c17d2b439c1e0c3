"""Examples in docstrings run and give what they show; public names say what they take."""

import doctest
import importlib
import inspect
import pkgutil
import re
from functools import cache, cached_property

import pytest

import labkit

MODULES = [name for _, name, _ in pkgutil.walk_packages(labkit.__path__, "labkit.") if "__main__" not in name]
PUBLIC = [name for name in labkit.__all__ if name != "__version__"]


def public(name):
    """Return what a public name stands for; `survey` is a package as well, which an import leaves there."""
    return getattr(importlib.import_module(labkit._HOMES[name]), name)


@pytest.mark.parametrize("module", MODULES)
def test_examples_run(module):
    found = doctest.testmod(importlib.import_module(module), optionflags=doctest.NORMALIZE_WHITESPACE)
    assert found.failed == 0


@cache
def examples_that_run() -> dict[str, str]:
    """Return the code in the section `Examples` of each docstring, by full name, as far as it really runs.

    Doctest itself says so: it does not look into docstrings of cached properties, and examples that are
    marked to be skipped do not run.
    """
    found = {}
    for module in MODULES:
        for test in doctest.DocTestFinder().find(importlib.import_module(module)):
            start = re.search(r"^ *Examples\n *-{8}$", test.docstring or "", re.MULTILINE)
            sources = [
                each.source
                for each in test.examples
                if start
                and each.lineno > test.docstring.count("\n", 0, start.start())
                and not each.options.get(doctest.SKIP)
            ]
            # An import alone shows nothing.
            if not all(source.startswith(("import ", "from ")) for source in sources):
                found[test.name] = "".join(sources)
    return found


def without_example(names: dict[str, object], examples: dict[str, str]) -> list[str]:
    """Return the names among these, and those of their classes' members, that lack an example.

    The rule: a class needs an example of its own, a function or method one that names it; but a method which
    a base class in labkit has as well may leave it to the base, a property need only be read (``.name``) in
    some example of the class or its bases, and plain attributes and static functions need none.
    """

    def shows(home, member):
        return re.search(rf"\b{member}\b", examples.get(home, ""))

    lacking = []
    for name, value in names.items():
        home = f"{value.__module__}.{value.__qualname__}"
        if home not in examples or (inspect.isfunction(value) and not shows(home, name)):
            lacking.append(name)
        if not inspect.isclass(value):
            continue
        family = [each for each in value.__mro__ if each.__module__.startswith(f"{labkit.__name__}.")]
        homes = [f"{each.__module__}.{each.__qualname__}" for each in family]
        inside = tuple(f"{home}." for home in homes)
        shown = "".join(code for home, code in examples.items() if f"{home}.".startswith(inside))
        members = {member: each for one in reversed(family) for member, each in vars(one).items()}
        for member, each in members.items():
            if member.startswith("_"):
                continue
            if isinstance(each, property | cached_property):
                has = re.search(rf"\.{member}\b(?!\()", shown)
            elif inspect.isfunction(each) or isinstance(each, classmethod):
                has = any(shows(f"{home}.{member}", member) for home in homes)
            else:
                has = True
            if not has:
                lacking.append(f"{name}.{member}")
    return lacking


def test_every_public_name_has_an_example_that_runs():
    lacking = without_example({name: public(name) for name in PUBLIC}, examples_that_run())
    assert not lacking, f"{len(lacking)} public names have no example that runs: {', '.join(lacking)}"


class _Base:
    def inherited(self):
        pass


class _Thing(_Base):
    shown, hidden = property(len), cached_property(len)
    plain, static = 3, staticmethod(len)

    def inherited(self):
        pass

    def bare(self):
        pass

    def beside_the_point(self):
        pass


def test_what_lacks_an_example_is_named(monkeypatch):
    for each in (_Base, _Thing):
        monkeypatch.setattr(each, "__module__", "labkit.made_up")
    examples = {
        "labkit.made_up._Thing": "thing.shown\nthing.hidden_as_well\n",
        "labkit.made_up._Base.inherited": "thing.inherited()\n",
        "labkit.made_up._Thing.beside_the_point": "thing.inherited()\n",
        "labkit.made_up._ThingElse": "thing.hidden\n",
    }
    lacking = ["Thing.hidden", "Thing.bare", "Thing.beside_the_point"]
    assert without_example({"Thing": _Thing}, examples) == lacking
    assert set(without_example({"Thing": _Thing}, {})) == {
        "Thing",
        "Thing.inherited",
        "Thing.shown",
        *lacking,
    }


@pytest.mark.parametrize("name", PUBLIC)
def test_public_names_say_what_they_take(name):
    value = public(name)
    text = inspect.getdoc(value)
    assert text
    if inspect.isfunction(value) and inspect.signature(value).parameters:
        assert "Parameters\n" in text
        for argument in inspect.signature(value).parameters:
            assert argument in text, f"{name} does not describe {argument}"
