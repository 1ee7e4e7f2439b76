"""The examples of the documentation in the modules run, and give what they show."""

import doctest
import importlib
import importlib.util
import pkgutil

import pytest

import meshctl

EXTRAS = {"meshctl.tolerances.cluster": "distributed"}  # modules that need what is not always installed
MODULES = [m.name for m in pkgutil.walk_packages(meshctl.__path__, "meshctl.") if not m.name.endswith("__main__")]


@pytest.mark.parametrize("name", MODULES)
def test_examples_of_modules_run(name):
    if name in EXTRAS and importlib.util.find_spec(EXTRAS[name]) is None:
        pytest.skip(f"needs {EXTRAS[name]}")
    found = doctest.testmod(importlib.import_module(name), verbose=False)
    assert found.failed == 0


def test_examples_of_the_interface_are_found():
    found = doctest.DocTestFinder().find(importlib.import_module("meshctl.api"), "api")
    assert {test.name for test in found if test.examples} >= {"api.solve", "api.route", "api.tolerance", "api.predict"}
