"""Campaigns as they run: several at once, killed, stopped, resumed, bounded in time."""

from __future__ import annotations

import json
import os
import random
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
import tomli_w

from lattice.campaign import attempt, run
from lattice.campaign.attempt import is_running
from lattice.campaign.folder import CampaignFolder, Record
from lattice.campaign.reader import Campaign, read_campaign
from lattice.campaign.run import CampaignResult, Choices, run_campaign
from lattice.errors import InputError, LatticeError
from tests.sources import ROOT

WAVE = {
    "law": {"name": "kuramoto-sivashinsky"},
    "box": {"length_x": 8.0, "drift_x": 0.5},
    "lattice": {"nt": 1, "nx": 16},
    "start": {"kind": "waves", "modes": [{"amplitude": 2.0, "kx": 1}]},
    "solve": {"stages": ["newton"]},
    "output": {"picture": False},
}
# A wave, the same one elsewhere, a start whose Newton steps are used up.
THREE = {
    "start.modes": [[{"amplitude": 2.0, "kx": 1, "phase": phase}] for phase in (0.0, 1.0, 2.0)],
    "solve.newton_steps": [40, 40, 1],
}
ENDLESS = {"start": [{"kind": "march", "spin_up": 1e7, "dt": 0.1}, WAVE["start"]]}
PATIENCE = 120.0


def written(folder: Path, vary: dict[str, Any], **sections: Any) -> Path:
    path = folder / "waves.toml"
    tables = {"job": WAVE, "vary": [vary], "output": {"folder": str(folder / "runs")}, **sections}
    path.write_text(tomli_w.dumps(tables), encoding="utf-8")
    return path


def begin(*arguments: str | Path) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-m", "lattice", "campaign", *map(str, arguments)],
        cwd=ROOT,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
    )


def finish(process: subprocess.Popen[str]) -> tuple[int, str]:
    text, _ = process.communicate(timeout=PATIENCE)
    return process.returncode, text


def wait_for(claim: Callable[[], bool]) -> None:
    deadline = time.monotonic() + PATIENCE
    while not claim():
        assert time.monotonic() < deadline, "nothing came of it"
        time.sleep(0.05)


def results(folder: Path) -> list[dict[str, Any]]:
    """Return what the members found, to the digits that a resumed solve repeats."""
    lines = (folder / "runs" / "outcomes.jsonl").read_text(encoding="utf-8").splitlines()
    found = []
    for line in lines:
        entry = json.loads(line)
        del entry["cost"]
        entry["converged"] = entry.pop("residual_rms") < 1e-10
        del entry["residual_max"]
        entry["scalars"] = {name: round(value, 8) + 0.0 for name, value in entry["scalars"].items()}
        entry["mean_square"] = round(entry["mean_square"], 8)
        found.append(entry)
    return found


def attempts(folder: Path) -> list[int]:
    return [record.attempts for record in CampaignFolder(folder / "runs").records(range(20))]


@pytest.fixture(scope="module")
def uninterrupted(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, str]:
    """Return the folder of a campaign that nothing disturbed, and what it said."""
    folder = tmp_path_factory.mktemp("uninterrupted")
    code, text = finish(begin(written(folder, THREE), "--at-once", "2"))
    assert code == 0, text
    return folder, text


def test_members_run_and_their_outcomes_are_told(uninterrupted: tuple[Path, str]) -> None:
    folder, text = uninterrupted
    found = results(folder)
    assert [entry["outcome"] for entry in found] == ["state", "duplicate of member 0", "not converged"]
    assert [entry["duplicate_of"] for entry in found] == [None, 0, None]
    assert [entry["kind"] for entry in found] == ["steady", "steady", ""]
    assert [entry["values"]["solve.newton_steps"] for entry in found] == [40, 40, 1]
    assert "2 of 3 starts became states: 67 %" in text
    assert "1 distinct" in text
    summary = json.loads((folder / "runs" / "campaign.json").read_text(encoding="utf-8"))
    assert (summary["ended"], summary["successes"], summary["states"]) == (3, 2, 1)
    assert 0.0 < summary["core_seconds"] < 3 * PATIENCE
    assert (folder / "runs" / "states.png").exists()


