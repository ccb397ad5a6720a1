"""Legs: when a run goes on, how its process is ended in time, and what is said of one that died."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path
from typing import Any

import pytest

from lattice.batch.chain import LegEnd, decide
from lattice.batch.ending import Ending
from lattice.batch.legs import LegLog, halt_reason, is_cancelled, newest_job, open_leg
from lattice.batch.site import Site
from lattice.batch.supervise import WALL_CLOCK, Supervisor
from lattice.batch.ticket import Ticket, read_ticket, write_ticket
from lattice.errors import InputError
from lattice.geometry.lattice import Lattice
from tests.batch import ticket
from tests.states import smooth_field, write_serial

LOCAL = Site(scheduler="local", legs=3)
AT_LIMIT = LegEnd(4, "interrupted", "stopped by the end of the wall clock", at_limit=True)


def made(*ended: int, **changes: Any) -> tuple[Ticket, list[dict[str, Any]]]:
    """Return a ticket and the events of legs that made these numbers of steps."""
    events: list[dict[str, Any]] = []
    for leg, steps in enumerate(ended, 1):
        events += [{"event": "submitted", "leg": leg}, {"event": "began", "leg": leg}]
        events.append({"event": "ended", "leg": leg, "new_steps": steps, "core_hours": 1.0})
    return ticket(LOCAL, **changes), events


def test_a_run_that_the_wall_clock_stopped_goes_on() -> None:
    assert decide(*made(3), AT_LIMIT).goes_on
    assert decide(*made(3, 0), AT_LIMIT).goes_on, "one leg without a step may be a slow start"


@pytest.mark.parametrize(
    ("ended", "changes", "end", "why"),
    [
        ((3,), {}, LegEnd(0, "converged", "", at_limit=True), ""),
        ((3,), {}, LegEnd(3, "stalled", "a local minimum", at_limit=False), "stalled: a local minimum"),
        ((3,), {}, LegEnd(2, "failed", "no such law", at_limit=False), "failed: no such law"),
        ((3,), {}, LegEnd(4, "interrupted", "", at_limit=False, by_request=True), "stopped on request"),
        ((3, 0, 0), {}, AT_LIMIT, "2 legs in a row made no step: the wall clock is too short for one"),
        ((1, 1, 1), {"legs": 3}, AT_LIMIT, "all 3 legs are used"),
        ((1, 1), {"core_hours": 3.9, "seconds": 3600, "ranks": (2,)}, AT_LIMIT, "2.00 of 3.9 core hours are spent"),
        ((1,), {}, LegEnd(70, "failed", "disk full", at_limit=False), "failed: disk full"),
    ],
)  # fmt: skip
def test_a_run_halts_with_the_reason(
    ended: tuple[int, ...], changes: dict[str, Any], end: LegEnd, why: str
) -> None:
    decision = decide(*made(*ended, **changes), end)
    assert not decision.goes_on
    assert decision.reason.startswith(why) if why else decision.reason == ""


def test_a_run_whose_ranks_were_lost_goes_on_until_that_brings_no_step() -> None:
    lost = LegEnd(70, "failed", "a rank was ended by SIGKILL", at_limit=False, lost=True)
    assert decide(*made(2), lost).goes_on
    assert not decide(*made(2, 0, 0), lost).goes_on


def test_a_cancelled_run_never_goes_on() -> None:
    asked, events = made(2)
    assert not decide(asked, [*events, {"event": "cancelled"}], AT_LIMIT).goes_on
    assert not is_cancelled([*events, {"event": "cancelled"}, {"event": "submitted", "leg": 2}])


def test_each_leg_has_its_ranks_and_the_last_number_holds_on() -> None:
    assert [ticket(LOCAL, ranks=(4, 2)).ranks_of(leg) for leg in (1, 2, 3)] == [4, 2, 2]


def test_a_ticket_comes_back_from_its_folder(tmp_path: Path) -> None:
    site = Site(scheduler="slurm", cores_per_node=8, modules=("a",), environment={"A": "b"}, warning=60)
    given = ticket(site, ranks=(2, 1), petsc_options=("-ksp_view",), core_hours=1.5)
    write_ticket(tmp_path, given)
    assert read_ticket(tmp_path) == given
    (tmp_path / "submit.json").write_text("{")
    with pytest.raises(InputError, match="is not the record of a submission"):
        read_ticket(tmp_path)


def test_the_log_of_legs_tells_what_is_open(tmp_path: Path) -> None:
    log = LegLog(tmp_path)
    assert open_leg(log.events()) is None and newest_job(log.events()) == ""
    log.append("submitted", leg=1, job="7")
    log.append("began", leg=1, job="7")
    assert newest_job(log.events()) == "7"
    with (tmp_path / "legs.jsonl").open("a") as file:
        file.write('{"event": "en')  # cut short by a crash
    log.append("ended", leg=1, goes_on=True)
    assert [event["event"] for event in log.events()] == ["submitted", "began", "ended"]
    assert open_leg(log.events()) is not None, "the next leg is about to be submitted"
    log.append("halted", reason="no answer")
    assert open_leg(log.events()) is None and halt_reason(log.events()) == "no answer"


def supervised(
    seconds: int | None,
    warning: int,
    program: str,
    tmp_path: Path,
    signals: tuple[tuple[float, int], ...] = (),
) -> tuple[int, Supervisor, list[str]]:
    """Run a program under a supervisor that gets signals after some seconds; return code, supervisor, notes."""
    notes: list[str] = []
    with Supervisor(seconds, warning, notes.append) as supervisor:
        for delay, number in signals:
            threading.Timer(delay, os.kill, (os.getpid(), number)).start()
        code = supervisor.run([sys.executable, "-c", program], tmp_path)
    return code, supervisor, notes


WILLING = """
import signal, sys, time
for number in (signal.SIGUSR1, signal.SIGTERM):
    signal.signal(number, lambda *a: sys.exit(4))
