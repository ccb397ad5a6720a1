"""Site files and scripts: what is refused, what a script says, and that no value can break out of its place."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from lattice.batch.duration import format_duration, parse_duration
from lattice.batch.prepare import Wishes, choose_queue, new_ticket
from lattice.batch.render import Script, quoted, render
from lattice.batch.site import Site
from lattice.batch.sites import load_site, make_site, read_site, site_files
from lattice.errors import InputError
from tests.batch import ROOT, ticket

SLURM = {"scheduler": "slurm", "cores_per_node": 16, "time": 3600}
EXAMPLES = sorted((ROOT / "jobs" / "sites").glob("*.toml"))


@pytest.mark.parametrize(
    ("tables", "message"),
    [
        ({}, "scheduler: is required; add scheduler = ..."),
        ({"scheduler": "slurn"}, "scheduler: must be one of slurm, pbs, local, got 'slurn'"),
        ({"scheduler": "slurm"}, "cores_per_node is required for scheduler = 'slurm'; add it"),
        ({**SLURM, "accounts": "x"}, "accounts: is not a key of a site file (did you mean 'account'?); known are"),
        ({**SLURM, "account": "x\n#SBATCH --exclusive"}, "account: must be one line of printable text"),
        ({**SLURM, "modules": ("petsc", "a\nrm -rf x")}, "modules[2]: must be one line of printable text"),
        ({**SLURM, "directives": ("--x\nrm y",)}, "directives[1]: must be one line of printable text"),
        ({**SLURM, "directives": ("exclusive",)}, "directives[1]: must start with a dash"),
        ({**SLURM, "environment": {"A B": "c"}}, "must be the name of an environment variable, got 'A B'"),
        ({**SLURM, "queues": {"a;b": {}}}, "must be a queue's or partition's name, got 'a;b'"),
        ({**SLURM, "queues": {"a": {"max_tim": "1h"}}}, "queues.a.max_tim: is not a key of [queues.a] (did you mean 'max_time'?)"),
        ({**SLURM, "time": "1:30"}, "time: must be like '1:30:00'"),
        ({**SLURM, "ranks_per_node": 17}, "ranks_per_node must be <= cores_per_node = 16, got 17"),
        ({"scheduler": "pbs", "cores_per_node": 4, "chain": "requeue"}, "chain = 'requeue' needs scheduler = 'slurm'"),
    ],
)  # fmt: skip
def test_a_site_that_cannot_be_used_is_refused_by_key(tables: dict[str, object], message: str) -> None:
    with pytest.raises(InputError) as refused:
        make_site(tables, "here.toml")
    assert message in str(refused.value)
    assert str(refused.value).startswith("here.toml: ")


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_each_example_is_a_site(path: Path) -> None:
    assert read_site(path).scheduler in path.stem.replace("this-machine", "local")


def test_a_site_is_found_in_the_project_first_then_at_the_user(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    for folder, cores in (("sites", 1), ("jobs/sites", 2), ("config/lattice/sites", 3)):
        path = tmp_path / folder
        path.mkdir(parents=True)
        (path / "here.toml").write_text(f'scheduler = "slurm"\ncores_per_node = {cores}\n')
        (path / f"only-{cores}.toml").write_text(f'scheduler = "slurm"\ncores_per_node = {cores}\n')
    environ = {"XDG_CONFIG_HOME": str(tmp_path / "config")}
    assert load_site("here", environ)[1].cores_per_node == 1
    assert load_site("only-3", environ)[1].cores_per_node == 3
    assert set(site_files(environ)) == {"here", "only-1", "only-2", "only-3"}
    with pytest.raises(InputError, match=r"got 'hare' \(did you mean 'here'\?\); known are local, here"):
        load_site("hare", environ)
    assert load_site(None, environ)[0] == "local"


def test_durations_are_read_in_every_usual_form() -> None:
    assert parse_duration("2-01:00:00") == 49 * 3600
    assert parse_duration(format_duration(49 * 3600 + 61)) == 49 * 3600 + 61
    for text in ("", "1:30", "-5m", "0s", "1.5h", "5x", "1:2:3:4"):
        with pytest.raises(ValueError, match="must be"):
            parse_duration(text)


def test_the_first_queue_that_takes_a_run_is_chosen() -> None:
    site = make_site(
        {**SLURM, "queues": {"test": {"max_time": "30m", "max_nodes": 1}, "long": {"max_ranks": 64}}}, "s"
    )
    assert choose_queue(ticket(site, seconds=1800, ranks=(16,)), None) == "test"
    assert choose_queue(ticket(site, seconds=1800, ranks=(17,)), None) == "long"
    assert choose_queue(ticket(site, seconds=1801, ranks=(2,)), None) == "long"
    with pytest.raises(
        InputError, match="test takes at most 0:30:00, wanted is 1:00:00; long takes at most 64 ranks"
    ):
        choose_queue(ticket(site, seconds=3600, ranks=(65,)), None)
    with pytest.raises(InputError, match=r"got 'lang' \(did you mean 'long'\?\)"):
        choose_queue(ticket(site), "lang")


def test_a_wall_clock_is_required_where_the_site_has_none() -> None:
    site = make_site({"scheduler": "pbs", "cores_per_node": 4}, "s")
    with pytest.raises(InputError, match="--time: is required"):
        new_ticket("film", ["solve"], "s", site, Wishes(), ())


def test_core_hours_count_whole_nodes_where_the_site_does() -> None:
    shared = make_site(SLURM, "s")
    whole = make_site({**SLURM, "whole_nodes": True}, "s")
    assert ticket(shared, ranks=(17,), seconds=1800, legs=2).most_core_hours() == 17.0
    assert ticket(whole, ranks=(17, 16), seconds=1800, legs=3).most_core_hours() == (32 + 16 + 16) / 2
    assert ticket(whole, ranks=(17,), seconds=1800, legs=3, core_hours=5.0).most_core_hours() == 5.0


def directives(text: str, mark: str) -> list[str]:
    lines = text.splitlines()
    first = next(number for number, line in enumerate(lines) if line and not line.startswith("#"))
    found = [line.removeprefix(mark).strip() for line in lines[:first] if line.startswith(mark)]
    assert not [line for line in lines[first:] if line.startswith(mark)], (
        "a directive after the first command is lost"
    )
    return found


def test_a_slurm_script_asks_for_what_the_ticket_says(tmp_path: Path) -> None:
    site = make_site(
        {
            **SLURM,
            "ranks_per_node": 8,
            "account": "mine",
            "queues": {"work": {}},
            "directives": ("--constraint=a",),
        },
        "s",
    )
    found = directives(
        render(Script(ticket(site, ranks=(8, 24), seconds=5400, queue="work"), tmp_path, 2)), "#SBATCH"
    )
    assert {
        "--ntasks=24", "--nodes=3", "--ntasks-per-node=8", "--time=1:30:00", "--partition=work", "--account=mine",
        "--signal=B:USR1@300", "--requeue", "--open-mode=append", "--constraint=a", f"--output={tmp_path}/run.log",
    } <= set(found)  # fmt: skip


# The options of PBS Professional's qsub that scripts may use, and the form of each one's value: PBS Professional
# Reference Guide, "PBS Commands", qsub; resources and placement from the User's Guide, "Allocating Resources
# and Placing Jobs" (both from memory).
PBS_FORMS = {
    "-S": r"/\S+",
    "-N": r"[A-Za-z][A-Za-z0-9_.+-]{0,14}",
    "-j": r"oe|eo|n",
    "-o": r"\S+",
    "-q": r"\w+",
    "-A": r"[\w-]+",
    "-r": r"y|n",
    "-J": r"\d+-\d+(:\d+)?(%\d+)?",
    "-l": r"select=(\d+:ncpus=\d+:mpiprocs=\d+(:mem=\d+mb)?\+?)+|walltime=\d+:\d\d:\d\d|place=(scatter|pack|free)(:excl|:shared)?",
}  # fmt: skip


@pytest.mark.parametrize("whole", [False, True])
@pytest.mark.parametrize("members", [None, 5])
@pytest.mark.parametrize("ranks", [1, 48, 100])
def test_pbs_directives_have_the_manuals_form(
    ranks: int, members: int | None, whole: bool, tmp_path: Path
) -> None:
    site = make_site(
        {"scheduler": "pbs", "cores_per_node": 48, "whole_nodes": whole, "account": "my-project"}, "s"
    )
    made = ticket(site, name="2d: wide, long film", ranks=(ranks,), queue="workq", memory_mb_per_rank=900)
    found = directives(render(Script(made, tmp_path, members=members)), "#PBS")
    for line in found:
        option, _, value = line.partition(" ")
        assert re.fullmatch(PBS_FORMS[option], value), line
    selected = next(line for line in found if "select=" in line)
    chunks = re.findall(r"(\d+):ncpus=(\d+):mpiprocs=(\d+)", selected)
    assert sum(int(count) * int(size) for count, _, size in chunks) == ranks
    assert all(int(cores) == 48 if whole else cores == size for _, cores, size in chunks)


@pytest.mark.skipif(shutil.which("shellcheck") is None, reason="shellcheck is not installed")
@pytest.mark.parametrize("members", [None, 3])
@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_scripts_are_sound_shell(path: Path, members: int | None, tmp_path: Path) -> None:
    site = read_site(path)
    text = render(Script(ticket(site, seconds=site.time), tmp_path, members=members))
    done = subprocess.run(
        ["shellcheck", "-e", "SC1091", "-"], input=text, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stdout


@given(st.text(max_size=30))
def test_any_printable_value_is_one_word_of_the_shell(value: str) -> None:
    if not value.isprintable():
        with pytest.raises(InputError, match="one line of printable text"):
            quoted(value)
        return
    done = subprocess.run(["sh", "-c", f"printf %s {quoted(value)}"], capture_output=True, check=True)
    assert done.stdout.decode("utf-8", "surrogatepass") == value


HOSTILE = "$(touch broken)`touch broken`;touch broken;'\"\\ & | > broken *"


@pytest.mark.parametrize("scheduler", ["slurm", "local"])
def test_no_value_of_a_site_runs_as_a_command(scheduler: str, tmp_path: Path) -> None:
    folder = tmp_path / "a $(touch broken) b"
    folder.mkdir()
    seen = tmp_path / "seen"
    fake = tmp_path / "python"
    fake.write_text(f'#!/bin/bash\nprintf "%s\\n" "$PWD" "$WORDS" "$@" >{seen}\n')
    fake.chmod(0o755)
    site = make_site(
        {"scheduler": scheduler, "cores_per_node": 4, "environment": {"WORDS": HOSTILE}, "python": str(fake),
         "account": HOSTILE}, "s",
    )  # fmt: skip
    text = render(Script(ticket(site, name=HOSTILE), folder))
    done = subprocess.run(
        ["bash", "-c", text], capture_output=True, text=True, cwd=tmp_path, timeout=30, check=False
    )
    assert done.returncode == 0, done.stderr
    assert seen.read_text().splitlines() == [
        str(folder),
        HOSTILE,
        "-m",
        "lattice",
        "leg",
        str(folder),
        "--number",
        "1",
    ]
    assert not list(tmp_path.rglob("broken"))


def test_a_folder_that_pbs_cannot_name_is_refused(tmp_path: Path) -> None:
    site = make_site({"scheduler": "pbs", "cores_per_node": 4}, "s")
    with pytest.raises(InputError, match="only letters, digits"):
        render(Script(ticket(site), tmp_path / "a b"))


def test_a_local_site_needs_no_numbers() -> None:
    assert Site(scheduler="local").nodes(7) == 1
