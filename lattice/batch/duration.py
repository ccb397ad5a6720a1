"""Durations as users of batch systems write them."""

from __future__ import annotations

import re

_CLOCK = re.compile(r"(?:(\d+)-)?(\d+):(\d{1,2})(?::(\d{1,2}))?")
_WORDS = re.compile(r"(?:(\d+)d)?(?:(\d+)h)?(?:(\d+)m(?:in)?)?(?:(\d+)s)?")
WANTED = "'1:30:00' (hours, minutes, seconds), '2-00:00:00' (days first), '90m' or '1h30m'"


def parse_duration(text: str) -> int:
    """Return the seconds meant by a duration.

    Raises
    ------
    ValueError
        Where it is none, or not positive, with the forms that are.

    Examples
    --------
    >>> [parse_duration(text) for text in ("1:30:00", "2-00:00:00", "90m", "1h30m", "45s")]
    [5400, 172800, 5400, 5400, 45]
    """
    text = text.strip()
    clock = _CLOCK.fullmatch(text)
    if clock and clock[4] is None:
        # Slurm reads minutes and seconds there, PBS hours and minutes.
        raise ValueError(f"must be like {WANTED}, got '{text}', which schedulers read differently")
    found = clock or (_WORDS.fullmatch(text) if text else None)
    if found is None:
        raise ValueError(f"must be like {WANTED}, got '{text}'")
    days, hours, minutes, seconds = (int(part or 0) for part in found.groups())
    total = ((days * 24 + hours) * 60 + minutes) * 60 + seconds
    if total <= 0:
        raise ValueError(f"must be longer than nothing, got '{text}'")
    return total


def format_duration(seconds: float) -> str:
    """Return a duration as hours, minutes and seconds.

    Examples
    --------
    >>> format_duration(90061)
    '25:01:01'
    """
    whole = int(seconds)
    return f"{whole // 3600}:{whole % 3600 // 60:02d}:{whole % 60:02d}"
