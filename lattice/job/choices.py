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
    "window": "the same from a march of a larger box, cut in space, too",
    "recurrence": "march the law and take a stretch after which the flow is nearly the same",
    "noise": "smooth noise in space and time on the waves the law amplifies",
    "state": "take a stored state, interpolated to this lattice",
    "excerpt": "cut a window of a stored state or an array and make it periodic",
    "mosaic": "arrange stored states in time and space, their seams blended",
    "waves": "add up given cosine waves",
    "array": "read a field from a NumPy or HDF5 file",
}

ORDERS_T: tuple[int, ...] = (2, 4, 6)
ORDERS_X: tuple[int, ...] = (2, 4, 6, 8)
