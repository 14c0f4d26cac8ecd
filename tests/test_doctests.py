"""The examples in the docstrings do what they say."""

import doctest
import importlib
from pathlib import Path

import pytest

import shaper

ROOT = Path(shaper.__file__).parent
WITH_EXAMPLES = [
    ".".join(path.relative_to(ROOT.parent).with_suffix("").parts)
    for path in sorted(ROOT.rglob("*.py"))
    if ">>>" in path.read_text(encoding="utf-8")
]


@pytest.mark.parametrize("name", WITH_EXAMPLES)
def test_examples(name):
    failed, tried = doctest.testmod(importlib.import_module(name))
    assert failed == 0
    assert tried > 0


def test_there_are_examples():
    assert len(WITH_EXAMPLES) >= 4
