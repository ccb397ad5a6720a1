"""The project's own files, for tests about the text of the code."""

from __future__ import annotations

import ast
import functools
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
FOLDERS = (".ci", "jobs", "lattice", "scaling", "tests")
LEFT_OUT = ("__pycache__", "runs")


@functools.cache
def project_files() -> tuple[Path, ...]:
    """Return every file of the project's folders and those beside them, sorted."""
    found = [path for path in ROOT.iterdir() if path.is_file() and path.name != ".git"]
    for folder in FOLDERS:
        found += [path for path in (ROOT / folder).rglob("*") if path.is_file()]
    return tuple(sorted(path for path in found if not set(LEFT_OUT) & set(path.relative_to(ROOT).parts)))


def python_files(folder: str = "") -> tuple[Path, ...]:
    """Return the Python files below a folder of the project, or all of them."""
    return tuple(path for path in project_files() if path.suffix == ".py" and (ROOT / folder) in path.parents)


def module_name(path: Path) -> str:
    """Return the dotted name under which a file of the package is imported."""
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


@functools.cache
def tree(path: Path) -> ast.Module:
    """Return a file's syntax tree."""
    return ast.parse(path.read_text(encoding="utf-8"), filename=str(path))
