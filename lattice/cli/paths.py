"""Paths given on the command line, checked before anything is read or written."""

from __future__ import annotations

import os
from pathlib import Path

from lattice.errors import InputError

STATE_NAME = "state.h5"


def state_path(given: Path) -> Path:
    """Return the state file meant by a path: the file itself, or `state.h5` of a run's folder.

    Raises
    ------
    InputError
        When there is none.
    """
    path = given / STATE_NAME if given.is_dir() else given
    if not path.is_file():
        what = f"holds no {STATE_NAME}" if given.is_dir() else "no such state file"
        raise InputError(f"{what}; check the path", file=str(given))
    return path


def writable_path(given: Path) -> Path:
    """Return a path that a file can be written to.

    Raises
    ------
    InputError
        When its folder is missing or may not be written to, or the path is a folder.
    """
    folder = given.parent
    if given.is_dir():
        raise InputError("is a folder, the name of a file is wanted", file=str(given))
    if not folder.is_dir():
        raise InputError(f"must lie in an existing folder, {folder} is none; make it first", file=str(given))
    if not os.access(folder, os.W_OK):
        raise InputError(f"cannot be written: no permission in {folder}", file=str(given))
    return given


def check_run_folder(folder: Path, replace: bool) -> None:
    """Refuse a run folder that cannot be made, or that holds a run which is not to be replaced.

    Raises
    ------
    InputError
        With the remedy.
    """
    existing = folder
    while not existing.exists() and existing != existing.parent:
        existing = existing.parent
    if not existing.is_dir():
        raise InputError(f"cannot be a folder: {existing} is a file; choose another --out", file=str(folder))
    if not os.access(existing, os.W_OK | os.X_OK):
        raise InputError(f"no permission to write in {existing}; choose another --out", file=str(folder))
    if (folder / STATE_NAME).exists() and not replace:
        raise InputError("holds an earlier run's state; choose another --out, or --force", file=str(folder))
