"""The coarse lattice a run will choose, found on a small box of the same spacings.

The choice depends on the state's spectrum and the law per unit of length and time, not on the size of the
box: so a march of a small box tells it. Starts that only read or sum up a field are made as they are.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from lattice.errors import LatticeError
from lattice.geometry.lattice import Lattice
from lattice.solve.coarse_lattice import choose
from lattice.spectral.transform import Transform
from lattice.starts import STARTS
from lattice.starts.march import Marcher, blended_march
from lattice.starts.options import MarchOptions, silent
from lattice.system.constant_part import ConstantPart
from lattice.system.system import System

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.job.schema import Job
    from lattice.system.unknowns import Values

MARCHED = ("march", "window", "recurrence", "noise")
OWN_START = 500_000
"""Most numbers of a field that is made as the job's own start here."""
SMALL = {1: {"nt": 96, "nx": 96}, 2: {"nt": 24, "nx": 24, "ny": 24}}
"""Most nodes of the small box's axes, by space dimensions."""
SPIN_UP = 60.0


def choose_in_small(job: Job, comm: MPI.Intracomm) -> dict[str, Any]:
    """Return nodes, order and smoother of the coarse lattice for a job, and the time step of its march.

    Collective. Keys nt, ny, nx, order, smoother, reason, dt (None where nothing was marched); or error.
    """
    law = job.make_law()
    fine, values = job.make_lattice(), job.make_values()
    own = job.start.kind not in MARCHED and fine.nodes * len(law.components) <= OWN_START
    lattice, box = (fine, values) if own else small_box(job, fine, values)
    system = System(law, lattice, box, job.solve.free or (), job.solve.mean, comm)
    try:
        return _choose(job, system, box, own, fine)
    except LatticeError as error:
        return {"error": str(error)}
    finally:
        system.destroy()


def small_box(job: Job, fine: Lattice, values: Values) -> tuple[Lattice, Values]:
    """Return a part of the job's box with its spacings; axes that the law singles out stay whole."""
    law = job.make_law()
    most = dict(SMALL[law.dimensions])
    for axis, alike in law.symmetries.homogeneous.items():
        if not alike:
            most.pop(f"n{axis}", None)
    counts = {name: min(getattr(fine, name), count) for name, count in most.items()}
    changed = dict(values)
    for name, scalar in (("nt", "period"), ("nx", "length_x"), ("ny", "length_y")):
        if name in counts and getattr(fine, name) > 1:
            changed[scalar] = values[scalar] * counts[name] / getattr(fine, name)
    return replace(fine, **counts), changed


def _choose(job: Job, system: System, values: Values, own: bool, fine: Lattice) -> dict[str, Any]:
    x, dt = system.vector(), None
    if own:
        start = STARTS[job.start.kind]
        owned, found = start(
            job.start, system.lattice, values, system.law, system.blocks.block, system.comm, silent
        )
    else:
        marcher = Marcher(_march_of(job), system.lattice, values, system.law, silent)
        owned, found = blended_march(marcher, system.blocks.block, system.comm)
        dt = marcher.stepper.dt
    system.pack(owned, found, x)
    system.linearise(x)
    transform, constant = Transform(system.blocks), ConstantPart(system.operator)
    constant.update()
    asked = (
        job.solve.coarse if own else job.solve.coarse.model_copy(update={"nt": None, "nx": None, "ny": None})
    )
    try:
        choice = choose(system, transform, constant, asked)
    except LatticeError as error:
        return {"error": str(error), "dt": dt}
    finally:
        transform.destroy()
        x.destroy()
    small = system.lattice
    counts = {
        name: _scaled(getattr(choice.lattice, name), getattr(small, name), getattr(fine, name))
        for name in ("nt", "ny", "nx")
    }
    order = choice.lattice.order_x
    return {**counts, "order": order, "smoother": choice.smoother, "reason": choice.reason, "dt": dt}


def _scaled(coarse: int, small: int, fine: int) -> int:
    """Return the coarse nodes of an axis of the whole box: even, at most the fine ones."""
    return fine if fine == 1 else min(fine, 2 * math.ceil(coarse * fine / small / 2))


def _march_of(job: Job) -> MarchOptions:
    start: Any = job.start
    spin_up = min(SPIN_UP, float(getattr(start, "spin_up", SPIN_UP)))
    return MarchOptions(
        seed=int(getattr(start, "seed", 0)),
        amplitude=float(getattr(start, "amplitude", 0.1)),
        spin_up=spin_up,
        dt=getattr(start, "dt", None),
        match_drift=(),
    )
