"""What a campaign makes of the files its members leave: outcomes, duplicates, rates, what is kept."""

from __future__ import annotations

import json
import signal
from dataclasses import replace
from itertools import permutations
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import binomtest

from lattice.campaign.attempt import LOST
from lattice.campaign.ending import ending
from lattice.campaign.folder import CampaignFolder, MemberFiles, Record, read_record
from lattice.campaign.keep import drop_fields, not_kept
from lattice.campaign.likeness import CERTAIN, POSSIBLE, Likeness, fingerprint
from lattice.campaign.rate import wilson_interval
from lattice.campaign.report import gather
from lattice.campaign.schema import OutputSection
from lattice.campaign.sheet import draw_sheet
from lattice.campaign.table import outcome_table
from lattice.campaign.tally import find_originals, make_rows, make_tally
from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law
from lattice.store.statefile import write_state
from lattice.store.statemeta import StateMeta

# The examples of table I (method 3) in Newcombe's comparison of seven methods for the confidence interval of
# a single proportion, Statistics in Medicine 17 (1998), 857 to 872; from memory.
NEWCOMBE = [
    (81, 263, 0.2553, 0.3662),
    (15, 148, 0.0624, 0.1605),
    (0, 20, 0.0000, 0.1611),
    (1, 29, 0.0061, 0.1718),
]


@pytest.mark.parametrize(("successes", "trials", "low", "high"), NEWCOMBE)
def test_the_interval_is_the_published_one(successes: int, trials: int, low: float, high: float) -> None:
    assert wilson_interval(successes, trials) == pytest.approx((low, high), abs=5e-5)


@given(trials=st.integers(1, 400), share=st.floats(0, 1), confidence=st.sampled_from([0.8, 0.95, 0.99]))
def test_the_interval_is_that_of_an_independent_library(trials: int, share: float, confidence: float) -> None:
    successes = round(share * trials)
    found = binomtest(successes, trials).proportion_ci(confidence, method="wilson")
    assert wilson_interval(successes, trials, confidence) == pytest.approx((found.low, found.high), abs=1e-12)


def files(folder: Path, summary: dict[str, Any] | None, log: str = "") -> MemberFiles:
    folder.mkdir(parents=True, exist_ok=True)
    found = MemberFiles(folder)
    if summary is not None:
        found.summary.write_text(json.dumps(summary), encoding="utf-8")
    found.log.write_text(log, encoding="utf-8")
    return found


STALLED = {"outcome": "stalled", "reason": "flat over 5 rounds", "residual_rms": 2e-4}
STOPPED = {"outcome": "interrupted", "reason": "SIGUSR1"}
ENDINGS: list[tuple[dict[str, Any] | None, int | str, bool, float | None, tuple[str, bool] | None]] = [
    ({"outcome": "converged"}, 0, False, None, ("converged", True)),
    ({"outcome": "converged"}, 0, True, None, ("converged", True)),
    (STALLED, 3, False, None, ("stalled", True)),
    ({"outcome": "not surviving refinement"}, LOST, False, None, ("not surviving refinement", True)),
    (STOPPED, 4, True, None, ("interrupted", False)),
    (STOPPED, 4, False, None, ("interrupted", False)),
    (STOPPED, LOST, False, None, ("interrupted", False)),
    (STOPPED, 4, True, 20.0, ("interrupted", True)),
    (None, 130, False, None, ("interrupted", False)),
    (None, -signal.SIGKILL, True, None, ("interrupted", False)),
    (None, -signal.SIGKILL, True, 20.0, ("interrupted", True)),
    (None, -signal.SIGKILL, False, None, ("failed", True)),
    (None, 137, False, None, ("failed", True)),
    (None, 70, False, None, ("failed", True)),
    ({"outcome": "failed", "reason": "no room"}, LOST, False, None, ("failed", True)),
    ({"outcome": "failed", "reason": "ranks died"}, 137, True, None, ("interrupted", False)),
    ({"outcome": "running"}, LOST, False, None, None),
    (None, LOST, False, None, None),
]


@pytest.mark.parametrize(("summary", "code", "stopping", "limit", "wanted"), ENDINGS)
def test_an_ending_is_told_by_exit_code_and_files(
    tmp_path: Path,
    summary: dict[str, Any] | None,
    code: int | str,
    stopping: bool,
    limit: float | None,
    wanted: tuple[str, bool] | None,
) -> None:
    found = ending(files(tmp_path, summary), code, stopping, limit)
    assert (found and (found.outcome, found.final)) == wanted


