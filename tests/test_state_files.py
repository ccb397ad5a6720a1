"""State files: the same content from any ranks, whole after any kill, refused where anything is wrong."""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys
import textwrap
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lattice.errors import LatticeError, StateFileError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.store import writing
from lattice.store.layout import SCHEMA_VERSION
from lattice.store.statefile import StateFile, open_state, read_block, read_meta, read_whole, write_state
from lattice.store.statemeta import from_json, to_json
from tests.mpi import ROOT, run_ranks
from tests.states import make_meta, smooth_field, write_serial

LINE = Lattice(nt=20, ny=1, nx=40, dimensions=1)
SHEET = Lattice(nt=9, ny=14, nx=22, dimensions=2)


def run_where_h5py_can(ranks: int, script: str, way: str, *arguments: Any, check: bool = True) -> Any:
    """Run a parallel script that writes in one way; skip where that needs parallel HDF5 and there is none."""
    probe = """
        import sys, h5py
        if sys.argv[1] == "collective" and not h5py.get_config().mpi:
            print("h5py has no MPI here")
            sys.exit(0)
        """
    done = run_ranks(ranks, textwrap.dedent(probe) + textwrap.dedent(script), way, *arguments, check=check)
    if "h5py has no MPI here" in done.stdout:
        pytest.skip("h5py has no MPI here")
    return done


def run_script(name: str, *arguments: Any, timeout: float = 100.0) -> dict[str, Any]:
    """Run a script of this folder in a process of its own and return the JSON it prints."""
    done = subprocess.run(
        [sys.executable, ROOT / "tests" / name, *map(str, arguments)],
        capture_output=True,
        text=True,
        timeout=timeout,
        check=False,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )
    assert done.returncode == 0, done.stderr[-3000:]
    found: dict[str, Any] = json.loads(done.stdout)
    return found


@cache
def hashes_from_one_rank(folder: str) -> dict[str, str]:
    found: dict[str, str] = written_by(1, Path(folder))["hashes"]
    return found


def written_by(ranks: int, folder: Path) -> dict[str, Any]:
    done = run_ranks(ranks, ROOT / "tests" / "write_everywhere.py", folder)
    found: dict[str, Any] = json.loads(done.stdout)
    return found


def test_content_does_not_depend_on_ranks_or_way(
    ranks: int, tmp_path: Path, tmp_path_factory: pytest.TempPathFactory
) -> None:
    found = written_by(ranks, tmp_path)
    assert found["faults"] == []
    reference = hashes_from_one_rank(str(tmp_path_factory.getbasetemp()))
    for name, digest in found["hashes"].items():
        assert digest == reference[name.replace("collective", "root")], name
    if ranks > 1 and "collective" not in found["ways"]:
        pytest.skip("h5py has no MPI here: only the way through rank 0 was tried, and it is right")


@pytest.mark.parametrize("lattice", [LINE, SHEET, replace(SHEET, nt=1), replace(LINE, nt=1)])
def test_what_was_written_is_read(lattice: Lattice, tmp_path: Path) -> None:
    field = smooth_field(lattice, components=2)
    meta = write_serial(tmp_path / "s.h5", lattice, field)
    state = open_state(tmp_path / "s.h5")
    assert np.array_equal(state.field, field)
    assert replace(state.meta, written="") == meta
    assert np.array_equal(state.x, np.arange(lattice.nx) * (22.0 / lattice.nx))
    assert state.component("v").shape == meta.shape


def test_blocks_and_levels_are_parts_of_the_whole(tmp_path: Path) -> None:
    field = smooth_field(SHEET, components=2)
    write_serial(tmp_path / "s.h5", SHEET, field)
    block = Block(2, 7, 3, 9, 1, 20)
    assert np.array_equal(read_block(tmp_path / "s.h5", block), field[block.slices])
    with StateFile(tmp_path / "s.h5") as file:
        assert np.array_equal(file.levels("v", 3, 5), field[3:5, ..., 1])
        slabs = list(file.slabs("u", slab_bytes=8 * SHEET.ny * SHEET.nx * 2))
    assert [start for start, _ in slabs] == sorted(start for start, _ in slabs)
    assert np.array_equal(np.concatenate([values for _, values in slabs]), field[..., 0])


