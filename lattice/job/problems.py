"""What is wrong with a job, in the user's words: one problem per offending key."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from difflib import get_close_matches

from lattice.errors import InputError


@dataclass(frozen=True)
class Problem:
    """One reason to refuse a job: the key as typed, and requirement, value, remedy."""

    key: str
    message: str


class JobErrors(InputError):
    """All problems of a job, one per line of the text.

    Parameters
    ----------
    problems : sequence of Problem
        At least one.
    file : str
        The job file.
    overridden : iterable of str
        Keys given on the command line with `--set`; their problems name that as the place.
    """

    def __init__(self, problems: Sequence[Problem], file: str, overridden: Iterable[str] = ()) -> None:
        self.problems = tuple(problems)
        lines = [_line(problem, file, tuple(overridden)) for problem in self.problems]
        super().__init__("\n".join(lines))
        self.file, self.key = file, self.problems[0].key


@dataclass
class Findings:
    """Collects problems and cautions while a job is judged."""

    problems: list[Problem] = field(default_factory=list)
    cautions: list[str] = field(default_factory=list)

    def refuse(self, key: str, message: str) -> None:
        """Note a reason to refuse the job."""
        self.problems.append(Problem(key, message))

    def warn(self, message: str) -> None:
        """Note a caution that does not stop the job."""
        self.cautions.append(message)


def did_you_mean(word: str, known: Iterable[str]) -> str:
    """Return " (did you mean 'x'?)" for the nearest known word, or nothing.

    Examples
    --------
    >>> did_you_mean("marsh", ["march", "state"])
    " (did you mean 'march'?)"
    >>> did_you_mean("zebra", ["march", "state"])
    ''
    """
    near = get_close_matches(word, list(known), n=1, cutoff=0.6 if len(word) > 3 else 0.5)
    return f" (did you mean '{near[0]}'?)" if near else ""


def printable(text: str, keep: str = "") -> str:
    r"""Return text with control characters spelled out, so that it cannot steer a terminal.

    Examples
    --------
    >>> printable("red\x1b[31m")
    'red\\x1b[31m'
    """
    return "".join(
        letter if letter.isprintable() or letter in keep else letter.encode("unicode_escape").decode()
        for letter in text
    )


def listed(names: Iterable[str], none: str = "none") -> str:
    """Return names as "a, b, c", or the word for none.

    Examples
    --------
    >>> listed(["period", "drift_x"])
    'period, drift_x'
    """
    return ", ".join(names) or none


def _line(problem: Problem, file: str, overridden: Sequence[str]) -> str:
    typed = any(problem.key == key or problem.key.startswith((f"{key}.", f"{key}[")) for key in overridden)
    place = [f"{file} with --set" if typed else file, problem.key]
    return printable(": ".join([*(part for part in place if part), problem.message]), keep="\n")
