"""Errors a caller may want to catch, each with the numbers as attributes."""

from __future__ import annotations


class LatticeError(Exception):
    """Any failure this package reports on purpose; its text is written for the user."""


class InputError(LatticeError):
    """A job, option, law or file that cannot be used as given.

    Parameters
    ----------
    message : str
        Requirement, value and remedy in the words the user typed.
    file, key : str, optional
        Where the offending value stands.
    """

    def __init__(self, message: str, *, file: str = "", key: str = "") -> None:
        self.file, self.key, self.message = file, key, message
        place = ": ".join(part for part in (file, key) if part)
        super().__init__(f"{place}: {message}" if place else message)


class FormulaError(InputError):
    """A law's text that cannot be read, with the place in the text.

    Parameters
    ----------
    message : str
        Requirement, value and remedy.
    text : str
        The formula as typed.
    position : int
        Offset of the first offending character in `text`.
    """

    def __init__(self, message: str, text: str = "", position: int = -1) -> None:
        self.text, self.position = text, position
        pointer = f"\n    {text}\n    {' ' * position}^" if text and position >= 0 else ""
        super().__init__(message + pointer)


class StateFileError(InputError):
    """A state file that is missing, truncated, damaged, foreign or of a newer schema."""


class FactorisationError(LatticeError):
    """A matrix factorisation that failed after every permitted retry.

    Parameters
    ----------
    message : str
        What failed and what to do.
    codes : dict of str to int
        The package's own status numbers (for MUMPS: INFOG values and sizes in MB).
    """

    def __init__(self, message: str, codes: dict[str, int] | None = None) -> None:
        self.codes = dict(codes or {})
        super().__init__(message)


class RemoteFailure(LatticeError):
    """Raised on ranks that are well when another rank has failed, so that all stop together."""
