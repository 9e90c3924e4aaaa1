"""The package's own names stay what they are, however often and in whichever order they are used."""

import importlib

import pytest

import porter


@pytest.mark.parametrize("name", porter.__all__)
def test_a_public_name_stays_callable(name: str) -> None:
    """Importing the module behind a name must not put the module in the function's place."""
    importlib.import_module(porter._HOMES[name])
    assert callable(getattr(porter, name))
    assert callable(getattr(porter, name))