def test_tables_and_picture_are_made_again_from_files_alone(
    uninterrupted: tuple[Path, str], monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    from lattice.cli.main import main

    folder, text = uninterrupted
    before = results(folder)
    names = ("outcomes.jsonl", "campaign.json", "table.txt", "states.png")
    old = [(folder / "runs" / name).read_bytes() for name in names]
    for name in names:
        (folder / "runs" / name).unlink()
    assert main(["campaign", str(folder / "waves.toml"), "--report"]) == 0
    assert capsys.readouterr().out in text
    assert results(folder) == before
    assert [(folder / "runs" / name).read_bytes() for name in names] == old


def test_an_ended_campaign_runs_nothing_again(
    uninterrupted: tuple[Path, str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(run, "solve_command", lambda *known: pytest.fail("a member was run again"))
    folder, _ = uninterrupted
    result = run_campaign(read_campaign(folder / "waves.toml"), lambda text: None)
    assert (result.stopped, result.tally.ended) == ("", 3)


def test_the_list_tells_a_script_what_is_to_run(
    uninterrupted: tuple[Path, str], capsys: pytest.CaptureFixture[str]
) -> None:
    from lattice.cli.main import main

    folder, _ = uninterrupted
    assert main(["campaign", str(folder / "waves.toml"), "--list", "--json"]) == 0
    listed = json.loads(capsys.readouterr().out)
    assert [(entry["member"], entry["finished"]) for entry in listed] == [(0, True), (1, True), (2, True)]
    assert listed[1]["folder"] == str(folder / "runs" / "members" / "0001")


def kill_when(process: subprocess.Popen[str], claim: Callable[[], bool], number: signal.Signals) -> None:
    wait_for(lambda: claim() or process.poll() is not None)
    process.send_signal(number)


@pytest.mark.long
def test_after_a_kill_orphans_are_taken_in_and_nothing_runs_twice(
    uninterrupted: tuple[Path, str], tmp_path: Path
) -> None:
    path, files = written(tmp_path, THREE), CampaignFolder(tmp_path / "runs")
    first = begin(path, "--at-once", "2")
    # Both members have just been started: neither has come to take its run folder's own lock.
    lock = files.member(1).lock
    kill_when(first, lambda: lock.exists() and lock.read_text() != "", signal.SIGKILL)
    assert finish(first)[0] == -signal.SIGKILL
    code, text = finish(begin(path, "--at-once", "2"))
    assert code == 0, text
    assert text.count("waiting for it, it runs already on") == 2
    assert results(tmp_path) == results(uninterrupted[0])
    assert attempts(tmp_path) == [1, 1, 1]


@pytest.mark.long
@pytest.mark.timeout(900)
@pytest.mark.parametrize("seed", range(6))
def test_a_kill_at_any_instant_leaves_the_same_table(
    uninterrupted: tuple[Path, str], tmp_path: Path, seed: int
) -> None:
    path, instants = written(tmp_path, THREE), random.Random(seed)
    for _ in range(3):
        process = begin(path, "--at-once", str(1 + seed % 2))
        with pytest.raises(subprocess.TimeoutExpired):
            process.wait(instants.uniform(0.3, 4.0))
        process.kill()
        finish(process)
    code, text = finish(begin(path))
    assert code == 0, text
    assert results(tmp_path) == results(uninterrupted[0])
    logs = [CampaignFolder(tmp_path / "runs").member(number).log.read_text() for number in (0, 1)]
    assert [log.count("\nconverged: ") for log in logs] == [1, 1]


@pytest.mark.long
@pytest.mark.timeout(900)
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGUSR1], ids=lambda n: n.name)
def test_a_stopped_campaign_goes_on(
    uninterrupted: tuple[Path, str], tmp_path: Path, number: signal.Signals
) -> None:
    path, files = written(tmp_path, THREE), CampaignFolder(tmp_path / "runs")
    first = begin(path)
    kill_when(first, lambda: files.member(1).steps.exists(), number)
    code, text = finish(first)
    assert code == 4, text
    assert f"({number.name}); the same command goes on" in text
    assert not any(is_running(files.member(k)) for k in range(3))
    code, text = finish(begin(path))
    assert code == 0, text
    assert results(tmp_path) == results(uninterrupted[0])


@pytest.mark.long
def test_a_killed_member_harms_no_other_and_one_runs_alone(tmp_path: Path) -> None:
    path, files = written(tmp_path, ENDLESS), CampaignFolder(tmp_path / "runs")
    campaign = begin(path, "--at-once", "2")
    wait_for(lambda: (files.member(0).run / "job.toml").exists())
    alone = begin(path, "--member", "0")
    code, text = finish(alone)
    assert code == 2
    assert "runs already" in text
    os.kill(json.loads(files.member(0).lock.read_text())["process"], signal.SIGKILL)
    code, text = finish(campaign)
    assert code == 0, text
    records = files.records(range(2))
    assert [(r.outcome, r.final) for r in records] == [("failed", True), ("converged", True)]
    assert "member 0 failed: killed by SIGKILL" in text
    code, text = finish(begin(path, "--member", "1"))
    assert (code, attempts(tmp_path)) == (0, [1, 1]), text


# The rest is about time and processes, which members that compute would only blur: commands of the shell
# stand in for `lattice solve`.


def play(
    folder: Path,
    monkeypatch: pytest.MonkeyPatch,
    scripts: list[str],
    choices: Choices | None = None,
    **limits: Any,
) -> tuple[CampaignResult, list[Record], float]:
    """Run a campaign whose members are shell scripts; return result, records and seconds."""
    vary = {"box.length_x": [8.0 + k for k in range(len(scripts))]}
    campaign: Campaign = read_campaign(written(folder, vary, limits=limits))

    def command(files: Any, ranks: int, launcher: str | None, resume: bool) -> list[str]:
        return ["/bin/sh", "-c", f"cd {files.run}; {scripts[int(files.run.name)]}"]

    monkeypatch.setattr(run, "solve_command", command)
    began = time.monotonic()
    result = run_campaign(campaign, lambda text: None, choices)
    records = CampaignFolder(campaign.folder).records(range(len(scripts)))
    return result, records, time.monotonic() - began


def says(outcome: str) -> str:
    return f"""echo '{{"outcome": "{outcome}", "reason": "as told"}}' > summary.json"""


def test_a_member_is_stopped_at_its_time_and_goes_on_with_more(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    # It keeps its state on SIGUSR1, as a solve does.
    slow = 'trap "touch asked; exit 4" USR1; while :; do sleep 0.05; done'
    quick = f"{says('stalled')}; exit 3"
    result, records, seconds = play(tmp_path, monkeypatch, [slow, quick], member_seconds=0.4)
    assert [(r.outcome, r.final, r.limit) for r in records] == [
        ("interrupted", True, 0.4),
        ("stalled", True, None),
    ]
    assert records[0].reason == "stopped at its limit of 0.4 s"
    assert (result.stopped, result.tally.ended) == ("", 2)
    assert 0.4 < seconds < 10.0
    assert (tmp_path / "runs" / "members" / "0000" / "asked").exists()
    _, records, _ = play(tmp_path, monkeypatch, [quick, "exit 1"], member_seconds=5.0)
    assert [(r.outcome, r.attempts) for r in records] == [("stalled", 2), ("stalled", 1)]


def test_one_that_does_not_stop_is_ended_by_force(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    for name in ("STOP_GRACE", "KILL_GRACE"):
        monkeypatch.setattr(attempt, name, 0.3)
    monkeypatch.setattr(run, "STOP_GRACE", 0.3)
    deaf = 'trap "" USR1 TERM; while :; do sleep 0.05; done'
    _, records, seconds = play(tmp_path, monkeypatch, [deaf], member_seconds=0.3)
    assert [(r.outcome, r.final, r.exit_code) for r in records] == [("interrupted", True, -signal.SIGKILL)]
    assert seconds < 10.0


def test_the_whole_is_stopped_at_its_time_and_goes_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    slow = "sleep 0.5; " + says("converged") + "; exit 0"
    monkeypatch.setattr(run, "judge_all", lambda *known: None)
    result, records, _ = play(tmp_path, monkeypatch, [slow] * 4, total_seconds=0.8)
    assert result.stopped == "limits.total_seconds = 0.8 is used up"
    assert [(r.outcome, r.final) for r in records] == [("converged", True), ("interrupted", False)]
    result, records, _ = play(tmp_path, monkeypatch, [slow] * 4)
    assert [r.attempts for r in records] == [1, 2, 1, 1]
    assert result.tally.ended == 4


def test_no_more_run_at_once_than_given(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    log = tmp_path / "log"
    script = f"echo + >> {log}; sleep 0.4; echo - >> {log}; exit 3"
    play(tmp_path, monkeypatch, [script] * 6, at_once=3)
    running, most = 0, 0
    for line in log.read_text().split():
        running += 1 if line == "+" else -1
        most = max(most, running)
    assert (running, most) == (0, 3)


def test_failures_are_kept_and_tried_again_on_request(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    _, records, _ = play(tmp_path, monkeypatch, ["echo no such luck; exit 70", f"{says('stalled')}; exit 3"])
    assert [r.reason for r in records] == ["exit code 70: no such luck", "as told"]
    _, records, _ = play(tmp_path, monkeypatch, ["exit 5"] * 2)
    assert [r.attempts for r in records] == [1, 1]
    _, records, _ = play(tmp_path, monkeypatch, [f"{says('stalled')}; exit 3"] * 2, Choices(retry=True))
    assert [(r.outcome, r.attempts) for r in records] == [("stalled", 2), ("stalled", 1)]


def test_a_changed_job_is_not_mixed_with_what_ran(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    ended = f"{says('stalled')}; exit 3"
    play(tmp_path, monkeypatch, [ended] * 2)
    vary = {"box.length_x": [8.0, 9.5]}
    changed = read_campaign(written(tmp_path, vary))
    with pytest.raises(InputError, match="holds member 1, whose job has changed"):
        run_campaign(changed, lambda text: None)
    run_campaign(changed, lambda text: None, Choices(force=True))
    records = CampaignFolder(tmp_path / "runs").records(range(2))
    assert [record.values for record in records] == [{"box.length_x": 8.0}, {"box.length_x": 9.5}]


def test_members_stop_beginning_where_the_disk_limit_is_reached(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    script = f"head -c 400000 /dev/zero > log2.txt; {says('stalled')}; exit 3"
    result, records, _ = play(tmp_path, monkeypatch, [script] * 4, disk_mb=1.0)
    assert [r.member for r in records] == [0, 1]
    assert "limits.disk_mb is 1" in result.stopped
    assert result.tally.ended == 2


def test_one_process_runs_a_campaign_at_a_time(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from lattice.store.lock import FolderLock

    (tmp_path / "runs").mkdir()
    other = FolderLock(tmp_path / "runs" / "campaign.lock")
    other.take()
    with pytest.raises(LatticeError, match="in use"):
        play(tmp_path, monkeypatch, ["exit 3"])
    other.release()
