"""Public names are listed once, and the lists are true."""

from __future__ import annotations

import importlib

import pytest

LISTED = [
    "sim.scenario",
    "sim.rules",
    "sim.compiled",
    "sim.lowering",
    "sim.stays",
    "analysis.chain",
    "analysis.notebook",
]


@pytest.mark.parametrize("module", LISTED)
def test_every_listed_name_is_there_and_documented(module):
    loaded = importlib.import_module(module)
    assert len(set(loaded.__all__)) == len(loaded.__all__)
    for name in loaded.__all__:
        thing = getattr(loaded, name)
        if callable(thing):
            assert thing.__doc__, f"{module}.{name} has no docstring"
    with pytest.raises(AttributeError):
        getattr(loaded, "no_such_name")  # noqa: B009 - the point is the lookup


@pytest.mark.parametrize("module", LISTED)
def test_a_star_import_gives_exactly_the_list(module):
    names: dict[str, object] = {}
    exec(f"from {module} import *", names)
    names.pop("__builtins__")
    assert set(names) == set(importlib.import_module(module).__all__)
