"""Puts the outcomes together from the campaign's files alone: verdicts, tables, the picture."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import suppress
from dataclasses import replace
from typing import Any

from lattice.campaign.attempt import own_environment
from lattice.campaign.ending import CONVERGED
from lattice.campaign.folder import CampaignFolder, Record
from lattice.campaign.table import outcome_table
from lattice.campaign.tally import Row, Tally, make_rows, make_tally
from lattice.store.replacement import write_text_whole
from lattice.store.statemeta import plain

JUDGE_SECONDS = 1800.0


def judge_all(folder: CampaignFolder, numbers: Iterable[int], report: Callable[[str], None]) -> None:
    """Judge every converged member that has not been, in the order of their numbers."""
    waiting = {
        record.member: record
        for record in folder.records(numbers)
        if record.outcome == CONVERGED and record.final and not record.judged
    }
    if waiting:
        for verdict in _verdicts(folder, list(waiting), report):
            folder.keep_record(_with_verdict(waiting[verdict["member"]], verdict, report))


def _verdicts(
    folder: CampaignFolder, members: Sequence[int], report: Callable[[str], None]
) -> Iterator[dict[str, Any]]:
    """Ask a process of its own for the verdicts on members; what it does not tell is an empty one."""
    command = [sys.executable, "-m", "lattice.campaign.judge", str(folder.path), *map(str, members)]
    lines: list[str] = []
    try:
        done = subprocess.run(
            command,
            stdin=subprocess.DEVNULL,
            capture_output=True,
            text=True,
            timeout=JUDGE_SECONDS,
            check=False,
            env=own_environment(os.environ),
            # Ctrl-C stops members, not the verdict on one that has ended.
            start_new_session=True,
        )
        lines, said = done.stdout.splitlines(), done.stderr.strip().splitlines()
    except (OSError, subprocess.SubprocessError) as error:
        said = [str(error)]
    told = {}
    for line in lines:
        with suppress(ValueError, KeyError, TypeError):
            verdict = json.loads(line)
            told[verdict["member"]] = verdict
    for member in members:
        yield told.get(member) or {"member": member, "failure": said[-1] if said else "no answer"}


def _with_verdict(record: Record, verdict: dict[str, Any], report: Callable[[str], None]) -> Record:
    """Return a record with the verdict on its state; one that cannot be judged counts as a new state."""
    if "failure" in verdict:
        report(f"member {record.member}: its state could not be judged: {verdict['failure']}")
        return replace(record, judged=True)
    return replace(
        record,
        judged=True,
        kind=verdict["kind"],
        repeats=tuple(verdict["repeats"]),
        same_as=verdict["same_as"],
        numbers={**record.numbers, "fingerprint": verdict["fingerprint"]},
    )


def gather(folder: CampaignFolder) -> tuple[list[Row], Tally]:
    """Return the table of outcomes and its counts."""
    members = folder.stored_members()
    rows = make_rows(members, folder.records(int(member["member"]) for member in members))
    return rows, make_tally(rows)


def write_tables(folder: CampaignFolder, only_count: bool = False) -> tuple[list[Row], Tally]:
    """Write outcomes.jsonl, campaign.json and table.txt; return what they say.

    Parameters
    ----------
    folder : CampaignFolder
    only_count : bool
        Write nothing, as several elements of a job array would do at the same time.
    """
    rows, tally = gather(folder)
    if not only_count:
        ended = [row for row in rows if row.record is not None]
        lines = [json.dumps(plain(row.entry()), allow_nan=False, ensure_ascii=False) + "\n" for row in ended]
        write_text_whole(folder.outcomes, "".join(lines))
        write_text_whole(folder.summary, json.dumps(plain(tally.plain()), indent=2, allow_nan=False) + "\n")
        write_text_whole(folder.table, outcome_table(rows, tally))
    return rows, tally
