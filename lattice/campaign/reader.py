"""Reads a campaign file and all its members' jobs, or refuses it before anything runs."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from pydantic import ValidationError

from lattice.campaign.schema import CampaignSections, LimitsSection, OutputSection
from lattice.campaign.vary import Values, VaryError, expand, label, lay_in
from lattice.errors import InputError
from lattice.job.problems import JobErrors, Problem, did_you_mean, listed
from lattice.job.ranks import check_ranks
from lattice.job.reader import frozen, read_toml, resolve_tables
from lattice.job.resolution import resolution_cautions
from lattice.job.resolve import changed
from lattice.job.section import Section
from lattice.job.wording import plain_place, problem_from

if TYPE_CHECKING:
    from pydantic_core import ErrorDetails

    from lattice.job.schema import Job

SECTIONS = ("job", "vary", "limits", "output")
_MODELS: dict[str, type[Section]] = {"limits": LimitsSection, "output": OutputSection}


@dataclass(frozen=True)
class Member:
    """One run of a campaign.

    Parameters
    ----------
    number : int
        Counted from 0, in the order of the file.
    values : dict
        What the member differs by from the base job, by dotted key.
    digest : str
        Of its whole job as written; it tells whether the job has changed since it ran.
    job : Job or None
        Checked and resolved; None where only another member was asked for.
    """

    number: int
    values: Values
    digest: str
    job: Job | None = None

    @property
    def label(self) -> str:
        """Its values in one line."""
        return label(self.values)


@dataclass(frozen=True)
class Campaign:
    """A campaign file, checked.

    Parameters
    ----------
    file : Path
        Where it stands.
    folder : Path
        Where its members run.
    limits : LimitsSection
    output : OutputSection
    members : tuple of Member
        In the order of their numbers.
    cautions : tuple of str
        What the user should be warned of.
    """

    file: Path
    folder: Path
    limits: LimitsSection
    output: OutputSection
    members: tuple[Member, ...]
    cautions: tuple[str, ...] = field(default=())

    @property
    def keys(self) -> tuple[str, ...]:
        """The keys that vary."""
        return tuple(self.members[0].values)


def read_campaign(
    path: str | os.PathLike[str],
    folder: str | None = None,
    only: int | None = None,
    limits: Mapping[str, Any] | None = None,
) -> Campaign:
    """Read a campaign file; check and resolve the job of every member.

    Not collective: call it on one rank.

    Parameters
    ----------
    path : path-like
        The TOML file.
    folder : str, optional
        The campaign's folder, instead of the file's own.
    only : int, optional
        The one member whose job is resolved; all unless given.
    limits : mapping, optional
        Limits that replace those of the file, by key.

    Returns
    -------
    Campaign

    Raises
    ------
    InputError
        With file, key, requirement, value and remedy; the first member that is refused is named.
    """
    file = Path(path)
    tables = read_toml(file, "campaign file")
    sections = _sections(tables, file)
    if limits:
        sections = changed(sections, limits=changed(sections.limits, **limits))
    base, beside = _base(tables, file)
    members = _members(tables, base, file)
    if only is not None and not 0 <= only < len(members):
        raise InputError(
            f"must be a member of the campaign, 0 to {len(members) - 1}, got {only}", key="--member"
        )
    campaign = Campaign(
        file=file,
        folder=Path(folder or sections.output.folder or f"runs/{file.stem}"),
        limits=sections.limits,
        output=sections.output,
        members=members,
    )
    return _resolved(campaign, base, beside, only)


def read_folder(path: str | os.PathLike[str], folder: str | None = None) -> Path:
    """Return the folder of a campaign by its file, whose members are not looked at."""
    file = Path(path)
    sections = _sections(read_toml(file, "campaign file"), file)
    return Path(folder or sections.output.folder or f"runs/{file.stem}")


def _sections(tables: dict[str, Any], file: Path) -> CampaignSections:
    for name in tables:
        if name not in SECTIONS:
            hint = did_you_mean(name, SECTIONS) or _belongs_to_job(name)
            raise InputError(
                f"is not a key of a campaign file{hint}; known are {listed(SECTIONS)}",
                file=str(file),
                key=name,
            )
    try:
        return CampaignSections.model_validate(
            frozen({name: tables[name] for name in _MODELS if name in tables})
        )
    except ValidationError as error:
        found = [_problem(details) for details in error.errors(include_url=False)]
        raise JobErrors(found, str(file)) from None


def _belongs_to_job(name: str) -> str:
    from lattice.job.schema import Job

    return f", it is one of a job; write [job.{name}]" if name in Job.model_fields else ""


def _problem(details: ErrorDetails) -> Problem:
    place = plain_place(details["loc"])
    if details["type"] == "extra_forbidden" and len(place) == 2:
        known = _MODELS[str(place[0])].model_fields
        message = (
            f"is not a key of [{place[0]}]{did_you_mean(str(place[1]), known)}; known are {listed(known)}"
        )
        return Problem(f"{place[0]}.{place[1]}", message)
    return problem_from(details)


def _base(tables: dict[str, Any], file: Path) -> tuple[dict[str, Any], Path]:
    """Return the base job's tables and the file that its paths are relative to."""
    given = tables.get("job")
    if isinstance(given, dict):
        return given, file
    if not isinstance(given, str) or not given:
        raise InputError(
            'must be the path of a job file, or a job as tables; write job = "film.toml" at the top, or'
            " [job.law] and the other sections of a job",
            file=str(file),
            key="job",
        )
    candidates = [file.parent / Path(given).expanduser(), Path(given).expanduser()]
    for candidate in candidates:
        if candidate.is_file():
            return read_toml(candidate), candidate
    places = listed(dict.fromkeys(str(candidate.parent.absolute()) for candidate in candidates))
    raise InputError(
        f"must be an existing file, got '{given}'; looked in {places}", file=str(file), key="job"
    )


