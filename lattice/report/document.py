"""What a report consists of: a title, and sections of paragraphs, tables, figures, commands, cautions."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field


@dataclass(frozen=True)
class Text:
    """A paragraph."""

    text: str


@dataclass(frozen=True)
class Caution:
    """A paragraph that must not be overlooked."""

    text: str


@dataclass(frozen=True)
class Commands:
    """Lines to be typed, or the text of a file."""

    lines: tuple[str, ...]


@dataclass(frozen=True)
class Table:
    """A table.

    Parameters
    ----------
    caption : str
    header : sequence of str
    rows : sequence of sequences of str
        As they are shown.
    marked : frozenset of int
        Rows that are drawn back: oversubscribed points, predictions.
    """

    caption: str
    header: Sequence[str]
    rows: Sequence[Sequence[str]]
    marked: frozenset[int] = frozenset()


@dataclass(frozen=True)
class Figure:
    """A picture.

    Parameters
    ----------
    name : str
        Of its file beside a Markdown report, without suffix.
    caption : str
    alternative : str
        What it shows, for whoever cannot see it.
    svg : str
        Its drawing; empty where `png` is given.
    png : bytes
        Its pixels.
    """

    name: str
    caption: str
    alternative: str
    svg: str = ""
    png: bytes = b""


Part = Text | Caution | Commands | Table | Figure


@dataclass(frozen=True)
class Chapter:
    """A section of a report; `level` 2 or 3."""

    title: str
    parts: tuple[Part, ...]
    level: int = 2


@dataclass(frozen=True)
class Document:
    """A report.

    Parameters
    ----------
    title, lead : str
        Heading, and a sentence under it.
    chapters : tuple of Chapter
    foot : str
        Last line: versions, when it was made.
    """

    title: str
    lead: str
    chapters: tuple[Chapter, ...]
    foot: str = ""
    language: str = field(default="en")

    @property
    def figures(self) -> list[Figure]:
        """All figures, in order."""
        return [part for chapter in self.chapters for part in chapter.parts if isinstance(part, Figure)]
