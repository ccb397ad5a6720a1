"""Reads a study file, or refuses it before anything is measured."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from pydantic import ValidationError

from lattice.errors import InputError
from lattice.job.problems import JobErrors, Problem, did_you_mean, listed
from lattice.job.ranks import check_ranks
from lattice.job.reader import frozen, read_toml, resolve_tables
from lattice.job.wording import plain_place, problem_from
from lattice.study.points import Point, make_points
from lattice.study.schema import StudySection

if TYPE_CHECKING:
    from collections.abc import Mapping

    from pydantic_core import ErrorDetails

SECTIONS = ("study", "job")


@dataclass(frozen=True)
class Study:
    """A study file, checked.

    Parameters
    ----------
    file : Path
    folder : Path
        Where rows and report are kept.
    section : StudySection
    points : tuple of Point
        Smallest first.
    """

    file: Path
    folder: Path
    section: StudySection
    points: tuple[Point, ...]

    @property
    def name(self) -> str:
        """The file's name without suffix."""
        return self.file.stem

    @property
    def title(self) -> str:
        """Heading of the report."""
        return self.section.title or self.name


def read_study(
    path: str | Path,
    folder: str | None = None,
    ranks_per_node: int = 1,
    changes: Mapping[str, Any] | None = None,
) -> Study:
    """Read a study file; check and resolve the job of every point. Not collective.

    Parameters
    ----------
    path : path-like
    folder : str, optional
        Instead of the file's own.
    ranks_per_node : int
        What a number of nodes in the file means.
    changes : mapping, optional
        Keys of [study] that replace the file's.

    Raises
    ------
    InputError
        With file, key, requirement, value and remedy.
    """
    file = Path(path)
    tables = read_toml(file, "study file")
    section = _section(tables, file, dict(changes or {}))
    base = _base(tables, file)
    counts = section.ranks or tuple(n * ranks_per_node for n in section.nodes or ()) or (1, 2)
    points = make_points(section, base, sorted(set(counts)))
    for point in points:
        try:
            check_ranks(point.job, point.ranks)
        except InputError as error:
            raise InputError(error.message, file=str(file), key="study.ranks") from None
    return Study(file, study_folder(file, section, folder), section, points)


def study_folder(file: Path, section: StudySection, given: str | None) -> Path:
    """Return where a study's rows and report are kept."""
    if given is not None:
        return Path(given)
    return file.parent / section.folder if section.folder else Path("runs") / file.stem


def _section(tables: dict[str, Any], file: Path, changes: dict[str, Any]) -> StudySection:
    for name in tables:
        if name not in SECTIONS:
            raise InputError(
                f"is not a key of a study file{did_you_mean(name, SECTIONS)}; known are {listed(SECTIONS)}",
                file=str(file),
                key=name,
            )
    given = {**tables.get("study", {}), **{k: v for k, v in changes.items() if v is not None}}
    if changes.get("ranks") is not None:
        given.pop("nodes", None)
    try:
        return StudySection.model_validate(frozen(given))
    except ValidationError as error:
        found = [_problem(details) for details in error.errors(include_url=False)]
        raise JobErrors(found, str(file)) from None


def _problem(details: ErrorDetails) -> Problem:
    place = plain_place(details["loc"])
    key = ".".join(["study", *map(str, place)])
    if details["type"] == "extra_forbidden" and len(place) == 1:
        known = StudySection.model_fields
        return Problem(
            key, f"is not a key of [study]{did_you_mean(str(place[0]), known)}; known are {listed(known)}"
        )
    if details["type"] == "value_error":
        return Problem(key, str(details["ctx"]["error"]))
    found = problem_from(details)
    return Problem(key, found.message)


def _base(tables: dict[str, Any], file: Path) -> Any:
    """Return the study's base job, resolved."""
    given = tables.get("job")
    if isinstance(given, dict):
        return resolve_tables(given, file)[0]
    if not isinstance(given, str) or not given:
        raise InputError(
            'must be the path of a job file, or a job as tables; write job = "film.toml" at the top, or'
            " [job.law] and the other sections of a job",
            file=str(file),
            key="job",
        )
    path = file.parent / Path(given).expanduser()
    if not path.is_file():
        raise InputError(f"must be an existing file, got '{given}'", file=str(file), key="job")
    return resolve_tables(read_toml(path), path)[0]


def labels(points: Sequence[Point]) -> list[str]:
    """Return what the points are called."""
    return [point.label for point in points]