@pytest.mark.parametrize("lattice", [LINE, SHEET])
def test_xarray_opens_it_with_named_axes(lattice: Lattice, tmp_path: Path) -> None:
    xarray = pytest.importorskip("xarray")
    pytest.importorskip("h5netcdf")
    field = smooth_field(lattice)
    meta = write_serial(tmp_path / "s.h5", lattice, field)
    with xarray.open_dataset(tmp_path / "s.h5", engine="h5netcdf") as found:
        assert found["u"].dims == meta.axes
        assert np.array_equal(found["u"].values.reshape(field.shape[:3]), field[..., 0])
        for axis in meta.axes:
            assert np.array_equal(found[axis].values, meta.coordinate(axis))
            assert found[axis].attrs["units"] == "dimensionless"
            assert found[axis].attrs["long_name"]
        assert found.attrs["period"] == 10.25
        assert found.attrs["title"] == meta.title
        assert found.attrs["schema"] == "lattice-state"


def test_unknown_numbers_come_back_unknown() -> None:
    meta = make_meta(LINE, residual_rms=math.nan, mean_square=math.inf)
    back = from_json(to_json(meta))
    assert math.isnan(back.residual_rms) and math.isnan(back.mean_square)
    assert (
        back.values == meta.values and back.history == meta.history and list(back.values) == list(meta.values)
    )


@given(
    nt=st.integers(1, 300),
    ny=st.integers(1, 90),
    nx=st.integers(1, 300),
    slab_bytes=st.integers(8, 10**6),
)
def test_slabs_cover_every_node_once_in_bounded_memory(nt: int, ny: int, nx: int, slab_bytes: int) -> None:
    dimensions = 1 if ny == 1 else 2
    lattice = Lattice(nt=nt, ny=ny, nx=nx, dimensions=dimensions)
    meta = make_meta(lattice)
    kept, writing.SLAB_BYTES = writing.SLAB_BYTES, slab_bytes
    try:
        slabs = [slab for _, slab in writing.slabs(meta)]
    finally:
        writing.SLAB_BYTES = kept
    covered = np.zeros(lattice.shape, dtype=int)
    for slab in slabs:
        covered[slab.slices] += 1
    assert (covered == 1).all()
    chunk = dict(zip(meta.axes, writing.chunk_shape(meta), strict=True))
    smallest = 8 * chunk["t"] * chunk.get("y", 1) * nx
    assert max(8 * math.prod(slab.shape) for slab in slabs) <= max(slab_bytes, smallest)


def test_a_kill_at_any_instant_leaves_a_whole_state(tmp_path: Path) -> None:
    found = run_script("kill_writer.py", tmp_path, 50, 2024)
    assert found["kills"] == 50
    # Otherwise the kills would have come between the writes and shown nothing.
    assert found["torn"] >= 10, found
    assert found["left"] == [], "a later write removes what dead writers left"


@pytest.mark.parametrize(("way", "delay"), [("root", 0.11), ("collective", 0.05)])
def test_a_kill_during_a_parallel_write_leaves_a_whole_state(way: str, delay: float, tmp_path: Path) -> None:
    script = """
        import os, signal, sys, threading
        import numpy as np
        from mpi4py import MPI
        from lattice.geometry.block import Block
        from lattice.geometry.lattice import Lattice
        from lattice.store.statefile import write_state
        from tests.states import make_meta
        comm, lattice = MPI.COMM_WORLD, Lattice(nt=200, ny=1, nx=1024)
        half = lattice.nt // 2
        block = Block(comm.rank * half, (comm.rank + 1) * half, 0, 1, 0, lattice.nx)
        for number in range(1, 10**6):
            field = np.full((*block.shape, 1), float(number))
            meta = make_meta(lattice, mean_square=float(number))
            write_state(sys.argv[2], field, block, meta, comm, sys.argv[1])
            if number == 1 and comm.rank == 1:
                threading.Timer(float(sys.argv[3]), os.kill, (os.getpid(), signal.SIGKILL)).start()
        """
    path = tmp_path / "state.h5"
    assert run_where_h5py_can(2, script, way, path, str(delay), check=False).returncode != 0
    state = open_state(path)
    assert (state.field == state.meta.mean_square).all()


