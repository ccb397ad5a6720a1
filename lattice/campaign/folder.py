"""The folder of a campaign, and what it keeps about each member.

plan.json        the members: number, values, digest of the job
members/0003/    run folder of member 3, as `lattice solve` leaves it, and beside its files:
    input.toml     the member's job, resolved; runs as it is
    log.txt        what the run said
    outcome.json   how it ended: the truth that all tables are made from
    member.lock    locked by the run's first process for as long as it lives
outcomes.jsonl   one line of JSON per ended member
campaign.json    counts, success rate, costs
table.txt        the table that is printed
states.png       all distinct states
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from contextlib import suppress
from dataclasses import asdict, dataclass, field, fields
from pathlib import Path
from typing import Any

from lattice.errors import InputError
from lattice.store.replacement import write_text_whole
from lattice.store.statemeta import plain


@dataclass(frozen=True)
class Record:
    """How a member stands.

    Parameters
    ----------
    member : int
        Its number.
    outcome : str
        The word of the run's summary ("converged", "not converged", "interrupted" ..), or "failed".
    reason : str
        Why, in a sentence.
    final : bool
        Whether it has ended for good; an interrupted member goes on at the next call.
    limit : float or None
        The time limit that ended it; it goes on where a later call gives more.
    exit_code : int or None
        Of its last attempt, minus n where signal n ended it; None where nobody was there to see.
    attempts : int
        How often it was started.
    seconds : float
        Wall time of all attempts.
    ranks : int
        MPI ranks.
    values : dict
        What the member differs by.
    numbers : dict
        Of the run's summary: residuals, scalars, mean square, steps, iterations, memory, lattice.
    judged : bool
        Whether kind, repeats and likeness are known; of a converged member only.
    kind : str
        Steady, travelling, periodic ..; empty where not known.
    repeats : tuple of int
        How often the state repeats a smaller one, by axis (t, y, x); empty where not known.
    same_as : int or None
        A member that found the same state up to symmetry.
    kept : bool
        Whether its field is there.
    """

    member: int
    outcome: str
    reason: str = ""
    final: bool = True
    limit: float | None = None
    exit_code: int | None = None
    attempts: int = 1
    seconds: float = 0.0
    ranks: int = 1
    values: dict[str, Any] = field(default_factory=dict)
    numbers: dict[str, Any] = field(default_factory=dict)
    judged: bool = False
    kind: str = ""
    repeats: tuple[int, ...] = ()
    same_as: int | None = None
    kept: bool = True

    def to_json(self) -> str:
        """Return the record as one line."""
        return json.dumps(plain(asdict(self)), allow_nan=False, ensure_ascii=False) + "\n"


def read_record(path: Path) -> Record | None:
    """Return the record in a file, None where there is none."""
    try:
        raw = json.loads(path.read_text(encoding="utf-8"))
        known = {f.name: raw[f.name] for f in fields(Record) if f.name in raw}
        known["repeats"] = tuple(known.get("repeats", ()))
        return Record(**known)
    except (OSError, ValueError, TypeError):
        return None


@dataclass(frozen=True)
class MemberFiles:
    """Paths of one member."""

    run: Path

    @property
    def job(self) -> Path:
        """Its resolved job."""
        return self.run / "input.toml"

    @property
    def log(self) -> Path:
        """What its run said."""
        return self.run / "log.txt"

    @property
    def outcome(self) -> Path:
        """Its record."""
        return self.run / "outcome.json"

    @property
    def lock(self) -> Path:
        """Held by the run's first process."""
        return self.run / "member.lock"

    @property
    def summary(self) -> Path:
        """The run's own summary."""
        return self.run / "summary.json"

    @property
    def steps(self) -> Path:
        """The steps of the solve, one line each."""
        return self.run / "steps.jsonl"

    @property
    def state(self) -> Path:
        """The state."""
        return self.run / "state.h5"


class CampaignFolder:
    """Paths and records of a campaign.

    Parameters
    ----------
    path : Path
        The folder; not made here.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self.plan = path / "plan.json"
        self.lock = path / "campaign.lock"
        self.outcomes = path / "outcomes.jsonl"
        self.summary = path / "campaign.json"
        self.table = path / "table.txt"
        self.sheet = path / "states.png"

    def member(self, number: int) -> MemberFiles:
        """Return the paths of a member."""
        return MemberFiles(self.path / "members" / f"{number:04d}")

    def record(self, number: int) -> Record | None:
        """Return how a member stands, None where nothing is known."""
        return read_record(self.member(number).outcome)

    def records(self, numbers: Iterable[int]) -> list[Record]:
        """Return the records there are, in the order of the numbers."""
        return [record for record in map(self.record, numbers) if record is not None]

    def keep_record(self, record: Record) -> None:
        """Replace a member's record in one step."""
        write_text_whole(self.member(record.member).outcome, record.to_json())

    def stored_members(self) -> list[dict[str, Any]]:
        """Return number, values and digest of every member, as the plan has them; none without a plan."""
        with suppress(OSError, ValueError):
            members: list[dict[str, Any]] = json.loads(self.plan.read_text(encoding="utf-8"))["members"]
            return members
        return []

    def keep_plan(self, members: Sequence[dict[str, Any]], file: Path) -> None:
        """Store the members, unless the plan there is the same."""
        content = {"file": str(file.absolute()), "members": [plain(member) for member in members]}
        text = json.dumps(content, indent=1, ensure_ascii=False) + "\n"
        with suppress(OSError):
            if self.plan.read_text(encoding="utf-8") == text:
                return
        self.path.mkdir(parents=True, exist_ok=True)
        write_text_whole(self.plan, text)


def check_folder(path: Path) -> CampaignFolder:
    """Return the folder of a campaign that has begun.

    Raises
    ------
    InputError
        Where no campaign has run in it.
    """
    folder = CampaignFolder(path)
    if not folder.stored_members():
        raise InputError("holds no campaign yet; run it first, or give its folder with --out", file=str(path))
    return folder
