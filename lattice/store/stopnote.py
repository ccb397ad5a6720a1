"""Why a run is asked to stop: told by whoever sends the signal, in the run's folder, for the run to repeat.

Several processes lie between the user and the ranks, and all they can pass on is SIGUSR1.
"""

from __future__ import annotations

from contextlib import suppress
from pathlib import Path

from lattice.store.replacement import discard, write_text_whole

NAME = "stop.txt"
LONGEST = 200


def write_stop_note(folder: Path, text: str) -> None:
    """Leave the reason of a stop about to be asked for; a folder that cannot be written loses it."""
    with suppress(OSError):
        write_text_whole(folder / NAME, f"{text}\n")


def read_stop_note(folder: Path) -> str:
    """Return the reason left in a folder, empty where there is none."""
    with suppress(OSError, UnicodeDecodeError):
        return (folder / NAME).read_text(encoding="utf-8")[:LONGEST].strip()
    return ""


def remove_stop_note(folder: Path) -> None:
    """Forget the reason of an earlier stop."""
    discard(folder / NAME)
