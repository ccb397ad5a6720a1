"""The examples in the docstrings are exact."""

from __future__ import annotations

import doctest
import importlib
from pathlib import Path

import pytest

from tests.sources import module_name, python_files

WITH_EXAMPLES = [path for path in python_files("lattice") if ">>> " in path.read_text(encoding="utf-8")]


@pytest.mark.parametrize("path", WITH_EXAMPLES, ids=module_name)
def test_examples_give_what_they_say(path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    result = doctest.testmod(importlib.import_module(module_name(path)))
    assert result.failed == 0, capsys.readouterr().out
    assert result.attempted > 0
