"""What a machine was measured to do, kept in the user's configuration folder, one file per machine."""

from __future__ import annotations

import json
import math
import os
import re
import socket
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import Any

from lattice.errors import InputError
from lattice.store.replacement import write_text_whole

SCHEMA = 1


@dataclass(frozen=True)
class Line:
    """Seconds of one piece of work: a constant, and a share of its amount.

    Examples
    --------
    >>> Line(1e-3, 2e-9).seconds(1e6)
    0.003
    """

    constant: float
    each: float

    def seconds(self, amount: float) -> float:
        """Return the seconds of an amount of work."""
        return self.constant + self.each * amount


@dataclass(frozen=True)
class Speeds:
    """Seconds of each piece of work on a number of ranks, all amounts those of the largest rank.

    Parameters
    ----------
    ranks : int
    start_up, two_level_start_up : float
        Seconds of a run on a lattice so small that its solve takes next to none: the program's start, its
        loops loaded, the picture; with two levels there are more loops.
    tangent : Line
        Per operation of a product with the Jacobian, halo included.
    vector : Line
        Per number of a vector operation of Krylov's method, one read, one write, sums over the ranks.
    assembly : Line
        Per nonzero of the Jacobian.
    analysis : Line
        Per nonzero, on all ranks together.
    factor : Line
        Per entry of the factors, all ranks together; operations are in `flop`.
    flop : float
        Seconds per operation of a factorisation, all ranks together.
    solve : Line
        Per entry of the factors, all ranks together.
    transform : Line
        Per number: a Fourier transform and its inverse, redistribution included.
    plan : Line
        Per number: planning a transform, once on a lattice.
    symbol : Line
        Per number: means of the tangent's coefficients, symbols and their inverses.
    write : Line
        Per number on all ranks together: a state file.
    """

    ranks: int
    start_up: float
    two_level_start_up: float
    tangent: Line
    vector: Line
    assembly: Line
    analysis: Line
    factor: Line
    flop: float
    solve: Line
    transform: Line
    plan: Line
    symbol: Line
    write: Line


LINES = (
    *("tangent", "vector", "assembly", "analysis", "factor", "solve"),
    *("transform", "plan", "symbol", "write"),
)


@dataclass(frozen=True)
class Calibration:
    """What one machine does.

    Parameters
    ----------
    host, processor : str
    cores : int
    date : str
        ISO 8601.
    versions : dict of str to str
    speeds : tuple of Speeds
        For one rank, and for each other count that was measured.
    march : Line
        Seconds of one step of the march, per number of a slice.
    program_mb : float
        Memory of a rank before it holds a field.
    picture_mb : float
        What drawing adds on the first rank.
    error : float
        Root mean square relative error of the fits on the measurements themselves, the worst of the counts.
    seconds : float
        The calibration took.
    """

    host: str
    processor: str
    cores: int
    date: str
    versions: dict[str, str]
    speeds: tuple[Speeds, ...]
    march: Line
    program_mb: float
    picture_mb: float
    error: float
    seconds: float
    notes: tuple[str, ...] = field(default=())

    def on(self, ranks: int) -> Speeds:
        """Return the speeds on a number of ranks: those measured, else scaled from the nearest below.

        Amounts are those of the largest rank where `Speeds` says so, and shrink by themselves; the shared
        work of a factorisation shrinks as it was seen to do from one rank to the most that were measured.
        """
        known = {speeds.ranks: speeds for speeds in self.speeds}
        if ranks in known:
            return known[ranks]
        below = max((count for count in known if count < ranks), default=min(known))
        return _scaled(known[below], ranks, self._power())

    def _power(self) -> float:
        """Return the power of the ranks by which a factorisation got faster, between 0 and 1."""
        first, last = self.speeds[0], self.speeds[-1]
        if last.ranks == first.ranks:
            return ASSUMED_POWER
        gain = math.log(first.flop / last.flop) / math.log(last.ranks / first.ranks)
        return min(1.0, max(0.0, gain))


ASSUMED_POWER = 0.6
"""Of the ranks by which a factorisation gets faster, where one rank count was measured only."""


def _scaled(speeds: Speeds, ranks: int, power: float) -> Speeds:
    faster = (ranks / speeds.ranks) ** power
    # Messages are added up in a tree: their constant part grows with the logarithm of the ranks.
    slower = math.log2(2 * ranks) / math.log2(2 * speeds.ranks)
    changed: dict[str, Any] = {}
    for name in LINES:
        line: Line = getattr(speeds, name)
        shared = name in ("factor", "solve", "analysis")
        changed[name] = Line(line.constant * slower, line.each / faster if shared else line.each)
    return replace(speeds, ranks=ranks, flop=speeds.flop / faster, **changed)


def calibration_folder(environ: Mapping[str, str] | None = None) -> Path:
    """Return where calibrations are kept."""
    environ = os.environ if environ is None else environ
    home = Path(environ.get("XDG_CONFIG_HOME") or Path(environ.get("HOME", "")) / ".config")
    return home / "lattice" / "calibrations"


def calibration_path(name: str | None = None, environ: Mapping[str, str] | None = None) -> Path:
    """Return the file of a named calibration, of this machine's where there is no name."""
    plain = re.sub(r"[^A-Za-z0-9_.-]", "-", name or socket.gethostname() or "machine")
    return calibration_folder(environ) / f"{plain}.json"


def save_calibration(calibration: Calibration, path: Path) -> None:
    """Keep a calibration in a file."""
    path.parent.mkdir(parents=True, exist_ok=True)
    content = {"schema": SCHEMA, **asdict(calibration)}
    write_text_whole(path, json.dumps(content, indent=1) + "\n")


def load_calibration(path: Path) -> Calibration | None:
    """Return the calibration in a file, None where there is no such file.

    Raises
    ------
    InputError
        If the file is none, or of another schema.
    """
    try:
        content: dict[str, Any] = json.loads(path.read_text(encoding="utf-8"))
        if content.pop("schema") != SCHEMA:
            raise ValueError("it is of another version of this program")
        speeds = tuple(_speeds(record) for record in content.pop("speeds"))
        march = Line(**content.pop("march"))
        notes = tuple(content.pop("notes", ()))
        return Calibration(**content, speeds=speeds, march=march, notes=notes)
    except FileNotFoundError:
        return None
    except OSError as error:
        raise InputError(f"cannot be read: {error.strerror}", file=str(path)) from None
    except (ValueError, TypeError, KeyError) as error:
        what = f"{error} is missing" if isinstance(error, KeyError) else str(error)
        raise InputError(
            f"is no calibration of this program: {what}; make it anew with `lattice size --calibrate`",
            file=str(path),
        ) from None


def _speeds(record: Mapping[str, Any]) -> Speeds:
    lines: dict[str, Any] = {name: Line(**record[name]) for name in LINES}
    rest: dict[str, Any] = {name: float(record[name]) for name in ("start_up", "two_level_start_up", "flop")}
    return Speeds(ranks=int(record["ranks"]), **rest, **lines)
