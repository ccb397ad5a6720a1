"""`lattice campaign FILE`: run many starts from one file, and put their outcomes together."""

from __future__ import annotations

import argparse
import json
import sys
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.batch.codes import CONVERGED, FAILED, INTERRUPTED, NOT_CONVERGED, STOPPED_EARLY
from lattice.errors import InputError, LatticeError

if TYPE_CHECKING:
    from lattice.campaign.folder import CampaignFolder, Record
    from lattice.campaign.reader import Campaign
    from lattice.campaign.run import CampaignResult
    from lattice.campaign.tally import Row, Tally

EPILOG = """\
A campaign file names a base job and what varies, for instance
  job = "film-first.toml"
  [[vary]]
  start.seed = { from = 0, to = 19 }
  [[vary]]
  box.length_x = [21.0, 22.0, 23.0]
  [limits]
  at_once = 2
Keys of one [[vary]] table vary together; several tables are combined in every way.

Every member runs as `lattice solve` in its own folder below the campaign's, which also holds table.txt,
outcomes.jsonl, campaign.json and states.png. Ctrl-C, SIGTERM or SIGUSR1 stops all members, their states
kept; the same command goes on, also after a kill. Members that have ended are not run again.

exit codes: 0 all members ended, some with a state; 2 refused input; 3 all ended, none with a state;
4 stopped with members still to run: the same command goes on; 70 internal failure, or every member failed.
With --member those of `lattice solve`.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("file", metavar="FILE", help="a campaign file; with --report its folder will do, too")
    parser.add_argument("--list", action="store_true", help="show the members, run none")
    parser.add_argument("--report", action="store_true", help="make tables and picture from files, run none")
    parser.add_argument(
        "--json", action="store_true", help="with --list or --report: print JSON, for a script"
    )
    parser.add_argument("--member", metavar="K", type=_number, help="run member K only, for a job array")
    parser.add_argument("--out", metavar="DIR", help="the campaign's folder, instead of output.folder")
    parser.add_argument(
        "--ranks", metavar="N", type=_count, help="ranks of a member, instead of limits.ranks"
    )
    parser.add_argument(
        "--at-once", metavar="N", type=_count, help="members at a time, instead of limits.at_once"
    )
    parser.add_argument(
        "--retry", action="store_true", help="run members again that failed or were stopped at their limit"
    )
    parser.add_argument("--force", action="store_true", help="run members again whose job has changed")
    parser.add_argument(
        "--launcher",
        metavar="COMMAND",
        help="what starts the ranks of a member; default: LATTICE_LAUNCHER, else mpiexec",
    )


def _number(text: str) -> int:
    if not text.isdigit():
        raise argparse.ArgumentTypeError(f"must be the number of a member, from 0, got '{text}'")
    return int(text)


def _count(text: str) -> int:
    if not text.isdigit() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"must be an integer >= 1, got '{text}'")
    return int(text)


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    _check_options(options)
    if options.report:
        return _report(options)
    _check_launch()
    campaign = _read(options)
    if options.list:
        return _list(options, campaign)
    _check_machine(options, campaign)
    _warn(campaign)
    from lattice.campaign.run import Choices, run_campaign

    choices = Choices(retry=options.retry, force=options.force, launcher=options.launcher)
    result = run_campaign(campaign, _say, choices, only=options.member)
    if options.member is not None:
        return _conclude_member(campaign, options.member)
    return _conclude(campaign, result)


def _check_options(options: argparse.Namespace) -> None:
    chosen = [name for name in ("list", "report") if getattr(options, name)]
    chosen += ["member"] if options.member is not None else []
    if len(chosen) > 1:
        raise InputError(f"excludes --{chosen[1]}; give one of them", key=f"--{chosen[0]}")
    if options.json and not (options.list or options.report):
        raise InputError("is for --list and --report; add one of them", key="--json")


def _check_launch() -> None:
    from lattice.environment import find_launch

    launch = find_launch()
    if launch is not None and launch.ranks > 1:
        raise InputError(
            f"starts the ranks of its members itself, but {launch.launcher} started {launch.ranks} of it;"
            " call it without a launcher, or name that with --launcher",
            key="campaign",
        )


def _read(options: argparse.Namespace) -> Campaign:
    from lattice.campaign.reader import read_campaign

    limits: dict[str, Any] = {}
    if options.ranks is not None:
        limits["ranks"] = options.ranks
    if options.at_once is not None:
        limits["at_once"] = options.at_once
    return read_campaign(options.file, folder=options.out, only=options.member, limits=limits)


def _check_machine(options: argparse.Namespace, campaign: Campaign) -> None:
    """Refuse more ranks than the machine bears, and a launcher that is not there, before anything runs."""
    from lattice.cli.launch import check_crowd, find_launcher, is_oversubscribed

    at_once = 1 if options.member is not None else min(campaign.limits.at_once, len(campaign.members))
    ranks = at_once * campaign.limits.ranks
    check_crowd(ranks)
    if is_oversubscribed(ranks):
        print(f"note: {ranks} ranks share fewer cores, and will be slow", file=sys.stderr)
    if campaign.limits.ranks > 1:
        find_launcher(options.launcher)


def _warn(campaign: Campaign) -> None:
    for caution in campaign.cautions:
        print(f"caution: {caution}", file=sys.stderr, flush=True)


def _say(text: str) -> None:
    """Print a line of progress; a terminal that has gone away does not end the members."""
    with suppress(OSError):
        print(text, flush=True)


def _list(options: argparse.Namespace, campaign: Campaign) -> int:
    """Show the members, as many as there are."""
    from lattice.campaign.folder import CampaignFolder
    from lattice.campaign.room import MB, estimate, free_bytes
    from lattice.campaign.vary import label

    folder = CampaignFolder(campaign.folder.absolute())
    records = {record.member: record for record in folder.records(m.number for m in campaign.members)}
    if options.json:
        entries = [
            {
                "member": member.number,
                "name": label(member.values),
                "values": member.values,
                "folder": str(folder.member(member.number).run),
                "finished": member.number in records and records[member.number].final,
                "outcome": records[member.number].outcome if member.number in records else "",
            }
            for member in campaign.members
        ]
        print(json.dumps(entries, indent=1, ensure_ascii=False))
        return CONVERGED
    for member in campaign.members:
        known = records.get(member.number)
        print(f"{member.number:5d}  {member.label}" + (f"  ({known.outcome})" if known else ""))
    waiting = [m.number for m in campaign.members if m.number not in records or not records[m.number].final]
    limits = campaign.limits
    print(
        f"{len(campaign.members)} member(s), {len(waiting)} to run, {limits.at_once} at once on"
        f" {limits.ranks} rank(s) each, in {campaign.folder}; at most"
        f" {estimate(campaign, waiting) / MB:.1f} MB more,"
        f" {free_bytes(campaign.folder) / MB:.0f} MB free"
    )
    _warn(campaign)
    return CONVERGED


def _report(options: argparse.Namespace) -> int:
    """Make tables and picture from the campaign's files."""
    from lattice.campaign.folder import check_folder
    from lattice.campaign.report import gather, judge_all, write_tables
    from lattice.store.lock import FolderLock

    folder = check_folder(_folder_of(options))
    lock, busy = FolderLock(folder.lock), ""
    try:
        lock.take()
    except LatticeError as error:
        busy = str(error)
    try:
        if busy:
            rows, tally = gather(folder)
            print("note: the campaign is running; this is how it stands", file=sys.stderr)
        else:
            judge_all(folder, [int(member["member"]) for member in folder.stored_members()], _complain)
            rows, tally = write_tables(folder)
            _draw(folder, rows)
    finally:
        lock.release()
    _print_report(options, folder, rows, tally)
    return CONVERGED


