"""What is public can be imported, and says what it is for."""

import importlib
import inspect
import pkgutil

import pytest

import ssaudit

MODULES = sorted(
    module.name
    for module in pkgutil.walk_packages(ssaudit.__path__, "ssaudit.")
    if not module.name.endswith("__main__")
)


@pytest.mark.parametrize("name", ssaudit.__all__)
def test_public_names_are_there_and_documented(name):
    thing = getattr(ssaudit, name)
    text = inspect.getdoc(thing)
    assert text
    sections = ("Examples\n---", "Parameters\n---", "Attributes\n---")
    assert any(section in text for section in sections)


def test_no_public_name_is_unknown_and_none_is_listed_twice():
    assert len(set(ssaudit.__all__)) == len(ssaudit.__all__)
    assert set(ssaudit.__all__) <= set(dir(ssaudit))
    assert not [name for name in ssaudit.__all__ if name.startswith("_")]
    with pytest.raises(AttributeError, match="has no attribute 'nothing'"):
        _ = ssaudit.nothing


def documented(module):
    """Public functions, classes and methods that a module defines."""
    for name, thing in vars(module).items():
        if name.startswith("_") or getattr(thing, "__module__", None) != module.__name__:
            continue
        if inspect.isfunction(thing) or inspect.isclass(thing):
            yield name, thing
        if inspect.isclass(thing):
            for inner, method in vars(thing).items():
                if not inner.startswith("_") and (
                    inspect.isfunction(method) or isinstance(method, property)
                ):
                    yield f"{name}.{inner}", method


@pytest.mark.parametrize("name", MODULES)
def test_every_module_and_all_that_is_public_in_it_has_a_docstring(name):
    module = importlib.import_module(name)
    assert module.__doc__
    assert [n for n, thing in documented(module) if not inspect.getdoc(thing)] == []


def unknown_parameters(function):
    """Parameters that a docstring lists and the function does not have."""
    _, _, listed = (inspect.getdoc(function) or "").partition("Parameters\n----------\n")
    block = listed.split("\n\n")[0]
    heads = [line.split(" : ")[0] for line in block.splitlines() if not line.startswith(" ")]
    words = {word.strip().lstrip("*") for head in heads for word in head.split(",")} - {""}
    return words - set(inspect.signature(function).parameters)


@pytest.mark.parametrize("name", MODULES)
def test_parameters_that_are_documented_are_those_that_there_are(name):
    for where, thing in documented(importlib.import_module(name)):
        if inspect.isfunction(thing):
            assert unknown_parameters(thing) == set(), where


def test_a_parameter_that_is_not_there_is_found():
    def wrong(a, c):
        """Do.

        Parameters
        ----------
        a, b : int
            Numbers.
        c : int
        """

    assert unknown_parameters(wrong) == {"b"}
