"""A law: its equations as SymPy expressions, its parameters, its symmetries.

`Deriv(inner, a, b)` stands for the a-th derivative in x and the b-th in y of `inner`; it is never
evaluated. Components, parameters and the coordinates x, y are plain real SymPy symbols.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import sympy


def symbol(name: str) -> sympy.Symbol:
    """Return the real symbol that stands for a component, a parameter or a coordinate."""
    return sympy.Symbol(name, real=True)


X, Y = symbol("x"), symbol("y")


class Deriv(sympy.Function):  # type: ignore[misc]
    """The spatial derivative `Deriv(inner, a, b)` = d^(a+b) inner / dx^a dy^b, kept unevaluated."""

    nargs = 3

    def _eval_is_real(self) -> bool:
        """Tell SymPy that it is real, as components are; else it takes functions of it apart."""
        return True


@dataclass(frozen=True)
class Equation:
    """One equation of a law.

    Parameters
    ----------
    component : str
        The component the equation belongs to.
    evolving : bool
        True: `d(component)/dt + expression = 0`. False: the constraint `expression = 0`.
    expression : sympy.Expr
        Without the time derivative; products in conservative form where one exists.
    """

    component: str
    evolving: bool
    expression: sympy.Expr


@dataclass(frozen=True)
class Parameter:
    """A named number of a law: default value, unit ("dimensionless" where it has none), meaning."""

    name: str
    default: float
    unit: str = "dimensionless"
    meaning: str = ""


@dataclass(frozen=True)
class Reflection:
    """A discrete symmetry: x -> -x and/or y -> -y (and t -> -t) with one sign per component."""

    x: bool
    y: bool
    signs: tuple[int, ...]
    time: bool = False


@dataclass(frozen=True)
class Symmetries:
    """What leaves a law unchanged, found from its equations by `find_symmetries`.

    Parameters
    ----------
    homogeneous : dict of str to bool
        For "x" (and "y"): True where no coordinate of that axis appears in the equations.
    conserved : tuple of str
        Evolving components whose spatial mean is constant: the expression is a sum of derivatives.
    shiftable : tuple of str
        Evolving components c with c -> c + constant a symmetry.
    gauge : tuple of str
        Constraint components that appear in every equation only under derivatives, so that at each
        time a constant may be added to them.
    reflections : tuple of Reflection
        Every combination (other than the identity) that leaves the equations unchanged.
    rotations : tuple of tuple of (str, str)
        Pairs (a, b) of evolving components such that turning all of (a, b) by one angle only turns their
        equations: the real and imaginary parts of an amplitude whose phase is free.
    galilean : bool
        True where adding a constant V to one component is undone by a frame that moves in x with a
        velocity proportional to V.
    """

    homogeneous: dict[str, bool]
    conserved: tuple[str, ...]
    shiftable: tuple[str, ...]
    gauge: tuple[str, ...]
    reflections: tuple[Reflection, ...]
    rotations: tuple[tuple[str, str], ...] = ()
    galilean: bool = False


@dataclass(frozen=True)
class Law:
    """A law, ready for derivation.

    Parameters
    ----------
    name : str
        Name of a shipped law, or "own" for a formula of the user.
    dimensions : int
        Space dimensions, 1 or 2.
    components : tuple of str
        In the order of the lattice's last axis.
    equations : tuple of Equation
        In the order of `components`.
    parameters : tuple of Parameter
        In the order of the law file.
    text : tuple of str
        The equations as typed, which a state file stores and `read_law` parses again.
    balances : tuple of (str, str, str)
        Name, gain and loss of balances that the law file gives: their means over a period are equal.
    observables : tuple of (str, str, str)
        Name, formula and meaning of further means that the law file gives.
    """

    name: str
    dimensions: int
    components: tuple[str, ...]
    equations: tuple[Equation, ...]
    parameters: tuple[Parameter, ...]
    text: tuple[str, ...]
    symmetries: Symmetries
    title: str = ""
    source: str = ""
    scaling: str = ""
    notes: str = ""
    best_for: str = ""
    balances: tuple[tuple[str, str, str], ...] = ()
    observables: tuple[tuple[str, str, str], ...] = ()
    _cache: dict[str, object] = field(default_factory=dict, repr=False, compare=False)

    def __getstate__(self) -> dict[str, object]:
        """Leave out what is derived when a law goes to other ranks: compiled functions cannot be sent."""
        return {**self.__dict__, "_cache": {}}

    @property
    def defaults(self) -> dict[str, float]:
        """Default value of every parameter, by name."""
        return {p.name: p.default for p in self.parameters}

    @property
    def evolving(self) -> tuple[bool, ...]:
        """For every component whether its equation has a time derivative."""
        return tuple(e.evolving for e in self.equations)

    @property
    def rotating_pair(self) -> tuple[str, str] | None:
        """The pair (a, b) of a frame that turns, the first there is; None where no state can turn.

        Where a constant may be added to a component, the centre of the rotation is arbitrary: such pairs
        are left out. Later pairs keep their angle.
        """
        fixed = (p for p in self.symmetries.rotations if not {*p} & {*self.symmetries.shiftable})
        return next(fixed, None)
