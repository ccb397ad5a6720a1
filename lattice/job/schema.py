"""The job file's sections and keys: types, ranges, defaults and what each key means.

The models hold a job whose values are sound one by one. What depends on the law or on several
keys together is judged in `lattice.job.checks` and `lattice.job.unknowns`.
"""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING, Annotated, Any, Literal

from pydantic import Discriminator, Tag

from lattice.geometry.lattice import Lattice
from lattice.job.choices import PRECONDITIONERS
from lattice.job.section import Count, Name, Positive, Section
from lattice.job.section import key as _key
from lattice.job.starts import Start, StateStart

if TYPE_CHECKING:
    from lattice.geometry.subspace import Subspace
    from lattice.laws.law import Law, Parameter


__all__ = [
    "BoxSection",
    "CoarseSection",
    "Count",
    "DampedSection",
    "Job",
    "LatticeSection",
    "LawSection",
    "Name",
    "OutputSection",
    "OwnParameter",
    "PatchesSection",
    "Positive",
    "RefineSection",
    "Section",
    "SolveSection",
    "Start",
    "StateStart",
    "SubspaceSection",
]


class OwnParameter(Section):
    """A parameter of the user's own law, written as a table."""

    default: float = _key("its value")
    unit: str = _key("its unit", "dimensionless")
    meaning: str = _key("what it stands for", "")


def _number_or_table(value: Any) -> str:
    return "table" if isinstance(value, (dict, OwnParameter)) else "number"


ParameterValue = Annotated[
    Annotated[float, Tag("number")] | Annotated[OwnParameter, Tag("table")],
    Discriminator(_number_or_table),
]


class LawSection(Section):
    """The law: a shipped one by name, or equations of the user's own."""

    name: Name | None = _key(
        "a shipped law, listed by `lattice laws`; give this or `equations`", None, shown="none"
    )
    equations: tuple[Name, ...] | None = _key(
        "the user's own law, one equation per component in subscript notation",
        None,
        shown="none",
        min_length=1,
    )
    components: tuple[Name, ...] | None = _key(
        "names of the own law's components, in the order of the equations",
        None,
        shown='["u"]',
        min_length=1,
    )
    dimensions: Literal[1, 2] | None = _key("space dimensions of the own law", None, shown="1")
    parameters: dict[str, ParameterValue] = _key(
        "values of the law's parameters by name; for an own law a number or a table with"
        " `default`, `unit` and `meaning`",
        {},
        shown="the law's own, or a stored start's",
    )

    def parameter_values(self) -> dict[str, float]:
        """Return the number given for every parameter named in the job."""
        return {
            name: value.default if isinstance(value, OwnParameter) else float(value)
            for name, value in self.parameters.items()
        }


class BoxSection(Section):
    """The periodic box and the motion of the frame in which the state repeats."""

    period: Positive | None = _key(
        "period in time; first guess where it is free; absent for `lattice.nt = 1`",
        None,
        shown="required, or a stored start's",
    )
    length_x: Positive | None = _key("length in x", None, shown="required, or a stored start's")
    length_y: Positive | None = _key(
        "length in y, for a law in two dimensions", None, shown="required, or a stored start's"
    )
    drift_x: float | None = _key(
        "velocity in x of the frame in which the state repeats", None, shown="0, or a stored start's"
    )
    drift_y: float | None = _key("the same in y", None, shown="0, or a stored start's")
    rotation: float | None = _key(
        "radians per unit of time by which this frame turns, for a law with a pair of components that may be"
        " turned: from the first towards the second",
        None,
        shown="0, or a stored start's",
    )


class LatticeSection(Section):
    """Nodes and orders of the space-time lattice."""

    nt: Count = _key("time levels in one period; 1 for a steady or travelling state")
    nx: Count = _key("nodes in x")
    ny: Count | None = _key("nodes in y, for a law in two dimensions", None, shown="none")
    order_t: Literal[2, 4, 6] = _key("order of the differences in time", 4)
    order_x: Literal[2, 4, 6, 8] = _key("order of the differences in x", 4)
    order_y: Literal[2, 4, 6, 8] | None = _key("order of the differences in y", None, shown="`order_x`")


