"""What a state file says about its field: the record, as a dataclass, as JSON."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field, fields
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from lattice.geometry.lattice import Lattice

if TYPE_CHECKING:
    from lattice.laws.law import Law


COMPOSED = "composed, not solved"
"""Outcome of a field that was put together and is no solution."""


@dataclass(frozen=True)
class StateMeta:
    """Everything a state file holds besides the field and its coordinates.

    Parameters
    ----------
    law, title : str
        Name of the law ("own" for a user's formula) and its one-line title.
    text : tuple of str
        The law's equations as typed; `read_law` makes the law from them again.
    components : tuple of str
        Names of the field's components, in the order of the last axis.
    dimensions : int
        Space dimensions, 1 or 2.
    parameters : dict of str to float
        The law's parameters at this state.
    lattice : Lattice
        Nodes and orders.
    values : dict of str to float
        All scalars by name: period, lengths, drifts, sources and parameters, dimensionless.
    free : tuple of str
        Names of the scalars that were unknowns of the solve.
    residual_rms, residual_max : float
        Root mean square and largest absolute value of the residual over nodes and equations;
        NaN where it was not computed.
    mean_square : float
        Mean over nodes of the sum over components of `u**2`; NaN where it was not computed.
    outcome : str
        How the run stood when the file was written, for instance "converged" or "running".
    history : tuple of dict
        One entry per nonlinear step, as in steps.jsonl.
    versions : dict of str to str
        Versions of this package and of the libraries it ran on.
    job_text : str
        The resolved job file, in TOML.
    classification : dict
        Kind, repeats and symmetries of a converged state, as `lattice.classify.kind` found them; else empty.
    progress : dict
        Where the run stood besides the field and its history: what a resumed run needs; else empty.
    written : str
        Coordinated universal time of writing, ISO 8601.
    """

    law: str
    title: str
    text: tuple[str, ...]
    components: tuple[str, ...]
    dimensions: int
    parameters: dict[str, float]
    lattice: Lattice
    values: dict[str, float]
    free: tuple[str, ...] = ()
    residual_rms: float = math.nan
    residual_max: float = math.nan
    mean_square: float = math.nan
    outcome: str = ""
    history: tuple[dict[str, Any], ...] = ()
    versions: dict[str, str] = field(default_factory=dict)
    job_text: str = ""
    classification: dict[str, Any] = field(default_factory=dict)
    progress: dict[str, Any] = field(default_factory=dict)
    written: str = ""

    @classmethod
    def of_law(cls, law: Law, lattice: Lattice, values: Mapping[str, float], **rest: Any) -> StateMeta:
        """Make the record of a state of `law`; `rest` are further fields by name."""
        return cls(
            law=law.name,
            title=law.title,
            text=law.text,
            components=law.components,
            dimensions=law.dimensions,
            parameters={p.name: float(values.get(p.name, p.default)) for p in law.parameters},
            lattice=lattice,
            values={name: float(value) for name, value in values.items()},
            **rest,
        )

    @property
    def axes(self) -> tuple[str, ...]:
        """Names of the axes of a component's dataset."""
        return ("t", "x") if self.dimensions == 1 else ("t", "y", "x")

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of a component's dataset, in the order of `axes`."""
        counts = {"t": self.lattice.nt, "y": self.lattice.ny, "x": self.lattice.nx}
        return tuple(counts[axis] for axis in self.axes)

    def coordinate(self, axis: str) -> npt.NDArray[np.float64]:
        """Return the coordinates of the nodes on `axis` ("t", "y" or "x"), dimensionless."""
        extent = {"t": "period", "y": "length_y", "x": "length_x"}[axis]
        nodes = self.shape[self.axes.index(axis)]
        return np.arange(nodes) * (self.values.get(extent, 1.0) / nodes)


def to_json(meta: StateMeta) -> str:
    """Return `meta` as JSON, dictionaries in their order; numbers that are not finite become null."""
    return json.dumps(plain(asdict(meta)), allow_nan=False, ensure_ascii=False)


def from_json(text: str) -> StateMeta:
    """Return the record that `to_json` wrote; unknown keys are left out.

    Raises
    ------
    ValueError, KeyError, TypeError
        Where the text is no such record.
    """
    raw = json.loads(text)
    known = {f.name: raw[f.name] for f in fields(StateMeta) if f.name in raw}
    known["lattice"] = Lattice(**{f.name: int(raw["lattice"][f.name]) for f in fields(Lattice)})
    for name in ("text", "components", "free", "history"):
        known[name] = tuple(known.get(name, ()))
    for name in ("residual_rms", "residual_max", "mean_square"):
        known[name] = _number(known.get(name))
    for name in ("values", "parameters"):
        known[name] = {key: _number(value) for key, value in known[name].items()}
    return StateMeta(**known)


def plain(value: Any) -> Any:
    """Return `value` made of what JSON knows: NumPy scalars unwrapped, NaN and infinities as None."""
    if isinstance(value, Mapping):
        return {str(key): plain(inner) for key, inner in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(inner) for inner in value]
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, np.generic):
        return plain(value.item())
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def _number(value: float | None) -> float:
    """Return a JSON number as a float; null, an unknown number, as NaN."""
    return math.nan if value is None else float(value)
