"""Campaign files: what varies, what is refused and how, and whether it fits the disk."""

from __future__ import annotations

import shutil
from collections import namedtuple
from pathlib import Path
from typing import Any

import pytest
import tomli_w
from hypothesis import given
from hypothesis import strategies as st

from lattice.campaign.folder import CampaignFolder
from lattice.campaign.reader import read_campaign
from lattice.campaign.room import check_room, estimate, kept_bytes, member_bytes, shortage, state_bytes
from lattice.campaign.run import plan_of
from lattice.campaign.vary import MOST_MEMBERS, VaryError, expand, lay_in
from lattice.errors import InputError
from tests.sources import ROOT

WAVE = {
    "law": {"name": "kuramoto-sivashinsky"},
    "box": {"length_x": 8.0, "drift_x": 0.5},
    "lattice": {"nt": 1, "nx": 16},
    "start": {"kind": "waves", "modes": [{"amplitude": 2.0, "kx": 1}]},
    "solve": {"stages": ["newton"]},
    "output": {"picture": False},
}
LENGTHS = {"box": {"length_x": [7.5, 8.0, 8.5]}}


def written(folder: Path, *vary: dict[str, Any], **sections: Any) -> Path:
    """Write a campaign file of small waves."""
    tables = {"job": WAVE, "vary": list(vary), **sections}
    path = folder / "waves.toml"
    path.write_text(tomli_w.dumps(tables), encoding="utf-8")
    return path


def refusal(path: Path, **options: Any) -> str:
    with pytest.raises(InputError) as caught:
        read_campaign(path, **options)
    return str(caught.value)


def test_keys_of_a_table_vary_together_and_tables_combine(tmp_path: Path) -> None:
    together = {"box": {"length_x": [7.5, 8.0]}, "lattice": {"nx": [16, 20]}}
    campaign = read_campaign(written(tmp_path, together, {"lattice": {"order_x": [2, 4]}}))
    jobs = [member.job for member in campaign.members]
    found = [(job.box.length_x, job.lattice.nx, job.lattice.order_x) for job in jobs if job is not None]
    assert found == [(7.5, 16, 2), (7.5, 16, 4), (8.0, 20, 2), (8.0, 20, 4)]
    assert [member.number for member in campaign.members] == [0, 1, 2, 3]
    assert campaign.keys == ("box.length_x", "lattice.nx", "lattice.order_x")
    assert campaign.folder == Path("runs/waves")


def test_a_start_and_a_key_of_it_vary_together() -> None:
    starts = [{"kind": "march", "seed": 7}, {"kind": "waves", "modes": []}]
    rows = expand([{"start": starts}, {"start.seed": [1]}])
    assert lay_in({"start": {"kind": "state"}}, rows[0]) == {"start": {"kind": "march", "seed": 1}}


def test_the_base_may_be_a_file_beside_the_campaign(tmp_path: Path) -> None:
    (tmp_path / "wave.toml").write_text(tomli_w.dumps(WAVE), encoding="utf-8")
    path = tmp_path / "many.toml"
    path.write_text(tomli_w.dumps({"job": "wave.toml", "vary": [LENGTHS]}), encoding="utf-8")
    from_file, inline = read_campaign(path), read_campaign(written(tmp_path, LENGTHS))
    assert [m.digest for m in from_file.members] == [m.digest for m in inline.members]


@given(
    first=st.integers(-20, 20), count=st.integers(2, 30), step=st.sampled_from([1, 2, -3, 0.1, 0.25, -0.3])
)
def test_a_stepped_range_has_both_ends(first: int, count: int, step: float) -> None:
    last = first + step * (count - 1)
    (values,) = ([row["a.b"] for row in expand([{"a.b": {"from": first, "to": last, "step": step}}])],)
    assert len(values) == count
    assert values[0] == first
    assert values[-1] == pytest.approx(last, abs=1e-12)


