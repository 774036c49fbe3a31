"""The examples in the docstrings of batch and report are true."""

from __future__ import annotations

import doctest
import importlib

import pytest

MODULES = ("batch.names", "report.numbers", "report.svg", "report.toml_text", "report.words")


@pytest.mark.parametrize("name", MODULES)
def test_examples(name: str) -> None:
    result = doctest.testmod(importlib.import_module(f"poroscan.{name}"))
    assert result.attempted > 0
    assert result.failed == 0
