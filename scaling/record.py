"""What a benchmark's figures were measured on."""

from __future__ import annotations

import os
import platform
import subprocess
from pathlib import Path
from typing import Any


def describe() -> dict[str, Any]:
    """Return processor, cores, memory, load, versions and commit."""
    from lattice.store.versions import versions

    return {
        "processor": _processor(),
        "cores": os.cpu_count(),
        "memory_gb": round(os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 1e9, 1),
        "load_average": os.getloadavg()[0],
        "system": platform.platform(),
        "versions": versions(),
        "commit": _commit(),
    }


def _processor() -> str:
    for line in Path("/proc/cpuinfo").read_text().splitlines():
        if line.startswith("model name"):
            return line.partition(":")[2].strip()
    return platform.processor()


def _commit() -> str:
    command = ["git", "describe", "--always", "--dirty"]
    done = subprocess.run(command, capture_output=True, text=True, check=False, cwd=Path(__file__).parent)
    return done.stdout.strip() or "unknown"