def _folder_of(options: argparse.Namespace) -> Path:
    """Return the campaign's folder: given, or named by the file, without reading its members."""
    given = Path(options.out or options.file)
    if given.is_dir():
        return given.absolute()
    from lattice.campaign.reader import read_folder

    return read_folder(options.file, options.out).absolute()


def _complain(text: str) -> None:
    with suppress(OSError):
        print(text, file=sys.stderr, flush=True)


def _print_report(options: argparse.Namespace, folder: CampaignFolder, rows: list[Row], tally: Tally) -> None:
    from lattice.campaign.table import outcome_table

    if options.json:
        print(json.dumps({"summary": tally.plain(), "members": [row.entry() for row in rows]}, indent=1))
        return
    print(outcome_table(rows, tally), end="")
    print(f"files in {folder.path}")


def _draw(folder: CampaignFolder, rows: list[Row] | tuple[Row, ...]) -> None:
    """Draw the contact sheet; a failure costs the picture only."""
    from lattice.campaign.sheet import draw_sheet

    try:
        draw_sheet(folder, rows)
    except LatticeError as error:
        _complain(f"no picture: {error}")


def _conclude(campaign: Campaign, result: CampaignResult) -> int:
    """Print the table, draw the picture, return the exit code."""
    from lattice.campaign.folder import CampaignFolder
    from lattice.campaign.table import outcome_table

    folder = CampaignFolder(campaign.folder.absolute())
    if campaign.output.picture:
        _draw(folder, result.rows)
    print(outcome_table(result.rows, result.tally), end="")
    print(f"files in {campaign.folder}")
    return _exit_code(result)


def _exit_code(result: CampaignResult) -> int:
    tally = result.tally
    if tally.ended < tally.members:
        reason = result.stopped or "some members were interrupted"
        print(f"{tally.members - tally.ended} member(s) still to run ({reason}); the same command goes on")
        return INTERRUPTED
    if tally.successes:
        return CONVERGED
    return FAILED if tally.outcomes.get("failed", 0) == tally.members else NOT_CONVERGED


def _conclude_member(campaign: Campaign, number: int) -> int:
    """Print how one member ended and return the exit code that `lattice solve` has for it."""
    from lattice.campaign.folder import CampaignFolder

    folder = CampaignFolder(campaign.folder.absolute())
    record = folder.record(number)
    if record is None:
        raise LatticeError(f"member {number} left no outcome in {folder.path}")
    files = folder.member(number)
    print(f"member {number}: {record.outcome}: {record.reason}; files in {files.run}")
    return _member_code(record, files.state.exists())


def _member_code(record: Record, has_state: bool) -> int:
    if record.outcome == "converged":
        return CONVERGED
    if record.outcome == "interrupted":
        return INTERRUPTED if has_state else STOPPED_EARLY
    return FAILED if record.outcome == "failed" else NOT_CONVERGED
