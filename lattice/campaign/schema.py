"""The campaign file's sections and keys: types, ranges, defaults and what each key means."""

from __future__ import annotations

from typing import Literal

from lattice.job.section import Count, Name, Positive, Section
from lattice.job.section import key as _key


class LimitsSection(Section):
    """What a campaign may use of the machine."""

    at_once: Count = _key("members that run at the same time", 1)
    ranks: Count = _key("MPI ranks of each member", 1)
    member_seconds: Positive | None = _key(
        "wall time after which a member is stopped, its state kept", None, shown="none"
    )
    total_seconds: Positive | None = _key(
        "wall time of one call of the command, after which all members are stopped; the next call goes on",
        None,
        shown="none",
    )
    disk_mb: Positive | None = _key(
        "most that the campaign's folder may hold, in MB; no member begins that might not fit",
        None,
        shown="what the file system has",
    )


class OutputSection(Section):
    """Where a campaign keeps its files, and which of them."""

    folder: Name | None = _key("the campaign's folder", None, shown="`runs/<name of the campaign file>`")
    keep: Literal["all", "states"] = _key(
        "`states` removes the field and picture of every member that has ended and is not a new state",
        "all",
    )
    most_states: Count | None = _key(
        "keep the fields of this many distinct states only, those of the lowest members", None, shown="all"
    )
    picture: bool = _key("draw all distinct states on `states.png`", True)


class CampaignSections(Section):
    """The tables of a campaign file besides `job` and `vary`."""

    limits: LimitsSection = _key("the limits", LimitsSection())
    output: OutputSection = _key("the output", OutputSection())