time.sleep(30)
"""
STUBBORN = "import signal, time; [signal.signal(n, signal.SIG_IGN) for n in (10, 15)]; time.sleep(30)"


def test_a_leg_is_stopped_before_its_wall_clock_ends(tmp_path: Path) -> None:
    code, supervisor, notes = supervised(3, 2, WILLING, tmp_path)
    assert (code, supervisor.asked, supervisor.at_limit, notes) == (4, WALL_CLOCK, True, [WALL_CLOCK])
    assert supervisor.elapsed() < 3


def test_a_leg_that_does_not_stop_is_ended(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("lattice.batch.supervise.KILL_AFTER", 0.5)
    code, supervisor, _ = supervised(3, 2, STUBBORN, tmp_path)
    assert code == 128 + signal.SIGKILL and supervisor.at_limit


def test_the_time_of_day_does_not_count(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(time, "time", lambda: 0.0)
    code, supervisor, _ = supervised(100, 2, "import time; time.sleep(0.5)", tmp_path)
    assert (code, supervisor.asked) == (0, "")


@pytest.mark.parametrize(
    ("seconds", "number", "at_limit"),
    [
        (None, signal.SIGUSR1, False),
        (100000, signal.SIGUSR1, False),  # far from the end: a person's
        (200, signal.SIGUSR1, True),  # Slurm's may come a minute early
        (200, signal.SIGTERM, False),
    ],
)
def test_a_schedulers_warning_is_told_from_a_persons_wish(
    seconds: int | None, number: int, at_limit: bool, tmp_path: Path
) -> None:
    code, supervisor, notes = supervised(seconds, 100, WILLING, tmp_path, ((0.6, number),))
    assert (code, supervisor.at_limit) == (4, at_limit)
    assert notes == [WALL_CLOCK if at_limit else signal.Signals(number).name]


def test_a_process_does_not_outlive_its_leg(tmp_path: Path) -> None:
    script = f"""
import sys
from pathlib import Path
from lattice.batch.supervise import Supervisor
with Supervisor(None, 1, print) as supervisor:
    supervisor.run([sys.executable, "-c", "import os, pathlib, time; pathlib.Path('pid').write_text(str(os.getpid())); time.sleep(30)"], Path({str(tmp_path)!r}))
"""
    process = subprocess.Popen([sys.executable, "-c", script])
    deadline = time.monotonic() + 20
    while not (tmp_path / "pid").exists() or not (tmp_path / "pid").read_text():
        assert time.monotonic() < deadline
        time.sleep(0.05)
    process.kill()
    process.wait()
    child = Path("/proc", (tmp_path / "pid").read_text())
    while child.exists() and child.joinpath("stat").read_text().rpartition(")")[2].split()[0] != "Z":
        assert time.monotonic() < deadline
        time.sleep(0.05)


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Return a run's folder that holds a state of an earlier run."""
    small = Lattice(nt=4, ny=1, nx=8)
    write_serial(tmp_path / "state.h5", small, smooth_field(small))
    return tmp_path


def began(folder: Path, new_state: bool) -> None:
    """Do to a folder what a run does that then dies."""
    (folder / "job.toml").write_text("new = 1\n")
    (folder / "summary.json").unlink(missing_ok=True)
    if new_state:
        shutil.copy(folder / "state.h5", folder / "copy.h5")
        (folder / "copy.h5").replace(folder / "state.h5")


@pytest.mark.parametrize(
    ("code", "asked", "new_state", "result", "outcome", "reason"),
    [
        (137, "", True, 70, "failed", "a rank or the launcher was ended by SIGKILL, often for want of memory; the state of step"),
        (137, "", False, 70, "failed", "there is no state yet"),
        (1, "", True, 70, "failed", "the ranks' launcher ended with code 1"),
        (70, "", True, 70, "failed", "a rank failed, its message is in the run's output"),
        (1, "SIGTERM", True, 4, "interrupted", "stopped by SIGTERM within a step; the state of step"),
        (137, "Ctrl-C", False, 130, "interrupted", "stopped by Ctrl-C within a step; there is no state yet"),
    ],
)  # fmt: skip
def test_the_summary_of_a_run_that_died_tells_the_truth(
    code: int, asked: str, new_state: bool, result: int, outcome: str, reason: str, folder: Path
) -> None:
    ending = Ending(folder, 2)
    began(folder, new_state)
    if asked:
        ending.note(asked)
    assert ending.conclude(code) == result
    summary = json.loads((folder / "summary.json").read_text())
    assert summary["outcome"] == outcome and reason in summary["reason"]
    assert summary["lost"] == (code not in (70,) and not asked)
    assert ("scalars" in summary) == new_state, "numbers of an earlier run's state are not this run's"
    assert not (folder / "stop.txt").exists()


def test_a_run_that_never_began_leaves_the_earlier_ones_summary(folder: Path) -> None:
    (folder / "summary.json").write_text('{"outcome": "converged"}')
    ending = Ending(folder, 2)
    assert ending.conclude(70) == 70
    assert json.loads((folder / "summary.json").read_text()) == {"outcome": "converged"}


@pytest.mark.parametrize("code", [0, 2, 3, 4, 70])
def test_a_run_that_has_said_how_it_ended_is_believed(code: int, folder: Path) -> None:
    ending = Ending(folder, 2)
    began(folder, new_state=True)
    (folder / "summary.json").write_text("{}")
    assert ending.conclude(code) == code
    assert (folder / "summary.json").read_text() == "{}"
