"""The layout of a state file: which datasets and attributes it has, and how to tell a sound one."""

from __future__ import annotations

import hashlib
import math
from typing import TYPE_CHECKING, Any

import numpy as np

from lattice.store.statemeta import StateMeta, from_json, to_json
from lattice.store.watched import WatchedFile

if TYPE_CHECKING:
    from pathlib import Path

    import h5py

SCHEMA = "lattice-state"
SCHEMA_VERSION = 1
RECORD = "lattice-record/metadata"
"""Path of the JSON record; the hyphen keeps its group apart from any component's name."""

LIBRARY_FORMAT = ("v110", "v110")
"""HDF5 format whose own structures carry checksums, read by every HDF5 from 1.10 on."""

UNIT = "dimensionless"
LONG_NAMES = {"t": "time", "x": "position x", "y": "position y"}
LARGEST_CHUNK = {1: {"t": 64, "x": 256}, 2: {"t": 8, "y": 64, "x": 128}}
"""Nodes of a chunk by axis, at most 128 KB and 512 KB: few levels, so that a snapshot reads little."""


def chunk_shape(meta: StateMeta) -> tuple[int, ...]:
    """Return the chunk of a component's dataset: even shares of each axis, so that little is padded."""
    largest = LARGEST_CHUNK[meta.dimensions]
    return tuple(
        _share(nodes, -(-nodes // largest[axis])) for axis, nodes in zip(meta.axes, meta.shape, strict=True)
    )


def _share(nodes: int, chunks: int) -> int:
    return -(-nodes // chunks)


def create_file(path: Path, meta: StateMeta) -> None:
    """Write a state file whose field is still zero, every chunk in its final place.

    Raises
    ------
    OSError, ValueError, RuntimeError
        Where that is impossible.
    """
    import h5py

    watched = WatchedFile(path, "w+b")
    try:
        with h5py.File(watched, "w", libver=LIBRARY_FORMAT) as file:
            _lay_out(file, meta)
    finally:
        watched.close()
    if watched.error is not None:
        raise watched.error


def _lay_out(file: h5py.File, meta: StateMeta) -> None:
    record = to_json(meta).encode()
    for name, value in attributes(meta).items():
        file.attrs[name] = _stored(value)
    file.attrs["metadata_sha256"] = _stored(hashlib.sha256(record).hexdigest())
    file.create_dataset(RECORD, data=_stored(record.decode()))
    for axis in meta.axes:
        scale = file.create_dataset(axis, data=meta.coordinate(axis))
        scale.attrs["units"] = _stored(UNIT)
        scale.attrs["long_name"] = _stored(LONG_NAMES[axis])
        scale.make_scale(axis)
    for component in meta.components:
        _add_component(file, meta, component)


def _add_component(file: h5py.File, meta: StateMeta, component: str) -> None:
    dataset = _allocate(file, component, meta)
    dataset.attrs["units"] = _stored(UNIT)
    dataset.attrs["long_name"] = _stored(f"component {component}")
    for place, axis in enumerate(meta.axes):
        dataset.dims[place].attach_scale(file[axis])


def _allocate(file: h5py.File, component: str, meta: StateMeta) -> h5py.Dataset:
    """Create a dataset with room for all its chunks: their size is fixed, as nothing is compressed."""
    from h5py import Dataset, h5d, h5p, h5s, h5t

    plan = h5p.create(h5p.DATASET_CREATE)
    plan.set_chunk(chunk_shape(meta))
    plan.set_fletcher32()
    plan.set_alloc_time(h5d.ALLOC_TIME_EARLY)
    space = h5s.create_simple(meta.shape)
    return Dataset(h5d.create(file.id, component.encode(), h5t.IEEE_F64LE, space, plan))


def _stored(value: Any) -> Any:
    """Return text as HDF5 text of fixed length; other values as they are.

    Text of variable length would lie in HDF5's global heap, which has no checksum: HDF5 1.10 loops for
    ever on some single-bit errors there.
    """
    import h5py

    if not isinstance(value, str):
        return value
    text = value.encode() or b" "
    return np.array(text, h5py.string_dtype("utf-8", len(text)))


def attributes(meta: StateMeta) -> dict[str, Any]:
    """Return the root attributes, which repeat the record for readers that know no schema of ours."""
    lattice = meta.lattice
    named: dict[str, Any] = {
        "schema": SCHEMA,
        "schema_version": SCHEMA_VERSION,
        "title": meta.title or meta.law,
        "law": meta.law,
        "equations": "\n".join(meta.text),
        "outcome": meta.outcome,
        "free": ", ".join(meta.free),
        "nt": lattice.nt,
        "nx": lattice.nx,
        "order_t": lattice.order_t,
        "order_x": lattice.order_x,
        "residual_rms": meta.residual_rms,
        "residual_max": meta.residual_max,
        "mean_square": meta.mean_square,
        "written": meta.written,
    }
    if meta.dimensions == 2:
        named |= {"ny": lattice.ny, "order_y": lattice.order_y}
    return named | {name: value for name, value in meta.values.items() if name not in named}


def read_record(file: h5py.File) -> StateMeta:
    """Return the record of an open file after checking schema, version, checksum and datasets.

    Raises
    ------
    ValueError
        With the reason why the file cannot be used.
    """
    _check_schema(file)
    record = _record_bytes(file)
    if hashlib.sha256(record).hexdigest() != _text(file.attrs.get("metadata_sha256")):
        raise ValueError("is damaged: its metadata do not match their sha256 checksum")
    try:
        meta = from_json(record.decode())
    except (ValueError, KeyError, TypeError, AttributeError) as error:
        raise ValueError(f"is damaged: its metadata cannot be read ({error})") from error
    _check_datasets(file, meta)
    _check_copies(file, meta)
    return meta


def _check_schema(file: h5py.File) -> None:
    schema, version = _text(file.attrs.get("schema")), file.attrs.get("schema_version")
    if schema != SCHEMA or version is None:
        raise ValueError(f"is HDF5 but no state file of this package (it lacks schema = {SCHEMA!r})")
    if int(version) > SCHEMA_VERSION:
        raise ValueError(
            f"has schema version {int(version)}, this package reads versions up to {SCHEMA_VERSION}; "
            "upgrade the package"
        )


def _record_bytes(file: h5py.File) -> bytes:
    if RECORD not in file:
        raise ValueError(f"is damaged: it has no dataset {RECORD!r}")
    return bytes(file[RECORD][()])


def _check_datasets(file: h5py.File, meta: StateMeta) -> None:
    for component in meta.components:
        dataset = file.get(component)
        if dataset is None or dataset.shape != meta.shape or dataset.dtype != np.float64:
            found = "missing" if dataset is None else f"{dataset.dtype} of shape {dataset.shape}"
            raise ValueError(
                f"is damaged: component {component!r} must be float64 of shape {meta.shape}, it is {found}"
            )


def _check_copies(file: h5py.File, meta: StateMeta) -> None:
    """Compare attributes and coordinates, which no checksum covers, with the record, which has one."""
    for name, value in attributes(meta).items():
        if name not in file.attrs or not _same(file.attrs[name], value):
            raise ValueError(f"is damaged: its attribute {name!r} differs from its metadata")
    for axis in meta.axes:
        if axis not in file or not np.array_equal(file[axis][...], meta.coordinate(axis)):
            raise ValueError(f"is damaged: its coordinate {axis!r} differs from its metadata")


def _same(stored: Any, expected: Any) -> bool:
    if isinstance(expected, float) and math.isnan(expected):
        return isinstance(stored, np.floating) and bool(np.isnan(stored))
    if isinstance(expected, str):
        return bool(_text(stored) == (expected or " "))
    return bool(stored == expected)


def _text(stored: Any) -> Any:
    """Return stored text of fixed length as text, anything else unchanged."""
    return stored.decode(errors="replace") if isinstance(stored, bytes) else stored
