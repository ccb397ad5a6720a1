"""Scripts for the scheduler, from templates in which every value is quoted for the shell."""

from __future__ import annotations

import re
import shlex
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from lattice.batch.duration import format_duration
from lattice.batch.ticket import LOG, Ticket
from lattice.errors import InputError

TEMPLATES = Path(__file__).parent / "templates"
LONGEST_NAME = 15
"""Letters of a job's name; older PBS takes no more."""


@dataclass(frozen=True)
class Script:
    """What a script is for.

    Parameters
    ----------
    ticket : Ticket
    folder : Path
        The run's folder, or the study's; absolute.
    leg : int
        Which leg, counted from 1.
    members : int or None
        Members of a job array, None for a single run.
    """

    ticket: Ticket
    folder: Path
    leg: int = 1
    members: int | None = None

    @property
    def path(self) -> Path:
        """Where the script is kept."""
        return self.folder / ("study.sh" if self.members is not None else f"leg-{self.leg}.sh")

    def arguments(self) -> list[str]:
        """Return what `lattice` is called with."""
        if self.members is not None:
            return ["leg", str(self.folder), "--study"]
        return ["leg", str(self.folder), "--number", str(self.leg)]


class Verbatim(str):
    """Text that has been checked, or is no value at all, and goes into a script as it is."""


def quoted(value: Any) -> str:
    """Return a value as one word of a shell's command.

    Raises
    ------
    InputError
        Where it has a line break or another character that cannot be printed.
    """
    if isinstance(value, Verbatim):
        return str(value)
    text = str(value)
    if not text.isprintable():
        raise InputError(f"must be one line of printable text to go into a script, got {text!r}")
    return shlex.quote(text)


def render(script: Script) -> str:
    """Return the text of a script.

    Raises
    ------
    InputError
        Where a value cannot stand in it.
    """
    import jinja2

    environment = jinja2.Environment(  # noqa: S701 - a shell's script: `finalize` quotes every value
        loader=jinja2.FileSystemLoader(TEMPLATES),
        undefined=jinja2.StrictUndefined,
        finalize=quoted,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    template = environment.get_template(f"{script.ticket.site.scheduler}.sh.template")
    return template.render(**_values(script))


def _values(script: Script) -> dict[str, Any]:
    ticket, site = script.ticket, script.ticket.site
    ranks = ticket.ranks_of(script.leg)
    return {
        "name": Verbatim(job_name(ticket.name)),
        "folder": script.folder,
        "log": _log(script),
        "run_log": script.folder / LOG,
        "ranks": ranks,
        "nodes": site.nodes(ranks),
        "chunks": Verbatim(_chunks(ticket, ranks)),
        "time": Verbatim(format_duration(ticket.seconds or 0)),
        "warning": ticket.warning(),
        "memory": ticket.memory_mb_per_rank,
        "queue": ticket.queue,
        "last_member": None if script.members is None else script.members - 1,
        "python": site.python or sys.executable,
        "arguments": script.arguments(),
        "site": site,
        "directives": [Verbatim(line) for line in site.directives],
        "study": script.members is not None,
    }


def job_name(name: str) -> str:
    """Return a name that every scheduler takes.

    Examples
    --------
    >>> job_name("wide film, 2nd try"), job_name("2d")
    ('wide-film-2nd-t', 'run-2d')
    """
    plain = re.sub(r"[^A-Za-z0-9]+", "-", name).strip("-") or "run"
    return (plain if plain[0].isalpha() else f"run-{plain}")[:LONGEST_NAME].rstrip("-")


def _log(script: Script) -> Any:
    """Return the file for the scheduler's own messages, with the letters it would replace written twice."""
    path = str(script.folder / LOG)
    if script.ticket.site.scheduler == "slurm":
        if "\\" in path:
            # Slurm then takes the name as it stands, and would not replace what is written twice.
            raise InputError("must have no backslash in its path for Slurm; choose another --out", file=path)
        return path.replace("%", "%%")
    if script.ticket.site.scheduler == "pbs" and not re.fullmatch(r"[\w./+@-]+", path, re.ASCII):
        raise InputError(
            "must have only letters, digits and . _ + @ - in its path for PBS; choose another --out",
            file=path,
        )
    return path


def _chunks(ticket: Ticket, ranks: int) -> str:
    """Return PBS's selection: whole nodes' worth of ranks, then the rest."""
    site = ticket.site
    each = min(ranks, site.ranks_per_node or site.cores_per_node or ranks)
    full, rest = divmod(ranks, each)
    parts = [(full, each)] + ([(1, rest)] if rest else [])
    texts = []
    for count, size in parts:
        cores = site.cores_per_node if site.whole_nodes and site.cores_per_node else size
        memory = f":mem={ticket.memory_mb_per_rank * size}mb" if ticket.memory_mb_per_rank else ""
        texts.append(f"{count}:ncpus={cores}:mpiprocs={size}{memory}")
    return "+".join(texts)