REFUSED: list[tuple[Any, tuple[str, ...]]] = [
    ([], ("vary", "must be one or more tables")),
    ([{}], ("vary[1]", "must name keys of the job")),
    ([{"start": {"seed": 3}}], ("vary[1].start.seed", "must be a list of values", "got 3", "put it in [ ]")),
    ([{"start": {"seed": []}}], ("vary[1].start.seed", "at least one value")),
    ([{"a.b": [1, 2], "a.c": [1]}], ("vary[1]", "a.b: 2, a.c: 1", "a [[vary]] table of its own")),
    ([{"a.b": [1]}, {"a.b": [2]}], ("vary[2].a.b", "varies in vary[1] already")),
    ([{"a.b": {"from": 1, "too": 3}}], ("vary[1].a.b.too", "did you mean 'to'?")),
    ([{"a.b": {"from": 1}}], ("vary[1].a.b", "a range without to")),
    ([{"a.b": {"from": 1.0, "to": 2.0}}], ("vary[1].a.b", "needs a count or a step")),
    ([{"a.b": {"from": 1, "to": 5, "step": -1}}], ("vary[1].a.b.step", "must lead from 1 to 5")),
    ([{"a.b": {"from": 1, "to": 5, "step": 1, "count": 5}}], ("count or step, not both",)),
    ([{"a.b": {"from": 1, "to": "5"}}], ("vary[1].a.b.to", "must be a number")),
    ([{"a.b": {"from": 1, "to": 5, "count": 1}}], ("vary[1].a.b.count", "integer >= 2")),
    ([{"a.b": {"from": 0, "to": 10**9}}], (f"at most {MOST_MEMBERS}",)),
    (
        [{"a.b": {"from": 1, "to": 200}}, {"a.c": {"from": 1, "to": 200}}],
        (f"{MOST_MEMBERS} members, got 40000",),
    ),
]


@pytest.mark.parametrize(("tables", "says"), REFUSED, ids=[says[0][:40] for _, says in REFUSED])
def test_what_cannot_vary_is_refused(tables: Any, says: tuple[str, ...]) -> None:
    with pytest.raises(VaryError) as caught:
        expand(tables)
    for part in says:
        assert part in str(caught.value)


WRONG: list[tuple[tuple[dict[str, Any], ...], dict[str, Any], tuple[str, ...]]] = [
    (
        ({"box": {"length_x": [8.0, -1.0]}},),
        {},
        ("member 1 (box.length_x = -1.0): box.length_x: must be > 0",),
    ),
    (({"start": {"sed": [1]}},), {}, ("member 0 (start.sed = 1): start.sed", "known are")),
    (({"law.name": ["swift-hohenburg"]},), {}, ("member 0", "did you mean 'swift-hohenberg'?")),
    (({"lattice": {"nx": [16, 20, 4]}},), {}, ("member 2 (lattice.nx = 4): lattice.nx: must be >=",)),
    (({"start.modes.kx": [1]},), {}, ("start.modes.kx", "start.modes is not a table")),
    (({"output": {"folder": ["a"]}},), {}, ("output.folder", "gives every member its own folder")),
    (
        (LENGTHS,),
        {"limits": {"at_onc": 2}},
        ("limits.at_onc: is not a key of [limits] (did you mean 'at_once'?)",),
    ),
    ((LENGTHS,), {"limits": {"at_once": 0}}, ("limits.at_once: must be >= 1, got 0",)),
    ((LENGTHS,), {"limits": {"disk_mb": "2"}}, ("limits.disk_mb: must be a number", "without quotes")),
    ((LENGTHS,), {"output": {"keep": "state"}}, ("output.keep: must be one of all, states, got 'state'",)),
    ((LENGTHS,), {"limits": {"ranks": 40}}, ("member 0", "limits.ranks", "the largest count that works")),
    ((LENGTHS,), {"solve": {}}, ("solve: is not a key of a campaign file", "write [job.solve]")),
    ((LENGTHS,), {"limit": {}}, ("did you mean 'limits'?",)),
    ((LENGTHS,), {"job": "nowhere.toml"}, ("job: must be an existing file, got 'nowhere.toml'",)),
    ((LENGTHS,), {"job": 3}, ("job: must be the path of a job file",)),
]