def test_a_failure_says_why(tmp_path: Path) -> None:
    said = files(tmp_path, None, "step 1\nfailed: the factorisation broke down\n\n")
    reasons = [ending(said, code, False, None) for code in (70, -9, 137)]
    assert [found and found.reason for found in reasons] == [
        "exit code 70: failed: the factorisation broke down",
        "killed by SIGKILL",
        "killed by SIGKILL",
    ]


def converged(member: int, **known: Any) -> Record:
    return Record(member, "converged", judged=True, values={"start.seed": member}, **known)


@given(links=st.lists(st.integers(0, 7), min_size=8, max_size=8))
def test_duplicates_do_not_depend_on_who_was_found_first(links: list[int]) -> None:
    records = [converged(member, same_as=other) for member, other in enumerate(links)]
    found = find_originals(records)
    assert find_originals(records[::-1]) == found
    assert all(found[member] == found[other] for member, other in enumerate(links))
    assert all(found[first] == first <= member for member, first in found.items())


def test_any_order_of_ending_gives_the_same_table() -> None:
    # Members 0, 2, 3 found one state; each is compared with the first of it that had ended before.
    tables = set()
    for order in permutations(range(4)):
        one_state = [member for member in order if member != 1]
        records = [
            converged(m, same_as=one_state[0] if m in one_state[1:] else None, kind="periodic")
            for m in range(4)
        ]
        rows = make_rows([{"member": m, "values": {}} for m in range(4)], records)
        tables.add(tuple(row.outcome for row in rows))
    assert tables == {("state", "state", "duplicate of member 0", "duplicate of member 0")}


def test_the_tally_counts_starts_states_and_costs() -> None:
    records = [
        converged(0, seconds=10.0, ranks=2),
        converged(1, seconds=6.0, same_as=0),
        converged(2, seconds=1.0, kind="constant"),
        converged(3, seconds=1.0, numbers={"mean_square": 1e-20}),
        converged(4, seconds=1.0, numbers={"mean_square": 1e-15, "residual_rms": 9e-11}),
        Record(5, "stalled", seconds=4.0),
        Record(6, "failed", "killed by SIGKILL", seconds=1.0),
        Record(7, "interrupted", final=False, seconds=3.0),
    ]
    rows = make_rows([{"member": m, "values": {"start.seed": m}} for m in range(9)], records)
    words = [
        "state",
        "duplicate of member 0",
        *["constant"] * 3,
        "stalled",
        "failed",
        "interrupted",
        "waiting",
    ]
    assert [row.outcome for row in rows] == words
    tally = make_tally(rows)
    assert (tally.members, tally.ended, tally.successes, tally.states) == (9, 7, 2, 1)
    assert tally.success_rate == 2 / 7
    assert tally.core_seconds == 37.0
    assert (tally.core_seconds_per_success, tally.core_seconds_per_state) == (18.5, 37.0)
    text = outcome_table(rows, tally)
    assert "member 6 failed: killed by SIGKILL" in text
    assert "2 of 7 starts became states: 29 % (95 % interval 8 to 64 %), 1 distinct" in text


def test_a_record_survives_its_file(tmp_path: Path) -> None:
    record = converged(3, repeats=(2, 1, 1), same_as=1, numbers={"scalars": {"period": 2.5}}, limit=4.0)
    path = tmp_path / "outcome.json"
    path.write_text(record.to_json(), encoding="utf-8")
    assert read_record(path) == record
    path.write_text(record.to_json()[:40], encoding="utf-8")
    assert read_record(path) is None


