"""What `import lattice` offers: the list grows on purpose only, and each entry is documented in full."""

from __future__ import annotations

import importlib.metadata
import tomllib
import warnings

import pytest

import lattice
from tests.sources import ROOT

SURFACE = [
    "InputError",
    "Lattice",
    "LatticeError",
    "Stepper",
    "System",
    "check_state",
    "excerpt_state",
    "find_recurrences",
    "job_to_toml",
    "law_names",
    "load_job",
    "load_law",
    "mosaic_states",
    "open_state",
    "plot_state",
    "prepare",
    "read_campaign",
    "read_law",
    "run_campaign",
    "run_job",
]

# Of numpydoc's checks: every parameter described, in order, with its type.
DOCSTRING_CHECKS = {"GL06", "GL07", "GL08", "PR01", "PR02", "PR03", "PR04", "SS01", "YD01"}


def test_the_public_names_are_these() -> None:
    assert lattice.__all__ == SURFACE


def test_every_public_name_exists() -> None:
    assert [name for name in SURFACE if not hasattr(lattice, name)] == []


@pytest.mark.parametrize("name", SURFACE)
def test_the_public_surface_is_documented(name: str) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # of the documentation packages, not of ours
        from numpydoc.validate import validate
    errors = validate(f"lattice.{name}")["errors"]
    assert [text for code, text in errors if code in DOCSTRING_CHECKS] == []


def test_the_command_is_installed() -> None:
    with (ROOT / "pyproject.toml").open("rb") as file:
        project = tomllib.load(file)["project"]
    scripts = importlib.metadata.entry_points(group="console_scripts", name="lattice")
    assert {script.value for script in scripts} == {project["scripts"]["lattice"]}
    assert importlib.metadata.version(project["name"]) == project["version"]