def test_a_flipped_bit_is_found_or_harmless(tmp_path: Path) -> None:
    write_serial(tmp_path / "s.h5", LINE, smooth_field(LINE, components=2))
    found = run_script("flip_bits.py", tmp_path / "s.h5", 300, 5)
    assert found["wrong"] == []
    # Field and record make up most of the file, and each flip there must be found.
    assert found["refused"] >= 0.7 * 300


def test_a_truncated_file_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "s.h5"
    write_serial(path, LINE, smooth_field(LINE))
    content = path.read_bytes()
    for share in np.linspace(0.0, 0.999, 23):
        path.write_bytes(content[: int(share * len(content))])
        with pytest.raises(StateFileError, match="is empty|is truncated|is not an HDF5 file"):
            open_state(path)


def foreign_text(path: Path) -> None:
    path.write_text("t,x,u\n0,0,1\n", encoding="utf-8")


def foreign_hdf5(path: Path) -> None:
    with h5py.File(path, "w") as file:
        file["u"] = np.zeros((4, 4))


def newer_schema(path: Path) -> None:
    write_serial(path, LINE, smooth_field(LINE))
    with h5py.File(path, "r+") as file:
        file.attrs["schema_version"] = SCHEMA_VERSION + 1


def edited_attribute(path: Path) -> None:
    write_serial(path, LINE, smooth_field(LINE))
    with h5py.File(path, "r+") as file:
        file.attrs["period"] = 3.0


def edited_record(path: Path) -> None:
    write_serial(path, LINE, smooth_field(LINE))
    with h5py.File(path, "r+") as file:
        record = file["lattice-record/metadata"]
        record[()] = record[()].replace(b"10.25", b"10.26")


def edited_coordinate(path: Path) -> None:
    write_serial(path, LINE, smooth_field(LINE))
    with h5py.File(path, "r+") as file:
        file["x"][3] = 0.0


def lost_component(path: Path) -> None:
    write_serial(path, LINE, smooth_field(LINE, components=2))
    with h5py.File(path, "r+") as file:
        del file["v"]


@pytest.mark.parametrize(
    ("make", "reason"),
    [
        (lambda path: None, "no such state file; check the path"),
        (lambda path: path.mkdir(), "is a folder; a state file is expected"),
        (lambda path: path.touch(), "is empty"),
        (foreign_text, "is not an HDF5 file"),
        (foreign_hdf5, "is HDF5 but no state file of this package"),
        (newer_schema, f"has schema version {SCHEMA_VERSION + 1}, .* upgrade the package"),
        (edited_attribute, "is damaged: its attribute 'period' differs"),
        (edited_record, "is damaged: its metadata do not match their sha256"),
        (edited_coordinate, "is damaged: its coordinate 'x' differs"),
        (lost_component, "is damaged: component 'v' must be float64"),
    ],
)
def test_a_file_that_is_no_state_is_refused_with_the_reason(make: Any, reason: str, tmp_path: Path) -> None:
    path = tmp_path / "s.h5"
    make(path)
    with pytest.raises(StateFileError, match=reason) as caught:
        read_meta(path)
    assert caught.value.file == str(path), "the message names the file"