def _members(tables: dict[str, Any], base: dict[str, Any], file: Path) -> tuple[Member, ...]:
    if "vary" not in tables:
        raise InputError(
            "is required; add [[vary]] and below it what varies, as in start.seed = [0, 1, 2]",
            file=str(file),
            key="vary",
        )
    try:
        rows = expand(tables["vary"])
        for key in rows[0]:
            _judge_key(key)
        return tuple(
            Member(number, values, _digest(lay_in(base, values))) for number, values in enumerate(rows)
        )
    except VaryError as error:
        raise InputError(error.message, file=str(file), key=error.key) from None


def _judge_key(key: str) -> None:
    if key == "output" or key.startswith("output.folder"):
        raise VaryError(key, "cannot vary: the campaign gives every member its own folder; remove it")


def _digest(tables: dict[str, Any]) -> str:
    text = json.dumps({**tables, "output": None}, sort_keys=True, default=str)
    return hashlib.sha256(text.encode()).hexdigest()[:16]


def _resolved(campaign: Campaign, base: dict[str, Any], beside: Path, only: int | None) -> Campaign:
    """Return the campaign with its members' jobs, checked one by one."""
    members, cautions = list(campaign.members), dict[str, list[int]]()
    for member in campaign.members if only is None else [campaign.members[only]]:
        job, warned = _job_of(member, base, beside, campaign)
        members[member.number] = replace(member, job=job)
        for text in warned:
            cautions.setdefault(text, []).append(member.number)
    said = tuple(f"{_numbers(numbers, len(members))}{text}" for text, numbers in cautions.items())
    return replace(campaign, members=tuple(members), cautions=said)


def _job_of(
    member: Member, base: dict[str, Any], beside: Path, campaign: Campaign
) -> tuple[Job, tuple[str, ...]]:
    try:
        job, cautions = resolve_tables(lay_in(base, member.values), beside)
        check_ranks(job, campaign.limits.ranks)
    except JobErrors as error:
        raise _refusal(member, campaign, error.problems) from None
    except InputError as error:
        key = "limits.ranks" if error.key == "--ranks" else error.key
        raise _refusal(member, campaign, [Problem(key, error.message)]) from None
    return job, (*cautions, *resolution_cautions(job))


def _refusal(member: Member, campaign: Campaign, problems: Any) -> JobErrors:
    """Return what is wrong with a member's job, each line of which names the member."""
    return JobErrors(problems, f"{campaign.file}: member {member.number} ({member.label})")


def _numbers(numbers: list[int], members: int) -> str:
    if len(numbers) == members:
        return "all members: "
    shown = ", ".join(str(number) for number in numbers[:5])
    return f"member {shown}{' and others' if len(numbers) > 5 else ''}: "
