"""Examples in docstrings run and give what they show; public names say what they take."""

import doctest
import importlib
import inspect
import pkgutil

import pytest

import labkit

MODULES = [name for _, name, _ in pkgutil.walk_packages(labkit.__path__, "labkit.") if "__main__" not in name]


@pytest.mark.parametrize("module", MODULES)
def test_examples_run(module):
    found = doctest.testmod(importlib.import_module(module), optionflags=doctest.NORMALIZE_WHITESPACE)
    assert found.failed == 0


def test_there_are_examples():
    tests = [test for name in MODULES for test in doctest.DocTestFinder().find(importlib.import_module(name))]
    assert sum(len(test.examples) for test in tests) >= 10


@pytest.mark.parametrize("name", [name for name in labkit.__all__ if name != "__version__"])
def test_public_names_say_what_they_take(name):
    public = getattr(labkit, name)
    text = inspect.getdoc(public)
    assert text
    if inspect.isfunction(public) and inspect.signature(public).parameters:
        assert "Parameters\n" in text
        for argument in inspect.signature(public).parameters:
            assert argument in text, f"{name} does not describe {argument}"