def test_a_failure_on_one_rank_is_an_error_on_all(tmp_path: Path) -> None:
    script = """
        import sys
        import numpy as np
        from mpi4py import MPI
        from lattice.errors import LatticeError
        from lattice.geometry.block import Block
        from lattice.geometry.lattice import Lattice
        from lattice.store.statefile import open_state, write_state
        from tests.states import make_meta
        comm, lattice = MPI.COMM_WORLD, Lattice(nt=30, ny=1, nx=16)
        block = Block(comm.rank * 10, comm.rank * 10 + 10, 0, 1, 0, 16)
        good = np.ones((10, 1, 16, 1))
        write_state(sys.argv[1], good, block, make_meta(lattice), comm)
        spoilt, thin, outside = good.copy(), good[:9], Block(5, 15, 0, 1, 0, 17)
        spoilt[3, 0, 2, 0] = np.nan
        trials = {
            "not finite": (spoilt, block),
            "has shape (9, 1, 16, 1)": (thin, block),
            "blocks hold": (np.ones((*outside.shape, 1)), outside),
        }
        ends = []
        for expected, (field, place) in trials.items():
            wrong = comm.rank == 1
            try:
                write_state(sys.argv[1], field if wrong else good, place if wrong else block, make_meta(lattice), comm)
                ends.append(f"{expected}: no error")
            except LatticeError as error:
                if expected not in str(error):
                    ends.append(f"{expected}: {error}")
        ends = comm.gather(ends)
        if comm.rank == 0:
            print([end for rank in ends for end in rank], (open_state(sys.argv[1]).field == 1.0).all())
        """
    assert run_ranks(3, script, tmp_path / "s.h5").stdout.strip() == "[] True"


FULL = """
    import resource, sys
    import numpy as np
    from mpi4py import MPI
    from lattice.errors import LatticeError
    from lattice.geometry.block import Block
    from lattice.geometry.lattice import Lattice
    from lattice.store.statefile import open_state, write_state
    from tests.states import make_meta
    way, path, limit = sys.argv[1], sys.argv[2], int(sys.argv[3])
    comm = MPI.COMM_WORLD
    def write(nx):
        lattice = Lattice(nt=128, ny=1, nx=nx)
        share = 128 // comm.size
        block = Block(comm.rank * share, (comm.rank + 1) * share, 0, 1, 0, nx)
        write_state(path, np.full((*block.shape, 1), float(nx)), block, make_meta(lattice), comm, way)
    write(64)
    if limit:
        resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit))
    try:
        write(4096)
        end = "no error"
    except LatticeError as error:
        end = str(error)
    ends = set(comm.allgather(end))
    sound = (open_state(path).field == 64.0).all()
    if comm.rank == 0:
        print(len(ends), sound, ends.pop())
    """


@pytest.mark.parametrize(("ranks_writing", "way"), [(1, "root"), (2, "root"), (2, "collective")])
def test_a_file_that_may_not_grow_leaves_the_old_state(ranks_writing: int, way: str, tmp_path: Path) -> None:
    """A limit on the file size acts like a full disk or quota and needs no privilege."""
    said = run_where_h5py_can(ranks_writing, FULL, way, tmp_path / "s.h5", "1000000").stdout
    assert said.startswith("1 True cannot write"), said
    assert "File too large" in said and "older file is untouched" in said
    assert [p.name for p in tmp_path.iterdir()] == ["s.h5"]


@pytest.mark.skipif(os.geteuid() != 0, reason="mounting a small file system needs root")
@pytest.mark.parametrize("way", ["root", "collective"])
def test_a_full_disk_leaves_the_old_state(way: str, tmp_path: Path) -> None:
    mounted = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=2m", "tmpfs", tmp_path],
        capture_output=True,
        text=True,
        check=False,
    )
    if mounted.returncode != 0:
        pytest.skip(f"this machine does not let root mount: {mounted.stderr.strip()}")
    try:
        said = run_where_h5py_can(2, FULL, way, tmp_path / "s.h5", "0").stdout
        assert said.startswith("1 True cannot write"), said
        assert "no space left" in said and "the field alone needs 4.19 MB" in said
        assert [p.name for p in tmp_path.iterdir()] == ["s.h5"]
    finally:
        subprocess.run(["umount", tmp_path], check=True)


