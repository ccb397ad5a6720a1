"""A Slurm of one node on the loopback interface, started for the tests and stopped by the ids of what was started.

It needs root and Debian's slurmctld, slurmd, slurm-client and munge; no systemd. The node offers more cores than
the machine has, so that several small jobs can run.
"""

from __future__ import annotations

import contextlib
import os
import shutil
import signal
import socket
import subprocess
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

PROGRAMS = ("munged", "slurmctld", "slurmd", "sbatch", "squeue", "scontrol", "scancel", "sinfo")
SYSTEM_PATH = os.pathsep.join([os.environ.get("PATH", ""), "/usr/sbin", "/sbin"])
CORES = 8

CONFIGURATION = """\
ClusterName=test
SlurmctldHost={host}(127.0.0.1)
SlurmctldPort={controller_port}
SlurmdPort={node_port}
SlurmUser=root
AuthType=auth/munge
AuthInfo=socket={folder}/munge/socket
StateSaveLocation={folder}/state
SlurmdSpoolDir={folder}/spool
SlurmctldPidFile={folder}/slurmctld.pid
SlurmdPidFile={folder}/slurmd.pid
SlurmctldLogFile={folder}/slurmctld.log
SlurmdLogFile={folder}/slurmd.log
ProctrackType=proctrack/pgid
TaskPlugin=task/none
SelectType=select/cons_tres
SelectTypeParameters=CR_CPU
SlurmdParameters=config_overrides
SchedulerParameters=bf_interval=2,sched_interval=2,batch_sched_delay=0
ReturnToService=2
MinJobAge=600
KillWait=10
JobRequeue=1
MpiDefault=none
NodeName={host} NodeAddr=127.0.0.1 CPUs={cores} State=UNKNOWN
PartitionName=test Nodes=ALL Default=YES MaxTime=INFINITE State=UP
"""


class Cluster:
    """A running Slurm; `environment` makes its commands known to a process."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.environment = {
            **os.environ,
            "PATH": SYSTEM_PATH,
            "SLURM_CONF": str(folder / "slurm.conf"),
        }
        self._started: dict[str, int] = {}

    def start(self) -> None:
        for name in ("munge", "state", "spool"):
            (self.folder / name).mkdir(mode=0o700)
        self._write_configuration()
        self._start_munge()
        self.start_controller()
        self._run("slurmd", "-f", str(self.folder / "slurm.conf"))
        self._note("slurmd")
        wait_for(lambda: "idle" in self.ask("sinfo", "-h", "-o", "%T"), 30, "the node is not idle")

    def _write_configuration(self) -> None:
        text = CONFIGURATION.format(
            host=socket.gethostname().partition(".")[0],
            folder=self.folder,
            controller_port=_free_port(),
            node_port=_free_port(),
            cores=CORES,
        )
        (self.folder / "slurm.conf").write_text(text)

    def _start_munge(self) -> None:
        folder = self.folder / "munge"
        key = folder / "key"
        key.write_bytes(os.urandom(128))
        key.chmod(0o600)
        self._run(
            "munged", "--force", f"--key-file={key}", f"--socket={folder}/socket", f"--pid-file={folder}/pid",
            f"--log-file={folder}/log", f"--seed-file={folder}/seed",
        )  # fmt: skip
        self._note("munged", folder / "pid")

    def start_controller(self) -> None:
        self._run("slurmctld", "-f", str(self.folder / "slurm.conf"))
        self._note("slurmctld")

    def stop_controller(self) -> None:
        _end(self._started.pop("slurmctld"))

    def ask(self, *command: str) -> str:
        done = subprocess.run(
            command, capture_output=True, text=True, env=self.environment, timeout=60, check=False
        )
        return done.stdout + done.stderr

    def stop(self) -> None:
        """Cancel all jobs of this cluster, then end its daemons, and nothing else."""
        with contextlib.suppress(subprocess.SubprocessError):
            if "slurmctld" in self._started:
                self.ask("scancel", "--user=root")
                deadline = time.monotonic() + 20
                while self._busy() and time.monotonic() < deadline:
                    time.sleep(0.2)
        for name in ("slurmd", "slurmctld", "munged"):
            if name in self._started:
                _end(self._started.pop(name))

    def _busy(self) -> bool:
        return self.ask("squeue", "-h", "-t", "PD,R,CG", "-o", "%i").strip() != ""

    def _run(self, *command: str) -> None:
        done = subprocess.run(
            command, capture_output=True, text=True, env=self.environment, timeout=60, check=False
        )
        if done.returncode != 0:
            raise RuntimeError(f"{command[0]}: {done.stdout}{done.stderr}")

    def _note(self, name: str, pid_file: Path | None = None) -> None:
        path = pid_file or self.folder / f"{name}.pid"
        wait_for(lambda: path.exists() and path.read_text().strip().isdigit(), 15, f"{name} has no pid file")
        self._started[name] = int(path.read_text())


def reason_against() -> str:
    """Return why no Slurm can be started here, empty where one can."""
    if os.geteuid() != 0:
        return "starting a Slurm for the tests needs root"
    missing = [name for name in PROGRAMS if shutil.which(name, path=SYSTEM_PATH) is None]
    if missing:
        return f"no {', '.join(missing)}; apt-get install slurmctld slurmd slurm-client munge"
    return ""


@contextlib.contextmanager
def running_cluster(folder: Path) -> Iterator[Cluster]:
    """Start a cluster, skip the test where that cannot be, and stop it."""
    reason = reason_against()
    if reason:
        pytest.skip(reason)
    cluster = Cluster(folder)
    try:
        cluster.start()
        yield cluster
    finally:
        cluster.stop()


def wait_for(reached: Callable[[], object], seconds: float, failure: str) -> None:
    deadline = time.monotonic() + seconds
    while not reached():
        assert time.monotonic() < deadline, failure
        time.sleep(0.2)


def _end(process: int) -> None:
    """End one process by its id, and wait until it is gone."""
    for number in (signal.SIGTERM, signal.SIGKILL):
        with contextlib.suppress(ProcessLookupError):
            os.kill(process, number)
        deadline = time.monotonic() + 10
        while time.monotonic() < deadline:
            try:
                os.kill(process, 0)
                if Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()[0] == "Z":
                    return
            except (ProcessLookupError, OSError):
                return
            time.sleep(0.1)


def _free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])
