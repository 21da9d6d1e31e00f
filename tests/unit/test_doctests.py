"""The examples in the docstrings of the pure packages are run."""

import doctest
import importlib
import pkgutil

import pytest

PACKAGES = (
    "labplan.chemistry", "labplan.planning", "labplan.safety", "labplan.operations.waiting",
)  # fmt: skip
MODULES = [
    name
    for package in PACKAGES
    for _, name, _ in pkgutil.iter_modules(importlib.import_module(package).__path__, f"{package}.")
]


@pytest.mark.parametrize("name", MODULES)
def test_docstring_examples_hold(name: str) -> None:
    assert doctest.testmod(importlib.import_module(name)).failed == 0


def test_there_are_examples() -> None:
    finder = doctest.DocTestFinder(exclude_empty=True)
    examples = sum(
        len(t.examples) for m in MODULES for t in finder.find(importlib.import_module(m))
    )
    assert examples >= 10
