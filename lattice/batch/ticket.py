"""What a run was submitted with, kept in its folder: enough to start every further leg of it."""

from __future__ import annotations

import getpass
import json
import socket
from collections.abc import Sequence
from dataclasses import asdict, dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from lattice.batch.site import Site
from lattice.batch.sites import make_site
from lattice.errors import InputError
from lattice.store.replacement import write_text_whole

NAME, INPUT, LOG = "submit.json", "input.toml", "run.log"


@dataclass(frozen=True)
class Ticket:
    """A run as submitted.

    Parameters
    ----------
    name : str
        What the scheduler's lists call it.
    command : tuple of str
        The subcommand of `lattice` and its arguments, but for ranks and launcher.
    petsc_options : tuple of str
        As typed after `--`.
    site_name : str
    site : Site
        As it was when the run was submitted.
    queue : str
        Queue or partition, empty for the scheduler's own choice.
    ranks : tuple of int
        MPI ranks of each leg; the last holds for all that follow.
    seconds : int or None
        Wall clock of one leg, None without limit.
    legs : int
        Most legs.
    core_hours : float or None
        Most core hours over all legs, None without limit.
    memory_mb_per_rank : int or None
        Memory to ask the scheduler for, None for its own rule.
    after : str
        Folder of the run whose last leg this one waits for, empty where there is none.
    inputs : dict
        Where the job came from: file, overrides, checksum.
    made : dict
        Time, host, user and version of the submission.
    """

    name: str
    command: tuple[str, ...]
    site_name: str
    site: Site
    ranks: tuple[int, ...]
    seconds: int | None
    legs: int
    queue: str = ""
    core_hours: float | None = None
    memory_mb_per_rank: int | None = None
    petsc_options: tuple[str, ...] = ()
    after: str = ""
    inputs: dict[str, Any] = field(default_factory=dict)
    made: dict[str, str] = field(default_factory=dict)

    def ranks_of(self, leg: int) -> int:
        """Return the ranks of a leg, counted from 1."""
        return self.ranks[min(leg, len(self.ranks)) - 1]

    def most_core_hours(self) -> float | None:
        """Return what all legs can use together, None without a limit."""
        if self.seconds is None:
            return self.core_hours
        cores = sum(self.site.cores(self.ranks_of(leg)) for leg in range(1, self.legs + 1))
        most = cores * self.seconds / 3600
        return most if self.core_hours is None else min(most, self.core_hours)

    def warning(self) -> int:
        """Return how many seconds before the end of a leg the run is told to stop; a quarter at most."""
        return (
            self.site.warning if self.seconds is None else max(1, min(self.site.warning, self.seconds // 4))
        )

    def arguments(self, leg: int) -> list[str]:
        """Return the arguments of `lattice` that run a leg."""
        own = [*self.command, "--ranks", str(self.ranks_of(leg))]
        if self.site.launcher and self.ranks_of(leg) > 1:
            own += ["--launcher", self.site.launcher]
        return [*own, "--", *self.petsc_options] if self.petsc_options else own


def stamp(version: str) -> dict[str, str]:
    """Return when, where, by whom and with which version a submission is made."""
    return {
        "time": now(),
        "host": socket.gethostname(),
        "user": getpass.getuser(),
        "version": version,
    }


def now() -> str:
    """Return coordinated universal time, ISO 8601."""
    return datetime.now(UTC).isoformat(timespec="seconds")


def write_ticket(folder: Path, ticket: Ticket) -> None:
    """Keep a ticket in a run's folder."""
    site = ticket.site.model_dump(mode="json", exclude_defaults=True)
    content = asdict(ticket) | {"site": site}
    write_text_whole(folder / NAME, json.dumps(content, indent=2, ensure_ascii=False) + "\n")


def read_ticket(folder: Path) -> Ticket:
    """Return the ticket of a run's folder.

    Raises
    ------
    InputError
        Where there is none, or it is damaged.
    """
    path = folder / NAME
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
        site = make_site(content.pop("site"), str(path))
        listed = {key: _tuple(content[key]) for key in ("command", "ranks", "petsc_options")}
        return Ticket(**{**content, **listed, "site": site})
    except FileNotFoundError:
        raise InputError("is no folder of a submitted run; check the path", file=str(folder)) from None
    except OSError as error:
        raise InputError(f"cannot be read: {error.strerror}", file=str(path)) from None
    except (ValueError, TypeError, KeyError) as error:
        raise InputError(f"is not the record of a submission: {error}", file=str(path)) from None


def _tuple(values: Sequence[Any]) -> tuple[Any, ...]:
    return tuple(values)
