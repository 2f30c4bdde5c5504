"""Every public name explains itself in the numpydoc form; nothing is skipped."""

from __future__ import annotations

import inspect
from collections.abc import Iterator

import pytest
from numpydoc.validate import validate

import robustrm

# The rules of numpydoc that are not ours, each with its reason.
NOT_OURS = {
    "ES01": "an extended summary is written where there is more to say",
    "EX01": "examples are asked for below, of functions",
    "GL01": "the summary stands on the line of the opening quotes (ruff D212 form)",
    "GL02": "a docstring of one line closes on that line",
    "SA01": "the guide and the registry lead from method to method",
    "SS05": "a summary may be the question that is answered, not only an order",
}
# A method of a class is often one sentence; it is held to the rules about that sentence, and to
# naming only parameters that exist.
OF_METHODS = {"GL08", "PR02", "SS01", "SS02", "SS03", "SS04", "SS06"}


def public(kind: type | None = None) -> list[str]:
    values = {name: getattr(robustrm, name) for name in robustrm.__all__}
    wanted = inspect.isclass if kind is type else inspect.isfunction
    return sorted(name for name, value in values.items() if wanted(value))


def members() -> Iterator[str]:
    """Return the public methods and properties that the public classes define themselves."""
    for name in public(type):
        for member, value in vars(getattr(robustrm, name)).items():
            described = isinstance(value, property | classmethod | staticmethod)
            if not member.startswith("_") and (described or inspect.isfunction(value)):
                yield f"{name}.{member}"


def complaints(name: str) -> list[tuple[str, str]]:
    return [tuple(error) for error in validate(name)["errors"]]


def test_there_is_something_to_read():
    assert public()
    assert public(type)


@pytest.mark.parametrize("name", [*public(), *public(type)])
def test_a_public_name_is_documented(name: str):
    found = complaints(f"robustrm.{name}")
    assert [error for error in found if error[0] not in NOT_OURS] == []


@pytest.mark.parametrize("name", public())
def test_a_public_function_has_an_example(name: str):
    assert [error for error in complaints(f"robustrm.{name}") if error[0] == "EX01"] == []


@pytest.mark.parametrize("name", list(members()))
def test_a_public_method_is_documented(name: str):
    found = complaints(f"robustrm.{name}")
    assert [error for error in found if error[0] in OF_METHODS] == []
