"""Names: words that mean something else to other readers of the field are kept out of code and files."""

from __future__ import annotations

import ast
import re
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.sources import ROOT, project_files, python_files, tree

AVOIDED = frozenset({"orbit", "hunt", "glue", "clip", "tile", "defect", "streak", "gap"})
# Functions of libraries keep their usual names.
OF_LIBRARIES = frozenset({"np.clip", "np.tile", "numpy.clip", "numpy.tile"})
WORD = re.compile(r"[A-Z]?[a-z]+|[A-Z]+(?![a-z])")


def avoided_words(name: str) -> set[str]:
    """Return the avoided words in an identifier or path, in the singular or plural."""
    words = {word.lower() for word in WORD.findall(name)}
    return (words | {word.removesuffix("s") for word in words}) & AVOIDED


def names_in(source: ast.AST) -> Iterator[tuple[int, str]]:
    """Yield line and text of every identifier, and of every string that is one word: keys and options."""
    for node in ast.walk(source):
        line = getattr(node, "lineno", 0)
        match node:
            case ast.Attribute(attr=name) if ast.unparse(node) not in OF_LIBRARIES:
                yield line, name
            case ast.Name(id=name) | ast.arg(arg=name) | ast.FunctionDef(name=name) | ast.ClassDef(name=name):
                yield line, name
            case ast.keyword(arg=str(name)) | ast.alias(name=name):
                yield line, name
            case ast.Constant(value=str(name)) if re.fullmatch(r"[\w-]+", name):
                yield line, name


def keys_of(table: dict[str, object]) -> Iterator[str]:
    """Yield the keys of a TOML table and of those in it."""
    for key, value in table.items():
        yield key
        if isinstance(value, dict):
            yield from keys_of(value)


@pytest.mark.parametrize("path", python_files(), ids=lambda path: str(path.relative_to(ROOT)))
def test_identifiers_avoid_the_words(path: Path) -> None:
    own_list = path == Path(__file__)
    found = [(line, name) for line, name in names_in(tree(path)) if avoided_words(name) and not own_list]
    assert found == []


def test_file_names_avoid_the_words() -> None:
    assert [path for path in project_files() if avoided_words(str(path.relative_to(ROOT)))] == []


def test_job_and_law_files_avoid_the_words() -> None:
    files = [path for path in project_files() if path.suffix == ".toml"]
    assert files
    tables = {path: tomllib.loads(path.read_text(encoding="utf-8")) for path in files}
    assert [
        (path, key) for path, table in tables.items() for key in keys_of(table) if avoided_words(key)
    ] == []


@pytest.mark.parametrize("name", ["orbit", "find_gaps", "TileSize", "--hunt", "glueLayer", "spectral-gap"])
def test_an_avoided_word_is_found(name: str) -> None:
    assert avoided_words(name)


@pytest.mark.parametrize("name", ["percentile", "quartiles", "orbital", "clipboard", "agape"])
def test_a_longer_word_is_accepted(name: str) -> None:
    assert not avoided_words(name)
