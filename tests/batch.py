"""What the tests of batch submission share: a job that takes a known number of steps, sites, and commands."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from lattice.batch.site import Site
from lattice.batch.ticket import Ticket

ROOT = Path(__file__).resolve().parents[1]

# Halving every Newton step makes the residual fall by a half at each, so that the solve takes a known number
# of steps: from 6e-3 to 1e-8 some 20.
FILM = """
law.name = "kuramoto-sivashinsky"
box = { period = 32.5, length_x = 22.0 }
lattice = { nt = 84, nx = 64 }
start = { kind = "march", seed = 133, dt = 0.1 }
solve = { preconditioner = "direct", residual_rms = 1e-10, newton_steps = 1000 }
output.picture = false
"""
HALVED = ("--", "-snes_linesearch_type", "basic", "-snes_linesearch_damping", "0.5")


def environment(extra: Mapping[str, str] | None = None) -> dict[str, str]:
    """Return an environment in which `python -m lattice` is this one."""
    return {**os.environ, "PYTHONPATH": str(ROOT), **(extra or {})}


def lattice(
    *arguments: str | Path, cwd: Path, env: Mapping[str, str] | None = None, timeout: float = 60.0
) -> subprocess.CompletedProcess[str]:
    """Run the command to its end."""
    return subprocess.run(
        [sys.executable, "-m", "lattice", *map(str, arguments)], capture_output=True, text=True, cwd=cwd,
        env=environment(env), timeout=timeout, check=False, stdin=subprocess.DEVNULL,
    )  # fmt: skip


def submitted(done: subprocess.CompletedProcess[str]) -> str:
    """Return the id of the job that a submission has told of."""
    assert done.returncode == 0, done.stdout + done.stderr
    line = next(line for line in done.stdout.splitlines() if line.startswith("submitted as job"))
    return (
        line.removeprefix("submitted as job array ")
        .removeprefix("submitted as job ")
        .partition(";")[0]
        .partition(":")[0]
    )


def view(folder: Path, env: Mapping[str, str] | None = None) -> dict[str, Any]:
    """Return what `lattice runs --json` says of one run."""
    done = lattice("runs", folder, "--json", cwd=ROOT, env=env)
    assert done.returncode == 0, done.stderr
    views: list[dict[str, Any]] = json.loads(done.stdout)
    assert len(views) == 1, views
    return views[0]


def events(folder: Path, *names: str) -> list[dict[str, Any]]:
    """Return the events of a run, of some names or all."""
    from lattice.batch.legs import LegLog

    return [event for event in LegLog(folder).events() if not names or event["event"] in names]


def ticket(site: Site, **changes: Any) -> Ticket:
    """Return the ticket of a run."""
    standard: dict[str, Any] = {
        "name": "film", "command": ("solve", "input.toml", "--out", ".", "--resume"), "site_name": "here",
        "site": site, "ranks": (2,), "seconds": 3600, "legs": 5,
    }  # fmt: skip
    return Ticket(**{**standard, **changes})
