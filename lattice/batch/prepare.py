"""From what the user asks for to a ticket: queue, limits, what it may cost, whether the folder is free."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from lattice.batch.duration import format_duration
from lattice.batch.legs import LegLog, of_kind
from lattice.batch.site import Queue, Site
from lattice.batch.ticket import Ticket, read_ticket
from lattice.batch.watch import REPLACED, view_run
from lattice.errors import InputError
from lattice.job.problems import did_you_mean, listed

OF_A_RUN = (
    "state.h5", "reference.h5", "summary.json", "steps.jsonl", "legs.jsonl", "submit.json", "input.toml",
    "job.toml", "field.png", "run.log",
)  # fmt: skip


@dataclass(frozen=True)
class Wishes:
    """What the user asks for on the command line; None where nothing is said.

    Parameters
    ----------
    ranks : tuple of int or None
        Of each leg.
    seconds, legs : int or None
        Wall clock of one leg, most legs.
    queue : str or None
    core_hours : float or None
        Most over all legs.
    """

    ranks: tuple[int, ...] | None = None
    seconds: int | None = None
    legs: int | None = None
    queue: str | None = None
    core_hours: float | None = None


def new_ticket(
    name: str,
    command: Sequence[str],
    site_name: str,
    site: Site,
    wishes: Wishes,
    petsc_options: Sequence[str],
) -> Ticket:
    """Return the ticket of a new run.

    Raises
    ------
    InputError
        Where the site's limits are exceeded, or a wall clock is wanted and not given.
    """
    seconds = wishes.seconds or site.time
    if seconds is None and site.scheduler != "local":
        raise InputError(
            f"is required: {site_name} has no time of its own; give the wall clock of a leg", key="--time"
        )
    ticket = Ticket(
        name=name,
        command=tuple(command),
        petsc_options=tuple(petsc_options),
        site_name=site_name,
        site=site,
        ranks=wishes.ranks or (1,),
        seconds=seconds,
        legs=wishes.legs or site.legs,
        core_hours=wishes.core_hours,
    )
    return replace(ticket, queue=choose_queue(ticket, wishes.queue))


def further_ticket(folder: Path, wishes: Wishes) -> tuple[Ticket, int]:
    """Return the ticket of a run that goes on, and the number of its next leg.

    Raises
    ------
    InputError
        Where the folder holds no submitted run.
    """
    old, events = read_ticket(folder), LegLog(folder).events()
    used = len(of_kind(events, "began"))
    number = 1 + max((int(event.get("leg") or 0) for event in of_kind(events, "submitted")), default=0)
    ranks = old.ranks
    if wishes.ranks is not None:
        ranks = tuple(old.ranks_of(leg) for leg in range(1, number)) + wishes.ranks
    ticket = replace(
        old,
        ranks=ranks,
        seconds=wishes.seconds or old.seconds,
        legs=used + (wishes.legs or old.site.legs),
        core_hours=wishes.core_hours or old.core_hours,
    )
    return replace(ticket, queue=choose_queue(ticket, wishes.queue or old.queue or None)), number


def further_legs(folder: Path, ticket: Ticket) -> Ticket:
    """Return a ticket whose legs come on top of those that a folder's run has used.

    Raises
    ------
    InputError
        Where that run is active.
    """
    view = view_run(folder)
    if view.outcome in ("running", "waiting"):
        raise InputError(
            f"holds a run that is {view.outcome}; wait for it, or `lattice cancel` it", file=str(folder)
        )
    return replace(ticket, legs=ticket.legs + len(of_kind(LegLog(folder).events(), "began")))


def choose_queue(ticket: Ticket, wanted: str | None) -> str:
    """Return the queue wanted, else the site's first that takes the ticket; empty where the site names none.

    Raises
    ------
    InputError
        Where none takes it, with what each one's limit is.
    """
    queues = ticket.site.queues
    if wanted is not None and queues and wanted not in queues:
        raise InputError(
            f"must be a queue of the site, got '{wanted}'{did_you_mean(wanted, queues)}; known are"
            f" {listed(queues)}",
            key="--queue",
        )
    if not queues:
        return wanted or ""
    candidates = {wanted: queues[wanted]} if wanted is not None else queues
    complaints = {name: _complaint(ticket, queue) for name, queue in candidates.items()}
    for name, complaint in complaints.items():
        if not complaint:
            return name
    told = "; ".join(f"{name} {complaint}" for name, complaint in complaints.items())
    raise InputError(f"fits no queue of {ticket.site_name}: {told}", key="--queue")


def _complaint(ticket: Ticket, queue: Queue) -> str:
    most = max(ticket.ranks)
    if queue.max_time is not None and ticket.seconds is not None and ticket.seconds > queue.max_time:
        return f"takes at most {format_duration(queue.max_time)}, wanted is {format_duration(ticket.seconds)}"
    if queue.max_ranks is not None and most > queue.max_ranks:
        return f"takes at most {queue.max_ranks} ranks, wanted are {most}"
    nodes = ticket.site.nodes(most)
    if queue.max_nodes is not None and nodes > queue.max_nodes:
        return f"takes at most {queue.max_nodes} nodes, {most} ranks need {nodes}"
    return ""


def check_free(folder: Path, force: bool) -> None:
    """Refuse a folder where a run is active or has ended, unless told otherwise.

    Raises
    ------
    InputError
        With the remedy.
    """
    if not folder.exists():
        return
    view = view_run(folder)
    if view.outcome in ("running", "waiting"):
        raise InputError(
            f"holds a run that is {view.outcome} (job {view.job or 'of this machine'}); `lattice cancel` it,"
            " or choose another --out",
            file=str(folder),
        )
    if view.outcome == "unknown" and not force:
        raise InputError(
            f"holds a run that may be active: {view.reason}; ask again later, or --force", file=str(folder)
        )
    if view.outcome not in ("empty",) and not force:
        raise InputError(
            f"holds a run that is {view.outcome}; `lattice submit --resume` goes on with it, --force replaces"
            " it, or choose another --out",
            file=str(folder),
        )


def set_aside(folder: Path) -> None:
    """Move the files of an earlier run into a folder of their own, in the place of what is there."""
    earlier = [folder / name for name in OF_A_RUN if (folder / name).exists()]
    if not earlier:
        return
    kept = folder / REPLACED
    kept.mkdir(exist_ok=True)
    for path in earlier:
        path.replace(kept / path.name)


def cost_text(ticket: Ticket, runs: int = 1) -> str:
    """Return in words what is submitted and what it can cost at most."""
    site, ranks = ticket.site, sorted(set(ticket.ranks))
    counts = ", ".join(str(count) for count in ranks)
    where = f"{ticket.site_name}{f' ({ticket.queue})' if ticket.queue else ''}"
    time = "no limit of time" if ticket.seconds is None else f"{format_duration(ticket.seconds)} a leg"
    nodes = site.nodes(ranks[-1])
    size = f"{counts} rank(s) on {nodes} node(s)"
    most = ticket.most_core_hours()
    cost = "" if most is None else f": at most {most * runs:.4g} core hours"
    what = f"{ticket.name}" if runs == 1 else f"{runs} runs, {site.concurrent} at once, each"
    return f"{what} on {where}: {size}, {time}, at most {ticket.legs} leg(s){cost}"
