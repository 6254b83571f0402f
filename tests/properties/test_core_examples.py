"""The examples in the numeric core's docstrings give what they say."""

from __future__ import annotations

import doctest
import importlib

import pytest


@pytest.mark.parametrize(
    "name", ["twobody.kepler", "twobody.elements", "preliminary.gibbs", "preliminary.herrick_gibbs"]
)
def test_examples(name):
    result = doctest.testmod(importlib.import_module(f"firstarc.{name}"))
    assert result.attempted >= 2 and result.failed == 0
