"""The examples in docstrings, run in the installed modules (pytest's own collector would import second copies)."""

import doctest
import importlib
import pkgutil

import pytest


def module_names():
    for top in ("modesieve.reduce", "modesieve.io", "modesieve.examples"):
        package = importlib.import_module(top)
        yield top
        yield from (found.name for found in pkgutil.walk_packages(package.__path__, f"{top}."))


@pytest.mark.parametrize("name", sorted(module_names()))
def test_docstring_examples_hold(name):
    """Every example in a docstring prints what it says."""
    module = importlib.import_module(name)
    result = doctest.testmod(module)
    assert result.failed == 0


def test_there_are_examples():
    """The walk finds docstring examples at all."""
    finder = doctest.DocTestFinder(exclude_empty=True)
    count = sum(
        len(test.examples) for name in module_names() for test in finder.find(importlib.import_module(name)) if test
    )
    assert count > 50