@pytest.mark.parametrize(("vary", "sections", "says"), WRONG, ids=[says[0][:50] for _, _, says in WRONG])
def test_a_wrong_file_is_refused_and_the_member_named(
    tmp_path: Path, vary: tuple[dict[str, Any], ...], sections: dict[str, Any], says: tuple[str, ...]
) -> None:
    message = refusal(written(tmp_path, *vary, **sections))
    assert "waves.toml" in message
    for part in says:
        assert part in message, message


def test_only_an_existing_member_is_read(tmp_path: Path) -> None:
    path = written(tmp_path, LENGTHS)
    assert [member.job is None for member in read_campaign(path, only=1).members] == [True, False, True]
    assert "0 to 2, got 3" in refusal(path, only=3)


def test_limits_on_the_command_line_replace_the_files(tmp_path: Path) -> None:
    path = written(tmp_path, LENGTHS, limits={"at_once": 3, "member_seconds": 5})
    limits = read_campaign(path, limits={"at_once": 1}).limits
    assert (limits.at_once, limits.member_seconds, limits.ranks) == (1, 5, 1)


def test_the_plan_tells_a_changed_job_from_the_same(tmp_path: Path) -> None:
    folder = CampaignFolder(tmp_path / "runs")
    first = read_campaign(written(tmp_path, LENGTHS))
    folder.keep_plan(plan_of(first), first.file)
    longer = read_campaign(written(tmp_path, {"box": {"length_x": [7.5, 8.0, 8.6, 9.0]}}))
    stored = [member["digest"] for member in folder.stored_members()]
    now = [member.digest for member in longer.members]
    assert [a == b for a, b in zip(stored, now, strict=False)] == [True, True, False]


Usage = namedtuple("Usage", "total used free")


def test_a_campaign_needs_room_for_what_it_keeps(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    out = {"folder": str(tmp_path / "runs")}
    everything = read_campaign(written(tmp_path, LENGTHS, output=out))
    one_state = read_campaign(written(tmp_path, LENGTHS, output={**out, "most_states": 1}))
    job = everything.members[0].job
    assert job is not None
    assert state_bytes(job) >= 16 * 8
    assert estimate(everything, range(3)) - estimate(one_state, range(3)) == 2 * kept_bytes(job)
    room = estimate(one_state, range(3))
    monkeypatch.setattr(shutil, "disk_usage", lambda path: Usage(0, 0, int(room)))
    check_room(one_state, range(3))
    with pytest.raises(InputError, match=r"may take .* MB for 3 member\(s\), the file system has"):
        check_room(everything, range(3))
    monkeypatch.setattr(shutil, "disk_usage", lambda path: Usage(0, 0, member_bytes(job) - 1))
    assert "the file system has" in shortage(one_state, 0, [])


def test_no_member_begins_beyond_the_disk_limit(tmp_path: Path) -> None:
    campaign = read_campaign(
        written(tmp_path, LENGTHS, output={"folder": str(tmp_path / "runs")}, limits={"disk_mb": 0.8})
    )
    job = campaign.members[0].job
    assert job is not None
    assert 0.5e6 > member_bytes(job) > 0.25e6
    assert shortage(campaign, 0, [1]) == ""
    assert "limits.disk_mb is 0.8" in shortage(campaign, 0, [1, 2])
    (tmp_path / "runs").mkdir()
    (tmp_path / "runs" / "state.h5").write_bytes(b"x" * 700_000)
    with pytest.raises(InputError, match=r"member 0: limits\.disk_mb is 0\.8, 0\.7 MB are used"):
        check_room(campaign, range(3))


def test_the_campaigns_at_hand_can_be_read() -> None:
    paths = sorted((ROOT / "jobs" / "campaigns").glob("*.toml"))
    assert {path.stem for path in paths} >= {"film-windows", "film-lengths"}
    for path in paths:
        assert len(read_campaign(path).members) >= 5
        head = path.read_text(encoding="utf-8").split("\n\n")[0].splitlines()
        assert len(head) >= 3
        assert all(line.startswith("# ") for line in head)
