"""The thresholds of a certificate: what they are, and how the user sets others."""

from __future__ import annotations

import math
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, fields, replace
from pathlib import Path

from lattice.errors import InputError
from lattice.laws.names import suggest


@dataclass(frozen=True)
class Thresholds:
    """Largest values; beyond `NAME_wide` a state is refused, between `NAME` and it the verdict is weaker.

    Parameters
    ----------
    residual : float
        Residual of each equation in units of its largest term.
    error_bound : float
        `residual_rms/sigma_min` in units of the field's fluctuation: the linear bound of what the residual
        may mean for the field.
    truncation, truncation_wide : float
        Residual with exact derivatives in units of the largest term.
    correction, correction_wide : float
        The field's discretisation error to first order in units of its fluctuation.
    tail, tail_wide : float
        Share of the fluctuating energy in the last third of the wavenumbers, per axis.
    unrepresented, unrepresented_wide : float
        Share beyond the wavenumber at which a first derivative errs by a tenth.
    march, march_wide : float
        Mismatch of marched slices in units of the fluctuation.
    balance, balance_wide : float
        Relative difference of gain and loss.
    conserved : float
        Wandering of a conserved mean in units of the field.
    moved, moved_wide : float
        Distance of the refined field from the carried one in units of the fluctuation.
    band, band_wide : float
        Half width of an observable's band, relative.
    """

    residual: float = 1e-8
    error_bound: float = 1e-4
    truncation: float = 0.02
    truncation_wide: float = 0.2
    correction: float = 0.03
    correction_wide: float = 0.2
    tail: float = 1e-4
    tail_wide: float = 1e-2
    unrepresented: float = 1e-3
    unrepresented_wide: float = 3e-2
    march: float = 0.02
    march_wide: float = 0.1
    balance: float = 0.01
    balance_wide: float = 0.05
    conserved: float = 1e-6
    moved: float = 0.05
    moved_wide: float = 0.3
    band: float = 0.02
    band_wide: float = 0.2


DESCRIPTIONS = {
    "residual": "residual of each equation, in units of its largest term",
    "error_bound": "linear bound of the field's error, residual_rms/sigma_min, in units of the fluctuation",
    "truncation": "residual with exact derivatives, in units of the largest term",
    "correction": "discretisation error of the field to first order, in units of the fluctuation",
    "tail": "share of the fluctuating energy in the last third of the wavenumbers, per axis",
    "unrepresented": "share beyond the wavenumber at which a first derivative errs by a tenth",
    "march": "mismatch of marched slices, in units of the fluctuation",
    "balance": "relative difference of gain and loss",
    "conserved": "wandering of a conserved mean, in units of the field",
    "moved": "distance of the refined field from the one carried over, in units of the fluctuation",
    "band": "half width of an observable's band, relative to its size",
}
DEFAULTS = asdict(Thresholds())


def read_thresholds(file: Path | None, given: Sequence[str]) -> Thresholds:
    """Return the default thresholds with those of a TOML file and of texts `name=number` laid over.

    Raises
    ------
    InputError
        For a name that is none, a number that is not positive, or a file that cannot be read.
    """
    found: dict[str, float] = {}
    if file is not None:
        found |= _checked(_load(file), str(file))
    for text in given:
        name, sign, number = text.partition("=")
        if not sign:
            raise InputError(f"must be name=number, got '{text}'; such as march=0.05", key="--threshold")
        try:
            value: object = float(number)
        except ValueError:
            value = number
        found |= _checked({name.strip(): value}, "--threshold")
    made = replace(Thresholds(), **found)
    for name in (f.name for f in fields(Thresholds) if f.name.endswith("_wide")):
        strict = name.removesuffix("_wide")
        if getattr(made, name) < getattr(made, strict):
            raise InputError(
                f"{name} must be at least {strict} = {getattr(made, strict):g}, got {getattr(made, name):g}; "
                "set both",
                key="--threshold",
            )
    return made


def _load(file: Path) -> dict[str, object]:
    try:
        return tomllib.loads(file.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(f"cannot be read: {error.strerror}", file=str(file)) from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"must be a TOML file: {error}", file=str(file)) from None


def _checked(table: Mapping[str, object], place: str) -> dict[str, float]:
    known = [f.name for f in fields(Thresholds)]
    found = {}
    for name, value in table.items():
        if name not in known:
            raise InputError(
                f"unknown threshold {name!r}{suggest(name, known)}; known are {', '.join(known)}", key=place
            )
        number = value if isinstance(value, (int, float)) and not isinstance(value, bool) else math.nan
        if not (math.isfinite(number) and number > 0.0):
            raise InputError(f"{name} must be a positive number, got {value!r}", key=place)
        found[name] = float(number)
    return found
