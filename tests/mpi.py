"""Run Python on several MPI ranks from a test, never longer than its time limit.

Used as `run_ranks(3, "print('hello')")`, `run_ranks(3, Path("script.py"), "argument")` or
`run_module(2, "lattice", "solve", "job.toml")`. Run as a script on each rank, this file arms a
C-level watchdog first, so that a rank stuck inside MPI or PETSc still prints where it stands.
"""

from __future__ import annotations

import contextlib
import faulthandler
import functools
import os
import runpy
import shutil
import signal
import subprocess
import sys
import tempfile
import textwrap
import time
import traceback
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
OUTPUT_SHOWN = 6000


class RanksFailed(AssertionError):
    """A parallel run that ended with another exit code than 0, or not in time.

    Parameters
    ----------
    message : str
        What failed, followed by the ends of both output streams.
    completed : subprocess.CompletedProcess
        The run; `returncode` is that of `mpiexec`.
    """

    def __init__(self, message: str, completed: subprocess.CompletedProcess[str]) -> None:
        self.completed = completed
        super().__init__(
            f"{message}\n--- standard output\n{completed.stdout[-OUTPUT_SHOWN:]}"
            f"\n--- standard error\n{completed.stderr[-OUTPUT_SHOWN:]}"
        )


def run_ranks(
    ranks: int,
    script: str | Path,
    *arguments: str | Path,
    timeout: float = 60.0,
    check: bool = True,
    cwd: str | Path | None = None,
    env: dict[str, str] | None = None,
) -> subprocess.CompletedProcess[str]:
    """Run a script on `ranks` ranks and return its output.

    Parameters
    ----------
    ranks : int
        Number of MPI ranks; may exceed the cores.
    script : str or Path
        Source text (indented as a whole is fine), or the path of a file as a `Path`.
    *arguments : str or Path
        What the script finds in `sys.argv[1:]`.
    timeout : float
        Seconds after which each rank prints its stack and the run is ended.
    check : bool
        Whether an exit code other than 0 raises.
    cwd : str or Path, optional
        Working folder; the project's folder unless given.
    env : dict of str to str, optional
        Variables to add to the environment.

    Returns
    -------
    subprocess.CompletedProcess
        With `returncode`, and the merged `stdout` and `stderr` of all ranks as text.

    Raises
    ------
    RanksFailed
        When the time limit was reached, or with `check` on any exit code other than 0.
    """
    with tempfile.TemporaryDirectory(prefix="ranks-") as folder:
        if isinstance(script, str):
            path = Path(folder, "script.py")
            path.write_text(textwrap.dedent(script), encoding="utf-8")
        else:
            path = script.resolve()
        return _run(ranks, ["path", str(path)], arguments, timeout, check, cwd, env)


def run_module(
    ranks: int,
    module: str,
    *arguments: str | Path,
    timeout: float = 60.0,
    check: bool = True,
    cwd: str | Path | None = None,
    env: dict[str, str] | None = None,
) -> subprocess.CompletedProcess[str]:
    """Run a module as `python -m module` on `ranks` ranks; otherwise like `run_ranks`."""
    return _run(ranks, ["module", module], arguments, timeout, check, cwd, env)


def launch_command(ranks: int) -> list[str]:
    """Return the `mpiexec` command line up to the program, for the MPI that is installed."""
    mpiexec = os.environ.get("MPIEXEC", "mpiexec")
    flags = ["-n", str(ranks)]
    if _is_open_mpi(mpiexec):
        flags.insert(0, "--oversubscribe")
        if os.geteuid() == 0:
            flags.insert(0, "--allow-run-as-root")
    return [mpiexec, *flags]


@functools.cache
def _is_open_mpi(mpiexec: str) -> bool:
    if shutil.which(mpiexec) is None:
        raise FileNotFoundError(
            f"{mpiexec} is needed to run on several ranks and was not found; run make setup"
        )
    version = subprocess.run([mpiexec, "--version"], capture_output=True, text=True, timeout=30, check=False)
    return "Open MPI" in version.stdout or "OpenRTE" in version.stdout


