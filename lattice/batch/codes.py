"""Exit codes of the program, which scripts and the next leg of a run go by."""

from __future__ import annotations

CONVERGED, REFUSED, NOT_CONVERGED, INTERRUPTED = 0, 2, 3, 4
FAILED = 70
"""An error of the program or its libraries; 70 is EX_SOFTWARE of sysexits.h."""
STOPPED_EARLY = 130
"""Interrupted before there was a state to keep; 128 + SIGINT as shells have it."""
KNOWN = frozenset({CONVERGED, REFUSED, NOT_CONVERGED, INTERRUPTED, FAILED, STOPPED_EARLY})
