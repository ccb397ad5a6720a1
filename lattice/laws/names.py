"""Which names a law may use, and what a name found in a formula means."""

from __future__ import annotations

import difflib
import keyword
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from lattice.errors import InputError

FUNCTIONS = ("sin", "cos", "exp", "log", "sqrt", "tanh", "sech", "sinh", "cosh")
COORDINATES = ("x", "y")
SCALARS = ("period", "length_x", "length_y", "drift_x", "drift_y", "rotation")
RESERVED = (*FUNCTIONS, *COORDINATES, *SCALARS, "lap", "pi", "t")

COMPONENTS_AT_MOST = 8
PARAMETERS_AT_MOST = 40
NAME_AT_MOST = 40

_COMPONENT = re.compile(r"[A-Za-z][A-Za-z0-9]*")
_PARAMETER = re.compile(r"[A-Za-z][A-Za-z0-9]*(?:_[A-Za-z0-9]+)*")
_SUBSCRIPT = re.compile(r"[xyt]+")


@dataclass(frozen=True)
class Names:
    """The declared names of a law, checked against each other and against the reserved ones."""

    components: tuple[str, ...]
    parameters: tuple[str, ...]
    dimensions: int

    def split(self, name: str) -> tuple[str, str] | None:
        """Return component and subscript of a derivative such as `phi_xx`, or None."""
        head, _, subscript = name.rpartition("_")
        if head in self.components and _SUBSCRIPT.fullmatch(subscript):
            return head, subscript
        return None

    def known(self) -> tuple[str, ...]:
        """Return every name a formula of this law may contain, without derivatives."""
        coordinates = COORDINATES[: self.dimensions]
        return (*self.components, *self.parameters, *coordinates, "pi", "lap", *FUNCTIONS)


def declare(components: Sequence[str], parameters: Iterable[str], dimensions: int) -> Names:
    """Check the names of a law and return them.

    Raises
    ------
    InputError
        For names that are malformed, reserved, repeated or ambiguous.
    """
    names = Names(tuple(components), tuple(parameters), dimensions)
    if dimensions not in (1, 2):
        raise InputError(f"law.dimensions must be 1 or 2, got {dimensions!r}")
    for name in names.components:
        _check_name(name, "component", _COMPONENT, "use letters and digits, without underscore")
    for name in names.parameters:
        _check_name(name, "parameter", _PARAMETER, "use letters, digits and single underscores")
        _check_parameter(name, names)
    _check_counts(names)
    return names


def _check_counts(names: Names) -> None:
    if not 1 <= len(names.components) <= COMPONENTS_AT_MOST:
        raise InputError(
            f"law.components must name 1 to {COMPONENTS_AT_MOST} components, got {len(names.components)}"
        )
    if len(names.parameters) > PARAMETERS_AT_MOST:
        raise InputError(
            f"law.parameters must name at most {PARAMETERS_AT_MOST} parameters, got {len(names.parameters)}"
        )
    seen: set[str] = set()
    for name in (*names.components, *names.parameters):
        if name in seen:
            raise InputError(f"a law must not use one name twice, got {name!r} twice; rename one")
        seen.add(name)


def _check_name(name: str, role: str, pattern: re.Pattern[str], remedy: str) -> None:
    if not isinstance(name, str) or len(name) > NAME_AT_MOST or not pattern.fullmatch(name):
        raise InputError(
            f"a {role} must have a plain name of at most {NAME_AT_MOST} characters, "
            f"got {name!r:.60}; {remedy}"
        )
    if name in RESERVED:
        raise InputError(f"a {role} must not be called {name!r}, which has a meaning of its own; rename it")
    if name.startswith("source_"):
        raise InputError(f"a {role} must not begin with source_, got {name!r}; uniform sources are named so")
    if keyword.iskeyword(name):
        raise InputError(
            f"a {role} must not be called {name!r}, a word of Python; rename it, e.g. '{name[:3]}1'"
        )


def _check_parameter(name: str, names: Names) -> None:
    split = names.split(name)
    if split is not None:
        raise InputError(
            f"parameter {name!r} reads like the derivative of component {split[0]!r}; "
            f"rename it, e.g. {name.replace('_', '')!r}"
        )


def suggest(name: str, known: Iterable[str]) -> str:
    """Return `(did you mean 'x'?)` with a leading blank, or nothing."""
    names = list(known)
    close = difflib.get_close_matches(name[:NAME_AT_MOST], names, n=1, cutoff=0.6)
    if not close and len(name) > 2:
        close = [other for other in names if other.startswith(name)]
    return f" (did you mean {close[0]!r}?)" if close else ""
