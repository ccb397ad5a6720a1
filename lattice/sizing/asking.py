"""Starts probes and reads their answers."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import tempfile
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from lattice.environment import without_launcher
from lattice.errors import LatticeError

Launch = Callable[[int, Sequence[str]], list[str]]
"""Makes the command line that runs a program on a number of ranks."""


def alone(ranks: int, program: Sequence[str]) -> list[str]:
    """Return the command line of a program on one rank, without a launcher."""
    return list(program)


MARK = "lattice-size:"
"""Begins the line of a probe's answer."""


def ask(task: str, question: dict[str, Any], ranks: int, launch: Launch, timeout: float) -> dict[str, Any]:
    """Return a probe's answer.

    Raises
    ------
    LatticeError
        With what it said, where it gave none.
    """
    with tempfile.TemporaryDirectory(prefix="lattice-size-") as folder:
        path = Path(folder) / "question.json"
        path.write_text(json.dumps(question), encoding="utf-8")
        program = [sys.executable, "-m", "lattice.cli.sizing_probe", task, *([str(path)] if question else [])]
        command = (launch if ranks > 1 else alone)(ranks, program)
        try:
            done = subprocess.run(
                command,
                capture_output=True,
                text=True,
                timeout=timeout,
                check=False,
                stdin=subprocess.DEVNULL,
                env=without_launcher(os.environ),
            )
        except subprocess.TimeoutExpired:
            raise LatticeError(f"no answer within {timeout:g} s on {ranks} rank(s)") from None
        except OSError as error:
            raise LatticeError(f"{command[0]} cannot be started: {error.strerror}") from None
    lines = [line.removeprefix(MARK) for line in done.stdout.splitlines() if line.startswith(MARK)]
    if not lines:
        said = done.stderr.strip().splitlines() or [f"exit code {done.returncode}"]
        raise LatticeError(f"failed on {ranks} rank(s): {said[-1]}")
    answer: dict[str, Any] = json.loads(lines[-1])
    return answer
