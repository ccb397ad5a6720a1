"""Predictions beyond the measured points: counts continued in the rank count, seconds by the cost model.

Counts (work of the busiest rank, messages, bytes, collectives) come from all points, oversubscribed ones
too, since counts are exact. From 2 ranks on each is continued as a power of the rank count; messages of the
transforms follow the grid of their pencils. A prediction is no measurement, and is never shown as one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

from lattice.geometry.blocks import process_grid
from lattice.geometry.lattice import Lattice
from lattice.spectral.transform import pencil_grid
from lattice.study.fits import power_law
from lattice.study.model import Load, Machine, Model, Row, load_of, phase_seconds, predict_phase

MOST_RANKS = 4096
SIGMAS = 2.0
"""Half width of the bands, in standard errors of a phase's calibration."""


@dataclass(frozen=True)
class Prediction:
    """What is expected on a number of ranks.

    Parameters
    ----------
    ranks : int
    phases : dict of str to float
        Seconds by phase.
    low, high : float
        Band of the whole.
    """

    ranks: int
    phases: dict[str, float]
    low: float
    high: float

    @property
    def whole(self) -> float:
        """Seconds of all phases."""
        return sum(self.phases.values())

    @property
    def bottleneck(self) -> str:
        """The phase that takes most."""
        return max(self.phases, key=lambda name: self.phases[name])


def predict(model: Model, rows: Sequence[Row], machine: Machine, most: int = MOST_RANKS) -> list[Prediction]:
    """Return predictions for powers of two of ranks, from 1 to as many as the lattice can be shared by.

    `rows` are one per point of one study, smallest first.
    """
    found = []
    ranks = 1
    while ranks <= most and _fits(rows[0], ranks):
        phases = {}
        for phase in phase_seconds(rows[0]):
            load = _load(rows, phase, ranks)
            phases[phase] = predict_phase(model, phase, load, ranks, machine)
        found.append(_with_band(model, ranks, phases))
        ranks *= 2
    return found


def _with_band(model: Model, ranks: int, phases: dict[str, float]) -> Prediction:
    low = high = 0.0
    for name, seconds in phases.items():
        spread = model.phases[name].spread if name in model.phases else 0.5
        low += seconds / (1.0 + SIGMAS * spread)
        high += seconds * (1.0 + SIGMAS * spread)
    return Prediction(ranks, phases, low, high)


def lattice_of(row: Row) -> Lattice:
    """Return a row's lattice."""
    told = row["lattice"]
    return Lattice(nt=told["nt"], ny=told.get("ny", 1), nx=told["nx"], dimensions=row["dimensions"])


def _fits(row: Row, ranks: int) -> bool:
    """Tell whether a strong study's lattice can be shared by so many ranks; a weak one's grows with them."""
    if row["kind"].startswith("weak"):
        return True
    lattice = lattice_of(row)
    return process_grid(ranks, lattice, row["halo"]) is not None and _pencils(row, ranks) is not None


def _pencils(row: Row, ranks: int) -> tuple[int, ...] | None:
    shape = tuple(n for n in lattice_of(row).shape if n > 1)
    return pencil_grid(ranks, shape, ())


def _load(rows: Sequence[Row], phase: str, ranks: int) -> Load:
    """Return the load of a phase on a number of ranks: counted where measured, else continued."""
    for row in rows:
        if row["ranks"] == ranks:
            return load_of(row, phase)
    shared = [row for row in rows if row["ranks"] > 1]
    if not shared:
        return replace(load_of(rows[0], phase), work=load_of(rows[0], phase).work / ranks)
    loads = [load_of(row, phase) for row in shared]
    counts = [row["ranks"] for row in shared]
    told = {
        name: _continued(counts, [getattr(load, name) for load in loads], ranks)
        for name in ("work", "messages", "bytes", "collectives")
    }
    if phase == "FFT":
        told["messages"] = _transform_messages(shared[-1], loads[-1], ranks)
    return Load(**told)


def _continued(counts: Sequence[int], numbers: Sequence[float], ranks: int) -> float:
    if min(numbers) <= 0.0:
        return numbers[-1]
    level, power = power_law(counts, numbers)
    return float(level * float(ranks) ** power)


def _transform_messages(row: Row, load: Load, ranks: int) -> float:
    """Return the messages of the transforms: each goes to all ranks of a line of the pencils' grid."""
    here, there = _pencils(row, row["ranks"]), _pencils(row, ranks)
    if here is None or there is None:
        return load.messages * ranks / float(row["ranks"])
    return load.messages * sum(n - 1 for n in there) / max(1, sum(n - 1 for n in here))


def turning_points(predictions: Sequence[Prediction]) -> list[tuple[int, str, float]]:
    """Return from which rank count on which phase takes most, with its share there."""
    turns: list[tuple[int, str, float]] = []
    for prediction in predictions:
        name = prediction.bottleneck
        if not turns or turns[-1][1] != name:
            turns.append((prediction.ranks, name, prediction.phases[name] / prediction.whole))
    return turns


def site_machine(numbers: Any, measured: Machine) -> Machine:
    """Return the machine numbers that a site states, those it does not as measured here."""
    if numbers is None:
        return replace(
            measured, source="measured between two ranks of this machine: there is no network here"
        )
    return Machine(
        measured.latency if numbers.latency_us is None else 1e-6 * numbers.latency_us,
        measured.link if numbers.link_gb_s is None else 1e9 * numbers.link_gb_s,
        measured.triad if numbers.rank_memory_gb_s is None else 1e9 * numbers.rank_memory_gb_s,
        "stated in the site file",
    )