def film_state(
    path: Path,
    nt: int,
    nx: int,
    reflect: bool = False,
    shift: float = 0.0,
    extra: float = 0.0,
    times: int = 1,
) -> Path:
    """Write a field of a few waves on some lattice, moved or reflected."""
    from mpi4py import MPI

    law, lattice = load_law("kuramoto-sivashinsky"), Lattice(nt=nt, ny=1, nx=nx)
    t, x = np.meshgrid(2 * np.pi * np.arange(nt) / nt, 2 * np.pi * np.arange(nx) / nx, indexing="ij")
    t, x = times * t + shift, (-x if reflect else x) + 2.0 * shift
    u = np.cos(x - t) + 0.5 * np.sin(2 * x + t) + (0.2 + extra) * np.cos(3 * t) * np.sin(x + 1.0)
    owned = (-u if reflect else u)[:, np.newaxis, :, np.newaxis]
    from lattice.geometry.block import Block

    values = {"period": 20.0, "length_x": 22.0, "drift_x": 0.1}
    meta = StateMeta.of_law(law, lattice, values, residual_rms=1e-12, outcome="converged")
    path.parent.mkdir(parents=True, exist_ok=True)
    write_state(path, np.ascontiguousarray(owned), Block.whole(lattice), meta, MPI.COMM_SELF)
    return path


def likeness(path: Path, repeats: tuple[int, int, int] = (1, 1, 1), **changed: Any) -> Likeness:
    scalars = {"period": 20.0, "length_x": 22.0, "drift_x": 0.1, "source_u": 1e-17} | changed
    waves = fingerprint(path, "periodic", repeats)
    known = {"law": "film", "scalars": scalars, "mean_square": 0.65, "fingerprint": waves}
    return Likeness.of(known, "periodic", repeats)


def test_a_moved_reflected_refined_state_is_the_same_one(tmp_path: Path) -> None:
    plain = likeness(film_state(tmp_path / "a.h5", 24, 20))
    moved = likeness(
        film_state(tmp_path / "b.h5", 34, 27, reflect=True, shift=0.7), drift_x=-0.1, source_u=0.0
    )
    other = likeness(film_state(tmp_path / "c.h5", 24, 20, extra=0.05))
    assert plain.near(moved, CERTAIN)
    assert not plain.near(other, POSSIBLE)
    assert plain.near(likeness(tmp_path / "a.h5", period=20.1), POSSIBLE)
    assert not plain.near(likeness(tmp_path / "a.h5", period=20.1), CERTAIN)
    assert not plain.near(replace(plain, law="own"), POSSIBLE)


def test_a_repeated_state_is_the_one_it_repeats(tmp_path: Path) -> None:
    plain = likeness(film_state(tmp_path / "a.h5", 24, 20))
    path = film_state(tmp_path / "b.h5", 48, 20, times=2)
    assert likeness(path, (2, 1, 1), period=40.0).near(plain, CERTAIN)
    assert not likeness(path, (1, 1, 1), period=40.0).near(plain, POSSIBLE)


def test_fields_that_are_no_new_states_go(tmp_path: Path) -> None:
    folder = CampaignFolder(tmp_path)
    records = [
        converged(0, same_as=2),
        converged(1, kind="periodic"),
        converged(2),
        Record(3, "stalled"),
        Record(4, "interrupted", final=False),
        replace(converged(5), judged=False),
        Record(6, "interrupted", limit=3.0),
    ]
    for record in records:
        film_state(folder.member(record.member).state, 12, 12)
        folder.keep_record(record)
    kept = OutputSection(keep="states", most_states=1)
    assert [r.member for r in not_kept(records, OutputSection(most_states=1))] == [1]
    assert [r.member for r in not_kept(records, OutputSection())] == []
    drop_fields(folder, records, kept)
    assert [folder.member(m).state.exists() for m in range(7)] == [
        True,
        False,
        False,
        False,
        True,
        True,
        True,
    ]
    assert not_kept(folder.records(range(7)), kept) == []


def test_the_sheet_shows_every_distinct_state(tmp_path: Path) -> None:
    folder = CampaignFolder(tmp_path)
    folder.keep_plan([{"member": m, "values": {"start.seed": m}} for m in range(3)], tmp_path / "x.toml")
    for member in (0, 2):
        film_state(folder.member(member).state, 24, 20, extra=0.1 * member)
        folder.keep_record(converged(member, kind="relative periodic", repeats=(1, 1, 1)))
    rows, _ = gather(folder)
    assert draw_sheet(folder, rows) == folder.sheet
    assert folder.sheet.read_bytes()[:4] == b"\x89PNG"
    folder.member(0).state.unlink()
    folder.member(2).state.write_bytes(b"damaged")
    assert draw_sheet(folder, rows) is None
    assert not folder.sheet.exists()
