"""The layout of a state file: which datasets and attributes it has, and how to tell a sound one."""

from __future__ import annotations

import hashlib
import math
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from lattice.store.statemeta import StateMeta, from_json, to_json

if TYPE_CHECKING:
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


def file_size(meta: StateMeta) -> int:
    """Return the bytes a state file takes, rounded up to whole chunks, with room for its structures."""
    padded = math.prod(
        -(-nodes // chunk) * chunk for nodes, chunk in zip(meta.shape, chunk_shape(meta), strict=True)
    )
    return 8 * padded * len(meta.components) + 8 * sum(meta.shape) + len(to_json(meta)) + 65536


def lay_out(file: h5py.File, meta: StateMeta, writes: bool) -> list[h5py.Dataset]:
    """Create everything but the field, and return the datasets of the components, still empty.

    Collective where `file` is open on several ranks; `writes` is true on one of them.
    """
    record = to_json(meta).encode()
    for name, value in attributes(meta).items():
        file.attrs[name] = value
    file.attrs["metadata_sha256"] = hashlib.sha256(record).hexdigest()
    _add_record(file, record, writes)
    for axis in meta.axes:
        _add_scale(file, axis, meta.coordinate(axis), writes)
    return [_add_component(file, meta, component) for component in meta.components]


def _add_record(file: h5py.File, record: bytes, writes: bool) -> None:
    import h5py

    dataset = file.create_dataset(RECORD, (), h5py.string_dtype("utf-8", len(record)))
    if writes:
        dataset[()] = np.array(record, dtype=dataset.dtype)


def _add_scale(file: h5py.File, axis: str, nodes: npt.NDArray[np.float64], writes: bool) -> None:
    scale = file.create_dataset(axis, nodes.shape, "f8")
    scale.attrs["units"] = UNIT
    scale.attrs["long_name"] = LONG_NAMES[axis]
    scale.make_scale(axis)
    if writes:
        scale[...] = nodes


def _add_component(file: h5py.File, meta: StateMeta, component: str) -> h5py.Dataset:
    dataset = file.create_dataset(component, meta.shape, "f8", chunks=chunk_shape(meta), fletcher32=True)
    dataset.attrs["units"] = UNIT
    dataset.attrs["long_name"] = f"component {component}"
    for place, axis in enumerate(meta.axes):
        dataset.dims[place].label = axis
        dataset.dims[place].attach_scale(file[axis])
    return dataset


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
    if hashlib.sha256(record).hexdigest() != file.attrs.get("metadata_sha256"):
        raise ValueError("is damaged: its metadata do not match their sha256 checksum")
    try:
        meta = from_json(record.decode())
    except (ValueError, KeyError, TypeError, AttributeError) as error:
        raise ValueError(f"is damaged: its metadata cannot be read ({error})") from error
    _check_datasets(file, meta)
    _check_copies(file, meta)
    return meta


def _check_schema(file: h5py.File) -> None:
    schema, version = file.attrs.get("schema"), file.attrs.get("schema_version")
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
    return bytes(file[RECORD].asstr()[()].encode())


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
        return bool(np.isnan(stored))
    return bool(stored == expected)
