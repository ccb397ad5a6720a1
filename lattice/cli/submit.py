"""`lattice submit JOB`: hand a job to a site's scheduler, or run it in the background here."""

from __future__ import annotations

import argparse
import sys
import tomllib
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from lattice.errors import InputError

if TYPE_CHECKING:
    from lattice.batch.enrol import Entry
    from lattice.batch.prepare import Wishes
    from lattice.batch.site import Site
    from lattice.batch.ticket import Ticket

EPILOG = """\
A site is a TOML file NAME.toml in ./sites, ./jobs/sites or ~/.config/lattice/sites; without --site the job
runs in the background of this machine. jobs/README.md leads from a login node to a state.

A run that its wall clock stops goes on by itself in a further job ("leg"), until it has converged, stands
still, has used up its legs or core hours, or two legs in a row have made no step. Several jobs, or a
campaign file, become one job array. `lattice size JOB --site SITE` tells beforehand what a job needs.
Watch with `lattice runs`, end with `lattice cancel`.

The site's own rules on queues, files and core hours come before anything this program does. Try a job in
the short queue first.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument(
        "jobs", metavar="JOB", nargs="+", help="job files, one campaign file, or with --resume run folders"
    )
    parser.add_argument("--site", metavar="SITE", help="name or file of the site; default: this machine")
    parser.add_argument(
        "--ranks", metavar="N[,N...]", type=_ranks, help="MPI ranks; several numbers: of each leg in turn"
    )
    parser.add_argument(
        "--time", metavar="T", type=_time, help="wall clock of one leg: 1:30:00, 90m, 2-00:00:00"
    )
    parser.add_argument("--legs", metavar="N", type=_count, help="most legs of a run; default: the site's")
    parser.add_argument(
        "--core-hours", metavar="H", type=_hours, help="most core hours of a run over all legs"
    )
    parser.add_argument("--queue", metavar="NAME", help="queue or partition; default: the first that fits")
    parser.add_argument(
        "--after", metavar="ID", help="start when this job, or the run in this folder, has ended"
    )
    parser.add_argument(
        "--out", metavar="DIR", help="the run's folder; of several jobs, where their folders go"
    )
    parser.add_argument(
        "--set", metavar="SECTION.KEY=VALUE", action="append", default=[], dest="overrides",
        help="a value that replaces the job file's; may be repeated",
    )  # fmt: skip
    parser.add_argument("--at-once", metavar="N", type=_count, help="members of a study that run at once")
    parser.add_argument("--resume", action="store_true", help="add legs to runs that have ended")
    parser.add_argument(
        "--force", action="store_true", help="replace a run that has ended; it is moved aside"
    )
    parser.add_argument("--dry-run", action="store_true", help="print the script, submit nothing")
    parser.add_argument("--yes", action="store_true", help="do not ask, even where much is submitted")


def _count(text: str) -> int:
    if not text.isdigit() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"must be an integer >= 1, got '{text}'")
    return int(text)


def _ranks(text: str) -> tuple[int, ...]:
    return tuple(_count(part.strip()) for part in text.split(","))


def _time(text: str) -> int:
    from lattice.batch.duration import parse_duration

    try:
        return parse_duration(text)
    except ValueError as error:
        raise argparse.ArgumentTypeError(str(error)) from None


def _hours(text: str) -> float:
    with suppress(ValueError):
        if float(text) > 0:
            return float(text)
    raise argparse.ArgumentTypeError(f"must be a number > 0, got '{text}'")


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.batch.prepare import Wishes

    wishes = Wishes(options.ranks, options.time, options.legs, options.queue, options.core_hours)
    if options.resume:
        return _resume(options, wishes)
    entries = _entries(options, wishes)
    if len(entries) == 1:
        return _submit_one(options, entries[0])
    return _submit_study(options, entries)


def _entries(options: argparse.Namespace, wishes: Wishes) -> list[Entry]:
    from lattice.batch.prepare import check_free
    from lattice.batch.sites import load_site

    name, site = load_site(options.site)
    if options.at_once is not None:
        site = site.model_copy(update={"concurrent": options.at_once})
    campaigns = [job for job in options.jobs if _is_campaign(job)]
    if campaigns and len(options.jobs) > 1:
        raise InputError(
            "is a campaign file; submit it alone, it is a job array by itself", file=campaigns[0]
        )
    if campaigns:
        return _members(options, name, site, wishes)
    entries = [_entry(options, Path(job), name, site, wishes) for job in options.jobs]
    folders = [entry.folder for entry in entries]
    if len(set(folders)) < len(folders):
        raise InputError(
            "of several jobs must differ; rename the job files, or give each its output.folder",
            key="the folders",
        )
    for folder in folders:
        check_free(folder, options.force)
    return entries


def _is_campaign(file: str) -> bool:
    with suppress(OSError, ValueError):
        tables = tomllib.loads(Path(file).read_text(encoding="utf-8"))
        return "vary" in tables and "law" not in tables
    return False


def _entry(options: argparse.Namespace, file: Path, name: str, site: Site, wishes: Wishes) -> Entry:
    """Judge a job as `solve` does, and return it with its folder and ticket."""
    from lattice.batch.enrol import Entry, record_inputs
    from lattice.batch.prepare import new_ticket
    from lattice.batch.ticket import INPUT
    from lattice.cli.solve import warn
    from lattice.job.ranks import check_ranks
    from lattice.job.reader import load_job_with_cautions
    from lattice.job.writer import job_to_toml
    from lattice.store.versions import package_version

    job, cautions = load_job_with_cautions(file, options.overrides)
    for ranks in wishes.ranks or (1,):
        check_ranks(job, ranks)
    warn(job, cautions)
    folder = _folder(options, file, site, job.output.folder)
    command = ["solve", str(folder / INPUT), "--out", str(folder), "--resume"]
    ticket = new_ticket(file.stem, command, name, site, wishes, options.petsc_options)
    ticket = record_inputs(ticket, file, options.overrides, package_version())
    return Entry(folder, _behind(options, ticket), job_to_toml(job))


def _behind(options: argparse.Namespace, ticket: Ticket) -> Ticket:
    """Return the ticket with the folder of the run that it waits for, if it does."""
    if options.after is None or not Path(options.after).is_dir():
        return ticket
    return replace(ticket, after=str(Path(options.after).absolute()))


def _folder(options: argparse.Namespace, file: Path, site: Site, own: str | None) -> Path:
    from lattice.batch.sites import expand

    if options.out is not None:
        base = Path(options.out).absolute()
        return base if len(options.jobs) == 1 else base / file.stem
    if site.scratch is not None:
        return expand(site.scratch).absolute() / file.stem
    return Path(own or f"runs/{file.stem}").absolute()


def _members(options: argparse.Namespace, name: str, site: Site, wishes: Wishes) -> list[Entry]:
    """Return the members of a campaign that have not ended."""
    from lattice.batch.enrol import Entry, record_inputs
    from lattice.batch.prepare import further_legs, new_ticket
    from lattice.campaign.folder import CampaignFolder
    from lattice.campaign.reader import read_campaign
    from lattice.store.versions import package_version

    if options.overrides or options.petsc_options:
        raise InputError("is for job files; write it into the campaign's job", key="--set")
    file = Path(options.jobs[0]).absolute()
    campaign = read_campaign(str(file), folder=options.out)
    folder = CampaignFolder(campaign.folder.absolute())
    ended = {record.member for record in folder.records(m.number for m in campaign.members) if record.final}
    entries = []
    for member in campaign.members:
        if member.number in ended:
            continue
        command = ["campaign", str(file), "--out", str(folder.path), "--member", str(member.number)]
        ticket = new_ticket(f"{file.stem}-{member.number}", command, name, site, wishes, ())
        run = folder.member(member.number).run
        ticket = further_legs(run, record_inputs(ticket, file, (), package_version()))
        entries.append(Entry(run, ticket))
    if not entries:
        raise InputError(
            "has no member left to run; `lattice campaign FILE --report` shows them", file=str(file)
        )
    return entries


def _submit_one(options: argparse.Namespace, entry: Entry) -> int:
    from lattice.batch.enrol import submit_run
    from lattice.batch.prepare import cost_text
    from lattice.batch.render import Script, render

    if options.dry_run:
        print(render(Script(entry.ticket, entry.folder)), end="")
        return 0
    print(cost_text(entry.ticket))
    _confirm(options, entry.ticket, 1)
    job = submit_run(entry, _after(options, entry.ticket))
    _tell(job, entry.folder)
    return 0


def _submit_study(options: argparse.Namespace, entries: Sequence[Entry]) -> int:
    from lattice.batch.enrol import study_folder, study_script, submit_study
    from lattice.batch.prepare import cost_text
    from lattice.batch.render import render

    folder, name = study_folder(entries), Path(options.jobs[0]).stem
    if options.dry_run:
        print(render(study_script(folder, name, entries)), end="")
        return 0
    print(cost_text(entries[0].ticket, len(entries)))
    _confirm(options, entries[0].ticket, len(entries))
    array = submit_study(folder, name, entries, _after(options, entries[0].ticket))
    print(f"submitted as job array {array}: {len(entries)} runs, script in {folder}")
    print("the order of the runs and their folders: study.json there; watch with `lattice runs`")
    return 0


def _resume(options: argparse.Namespace, wishes: Wishes) -> int:
    from lattice.batch.enrol import submit_further
    from lattice.batch.prepare import cost_text, further_ticket
    from lattice.batch.render import Script, render
    from lattice.batch.watch import view_run

    for given in options.jobs:
        folder = Path(given).absolute()
        ticket, number = further_ticket(folder, wishes)
        view = view_run(folder)
        if view.active and not (view.outcome == "unknown" and options.force):
            raise InputError(
                f"holds a run that is {view.outcome}; wait for it, or `lattice cancel` it", file=given
            )
        if view.outcome == "converged":
            raise InputError("holds a run that has converged; there is nothing to go on with", file=given)
        if options.dry_run:
            print(render(Script(ticket, folder, number)), end="")
            continue
        print(cost_text(ticket))
        _confirm(options, ticket, 1)
        _tell(submit_further(folder, ticket, number, _after(options, ticket)), folder)
    return 0


def _after(options: argparse.Namespace, ticket: Ticket) -> str | None:
    """Return the id of the job to wait for: given, or the newest of the run in a folder."""
    from lattice.batch.legs import LegLog, newest_job
    from lattice.batch.ticket import read_ticket

    given: str | None = options.after
    if given is None:
        return None
    folder = Path(given)
    if not folder.is_dir():
        return given
    job = newest_job(LegLog(folder).events())
    if job and (site := read_ticket(folder).site_name) != ticket.site_name:
        raise InputError(f"must be a run of the same site, {given} is one of {site}", key="--after")
    if not job:
        raise InputError(f"must be a job's id or the folder of a submitted run, got '{given}'", key="--after")
    return job


def _confirm(options: argparse.Namespace, ticket: Ticket, runs: int) -> None:
    """Ask before a study, or a run that may cost much, is handed to a queue."""
    most = ticket.most_core_hours()
    local = ticket.site.scheduler == "local"
    small = runs == 1 and (local or (most is not None and most < ticket.site.confirm_core_hours))
    if options.yes or small:
        return
    if not sys.stdin.isatty():
        raise InputError(
            "is needed where nobody can be asked: read what is submitted above, then add it", key="--yes"
        )
    answer = input(
        "Do the site's rules allow this, and have you tried one in the short queue? Submit [y/N]? "
    )
    if answer.strip().lower() not in ("y", "yes"):
        raise InputError("nothing is submitted")


def _tell(job: str, folder: Path) -> None:
    print(f"submitted as job {job}; files in {folder}")
    print(f"watch with `lattice runs --follow {_shown(folder)}`, end with `lattice cancel {_shown(folder)}`")


def _shown(folder: Path) -> str:
    import shlex

    with suppress(ValueError):
        folder = folder.relative_to(Path.cwd())
    return shlex.quote(str(folder))
