"""Reads a job file into a `Job`, or refuses it with every reason at once."""

from __future__ import annotations

import os
import re
import tomllib
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from lattice.errors import FormulaError, InputError
from lattice.job.checks import judge, judge_forcing, judge_law_section
from lattice.job.overrides import lay_over
from lattice.job.problems import Findings, JobErrors, Problem
from lattice.job.resolve import changed, fill_from_state, fill_in, find_files
from lattice.job.schema import Job
from lattice.job.wording import problems_from


def load_job(path: str | os.PathLike[str], overrides: Sequence[str] = ()) -> Job:
    """Read, check and resolve a job file. Not collective: call it on one rank.

    Parameters
    ----------
    path : str or path
        The TOML file.
    overrides : sequence of str
        Each `section.key=value`, laid over the file.

    Returns
    -------
    Job
        With every default filled in, see `Job`.

    Raises
    ------
    JobErrors
        An InputError with all that is wrong, one problem per line.
    """
    job, _ = load_job_with_cautions(path, overrides)
    return job


def load_job_with_cautions(
    path: str | os.PathLike[str], overrides: Sequence[str] = (), folder: str | None = None
) -> tuple[Job, tuple[str, ...]]:
    """Return the job of `load_job` and what the user should be warned of, one text each.

    Parameters
    ----------
    path, overrides
        As for `load_job`.
    folder : str, optional
        The run's folder, instead of the job's own.
    """
    tables, overridden = lay_over(read_toml(Path(path)), overrides)
    job, cautions = resolve_tables(tables, Path(path), overridden)
    if folder is not None:
        job = changed(job, output=changed(job.output, folder=folder))
    return job, cautions


def resolve_tables(
    tables: dict[str, Any], file: Path, overridden: Sequence[str] = ()
) -> tuple[Job, tuple[str, ...]]:
    """Check and resolve a job given as tables; return it with what the user should be warned of.

    Parameters
    ----------
    tables : dict
        As TOML has them.
    file : Path
        Where they stand; files that the job names are looked for beside it.
    overridden : sequence of str
        Keys given on the command line, which messages name as the place.

    Raises
    ------
    JobErrors
        With all that is wrong.
    """
    try:
        return _resolve(tables, file)
    except _Refused as refused:
        raise JobErrors(refused.problems, str(file), overridden) from None


class _Refused(Exception):
    def __init__(self, problems: Sequence[Problem]) -> None:
        self.problems = tuple(problems)


def _resolve(tables: dict[str, Any], file: Path) -> tuple[Job, tuple[str, ...]]:
    job = _validated(tables)
    findings = Findings()
    judge_law_section(job, findings)
    job = find_files(job, file.parent, findings)
    _raise_any(findings)
    law = _law(job)
    findings = judge(job, law)
    _raise_any(findings)
    job = fill_from_state(job, law, findings)
    _raise_any(findings)
    job = fill_in(job, law, file)
    judge_forcing(job, law, findings)
    _raise_any(findings)
    return job, tuple(findings.cautions)


def _validated(tables: dict[str, Any]) -> Job:
    try:
        return Job.model_validate(frozen(tables))
    except ValidationError as error:
        raise _Refused(problems_from(error.errors(include_url=False))) from None


def _law(job: Job) -> Any:
    key = "law.name" if job.law.name is not None else "law.equations"
    try:
        return job.make_law()
    except FormulaError as error:
        raise _Refused([Problem(key, str(error))]) from None
    except InputError as error:
        raise _Refused([_law_problem(error, key)]) from None


def _law_problem(error: InputError, key: str) -> Problem:
    """Return a law's own complaint, with the key it names moved to where keys stand."""
    named = re.match(r"(law\.\S+) (.*)", error.message, re.DOTALL)
    if named:
        return Problem(named[1], named[2])
    return Problem(error.key or key, error.message)


def _raise_any(findings: Findings) -> None:
    if findings.problems:
        raise _Refused(findings.problems)


def read_toml(path: Path, what: str = "job file") -> dict[str, Any]:
    """Return the tables of a TOML file; `what` is the kind of file that messages name."""
    try:
        text = path.read_bytes().decode("utf-8")
        return tomllib.loads(text)
    except FileNotFoundError:
        raise InputError(f"no such {what}; check the path", file=str(path)) from None
    except IsADirectoryError:
        raise InputError(f"is a folder, a {what} is wanted", file=str(path)) from None
    except OSError as error:
        raise InputError(f"cannot be read: {error.strerror}", file=str(path)) from None
    except UnicodeDecodeError:
        raise InputError("must be text in UTF-8; save it so", file=str(path)) from None
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"is not valid TOML: {error}", file=str(path)) from None


def frozen(value: Any) -> Any:
    """Return TOML's lists as tuples, which frozen models hold."""
    if isinstance(value, list):
        return tuple(frozen(item) for item in value)
    if isinstance(value, dict):
        return {key: frozen(item) for key, item in value.items()}
    return value
