"""The names a job file may choose from, each with one line of what it means."""

from __future__ import annotations

PRECONDITIONERS: dict[str, str] = {
    "auto": "`direct` for small boxes, else `coarse`; the log says which and why",
    "coarse": "the law solved on a coarse lattice, then one smoothing; right for large boxes",
    "direct": "the whole lattice Jacobian factorised by sparse LU; right for small boxes",
    "patches": "overlapping blocks of the lattice, each factorised on its own",
}

START_KINDS: dict[str, str] = {
    "march": "march the law in time from noise and cut a window of one period",
    "state": "take a stored state, interpolated to this lattice",
    "waves": "add up given cosine waves",
    "array": "read a field from a NumPy or HDF5 file",
}

ORDERS_T: tuple[int, ...] = (2, 4, 6)
ORDERS_X: tuple[int, ...] = (2, 4, 6, 8)
