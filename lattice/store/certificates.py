"""Certificates in state files: kept beside the record, valid for the field and scalars that were checked."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np

from lattice.errors import LatticeError
from lattice.store.layout import LIBRARY_FORMAT
from lattice.store.replacement import discard, partial_path, publish
from lattice.store.statefile import StateFile, read_meta
from lattice.store.statemeta import plain

CERTIFICATE = "lattice-record/certificate"
"""Path of the certificate in a state file."""


@dataclass(frozen=True)
class StoredCertificate:
    """A certificate read from a state file.

    Parameters
    ----------
    record : dict
        As `attach_certificate` wrote it.
    valid : bool
        Whether field, scalars, lattice and law are still those that were checked.
    changed : tuple of str
        What is not.
    """

    record: dict[str, Any]
    valid: bool
    changed: tuple[str, ...]


def input_checksums(path: str | os.PathLike[str]) -> dict[str, str]:
    """Return the SHA-256 sums of what a certificate is about: field, scalars, lattice, law.

    Not collective; the field is read in bounded memory.

    Raises
    ------
    StateFileError
        If the file cannot be used.
    """
    with StateFile(path) as file:
        field, meta = hashlib.sha256(), file.meta
        for component in meta.components:
            for _, levels in file.slabs(component):
                field.update(np.ascontiguousarray(levels, dtype="<f8").tobytes())
    parts = {
        "scalars": {name: float(value).hex() for name, value in sorted(meta.values.items())},
        "lattice": asdict(meta.lattice),
        "law": [meta.law, list(meta.text), list(meta.components), meta.dimensions],
    }
    return {"field": field.hexdigest()} | {name: _sum(part) for name, part in parts.items()}


def _sum(part: Any) -> str:
    return hashlib.sha256(json.dumps(part, sort_keys=True).encode()).hexdigest()


def attach_certificate(path: str | os.PathLike[str], record: Mapping[str, Any]) -> None:
    """Write a certificate into a state file, replacing an older one; the file is replaced in one step.

    Not collective: one rank writes.

    Raises
    ------
    LatticeError
        Where the file cannot be written; it is then untouched.
    """
    import h5py

    target = Path(os.path.realpath(path))
    partial = partial_path(target)
    text = json.dumps(plain(record), allow_nan=False, ensure_ascii=False).encode()
    # Of fixed length, as the record: text of variable length would lie where HDF5 keeps no checksum.
    stored = np.array(text, h5py.string_dtype("utf-8", len(text)))
    try:
        shutil.copyfile(target, partial)
        with h5py.File(partial, "r+", libver=LIBRARY_FORMAT) as file:
            if CERTIFICATE in file:
                del file[CERTIFICATE]
            file.create_dataset(CERTIFICATE, data=stored)
        publish(partial, target)
    except (OSError, RuntimeError, ValueError) as error:
        discard(partial)
        raise LatticeError(f"cannot write the certificate into {path}: {error}") from error


def read_certificate(path: str | os.PathLike[str]) -> StoredCertificate | None:
    """Return the certificate of a state file and whether it still holds; None where there is none.

    Raises
    ------
    StateFileError
        If the file cannot be used.
    """
    import h5py

    read_meta(path)  # refuses what is no sound state file
    with h5py.File(path, "r") as file:
        text = bytes(file[CERTIFICATE][()]) if CERTIFICATE in file else b""
    if not text:
        return None
    now = input_checksums(path)
    try:
        record = json.loads(text)
        sums = dict(record["inputs"])
    except (ValueError, KeyError, TypeError):
        return StoredCertificate({}, False, ("the certificate itself",))
    changed = tuple(name for name in now if sums.get(name) != now[name])
    return StoredCertificate(record, not changed, changed)