def _run(
    ranks: int,
    target: list[str],
    arguments: tuple[str | Path, ...],
    timeout: float,
    check: bool,
    cwd: str | Path | None,
    env: dict[str, str] | None,
) -> subprocess.CompletedProcess[str]:
    command = [*launch_command(ranks), sys.executable, "-X", "faulthandler", str(Path(__file__).resolve())]
    command += [str(timeout), *target, *map(str, arguments)]
    # Files, not pipes: a stray process that keeps a pipe open cannot make the test wait for it.
    with tempfile.TemporaryFile("w+") as out, tempfile.TemporaryFile("w+") as err:
        process = subprocess.Popen(
            command,
            stdin=subprocess.DEVNULL,
            stdout=out,
            stderr=err,
            cwd=cwd or ROOT,
            env=_environment(env),
            start_new_session=True,
        )
        # The ranks' own watchdog comes first and tells where each of them stands.
        in_time = _wait(process, timeout + 5.0)
        _end_session(process)
        out.seek(0)
        err.seek(0)
        completed = subprocess.CompletedProcess(command, process.returncode, out.read(), err.read())
    if not in_time or "Timeout (" in completed.stderr:
        raise RanksFailed(f"{target[-1]} on {ranks} ranks did not end within {timeout:g} s", completed)
    if check and completed.returncode != 0:
        raise RanksFailed(
            f"{target[-1]} on {ranks} ranks ended with exit code {completed.returncode}", completed
        )
    return completed


def _environment(extra: dict[str, str] | None) -> dict[str, str]:
    with contextlib.suppress(ImportError):
        from lattice import environment

        environment.prepare()
    variables = dict(os.environ)
    variables["PYTHONPATH"] = os.pathsep.join(filter(None, [str(ROOT), variables.get("PYTHONPATH", "")]))
    return variables | (extra or {})


def _wait(process: subprocess.Popen[bytes], seconds: float) -> bool:
    try:
        process.wait(seconds)
    except subprocess.TimeoutExpired:
        return False
    return True


def _end_session(process: subprocess.Popen[bytes]) -> None:
    """Leave no process of the run behind: each rank may lead a process group of its own."""
    for number in (signal.SIGTERM, signal.SIGKILL):
        left = _members(process.pid)
        if not left:
            break
        for pid in left:
            with contextlib.suppress(ProcessLookupError):
                os.kill(pid, number)
        _wait(process, 2.0)
        deadline = time.monotonic() + 1.0
        while _members(process.pid) and time.monotonic() < deadline:
            time.sleep(0.02)
    process.wait()


def _members(session: int) -> list[int]:
    """Return the living processes of a session."""
    found = []
    for entry in Path("/proc").iterdir():
        if entry.name.isdigit() and is_running(int(entry.name), session):
            found.append(int(entry.name))
    return found


def is_running(pid: int, session: int | None = None) -> bool:
    """Return whether a process lives, and belongs to the session; from `/proc/PID/stat`, see proc(5)."""
    try:
        status = Path(f"/proc/{pid}/stat").read_text(encoding="utf-8")
    except OSError:
        return False
    # The command name in parentheses may hold spaces: fields are counted after it.
    state, _parent, _group, member_of = status.rpartition(")")[2].split()[:4]
    return state not in "ZX" and session in (None, int(member_of))


def _run_on_this_rank(seconds: str, kind: str, target: str, *arguments: str) -> None:
    faulthandler.dump_traceback_later(float(seconds), exit=True)
    # Whole lines: those of several ranks are merged into one stream.
    sys.stdout.reconfigure(line_buffering=True, write_through=False)
    sys.argv = [target, *arguments]
    sys.path.remove(str(Path(__file__).resolve().parent))
    if kind == "module":
        runpy.run_module(target, run_name="__main__", alter_sys=True)
    else:
        _run_script(target)
    faulthandler.cancel_dump_traceback_later()


def _run_script(path: str) -> None:
    try:
        runpy.run_path(path, run_name="__main__")
    except Exception:  # noqa: BLE001 - any failure of a script ends all ranks
        traceback.print_exc()
        sys.stderr.flush()
        # Without this the other ranks would wait in their next collective until the time limit.
        if "mpi4py.MPI" in sys.modules:
            sys.modules["mpi4py.MPI"].COMM_WORLD.Abort(1)
        sys.exit(1)


if __name__ == "__main__":
    _run_on_this_rank(*sys.argv[1:])
