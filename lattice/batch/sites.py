"""Finds site files, the user's and the project's, and reads them."""

from __future__ import annotations

import os
import re
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from lattice.batch.site import LOCAL, Queue, Site
from lattice.errors import InputError
from lattice.job.problems import JobErrors, Problem, did_you_mean, listed
from lattice.job.wording import key_text, problem_from, value_text


def site_folders(environ: Mapping[str, str] | None = None) -> tuple[Path, ...]:
    """Return where site files are looked for, the first that has one counts: project before user."""
    environ = os.environ if environ is None else environ
    home = Path(environ.get("XDG_CONFIG_HOME") or Path(environ.get("HOME", "")) / ".config")
    return Path("sites"), Path("jobs/sites"), home / "lattice" / "sites"


def site_files(environ: Mapping[str, str] | None = None) -> dict[str, Path]:
    """Return the site files that are found, by name."""
    found: dict[str, Path] = {}
    for folder in site_folders(environ):
        for path in sorted(folder.glob("*.toml")):
            found.setdefault(path.stem, path)
    return found


def load_site(given: str | None, environ: Mapping[str, str] | None = None) -> tuple[str, Site]:
    """Return name and content of the site meant: a file's path, the name of one, or this machine.

    Raises
    ------
    InputError
        When there is none, or it is not a site file.
    """
    if given is None:
        return "local", LOCAL
    path = Path(given)
    if path.suffix == ".toml" or "/" in given:
        return path.stem, read_site(path)
    files = site_files(environ)
    if given in files:
        return given, read_site(files[given])
    if given == "local":
        return "local", LOCAL
    places = ", ".join(str(folder) for folder in site_folders(environ))
    known = ["local", *files]
    raise InputError(
        f"must be a site, got '{given}'{did_you_mean(given, known)}; known are {listed(known)};"
        f" write {given}.toml in one of {places}",
        key="--site",
    )


def read_site(path: Path) -> Site:
    """Return the site in a file.

    Raises
    ------
    InputError
        With all that is wrong.
    """
    try:
        tables = tomllib.loads(path.read_bytes().decode("utf-8"))
    except OSError as error:
        raise InputError(f"cannot be read: {error.strerror}; check the path", file=str(path)) from None
    except (UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise InputError(f"is not valid TOML: {error}", file=str(path)) from None
    return make_site(tables, str(path))


def make_site(tables: Mapping[str, Any], source: str) -> Site:
    """Return the site that tables hold, as `read_site`; `source` names them in messages."""
    try:
        return Site.model_validate(_frozen(dict(tables)))
    except ValidationError as error:
        problems = [_problem(details) for details in error.errors(include_url=False)]
        raise JobErrors(problems, source) from None


def _problem(details: ErrorDetails) -> Problem:
    place = [part for part in details["loc"] if part != "[key]"]
    if details["type"] == "extra_forbidden":
        model: type[BaseModel] = Queue if len(place) > 1 else Site
        known = list(model.model_fields)
        where = "a site file" if len(place) == 1 else f"[{key_text(place[:-1])}]"
        name = str(place[-1])
        return Problem(
            key_text(place), f"is not a key of {where}{did_you_mean(name, known)}; known are {listed(known)}"
        )
    if details["type"] == "missing":
        return Problem(key_text(place), f"is required; add {place[-1]} = ...")
    if details["type"] == "value_error":
        return Problem(key_text(place), str(details["ctx"]["error"]))
    if details["type"] == "int_type" and isinstance(details["input"], str):
        return Problem(key_text(place), f"must be an integer, got {value_text(details['input'])}")
    return problem_from(details)


def _frozen(value: Any) -> Any:
    if isinstance(value, list):
        return tuple(_frozen(item) for item in value)
    if isinstance(value, dict):
        return {key: _frozen(item) for key, item in value.items()}
    return value


def expand(folder: str) -> Path:
    """Return a folder with ~ and the variables of the environment filled in.

    Raises
    ------
    InputError
        Where a variable is not set.
    """
    text = os.path.expandvars(folder)
    left = re.search(r"\$\{?(\w+)", text)
    if left:
        raise InputError(f"names the variable {left[1]}, which is not set: '{folder}'", key="scratch")
    return Path(text).expanduser()
