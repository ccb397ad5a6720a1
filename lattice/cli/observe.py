"""`lattice observe STATE ..`: observables of a state, or means over many beside a long march."""

from __future__ import annotations

import argparse
import json
import math
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.errors import InputError

if TYPE_CHECKING:
    from lattice.check.ensemble import Ensemble, MarchStatistics
    from lattice.check.observation import Observation
    from lattice.show.curves import Panel

EPILOG = """\
Of one state: every observable, with the bands of a certificate that holds (`lattice check`), correlation
lengths, spectra and histogram. Of several states or folders: means over the states, and with --march the
statistics of a march of the same law beside them.

  lattice observe runs/film --out film-observables.png
  lattice observe catalogue/ --weight area --march 5000 --length-x 100 --json

The mean over a collection of states is not the mean of the flow: it depends on which were found, and on the
weights. The march shows how far apart the two are.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument(
        "states", metavar="STATE", type=Path, nargs="+", help="state files, or folders that hold some"
    )
    parser.add_argument(
        "--observable",
        metavar="NAME=FORMULA",
        action="append",
        default=[],
        help="a mean to show, too, in the notation of laws; may be repeated",
    )
    parser.add_argument(
        "--weight", metavar="NAME", default="area", help="of a state in the mean: area (default) or equal"
    )
    parser.add_argument("--march", metavar="TIME", type=float, help="march this long, to compare with")
    parser.add_argument(
        "--length-x", metavar="L", type=float, help="of the march's box; default: the largest"
    )
    parser.add_argument("--length-y", metavar="L", type=float, help="the same in y")
    parser.add_argument("--seed", metavar="N", type=int, default=0, help="of the march's noise")
    parser.add_argument("--out", metavar="FILE", type=Path, help="draw spectra, correlations and histograms")
    parser.add_argument("--json", action="store_true", help="print everything as JSON, for a script")


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.check.ensemble import WEIGHTS, combine, find_states
    from lattice.check.observation import observe
    from lattice.cli.paths import state_path, writable_path

    if options.weight not in WEIGHTS:
        raise InputError(f"must be one of {', '.join(WEIGHTS)}, got '{options.weight}'", key="--weight")
    if options.march is not None and not options.march > 0.0:
        raise InputError(f"must be a time above 0, got {options.march:g}", key="--march")
    out = writable_path(options.out) if options.out else None
    alone = len(options.states) == 1 and _is_run(options.states[0])
    paths = [state_path(options.states[0])] if alone else find_states(options.states)
    from lattice.solve.petsc import start_petsc

    start_petsc([])
    from mpi4py import MPI

    observations = [observe(path, MPI.COMM_SELF, options.observable) for path in paths]
    ensemble = combine(observations, options.weight)
    march = _march(options, observations) if options.march is not None else None
    if out is not None:
        _draw(out, observations, march)
    print(_json(observations, ensemble, march) if options.json else _text(observations, ensemble, march))
    return 0


def _is_run(path: Path) -> bool:
    """Tell whether a path is a state file or the folder of one run."""
    return path.is_file() or (path / "state.h5").is_file()


def _march(options: argparse.Namespace, observations: Sequence[Observation]) -> MarchStatistics:
    from mpi4py import MPI

    from lattice.check.ensemble import march_statistics
    from lattice.check.subject import law_of

    largest = max(observations, key=lambda o: o.meta.values["length_x"])
    meta = largest.meta
    length_x = options.length_x or meta.values["length_x"]
    length_y = options.length_y or meta.values.get("length_y", 1.0)
    nx = _even(meta.lattice.nx * length_x / meta.values["length_x"])
    ny = _even(meta.lattice.ny * length_y / meta.values["length_y"]) if meta.dimensions == 2 else 1
    values = {name: v for name, v in meta.values.items() if not name.startswith("source_")}
    return march_statistics(
        law_of(meta),
        (ny, nx),
        (length_y, length_x),
        values,
        options.march,
        options.observable,
        MPI.COMM_SELF,
        lambda text: print(text, file=sys.stderr, flush=True),
        options.seed,
    )


def _even(nodes: float) -> int:
    return max(8, 2 * round(nodes / 2.0))


def _json(observations: Sequence[Observation], ensemble: Ensemble, march: MarchStatistics | None) -> str:
    record: dict[str, Any] = {"states": [o.record() for o in observations]}
    if len(observations) > 1:
        record["means"] = {
            "weights": ensemble.weights.tolist(),
            "effective_states": ensemble.effective,
            "mean": ensemble.means,
            "spread": ensemble.spreads,
        }
    if march is not None:
        record["march"] = {
            "time": march.time,
            "dt": march.dt,
            "samples": march.samples,
            "lengths": list(march.lengths),
            "mean": march.means,
            "standard_error": march.errors,
        }
    from lattice.store.statemeta import plain

    return json.dumps(plain(record), indent=2, allow_nan=False)


def _text(observations: Sequence[Observation], ensemble: Ensemble, march: MarchStatistics | None) -> str:
    if len(observations) == 1 and march is None:
        return _one(observations[0])
    lines = [f"{len(observations)} states of {observations[0].meta.law}, as {ensemble.effective:.1f} alike"]
    lines.append(f"{'observable':<26}{'mean':>16}{'spread':>11}{'march':>16}{'+-':>11}")
    for name, mean in ensemble.means.items():
        line = f"{name:<26}{mean:>16.8g}{ensemble.spreads[name]:>11.2e}"
        if march is not None and name in march.means:
            line += f"{march.means[name]:>16.8g}{march.errors[name]:>11.2e}"
        lines.append(line.rstrip())
    if march is not None:
        lines.append(f"march: {march.samples} samples over {march.time:g}, dt = {march.dt:.3g}")
    lines.append(
        "The mean over a collection of states is not the mean of the flow; it depends on which were found."
    )
    return "\n".join(lines)


def _one(observation: Observation) -> str:
    lines = [f"{observation.path}: {observation.meta.title or observation.meta.law}"]
    lines.append(f"certificate: {observation.certificate}")
    lines.append(f"{'observable':<26}{'value':>18}{'band (+-)':>12}{'extrapolated':>18}")
    for name, value in observation.observables.items():
        line = f"{name:<26}{value:>18.11g}"
        if name in observation.bands:
            half, best = observation.bands[name]
            line += f"{half:>12.2e}{best:>18.11g}"
        lines.append(line)
    return "\n".join(lines)


def _draw(out: Path, observations: Sequence[Observation], march: MarchStatistics | None) -> None:
    from lattice.show.curves import plot_panels

    first = observations[0]
    many = f"{len(observations)} states" if len(observations) > 1 else first.path
    numbers = "    ".join(f"{n} = {v:.6g}" for n, v in list(first.observables.items())[:5])
    certificate = f"certificate: {first.certificate}"
    lines = [certificate, numbers] if len(observations) == 1 else ["observables of every state"]
    if march is not None:
        lines.append(f"grey: march over {march.time:g} on {march.lengths[1]:g} long")
    plot_panels(out, f"{first.meta.title or first.meta.law}: {many}", lines, _panels(observations, march))


def _panels(observations: Sequence[Observation], march: MarchStatistics | None) -> list[Panel]:
    """Return spectra and correlations along every axis of every component, then histograms."""
    import numpy as np

    from lattice.check.statistics import correlation
    from lattice.show.curves import Curve, Panel

    panels: list[Panel] = []
    names = {"t": "frequency", "x": "wavenumber in x", "y": "wavenumber in y"}
    several = len(observations) > 1
    every = [(o, {(s.component, s.axis): s for s in o.spectra}) for o in observations]
    labels = {id(o): _label(o.path) if several and len(every) <= 5 else "" for o in observations}
    of_march = {(s.component, s.axis): s for s in march.spectra} if march else {}
    for key in every[0][1]:
        component, axis = key
        spectra = [(labels[id(o)], found[key]) for o, found in every if key in found]
        densities, correlations = [], []
        if key in of_march:
            spectra = [("march", of_march[key]), *spectra]
        for label, s in spectra:
            k = np.array(s.wavenumbers)
            grey = label == "march"
            shown = "" if panels and not grey else label  # told once
            # Per unit of wavenumber, so that boxes of different lengths can be compared.
            densities.append(Curve(shown, k[1:], np.array(s.energy[1:]) / k[1], grey))
            lags = np.linspace(0.0, math.pi / k[1], 200)
            correlations.append(Curve(shown, lags, correlation(s, lags), grey))
        title = f"{component}: energy by {names[axis]}"
        limit = None if several else every[0][1][key].limit
        panels.append(Panel(title, names[axis], "density", tuple(densities), True, limit))
        panels.append(
            Panel(
                f"{component}: two-point correlation",
                f"distance in {axis}",
                "correlation",
                tuple(correlations),
            )
        )
    for c, component in enumerate(observations[0].meta.components):
        found = [("", o.histograms[c]) for o in observations]
        if march is not None:
            found = [("march", march.histograms[c]), *found]
        curves = tuple(
            Curve("", 0.5 * (h.edges[1:] + h.edges[:-1]), h.density, label == "march") for label, h in found
        )
        panels.append(Panel(f"{component}: how often", component, "density", curves, steps=True))
    return panels


def _label(path: str) -> str:
    """Return a short name for a state: its file's, or its run's."""
    file = Path(path)
    return file.parent.name if file.name == "state.h5" else file.stem
