"""The examples in the docstrings are run, and every public function says where its formula is from."""

import doctest
import importlib
import pkgutil

import pytest

import budgets

MODULES = [item.name for item in pkgutil.walk_packages(budgets.__path__, "budgets.")]


@pytest.mark.parametrize("name", MODULES)
def test_examples_in_docstrings(name):
    assert doctest.testmod(importlib.import_module(name)).failed == 0