def test_a_folder_that_is_missing_is_named(tmp_path: Path) -> None:
    with pytest.raises(LatticeError, match=r"cannot write .*gone/s.h5: No such file or directory.*--out"):
        write_serial(tmp_path / "gone" / "s.h5", LINE, smooth_field(LINE))


def test_what_dead_writers_left_is_removed_and_the_living_kept(tmp_path: Path) -> None:
    host = os.uname().nodename
    dead = subprocess.Popen([sys.executable, "-c", ""])
    dead.wait()
    living = tmp_path / f".s.h5.{host}.{os.getppid()}.partial"
    abandoned = tmp_path / f".s.h5.{host}.{dead.pid}.partial"
    elsewhere = tmp_path / ".s.h5.another-machine.1.partial"
    long_ago = tmp_path / ".s.h5.another-machine.2.partial"
    for file in (living, abandoned, elsewhere, long_ago):
        file.touch()
    os.utime(long_ago, (0, 0))
    write_serial(tmp_path / "s.h5", LINE, smooth_field(LINE))
    assert {p.name for p in tmp_path.iterdir()} == {"s.h5", living.name, elsewhere.name}


def test_a_link_to_a_state_stays_a_link(tmp_path: Path) -> None:
    (tmp_path / "disk").mkdir()
    link = tmp_path / "s.h5"
    link.symlink_to(tmp_path / "disk" / "real.h5")
    write_serial(link, LINE, smooth_field(LINE))
    assert link.is_symlink() and np.array_equal(read_whole(tmp_path / "disk" / "real.h5"), smooth_field(LINE))


def test_a_reader_keeps_its_state_while_a_new_one_is_written(tmp_path: Path) -> None:
    write_serial(tmp_path / "s.h5", LINE, smooth_field(LINE))
    with StateFile(tmp_path / "s.h5") as old:
        write_serial(tmp_path / "s.h5", LINE, smooth_field(LINE, shift=1.0))
        assert np.array_equal(old.levels("u", 0, LINE.nt), smooth_field(LINE)[..., 0])
    assert np.array_equal(read_whole(tmp_path / "s.h5"), smooth_field(LINE, shift=1.0))


def test_numbers_of_numpy_are_stored_as_plain_numbers(tmp_path: Path) -> None:
    history = ({"step": np.int64(3), "residual_rms": np.float32(0.5), "shape": (np.int32(2), 1)},)
    write_serial(tmp_path / "s.h5", LINE, smooth_field(LINE), history=history)
    assert read_meta(tmp_path / "s.h5").history == ({"step": 3, "residual_rms": 0.5, "shape": [2, 1]},)


def test_a_long_history_fits(tmp_path: Path) -> None:
    """HDF5 limits attributes to 64 kB; the record must not be one."""
    history = tuple({"step": n, "residual_rms": 1.0 / (n + 1)} for n in range(5000))
    write_serial(tmp_path / "s.h5", LINE, smooth_field(LINE), history=history)
    assert len(read_meta(tmp_path / "s.h5").history) == 5000


def test_an_unknown_component_is_refused(tmp_path: Path) -> None:
    write_serial(tmp_path / "s.h5", LINE, smooth_field(LINE))
    with (
        StateFile(tmp_path / "s.h5") as file,
        pytest.raises(StateFileError, match="must be one of u, got 'w'"),
    ):
        file.levels("w", 0, 1)


def test_write_state_needs_a_double_field(tmp_path: Path) -> None:
    from mpi4py import MPI

    field = smooth_field(LINE).astype(np.float32)
    with pytest.raises(LatticeError, match="must be float64, got float32"):
        write_state(tmp_path / "s.h5", field, Block.whole(LINE), make_meta(LINE), MPI.COMM_SELF)
