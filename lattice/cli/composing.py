"""What `lattice excerpt` and `lattice mosaic` share: write the field, draw it, name the next command."""

from __future__ import annotations

import argparse
import os
from collections.abc import Callable, Mapping
from dataclasses import asdict, fields
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice.errors import InputError, LatticeError, StateFileError
from lattice.starts.options import MemberOptions

MARK = "# Composed from "
"""How a job file begins that was written here, and may be replaced."""

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.starts.compose import Composition
    from lattice.store.statemeta import StateMeta


def add_output_arguments(parser: argparse.ArgumentParser) -> None:
    """Add the arguments for what is written."""
    parser.add_argument(
        "--out",
        metavar="FILE",
        type=Path,
        required=True,
        help="the state file to write, .h5; picture and job file go beside it",
    )
    for name, what in (("nt", "levels"), ("nx", "nodes in x"), ("ny", "nodes in y")):
        parser.add_argument(
            f"--{name}", metavar="N", type=_count, help=f"{what}; default: as close as those of the source"
        )
    parser.add_argument(
        "--coarsen",
        metavar="FACTOR",
        default="1",
        help="widen the spacings by this factor, where no number is given; a solve refines twice by 1.4",
    )
    parser.add_argument("--force", action="store_true", help="replace FILE even if it holds a solved state")


def chosen_nodes(options: argparse.Namespace) -> dict[str, int]:
    """Return the numbers of nodes given."""
    return {n: getattr(options, n) for n in ("nt", "nx", "ny") if getattr(options, n) is not None}


def chosen_coarsening(options: argparse.Namespace) -> float:
    """Return the factor by which the spacings are to become wider.

    Raises
    ------
    InputError
        For text that is no factor.
    """
    try:
        factor = float(options.coarsen)
    except ValueError:
        factor = 0.0
    if not 0.1 <= factor <= 10.0:
        raise InputError(f"must be a number from 0.1 to 10, got '{options.coarsen}'", key="--coarsen")
    return factor


def _count(text: str) -> int:
    if not text.isdigit() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"must be an integer >= 1, got '{text}'")
    return int(text)


def compose(
    options: argparse.Namespace, plan: Callable[[], Composition], origin: str, own_job: Path | None = None
) -> int:
    """Plan on one rank, compose on all, tell; return the exit code.

    `own_job` is the user's job file that solves the same, where there is one; else one is written.
    """
    from mpi4py import MPI

    from lattice.cli.guard import run_guarded

    comm = MPI.COMM_WORLD
    return run_guarded(comm, lambda: _compose(options, plan, origin, own_job, comm), options.debug)


def _compose(
    options: argparse.Namespace,
    plan: Callable[[], Composition],
    origin: str,
    own_job: Path | None,
    comm: MPI.Intracomm,
) -> int:
    from lattice.starts.compose import write_composition
    from lattice.starts.streaming import on_root

    out: Path = options.out

    def checked() -> Composition:
        _check_out(out, options.force)
        if own_job is None:
            _check_job(out.with_suffix(".toml"), options.force)
        return plan()

    planned = on_root(comm, checked)
    job = own_job.read_text(encoding="utf-8") if own_job else job_text(planned, out, origin)
    meta = write_composition(planned, out, comm, _printer(comm), job)
    if comm.Get_rank() == 0:
        _tell(meta, out)
        path = own_job or out.with_suffix(".toml")
        if own_job is None:
            path.write_text(job, encoding="utf-8")
        print(f"next: lattice solve {path}")
    comm.Barrier()
    return 0


def _printer(comm: MPI.Intracomm) -> Callable[[str], None]:
    return (lambda text: print(text, flush=True)) if comm.Get_rank() == 0 else (lambda text: None)


def _check_out(out: Path, replace: bool) -> None:
    from lattice.cli.paths import writable_path
    from lattice.store.statefile import read_meta
    from lattice.store.statemeta import COMPOSED

    if out.suffix != ".h5":
        raise InputError(f"must end in .h5, got '{out.name}'", key="--out")
    writable_path(out)
    if replace or not out.exists():
        return
    try:
        composed = read_meta(out).outcome == COMPOSED
    except StateFileError:
        composed = False
    if not composed:
        raise InputError("exists and is no composed field; choose another --out, or --force", file=str(out))


def _check_job(path: Path, replace: bool) -> None:
    if (
        path.exists()
        and not replace
        and not path.read_text(encoding="utf-8", errors="replace").startswith(MARK)
    ):
        raise InputError(
            "is in the place of the job file to be written; choose another --out, or --force", file=str(path)
        )


def job_text(planned: Composition, out: Path, origin: str) -> str:
    """Return a job file that solves from a composed field."""
    import tomli_w

    from lattice.laws.catalogue import law_names

    law, lattice = planned.law, planned.lattice
    tables: dict[str, Any] = {"law": {"name": law.name}}
    if law.name not in law_names():
        tables["law"] = {
            "equations": list(law.text),
            "components": list(law.components),
            "dimensions": law.dimensions,
            "parameters": {name: planned.values[name] for name in law.defaults},
        }
    tables["lattice"] = {"nt": lattice.nt, "nx": lattice.nx}
    tables["lattice"] |= {"order_t": lattice.order_t, "order_x": lattice.order_x}
    if law.dimensions == 2:
        tables["lattice"] |= {"ny": lattice.ny, "order_y": lattice.order_y}
    tables["start"] = _start_table(planned, out.parent)
    box = "# Box, drift and parameters come from there; give [box] values to change them."
    return f"{MARK}{origin}; {out.name} shows it.\n{box}\n\n{tomli_w.dumps(tables)}"


def _start_table(planned: Composition, folder: Path) -> dict[str, Any]:
    """Return the start section of a composition, defaults left out, paths relative to a folder."""
    defaults = {f.name: f.default for f in (*fields(planned.start), *fields(MemberOptions))}
    given = {"kind": planned.kind, **_given(asdict(planned.start), defaults)}
    for table in (given, *given.get("members", {}).values()):
        if "file" in table:
            table["file"] = os.path.relpath(table["file"], folder)
    return given


def _given(table: Mapping[str, Any], defaults: Mapping[str, Any]) -> dict[str, Any]:
    kept: dict[str, Any] = {}
    for name, value in table.items():
        if isinstance(value, Mapping):
            kept[name] = {key: _given(inner, defaults) for key, inner in value.items()}
        elif name not in defaults or value != defaults[name]:
            kept[name] = list(value) if isinstance(value, tuple) else value
    return kept


def _tell(meta: StateMeta, out: Path) -> None:
    """Tell what was composed, and draw it."""
    from lattice.show.pictures import plot_state

    lattice, values = meta.lattice, meta.values
    nodes = [f"{n} {a}" for n, a in zip(lattice.shape, ("levels", "rows", "columns"), strict=True) if n > 1]
    names = ["period"] * (lattice.nt > 1) + ["length_x", "length_y", "drift_x", "drift_y", "rotation"]
    told = [f"{name} {values[name]:.6g}" for name in names if values.get(name)]
    print(f"{out}: {' x '.join(nodes)}, {', '.join(told)}")
    try:
        print(f"picture: {plot_state(out, out.with_suffix('.png'))}")
    except LatticeError as error:
        print(f"no picture: {error}")
