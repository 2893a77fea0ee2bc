"""Every public function of the equation modules says its units, its errors and its source, and its example is true."""

import doctest
import inspect
import re

import pytest

from covariates import body_size, catalogue, checks, kidney, maturation, variability

MODULES = (body_size, catalogue, checks, kidney, maturation, variability)
FUNCTIONS = [
    pytest.param(function, id=f"{module.__name__}.{name}")
    for module in MODULES
    for name, function in inspect.getmembers(module, inspect.isfunction)
    if function.__module__ == module.__name__ and not name.startswith("_")
]
EQUATION_MODULES = {module.__name__ for module in (body_size, kidney, maturation)}


def section(text, name, until):
    found = re.search(rf"^{name}:(.*?)^(?:{until})", text, re.MULTILINE | re.DOTALL)
    return found.group(1) if found else ""


def test_the_functions_were_found():
    assert len(FUNCTIONS) >= 25


@pytest.mark.parametrize("function", FUNCTIONS)
def test_arguments_are_documented_with_their_units(function):
    arguments = section(inspect.getdoc(function), "Arguments", "Returns:")
    documented = re.findall(r"^ {4}(\w+): .*?\[[^\]]+\]", arguments, re.MULTILINE)
    assert documented == list(inspect.signature(function).parameters)


@pytest.mark.parametrize("function", FUNCTIONS)
def test_returns_raises_and_source(function):
    text = inspect.getdoc(function)
    assert re.search(r"\[[^\]]+\]|names of", section(text, "Returns", "Raises:"))
    assert re.search(r"\w+Error: \w", section(text, "Raises", "[A-Z]"))
    assert re.search(r"^Source: \S", text, re.MULTILINE)
    if function.__module__ in EQUATION_MODULES:
        assert re.search(r"^Formula: \S", text, re.MULTILINE)
        assert re.search(r"^People: \S", text, re.MULTILINE)


@pytest.mark.parametrize("function", FUNCTIONS)
def test_there_is_a_worked_example(function):
    assert ">>> " in inspect.getdoc(function)


@pytest.mark.parametrize("module", MODULES, ids=lambda module: module.__name__)
def test_worked_examples_are_true(module):
    result = doctest.testmod(module)
    assert result.attempted > 0 and result.failed == 0