class PatchesSection(Section):
    """Size and overlap of the blocks of the `patches` preconditioner."""

    nt: Count | None = _key("levels of one patch without overlap", None, shown="one patch per rank")
    nx: Count | None = _key("columns of one patch", None, shown="one patch per rank")
    ny: Count | None = _key("rows of one patch", None, shown="one patch per rank")
    overlap: int = _key("nodes by which a patch reaches into its neighbours", 4, ge=0)


class CoarseSection(Section):
    """The `coarse` preconditioner's second level and its smoother."""

    nt: Count | None = _key(
        "levels of the coarse lattice", None, shown="from the state's spectrum and the law"
    )
    nx: Count | None = _key("nodes in x of the coarse lattice", None, shown="the same")
    ny: Count | None = _key("nodes in y of the coarse lattice", None, shown="the same")
    order: Literal[4, 6, 8] | None = _key(
        "order of the space differences on the coarse lattice",
        None,
        shown="8; 6 in two space dimensions with the spectral smoother",
    )
    solver: Literal["direct", "patches"] = _key(
        "how the coarse lattice is solved: `direct` LU, or `patches` where that does not fit"
        " (see [solve.patches])",
        "direct",
    )
    lu_ranks: Count | None = _key(
        "most ranks that share the coarse lattice's LU; fewer than all where more only add messages",
        None,
        shown="all",
    )
    smoother: Literal["auto", "spectral", "slabs"] = _key(
        "what acts on waves the coarse lattice lacks; `auto` compares the law's coefficients there", "auto"
    )
    shift: float = _key("added to the spectral smoother's symbol", 1.0, ge=0)
    slabs: Count | None = _key("number of slabs of time levels", None, shown="one a rank, at least 4")
    slab_overlap: int = _key("levels by which a slab reaches into its neighbours", 2, ge=0)


class DampedSection(Section):
    """The `damped` stage: Levenberg-Marquardt steps from a rough start."""

    free: tuple[Name, ...] | None = _key(
        "scalars that move in this stage besides those of `solve.free`",
        None,
        shown="the lengths along every axis the law does not single out",
    )
    steps: int = _key("largest number of steps", 400, ge=0)
    residual_rms: Positive = _key("hand over when the root mean square residual is at most this", 1e-6)
    linear_iterations: Count = _key("largest number of conjugate gradient iterations of one solve", 500)
    largest_move: float = _key("largest relative change of period or a length in one step", 0.1, gt=0, lt=1)
    relattice: float = _key(
        "relative change of period or a length from which on the lattice is made anew, to keep its spacings",
        0.05,
        gt=0,
        lt=1,
    )
    stall_steps: Count = _key("steps over which the residual must fall by `stall_fall`", 12)
    stall_fall: float = _key("least relative fall of the residual over `stall_steps`", 0.1, gt=0, lt=1)
    attempts: int = _key(
        "2: where the stage stalls it goes once more from the start, without `solve.damped.free`",
        1,
        ge=1,
        le=2,
    )


class RefineSection(Section):
    """The `refine` stage: the state again on finer lattices."""

    count: Count = _key("number of times the lattice is refined", 2)
    factor: float = _key(
        "nodes of every axis of the finer lattice over those of the coarser", 1.4, gt=1, le=4
    )


FieldSigns = Literal["law", "odd", "even"] | tuple[Literal[-1, 1], ...]


class SubspaceSection(Section):
    """Symmetries that the state is to have; the lattice then carries the part that they leave free."""

    mirror_x: FieldSigns | None = _key(
        "the state is its own mirror image in x, its components times signs: `odd` (all -1), `even` (all 1),"
        " a list of one sign per component, or `law` where the law leaves no choice",
        None,
        shown="none",
    )
    mirror_y: FieldSigns | None = _key("the same in y", None, shown="none")
    half_period: tuple[Literal["shift_x", "shift_y", "mirror_x", "mirror_y"], ...] | None = _key(
        "the state half a period later is the state shifted by half a length, or mirrored; `[]` changes"
        " signs only",
        None,
        shown="none",
    )
    half_period_signs: FieldSigns = _key(
        "signs that come with it, as for `mirror_x`; `law` is 1 where nothing is mirrored", "law"
    )


