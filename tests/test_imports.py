"""The package's layers, and what an import may do."""

from __future__ import annotations

import ast
import json
import subprocess
import sys
from graphlib import CycleError, TopologicalSorter
from pathlib import Path

import pytest

from tests.sources import ROOT, module_name, python_files, tree

# A module may import from its own layer and those before it.
LAYERS = (
    ("errors", "environment"),
    ("laws",),
    ("geometry",),
    ("kernels",),
    ("spectral",),
    ("system",),
    ("store",),
    ("starts",),
    ("show",),
    ("job",),
    ("classify",),
    ("solve",),
    ("check",),
    ("batch",),
    ("sizing",),
    ("campaign",),
    ("report",),
    ("study",),
    ("cli",),
    ("__init__", "__main__"),
)
RANK_OF_LAYER = {name: rank for rank, names in enumerate(LAYERS) for name in names}
PACKAGE = python_files("lattice")
LONGEST = 400

IMPORT_EACH = """
import importlib, io, json, os, sys
written = []
def watch(event, arguments):
    if event == "open" and isinstance(arguments[0], (str, bytes, os.PathLike)):
        path, mode, flags = arguments
        if set(mode or "") & set("wax+") or (flags or 0) & (os.O_WRONLY | os.O_RDWR):
            written.append(os.fsdecode(path))
sys.addaudithook(watch)
from lattice import environment
environment.prepare()
guilty = {}
seen = set()
for name in sys.argv[1:]:
    importlib.import_module(name)
    started = {"mpi4py.MPI", "petsc4py.PETSc", "slepc4py.SLEPc"} & set(sys.modules)
    if started - seen or written:
        guilty[name] = sorted(started - seen) + written
    seen |= started
    written = []
print(json.dumps(guilty))
"""


def layer_of(module: str) -> str:
    parts = module.split(".")
    return parts[1] if len(parts) > 1 else "__init__"


def imported_modules(path: Path) -> set[str]:
    """Return the modules of this package a file imports, at its top or inside its functions."""
    found = set()
    for node in ast.walk(tree(path)):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            found |= {_module_or_member(node.module, alias.name) for alias in node.names}
    return {name for name in found if name.split(".")[0] == "lattice"}


def top_level_imports(path: Path) -> set[str]:
    """Return the modules of this package that are imported when the file is."""
    found = set()
    for node in tree(path).body:
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            found |= {_module_or_member(node.module, alias.name) for alias in node.names}
    return {name for name in found if name.split(".")[0] == "lattice"}


def _module_or_member(module: str, member: str) -> str:
    path = ROOT.joinpath(*module.split("."), member)
    return f"{module}.{member}" if path.with_suffix(".py").is_file() or path.is_dir() else module


def test_every_module_belongs_to_a_layer() -> None:
    assert {layer_of(module_name(path)) for path in PACKAGE} <= set(RANK_OF_LAYER)


@pytest.mark.parametrize("path", PACKAGE, ids=module_name)
def test_imports_point_downwards(path: Path) -> None:
    own = layer_of(module_name(path))
    upward = {name for name in imported_modules(path) if RANK_OF_LAYER[layer_of(name)] > RANK_OF_LAYER[own]}
    assert not upward, f"{own} stands below what {module_name(path)} imports: {sorted(upward)}"


def test_no_module_imports_itself_through_others() -> None:
    graph = {module_name(path): top_level_imports(path) - {module_name(path)} for path in PACKAGE}
    try:
        TopologicalSorter(graph).prepare()
    except CycleError as error:
        pytest.fail(f"modules import each other in a circle: {' <- '.join(error.args[1])}")


def test_importing_starts_neither_mpi_nor_petsc_and_writes_nothing() -> None:
    modules = [module_name(path) for path in PACKAGE if path.name != "__main__.py"]
    command = [sys.executable, "-B", "-c", IMPORT_EACH, *modules]
    done = subprocess.run(command, capture_output=True, text=True, cwd=ROOT, timeout=120, check=False)
    assert done.returncode == 0, done.stderr
    lines = done.stdout.splitlines()
    assert json.loads(lines[-1]) == {}
    assert lines[:-1] == [], "importing a module must not print"
    assert done.stderr == ""


def test_the_command_line_starts_without_the_numerical_packages() -> None:
    heavy = ("numpy", "scipy", "sympy", "numba", "matplotlib", "h5py", "pydantic", "mpi4py", "petsc4py")
    script = f"import sys, lattice.cli.main; print(*sorted(set({heavy}) & set(sys.modules)))"
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, cwd=ROOT, timeout=60, check=True
    )
    assert done.stdout.split() == []


@pytest.mark.parametrize("path", PACKAGE, ids=module_name)
def test_modules_are_short(path: Path) -> None:
    lines = len(path.read_text(encoding="utf-8").splitlines())
    assert lines <= LONGEST, f"{module_name(path)} has {lines} lines; give its second job a module of its own"


def test_modules_are_named_by_their_job() -> None:
    vague = {"common", "helper", "helpers", "misc", "util", "utils"}
    assert [path for path in python_files() if vague & {path.stem, *path.relative_to(ROOT).parts}] == []


@pytest.mark.parametrize("path", PACKAGE, ids=module_name)
def test_only_the_command_line_names_the_world_communicator(path: Path) -> None:
    names = [
        node for node in ast.walk(tree(path)) if isinstance(node, ast.Attribute) and node.attr == "COMM_WORLD"
    ]
    assert not names or layer_of(module_name(path)) == "cli", (
        f"line {names[0].lineno}: take comm as an argument"
    )
