"""The examples in the docstrings of the installed package run and say the truth."""

import doctest
import importlib
import pkgutil

import pytest
import sequester
import sequester.nodes
import sequester.workflows

MODULES = sorted(
    module.name
    for package in (sequester.nodes, sequester.workflows)
    for module in pkgutil.walk_packages(package.__path__, f"{package.__name__}.")
)


@pytest.mark.parametrize("name", MODULES)
def test_examples(name):
    result = doctest.testmod(importlib.import_module(name))
    assert result.failed == 0


def test_examples_are_there():
    """A module list that came out empty would make the test above pass for nothing."""
    finder = doctest.DocTestFinder(exclude_empty=True)
    found = sum(
        bool(test.examples)
        for name in MODULES
        for test in finder.find(importlib.import_module(name))
    )
    assert found >= 35