class SolveSection(Section):
    """What is free, how the equations are solved, when to stop."""

    free: tuple[Name, ...] | None = _key(
        "scalars to solve for: `period`, `length_x`, `length_y`, `drift_x`, `drift_y`,"
        " `rotation`, `source_<component>` or a parameter of the law",
        None,
        shown="`period` where `nt > 1`, the drift along every axis the law does not single out, and"
        " `rotation` where components may be turned",
    )
    mean: dict[str, float] = _key(
        "given mean of a component whose mean the law leaves open", {}, shown="0 for each"
    )
    preconditioner: Name = _key(
        "; ".join(f"`{name}`: {text}" for name, text in PRECONDITIONERS.items()), "auto"
    )
    residual_rms: Positive = _key("stop when the root mean square residual is at most this", 1e-10)
    newton_steps: int = _key("largest number of Newton steps", 40, ge=0)
    linear_rtol: float | None = _key(
        "relative tolerance of the linear solves",
        None,
        shown="chosen step by step (Eisenstat and Walker)",
        gt=0,
        lt=1,
    )
    linear_iterations: Count = _key("largest number of iterations of one linear solve", 500)
    line_search: bool = _key("shorten a step that does not lower the residual", True)
    stages: tuple[Literal["damped", "newton", "refine"], ...] | None = _key(
        "what is done from the start on: `damped` lowers the residual of a rough start, `newton` solves,"
        " `refine` solves again on finer lattices",
        None,
        min_length=1,
        shown="`newton` for `state`, `waves` and `array` starts and where the residual is small; else all",
    )
    nested: int = _key(
        "number of coarser lattices, each with half the nodes per axis, that are solved first", 0, ge=0, le=4
    )
    patches: PatchesSection = _key("the `patches` preconditioner's blocks", PatchesSection())
    coarse: CoarseSection = _key("the `coarse` preconditioner's levels", CoarseSection())
    subspace: SubspaceSection = _key("the invariant subspace that is solved in", SubspaceSection())
    damped: DampedSection = _key("the `damped` stage", DampedSection())
    refine: RefineSection = _key("the `refine` stage", RefineSection())


class OutputSection(Section):
    """Where the run keeps its files."""

    folder: Name | None = _key("the run's folder", None, shown="`runs/<name of the job file>`")
    picture: bool = _key("draw `field.png` at the end", True)


class Job(Section):
    """A whole job.

    `lattice.job.reader.load_job` returns it resolved: lengths and period are numbers,
    `solve.free`, `lattice.order_y`, the means and the output folder are filled in, paths absolute.
    """

    law: LawSection = _key("the law")
    box: BoxSection = _key("the periodic box", BoxSection())
    lattice: LatticeSection = _key("the lattice")
    solve: SolveSection = _key("the solve", SolveSection())
    start: Start = _key("the start")
    output: OutputSection = _key("the output", OutputSection())

    def make_law(self) -> Law:
        """Read the law; the same object every time for the same section."""
        return _law_of(self.law.model_dump_json())

    def make_lattice(self) -> Lattice:
        """Return the lattice as the rest of the program knows it."""
        section = self.lattice
        return Lattice(
            nt=section.nt,
            ny=section.ny or 1,
            nx=section.nx,
            dimensions=2 if section.ny else 1,
            order_t=section.order_t,
            order_x=section.order_x,
            order_y=section.order_y or section.order_x,
        )

    def make_subspace(self) -> Subspace | None:
        """Return the subspace that is solved in, None where there is none."""
        from lattice.job.subspace import subspace_of

        return subspace_of(self, self.make_law())

    def make_values(self) -> dict[str, float]:
        """Return all scalars of the problem: box, drifts, sources (0) and the law's parameters."""
        from lattice.job.unknowns import first_values

        return first_values(self, self.make_law())


@lru_cache(maxsize=8)
def _law_of(section_json: str) -> Law:
    from lattice.laws.catalogue import load_law, read_law

    section = LawSection.model_validate_json(section_json)
    if section.name is not None:
        return load_law(section.name)
    return read_law(
        "own",
        section.equations or (),
        section.components or ("u",),
        _own_parameters(section),
        section.dimensions or 1,
    )


def _own_parameters(section: LawSection) -> dict[str, float | Parameter]:
    from lattice.laws.law import Parameter

    return {
        name: Parameter(name, value.default, value.unit, value.meaning)
        if isinstance(value, OwnParameter)
        else float(value)
        for name, value in section.parameters.items()
    }
