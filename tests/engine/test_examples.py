"""The examples in docstrings."""

import doctest
import importlib

import pytest


@pytest.mark.parametrize(
    "name",
    ["nearest", "parsing", "pivoting", "explaining", "session", "statements", "rewriting.edits"],
)
def test_examples(name: str) -> None:
    found = doctest.testmod(importlib.import_module(f"midspread.engine.{name}"))
    assert found.attempted > 0
    assert found.failed == 0
