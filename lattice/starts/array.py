"""Start from an array of the user's, in a .npy file or an HDF5 dataset."""

from __future__ import annotations

from contextlib import ExitStack
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.starts.options import ArrayOptions, Report, silent
from lattice.starts.stepper import Values
from lattice.starts.streaming import on_root, spread_levels

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]

DEFAULT_DATASET = "u"


def array(
    start: ArrayOptions,
    lattice: Lattice,
    values: Values,
    law: Law,
    block: Block,
    comm: MPI.Intracomm,
    report: Report = silent,
) -> tuple[Real, Values]:
    """Return this rank's part of a user's array on this lattice, and the values as given.

    Collective. Rank 0 reads the array level by level and hands it out. Shapes are (nt, nx) or
    (nt, nx, components) in one space dimension, (nt, ny, nx) or (nt, ny, nx, components) in two, the
    components last and left out where there is one only; other numbers of nodes than the lattice's are
    interpolated spectrally.

    Raises
    ------
    InputError
        On every rank: a missing or foreign file, a shape that does not fit the law, numbers that are complex
        or not finite.
    """
    with ExitStack() as files:
        opened: list[ArrayLevels] = []

        def open_file() -> tuple[int, int, int]:
            opened.append(ArrayLevels(open_array(start, files), law, start.file))
            return opened[0].nodes

        nodes = on_root(comm, open_file)

        def read(first: int, last: int) -> Real:
            return opened[0].read(first, last)

        owned = spread_levels(read, nodes, lattice, len(law.components), block, comm)
    if nodes != lattice.shape:
        report(f"array: nodes {nodes} (nt, ny, nx) interpolated to {lattice.shape}")
    return owned, values


class ArrayLevels:
    """An array or dataset, read level by level in the lattice's axes."""

    def __init__(self, source: Any, law: Law, path: str) -> None:
        self._source, self._path = source, path
        if source.dtype.kind not in "fiu":
            kind = "complex numbers" if source.dtype.kind == "c" else f"items of type {source.dtype}"
            advice = "; store real and imaginary parts as two components" if source.dtype.kind == "c" else ""
            raise InputError(f"must hold real numbers, got {kind}{advice}", file=path)
        self._shape = _lattice_shape(tuple(source.shape), law, path)

    @property
    def nodes(self) -> tuple[int, int, int]:
        """Nodes (nt, ny, nx)."""
        return self._shape[:3]

    def read(self, first: int, last: int) -> Real:
        """Return the levels `first <= n < last`, shape (last - first, ny, nx, components).

        Raises
        ------
        InputError
            Where they are not finite.
        """
        levels = np.asarray(self._source[first:last], dtype=float).reshape(last - first, *self._shape[1:])
        if not np.all(np.isfinite(levels)):
            place = tuple(np.argwhere(~np.isfinite(levels))[0])
            level, row, column, _ = place
            raise InputError(
                f"must hold finite numbers, got {levels[place]} at level {first + level}, row {row}, "
                f"column {column}",
                file=self._path,
            )
        return levels


def _lattice_shape(shape: tuple[int, ...], law: Law, path: str) -> tuple[int, int, int, int]:
    """Return (nt, ny, nx, components) of an array's shape."""
    components, axes = len(law.components), law.dimensions + 1
    given = shape
    if len(shape) == axes and components == 1:
        shape = (*shape, 1)
    if law.dimensions == 1 and len(shape) == 3:
        shape = (shape[0], 1, *shape[1:])
    fits = len(shape) == 4 and shape[3] == components and (law.dimensions == 2 or shape[1] == 1)
    if not fits or min(given) < 1:
        names = "(nt, nx" if law.dimensions == 1 else "(nt, ny, nx"
        wanted = f"{names}, {components})" + (f" or {names})" if components == 1 else "")
        raise InputError(f"must have shape {wanted} for law {law.name}, got {given}", file=path)
    return (shape[0], shape[1], shape[2], shape[3])


def open_array(start: ArrayOptions, files: ExitStack) -> Any:
    """Return an array or dataset on disk, open until `files` is closed.

    Raises
    ------
    InputError
        For a file that is missing or holds no array.
    """
    import h5py

    path = Path(start.file)
    if not path.is_file():
        raise InputError("no such array file; check the path", file=start.file)
    try:
        if h5py.is_hdf5(path):
            return _dataset(files.enter_context(h5py.File(path, "r")), start)
        if start.dataset is not None:
            raise InputError("dataset is for HDF5 files, and this is none; remove it", file=start.file)
        return np.load(path, mmap_mode="r", allow_pickle=False)
    except (OSError, ValueError, EOFError) as error:
        reason = str(error).splitlines()[0]
        raise InputError(f"must be a .npy or HDF5 file with numbers: {reason}", file=start.file) from error


def _dataset(file: Any, start: ArrayOptions) -> Any:
    import h5py

    name = start.dataset or DEFAULT_DATASET
    found = file.get(name)
    if not isinstance(found, h5py.Dataset):
        names: list[str] = []
        file.visititems(lambda key, item: names.append(key) if isinstance(item, h5py.Dataset) else None)
        known = ", ".join(names[:12]) or "none"
        raise InputError(
            f"start.dataset must be a dataset of the file, got '{name}'; it has {known}", file=start.file
        )
    return found
