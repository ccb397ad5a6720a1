"""Child processes that do not outlive their parent."""

from __future__ import annotations

import ctypes
import signal
from collections.abc import Callable


def end_with_parent() -> Callable[[], None]:
    """Return what a child does first: ask Linux to terminate it when its parent dies, even by SIGKILL."""
    pr_set_pdeathsig = 1  # linux/prctl.h
    try:
        prctl = ctypes.CDLL(None).prctl
    except (OSError, AttributeError):
        return lambda: None
    return lambda: prctl(pr_set_pdeathsig, signal.SIGTERM)
